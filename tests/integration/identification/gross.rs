//! One to three gross errors at once, up to 100 sigma: whatever is named, the
//! report must hang together.

use counterpoise::demo::Fault;
use counterpoise::pipeline::reconcile;
use counterpoise::report::{Cause, Class, Report};
use rand::seq::IndexedRandom;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::batches_each;
use super::bench::{Bench, on_threads, testable};

/// What must hold of any report with suspects, in words where it does not.
fn faults(plain: &Report, report: &Report) -> Vec<String> {
    let mut faults = Vec::new();
    let Some(test) = report.global_test else {
        return faults;
    };
    let mut say = |what: String| faults.push(format!("{}: {what}", report.batch));
    for suspect in &report.suspects {
        if suspect.statistic_before > test.statistic * (1.0 + 1e-6) {
            say(format!(
                "with a suspect out the batch fits worse: {} against {}",
                suspect.statistic_before, test.statistic
            ));
        }
        let lead = &suspect.group[0];
        let hardly = |name: &str| {
            let tag = plain.tags.get(name).or(plain.assumptions.get(name));
            tag.is_some_and(|tag| tag.class == Class::HardlyRedundant)
        };
        if hardly(&lead.hypothesis.of)
            && report
                .tags
                .get(&lead.hypothesis.of)
                .is_some_and(|t| t.class == Class::HardlyRedundant)
        {
            say(format!(
                "{} is hardly redundant and leads",
                lead.hypothesis.of
            ));
        }
        if lead.uncertainty.is_nan() || !lead.size.is_finite() {
            say(format!("no size: {lead:?}"));
        }
    }
    let Some(after) = &report.after_suspects else {
        return faults;
    };
    let left_out: Vec<&String> = (after.tags.iter().chain(&after.assumptions))
        .filter(|(_, tag)| tag.reason.as_deref() == Some("suspected: left out"))
        .map(|(name, _)| name)
        .collect();
    let blamed: Vec<&String> = (report.suspects.iter())
        .map(|suspect| &suspect.group[0].hypothesis)
        .filter(|h| matches!(h.cause, Cause::Bias | Cause::Departure))
        .map(|h| &h.of)
        .collect();
    for name in &left_out {
        if !blamed.contains(name) {
            say(format!("{name} is left out and not named"));
        }
    }
    for name in &blamed {
        if !left_out.contains(name) {
            say(format!("{name} is named first and not left out"));
        }
    }
    faults
}

#[test]
fn gross_errors_leave_no_contradiction() {
    let bench = Bench::new();
    let tags = testable(&bench.report(&bench.clean(0)), &[Cause::Bias]);
    let numbers: Vec<u64> = (0..batches_each(60) as u64).collect();
    let found = on_threads(&numbers, |&number| {
        let mut random = ChaCha8Rng::seed_from_u64(700 + number);
        let clean = bench.clean(500_000 + number as usize);
        let plain = bench.report(&clean);
        let faulty: Vec<(String, Fault)> = (tags
            .choose_multiple(&mut random, random_count(number)))
        .map(|tag| tag.of.clone())
        .collect::<Vec<_>>()
        .into_iter()
        .map(|tag| {
            let size = [7.0, 10.0, 30.0, 100.0][random.random_range(0..4)];
            let sign = if random.random_bool(0.5) { 1.0 } else { -1.0 };
            (tag, Fault::Bias(sign * size))
        })
        .collect();
        let report = reconcile(&bench.compiled, &bench.batch(&clean, &clean.truth, &faulty));
        let named = (faulty.iter()).filter(|(tag, _)| {
            let mut members = report.suspects.iter().flat_map(|s| &s.group);
            members.any(|m| m.hypothesis.of == *tag)
        });
        let named = named.count();
        (
            faulty.len(),
            named,
            report.global_test.is_none(),
            faults(&plain, &report),
        )
    });
    let planted: usize = found.iter().map(|f| f.0).sum();
    let named: usize = found.iter().map(|f| f.1).sum();
    let unsolved = found.iter().filter(|f| f.2).count();
    println!(
        "gross errors: {named} of {planted} named, {unsolved} of {} batches unsolved",
        found.len()
    );
    let faults: Vec<String> = found.into_iter().flat_map(|f| f.3).collect();
    assert!(faults.is_empty(), "{}", faults.join("\n"));
}

fn random_count(number: u64) -> usize {
    1 + number as usize % 3
}
