//! Comparisons of reports made by hand, with sums that can be checked on paper.

use super::*;
use crate::report::{
    Accused, Cause, Class, GlobalTest, Observability, QuantityReport, Report, StreamReport,
    Suspect, TagReport,
};
use indexmap::IndexMap;
use time::macros::datetime;

fn tag(value: Option<f64>, uncertainty: f64, unit: &str) -> TagReport {
    TagReport {
        measured: value,
        reconciled: value,
        adjustment: None,
        unit: unit.to_owned(),
        uncertainty_measured: None,
        uncertainty_reconciled: value.map(|_| uncertainty),
        redundancy: None,
        standardised_adjustment: None,
        detectable: None,
        class: Class::Redundant,
        reason: None,
        averaged: None,
    }
}

fn quantity(value: f64, unit: &str) -> QuantityReport {
    QuantityReport {
        value: Some(value),
        uncertainty: Some(1.0),
        unit: unit.to_owned(),
        class: Observability::Observable,
    }
}

fn report(batch: &str, verdict: Verdict, statistic: f64) -> Report {
    let start = datetime!(2031-04-02 10:00 UTC);
    Report {
        plant: "mixer".to_owned(),
        revision: 1,
        batch: batch.to_owned(),
        start,
        end: start + time::Duration::minutes(5),
        verdict,
        reason: None,
        global_test: Some(GlobalTest {
            statistic,
            degrees_of_freedom: 4,
            critical_value: Some(9.49),
            p_value: Some(0.5),
            confidence: 0.95,
        }),
        single_test: None,
        tags: IndexMap::new(),
        assumptions: IndexMap::new(),
        streams: IndexMap::new(),
        equipment: IndexMap::new(),
        suspects: Vec::new(),
        suspects_remarks: Vec::new(),
        after_suspects: None,
        limits: Vec::new(),
        by_hand: Vec::new(),
        line_up: None,
        findings: Vec::new(),
        steadiness: None,
        ignored_tags: Vec::new(),
        remarks: Vec::new(),
    }
}

fn with_tags(mut report: Report, tags: &[(&str, Option<f64>, f64)]) -> Report {
    for &(name, value, uncertainty) in tags {
        let tag = tag(value, uncertainty, "t/h");
        report.tags.insert(name.to_owned(), tag);
    }
    report
}

fn accusing(mut report: Report, groups: &[&[&str]]) -> Report {
    let accused = |of: &&str| Accused {
        hypothesis: Hypothesis {
            cause: Cause::Bias,
            of: (*of).to_owned(),
            side: None,
        },
        size: 1.0,
        uncertainty: 0.1,
        unit: "t/h".to_owned(),
        ratio: 20.0,
        detectable: 0.5,
        remark: None,
    };
    report.suspects = (groups.iter())
        .map(|group| Suspect {
            group: group.iter().map(accused).collect(),
            statistic_before: 30.0,
            statistic_after: 3.0,
            balances: Vec::new(),
            tags: Vec::new(),
            checks: Vec::new(),
        })
        .collect();
    report
}

fn compare(pairs: &[(Report, Report)]) -> Comparison {
    let mut tally = Tally::default();
    for (before, after) in pairs {
        tally.add(Pair { before, after });
    }
    tally.comparison()
}

#[test]
fn verdicts_and_statistics_are_counted() {
    let (good, bad) = (Verdict::Consistent, Verdict::Inconsistent);
    let pair = |before, after, x, y| (report("b", before, x), report("b", after, y));
    let mut last = pair(good, Verdict::NotConverged, 100.0, 0.0);
    last.1.global_test = None;
    let found = compare(&[
        pair(bad, good, 12.0, 4.0),
        pair(bad, good, 14.0, 5.0),
        pair(good, good, 4.0, 3.0),
        last,
    ]);
    assert_eq!(found.batches, 4);
    let table: Vec<_> = (found.verdicts.iter())
        .map(|c| (c.before, c.after, c.batches))
        .collect();
    let expected = [
        (bad, good, 2),
        (good, good, 1),
        (good, Verdict::NotConverged, 1),
    ];
    assert_eq!(table, expected);
    let statistic = found.statistic.expect("three have one on both sides");
    assert_eq!(
        (statistic.batches, statistic.before, statistic.after),
        (3, 10.0, 4.0)
    );
}

/// Moved by 2 and 4 with uncertainties 3 and 1, by hand: mean 3, pooled
/// uncertainty root of ((9 + 1)/2 + (9 + 1)/2)/2 = root of 5.
#[test]
fn a_shift_is_told_in_pooled_uncertainties() {
    let good = Verdict::Consistent;
    let make = |x, u| {
        with_tags(
            report("b", good, 1.0),
            &[("F-1", Some(x), u), ("F-2", Some(7.0), 1.0)],
        )
    };
    let found = compare(&[
        (make(10.0, 3.0), make(12.0, 1.0)),
        (make(10.0, 3.0), make(14.0, 1.0)),
    ]);
    assert_eq!(
        found.moved.len(),
        1,
        "what stayed is not told: {:?}",
        found.moved
    );
    let moved = &found.moved[0];
    assert_eq!((moved.of.as_str(), moved.batches), ("F-1", 2));
    assert_eq!((moved.before, moved.after, moved.moved), (10.0, 13.0, 3.0));
    assert!((moved.uncertainty - 5f64.sqrt()).abs() < 1e-12);
    assert!((moved.in_uncertainties.expect("a ratio") - 3.0 / 5f64.sqrt()).abs() < 1e-12);
    let furthest = found.largest[0].furthest.as_ref().expect("a value");
    assert_eq!((furthest.of.as_str(), furthest.after), ("F-1", 14.0));
    assert_eq!(found.largest.len(), 2);
}

#[test]
fn the_same_reports_move_nothing() {
    let one = with_tags(
        report("b", Verdict::Inconsistent, 20.0),
        &[("F-1", Some(10.0), 3.0)],
    );
    let one = accusing(one, &[&["F-1"]]);
    let found = compare(&[(one.clone(), one)]);
    assert!(found.moved.is_empty() && found.determined.is_empty());
    assert!(found.largest.is_empty() && found.units_changed.is_empty());
    assert_eq!(found.suspects[0].stayed, 1);
}

/// A leader that is a member of a group on the other side has not gone; one
/// that is nowhere has.
#[test]
fn suspects_are_gained_lost_or_stay() {
    let make = |groups: &[&[&str]]| accusing(report("b", Verdict::Inconsistent, 30.0), groups);
    let found = compare(&[
        (make(&[&["A", "B"]]), make(&[&["B", "A"]])),
        (make(&[&["C"]]), make(&[&["D"]])),
        (make(&[&["C"]]), make(&[])),
    ]);
    let counts: Vec<_> = (found.suspects.iter())
        .map(|s| (s.hypothesis.of.as_str(), s.gained, s.lost, s.stayed))
        .collect();
    let expected = [
        ("C", 0, 2, 0),
        ("D", 1, 0, 0),
        ("A", 0, 0, 1),
        ("B", 0, 0, 1),
    ];
    assert_eq!(counts, expected);
}

#[test]
fn values_on_one_side_and_other_units_are_told_apart() {
    let good = Verdict::Consistent;
    let mut before = with_tags(
        report("b", good, 1.0),
        &[
            ("F-1", Some(1.0), 1.0),
            ("F-2", None, 1.0),
            ("F-3", Some(3.0), 1.0),
        ],
    );
    let mut after = with_tags(
        report("b", good, 1.0),
        &[
            ("F-1", None, 1.0),
            ("F-2", Some(1.0), 1.0),
            ("F-4", Some(1.0), 1.0),
        ],
    );
    after
        .tags
        .insert("F-3".to_owned(), tag(Some(0.8), 0.3, "kg/s"));
    let stream = |flow| StreamReport {
        mass_flow: quantity(flow, "kg/s"),
        pressure: quantity(5.0, "bar"),
        temperature: quantity(30.0, "Cel"),
        enthalpy: quantity(126.0, "kJ/kg"),
        phase: None,
    };
    before.streams.insert("first".to_owned(), stream(10.0));
    after.streams.insert("first".to_owned(), stream(12.0));
    let found = compare(&[(before, after)]);
    let sides: Vec<_> = (found.determined.iter())
        .map(|c| (c.of.as_str(), c.only_before, c.only_after))
        .collect();
    assert_eq!(sides, [("F-1", 1, 0), ("F-2", 0, 1), ("F-4", 0, 1)]);
    assert_eq!(found.units_changed, ["F-3"]);
    let moved: Vec<_> = found.moved.iter().map(|m| m.of.as_str()).collect();
    assert_eq!(moved, ["first.mass_flow"]);
}

#[test]
fn the_furthest_stand_first_and_their_number_is_bounded() {
    let good = Verdict::Consistent;
    let pairs: Vec<_> = (0..50u8)
        .map(|at| {
            let name = format!("b{at}");
            let make = |x| with_tags(report(&name, good, 1.0), &[("F-1", Some(x), 1.0)]);
            (make(10.0), make(10.0 + f64::from(at)))
        })
        .collect();
    let found = compare(&pairs);
    let names: Vec<&str> = found.largest.iter().map(|c| c.batch.as_str()).collect();
    let expected: Vec<String> = (30..50).rev().map(|at| format!("b{at}")).collect();
    assert_eq!(names, expected);
}
