//! The command line.
//!
//! Exit codes: 0, done, whatever the verdict; 1, the plant file, a batch, the settings or a
//! copy of the database has faults; 2, the command line itself (from `clap`); 3, anything else, such as
//! a file that cannot be read. A reader that closes our output early, as `head`
//! does, ends the work with 0.

mod check;
mod copies;
mod demo;
mod found;
mod influences;
mod input;
mod line_up;
mod moved;
mod output;
mod reconcile;
mod settings;
mod summary;
mod suspects;
mod table;
mod tell_apart;
mod text;
mod token;
mod words;

pub use check::{Check, check};
pub use copies::{Backup, Restore, Verify, backup, restore, verify};
pub use demo::{Demo, demo};
pub use influences::{Influences, influences};
pub use output::Unread;
pub use reconcile::{Reconcile, reconcile};
pub use settings::{Settings, parse, settings};
pub use tell_apart::{TellApart, tell_apart};
pub use token::{Tokens, tokens};

use crate::config::Config;
use clap::{Parser, Subcommand};
use std::path::{Path, PathBuf};
use std::process::ExitCode;

/// Exit code where the plant file, a batch, the settings or a copy of the database has
/// faults.
pub const EXIT_FAULTS: u8 = 1;

/// Exit code of anything else that went wrong.
pub const EXIT_TROUBLE: u8 = 3;

/// The last line of everything that a person may act on.
pub const CAUTION: &str = "Advisory only, not for protection or safety functions.";

/// The line after it where causes are named.
const DECIDE: &str = "Site procedures, local codes and licensed engineers decide.";

/// Reconciles the measurements of steam and power plants.
#[derive(Debug, Parser)]
#[command(
    name = "counterpoise",
    version,
    about,
    after_help = "Exit codes: 0 done, whatever the verdict; 1 the plant file, a batch, the settings or a copy of the database has faults; 2 wrong command line; 3 anything else.\n\nAdvisory only, not for protection or safety functions."
)]
pub struct Cli {
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

/// What to do.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Run the service.
    Serve(Config),
    /// Look at a plant file: every fault, or what its tags can determine.
    Check(Check),
    /// Reconcile batches from a file, without a service.
    Reconcile(Reconcile),
    /// Print the readings that a reconciled value hangs on.
    Influences(Influences),
    /// Print which faults a plant's readings tell apart, and which they mix up.
    TellApart(TellApart),
    /// Serve the demo plant and post its day of batches.
    Demo(Demo),
    /// Copy the database to a file, beside a service that may be running.
    Backup(Backup),
    /// Put a copy in the place of the database, while no service runs.
    Restore(Restore),
    /// Look over a copy of the database: whole, readable, of a known schema?
    Verify(Verify),
    /// Make, list and revoke tokens; beside a service that may be running.
    Token(Tokens),
    /// Print a settings file with every option, or look one over.
    Config(Settings),
    /// Print the OpenAPI document of the service.
    Openapi,
    /// Make the demo's batches, and the truth beside them, again from their seed.
    #[command(hide = true)]
    MakeDemoFixture {
        /// Directory to write into.
        #[arg(long)]
        out: PathBuf,
    },
}

/// Makes the demo's batches again.
///
/// # Errors
///
/// Where they cannot be written.
pub fn make_demo_fixture(out: &Path) -> anyhow::Result<ExitCode> {
    crate::demo::make_fixture(out)?;
    Ok(ExitCode::SUCCESS)
}

/// Prints the OpenAPI document.
///
/// # Errors
///
/// Where it cannot be written.
pub fn openapi() -> anyhow::Result<ExitCode> {
    output::print(crate::server::openapi()? + "\n")?;
    Ok(ExitCode::SUCCESS)
}
