//! Versions of a result.

use crate::report::Report;
use crate::store::sqlite::fault::{explain, time};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{self, verdict};
use crate::store::{Again, StoreError, VersionLine};
use sqlx::SqlitePool;

type VersionRow = (
    u32,
    Option<i64>,
    Option<String>,
    Option<String>,
    String,
    Option<f64>,
    u32,
);

pub(in crate::store::sqlite) async fn versions(
    pool: &SqlitePool,
    plant: &str,
    batch: &str,
) -> Result<Vec<VersionLine>, StoreError> {
    let rows: Vec<VersionRow> = sqlx::query_as(sql::VERSIONS)
        .bind(plant)
        .bind(batch)
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter().map(line).collect()
}

fn line(row: VersionRow) -> Result<VersionLine, StoreError> {
    let (version, at, by, reason, verdict_name, statistic, body) = row;
    let again = match (at, by, reason) {
        (Some(at), Some(by), Some(reason)) => Some(Again {
            at: time(at)?,
            by,
            reason,
            deed: None,
        }),
        _ => None,
    };
    Ok(VersionLine {
        version,
        again,
        verdict: verdict(&verdict_name)?,
        statistic,
        body,
    })
}

pub(in crate::store::sqlite) async fn version(
    pool: &SqlitePool,
    plant: &str,
    batch: &str,
    version: u32,
) -> Result<Option<Report>, StoreError> {
    let frame: Option<Vec<u8>> = sqlx::query_scalar(sql::ONE_VERSION)
        .bind(plant)
        .bind(batch)
        .bind(version)
        .fetch_optional(pool)
        .await
        .map_err(|e| explain(&e))?;
    // An empty one was removed.
    let frame = frame.filter(|frame| !frame.is_empty());
    frame.map(|frame| values::report(&frame)).transpose()
}
