//! Whether a file is a whole database of this program.
//!
//! The file is opened as one that nobody changes: nothing is locked, nothing is
//! written, nothing is made beside it.

use super::place::{companions, readable, trouble};
use crate::store::sqlite::fault::{explain, time};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{expand, report, verdict_name};
use crate::store::{CopyError, Holdings, NewestBatch, StoreError};
use sqlx::migrate::Migrator;
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection};
use sqlx::{ConnectOptions, Connection};
use std::fs::File;
use std::io::Read;
use std::path::Path;

/// What to do about a copy that is not sound.
const TAKE_ANOTHER: &str = "do not rely on it: take another copy";

/// Batches whose body and report are read back, evenly over all of them.
const SAMPLE: u64 = 1000;

/// The schemas that this program knows.
static KNOWN: Migrator = sqlx::migrate!("./migrations");

/// Verifies a copy of a database: that it is whole by its own structure and its
/// references, that its schema is known, that every batch in it waits or has a
/// result, and, in a sample of a thousand, that bodies and reports can be read.
///
/// # Errors
///
/// [`CopyError::Unsound`] with what is wrong, [`CopyError::Refused`] where the
/// file cannot be looked at or is in use.
pub async fn verify(file: &Path) -> Result<Holdings, CopyError> {
    let found = readable(file)?;
    if let Some(companion) = companions(&found).first() {
        return Err(CopyError::refused(
            file,
            format!(
                "{} lies beside it: a program has it open, or did not end in order",
                companion.display()
            ),
            "make a copy with `counterpoise backup`, and name that",
        ));
    }
    let bytes = check_length(file, &found)?;
    let mut connection = SqliteConnectOptions::new()
        .filename(&found)
        .immutable(true)
        .read_only(true)
        .disable_statement_logging()
        .connect()
        .await
        .map_err(|error| judged(file, &error))?;
    let holdings = look_over(&mut connection, file, bytes).await;
    let _ = connection.close().await;
    holdings
}

/// Refuses a database whose schema this program does not know; answers the
/// number of its newest migration.
pub(super) async fn known_schema(on: &mut SqliteConnection, file: &Path) -> Result<i64, CopyError> {
    let ours: i64 = sqlx::query_scalar(sql::TABLES_OF_OURS)
        .fetch_one(&mut *on)
        .await
        .map_err(|error| judged(file, &error))?;
    if ours != 4 {
        let what = "it is a database, but not one of counterpoise: name another file";
        return Err(CopyError::unsound(file, what));
    }
    let applied: Vec<(i64, bool, Vec<u8>)> = sqlx::query_as(sql::MIGRATIONS)
        .fetch_all(on)
        .await
        .map_err(|error| judged(file, &error))?;
    let newest_known = KNOWN.iter().map(|known| known.version).max().unwrap_or(0);
    let newest = applied.last().map_or(0, |(version, ..)| *version);
    if newest > newest_known {
        return Err(CopyError::unsound(
            file,
            format!(
                "a newer version of counterpoise wrote it: its schema is {newest}, and this one \
                 knows up to {newest_known}; use that version or a newer one"
            ),
        ));
    }
    for (version, success, checksum) in &applied {
        let known = KNOWN.iter().find(|known| known.version == *version);
        if !success || known.is_none_or(|known| *known.checksum != checksum[..]) {
            let what = format!(
                "its schema {version} is not the one of this name that this version of \
                 counterpoise makes; use the version that wrote it"
            );
            return Err(CopyError::unsound(file, what));
        }
    }
    Ok(newest)
}

/// What an error of SQLite says of a file.
pub(super) fn judged(file: &Path, error: &sqlx::Error) -> CopyError {
    match explain(error) {
        StoreError::Corrupt(what) | StoreError::Unusable(what) => {
            CopyError::unsound(file, format!("it is damaged ({what}); {TAKE_ANOTHER}"))
        }
        other => CopyError::refused(file, other.to_string(), "look at the disk and try again"),
    }
}

/// The length of a file, refused where its own head says another. Of SQLite's
/// file format: the text at the start, the page size as two bytes at 16 (1 is
/// 65536), the number of pages as four bytes at 28, all with the high byte first.
fn check_length(file: &Path, found: &Path) -> Result<u64, CopyError> {
    let unread = |e| trouble(file, "cannot be read", &e, "look at the disk and try again");
    let mut opened = File::open(found).map_err(unread)?;
    let bytes = opened.metadata().map_err(unread)?.len();
    let mut head = Vec::new();
    let mut start = opened.by_ref().take(32);
    start.read_to_end(&mut head).map_err(unread)?;
    if !head.starts_with(b"SQLite format 3\0") || head.len() < 32 {
        let what = format!("it is no database; {TAKE_ANOTHER}");
        return Err(CopyError::unsound(file, what));
    }
    let number = |range| {
        let digits: &[u8] = &head[range];
        digits
            .iter()
            .fold(0, |sum, &digit| sum * 256 + u64::from(digit))
    };
    let page = match number(16..18) {
        1 => 65_536,
        size => size,
    };
    let stated = page * number(28..32);
    if bytes < stated {
        let what = format!("it is cut short: {bytes} of {stated} bytes; {TAKE_ANOTHER}");
        return Err(CopyError::unsound(file, what));
    }
    Ok(bytes)
}

/// What can be wrong hides the rest where it is the structure, and is told with
/// the rest where it is not.
async fn look_over(
    on: &mut SqliteConnection,
    file: &Path,
    bytes: u64,
) -> Result<Holdings, CopyError> {
    let schema = known_schema(on, file).await?;
    let faults = structure(on).await.map_err(|e| judged(file, &e))?;
    if !faults.is_empty() {
        return Err(unsound(file, faults));
    }
    let mut faults = references(on).await.map_err(|e| judged(file, &e))?;
    let sampled = sample(on, &mut faults)
        .await
        .map_err(|e| judged(file, &e))?;
    if !faults.is_empty() {
        return Err(unsound(file, faults));
    }
    let held = held(
        on,
        Holdings {
            bytes,
            schema,
            plants: 0,
            revisions: 0,
            batches: 0,
            unfinished: 0,
            sampled,
            newest: None,
        },
    );
    held.await.map_err(|error| judged(file, &error))
}

fn unsound(file: &Path, mut faults: Vec<String>) -> CopyError {
    if let Some(last) = faults.last_mut() {
        last.push_str("; ");
        last.push_str(TAKE_ANOTHER);
    }
    CopyError::Unsound {
        file: file.to_owned(),
        faults,
    }
}

async fn structure(on: &mut SqliteConnection) -> Result<Vec<String>, sqlx::Error> {
    let lines: Vec<String> = sqlx::query_scalar(sql::INTEGRITY_CHECK)
        .fetch_all(on)
        .await?;
    let faults = lines.into_iter().filter(|line| line != "ok");
    Ok(faults
        .map(|line| format!("it is damaged: {line}"))
        .collect())
}

/// Rows that point at nothing, and batches that are neither waiting nor done.
async fn references(on: &mut SqliteConnection) -> Result<Vec<String>, sqlx::Error> {
    let dangling: Vec<(String, String, i64)> =
        sqlx::query_as(sql::DANGLING).fetch_all(&mut *on).await?;
    let mut faults: Vec<String> = dangling
        .into_iter()
        .map(|(table, parent, count)| {
            format!("rows of {table} that belong to missing rows of {parent}: {count}")
        })
        .collect();
    let half: i64 = sqlx::query_scalar(sql::HALF_BATCHES).fetch_one(on).await?;
    if half != 0 {
        faults.push(format!(
            "accepted batches that neither wait for a result nor have one, or do both: {half}"
        ));
    }
    Ok(faults)
}

type SampleRow = (i64, String, Vec<u8>, Option<String>, Option<Vec<u8>>);

/// Reads batches back; answers how many.
async fn sample(on: &mut SqliteConnection, faults: &mut Vec<String>) -> Result<u64, sqlx::Error> {
    let (first, last): (i64, i64) = sqlx::query_as(sql::TICKETS).fetch_one(&mut *on).await?;
    let span = u64::try_from(last.saturating_sub(first)).unwrap_or(0);
    let mut read = 0;
    let mut after = i64::MIN;
    for step in 0..=SAMPLE {
        // In 128 bits: tickets may be any number of 64.
        let offset = u128::from(span) * u128::from(step) / u128::from(SAMPLE);
        let from = first.saturating_add(i64::try_from(offset).unwrap_or(i64::MAX));
        if from <= after {
            continue;
        }
        let row: Option<SampleRow> = sqlx::query_as(sql::SAMPLE)
            .bind(from)
            .fetch_optional(&mut *on)
            .await?;
        let Some((id, batch, body, verdict, frame)) = row else {
            break;
        };
        after = id;
        read += 1;
        // Nothing at all stands where retention has removed something.
        if !body.is_empty()
            && let Err(error) = expand(&body)
        {
            faults.push(format!("the body of batch {batch} is unreadable: {error}"));
        }
        if let (Some(verdict), Some(frame)) = (verdict, frame)
            && !frame.is_empty()
        {
            match report(&frame) {
                Err(error) => {
                    faults.push(format!(
                        "the report of batch {batch} is unreadable: {error}"
                    ));
                }
                Ok(report) if report.batch != batch || verdict_name(report.verdict) != verdict => {
                    faults.push(format!("the report of batch {batch} is another's"));
                }
                Ok(_) => {}
            }
        }
    }
    Ok(read)
}

/// The totals put in.
async fn held(on: &mut SqliteConnection, with: Holdings) -> Result<Holdings, sqlx::Error> {
    let (plants, revisions, batches, unfinished): (i64, i64, i64, i64) =
        sqlx::query_as(sql::TOTALS).fetch_one(&mut *on).await?;
    let newest: Option<(String, String, i64, i64)> =
        sqlx::query_as(sql::NEWEST_BATCH).fetch_optional(on).await?;
    let newest = newest
        .map(|(plant, batch, end, received)| {
            Ok::<_, StoreError>(NewestBatch {
                plant,
                batch,
                end: time(end)?,
                received: time(received)?,
            })
        })
        .transpose()
        .map_err(|error| sqlx::Error::Decode(Box::new(error)))?;
    Ok(Holdings {
        plants: plants.unsigned_abs(),
        revisions: revisions.unsigned_abs(),
        batches: batches.unsigned_abs(),
        unfinished: unfinished.unsigned_abs(),
        newest,
        ..with
    })
}
