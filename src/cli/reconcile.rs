//! `reconcile`: batches from a file, reports to standard output.

use super::input::{self, Read as PlantRead, Show};
use super::output::print;
use super::text;
use crate::ingest::Refusal;
use crate::pipeline::{self, Compiled};
use crate::report::Report;
use crate::server::Problem;
use anyhow::Context;
use clap::{Args, ValueEnum};
use std::io::{BufRead, Read};
use std::path::PathBuf;
use std::process::ExitCode;

/// Reconcile batches from a file.
#[derive(Args, Debug)]
pub struct Reconcile {
    /// The plant file, .toml or .json.
    plant_file: PathBuf,

    /// The batch: JSON, or one per line where it is called .ndjson or .jsonl or
    /// `--format ndjson` is given; `-` reads standard input.
    batch_file: PathBuf,

    /// Form of the reports.
    #[arg(long, default_value = "text")]
    format: ReconcileFormat,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
enum ReconcileFormat {
    /// For people.
    Text,
    /// The report, exactly.
    Json,
    /// Batches one per line in, reports one per line out; a problem where a
    /// line is no batch.
    Ndjson,
}

/// Reconciles batches and prints their reports.
///
/// # Errors
///
/// Where a file cannot be read or the reports cannot be written.
pub fn reconcile(arguments: &Reconcile) -> anyhow::Result<ExitCode> {
    // The warnings of a plant file are for `check`; here they would stand
    // before every report.
    let PlantRead::Plant(file) = input::plant_file(&arguments.plant_file, Show::Refusals)? else {
        return Ok(input::faulty());
    };
    let plant = Compiled::new(file.plant, 1);
    let name = arguments.batch_file.display().to_string();
    let mut source = input::open(&arguments.batch_file)?;
    let many =
        arguments.format == ReconcileFormat::Ndjson || input::is_stream(&arguments.batch_file);
    if many {
        lines(&plant, source, &name, arguments.format)
    } else {
        let mut body = Vec::new();
        source
            .read_to_end(&mut body)
            .with_context(|| name.clone())?;
        match one(&plant, &body) {
            Ok(report) => {
                print(match arguments.format {
                    ReconcileFormat::Text => text::describe(&report),
                    _ => serde_json::to_string_pretty(&report)? + "\n",
                })?;
                Ok(ExitCode::SUCCESS)
            }
            Err(refusal) => {
                input::show(&refusal, &String::from_utf8_lossy(&body), &name);
                Ok(input::faulty())
            }
        }
    }
}

fn one(plant: &Compiled, body: &[u8]) -> Result<Report, Refusal> {
    let batch = input::parse(body)?;
    Ok(pipeline::reconcile(plant, &batch))
}

fn lines(
    plant: &Compiled,
    source: Box<dyn BufRead>,
    name: &str,
    format: ReconcileFormat,
) -> anyhow::Result<ExitCode> {
    let mut all_read = true;
    for (index, line) in source.split(b'\n').enumerate() {
        let line = line.with_context(|| name.to_owned())?;
        if line.trim_ascii().is_empty() {
            continue;
        }
        match one(plant, &line) {
            Ok(report) if format == ReconcileFormat::Text => {
                print(text::describe(&report) + "\n")?;
            }
            Ok(report) => print(serde_json::to_string(&report)? + "\n")?,
            Err(refusal) => {
                all_read = false;
                let name = format!("{name} (line {})", index + 1);
                input::show(&refusal, &String::from_utf8_lossy(&line), &name);
                if format != ReconcileFormat::Text {
                    // In the place of the report, as the service answers.
                    let mut problem = Problem::from(refusal).on_line(index + 1).document();
                    problem.push(b'\n');
                    print(problem)?;
                }
            }
        }
    }
    Ok(if all_read {
        ExitCode::SUCCESS
    } else {
        input::faulty()
    })
}
