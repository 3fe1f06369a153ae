//! The command line with the settings file that it names, and `config`.

use super::output::print;
use super::{Cli, EXIT_FAULTS};
use crate::config::{self, Unusable};
use anyhow::Context;
use clap::{Args, CommandFactory, FromArgMatches};
use std::ffi::OsString;
use std::path::PathBuf;
use std::process::ExitCode;

/// The settings file with every option and its default.
const SAMPLE: &str = include_str!("../../deploy/counterpoise.toml");

/// The subcommand that has settings.
const SERVE: &str = "serve";

/// Print the settings file with every option and its default, or check one.
#[derive(Args, Debug)]
pub struct Settings {
    /// Look this file over instead: every fault in it.
    #[arg(long, value_name = "FILE")]
    check: Option<PathBuf>,
}

/// Reads the command line of this process, and the settings file that it names.
/// A wrong command line ends the process with code 2, as does asking for help
/// with 0.
///
/// # Errors
///
/// [`Unusable`], where the settings file or the environment cannot be used.
pub fn parse() -> Result<Cli, Unusable> {
    let line: Vec<OsString> = std::env::args_os().collect();
    let program = Cli::command();
    let serves = line.get(1).is_some_and(|word| word == SERVE);
    let line = config::with_settings(&program, SERVE, line)?;
    if serves {
        let names = std::env::vars_os().map(|(name, _)| name);
        let strange = config::strange_variables(&program, names);
        if !strange.is_empty() {
            return Err(Unusable::Faults(strange));
        }
    }
    let cli = program
        .try_get_matches_from(line)
        .and_then(|matches| Cli::from_arg_matches(&matches));
    Ok(cli.unwrap_or_else(|error| error.exit()))
}

/// Prints the sample, or what is wrong with a file.
///
/// # Errors
///
/// Where the file cannot be read or nothing be printed.
pub fn settings(arguments: &Settings) -> anyhow::Result<ExitCode> {
    let Some(path) = &arguments.check else {
        print(SAMPLE)?;
        return Ok(ExitCode::SUCCESS);
    };
    let program = Cli::command();
    let line = ["counterpoise".into(), SERVE.into(), "--config".into()];
    let line = line.into_iter().chain([path.clone().into_os_string()]);
    let line = match config::with_settings(&program, SERVE, line.collect()) {
        Ok(line) => line,
        Err(Unusable::Faults(faults)) => {
            eprintln!("{}", faults.join("\n"));
            return Ok(ExitCode::from(EXIT_FAULTS));
        }
        Err(error) => return Err(error.into()),
    };
    if let Err(error) = program.try_get_matches_from(line) {
        // What belongs together and does not stand together.
        error.print().context("nothing can be printed")?;
        return Ok(ExitCode::from(EXIT_FAULTS));
    }
    print(format!("{}: no faults\n", path.display()))?;
    Ok(ExitCode::SUCCESS)
}
