//! Taking a copy of a database that a service may be writing to.
//!
//! `VACUUM INTO` and not the online backup interface: it is one read
//! transaction from the first page to the last. In WAL mode that is a snapshot
//! which no writer waits for, while a copy by the backup interface starts anew
//! at every commit of another program, and so may never end under load. It
//! reads every row instead of copying pages, so that a damaged page is noticed
//! and not handed on, and what it writes is one packed file without a log. Its
//! price: the write-ahead log cannot be started over while it runs, and grows by
//! what is written meanwhile.

use super::partial::Partial;
use super::place::{companions, distinct, readable, trouble, vacant, writable};
use super::verify::{judged, known_schema, verify};
use crate::store::sqlite::fault::explain;
use crate::store::sqlite::sql;
use crate::store::{CopyError, Existing, Holdings, StoreError};
use sqlx::sqlite::SqliteConnectOptions;
use sqlx::{ConnectOptions, Connection};
use std::fs;
use std::path::Path;
use std::time::Duration;

/// How long a lock is waited for: of a service that starts, or recovers its log.
const LOCK_TIMEOUT: Duration = Duration::from_secs(5);

/// Copies a database to a file, beside a service that may be running. What was
/// acknowledged before the call is in the copy, and every batch in it is whole.
/// Answers what the copy holds, after verifying it.
///
/// # Errors
///
/// [`CopyError`]; there is no new file then.
pub async fn backup(database: &Path, to: &Path, existing: Existing) -> Result<Holdings, CopyError> {
    let source = readable(database)?;
    let target = writable(to)?;
    distinct(&source, &target)?;
    vacant(&target, existing)?;
    if let Some(companion) = companions(&target).first() {
        return Err(CopyError::refused(
            companion,
            "it belongs to a database of that name, which may be in use",
            "name another file",
        ));
    }
    let partial = Partial::begin(&target)?;
    write(&source, database, partial.path()).await?;
    let rights = fs::metadata(&source)
        .map_err(|e| trouble(database, "cannot be looked at", &e, "look at its rights"))?;
    partial.permit(rights.permissions())?;
    partial.sync()?;
    // The copy was made of what could be read: what is wrong with it was wrong
    // before.
    let holdings = verify(partial.path()).await.map_err(|error| match error {
        CopyError::Unsound { faults, .. } => CopyError::Unsound {
            file: database.to_owned(),
            faults,
        },
        other => other,
    })?;
    partial.name(existing)?;
    partial.keep_name()?;
    Ok(holdings)
}

async fn write(source: &Path, database: &Path, to: &Path) -> Result<(), CopyError> {
    let Some(name) = to.to_str() else {
        return Err(CopyError::refused(
            to,
            "the name is not UTF-8",
            "name another file",
        ));
    };
    let mut connection = SqliteConnectOptions::new()
        .filename(source)
        .busy_timeout(LOCK_TIMEOUT)
        .disable_statement_logging()
        .connect()
        .await
        .map_err(|error| judged(database, &error))?;
    let copied = async {
        known_schema(&mut connection, database).await?;
        let copied = sqlx::query(sql::COPY_INTO).bind(name);
        let copied = copied.execute(&mut connection).await;
        copied.map(drop).map_err(|error| match explain(&error) {
            // It reads there and writes here; what is full or refuses is here.
            StoreError::Unavailable(what) => {
                let mend = "free space on that disk, or name another file";
                CopyError::refused(to, format!("cannot be written: {what}"), mend)
            }
            _ => judged(database, &error),
        })
    };
    let copied = copied.await;
    let _ = connection.close().await;
    copied
}
