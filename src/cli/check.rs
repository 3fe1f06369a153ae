//! `check`: every fault of a plant file, or what its tags can determine.

use super::CAUTION;
use super::input::{self, Read, Show};
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
                println!("{}", serde_json::json!({ "faults": faults }));
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
                println!("{}", serde_json::to_string_pretty(&assessment)?);
            } else {
                print!("{}", describe(&title, &assessment));
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
         {} states, {} independent relations, {} observations: {} degrees of freedom, {} unobservable directions\n",
        assessment.plant,
        assessment.operating_point,
        assessment.states,
        assessment.relations,
        assessment.observations,
        assessment.degrees_of_freedom,
        assessment.unobservable_directions,
    );
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
    let unchecked: Vec<&str> = assessment
        .tags
        .iter()
        .filter(|(_, tag)| matches!(tag.class, Class::NotRedundant | Class::HardlyRedundant))
        .map(|(name, _)| name.as_str())
        .collect();
    if unchecked.is_empty() {
        let _ = writeln!(text, "Every tag is checked by others.");
    } else {
        let _ = writeln!(text, "Tags that nothing checks: {}", unchecked.join(", "));
    }
    let _ = writeln!(text, "\n{CAUTION}");
    text
}
