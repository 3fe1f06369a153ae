//! The biased bypass network of `tests/data/published` as a plant of mass flows
//! alone: its published statistics out of reports.
//!
//! Nothing determines an enthalpy here. The balances of mass check each other all
//! the same, and so a leak is tested by its row of mass alone.

use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{self, Batch, COVERAGE_FACTOR, Format, Grade, Quality, Reading};
use counterpoise::report::{Cause, Hypothesis, Report, Verdict};
use serde_json::Value;
use time::macros::datetime;

/// Agreement with the statistics of the case, which are exact (its `tolerance`).
const EXACT: f64 = 1e-4;

/// The network of the case: every node by a kind that fits it.
const BYPASS: &str = r#"
plant = "bypass"
title = "Exchanger with a bypass (published)"

[streams]
feed         = { fluid = "water", to = "splitter" }
to-exchanger = { fluid = "water", from = "splitter", to = "exchanger.hot" }
bypass-in    = { fluid = "water", from = "splitter", to = "valve" }
exchanged    = { fluid = "water", from = "exchanger.hot", to = "mixer" }
bypass-out   = { fluid = "water", from = "valve", to = "mixer" }
product      = { fluid = "water", from = "mixer" }

[equipment]
splitter  = { kind = "splitter" }
exchanger = { kind = "exchanger" }
valve     = { kind = "valve" }
mixer     = { kind = "mixer" }
"#;
const STREAMS: [&str; 6] = [
    "feed",
    "to-exchanger",
    "bypass-in",
    "exchanged",
    "bypass-out",
    "product",
];
const NODES: [&str; 4] = ["splitter", "exchanger", "valve", "mixer"];

/// Each node with its streams crossing the plant's edge.
const ALONE: [&str; 4] = [
    r#"
feed         = { fluid = "water", to = "splitter" }
to-exchanger = { fluid = "water", from = "splitter" }
bypass-in    = { fluid = "water", from = "splitter" }
[equipment]
splitter = { kind = "splitter" }
"#,
    r#"
to-exchanger = { fluid = "water", to = "exchanger.hot" }
exchanged    = { fluid = "water", from = "exchanger.hot" }
[equipment]
exchanger = { kind = "exchanger" }
"#,
    r#"
bypass-in  = { fluid = "water", to = "valve" }
bypass-out = { fluid = "water", from = "valve" }
[equipment]
valve = { kind = "valve" }
"#,
    r#"
exchanged  = { fluid = "water", to = "mixer" }
bypass-out = { fluid = "water", to = "mixer" }
product    = { fluid = "water", from = "mixer" }
[equipment]
mixer = { kind = "mixer" }
"#,
];

fn case() -> Value {
    let text = include_str!("../../data/published/ged-nj-bypass-biased.json");
    serde_json::from_str(text).expect("JSON")
}

pub fn numbers(value: &Value) -> Vec<f64> {
    let list = value.as_array().expect("a list").iter();
    list.map(|v| v.as_f64().expect("a number")).collect()
}

/// A flow tag of the stream `of`, named `F <of>`, with this sigma in kg/s.
pub fn flow_tag(of: &str, sigma: f64) -> String {
    let uncertainty = COVERAGE_FACTOR * sigma;
    format!(
        "\"F {of}\" = {{ measures = \"mass-flow\", of = \"{of}\", unit = \"kg/s\", uncertainty = {{ absolute = \"{uncertainty} kg/s\" }} }}\n"
    )
}

/// Compiles a plant file.
pub fn compiled(file: &str) -> Compiled {
    match plant::read(file, Format::Toml) {
        Ok(file) => Compiled::new(file.plant, 1),
        Err(faults) => panic!("{faults}\n{file}"),
    }
}

/// A batch of good readings of flow tags.
pub fn flows<'a>(readings: impl IntoIterator<Item = (&'a str, f64)>) -> Batch {
    let good = Quality {
        grade: Grade::Good,
        code: None,
    };
    let readings = readings.into_iter().map(|(of, value)| Reading {
        tag: format!("F {of}"),
        value: Some(value),
        quality: good,
        averaged: None,
    });
    Batch {
        name: "flows".to_owned(),
        start: datetime!(2026-03-18 00:00 UTC),
        end: datetime!(2026-03-18 00:05 UTC),
        readings: readings.collect(),
        steadiness: None,
    }
}

/// The report of the case's readings, of those streams that the plant has.
fn report(streams: &str) -> Report {
    let measured = numbers(&case()["problem"]["measured"]);
    let here: Vec<(&str, f64)> = (STREAMS.into_iter().zip(measured))
        .filter(|(name, _)| streams.lines().any(|line| line.starts_with(name)))
        .collect();
    let tags: String = here.iter().map(|(name, _)| flow_tag(name, 1.0)).collect();
    reconcile(&compiled(&format!("{streams}[tags]\n{tags}")), &flows(here))
}

fn bias(stream: &str) -> Hypothesis {
    Hypothesis {
        cause: Cause::Bias,
        of: format!("F {stream}"),
        side: None,
    }
}

/// Signed statistic of a hypothesis; of a leak, whatever its side is called.
fn standardised(report: &Report, cause: Cause, of: &str) -> f64 {
    let mut limits = report.limits.iter().map(|limit| {
        let hypothesis = &limit.hypothesis;
        let here = hypothesis.cause == cause && hypothesis.of == of;
        here.then(|| limit.standardised.unwrap_or_else(|| panic!("{limit:?}")))
    });
    let found = limits.find_map(|found| found);
    found.unwrap_or_else(|| panic!("no {cause:?} of {of}"))
}

#[track_caller]
fn near(got: f64, expected: f64, tolerance: f64) {
    assert!((got - expected).abs() <= tolerance, "{got}, not {expected}");
}

#[test]
fn global_and_measurement_statistics_of_the_biased_bypass() {
    let (report, case) = (report(BYPASS), case());
    let (published, computed) = (
        &case["expected"]["published_remembered"],
        &case["expected"]["computed"],
    );
    let global = report.global_test.expect("converged");
    assert_eq!(global.degrees_of_freedom, 4);
    assert_eq!(report.verdict, Verdict::Inconsistent);
    let remembered = |field: &str| published[field].as_f64().expect("a number");
    near(global.statistic, remembered("global_test"), 6e-4);
    let critical = global.critical_value.expect("redundant");
    near(critical, remembered("chi2_95_4"), 6e-4);
    let (reconciled, statistics) = (
        numbers(&computed["reconciled"]),
        numbers(&computed["measurement_z"]),
    );
    for (j, stream) in STREAMS.into_iter().enumerate() {
        let tag = &report.tags[&format!("F {stream}")];
        near(tag.reconciled.expect("a value"), reconciled[j], EXACT);
        let z = tag.standardised_adjustment.expect("redundant");
        near(z.abs(), statistics[j], EXACT);
        near(
            standardised(&report, Cause::Bias, &format!("F {stream}")),
            -z,
            1e-9,
        );
    }
}

#[test]
fn likelihood_ratios_of_the_biased_bypass() {
    let (report, case) = (report(BYPASS), case());
    let computed = &case["expected"]["computed"];
    let biases = numbers(&computed["glr_measurement_T"]);
    for (stream, ratio) in STREAMS.into_iter().zip(biases) {
        let z = standardised(&report, Cause::Bias, &format!("F {stream}"));
        near(z * z, ratio, EXACT);
    }
    for (node, ratio) in NODES.into_iter().zip(numbers(&computed["glr_leak_T"])) {
        let z = standardised(&report, Cause::Leak, node);
        near(z * z, ratio, EXACT);
        // A report's imbalance lets that balance alone go and keeps the others:
        // it is the statistic of a leak.
        let mut imbalances = report.equipment[node].imbalance.mass.values();
        let imbalance = imbalances.next().expect("one side");
        near(imbalance.standardised.expect("checked"), z, EXACT);
    }
}

#[test]
fn the_nodal_test_is_the_imbalance_of_a_balance_by_itself() {
    let expected = &case()["expected"];
    let nodal = numbers(&expected["computed"]["nodal_z"]);
    let residuals = numbers(&expected["computed"]["residuals"]);
    for (k, (node, streams)) in NODES.into_iter().zip(ALONE).enumerate() {
        let heading = "plant = \"alone\"\ntitle = \"One node (published)\"\n[streams]";
        let report = report(&format!("{heading}{streams}"));
        let mut imbalances = report.equipment[node].imbalance.mass.values();
        let imbalance = imbalances.next().expect("one side");
        near(imbalance.value.expect("checked"), residuals[k], EXACT);
        let z = imbalance.standardised.expect("checked");
        near(z.abs(), nodal[k], EXACT);
    }
}

#[test]
fn the_leak_of_the_exchanger_leads() {
    let (report, case) = (report(BYPASS), case());
    let [suspect] = &report.suspects[..] else {
        panic!("{:#?}", report.suspects);
    };
    let first = &suspect.group[0];
    assert_eq!(first.hypothesis.cause, Cause::Leak);
    assert_eq!(first.hypothesis.of, "exchanger");
    let computed = &case["expected"]["computed"];
    let ratio = numbers(&computed["glr_leak_T"])[1];
    near(first.ratio, ratio, EXACT);
    near(first.size, 3.64, EXACT);
    near(first.uncertainty, COVERAGE_FACTOR, EXACT);
    near(
        suspect.statistic_after,
        suspect.statistic_before - ratio,
        EXACT,
    );
    // Linear: what is near enough before is near enough after solving again.
    let test = report.single_test.as_ref().expect("tested");
    let within = |ratio: f64| ratio >= first.ratio - test.group_distance;
    let beside = &suspect.group[1..];
    for (stream, ratio) in STREAMS
        .into_iter()
        .zip(numbers(&computed["glr_measurement_T"]))
    {
        let member = beside.iter().find(|m| m.hypothesis == bias(stream));
        assert_eq!(member.is_some(), within(ratio), "{stream}: {ratio}");
        if let Some(member) = member {
            near(member.ratio, ratio, EXACT);
        }
    }
    // No other leak is near enough: 6.04 is the next.
    assert!(!within(numbers(&computed["glr_leak_T"])[3]));
    let leaks = beside.iter().filter(|m| m.hypothesis.cause == Cause::Leak);
    assert_eq!(leaks.count(), 0);
    println!(
        "critical value {:.3}, group distance {:.2}: {} in the group",
        test.critical_value,
        test.group_distance,
        suspect.group.len()
    );
}

#[test]
fn of_biases_alone_the_second_is_named() {
    let (report, case) = (report(BYPASS), case());
    let computed = &case["expected"]["computed"];
    let named = counterpoise::pipeline::suppose(
        &compiled(&format!(
            "{BYPASS}[tags]\n{}",
            STREAMS.map(|stream| flow_tag(stream, 1.0)).concat()
        )),
        &flows(
            STREAMS
                .into_iter()
                .zip(numbers(&case["problem"]["measured"])),
        ),
        &[],
        &bias("to-exchanger"),
    );
    let named = named.expect("solved");
    let number = |field: &str| computed[field].as_f64().expect("a number");
    near(named.size, number("bias_estimate_2"), EXACT);
    let before = report.global_test.expect("converged").statistic;
    near(before - named.ratio, number("J_after_deleting_2"), EXACT);
}
