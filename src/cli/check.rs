//! `check`: every fault of a plant file, or what its tags can determine.

use super::CAUTION;
use super::input::{self, Read, Show};
use super::output::print;
use super::table::{Table, fixed, number};
use super::text::class_name;
use crate::pipeline::{self, Compiled};
use crate::report::{Assessment, Class, Observability};
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
            let mut assessment = pipeline::assess(&Compiled::new(file.plant, 1));
            assessment
                .warnings
                .extend(file.warnings.iter().map(ToString::to_string));
            if json {
                print(serde_json::to_string_pretty(&assessment)? + "\n")?;
            } else {
                print(describe(&title, &assessment))?;
            }
            Ok(ExitCode::SUCCESS)
        }
    }
}

/// An assessment for people.
pub(super) fn describe(title: &str, assessment: &Assessment) -> String {
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
    if assessment.tags.is_empty() {
        let _ = writeln!(
            text,
            "Nothing could be assessed: {}\n\n{CAUTION}",
            assessment.operating_point
        );
        return text;
    }
    let mut table = Table::new(&[
        "<tag or assumption",
        "<class",
        "redundancy",
        "smallest bias found",
        "<unit",
    ]);
    for (name, tag) in assessment.tags.iter().chain(&assessment.assumptions) {
        table.row(vec![
            name.clone(),
            class_name(tag.class).to_owned(),
            fixed(tag.redundancy, 3),
            tag.detectable.map_or_else(|| "-".to_owned(), number),
            tag.unit.clone(),
        ]);
    }
    let _ = writeln!(text, "{table}");
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
    let of_class = |class: Class| {
        let tags = assessment.tags.iter().filter(|(_, tag)| tag.class == class);
        let names: Vec<&str> = tags.map(|(name, _)| name.as_str()).collect();
        names.join(", ")
    };
    let unchecked = of_class(Class::NotRedundant);
    let hardly = of_class(Class::HardlyRedundant);
    if !unchecked.is_empty() {
        let _ = writeln!(text, "Tags that nothing checks: {unchecked}");
    }
    if !hardly.is_empty() {
        let _ = writeln!(
            text,
            "Tags checked so weakly that no error of believable size would show: {hardly}"
        );
    }
    if assessment
        .tags
        .values()
        .all(|tag| tag.class == Class::Redundant)
    {
        let _ = writeln!(text, "Every tag is checked by others.");
    }
    let _ = writeln!(text, "\n{CAUTION}");
    text
}

/// "1 state", "2 states".
fn counted(number: usize, one: &str, many: &str) -> String {
    format!("{number} {}", if number == 1 { one } else { many })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::AssessedTag;

    fn assessed(classes: &[(&str, Class)]) -> String {
        let tags = classes.iter().map(|(name, class)| {
            let tag = AssessedTag {
                class: *class,
                redundancy: None,
                detectable: None,
                unit: "t/h".to_owned(),
            };
            ((*name).to_owned(), tag)
        });
        let assessment = Assessment {
            plant: "mill".to_owned(),
            revision: 1,
            operating_point: "none found".to_owned(),
            states: 1,
            relations: 2,
            observations: 3,
            unobservable_directions: 0,
            degrees_of_freedom: 1,
            tags: tags.collect(),
            assumptions: Default::default(),
            streams: Default::default(),
            unobservable: Vec::new(),
            warnings: Vec::new(),
        };
        describe("Mill", &assessment)
    }

    #[test]
    fn without_tags_nothing_is_claimed() {
        let text = assessed(&[]);
        assert!(text.contains("Nothing could be assessed: none found"));
        assert!(!text.contains("very"), "{text}");
    }

    #[test]
    fn each_class_has_its_own_heading() {
        let text = assessed(&[
            ("A", Class::NotRedundant),
            ("B", Class::HardlyRedundant),
            ("C", Class::Redundant),
        ]);
        assert!(text.contains("nothing checks: A\n"), "{text}");
        assert!(text.contains("would show: B\n"), "{text}");
        assert!(!text.contains("Every tag"), "{text}");
        assert!(text.contains(": 1 degree of freedom, 0 unobservable directions"));
        assert!(text.contains("1 state, 2 independent relations"));
        assert!(assessed(&[("C", Class::Redundant)]).contains("Every tag is checked"));
    }
}
