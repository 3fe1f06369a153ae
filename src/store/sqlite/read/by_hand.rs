//! Decisions by hand, and readings in the field.

use crate::plant::{Action, ByHand};
use crate::store::sqlite::fault::{explain, nanoseconds, time};
use crate::store::sqlite::sql;
use crate::store::{ByHandRow, Ended, FieldReading, StoreError};
use ::time::OffsetDateTime;
use sqlx::SqlitePool;
use sqlx::sqlite::SqliteConnection;

type DecisionRow = (
    i64,
    String,
    Option<f64>,
    i64,
    Option<i64>,
    String,
    String,
    i64,
    Option<String>,
    Option<i64>,
);

fn decision_of(row: DecisionRow) -> Result<ByHandRow, StoreError> {
    let (id, tag, added, from, until, reason, by, entered, ended_by, ended_at) = row;
    let ended = match (ended_by, ended_at) {
        (Some(by), Some(at)) => Some(Ended {
            by,
            at: time(at)?,
            deed: None,
        }),
        _ => None,
    };
    Ok(ByHandRow {
        decision: ByHand {
            id,
            tag,
            action: added.map_or(Action::OutOfService, Action::Offset),
            from: time(from)?,
            until: until.map(time).transpose()?,
            reason,
            by,
        },
        entered: time(entered)?,
        ended,
    })
}

pub(in crate::store::sqlite) async fn by_hand(
    pool: &SqlitePool,
    plant: &str,
    at: Option<OffsetDateTime>,
) -> Result<Vec<ByHandRow>, StoreError> {
    let rows: Vec<DecisionRow> = sqlx::query_as(sql::BY_HAND)
        .bind(plant)
        .bind(None::<i64>)
        .bind(at.map(nanoseconds))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter().map(decision_of).collect()
}

/// One decision, on the writer's own connection.
pub(in crate::store::sqlite) async fn decision(
    on: &mut SqliteConnection,
    plant: &str,
    id: i64,
) -> Result<Option<ByHandRow>, sqlx::Error> {
    let row: Option<DecisionRow> = sqlx::query_as(sql::BY_HAND)
        .bind(plant)
        .bind(id)
        .bind(None::<i64>)
        .fetch_optional(on)
        .await?;
    row.map(decision_of)
        .transpose()
        .map_err(|error| sqlx::Error::Decode(Box::new(error)))
}

pub(in crate::store::sqlite) async fn field_readings(
    pool: &SqlitePool,
    plant: &str,
    batch: &str,
) -> Result<Vec<FieldReading>, StoreError> {
    let rows: Vec<(i64, String, String, i64)> = sqlx::query_as(sql::FIELD_READINGS)
        .bind(plant)
        .bind(batch)
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter()
        .map(|(id, json, by, at)| {
            Ok(FieldReading {
                id,
                json,
                by,
                at: time(at)?,
            })
        })
        .collect()
}
