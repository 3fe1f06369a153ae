//! Samples, open periods and backfills.

use super::count;
use crate::plant::{Grade, Quality, Sample};
use crate::store::sqlite::fault::{corrupt, explain, nanoseconds, time};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::expand;
use crate::store::{Backfill, BackfillMark, OpenPeriod, StoreError, TagSamples};
use sqlx::sqlite::SqliteConnection;
use sqlx::{SqliteExecutor, SqlitePool};
use time::{Duration, OffsetDateTime};

type SampleRow = (String, i64, Option<f64>, i64, Option<u32>);

pub(in crate::store::sqlite) async fn samples(
    pool: &SqlitePool,
    plant: &str,
    from: OffsetDateTime,
    to: OffsetDateTime,
    holds: Duration,
) -> Result<Vec<TagSamples>, StoreError> {
    let (from, to) = (nanoseconds(from), nanoseconds(to));
    let holds = i64::try_from(holds.whole_nanoseconds()).unwrap_or(i64::MAX);
    let rows: Vec<SampleRow> = sqlx::query_as(sql::SAMPLES)
        .bind(plant)
        .bind(from)
        .bind(to)
        .bind(from.saturating_sub(holds))
        .bind(to.saturating_add(holds))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    let mut tags: Vec<TagSamples> = Vec::new();
    for (tag, at, value, grade, code) in rows {
        let grade = match grade {
            0 => Grade::Good,
            1 => Grade::Uncertain,
            2 => Grade::Bad,
            other => return Err(corrupt(format!("grade {other} of a sample of {tag}"))),
        };
        let sample = Sample {
            time: time(at)?,
            value,
            quality: Quality { grade, code },
        };
        match tags.last_mut() {
            Some(last) if last.tag == tag => last.samples.push(sample),
            _ => tags.push(TagSamples {
                tag,
                samples: vec![sample],
            }),
        }
    }
    Ok(tags)
}

pub(in crate::store::sqlite) async fn open_periods(
    pool: &SqlitePool,
    plant: &str,
    due: OffsetDateTime,
    limit: usize,
) -> Result<Vec<OpenPeriod>, StoreError> {
    let rows: Vec<(i64, i64, i64, bool, i64)> = sqlx::query_as(sql::DUE_PERIODS)
        .bind(plant)
        .bind(nanoseconds(due))
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter()
        .map(|(start, end, generation, backfill, touched)| {
            Ok(OpenPeriod {
                plant: plant.to_owned(),
                start: time(start)?,
                end: time(end)?,
                generation,
                backfill,
                touched: time(touched)?,
            })
        })
        .collect()
}

pub(in crate::store::sqlite) async fn plants_with_open_periods(
    pool: &SqlitePool,
) -> Result<Vec<String>, StoreError> {
    sqlx::query_scalar(sql::PLANTS_WITH_OPEN_PERIODS)
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))
}

pub(in crate::store::sqlite) async fn body(
    pool: &SqlitePool,
    plant: &str,
    batch: &str,
    body: u32,
) -> Result<Option<Vec<u8>>, StoreError> {
    let frame: Option<Vec<u8>> = sqlx::query_scalar(sql::ONE_BODY)
        .bind(plant)
        .bind(batch)
        .bind(body)
        .fetch_optional(pool)
        .await
        .map_err(|e| explain(&e))?;
    frame.map(|frame| expand(&frame)).transpose()
}

#[derive(sqlx::FromRow)]
struct BackfillRow {
    name: String,
    bytes: i64,
    lines: i64,
    refused: i64,
    header: Option<String>,
    begun_ns: i64,
    touched_ns: i64,
    complete: bool,
    new: i64,
    periods_open: i64,
}

fn backfill_of(row: BackfillRow) -> Result<Backfill, StoreError> {
    Ok(Backfill {
        mark: BackfillMark {
            name: row.name,
            bytes: row.bytes.unsigned_abs(),
            lines: row.lines.unsigned_abs(),
            refused: row.refused.unsigned_abs(),
            header: row.header,
        },
        begun: time(row.begun_ns)?,
        touched: time(row.touched_ns)?,
        complete: row.complete,
        new: row.new.unsigned_abs(),
        periods_open: row.periods_open.unsigned_abs(),
    })
}

async fn rows(
    on: impl SqliteExecutor<'_>,
    plant: &str,
    name: Option<&str>,
    after: Option<&str>,
    limit: usize,
) -> Result<Vec<BackfillRow>, sqlx::Error> {
    sqlx::query_as(sql::BACKFILLS)
        .bind(plant)
        .bind(name)
        .bind(after)
        .bind(count(limit))
        .fetch_all(on)
        .await
}

/// One backfill, on the writer's own connection.
pub(in crate::store::sqlite) async fn begun_backfill(
    on: &mut SqliteConnection,
    plant: &str,
    name: &str,
) -> Result<Option<Backfill>, sqlx::Error> {
    let row = rows(on, plant, Some(name), None, 1).await?.pop();
    row.map(backfill_of)
        .transpose()
        .map_err(|error| sqlx::Error::Decode(Box::new(error)))
}

pub(in crate::store::sqlite) async fn backfill(
    pool: &SqlitePool,
    plant: &str,
    name: &str,
) -> Result<Option<Backfill>, StoreError> {
    let rows = rows(pool, plant, Some(name), None, 1).await;
    let row = rows.map_err(|e| explain(&e))?.pop();
    row.map(backfill_of).transpose()
}

pub(in crate::store::sqlite) async fn backfills(
    pool: &SqlitePool,
    plant: &str,
    after: Option<&str>,
    limit: usize,
) -> Result<Vec<Backfill>, StoreError> {
    let rows = rows(pool, plant, None, after, limit).await;
    let rows = rows.map_err(|e| explain(&e))?.into_iter();
    rows.map(backfill_of).collect()
}
