//! Replays and what they made.

use super::count;
use crate::store::sqlite::fault::{corrupt, explain, time};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{replay_state, report, verdict};
use crate::store::{
    BatchLine, Cursor, NewReplay, Page, ReplayRow, ReplayWith, ReplayedBatch, StoreError,
};
use sqlx::SqlitePool;
use sqlx::sqlite::SqliteConnection;
use std::sync::Arc;

#[derive(sqlx::FromRow)]
struct Row {
    id: i64,
    plant: String,
    from_ns: i64,
    to_ns: i64,
    revision: Option<u32>,
    media_type: Option<String>,
    source: Option<String>,
    who: String,
    reason: String,
    at_ns: i64,
    state: String,
    batches: i64,
    made: i64,
    ended_ns: Option<i64>,
}

fn replay_of(row: Row) -> Result<ReplayRow, StoreError> {
    let with = match (row.revision, row.media_type, row.source) {
        (Some(revision), ..) => ReplayWith::Revision(revision),
        (None, Some(media_type), Some(source)) => ReplayWith::Candidate { media_type, source },
        _ => return Err(corrupt(format!("replay {} is made with nothing", row.id))),
    };
    Ok(ReplayRow {
        id: row.id,
        new: NewReplay {
            plant: row.plant,
            from: time(row.from_ns)?,
            to: time(row.to_ns)?,
            with,
            by: row.who,
            reason: row.reason,
            at: time(row.at_ns)?,
            deed: None,
        },
        state: replay_state(&row.state)?,
        batches: row.batches.unsigned_abs(),
        made: row.made.unsigned_abs(),
        ended: row.ended_ns.map(time).transpose()?,
    })
}

/// One replay, on the writer's own connection.
pub(in crate::store::sqlite) async fn kept_replay(
    on: &mut SqliteConnection,
    id: i64,
) -> Result<Option<ReplayRow>, sqlx::Error> {
    let row: Option<Row> = sqlx::query_as(sql::ONE_REPLAY)
        .bind(id)
        .fetch_optional(on)
        .await?;
    row.map(replay_of)
        .transpose()
        .map_err(|error| sqlx::Error::Decode(Box::new(error)))
}

async fn rows(
    pool: &SqlitePool,
    plant: &str,
    id: Option<i64>,
    before: Option<i64>,
    limit: usize,
) -> Result<Vec<ReplayRow>, StoreError> {
    let rows: Vec<Row> = sqlx::query_as(sql::REPLAYS)
        .bind(plant)
        .bind(id)
        .bind(before)
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter().map(replay_of).collect()
}

pub(in crate::store::sqlite) async fn replay(
    pool: &SqlitePool,
    plant: &str,
    id: i64,
) -> Result<Option<ReplayRow>, StoreError> {
    Ok(rows(pool, plant, Some(id), None, 1).await?.pop())
}

pub(in crate::store::sqlite) async fn replays(
    pool: &SqlitePool,
    plant: &str,
    before: Option<i64>,
    limit: usize,
) -> Result<Vec<ReplayRow>, StoreError> {
    rows(pool, plant, None, before, limit).await
}

pub(in crate::store::sqlite) async fn running_replays(
    pool: &SqlitePool,
) -> Result<Vec<ReplayRow>, StoreError> {
    let rows: Vec<Row> = sqlx::query_as(sql::RUNNING_REPLAYS)
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter().map(replay_of).collect()
}

pub(in crate::store::sqlite) async fn unreplayed(
    pool: &SqlitePool,
    id: i64,
    limit: usize,
) -> Result<Vec<String>, StoreError> {
    sqlx::query_scalar(sql::UNREPLAYED)
        .bind(id)
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))
}

#[derive(sqlx::FromRow)]
struct ReplayedRow {
    id: i64,
    batch: String,
    start_ns: i64,
    end_ns: i64,
    revision: u32,
    verdict: String,
    statistic: Option<f64>,
    degrees_of_freedom: Option<u32>,
    before: Vec<u8>,
    after: Vec<u8>,
}

pub(in crate::store::sqlite) async fn replayed(
    pool: &SqlitePool,
    id: i64,
    after: Option<Cursor>,
    limit: usize,
) -> Result<Page<ReplayedBatch>, StoreError> {
    let after = after.unwrap_or(Cursor {
        start_ns: i64::MIN,
        id: i64::MIN,
    });
    let mut rows: Vec<ReplayedRow> = sqlx::query_as(sql::REPLAYED)
        .bind(id)
        .bind(after.start_ns)
        .bind(after.id)
        .bind(count(limit.saturating_add(1)))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    let more = rows.len() > limit;
    rows.truncate(limit);
    let last = rows.last().map(|row| Cursor {
        start_ns: row.start_ns,
        id: row.id,
    });
    let items = rows.into_iter().map(|row| {
        Ok(ReplayedBatch {
            line: BatchLine {
                batch: row.batch,
                start: time(row.start_ns)?,
                end: time(row.end_ns)?,
                revision: row.revision,
                verdict: Some(verdict(&row.verdict)?),
                statistic: row.statistic,
                degrees_of_freedom: row.degrees_of_freedom,
            },
            before: Arc::new(report(&row.before)?),
            after: Arc::new(report(&row.after)?),
        })
    });
    Ok(Page {
        items: items.collect::<Result<_, StoreError>>()?,
        next: last.filter(|_| more),
    })
}
