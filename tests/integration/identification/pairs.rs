//! Two errors at once, each of twice its limit.

use counterpoise::pipeline::reconcile;
use counterpoise::report::{Cause, Hypothesis, Report};
use rand::seq::IndexedRandom;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::bench::{Bench, is_in, on_threads, plant_two, testable};
use super::{batches_each, three_errors};

/// Pairs that are more alike than this need not be told apart.
const ALIKE: f64 = 0.9;

/// Correlation of two tags' statistics, from how each moves with the other's reading.
fn correlation(bench: &Bench, report: &Report, clean: usize, pair: [&Hypothesis; 2]) -> f64 {
    let of = [&pair[0].of, &pair[1].of];
    let clean = bench.clean(clean);
    let mut batch = bench.batch(&clean, &clean.truth, &[]);
    let limit = report.tags[of[0]].detectable.expect("redundant");
    let reading = batch.readings.iter_mut().find(|r| r.tag == *of[0]);
    let value = &mut reading.expect("in the batch").value;
    *value = value.map(|value| value + 0.02 * limit);
    let moved = reconcile(&bench.compiled, &batch);
    let change = |tag: &String| {
        let statistic = |r: &Report| r.tags[tag].standardised_adjustment.expect("redundant");
        statistic(&moved) - statistic(report)
    };
    change(of[1]) / change(of[0])
}

#[test]
fn both_of_two_biases_are_named() {
    let bench = Bench::new();
    let clean = bench.report(&bench.clean(0));
    let tags = testable(&clean, &[Cause::Bias]);
    let mut random = ChaCha8Rng::seed_from_u64(2);
    let wanted = batches_each(80);
    let chosen: Vec<(usize, [&Hypothesis; 2])> = (0..wanted)
        .map(|_| {
            let pair: Vec<&Hypothesis> = tags.choose_multiple(&mut random, 2).collect();
            (random.random_range(1..100_000), [pair[0], pair[1]])
        })
        .collect();
    let named = on_threads(&chosen, |(number, pair)| {
        let clean = bench.clean(*number);
        let report = bench.report(&clean);
        if correlation(&bench, &report, *number, *pair).abs() >= ALIKE {
            return None;
        }
        let batch = plant_two(&bench, &clean, &report, *pair, 2.0)?;
        let report = reconcile(&bench.compiled, &batch);
        let found = |hypothesis| (0..report.suspects.len()).any(|s| is_in(&report, s, hypothesis));
        let both = found(pair[0]) && found(pair[1]);
        if !both {
            let accused: Vec<Vec<&str>> = (report.suspects.iter())
                .map(|s| s.group.iter().map(|m| m.hypothesis.of.as_str()).collect())
                .collect();
            println!("{} and {}: accused {accused:?}", pair[0].of, pair[1].of);
        }
        Some(both)
    });
    let told: Vec<bool> = named.into_iter().flatten().collect();
    let both = told.iter().filter(|both| **both).count();
    let part = both as f64 / told.len() as f64;
    println!(
        "pairs: both named in {:.1} % of {}",
        100.0 * part,
        told.len()
    );
    assert!(part >= 0.85 - three_errors(0.85, told.len()), "{part}");
}
