//! The 80 % that a stated limit promises, by linearised draws.
//!
//! Around a clean solution a reading that is off by its limit has a statistic
//! that is normal with mean c + 0.842 and unit variance if the stated limit is
//! right. The statistic is taken from the estimator itself, solved again with
//! the reading moved: what the limit says of it is not used to work it out.

use counterpoise::pipeline::reconcile;
use counterpoise::report::{Cause, Report};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

use super::bench::{Bench, on_threads, testable};

const DRAWS: usize = 2000;

/// Moves one reading of a batch of exact readings by `bias` and gives its
/// standardised statistic.
fn statistic(report: &Report, tag: &str) -> f64 {
    -report.tags[tag].standardised_adjustment.expect("redundant")
}

#[test]
fn a_bias_of_the_stated_limit_is_seen_in_four_of_five() {
    let bench = Bench::new();
    let clean = bench.clean(11);
    let plain = bench.report(&clean);
    let critical = plain.single_test.as_ref().expect("tested").critical_value;
    let tags: Vec<String> = (testable(&plain, &[Cause::Bias]).into_iter())
        .map(|hypothesis| hypothesis.of)
        .collect();
    let batch = bench.batch(&clean, &clean.truth, &[]);
    let seen = on_threads(&tags, |tag| {
        // The response of the statistic to a bias, by the estimator: a small one,
        // so that it is the linear one.
        let limit = plain.tags[tag].detectable.expect("redundant");
        let small = 0.02 * limit;
        let mut moved = batch.clone();
        let reading = moved.readings.iter_mut().find(|r| r.tag == *tag);
        let value = &mut reading.expect("in the batch").value;
        *value = value.map(|value| value + small);
        let other = reconcile(&bench.compiled, &moved);
        let response = (statistic(&other, tag) - statistic(&plain, tag)) / small;
        // Sigma depends on the reading a little: that is in the response too.
        let mut random = ChaCha8Rng::seed_from_u64(80);
        let exceeds = (0..DRAWS).filter(|_| {
            let noise: f64 = StandardNormal.sample(&mut random);
            (response * limit + noise).abs() > critical
        });
        exceeds.count() as f64 / DRAWS as f64
    });
    let pooled = seen.iter().sum::<f64>() / seen.len() as f64;
    let least = seen.iter().copied().fold(1.0, f64::min);
    let most = seen.iter().copied().fold(0.0, f64::max);
    println!(
        "limits: seen in {:.2} % pooled over {} tags, {:.2} to {:.2} %",
        100.0 * pooled,
        tags.len(),
        100.0 * least,
        100.0 * most
    );
    for (tag, seen) in tags.iter().zip(&seen) {
        assert!((0.75..=0.85).contains(seen), "{tag}: {seen}");
    }
    assert!((0.79..=0.81).contains(&pooled), "{pooled}");
}
