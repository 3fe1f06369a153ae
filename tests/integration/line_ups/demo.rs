//! The demonstration plant with heater 7 bypassed, with the other condensate pump
//! and at rest: told by status tags alone, against the exact heat balance of each.

use crate::monte_carlo::Tally;
use counterpoise::demo::{self, Assumed, Conditions, LineUp, Truth};
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{Batch, Plant};
use counterpoise::report::{Class, Report, Verdict};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::collections::BTreeSet;

const USUAL: LineUp = LineUp {
    heater_7_bypassed: false,
    second_pump: false,
};
const BYPASSED: LineUp = LineUp {
    heater_7_bypassed: true,
    second_pump: false,
};
const SWAPPED: LineUp = LineUp {
    heater_7_bypassed: false,
    second_pump: true,
};

/// Seeded batches of each line-up, half of them tallied by a thread.
const BATCHES: u64 = 400;

fn drawn(plant: &Plant, line_up: LineUp, number: u64) -> (Batch, Truth) {
    let mut rng = ChaCha8Rng::seed_from_u64(77);
    rng.set_stream(number);
    let conditions = Conditions {
        line_up,
        ..Conditions::at_load(rng.random_range(0.6..1.0))
    };
    let assumed = Assumed::drawn(plant, &mut rng);
    let truth = demo::truth(&conditions, &assumed).expect("settles");
    let readings = demo::readings(plant, &truth, &mut rng, |_| None).expect("known streams");
    let mut batch = super::batch(&format!("batch {number}"), &[]);
    batch.readings = readings;
    (batch, truth)
}

fn without_line_up(mut report: Report) -> Report {
    report.line_up = None;
    report
}

#[test]
fn each_line_up_is_recognised_by_its_statuses_and_compiled_once() {
    let plant = demo::plant().expect("no faults");
    let compiled = Compiled::new(plant.clone(), 1);
    assert_eq!(
        compiled.compilations(),
        0,
        "nothing is compiled before it is needed"
    );
    let usual = reconcile(&compiled, &drawn(&plant, USUAL, 1).0);
    let bypassed = reconcile(&compiled, &drawn(&plant, BYPASSED, 2).0);
    let swapped = reconcile(&compiled, &drawn(&plant, SWAPPED, 3).0);
    let mut still = drawn(&plant, USUAL, 4).0;
    let breaker = still.readings.iter_mut().find(|r| r.tag == "XS-201");
    breaker.expect("it is read").value = Some(0.0);
    let still = reconcile(&compiled, &still);
    assert_eq!(compiled.compilations(), 3);

    let line_up = |report: &Report| report.line_up.clone().expect("told");
    assert_eq!(
        line_up(&usual).name,
        "without heater-7-bypass, condensate-pump-b"
    );
    assert_eq!(
        line_up(&bypassed).name,
        "without heater-7, condensate-pump-b"
    );
    assert_eq!(
        line_up(&swapped).name,
        "without condensate-pump, heater-7-bypass"
    );
    assert_eq!(
        line_up(&bypassed).streams_out,
        [
            "bleed-7",
            "drain-7",
            "feed-7",
            "feed-7-out",
            "condensate-b",
            "condensate-b-out"
        ]
    );
    assert_eq!(
        line_up(&swapped).equipment_out,
        ["condensate-pump", "condensate-motor", "heater-7-bypass"]
    );
    assert_eq!(line_up(&usual).decided_by["ZS-307"], Some(1.0));

    for report in [&usual, &bypassed, &swapped] {
        assert_eq!(report.verdict, Verdict::Consistent, "{:?}", report.line_up);
        assert_eq!(report.tags.len(), plant.tags.len(), "every tag is listed");
        assert!(report.ignored_tags.is_empty());
        let told = line_up(report);
        let streams: Vec<&str> = report.streams.keys().map(String::as_str).collect();
        let in_service = plant.streams.iter().map(|s| s.name.as_str());
        let in_service = in_service.filter(|s| !told.streams_out.iter().any(|out| out == s));
        assert_eq!(streams, in_service.collect::<Vec<_>>());
        for out in told.equipment_out.iter().chain(&told.pipes) {
            assert!(!report.equipment.contains_key(out), "{out}");
        }
    }
    let out: BTreeSet<&str> = bypassed
        .tags
        .iter()
        .filter(|(_, tag)| tag.reason.as_deref() == Some("out of service"))
        .map(|(name, _)| name.as_str())
        .collect();
    let known = ["PT-207", "TT-207", "TT-317", "FT-317", "PT-357", "ET-402"];
    assert_eq!(out, known.into_iter().collect());
    assert!(
        out.iter()
            .all(|tag| bypassed.tags[*tag].class == Class::Unused)
    );
    assert_eq!(bypassed.assumptions["heater-7-drop"].class, Class::Unused);
    assert_eq!(bypassed.streams["feed-past-7"], bypassed.streams["feed-6"]);

    assert_eq!(still.verdict, Verdict::NotRunning);
    assert_eq!(line_up(&still).name, "not running");
    assert!(still.global_test.is_none() && still.streams.is_empty());
    assert!(still.tags.values().all(|tag| tag.class == Class::Unused));
    assert!(still.tags.values().all(|tag| tag.measured.is_some()));
    let reason = still.reason.expect("a reason");
    assert_eq!(reason, "XS-201 reads 0");

    // Met again, nothing is compiled again, and nothing depends on who came first.
    for (line_up, number, report) in [
        (SWAPPED, 3, &swapped),
        (BYPASSED, 2, &bypassed),
        (USUAL, 1, &usual),
    ] {
        let batch = drawn(&plant, line_up, number).0;
        assert_eq!(reconcile(&compiled, &batch), *report);
        let fresh = Compiled::new(plant.clone(), 1);
        assert_eq!(reconcile(&fresh, &batch), *report);
    }
    assert_eq!(compiled.compilations(), 3);
}

/// Swapping one pump for the other leaves a structure of the same size: their class
/// sets, and what is recalled of them, must not be taken for each other.
#[test]
fn line_ups_of_equal_structure_keep_their_critical_values_apart() {
    let plant = demo::plant().expect("no faults");
    let compiled = Compiled::new(plant.clone(), 1);
    let test = |line_up, compiled: &Compiled| {
        let report = reconcile(compiled, &drawn(&plant, line_up, 1).0);
        report.single_test.expect("redundant")
    };
    let (usual, swapped) = (test(USUAL, &compiled), test(SWAPPED, &compiled));
    assert_ne!(usual.class_set, swapped.class_set);
    let again = Compiled::new(plant.clone(), 1);
    let mut strange = swapped.clone();
    strange.critical_value += 1.0;
    again.recall([strange.clone()]);
    assert_eq!(test(SWAPPED, &again), strange, "recalled in its line-up");
    assert_eq!(test(USUAL, &again), usual, "and in no other");
}

/// The usual line-up is the plant that a file without the other pump and the bypass
/// would describe: the report is the same to the last bit.
#[test]
fn a_line_up_reports_what_a_plant_file_without_the_parts_would() {
    let plant = demo::plant().expect("no faults");
    for line_up in [USUAL, BYPASSED, SWAPPED] {
        let compiled = Compiled::new(plant.clone(), 1);
        let (batch, _) = drawn(&plant, line_up, 9);
        let whole = without_line_up(reconcile(&compiled, &batch));
        let alone = demo::lined_up(line_up).expect("no faults");
        let mut part = reconcile(&Compiled::new(alone.clone(), 1), &batch);
        for (name, stream) in &part.streams {
            assert_eq!(whole.streams[name], *stream, "{name}");
        }
        for (name, tag) in &part.tags {
            assert_eq!(whole.tags[name], *tag, "{name}");
        }
        assert_eq!(whole.equipment, part.equipment);
        assert_eq!(whole.global_test, part.global_test);
        assert_eq!(whole.limits, part.limits);
        let named = |report: &Report| report.single_test.clone().expect("redundant");
        part.single_test.as_mut().expect("redundant").class_set = named(&whole).class_set;
        assert_eq!(named(&whole), named(&part));
    }
}

#[test]
fn intervals_and_statistic_hold_in_every_line_up() {
    let plant = demo::plant().expect("no faults");
    let compiled = Compiled::new(plant.clone(), 1);
    for line_up in [BYPASSED, SWAPPED] {
        let alone = demo::lined_up(line_up).expect("no faults");
        let half = |first: u64| {
            let mut tally = Tally::default();
            for number in (first..BATCHES).step_by(2) {
                let (batch, truth) = drawn(&plant, line_up, 1000 + number);
                tally.add(&alone, &truth, &reconcile(&compiled, &batch));
            }
            tally
        };
        let tally = std::thread::scope(|scope| {
            let other = scope.spawn(|| half(1));
            let mut tally = half(0);
            tally.merge(other.join().expect("no panic"));
            tally
        });
        assert!(tally.not_converged.is_empty(), "{:?}", tally.not_converged);
        let n = tally.statistics.len() as f64;
        let dof = tally.degrees_of_freedom[0];
        assert!(tally.degrees_of_freedom.iter().all(|d| *d == dof));
        let mean = tally.statistics.iter().sum::<f64>() / n;
        let [inside, all] = tally
            .intervals
            .values()
            .fold([0.0, 0.0], |sum, i| [sum[0] + i[0], sum[1] + i[1]]);
        println!(
            "{line_up:?}: {n} batches, dof {dof}, statistic {mean:.2}, {:.2} % of {all} intervals \
             hold the truth",
            100.0 * inside / all
        );
        // Four standard errors of the mean of chi-square.
        let error = (2.0 * dof as f64 / n).sqrt();
        assert!((mean - dof as f64).abs() < 4.0 * error, "{mean} of {dof}");
        // Intervals of one batch hang together: batches count, not intervals.
        let coverage = inside / all;
        assert!((coverage - 0.95).abs() < 0.01, "{coverage}");
        for (name, [inside, all, _]) in &tally.intervals {
            let error = (0.95 * 0.05 / all).sqrt();
            assert!(
                inside / all > 0.95 - 5.0 * error,
                "{name}: {inside} of {all}"
            );
        }
    }
    assert_eq!(compiled.compilations(), 2);
}
