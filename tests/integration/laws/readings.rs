//! What a report says of readings that are bad, missing, uncertain, negative or
//! absurd, and of what the readings cannot determine.

use super::workbench::{
    HEATER, batch, demo_truth, near_truth, read, reading, references, run, statistic,
};
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{Batch, Grade, Quality};
use counterpoise::report::{Class, Observability, Report, Verdict};

const READINGS: [(&str, f64); 11] = [
    ("F-STEAM", 36.0),
    ("P-STEAM", 2.0),
    ("T-STEAM", 150.0),
    ("F-DRAIN", 36.4),
    ("T-DRAIN", 120.6),
    ("F-COLD", 400.0),
    ("P-COLD", 15.0),
    ("T-COLD", 60.0),
    ("F-WARM", 401.0),
    ("P-WARM", 14.0),
    ("T-WARM", 108.0),
];

fn graded(tag: &str, grade: Grade) -> Report {
    let mut batch = batch(READINGS);
    reading(&mut batch, tag).quality = Quality { grade, code: None };
    run(&read(HEATER), &batch)
}

#[test]
fn a_bad_reading_is_kept_and_not_used() {
    let all = run(&read(HEATER), &batch(READINGS));
    let mut missing = batch(READINGS);
    missing.readings.retain(|r| r.tag != "F-DRAIN");
    let missing = run(&read(HEATER), &missing);
    let bad = graded("F-DRAIN", Grade::Bad);
    assert_eq!(bad.tags["F-DRAIN"].measured, Some(36.4));
    assert_eq!(missing.tags["F-DRAIN"].measured, None);
    for report in [&bad, &missing] {
        let tag = &report.tags["F-DRAIN"];
        assert_eq!(tag.class, Class::Unused);
        assert!(tag.reason.is_some());
        assert_eq!(
            (tag.adjustment, tag.redundancy, tag.standardised_adjustment),
            (None, None, None)
        );
        let flow = report.streams["drain"].mass_flow.value.expect("observable") * 3.6;
        assert!((tag.reconciled.expect("observable") - flow).abs() < 1e-9);
        let dof = |report: &Report| report.global_test.expect("converged").degrees_of_freedom;
        assert_eq!(dof(report) + 1, dof(&all));
    }
    assert_eq!(statistic(&bad), statistic(&missing));
    assert_eq!(bad.streams, missing.streams);
}

#[test]
fn an_uncertain_reading_is_used_with_a_wider_sigma() {
    let good = run(&read(HEATER), &batch(READINGS));
    let wide = graded("T-WARM", Grade::Uncertain);
    let (good, wide) = (&good.tags["T-WARM"], &wide.tags["T-WARM"]);
    assert_eq!(wide.class, Class::Redundant);
    assert_eq!(
        good.uncertainty_measured.map(|u| 2.0 * u),
        wide.uncertainty_measured
    );
    assert!(
        wide.reason
            .as_ref()
            .is_some_and(|reason| reason.contains("widened by 2"))
    );
    assert!(wide.adjustment.expect("used").abs() > good.adjustment.expect("used").abs());
}

#[test]
fn a_reading_without_uncertainty_is_not_used() {
    let mut batch = batch(READINGS);
    reading(&mut batch, "F-STEAM").value = Some(0.0);
    let report = run(&read(HEATER), &batch);
    let tag = &report.tags["F-STEAM"];
    assert_eq!((tag.measured, tag.class), (Some(0.0), Class::Unused));
    assert!(
        tag.reason
            .as_ref()
            .is_some_and(|reason| reason.contains("zero")),
        "{:?}",
        tag.reason
    );
    assert!((tag.reconciled.expect("observable") - 36.4).abs() < 1.0);
}

#[test]
fn a_tag_that_the_plant_does_not_know_is_listed() {
    let mut more = batch(READINGS);
    more.readings.push(counterpoise::plant::Reading {
        tag: "X-1".to_owned(),
        ..more.readings[0].clone()
    });
    let report = run(&read(HEATER), &more);
    assert_eq!(report.ignored_tags, ["X-1"]);
    assert_eq!(report.tags, run(&read(HEATER), &batch(READINGS)).tags);
}

#[test]
fn what_is_unobservable_has_no_value() {
    let mut open = 0;
    for (plant, batches) in references() {
        for batch in batches {
            let report = run(&plant, &batch);
            for stream in report.streams.values() {
                for quantity in [
                    &stream.mass_flow,
                    &stream.pressure,
                    &stream.temperature,
                    &stream.enthalpy,
                ] {
                    let known = quantity.class == Observability::Observable;
                    open += usize::from(!known);
                    assert_eq!(quantity.value.is_some(), known);
                    assert_eq!(quantity.uncertainty.is_some(), known);
                }
            }
        }
    }
    assert!(open > 10, "{open}");
    // Two exports whose split nothing determines; a blowdown with a temperature
    // and no pressure.
    let (plant, batches) = &references()[2];
    let report = run(plant, &batches[0]);
    let null: Vec<&String> = report
        .streams
        .iter()
        .filter(|(_, s)| s.mass_flow.value.is_none())
        .map(|(name, _)| name)
        .collect();
    assert_eq!(null, ["export-1", "export-2"]);
    let blowdown = &report.streams["blowdown-a"];
    assert_eq!(
        (blowdown.pressure.value, blowdown.enthalpy.value),
        (None, None)
    );
    assert!(blowdown.temperature.value.is_some());
    let (demo, truth) = demo_truth(0.8);
    let report = run(&demo, &near_truth(&demo, &truth, 1.0, 1));
    assert_eq!(report.streams["gland-spill-low"].pressure.value, None);
    assert_eq!(report.streams["gland-spill-low"].phase, None);
}

/// A tee of which one leg is nearly shut.
fn tee(non_negative: bool, readings: [f64; 3]) -> Report {
    let bound = if non_negative {
        ", non-negative = true"
    } else {
        ""
    };
    let file = format!(
        r#"
        plant = "tee"
        title = "A tee (invented)"
        [streams]
        all   = {{ fluid = "water", to = "tee" }}
        left  = {{ fluid = "water", from = "tee" }}
        right = {{ fluid = "water", from = "tee"{bound} }}
        [equipment]
        tee = {{ kind = "splitter" }}
        [tags]
        F-1 = {{ measures = "mass-flow",   of = "all",   unit = "t/h", uncertainty = {{ absolute = "1 t/h" }} }}
        F-2 = {{ measures = "mass-flow",   of = "left",  unit = "t/h", uncertainty = {{ absolute = "1 t/h" }} }}
        F-3 = {{ measures = "mass-flow",   of = "right", unit = "t/h", uncertainty = {{ absolute = "1 t/h" }} }}
        P-1 = {{ measures = "pressure",    of = "all",   unit = "bar", uncertainty = {{ absolute = "0.1 bar" }} }}
        T-1 = {{ measures = "temperature", of = "left",  unit = "Cel", uncertainty = {{ absolute = "1 K" }} }}
        "#
    );
    let [all, left, right] = readings;
    run(
        &read(&file),
        &batch([
            ("F-1", all),
            ("F-2", left),
            ("F-3", right),
            ("P-1", 5.0),
            ("T-1", 40.0),
        ]),
    )
}

#[test]
fn a_negative_flow_is_flagged_and_used() {
    let report = tee(false, [100.0, 100.6, -0.3]);
    assert!(
        report
            .remarks
            .iter()
            .any(|r| r.contains("F-3") && r.contains("negative")),
        "{:?}",
        report.remarks
    );
    let right = report.tags["F-3"].reconciled.expect("used");
    assert!((right - (-0.4)).abs() < 1e-9, "{right}");
    assert_eq!(report.global_test.map(|t| t.degrees_of_freedom), Some(1));
}

#[test]
fn a_flow_that_may_not_be_negative_is_held_at_zero() {
    let report = tee(true, [100.0, 100.6, -0.3]);
    assert!(
        report
            .remarks
            .iter()
            .any(|r| r.starts_with("right") && r.contains("flow not negative")),
        "{:?}",
        report.remarks
    );
    let flow = report.streams["right"].mass_flow.value.expect("observable");
    assert!(flow.abs() < 1e-9, "{flow}");
    assert!((report.tags["F-1"].reconciled.expect("used") - 100.3).abs() < 1e-9);
    // An active bound is one more relation.
    let test = report.global_test.expect("converged");
    assert_eq!(test.degrees_of_freedom, 2);
    let sigma = 1.0 / counterpoise::plant::COVERAGE_FACTOR;
    let expected = (2.0 * 0.3f64.powi(2) + 0.3f64.powi(2)) / (sigma * sigma);
    assert!(
        (test.statistic - expected).abs() < 1e-9,
        "{}",
        test.statistic
    );
    // Where the readings ask for no less than zero, nothing is held.
    let report = tee(true, [102.0, 100.6, -0.3]);
    assert!(
        report.remarks.iter().all(|r| !r.contains("bound")),
        "{:?}",
        report.remarks
    );
    let (free, flow) = (
        tee(false, [102.0, 100.6, -0.3]),
        report.tags["F-3"].reconciled,
    );
    assert_eq!(flow, free.tags["F-3"].reconciled);
    assert!(flow.is_some_and(|f| f > 0.0));
}

/// Readings that no plant could give. Whatever comes of them is said: a
/// converged report has a statistic, another one a reason and no values.
#[test]
fn absurd_readings_end_in_a_report_all_the_same() {
    let (plant, truth) = demo_truth(0.8);
    let compiled = Compiled::new(plant.clone(), 1);
    let exact = near_truth(&plant, &truth, 0.0, 0);
    let with = |change: &dyn Fn(usize, &str, f64) -> f64| -> Batch {
        let mut batch = exact.clone();
        for (n, reading) in batch.readings.iter_mut().enumerate() {
            reading.value = reading.value.map(|value| change(n, &reading.tag, value));
        }
        batch
    };
    let cases: [(&str, Batch); 7] = [
        ("everything zero", with(&|_, _, _| 0.0)),
        (
            "temperatures of 5000",
            with(&|_, tag, v| if tag.starts_with("TT") { 5000.0 } else { v }),
        ),
        (
            "pressures of 1e6",
            with(&|_, tag, v| if tag.starts_with("PT") { 1e6 } else { v }),
        ),
        (
            "pressures below vacuum",
            with(&|_, tag, v| if tag.starts_with("PT") { -v } else { v }),
        ),
        (
            "flows backwards",
            with(&|_, tag, v| if tag.starts_with("FT") { -v } else { v }),
        ),
        (
            "every second reading tenfold",
            with(&|n, _, v| if n % 2 == 0 { 10.0 * v } else { v }),
        ),
        ("everything 1e12", with(&|_, _, _| 1e12)),
    ];
    let mut failed = 0;
    for (name, batch) in cases {
        let report = reconcile(&compiled, &batch);
        println!(
            "{name}: {:?}, {:?}, {:?}",
            report.verdict,
            report.global_test.map(|t| t.statistic),
            report.reason
        );
        assert_ne!(report.verdict, Verdict::Consistent, "{name}");
        if report.verdict != Verdict::NotConverged {
            assert!(statistic(&report).is_finite());
            continue;
        }
        failed += 1;
        assert!(
            report
                .reason
                .as_ref()
                .is_some_and(|reason| !reason.is_empty()),
            "{name}"
        );
        assert!(
            report.global_test.is_none() && report.single_test.is_none(),
            "{name}"
        );
        assert!(
            report.streams.is_empty() && report.equipment.is_empty(),
            "{name}"
        );
        assert_eq!(report.tags.len(), plant.tags.len());
        for tag in report.tags.values().chain(report.assumptions.values()) {
            assert_eq!(
                (tag.reconciled, tag.adjustment, tag.class),
                (None, None, Class::Unused),
                "{name}"
            );
            assert!(tag.reason.is_some(), "{name}");
        }
    }
    assert!(failed > 0, "none of these failed to converge");
    // And the next batch is none the worse for it.
    assert!(statistic(&reconcile(&compiled, &exact)) < 1e-9);
}
