//! `check`: every fault of a plant file, or what its tags can determine.

use super::CAUTION;
use super::input::{self, Read, Show};
use super::line_up;
use super::output::print;
use super::table::{Table, decimals, fixed};
use super::tell_apart::unseen;
use super::text::class_name;
use super::words::{difference, limit_size};
use crate::pipeline::{self, Compiled};
use crate::report::{Assessment, Cause, Class, Limit, Observability};
use clap::{Args, ValueEnum};
use std::fmt::Write;
use std::path::PathBuf;
use std::process::ExitCode;

/// Look at a plant file.
#[derive(Args, Debug)]
pub struct Check {
    /// The plant file, .toml or .json.
    plant_file: PathBuf,

    /// Form of the assessment.
    #[arg(long, default_value = "text")]
    format: CheckFormat,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
enum CheckFormat {
    Text,
    Json,
}

/// Prints the faults of a plant file, or its assessment.
///
/// # Errors
///
/// Where the file cannot be read.
pub fn check(arguments: &Check) -> anyhow::Result<ExitCode> {
    let json = arguments.format == CheckFormat::Json;
    let show = if json { Show::Nothing } else { Show::All };
    match input::plant_file(&arguments.plant_file, show)? {
        Read::Faulty(faults) => {
            if json {
                print(format!("{}\n", serde_json::json!({ "faults": faults })))?;
            }
            Ok(input::faulty())
        }
        Read::Plant(file) => {
            let title = file.plant.title.clone();
            let conditions = line_up::conditions(&file.plant);
            let mut assessment = pipeline::assess(&Compiled::new(file.plant, 1));
            assessment
                .warnings
                .extend(file.warnings.iter().map(ToString::to_string));
            if json {
                print(serde_json::to_string_pretty(&assessment)? + "\n")?;
            } else {
                print(describe(&title, &conditions, &assessment))?;
            }
            Ok(ExitCode::SUCCESS)
        }
    }
}

/// An assessment for people.
pub(super) fn describe(title: &str, conditions: &str, assessment: &Assessment) -> String {
    let mut text = String::new();
    // Writing to a string cannot fail.
    let _ = writeln!(
        text,
        "{title} ({}), at {}\n\n\
         {}, {}, {}: {}, {}\n",
        assessment.plant,
        assessment.operating_point,
        counted(assessment.states, "state", "states"),
        counted(
            assessment.relations,
            "independent relation",
            "independent relations"
        ),
        counted(assessment.observations, "observation", "observations"),
        counted(
            assessment.degrees_of_freedom,
            "degree of freedom",
            "degrees of freedom"
        ),
        counted(
            assessment.unobservable_directions,
            "unobservable direction",
            "unobservable directions"
        ),
    );
    text.push_str(conditions);
    if assessment.tags.is_empty() {
        let _ = writeln!(
            text,
            "Nothing could be assessed: {}\n\n{CAUTION}",
            assessment.operating_point
        );
        return text;
    }
    let blind: Vec<Limit> = (assessment.limits.iter())
        .filter(|limit| limit.detectable.is_none())
        .cloned()
        .collect();
    if blind.is_empty() {
        let _ = writeln!(text, "Nothing that is looked for would go unseen.\n");
    } else {
        let _ = writeln!(text, "What would go unseen, whatever its size, and why:");
        unseen(&mut text, &blind);
        text.push('\n');
    }
    let _ = writeln!(
        text,
        "What is found with 80 % power is this large or larger:\n\n{}",
        readings(assessment)
    );
    let plant_faults = plant_faults(&assessment.limits);
    if !plant_faults.is_empty() {
        let _ = writeln!(text, "{plant_faults}");
    }
    let mut streams = Table::new(&[
        "<stream",
        "<mass flow",
        "<pressure",
        "<temperature",
        "<enthalpy",
    ]);
    for (name, stream) in &assessment.streams {
        let quantities = [
            stream.mass_flow,
            stream.pressure,
            stream.temperature,
            stream.enthalpy,
        ];
        if quantities.contains(&Observability::Unobservable) {
            let mut row = vec![name.clone()];
            row.extend(quantities.map(|class| match class {
                Observability::Observable => "observable".to_owned(),
                Observability::Unobservable => "unobservable".to_owned(),
            }));
            streams.row(row);
        }
    }
    if streams.is_empty() {
        let _ = writeln!(text, "Every quantity of every stream is observable.\n");
    } else {
        let _ = writeln!(
            text,
            "Streams that are not determined completely:\n{streams}"
        );
    }
    if !assessment.unobservable.is_empty() {
        let _ = writeln!(text, "Unobservable, and why:");
        for quantity in &assessment.unobservable {
            let _ = writeln!(
                text,
                "  {} of {}: {}",
                quantity.quantity, quantity.of, quantity.why
            );
        }
        text.push('\n');
    }
    if (assessment.tags.values()).all(|tag| tag.class == Class::Redundant) {
        let _ = writeln!(text, "Every tag is checked by others.\n");
    }
    let _ = writeln!(text, "{CAUTION}");
    text
}

/// Tags and assumptions with their classes, and the smallest bias found.
fn readings(assessment: &Assessment) -> Table {
    let mut table = Table::new(&[
        "<tag or assumption",
        "<class",
        "redundancy",
        "smallest bias found",
        "<unit",
    ]);
    for (name, tag) in assessment.tags.iter().chain(&assessment.assumptions) {
        let places = tag.detectable.map_or(0, decimals);
        table.row(vec![
            name.clone(),
            class_name(tag.class).to_owned(),
            fixed(tag.redundancy, 3),
            fixed(tag.detectable, places),
            difference(&tag.unit).to_owned(),
        ]);
    }
    table
}

/// Leaks, losses and passing valves that are found, a row for each piece of
/// equipment or stream.
fn plant_faults(limits: &[Limit]) -> Table {
    let mut rows: Vec<(&str, [Vec<String>; 2])> = Vec::new();
    for limit in limits.iter().filter(|limit| limit.detectable.is_some()) {
        let hypothesis = &limit.hypothesis;
        let [size, _] = limit_size(limit);
        let sided = |size: String| match hypothesis.side.as_deref() {
            None | Some("flow") => size,
            Some(side) => format!("{side} {size}"),
        };
        let (column, cell) = match hypothesis.cause {
            Cause::Bias | Cause::Departure => continue,
            Cause::Leak | Cause::LeakBetween => (0, sided(size)),
            Cause::Passing => (0, format!("passes {size}")),
            Cause::HeatLoss => (1, size),
        };
        let known = rows.iter().position(|(of, _)| *of == hypothesis.of);
        let at = known.unwrap_or_else(|| {
            rows.push((&hypothesis.of, Default::default()));
            rows.len() - 1
        });
        rows[at].1[column].push(cell);
    }
    let mut table = Table::new(&["<smallest found of", "<leaks, kg/s", "unstated loss, kW"]);
    for (of, [leaks, losses]) in rows {
        let cell = |cells: Vec<String>| {
            if cells.is_empty() {
                "-".to_owned()
            } else {
                cells.join(", ")
            }
        };
        table.row(vec![of.to_owned(), cell(leaks), cell(losses)]);
    }
    table
}

/// "1 state", "2 states".
pub(super) fn counted(number: usize, one: &str, many: &str) -> String {
    format!("{number} {}", if number == 1 { one } else { many })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::{AssessedTag, Hypothesis};

    fn assessed(classes: &[(&str, Class)]) -> Assessment {
        let tags = classes.iter().map(|(name, class)| {
            let tag = AssessedTag {
                class: *class,
                redundancy: None,
                detectable: None,
                unit: "t/h".to_owned(),
            };
            ((*name).to_owned(), tag)
        });
        Assessment {
            plant: "mill".to_owned(),
            revision: 1,
            operating_point: "none found".to_owned(),
            line_up: None,
            states: 1,
            relations: 2,
            observations: 3,
            unobservable_directions: 0,
            degrees_of_freedom: 1,
            tags: tags.collect(),
            assumptions: Default::default(),
            limits: Vec::new(),
            streams: Default::default(),
            unobservable: Vec::new(),
            warnings: Vec::new(),
        }
    }

    fn limit(
        cause: Cause,
        of: &str,
        side: Option<&str>,
        found: Result<f64, &str>,
        unit: &str,
    ) -> Limit {
        Limit {
            hypothesis: Hypothesis {
                cause,
                of: of.to_owned(),
                side: side.map(str::to_owned),
            },
            detectable: found.ok(),
            standardised: None,
            unit: unit.to_owned(),
            reason: found.err().map(str::to_owned),
        }
    }

    #[test]
    fn without_tags_nothing_is_claimed() {
        let text = describe("Mill", "", &assessed(&[]));
        assert!(text.contains("Nothing could be assessed: none found"));
        assert!(!text.contains("very"), "{text}");
    }

    #[test]
    fn what_goes_unseen_comes_first_and_every_tag_has_its_class() {
        let mut assessment = assessed(&[
            ("A", Class::NotRedundant),
            ("B", Class::HardlyRedundant),
            ("C", Class::Redundant),
        ]);
        assessment.limits = vec![
            limit(Cause::Bias, "A", None, Err("nothing checks it"), "t/h"),
            limit(Cause::HeatLoss, "E", None, Err("nothing checks it"), "kW"),
            limit(Cause::Bias, "B", None, Err("checked weakly"), "t/h"),
            limit(Cause::Bias, "C", None, Ok(1.0), "t/h"),
            limit(Cause::Leak, "F", Some("tube"), Ok(1.23), "kg/s"),
            limit(
                Cause::LeakBetween,
                "F",
                Some("tube into steam"),
                Ok(0.5),
                "kg/s",
            ),
            limit(Cause::HeatLoss, "F", None, Ok(900.0), "kW"),
            limit(Cause::Passing, "S", None, Ok(2.0), "kg/s"),
        ];
        insta::with_settings!({ prepend_module_to_snapshot => false }, {
            insta::assert_snapshot!("check_text", describe("Mill", "", &assessment));
        });
    }

    #[test]
    fn a_plant_without_blind_spots_says_so() {
        let text = describe("Mill", "", &assessed(&[("C", Class::Redundant)]));
        assert!(text.contains("Every tag is checked"));
        assert!(text.contains("Nothing that is looked for would go unseen."));
        assert!(text.contains(": 1 degree of freedom, 0 unobservable directions"));
        assert!(text.contains("1 state, 2 independent relations"));
    }
}
