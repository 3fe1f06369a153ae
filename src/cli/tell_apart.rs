//! `tell-apart`: which faults a plant's readings tell apart, and which they mix
//! up.

use super::CAUTION;
use super::input::{self, Read, Show};
use super::output::print;
use super::suspects::wrapped;
use super::table::Table;
use super::words::{cause_name, difference, kind_name, limit_size, place_name};
use crate::pipeline::{self, Compiled};
use crate::report::{self, Apart, Cause, Limit};
use clap::Args;
use std::fmt::Write;
use std::path::PathBuf;
use std::process::ExitCode;

/// Print which faults a plant's readings tell apart, and which they mix up.
#[derive(Args, Debug)]
pub struct TellApart {
    /// The plant file, .toml or .json.
    plant_file: PathBuf,

    /// Where to reckon it: a batch (the first one, or that of --batch, of an
    /// .ndjson or .jsonl file); the normal readings of the plant file unless
    /// given.
    batch_file: Option<PathBuf>,

    /// Name of the batch, where the file holds several.
    #[arg(long, requires = "batch_file")]
    batch: Option<String>,

    /// In short, in Markdown: a row for each set of faults that hang together.
    #[arg(long)]
    markdown: bool,
}

/// Prints what is told apart.
///
/// # Errors
///
/// Where a file cannot be read.
pub fn tell_apart(arguments: &TellApart) -> anyhow::Result<ExitCode> {
    let Read::Plant(file) = input::plant_file(&arguments.plant_file, Show::Refusals)? else {
        return Ok(input::faulty());
    };
    let batch = match &arguments.batch_file {
        None => None,
        Some(path) => match input::batch(path, arguments.batch.as_deref())? {
            None => return Ok(input::faulty()),
            batch => batch,
        },
    };
    let told = pipeline::tell_apart(&Compiled::new(file.plant, 1), batch.as_ref());
    print(if arguments.markdown {
        markdown(&told)
    } else {
        describe(&told)
    })?;
    Ok(ExitCode::SUCCESS)
}

fn describe(told: &report::TellApart) -> String {
    let mut text = format!("{}, at {}\n\n", told.plant, told.operating_point);
    // Writing to a string cannot fail.
    if let Some(reason) = &told.reason {
        let _ = writeln!(text, "Nothing can be told apart: {reason}");
        return text;
    }
    let (mixed, alone): (Vec<&Apart>, Vec<&Apart>) =
        told.rows.iter().partition(|row| is_mixed(row));
    let mut table = Table::new(&["<told apart from all others", "smallest found", "<unit"]);
    for limit in alone.iter().flat_map(|row| &row.causes) {
        let [size, unit] = limit_size(limit);
        table.row(vec![cause_name(&limit.hypothesis), size, unit]);
    }
    let _ = writeln!(text, "{table}");
    let mut table = Table::new(&[
        "<mixed up",
        "smallest found",
        "<unit",
        "<with, and correlation",
    ]);
    for row in mixed {
        let mut with: Vec<String> = Vec::new();
        if let Some(alike) = row.alike {
            with.push(format!("each other {}", correlation(alike)));
        }
        with.extend(others(row));
        let mut with = with.into_iter();
        let mut causes = row.causes.iter();
        loop {
            let (cause, with) = (causes.next(), with.next());
            if cause.is_none() && with.is_none() {
                break;
            }
            let mut cells = match cause {
                Some(limit) => {
                    let [size, unit] = limit_size(limit);
                    vec![cause_name(&limit.hypothesis), size, unit]
                }
                None => vec![String::new(); 3],
            };
            cells.push(with.unwrap_or_default());
            table.row(cells);
        }
        table.row(vec![String::new()]);
    }
    let _ = writeln!(text, "{table}");
    if !told.unseen.is_empty() {
        let _ = writeln!(text, "Would go unseen:");
        unseen(&mut text, &told.unseen);
        text.push('\n');
    }
    let _ = writeln!(text, "{}\n\n{CAUTION}", meaning(told));
    text
}

/// Causes that would go unseen, by reason.
pub(super) fn unseen(text: &mut String, limits: &[Limit]) {
    for (reason, limits) in by_reason(limits) {
        let names: Vec<String> = limits.iter().map(|l| cause_name(&l.hypothesis)).collect();
        let _ = writeln!(text, "  {reason}:");
        wrapped(text, "    ", &names);
    }
}

fn by_reason(limits: &[Limit]) -> Vec<(&str, Vec<Limit>)> {
    let mut reasons: Vec<(&str, Vec<Limit>)> = Vec::new();
    for limit in limits {
        let reason = limit.reason.as_deref().unwrap_or("no reason given");
        match reasons.iter_mut().find(|(known, _)| *known == reason) {
            Some((_, limits)) => limits.push(limit.clone()),
            None => reasons.push((reason, vec![limit.clone()])),
        }
    }
    reasons
}

fn is_mixed(row: &Apart) -> bool {
    row.causes.len() > 1 || !row.mixed_up_with.is_empty()
}

fn others(row: &Apart) -> impl Iterator<Item = String> {
    let others = row.mixed_up_with.iter();
    others.map(|other| {
        format!(
            "{} {}",
            cause_name(&other.hypothesis),
            correlation(other.correlation)
        )
    })
}

/// Two decimals; what is exactly alike says so, and what is not does not.
fn correlation(rho: f64) -> String {
    if rho.abs() > 1.0 - 1e-6 {
        return if rho > 0.0 { "1" } else { "-1" }.to_owned();
    }
    let shown = (rho.abs() * 1000.0).floor() / 1000.0;
    format!("{:.3}", shown.copysign(rho))
}

fn meaning(told: &report::TellApart) -> String {
    let (critical, distance) = (
        told.critical_value.unwrap_or_default(),
        told.group_distance.unwrap_or_default(),
    );
    let limit = critical + 0.842;
    let rho = (1.0 - distance / (2.0 * limit).powi(2)).max(0.0).sqrt();
    format!(
        "\"Smallest found\": found with 80 % power. Mixed up: at twice that size both are expected in one\n\
         group, by linear theory (correlation of {rho:.3} and more; critical value {critical:.2}, group distance {distance:.1})."
    )
}

/// Markdown: a row for each set of faults that hang together, the rest in lists.
fn markdown(told: &report::TellApart) -> String {
    if let Some(reason) = &told.reason {
        return format!("Nothing can be told apart: {reason}\n");
    }
    let (mixed, alone): (Vec<&Apart>, Vec<&Apart>) =
        told.rows.iter().partition(|row| is_mixed(row));
    let of = |rows: &[&Apart]| -> Vec<Limit> {
        let causes = rows.iter().flat_map(|row| &row.causes);
        causes.cloned().collect()
    };
    let (alone, unseen) = (of(&alone), &told.unseen);
    let (apart, together) = (alone.len(), of(&mixed).len());
    let mut text = format!(
        "At {}: of {} faults {apart} would be told from every other, {together} would be\n\
         found and mixed up with others, and {} would go unseen.\n\n\
         | mixed up, with the smallest size found | with whom |\n|---|---|\n",
        told.operating_point,
        apart + together + unseen.len(),
        unseen.len(),
    );
    for set in hanging_together(&mixed) {
        let with = match &set[..] {
            [row] => match correlation(row.alike.unwrap_or(1.0).abs()) {
                alike if alike == "1" => "each with each, correlation 1".to_owned(),
                alike => format!("each with each, correlation {alike} and more"),
            },
            _ => "each with its neighbours, not all with all".to_owned(),
        };
        // Writing to a string cannot fail.
        let _ = writeln!(text, "| {} | {with} |", by_kind(&of(&set), true).join("; "));
    }
    let mut paragraph = |start: &str, limits: &[Limit]| {
        let said = format!("{start}: {}.", by_kind(limits, false).join("; "));
        text.push('\n');
        folded(&mut text, &said);
    };
    paragraph("Told from every other", &alone);
    for (reason, limits) in by_reason(unseen) {
        paragraph(&format!("Unseen, {reason}"), &limits);
    }
    text
}

/// Words in lines of at most 110 columns.
fn folded(text: &mut String, words: &str) {
    let mut column = 0;
    for word in words.split(' ') {
        let width = word.chars().count() + 1;
        if column > 0 && column + width > 110 {
            text.push('\n');
            column = 0;
        } else if column > 0 {
            text.push(' ');
        }
        text.push_str(word);
        column += width;
    }
    text.push('\n');
}

/// Rows of which one cause leads to another.
fn hanging_together<'t>(rows: &[&'t Apart]) -> Vec<Vec<&'t Apart>> {
    let touches = |a: &Apart, b: &Apart| {
        let named = |other: &report::MixedUp| {
            let mut causes = b.causes.iter();
            causes.any(|cause| cause.hypothesis == other.hypothesis)
        };
        a.mixed_up_with.iter().any(named)
    };
    let mut sets: Vec<Vec<&Apart>> = Vec::new();
    for &row in rows {
        let meets = |set: &Vec<&Apart>| set.iter().any(|r| touches(r, row) || touches(row, r));
        let (met, mut others): (Vec<_>, Vec<_>) = sets.into_iter().partition(meets);
        let mut one: Vec<&Apart> = met.into_iter().flatten().collect();
        one.push(row);
        others.push(one);
        sets = others;
    }
    sets
}

/// "bias of A, B (1.2 bar)": faults of one kind and unit together.
fn by_kind(limits: &[Limit], with_sizes: bool) -> Vec<String> {
    let mut kinds: Vec<(Cause, &str, Vec<&Limit>)> = Vec::new();
    for limit in limits {
        let unit = if with_sizes {
            difference(&limit.unit)
        } else {
            ""
        };
        let same = |(cause, of_unit, _): &&mut (Cause, &str, Vec<&Limit>)| {
            *cause == limit.hypothesis.cause && *of_unit == unit
        };
        match kinds.iter_mut().find(same) {
            Some((_, _, known)) => known.push(limit),
            None => kinds.push((limit.hypothesis.cause, unit, vec![limit])),
        }
    }
    kinds
        .into_iter()
        .map(|(cause, unit, limits)| {
            let names: Vec<String> = limits.iter().map(|l| place_name(&l.hypothesis)).collect();
            let said = format!("{} {}", kind_name(cause), names.join(", "));
            if !with_sizes {
                return said;
            }
            let mut sizes = limits;
            sizes.sort_by(|a, b| {
                let size = |limit: &Limit| limit.detectable.unwrap_or_default();
                size(a).total_cmp(&size(b))
            });
            let shown = |limit: Option<&&Limit>| {
                limit.map_or_else(String::new, |l| limit_size(l)[0].clone())
            };
            let (least, most) = (shown(sizes.first()), shown(sizes.last()));
            if least == most {
                format!("{said} ({least} {unit})")
            } else {
                format!("{said} ({least} to {most} {unit})")
            }
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::{Hypothesis, MixedUp};

    fn limit(of: &str, cause: Cause, found: Option<f64>) -> Limit {
        Limit {
            hypothesis: Hypothesis {
                cause,
                of: of.to_owned(),
                side: None,
            },
            detectable: found,
            standardised: None,
            unit: "kg/s".to_owned(),
            reason: found.is_none().then(|| "nothing checks it".to_owned()),
        }
    }

    fn row(causes: &[&str], alike: Option<f64>, others: &[(&str, f64)]) -> Apart {
        let mixed_up_with = others.iter().map(|&(of, correlation)| MixedUp {
            hypothesis: limit(of, Cause::Leak, None).hypothesis,
            correlation,
        });
        Apart {
            causes: (causes.iter())
                .map(|of| limit(of, Cause::Leak, Some(1.234)))
                .collect(),
            alike,
            mixed_up_with: mixed_up_with.collect(),
        }
    }

    fn told() -> report::TellApart {
        report::TellApart {
            plant: "mill".to_owned(),
            revision: 1,
            operating_point: "the normal readings of the plant file".to_owned(),
            reason: None,
            critical_value: Some(3.0),
            group_distance: Some(6.0),
            rows: vec![
                row(&["alone"], None, &[]),
                row(&["A", "B"], Some(0.999_999_99), &[]),
                row(&["left"], None, &[("middle", 0.96)]),
                row(&["middle"], None, &[("right", 0.9791), ("left", 0.96)]),
                row(&["right"], None, &[("middle", 0.9791)]),
            ],
            unseen: vec![limit("dark", Cause::HeatLoss, None)],
        }
    }

    #[test]
    fn all_that_is_told_stands_in_the_text() {
        insta::with_settings!({ prepend_module_to_snapshot => false }, {
            insta::assert_snapshot!("tell_apart_text", describe(&told()));
            insta::assert_snapshot!("tell_apart_markdown", markdown(&told()));
        });
    }

    #[test]
    fn where_nothing_is_tested_nothing_is_claimed() {
        let mut told = told();
        told.reason = Some("nothing is redundant".to_owned());
        for text in [describe(&told), markdown(&told)] {
            assert!(text.contains("Nothing can be told apart: nothing is redundant"));
            assert!(!text.contains("alone"), "{text}");
        }
    }

    #[test]
    fn only_what_is_alike_to_the_last_digit_shows_as_one() {
        assert_eq!(correlation(0.999_6), "0.999");
        assert_eq!(correlation(-0.999_999_9), "-1");
        assert_eq!(correlation(-0.9619), "-0.961");
    }
}
