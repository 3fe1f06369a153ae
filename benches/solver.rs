//! The solver by network size: whole solves, classes, and variances, on the
//! networks of `tests/data/networks`.

#[path = "peers/network.rs"]
mod network;

use std::path::Path;

use counterpoise::solver::{Covariance, Options, Outcome, Problem, Symbolic, classify, solve};
use divan::{Bencher, black_box};
use network::Network;

const NETWORKS: [&str; 4] = [
    "network-30-1",
    "network-100-1",
    "network-300-2",
    "network-1000-3",
];

fn main() {
    divan::main();
}

fn read(name: &str) -> (Network, Symbolic) {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/networks");
    let network = Network::read(&folder.join(format!("{name}.json")));
    let symbolic = Symbolic::new(network.structure());
    (network, symbolic)
}

fn solved(network: &Network, symbolic: &Symbolic) -> Outcome {
    solve(
        network,
        symbolic,
        black_box(&network.start),
        &Options::default(),
    )
}

#[divan::bench(args = NETWORKS)]
fn symbolic_analysis(bencher: Bencher, name: &str) {
    let (network, _) = read(name);
    bencher.bench(|| Symbolic::new(black_box(network.structure())));
}

#[divan::bench(args = NETWORKS)]
fn whole_solve(bencher: Bencher, name: &str) {
    let (network, symbolic) = read(name);
    bencher.bench(|| solved(&network, &symbolic));
}

#[divan::bench(args = NETWORKS)]
fn classes(bencher: Bencher, name: &str) {
    let (network, symbolic) = read(name);
    let outcome = solved(&network, &symbolic);
    let used = vec![true; network.readings.len()];
    bencher.bench(|| {
        let scales = (network.state_scale(), network.relation_scale());
        classify(
            network.structure(),
            black_box(&outcome.evaluation),
            scales.0,
            scales.1,
            &[],
            &used,
        )
    });
}

#[divan::bench(args = NETWORKS)]
fn factor_and_all_variances(bencher: Bencher, name: &str) {
    let (network, symbolic) = read(name);
    let outcome = solved(&network, &symbolic);
    let (states, relations) = (network.state_scale(), network.relation_scale());
    let used = vec![true; network.readings.len()];
    let classes = classify(
        network.structure(),
        &outcome.evaluation,
        states,
        relations,
        &[],
        &used,
    );
    bencher.bench(|| {
        let evaluation = black_box(&outcome.evaluation);
        let covariance = Covariance::new(
            &symbolic,
            network.structure(),
            evaluation,
            states,
            relations,
            &classes,
        );
        (0..2 * network.streams)
            .map(|j| covariance.state_variance(j))
            .filter(|v| v.is_finite())
            .sum::<f64>()
    });
}
