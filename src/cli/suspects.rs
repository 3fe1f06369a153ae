//! Suspects of a report for people.

use super::table::{decimals, fixed};
use super::text::global_line;
use super::words::{accusation, cause_name, difference};
use crate::report::{Accused, FieldCheck, Repaired, Report, Suspect};
use std::fmt::Write;

/// Columns of a line of text.
const WIDTH: usize = 100;

/// Suspects and what the search for them came to; empty where there is nothing
/// to say.
pub(super) fn describe(report: &Report) -> String {
    let mut text = String::new();
    // Writing to a string cannot fail.
    match report.suspects.len() {
        0 => {}
        1 => text.push_str("One suspect:\n"),
        many => {
            let _ = writeln!(
                text,
                "{many} suspects, in the order in which they were found:"
            );
        }
    }
    for (nth, suspect) in report.suspects.iter().enumerate() {
        one(&mut text, nth + 1, suspect);
    }
    if let Some(after) = &report.after_suspects {
        let line = global_line(&after.global_test);
        let _ = writeln!(text, "  With all suspects out{line}");
    }
    for remark in &report.suspects_remarks {
        let _ = writeln!(text, "  Note: {remark}");
    }
    if !text.is_empty() {
        text.push('\n');
    }
    text
}

fn one(text: &mut String, nth: usize, suspect: &Suspect) {
    match &suspect.group[..] {
        [] => return,
        [alone] => {
            let _ = writeln!(text, "  {nth}. {}", with_ratio(alone));
        }
        group => {
            let _ = writeln!(
                text,
                "  {nth}. one of these, which the readings cannot tell apart:"
            );
            for accused in group {
                let _ = writeln!(text, "     - {}", with_ratio(accused));
            }
        }
    }
    let (before, after) = (suspect.statistic_before, suspect.statistic_after);
    let _ = writeln!(text, "     statistic {before:.1} -> {after:.1}");
    for (what, repaired) in [("balances", &suspect.balances), ("readings", &suspect.tags)] {
        if !repaired.is_empty() {
            let all: Vec<String> = repaired.iter().map(mended).collect();
            let _ = writeln!(text, "     {what} that it repairs, standardised:");
            wrapped(text, "       ", &all);
        }
    }
    if !suspect.checks.is_empty() {
        let _ = writeln!(text, "     what would settle it, the surest first:");
    }
    for (of, check) in together(&suspect.checks) {
        let (head, readings) = in_words(&of, check, &suspect.group);
        let _ = writeln!(text, "     - {head}");
        if !readings.is_empty() {
            wrapped(text, "       ", &readings);
        }
    }
}

/// Checks that would show the same, such as flows in series, in one line.
fn together(checks: &[FieldCheck]) -> Vec<(String, &FieldCheck)> {
    let mut kept: Vec<(String, &FieldCheck)> = Vec::new();
    for check in checks {
        let alike = |other: &FieldCheck| {
            let near = |(a, b): (&f64, &f64)| (a - b).abs() <= 1e-9 * a.abs();
            check.action == "read"
                && other.quantity == check.quantity
                && other.expected.iter().zip(&check.expected).all(near)
        };
        match kept.iter_mut().find(|(_, other)| alike(other)) {
            Some((of, _)) => {
                let _ = write!(of, " or {}", check.of);
            }
            None => kept.push((check.of.clone(), check)),
        }
    }
    kept
}

fn with_ratio(accused: &Accused) -> String {
    let ratio = format!("likelihood ratio {:.1}", accused.ratio);
    let remark = match &accused.remark {
        Some(remark) => format!("; {remark}"),
        None => String::new(),
    };
    format!("{} ({ratio}{remark})", accusation(accused))
}

fn mended(repaired: &Repaired) -> String {
    let after = match repaired.standardised_after {
        Some(after) => fixed(Some(after), 1),
        None => "unchecked".to_owned(),
    };
    let before = repaired.standardised_before;
    format!("{} {before:.1} -> {after}", repaired.of)
}

/// Parts with commas between them, in lines of at most [`WIDTH`] columns.
pub(super) fn wrapped(text: &mut String, indent: &str, parts: &[String]) {
    let mut column = 0;
    for (nth, part) in parts.iter().enumerate() {
        let comma = if nth + 1 < parts.len() { "," } else { "" };
        let width = part.chars().count() + comma.len() + 1;
        if column > 0 && column + width > WIDTH {
            text.push('\n');
            column = 0;
        }
        if column == 0 {
            text.push_str(indent);
            column = indent.len();
        } else {
            text.push(' ');
        }
        text.push_str(part);
        text.push_str(comma);
        column += width;
    }
    text.push('\n');
}

/// What to do, and what is then read under each member of the group.
fn in_words(of: &str, check: &FieldCheck, group: &[Accused]) -> (String, Vec<String>) {
    let decides = format!("decides {:.0} %", 100.0 * check.decides);
    if check.action == "close" {
        let head = format!("make sure that {of} is shut, and look again; {decides}");
        return (head, Vec::new());
    }
    let (quantity, instrument, unit) = match check.quantity.as_deref() {
        Some("mass-flow") => ("mass flow", "a portable flowmeter", check.unit.as_str()),
        Some("pressure") => ("pressure", "a test gauge", "bar abs"),
        Some("temperature") => ("temperature", "a portable thermometer", &*check.unit),
        other => (
            other.unwrap_or("state"),
            "a portable instrument",
            &*check.unit,
        ),
    };
    let places = check.uncertainty.map_or(2, decimals);
    let sure = check.uncertainty.map_or_else(String::new, |uncertainty| {
        format!(" (± {uncertainty:.places$} {})", difference(&check.unit))
    });
    let mut expected: Vec<(String, Vec<String>)> = Vec::new();
    for (reading, accused) in check.expected.iter().zip(group) {
        let (reading, name) = (format!("{reading:.places$}"), short(accused, group));
        match expected.iter_mut().find(|(known, _)| *known == reading) {
            Some((_, names)) => names.push(name),
            None => expected.push((reading, vec![name])),
        }
    }
    let readings = expected
        .into_iter()
        .map(|(reading, names)| format!("{reading} {unit} if {}", names.join(" or ")));
    let head = format!("read the {quantity} of {of} with {instrument}{sure}; {decides}:");
    (head, readings.collect())
}

/// A member of a group by its name alone, where that tells it from the others.
fn short(accused: &Accused, group: &[Accused]) -> String {
    let of = &accused.hypothesis.of;
    let namesakes = group.iter().filter(|other| other.hypothesis.of == *of);
    if namesakes.count() == 1 {
        of.clone()
    } else {
        cause_name(&accused.hypothesis)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use serde_json::json;

    fn report() -> Report {
        let accused = |cause, of, size, ratio| {
            json!({"cause": cause, "of": of, "size": size, "uncertainty": 1.3, "unit": "Cel",
                   "ratio": ratio, "detectable": 2.0})
        };
        let leak = json!({
            "cause": "leak-between", "of": "heater-6", "side": "tube into steam", "size": 2.04,
            "uncertainty": 0.61, "unit": "kg/s", "ratio": 35.2, "detectable": 1.1,
            "remark": "linear",
        });
        let test = json!({"statistic": 12.0, "degrees_of_freedom": 9, "critical_value": 16.9,
                          "p_value": 0.21, "confidence": 0.95});
        let read = |of| {
            json!({"action": "read", "quantity": "temperature", "of": of, "uncertainty": 1.0,
                   "expected": [531.23, 535.11], "unit": "Cel", "decides": 0.88})
        };
        serde_json::from_value(json!({
            "plant": "mill", "revision": 1, "batch": "b", "start": "2026-03-17T00:00:00Z",
            "end": "2026-03-17T00:05:00Z", "verdict": "inconsistent", "global_test": test,
            "tags": {}, "assumptions": {}, "streams": {}, "equipment": {}, "ignored_tags": [],
            "remarks": [],
            "suspects": [
                {"group": [leak], "statistic_before": 80.0, "statistic_after": 44.8,
                 "balances": [{"of": "heater-6 energy", "standardised_before": 3.9,
                               "standardised_after": 0.2}],
                 "tags": [{"of": "FT-1", "standardised_before": -4.0,
                           "standardised_after": null}],
                 "checks": []},
                {"group": [accused("bias", "TT-2", 5.2, 30.1), accused("bias", "TT-3", -5.1, 30.0)],
                 "statistic_before": 44.8, "statistic_after": 12.0, "balances": [], "tags": [],
                 "checks": [read("steam"), read("steam-2"),
                            {"action": "close", "of": "dump", "expected": [0.0, 0.0],
                             "unit": "kg/s", "decides": 0.41}]},
            ],
            "suspects_remarks": ["something is left unexplained"],
            "after_suspects": {"global_test": test, "tags": {}, "assumptions": {}, "streams": {},
                               "equipment": {}},
            "by_hand": [
                {"id": 1, "tag": "FT-9", "action": "out-of-service", "reason": "calibration",
                 "by": "A. Wren"},
                {"id": 2, "tag": "FT-8", "action": "offset", "offset": -1.5,
                 "reason": "as found", "by": "A. Wren"},
            ],
        }))
        .unwrap()
    }

    #[test]
    fn suspects_are_said_as_people_read_them() {
        insta::with_settings!({ prepend_module_to_snapshot => false }, {
            insta::assert_snapshot!("reconcile_suspects", super::super::text::describe(&report()));
        });
    }

    #[test]
    fn without_suspects_nothing_is_said() {
        let mut report = report();
        report.suspects.clear();
        report.suspects_remarks.clear();
        report.after_suspects = None;
        assert_eq!(describe(&report), "");
        assert!(!super::super::text::describe(&report).contains("licensed engineers"));
    }

    #[test]
    fn lines_are_broken_between_parts() {
        let parts: Vec<String> = (0..30).map(|n| format!("part-{n}")).collect();
        let mut text = String::new();
        wrapped(&mut text, "  ", &parts);
        assert!(text.lines().all(|line| line.chars().count() <= WIDTH));
        assert_eq!(text.split_whitespace().count(), 30);
        assert!(text.lines().count() > 1);
    }
}
