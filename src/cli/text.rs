//! A report for people.

use super::moved::moved;
use super::table::{Table, decimals, fixed, number, pair, plain_zero};
use super::{CAUTION, DECIDE, line_up, suspects};
use crate::report::{
    Averaged, ByHandReport, Class, GlobalTest, Imbalance, Phase, QuantityReport, Report, TagReport,
    Verdict,
};
use std::fmt::Write;
use time::OffsetDateTime;
use time::macros::format_description;

/// A class in words.
pub(super) fn class_name(class: Class) -> &'static str {
    match class {
        Class::Redundant => "redundant",
        Class::HardlyRedundant => "hardly redundant",
        Class::NotRedundant => "not redundant",
        Class::Unused => "unused",
    }
}

/// A verdict in words.
pub(super) fn verdict_name(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Consistent => "consistent",
        Verdict::Inconsistent => "inconsistent",
        Verdict::NotRedundant => "not redundant",
        Verdict::NotConverged => "not converged",
        Verdict::NotRunning => "not running",
    }
}

fn phase_name(phase: Phase) -> &'static str {
    match phase {
        Phase::Liquid => "liquid",
        Phase::Wet => "wet",
        Phase::Vapour => "vapour",
        Phase::Supercritical => "supercritical",
        Phase::Open => "open",
    }
}

/// A time to the minute, UTC.
pub(super) fn minute(time: OffsetDateTime) -> String {
    let format = format_description!("[year]-[month]-[day] [hour]:[minute]");
    // The format has only parts that every time has.
    time.format(format).unwrap_or_default()
}

/// A report for people.
pub(super) fn describe(report: &Report) -> String {
    let mut text = String::new();
    // Writing to a string cannot fail.
    let _ = writeln!(
        text,
        "Batch {} of {} (revision {}), {} to {} UTC",
        report.batch,
        report.plant,
        report.revision,
        minute(report.start),
        minute(report.end),
    );
    let _ = writeln!(text, "{}", verdict_line(report));
    // A plant in transition is among the notes.
    if let Some(steadiness) = report.steadiness.as_ref().filter(|found| found.steady) {
        let _ = writeln!(text, "steady, by {} tags judged", steadiness.judged);
    }
    text.push('\n');
    text.push_str(&line_up::describe(report));
    for decision in &report.by_hand {
        let _ = writeln!(text, "{}", by_hand(decision));
    }
    if !report.by_hand.is_empty() {
        text.push('\n');
    }
    text.push_str(&suspects::describe(report));
    let critical = report.single_test.as_ref().map(|test| test.critical_value);
    let _ = writeln!(text, "{}", tags(report, critical));
    if !report.streams.is_empty() {
        let _ = writeln!(text, "{}", streams(report));
    }
    if !report.equipment.is_empty() {
        let _ = writeln!(text, "{}", equipment(report, critical));
    }
    if let Some(moved) = moved(report) {
        let _ = writeln!(text, "{moved}");
    }
    if !report.ignored_tags.is_empty() {
        let _ = writeln!(
            text,
            "Tags that the plant file does not know: {}",
            report.ignored_tags.join(", ")
        );
    }
    for remark in &report.remarks {
        let _ = writeln!(text, "Note: {remark}");
    }
    let decide = if report.suspects.is_empty() {
        String::new()
    } else {
        format!("\n{DECIDE}")
    };
    let _ = writeln!(
        text,
        "± is the half-width at 95 % coverage. {CAUTION}{decide}"
    );
    text
}

fn verdict_line(report: &Report) -> String {
    let mut line = verdict_name(report.verdict).to_owned();
    if let Some(reason) = &report.reason {
        let _ = write!(line, ": {reason}");
    }
    if let Some(test) = &report.global_test {
        line.push_str(&global_line(test));
    }
    line
}

/// ": 47.0 on 46 degrees of freedom (critical 62.8, p = 0.432)"
pub(super) fn global_line(test: &GlobalTest) -> String {
    let noun = match test.degrees_of_freedom {
        1 => "degree",
        _ => "degrees",
    };
    let mut line = format!(
        ": {:.1} on {} {noun} of freedom",
        test.statistic, test.degrees_of_freedom
    );
    if let (Some(critical), Some(p)) = (test.critical_value, test.p_value) {
        let _ = write!(line, " (critical {critical:.1}, p = {p:.3})");
    }
    line
}

/// What an engineer decided about a tag.
fn by_hand(decision: &ByHandReport) -> String {
    let done = match (decision.action.as_str(), decision.offset) {
        ("offset", Some(offset)) => format!("{} added to the reading", signed(offset)),
        ("out-of-service", _) => "out of service".to_owned(),
        (action, _) => action.to_owned(),
    };
    format!(
        "By hand: {}: {done} ({}; decided by {})",
        decision.tag, decision.reason, decision.by
    )
}

fn signed(value: f64) -> String {
    let sign = if value < 0.0 { "-" } else { "+" };
    format!("{sign}{}", number(value.abs()))
}

fn disagrees(standardised: Option<f64>, critical: Option<f64>) -> &'static str {
    match (standardised, critical) {
        (Some(standardised), Some(critical)) if standardised.abs() > critical => "DISAGREES",
        _ => "",
    }
}

fn tags(report: &Report, critical: Option<f64>) -> Table {
    let mut table = Table::new(&[
        "<tag or assumption",
        "measured",
        "±",
        "reconciled",
        "±",
        "<unit",
        "adjustment",
        "standardised",
        "<",
    ]);
    for (name, tag) in report.tags.iter().chain(&report.assumptions) {
        let [measured, uncertainty_measured] = pair(tag.measured, tag.uncertainty_measured);
        let [reconciled, uncertainty_reconciled] = pair(tag.reconciled, tag.uncertainty_reconciled);
        table.row(vec![
            name.clone(),
            measured,
            uncertainty_measured,
            reconciled,
            uncertainty_reconciled,
            tag.unit.clone(),
            adjustment(tag),
            fixed(tag.standardised_adjustment, 2),
            remark(tag, critical),
        ]);
    }
    table
}

/// With the digits of the uncertainty, and up to two more for a small one.
fn adjustment(tag: &TagReport) -> String {
    match (tag.adjustment, tag.uncertainty_measured) {
        (Some(adjustment), Some(uncertainty)) if uncertainty > 0.0 => {
            let fewest = decimals(uncertainty);
            let places = decimals(adjustment.abs()).clamp(fewest, fewest + 2);
            plain_zero(format!("{adjustment:+.places$}"))
        }
        (Some(adjustment), _) => number(adjustment),
        _ => "-".to_owned(),
    }
}

fn remark(tag: &TagReport, critical: Option<f64>) -> String {
    let mut parts = Vec::new();
    match disagrees(tag.standardised_adjustment, critical) {
        "" => {}
        word => parts.push(word.to_owned()),
    }
    if tag.class != Class::Redundant {
        parts.push(class_name(tag.class).to_owned());
    }
    parts.extend(tag.reason.clone());
    parts.extend(tag.averaged.as_ref().and_then(samples));
    parts.join(": ")
}

/// "not steady, 2 spike, 1 bad among 60 samples", where there is any such thing.
fn samples(averaged: &Averaged) -> Option<String> {
    let flags = averaged
        .flags
        .iter()
        .map(|(flag, count)| format!("{count} {flag}"));
    let mut told: Vec<String> = flags.collect();
    if !told.is_empty() {
        told = vec![format!(
            "{} among {} samples",
            told.join(", "),
            averaged.samples
        )];
    }
    if averaged.steady == Some(false) {
        told.insert(0, "not steady".to_owned());
    }
    (!told.is_empty()).then(|| told.join(", "))
}

fn streams(report: &Report) -> Table {
    let mut table = Table::new(&[
        "<stream", "kg/s", "±", "bar abs", "±", "Cel", "±", "kJ/kg", "±", "<phase",
    ]);
    for (name, stream) in &report.streams {
        let mut row = vec![name.clone()];
        for quantity in [
            &stream.mass_flow,
            &stream.pressure,
            &stream.temperature,
            &stream.enthalpy,
        ] {
            row.extend(pair(quantity.value, quantity.uncertainty));
        }
        row.push(stream.phase.map_or("-", phase_name).to_owned());
        table.row(row);
    }
    table
}

fn equipment(report: &Report, critical: Option<f64>) -> Table {
    let mut table = Table::new(&[
        "<equipment",
        "<",
        "value",
        "±",
        "<unit",
        "standardised",
        "<",
    ]);
    for (name, equipment) in &report.equipment {
        let quantities = [
            ("heat", &equipment.heat),
            ("work", &equipment.work),
            ("power", &equipment.power),
            ("loss", &equipment.loss),
            ("holdup change", &equipment.holdup_change),
        ];
        for (what, quantity) in quantities {
            if let Some(quantity) = quantity {
                table.row(quantity_row(name, what, quantity));
            }
        }
        for (side, imbalance) in &equipment.imbalance.mass {
            let what = format!("mass imbalance ({side})");
            table.row(imbalance_row(name, what, imbalance, critical));
        }
        if let Some(imbalance) = &equipment.imbalance.energy {
            table.row(imbalance_row(
                name,
                "energy imbalance".to_owned(),
                imbalance,
                critical,
            ));
        }
    }
    table
}

fn quantity_row(name: &str, what: &str, quantity: &QuantityReport) -> Vec<String> {
    let [value, uncertainty] = pair(quantity.value, quantity.uncertainty);
    vec![
        name.to_owned(),
        what.to_owned(),
        value,
        uncertainty,
        quantity.unit.clone(),
    ]
}

fn imbalance_row(
    name: &str,
    what: String,
    imbalance: &Imbalance,
    critical: Option<f64>,
) -> Vec<String> {
    let [value, uncertainty] = pair(imbalance.value, imbalance.uncertainty);
    let standardised = fixed(imbalance.standardised, 2);
    let mark = disagrees(imbalance.standardised, critical).to_owned();
    vec![
        name.to_owned(),
        what,
        value,
        uncertainty,
        imbalance.unit.clone(),
        standardised,
        mark,
    ]
}
