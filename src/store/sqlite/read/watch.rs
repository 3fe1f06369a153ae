//! The watch over a plant, its events and its accusations.

use super::count;
use crate::store::sqlite::fault::{corrupt, explain};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{expand, signed};
use crate::store::{AccusationRow, StoreError, StoredEvent};
use sqlx::SqlitePool;

pub(in crate::store::sqlite) async fn watch(
    pool: &SqlitePool,
    plant: &str,
) -> Result<Option<String>, StoreError> {
    let frame: Option<Vec<u8>> = sqlx::query_scalar(sql::READ_WATCH)
        .bind(plant)
        .fetch_optional(pool)
        .await
        .map_err(|e| explain(&e))?;
    frame
        .map(|frame| String::from_utf8(expand(&frame)?).map_err(corrupt))
        .transpose()
}

pub(in crate::store::sqlite) async fn events(
    pool: &SqlitePool,
    plant: &str,
    after: i64,
    limit: usize,
) -> Result<Vec<StoredEvent>, StoreError> {
    let rows: Vec<(i64, String)> = sqlx::query_as(sql::EVENTS)
        .bind(plant)
        .bind(after)
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    let events = rows.into_iter();
    Ok(events.map(|(id, json)| StoredEvent { id, json }).collect())
}

pub(in crate::store::sqlite) async fn events_of_all(
    pool: &SqlitePool,
    after: i64,
    limit: usize,
) -> Result<Vec<StoredEvent>, StoreError> {
    let rows: Vec<(i64, String)> = sqlx::query_as(sql::EVENTS_OF_ALL)
        .bind(after)
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    let events = rows.into_iter();
    Ok(events.map(|(id, json)| StoredEvent { id, json }).collect())
}

pub(in crate::store::sqlite) async fn newest_event(pool: &SqlitePool) -> Result<i64, StoreError> {
    let newest = sqlx::query_scalar(sql::NEWEST_EVENT).fetch_one(pool).await;
    newest.map_err(|e| explain(&e))
}

pub(in crate::store::sqlite) async fn delivered(
    pool: &SqlitePool,
) -> Result<Option<i64>, StoreError> {
    let delivered = sqlx::query_scalar(sql::DELIVERED)
        .fetch_optional(pool)
        .await;
    delivered.map_err(|e| explain(&e))
}

pub(in crate::store::sqlite) async fn accusations(
    pool: &SqlitePool,
    plant: &str,
    open: Option<bool>,
    after: u64,
    limit: usize,
) -> Result<Vec<AccusationRow>, StoreError> {
    let rows: Vec<(i64, bool, String)> = sqlx::query_as(sql::ACCUSATIONS)
        .bind(plant)
        .bind(open)
        .bind(signed(after))
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter().map(accusation_of).collect()
}

pub(in crate::store::sqlite) async fn accusation(
    pool: &SqlitePool,
    plant: &str,
    id: u64,
) -> Result<Option<AccusationRow>, StoreError> {
    let found: Option<(i64, bool, String)> = sqlx::query_as(sql::ONE_ACCUSATION)
        .bind(plant)
        .bind(signed(id))
        .fetch_optional(pool)
        .await
        .map_err(|e| explain(&e))?;
    found.map(accusation_of).transpose()
}

fn accusation_of(row: (i64, bool, String)) -> Result<AccusationRow, StoreError> {
    let (id, open, json) = row;
    Ok(AccusationRow {
        id: u64::try_from(id).map_err(corrupt)?,
        open,
        json,
    })
}
