//! Reading the files that a command names.

use super::EXIT_FAULTS;
use crate::plant::{self, Fault, Format, PlantFile, Severity};
use anyhow::{Context, bail};
use std::fs;
use std::path::Path;
use std::process::ExitCode;

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

/// The exit code of faulty input.
pub(super) fn faulty() -> ExitCode {
    ExitCode::from(EXIT_FAULTS)
}
