//! Plants, their revisions, and what is kept with a revision.

use super::count;
use crate::report::SingleTest;
use crate::store::sqlite::fault::{corrupt, explain, time};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::hex;
use crate::store::{PlantLine, StoreError, StoredPlant};
use sqlx::SqlitePool;
use sqlx::sqlite::SqliteConnection;

type RevisionRow = (u32, Vec<u8>, String, String, String, i64);

fn revision_of(name: &str, row: RevisionRow) -> Result<StoredPlant, StoreError> {
    let (revision, digest, media_type, source, canonical, created) = row;
    Ok(StoredPlant {
        name: name.to_owned(),
        revision,
        digest: hex(&digest),
        media_type,
        source,
        canonical,
        created: time(created)?,
    })
}

/// The current revision, on the writer's own connection.
pub(in crate::store::sqlite) async fn current_plant(
    on: &mut SqliteConnection,
    name: &str,
) -> Result<Option<StoredPlant>, sqlx::Error> {
    let row: Option<RevisionRow> = sqlx::query_as(sql::CURRENT_REVISION)
        .bind(name)
        .fetch_optional(on)
        .await?;
    row.map(|row| revision_of(name, row))
        .transpose()
        .map_err(|error| sqlx::Error::Decode(Box::new(error)))
}

pub(in crate::store::sqlite) async fn plant(
    pool: &SqlitePool,
    name: &str,
    revision: Option<u32>,
) -> Result<Option<StoredPlant>, StoreError> {
    let query = match revision {
        None => sqlx::query_as(sql::CURRENT_REVISION).bind(name),
        Some(revision) => sqlx::query_as(sql::ONE_REVISION).bind(name).bind(revision),
    };
    let row: Option<RevisionRow> = query.fetch_optional(pool).await.map_err(|e| explain(&e))?;
    row.map(|row| revision_of(name, row)).transpose()
}

/// Critical values that reports of a revision were held against.
pub(in crate::store::sqlite) async fn critical_values(
    pool: &SqlitePool,
    name: &str,
    revision: u32,
) -> Result<Vec<SingleTest>, StoreError> {
    let rows: Vec<String> = sqlx::query_scalar(sql::CRITICAL_VALUES)
        .bind(name)
        .bind(revision)
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    let tests = rows.iter().map(|json| serde_json::from_str(json));
    tests.collect::<Result<_, _>>().map_err(corrupt)
}

pub(in crate::store::sqlite) async fn plants(
    pool: &SqlitePool,
    after: &str,
    limit: usize,
) -> Result<Vec<PlantLine>, StoreError> {
    let rows: Vec<(String, String, u32, i64)> = sqlx::query_as(sql::PLANTS)
        .bind(after)
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter()
        .map(|(name, title, revision, created)| {
            Ok(PlantLine {
                name,
                title,
                revision,
                created: time(created)?,
            })
        })
        .collect()
}
