//! What is in service, in words: of a report, and of a plant file's conditions.

use crate::plant::{Condition, Plant, Signal, Test};
use crate::report::Report;
use std::fmt::Write;

/// The line-up of a batch and what stands out in it, before anything else.
pub(super) fn describe(report: &Report) -> String {
    let mut text = String::new();
    // Writing to a string cannot fail.
    if let Some(line_up) = &report.line_up {
        let signals = line_up.decided_by.iter().map(|(name, value)| match value {
            Some(value) => format!("{name} {value}"),
            None => format!("{name} unknown"),
        });
        let signals: Vec<String> = signals.collect();
        let _ = writeln!(text, "Line-up: {} ({})", line_up.name, signals.join(", "));
    }
    for finding in &report.findings {
        let _ = writeln!(text, "First: {}", finding.text);
    }
    if !text.is_empty() {
        text.push('\n');
    }
    text
}

/// When each part of a plant is in service; empty where everything always is.
pub(super) fn conditions(plant: &Plant) -> String {
    let running = plant.running_when.iter().map(|c| ("the plant", "runs", c));
    let parts = plant.streams.iter();
    let parts = parts.filter_map(|s| Some((s.name.as_str(), s.in_service_when.as_ref()?)));
    let equipment = plant.equipment.iter();
    let equipment = equipment.filter_map(|e| Some((e.name.as_str(), e.in_service_when.as_ref()?)));
    let parts = parts
        .chain(equipment)
        .map(|(name, c)| (name, "is in service", c));
    let assumed = plant.assumptions.iter();
    let assumed = assumed.filter_map(|a| Some((a.name.as_str(), a.in_service_when.as_ref()?)));
    let assumed = assumed.map(|(name, c)| (name, "holds", c));
    let mut text = String::new();
    for (name, does, condition) in running.chain(parts).chain(assumed) {
        let _ = writeln!(text, "{name} {does} when {}", in_words(plant, condition));
    }
    if !text.is_empty() {
        text.push('\n');
    }
    text
}

fn in_words(plant: &Plant, condition: &Condition) -> String {
    let (name, unit) = match condition.signal {
        Signal::Status(s) => (&plant.statuses[s].name, ""),
        Signal::Tag(t) => (&plant.tags[t].name, plant.tags[t].unit.symbol.as_str()),
    };
    match &condition.test {
        Test::OneOf(values) => {
            let values: Vec<String> = values.iter().map(f64::to_string).collect();
            format!("{name} reads {}", values.join(" or "))
        }
        Test::Above(least) => format!("{name} reads more than {least} {unit}"),
        Test::Below(most) => format!("{name} reads less than {most} {unit}"),
    }
}

#[cfg(test)]
mod tests {
    use super::conditions;
    use crate::demo;

    #[test]
    fn conditions_are_told_in_words() {
        let told = conditions(&demo::plant().expect("no faults"));
        assert_eq!(
            told,
            "the plant runs when XS-201 reads 1\n\
             condensate-pump is in service when XS-401 reads 1\n\
             heater-7 is in service when ZS-307 reads 1\n\
             heater-7-bypass is in service when ZS-307 reads 0\n\
             condensate-pump-b is in service when XS-402 reads 1\n\n"
        );
        let usual = demo::lined_up(demo::LineUp::default()).expect("no faults");
        assert_eq!(conditions(&usual), "");
    }
}
