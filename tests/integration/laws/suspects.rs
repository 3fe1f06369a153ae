//! What must be true of suspects whatever the numbers are.

use super::workbench::{
    Distance, HEATER, batch, degrees_of_freedom, demo_truth, near_truth, read, reading, run,
    run_like, statistic, without,
};
use counterpoise::pipeline::{Compiled, reconcile, reconcile_with, suppose};
use counterpoise::plant::{Action, Batch, ByHand, COVERAGE_FACTOR, Plant};
use counterpoise::report::{Cause, Report};
use rand::SeedableRng;
use rand::seq::SliceRandom;
use rand_chacha::ChaCha8Rng;
use time::macros::datetime;

/// A batch of the heater in which `lost` t/h of feedwater leave before they are
/// heated.
fn leaking(lost: f64) -> (Plant, Batch) {
    let steam = 36.0 * (1.0 - lost / 388.0);
    let readings = [
        ("F-STEAM", steam),
        ("P-STEAM", 2.0),
        ("T-STEAM", 150.0),
        ("F-DRAIN", steam + 0.05),
        ("T-DRAIN", 120.4),
        ("F-COLD", 388.0),
        ("P-COLD", 15.0),
        ("T-COLD", 60.0),
        ("F-WARM", 388.3 - lost),
        ("P-WARM", 14.0),
        ("T-WARM", 110.0),
    ];
    (read(HEATER), batch(readings))
}

/// One tag of the demo plant `sigmas` sigma off, all others nearly exact.
fn biased(tag: &str, sigmas: f64) -> (Plant, Batch) {
    let (plant, truth) = demo_truth(0.9);
    let mut batch = near_truth(&plant, &truth, 0.3, 4);
    let uncertainty = &plant
        .tags
        .iter()
        .find(|t| t.name == tag)
        .expect("a tag")
        .uncertainty;
    let value = &mut reading(&mut batch, tag).value;
    let sigma = uncertainty
        .sigma(value.expect("a value"))
        .expect("sigma")
        .get();
    *value = value.map(|value| value + sigmas * sigma);
    (plant, batch)
}

fn names(report: &Report) -> Vec<Vec<String>> {
    let groups = report.suspects.iter();
    groups
        .map(|s| {
            s.group
                .iter()
                .map(|m| format!("{:?}", m.hypothesis))
                .collect()
        })
        .collect()
}

/// With one degree of freedom there is one thing to be said: every hypothesis
/// that shows at all says it with the same strength.
#[test]
fn at_one_degree_of_freedom_all_hypotheses_are_alike() {
    let heater = without(HEATER, &["F-DRAIN", "T-DRAIN", "F-WARM"]);
    let (_, batch) = leaking(0.0);
    let report = run(&read(&heater), &batch);
    assert_eq!(degrees_of_freedom(&report), 1);
    let root = statistic(&report).sqrt();
    let tested: Vec<f64> = report
        .limits
        .iter()
        .filter_map(|l| l.standardised)
        .collect();
    assert!(tested.len() > 6, "{tested:?}");
    for z in tested {
        assert!((z.abs() - root).abs() < 1e-5 * root, "{z}, not {root}");
    }
    let causes: Vec<Cause> = report
        .limits
        .iter()
        .filter(|l| l.detectable.is_some())
        .map(|l| l.hypothesis.cause)
        .collect();
    assert!(causes.contains(&Cause::HeatLoss), "{causes:?}");
}

/// With the leak in, the reconciled flows differ by the leak.
#[test]
fn a_leak_closes_the_balance_that_it_left_open() {
    let (plant, batch) = leaking(14.0);
    let report = run(&plant, &batch);
    let first = &report.suspects[0].group;
    let tubes = |side: &Option<String>| side.as_deref() == Some("tube");
    let leak = first
        .iter()
        .find(|m| m.hypothesis.cause == Cause::Leak && tubes(&m.hypothesis.side));
    let leak = leak.expect("a leak of the tubes is among the likely ones");
    let supposed = suppose(&Compiled::new(plant, 1), &batch, &[], &leak.hypothesis);
    let supposed = supposed.expect("converges");
    assert!((supposed.size - leak.size).abs() < 1e-6 * leak.size);
    // 14 t/h; the energy balance has a say too.
    assert!(
        (supposed.size - 14.0 / 3.6).abs() < supposed.uncertainty,
        "{supposed:?}"
    );
    let after = report.after_suspects.as_ref().expect("solved");
    if first[0].hypothesis == leak.hypothesis {
        let flow = |name: &str| after.streams[name].mass_flow.value.expect("observable");
        let missing = flow("cold") - flow("warm");
        assert!((missing - first[0].size).abs() < 1e-6, "{missing}");
    }
    let before = &report.streams;
    let closed = before["cold"].mass_flow.value.unwrap() - before["warm"].mass_flow.value.unwrap();
    assert!(closed.abs() < 1e-6, "the verdict's own values know no leak");
}

/// Taking a tag out as a suspect, leaving its reading out and putting it out of
/// service by hand are the same.
#[test]
fn a_suspected_tag_is_a_tag_left_out() {
    let (plant, batch) = biased("TT-102B", 9.0);
    let report = run(&plant, &batch);
    let lead = &report.suspects[0].group[0];
    assert_eq!(lead.hypothesis.of, "TT-102B");
    let fall = report.suspects[0].statistic_before - report.suspects[0].statistic_after;
    assert!(
        (fall - lead.ratio).abs() < 1e-6 * fall,
        "{fall}, not {}",
        lead.ratio
    );
    assert_eq!(report.suspects[0].statistic_before, statistic(&report));
    let after = report.after_suspects.as_ref().expect("solved");

    let mut shorter = batch.clone();
    shorter.readings.retain(|r| r.tag != "TT-102B");
    let left_out = run(&plant, &shorter);
    let by_hand = ByHand {
        id: 7,
        tag: "TT-102B".to_owned(),
        action: Action::OutOfService,
        from: datetime!(2026-01-01 00:00 UTC),
        until: None,
        reason: "reads high".to_owned(),
        by: "R. Quill".to_owned(),
    };
    let out = reconcile_with(&Compiled::new(plant, 1), &batch, &[by_hand]);
    assert_eq!(out.by_hand[0].tag, "TT-102B");
    for other in [&left_out, &out] {
        let test = other.global_test.expect("converged");
        assert_eq!(
            test.degrees_of_freedom,
            after.global_test.degrees_of_freedom
        );
        assert!((test.statistic - after.global_test.statistic).abs() < 1e-6);
        for (name, stream) in &other.streams {
            let (a, b) = (&stream.enthalpy, &after.streams[name].enthalpy);
            assert_eq!(a.class, b.class, "{name}");
            if let (Some(a), Some(b)) = (a.value, b.value) {
                assert!((a - b).abs() < 1e-6 * a.abs(), "{name}: {a}, {b}");
            }
        }
    }
    // What the reading is off by is the same number from either side.
    let predicted = left_out.tags["TT-102B"].reconciled.expect("observable");
    let measured = report.tags["TT-102B"].measured.expect("read");
    assert!((lead.size - (measured - predicted)).abs() < 1e-6);
}

/// An offset that is known by hand takes the suspect away.
#[test]
fn a_known_offset_is_no_suspect_any_more() {
    let (plant, batch) = biased("FT-401", 8.0);
    let report = run(&plant, &batch);
    assert!(names(&report)[0].iter().any(|name| name.contains("FT-401")));
    let width = report.tags["FT-401"].uncertainty_measured.expect("in use");
    let offset = ByHand {
        id: 1,
        tag: "FT-401".to_owned(),
        action: Action::Offset(-8.0 * width / COVERAGE_FACTOR),
        from: batch.start,
        until: Some(batch.end),
        reason: "as found in the shop".to_owned(),
        by: "R. Quill".to_owned(),
    };
    let compiled = Compiled::new(plant, 1);
    let mended = reconcile_with(&compiled, &batch, std::slice::from_ref(&offset));
    assert_eq!(names(&mended), Vec::<Vec<String>>::new());
    assert!(statistic(&mended) < 0.5 * statistic(&report));
    let later = ByHand {
        from: batch.end,
        until: None,
        ..offset
    };
    let untouched = reconcile_with(&compiled, &batch, &[later]);
    assert!(untouched.by_hand.is_empty());
    assert_eq!(statistic(&untouched), statistic(&report));
}

/// The order of readings changes no bit, what was reconciled before changes no
/// bit, and the units of a tag change its size's unit only.
#[test]
fn order_history_and_units_change_no_suspect() {
    let (plant, batch) = biased("FT-101", 9.0);
    let compiled = Compiled::new(plant.clone(), 1);
    let plain = reconcile(&compiled, &batch);
    assert!(!plain.suspects.is_empty());
    let mut shuffled = batch.clone();
    shuffled.readings.shuffle(&mut ChaCha8Rng::seed_from_u64(5));
    assert_eq!(reconcile(&compiled, &shuffled), plain);
    let (_, other) = biased("TT-414", 12.0);
    reconcile(&compiled, &other);
    assert_eq!(reconcile(&compiled, &batch), plain);

    let (mut other, mut converted) = (plant, batch);
    for tag in &mut other.tags {
        let old = tag.unit.clone();
        tag.unit.factor *= 0.37;
        let convert = |value: f64| tag.unit.from_internal(old.to_internal(value));
        tag.uncertainty.constant /= 0.37;
        tag.uncertainty.differential /= 0.37 * 0.37;
        tag.range = tag.range.map(|(low, high)| (convert(low), convert(high)));
        tag.normal = tag.normal.map(convert);
        let value = &mut reading(&mut converted, &tag.name).value;
        *value = value.map(convert);
    }
    let in_other_units = run_like(&plain, &other, &converted);
    assert_eq!(names(&in_other_units), names(&plain));
    for (a, b) in plain.suspects.iter().zip(&in_other_units.suspects) {
        for (a, b) in a.group.iter().zip(&b.group) {
            let factor = if a.hypothesis.cause == Cause::Bias {
                0.37
            } else {
                1.0
            };
            let mut distance = Distance::default();
            distance.value("size", Some(a.size), Some(factor * b.size), a.uncertainty);
            distance.value("ratio", Some(a.ratio), Some(b.ratio), a.ratio);
            distance.assert_below(1e-6, 1.0, &a.hypothesis.of);
        }
    }
}
