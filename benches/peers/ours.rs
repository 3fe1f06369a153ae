//! Our side of the comparison: solves one problem file again and again and
//! prints one JSON line with the median time. Usage: `ours FILE REPETITIONS`.

#[path = "network.rs"]
mod network;

use std::hint::black_box;
use std::path::Path;
use std::time::Instant;

use counterpoise::solver::{Options, Problem, Symbolic, solve};
use network::Network;

fn main() {
    let mut arguments = std::env::args()
        .skip(1)
        .filter(|argument| argument != "--bench");
    let (Some(file), Some(repetitions)) = (arguments.next(), arguments.next()) else {
        println!("usage: ours FILE REPETITIONS");
        return;
    };
    let network = Network::read(Path::new(&file));
    let repetitions: usize = repetitions.parse().expect("a number of repetitions");
    // A relation holds to the tolerance that IPOPT is given; 1e-6 sigma is 1e-8 of a flow.
    let options = Options {
        tolerance_relation: 1e-9,
        tolerance_step: 1e-6,
        ..Options::default()
    };
    let begun = Instant::now();
    let symbolic = Symbolic::new(network.structure());
    let symbolic_ms = begun.elapsed().as_secs_f64() * 1e3;
    let mut times = Vec::with_capacity(repetitions);
    let mut outcome = solve(&network, &symbolic, &network.start, &options);
    for _ in 0..repetitions {
        let begun = Instant::now();
        outcome = black_box(solve(
            &network,
            &symbolic,
            black_box(&network.start),
            &options,
        ));
        times.push(begun.elapsed().as_secs_f64() * 1e3);
    }
    times.sort_by(f64::total_cmp);
    println!(
        "{}",
        serde_json::json!({
            "tool": "ours",
            "streams": network.streams,
            "ms": times.get(times.len() / 2),
            "ms_min": times.first(),
            "symbolic_ms": symbolic_ms,
            "fill": symbolic.fill(),
            "iterations": outcome.iterations,
            "factorisations": outcome.factorisations,
            "objective": outcome.objective,
            "worst_residual": outcome.worst_residual_scaled,
            "status": format!("{:?}", outcome.status),
        })
    );
}
