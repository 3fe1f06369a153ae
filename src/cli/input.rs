//! Reading the files that a command names.

use super::EXIT_FAULTS;
use crate::ingest::{self, Refusal};
use crate::plant::{self, Batch, Fault, Format, PlantFile, Severity};
use anyhow::{Context, bail};
use std::fs::{self, File};
use std::io::{self, BufRead, BufReader, Read as _};
use std::path::Path;
use std::process::ExitCode;
use time::OffsetDateTime;
use time::macros::datetime;

/// A file may hold any time: without a service there is no "now" that a batch
/// could be ahead of, and the same files give the same answer on every day.
const END_OF_TIME: OffsetDateTime = datetime!(2200-01-01 0:00 UTC);

/// A plant file that can work, or the faults of one that cannot.
pub(super) enum Read {
    Plant(Box<PlantFile>),
    Faulty(Vec<Fault>),
}

/// What of a plant file's faults is printed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Show {
    /// Errors and warnings.
    All,
    /// Nothing where the file can work.
    Refusals,
    /// Nothing.
    Nothing,
}

/// Reads a plant file, TOML or JSON by its extension, and prints its faults as
/// a compiler would.
pub(super) fn plant_file(path: &Path, show: Show) -> anyhow::Result<Read> {
    let format = match path.extension().and_then(|extension| extension.to_str()) {
        Some("toml") => Format::Toml,
        Some("json") => Format::Json,
        _ => bail!("{}: a plant file is called .toml or .json", path.display()),
    };
    let source = fs::read_to_string(path).with_context(|| path.display().to_string())?;
    let read = plant::read(&source, format);
    let faults: &[Fault] = match &read {
        Ok(file) if show == Show::All => &file.warnings,
        Err(faults) if show != Show::Nothing => &faults.0,
        _ => &[],
    };
    for fault in faults {
        eprintln!(
            "{}",
            plant::render(fault, &source, &path.display().to_string())
        );
    }
    Ok(match read {
        Ok(file) => Read::Plant(Box::new(file)),
        Err(faults) => {
            let errors = faults
                .0
                .iter()
                .filter(|fault| fault.severity == Severity::Error)
                .count();
            let noun = if errors == 1 { "error" } else { "errors" };
            eprintln!("{}: {errors} {noun}; nothing was done", path.display());
            Read::Faulty(faults.0)
        }
    })
}

/// One batch of a file: that of this name, or without one the first. `None` after
/// faults, which have been printed.
pub(super) fn batch(path: &Path, name: Option<&str>) -> anyhow::Result<Option<Batch>> {
    let shown = path.display().to_string();
    let mut source = open(path)?;
    if !is_stream(path) {
        let mut body = Vec::new();
        source
            .read_to_end(&mut body)
            .with_context(|| shown.clone())?;
        let batch = match parse(&body) {
            Ok(batch) => batch,
            Err(refusal) => {
                show(&refusal, &String::from_utf8_lossy(&body), &shown);
                return Ok(None);
            }
        };
        if let Some(name) = name.filter(|name| **name != batch.name) {
            bail!(
                "{shown} holds the batch \"{}\" and not \"{name}\"",
                batch.name
            );
        }
        return Ok(Some(batch));
    }
    for (index, line) in source.split(b'\n').enumerate() {
        let line = line.with_context(|| shown.clone())?;
        if line.trim_ascii().is_empty() {
            continue;
        }
        match parse(&line) {
            Ok(batch) if name.is_none_or(|name| name == batch.name) => return Ok(Some(batch)),
            Ok(_) => {}
            Err(refusal) => {
                let place = format!("{shown} (line {})", index + 1);
                show(&refusal, &String::from_utf8_lossy(&line), &place);
                return Ok(None);
            }
        }
    }
    match name {
        Some(name) => bail!("{shown} holds no batch \"{name}\""),
        None => bail!("{shown} holds no batch"),
    }
}

/// A batch from its bytes.
pub(super) fn parse(body: &[u8]) -> Result<Batch, Refusal> {
    ingest::parse(body, END_OF_TIME).map(|parsed| parsed.batch)
}

/// A file, or standard input where it is called `-`.
pub(super) fn open(path: &Path) -> anyhow::Result<Box<dyn BufRead>> {
    if path.as_os_str() == "-" {
        return Ok(Box::new(io::stdin().lock()));
    }
    let file = File::open(path).with_context(|| path.display().to_string())?;
    Ok(Box::new(BufReader::new(file)))
}

/// Whether a file holds one batch per line, by its extension.
pub(super) fn is_stream(path: &Path) -> bool {
    let extension = path.extension().and_then(|extension| extension.to_str());
    matches!(extension, Some("ndjson" | "jsonl"))
}

/// Prints the faults of a batch as a compiler would.
pub(super) fn show(refusal: &Refusal, source: &str, name: &str) {
    for fault in &refusal.faults {
        eprintln!("{}", plant::render(fault, source, name));
    }
}

/// The exit code of faulty input.
pub(super) fn faulty() -> ExitCode {
    ExitCode::from(EXIT_FAULTS)
}
