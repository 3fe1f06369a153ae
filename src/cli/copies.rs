//! `backup`, `restore` and `verify`: copies of the database.

use super::EXIT_FAULTS;
use super::output::print;
use crate::store::{self, CopyError, Existing, Holdings};
use anyhow::Context;
use clap::Args;
use std::fmt::Write;
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use time::OffsetDateTime;
use time::format_description::well_known::Rfc3339;

/// Copy the database to a file.
#[derive(Args, Debug)]
pub struct Backup {
    /// The database; a service may be running on it.
    #[arg(
        long,
        env = "COUNTERPOISE_DATABASE",
        default_value = "counterpoise.sqlite"
    )]
    database: PathBuf,

    /// The file to make.
    to_file: PathBuf,

    /// Let it take the place of a file of that name.
    #[arg(long)]
    replace: bool,
}

/// Put a copy in the place of the database.
#[derive(Args, Debug)]
pub struct Restore {
    /// The copy.
    from_file: PathBuf,

    /// The database to make; no service may be running on it.
    #[arg(
        long,
        env = "COUNTERPOISE_DATABASE",
        default_value = "counterpoise.sqlite"
    )]
    database: PathBuf,

    /// Let it take the place of the database that is there, which is kept
    /// beside, as its name with `.before-restore` after it.
    #[arg(long)]
    replace: bool,
}

/// Look over a copy of the database.
#[derive(Args, Debug)]
pub struct Verify {
    /// The copy.
    file: PathBuf,
}

/// Copies the database, and prints what the copy holds.
///
/// # Errors
///
/// Where it cannot be copied.
pub async fn backup(arguments: &Backup) -> anyhow::Result<ExitCode> {
    let Backup {
        database, to_file, ..
    } = arguments;
    let existing = existing(arguments.replace);
    told(
        store::backup(database, to_file, existing).await,
        |holdings| {
            let heading = format!(
                "copied {} to {}, and verified it",
                database.display(),
                to_file.display()
            );
            describe(&heading, to_file, &holdings)
        },
    )
}

/// Puts a copy in the place of the database, and prints what that holds now.
///
/// # Errors
///
/// Where it cannot be put there.
pub async fn restore(arguments: &Restore) -> anyhow::Result<ExitCode> {
    let Restore {
        from_file,
        database,
        ..
    } = arguments;
    let existing = existing(arguments.replace);
    told(
        store::restore(from_file, database, existing).await,
        |restored| {
            let mut heading = format!(
                "verified {}, and copied it to {}",
                from_file.display(),
                database.display()
            );
            if let Some(kept) = &restored.kept {
                let _ = write!(heading, "; what was there is {}", kept.display());
            }
            describe(&heading, database, &restored.holdings)
        },
    )
}

/// Looks over a copy of the database, and prints what it holds.
///
/// # Errors
///
/// Where it cannot be looked at.
pub async fn verify(arguments: &Verify) -> anyhow::Result<ExitCode> {
    let file = &arguments.file;
    told(store::verify(file).await, |holdings| {
        describe(&format!("verified {}", file.display()), file, &holdings)
    })
}

fn existing(replace: bool) -> Existing {
    if replace {
        Existing::Replace
    } else {
        Existing::Refuse
    }
}

/// Prints what came of it, every fault of a copy on a line of its own.
fn told<T>(
    outcome: Result<T, CopyError>,
    describe: impl FnOnce(T) -> anyhow::Result<String>,
) -> anyhow::Result<ExitCode> {
    match outcome {
        Ok(done) => {
            print(describe(done)?)?;
            Ok(ExitCode::SUCCESS)
        }
        Err(CopyError::Unsound { file, faults }) => {
            let file = file.display();
            for fault in &faults {
                eprintln!("{file}: {fault}");
            }
            let noun = if faults.len() == 1 { "fault" } else { "faults" };
            eprintln!("{file}: {} {noun}; nothing was changed", faults.len());
            Ok(ExitCode::from(EXIT_FAULTS))
        }
        Err(refused) => Err(refused.into()),
    }
}

fn describe(heading: &str, file: &Path, holdings: &Holdings) -> anyhow::Result<String> {
    let Holdings {
        bytes,
        schema,
        plants,
        revisions,
        batches,
        unfinished,
        sampled,
        newest,
    } = holdings;
    let mut text = format!(
        "{heading}\n\n\
         {} holds\n  \
         plants        {plants}\n  \
         revisions     {revisions}\n  \
         batches       {batches}, of which {unfinished} wait for their result\n",
        file.display()
    );
    if let Some(newest) = newest {
        // Writing to a string cannot fail.
        let _ = writeln!(
            text,
            "  newest batch  {} of {}, until {}, received {}",
            newest.batch,
            newest.plant,
            shown(newest.end)?,
            shown(newest.received)?
        );
    }
    let _ = writeln!(
        text,
        "  read back     {sampled} of the batches, with their reports\n  \
         schema        {schema}\n  \
         size          {bytes} bytes"
    );
    Ok(text)
}

fn shown(time: OffsetDateTime) -> anyhow::Result<String> {
    time.format(&Rfc3339).context("a time has no text")
}
