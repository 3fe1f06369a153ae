//! Tokens and the audit log.

use super::count;
use crate::access::{Deed, DeedKind, Rate, Scope};
use crate::store::sqlite::fault::{corrupt, explain, time};
use crate::store::sqlite::sql;
use crate::store::{DeedRow, NewToken, StoreError, TokenRow};
use serde_json::Value;
use sqlx::SqlitePool;
use sqlx::sqlite::SqliteConnection;

type Row = (
    i64,
    String,
    Vec<u8>,
    String,
    Option<String>,
    Option<i64>,
    Option<f64>,
    i64,
    Option<i64>,
    Option<i64>,
);

fn token_of(row: Row) -> Result<TokenRow, StoreError> {
    let (id, name, digest, scopes, plants, expires, rate, made, revoked, used) = row;
    // A scope that this version does not know allows nothing.
    let scopes = scopes.split(',').filter_map(Scope::of_name).collect();
    let plants = plants.map(|json| serde_json::from_str(&json)).transpose();
    let digest = digest.try_into();
    Ok(TokenRow {
        id,
        token: NewToken {
            name,
            digest: digest.map_err(|_| corrupt("a token's digest is not of 32 bytes"))?,
            scopes,
            plants: plants.map_err(corrupt)?,
            expires: expires.map(time).transpose()?,
            rate: rate.map(Rate::new).transpose().map_err(corrupt)?,
        },
        made: time(made)?,
        revoked: revoked.map(time).transpose()?,
        last_used: used.map(time).transpose()?,
    })
}

pub(in crate::store::sqlite) async fn tokens(
    pool: &SqlitePool,
) -> Result<Vec<TokenRow>, StoreError> {
    let rows: Vec<Row> = sqlx::query_as(sql::TOKENS)
        .bind(None::<i64>)
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter().map(token_of).collect()
}

/// One token, on the writer's own connection.
pub(in crate::store::sqlite) async fn token(
    on: &mut SqliteConnection,
    id: i64,
) -> Result<Option<TokenRow>, sqlx::Error> {
    let row: Option<Row> = sqlx::query_as(sql::TOKENS)
        .bind(id)
        .fetch_optional(on)
        .await?;
    row.map(token_of)
        .transpose()
        .map_err(|error| sqlx::Error::Decode(Box::new(error)))
}

pub(in crate::store::sqlite) async fn tokens_version(pool: &SqlitePool) -> Result<i64, StoreError> {
    let version = sqlx::query_scalar(sql::TOKENS_VERSION).fetch_one(pool);
    version.await.map_err(|e| explain(&e))
}

pub(in crate::store::sqlite) async fn deeds(
    pool: &SqlitePool,
    plants: Option<&[String]>,
    before: Option<i64>,
    limit: usize,
) -> Result<Vec<DeedRow>, StoreError> {
    let plants = plants.map(|names| Value::from(names).to_string());
    let rows: Vec<(i64, i64, String, String, Option<String>, String)> = sqlx::query_as(sql::DEEDS)
        .bind(plants)
        .bind(before.unwrap_or(i64::MAX))
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    let rows = rows.into_iter();
    rows.map(|(id, at, actor, kind, plant, what)| {
        let unknown = || corrupt(format!("a deed of kind {kind}"));
        let deed = Deed {
            actor: serde_json::from_str(&actor).map_err(corrupt)?,
            at: time(at)?,
            kind: DeedKind::of_name(&kind).ok_or_else(unknown)?,
            plant,
            what: serde_json::from_str(&what).map_err(corrupt)?,
        };
        Ok(DeedRow { id, deed })
    })
    .collect()
}
