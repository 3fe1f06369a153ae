//! Batches as they were accepted and what has become of them.

use super::{count, earliest, latest};
use crate::store::sqlite::fault::{explain, time};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{self, expand, verdict, verdict_name};
use crate::store::{
    BatchLine, BatchQuery, Cursor, Page, Removed, StoreError, Stored, Ticket, Unfinished,
};
use sqlx::SqlitePool;

type OneRow = (i64, u32, u32, Option<Vec<u8>>, Option<i64>, Option<String>);

pub(in crate::store::sqlite) async fn batch(
    pool: &SqlitePool,
    plant: &str,
    batch: &str,
) -> Result<Option<Stored>, StoreError> {
    let row: Option<OneRow> = sqlx::query_as(sql::ONE_BATCH)
        .bind(plant)
        .bind(batch)
        .fetch_optional(pool)
        .await
        .map_err(|e| explain(&e))?;
    row.map(
        |(id, revision, body, report, removed, verdict_name)| match (report, removed) {
            (Some(_), Some(removed)) => Ok(Stored::Removed(Removed {
                at: time(removed)?,
                verdict: verdict(&verdict_name.unwrap_or_default())?,
            })),
            (None, _) => Ok(Stored::Pending(Ticket {
                id,
                plant: plant.to_owned(),
                batch: batch.to_owned(),
                revision,
                body,
            })),
            (Some(report), None) => Ok(Stored::Done(Box::new(values::report(&report)?))),
        },
    )
    .transpose()
}

#[derive(sqlx::FromRow)]
struct InboxRow {
    id: i64,
    plant: String,
    batch: String,
    revision: u32,
    version: u32,
    received_ns: i64,
    body: Vec<u8>,
    again: bool,
    pending: bool,
    backfill: bool,
}

fn unfinished_of(row: InboxRow) -> Result<Unfinished, StoreError> {
    Ok(Unfinished {
        ticket: Ticket {
            id: row.id,
            plant: row.plant,
            batch: row.batch,
            revision: row.revision,
            body: row.version,
        },
        received: time(row.received_ns)?,
        body: expand(&row.body)?,
        again: row.again,
        pending: row.pending,
        backfill: row.backfill,
    })
}

pub(in crate::store::sqlite) async fn inbox(
    pool: &SqlitePool,
    plant: &str,
    batch: &str,
) -> Result<Option<Unfinished>, StoreError> {
    let row: Option<InboxRow> = sqlx::query_as(sql::INBOX)
        .bind(plant)
        .bind(batch)
        .fetch_optional(pool)
        .await
        .map_err(|e| explain(&e))?;
    // Where retention has removed the body, nothing can be made of it again.
    let row = row.filter(|row| !row.body.is_empty());
    row.map(unfinished_of).transpose()
}

pub(in crate::store::sqlite) async fn unfinished(
    pool: &SqlitePool,
    after: i64,
    limit: usize,
) -> Result<Vec<Unfinished>, StoreError> {
    let rows: Vec<InboxRow> = sqlx::query_as(sql::UNFINISHED)
        .bind(after)
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter().map(unfinished_of).collect()
}

type BatchRow = (
    i64,
    String,
    i64,
    i64,
    u32,
    Option<String>,
    Option<f64>,
    Option<u32>,
);

pub(in crate::store::sqlite) async fn batches(
    pool: &SqlitePool,
    query: BatchQuery,
) -> Result<Page<BatchLine>, StoreError> {
    let after = query.after.unwrap_or(Cursor {
        start_ns: i64::MAX,
        id: i64::MAX,
    });
    let mut rows: Vec<BatchRow> = sqlx::query_as(sql::BATCHES)
        .bind(&query.plant)
        .bind(earliest(query.from))
        .bind(latest(query.to))
        .bind(after.start_ns)
        .bind(after.id)
        .bind(query.verdict.map(verdict_name))
        .bind(count(query.limit + 1))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    let more = rows.len() > query.limit;
    rows.truncate(query.limit);
    let last = rows.last().map(|row| Cursor {
        start_ns: row.2,
        id: row.0,
    });
    let items = rows
        .into_iter()
        .map(
            |(_, batch, start, end, revision, verdict_name, statistic, degrees_of_freedom)| {
                Ok(BatchLine {
                    batch,
                    start: time(start)?,
                    end: time(end)?,
                    revision,
                    verdict: verdict_name.as_deref().map(verdict).transpose()?,
                    statistic,
                    degrees_of_freedom,
                })
            },
        )
        .collect::<Result<_, StoreError>>()?;
    Ok(Page {
        items,
        next: last.filter(|_| more),
    })
}
