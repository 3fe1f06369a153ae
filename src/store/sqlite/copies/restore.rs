//! Putting a copy in the place of a database.

use super::partial::Partial;
use super::place::{
    COMPANIONS, JOURNAL, LOG, SHARED, beside, companions, distinct, is_there, readable, taken,
    trouble, vacant, writable,
};
use super::verify::verify;
use crate::store::sqlite::fault::explain;
use crate::store::sqlite::sql;
use crate::store::{CopyError, Existing, Holdings, Restored, StoreError};
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection, SqliteLockingMode};
use sqlx::{ConnectOptions, Connection};
use std::fs::{self, Permissions};
use std::io;
use std::os::unix::fs::PermissionsExt;
use std::path::{Path, PathBuf};
use std::time::Duration;

/// After the name of the database that was there before.
const KEPT: &str = ".before-restore";

/// Whoever restores a database has to be able to write to it.
const OWNER_WRITES: u32 = 0o600;

/// Puts a copy in the place of a database that no program has open. The copy is
/// verified where it lies and again where it has been copied to. With
/// [`Existing::Replace`] the database that is there is kept beside.
///
/// # Errors
///
/// [`CopyError`]; what was there is still in its place then.
pub async fn restore(
    from: &Path,
    database: &Path,
    existing: Existing,
) -> Result<Restored, CopyError> {
    let source = readable(from)?;
    let target = writable(database)?;
    distinct(&source, &target)?;
    vacant(&target, existing)?;
    if existing == Existing::Refuse
        && let Some(companion) = companions(&target).first()
    {
        return Err(taken(companion));
    }
    let kept = beside(&target, KEPT);
    let replaces = is_there(&target);
    if (replaces || !companions(&target).is_empty())
        && let Some(earlier) = kept_already(&kept)
    {
        return Err(CopyError::refused(
            &earlier,
            "it is there from an earlier restore",
            "move it away or delete it",
        ));
    }
    verify(from).await?;
    // Held while the copy is made, so that no service starts on the old file
    // and finds itself on a file without a name.
    let held = hold(&target).await?;
    let made = copy(&source, &target).await;
    if let Some(held) = held {
        // As the last one on the file it writes the log back and removes it.
        let _ = held.close().await;
    }
    let (partial, holdings) = made?;
    let moved = set_aside(&target, &kept)?;
    let existing = if moved.target_has_second_name(&target) {
        Existing::Replace
    } else {
        Existing::Refuse
    };
    partial.name(existing).inspect_err(|_| moved.undo())?;
    partial.keep_name()?;
    Ok(Restored {
        holdings,
        kept: replaces.then_some(kept),
    })
}

async fn copy(source: &Path, target: &Path) -> Result<(Partial, Holdings), CopyError> {
    let partial = Partial::begin(target)?;
    partial.fill(source)?;
    let rights = fs::metadata(if is_there(target) { target } else { source });
    let rights = rights.map_err(|error| partial.unwritten(&error))?;
    let mode = rights.permissions().mode() | OWNER_WRITES;
    partial.permit(Permissions::from_mode(mode))?;
    partial.sync()?;
    let holdings = verify(partial.path()).await?;
    Ok((partial, holdings))
}

fn kept_already(kept: &Path) -> Option<PathBuf> {
    let mut family = companions(kept);
    family.extend(is_there(kept).then(|| kept.to_owned()));
    family.pop()
}

/// The database that is there, with everybody else locked out; `None` where
/// there is none, or none that SQLite can read.
async fn hold(target: &Path) -> Result<Option<SqliteConnection>, CopyError> {
    let in_use = |what: String| {
        let mend = "stop the service that uses it, or use an account that may write to it, and \
                    restore again";
        CopyError::refused(target, what, mend)
    };
    if is_there(target) {
        let mut connection = SqliteConnectOptions::new()
            .filename(target)
            .locking_mode(SqliteLockingMode::Exclusive)
            .busy_timeout(Duration::ZERO)
            .disable_statement_logging()
            .connect()
            .await
            .map_err(|error| in_use(explain(&error).to_string()))?;
        match lock(&mut connection).await.map_err(|error| explain(&error)) {
            Ok(()) => return Ok(Some(connection)),
            // Damaged: the very case that restoring is for.
            Err(StoreError::Corrupt(_)) => drop(connection.close().await),
            Err(other) => {
                let _ = connection.close().await;
                return Err(in_use(other.to_string()));
            }
        }
    }
    // Without a database to lock, the index that programs share is the only
    // trace of one that has it open.
    let shared = beside(target, SHARED);
    if is_there(&shared) {
        return Err(CopyError::refused(
            &shared,
            "a program may have the database open, or was killed, and the database itself is \
             missing or too damaged to tell",
            "make sure that no service uses it, delete this file, which holds no data, and \
             restore again",
        ));
    }
    Ok(None)
}

/// The lock stays with the connection after the transaction: its locking mode
/// is exclusive.
async fn lock(connection: &mut SqliteConnection) -> Result<(), sqlx::Error> {
    sqlx::query(sql::BEGIN_EXCLUSIVE)
        .execute(&mut *connection)
        .await?;
    sqlx::query(sql::ROLLBACK).execute(connection).await?;
    Ok(())
}

/// What was given other names, in order.
struct Moved(Vec<(PathBuf, PathBuf)>);

impl Moved {
    /// Whether what is to be replaced is still there under its own name.
    fn target_has_second_name(&self, target: &Path) -> bool {
        self.0.iter().any(|(from, _)| from == target) && is_there(target)
    }

    fn undo(&self) {
        for (from, to) in self.0.iter().rev() {
            let _ = if is_there(from) {
                fs::remove_file(to)
            } else {
                fs::rename(to, from)
            };
        }
    }
}

/// Keeps the database that is there under another name too, so that there is
/// one under its own at every moment, and moves a log or journal that could not
/// be written back with it: beside another database it would destroy that.
fn set_aside(target: &Path, kept: &Path) -> Result<Moved, CopyError> {
    let mut moved = Moved(Vec::new());
    let outcome = (|| -> io::Result<()> {
        if is_there(target) {
            fs::hard_link(target, kept).or_else(|_| fs::rename(target, kept))?;
            moved.0.push((target.to_owned(), kept.to_owned()));
        }
        for suffix in COMPANIONS {
            let from = beside(target, suffix);
            if !is_there(&from) {
                continue;
            }
            let is_empty = fs::metadata(&from)?.len() == 0;
            if matches!(suffix, LOG | JOURNAL) && !is_empty {
                let to = beside(kept, suffix);
                fs::rename(&from, &to)?;
                moved.0.push((from, to));
            } else {
                fs::remove_file(&from)?;
            }
        }
        Ok(())
    })();
    match outcome {
        Ok(()) => Ok(moved),
        Err(error) => {
            moved.undo();
            let mend = "look at the disk and the rights of the folder";
            Err(trouble(target, "cannot be set aside", &error, mend))
        }
    }
}
