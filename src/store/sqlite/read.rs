//! What readers ask.

use super::fault::{corrupt, explain, nanoseconds, time};
use super::sql;
use super::work::{hex, verdict, verdict_name};
use crate::report::SingleTest;
use crate::store::numbers::{self, Layout};
use crate::store::{
    BatchLine, BatchQuery, Column, Cursor, Page, PlantLine, SeriesPage, SeriesQuery, SeriesRow,
    StoreError, Stored, StoredPlant, Ticket, Unfinished,
};
use ::time::OffsetDateTime;
use sqlx::SqlitePool;
use sqlx::sqlite::SqliteConnection;
use std::collections::HashMap;
use std::sync::{Arc, Mutex, PoisonError};

/// Rows of numbers that are held in memory at once: some 5 MB.
const SERIES_CHUNK: usize = 512;

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
pub(super) async fn current_plant(
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

pub(super) async fn plant(
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
pub(super) async fn critical_values(
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

pub(super) async fn plants(
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

pub(super) async fn batch(
    pool: &SqlitePool,
    plant: &str,
    batch: &str,
) -> Result<Option<Stored>, StoreError> {
    let row: Option<(i64, u32, Option<Vec<u8>>)> = sqlx::query_as(sql::ONE_BATCH)
        .bind(plant)
        .bind(batch)
        .fetch_optional(pool)
        .await
        .map_err(|e| explain(&e))?;
    row.map(|(id, revision, report)| match report {
        None => Ok(Stored::Pending(Ticket {
            id,
            plant: plant.to_owned(),
            batch: batch.to_owned(),
            revision,
        })),
        Some(report) => {
            let json = zstd::decode_all(&report[..]).map_err(corrupt)?;
            let report = serde_json::from_slice(&json).map_err(corrupt)?;
            Ok(Stored::Done(Box::new(report)))
        }
    })
    .transpose()
}

pub(super) async fn unfinished(
    pool: &SqlitePool,
    after: i64,
    limit: usize,
) -> Result<Vec<Unfinished>, StoreError> {
    let rows: Vec<(i64, String, String, u32, i64, Vec<u8>)> = sqlx::query_as(sql::UNFINISHED)
        .bind(after)
        .bind(count(limit))
        .fetch_all(pool)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter()
        .map(|(id, plant, batch, revision, received, body)| {
            Ok(Unfinished {
                ticket: Ticket {
                    id,
                    plant,
                    batch,
                    revision,
                },
                received: time(received)?,
                body: zstd::decode_all(&body[..]).map_err(corrupt)?,
            })
        })
        .collect()
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

pub(super) async fn batches(
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

type SeriesRowData = (i64, String, i64, i64, String, i64, Vec<u8>);

pub(super) async fn series(
    pool: &SqlitePool,
    layouts: &Mutex<HashMap<i64, Arc<Layout>>>,
    query: SeriesQuery,
) -> Result<SeriesPage, StoreError> {
    let mut table = Table::new(&query);
    let mut after = query.after.unwrap_or(Cursor {
        start_ns: i64::MIN,
        id: 0,
    });
    loop {
        // One row beyond the limit tells whether there are more.
        let wanted = (query.limit + 1 - table.rows.len()).min(SERIES_CHUNK);
        let rows: Vec<SeriesRowData> = sqlx::query_as(sql::SERIES)
            .bind(&query.plant)
            .bind(earliest(query.from))
            .bind(latest(query.to))
            .bind(after.start_ns)
            .bind(after.id)
            .bind(count(wanted))
            .fetch_all(pool)
            .await
            .map_err(|e| explain(&e))?;
        let ended = rows.len() < wanted;
        for row in rows {
            if table.rows.len() == query.limit {
                return Ok(table.finish(Some(after)));
            }
            after = Cursor {
                start_ns: row.2,
                id: row.0,
            };
            let layout = layout(pool, layouts, row.5).await?;
            table.add(row, &layout)?;
        }
        if ended {
            return Ok(table.finish(None));
        }
    }
}

/// The columns of a series while they grow.
struct Table<'q> {
    query: &'q SeriesQuery,
    rows: Vec<SeriesRow>,
    /// For each selector the columns of each unit that it had.
    columns: Vec<Vec<Column>>,
}

impl<'q> Table<'q> {
    fn new(query: &'q SeriesQuery) -> Self {
        let columns = query.selectors.iter().map(|_| Vec::new()).collect();
        Table {
            query,
            rows: Vec::new(),
            columns,
        }
    }

    fn add(&mut self, row: SeriesRowData, layout: &Layout) -> Result<(), StoreError> {
        let (_, batch, start, end, verdict_name, _, numbers) = row;
        let place = self.rows.len();
        self.rows.push(SeriesRow {
            batch,
            start: time(start)?,
            end: time(end)?,
            verdict: verdict(&verdict_name)?,
        });
        for (selector, columns) in self.query.selectors.iter().zip(&mut self.columns) {
            let Some(location) = layout.locate(selector, self.query.field) else {
                continue;
            };
            let known = columns
                .iter()
                .position(|column| column.unit.as_deref() == Some(location.unit));
            let column = known.unwrap_or_else(|| {
                let unit = Some(location.unit.to_owned());
                columns.push(Column {
                    selector: selector.clone(),
                    unit,
                    values: Vec::new(),
                });
                columns.len() - 1
            });
            let values = &mut columns[column].values;
            values.resize(place, None);
            values.push(
                location
                    .index
                    .and_then(|index| numbers::read(&numbers, index)),
            );
        }
        Ok(())
    }

    fn finish(self, next: Option<Cursor>) -> SeriesPage {
        let mut all = Vec::new();
        for (selector, mut columns) in self.query.selectors.iter().zip(self.columns) {
            if columns.is_empty() {
                columns.push(Column {
                    selector: selector.clone(),
                    unit: None,
                    values: Vec::new(),
                });
            }
            for column in &mut columns {
                column.values.resize(self.rows.len(), None);
            }
            all.extend(columns);
        }
        SeriesPage {
            rows: self.rows,
            columns: all,
            next,
        }
    }
}

async fn layout(
    pool: &SqlitePool,
    layouts: &Mutex<HashMap<i64, Arc<Layout>>>,
    id: i64,
) -> Result<Arc<Layout>, StoreError> {
    // The map stays whole whatever happened to a thread that held it.
    let known = layouts
        .lock()
        .unwrap_or_else(PoisonError::into_inner)
        .get(&id)
        .cloned();
    if let Some(known) = known {
        return Ok(known);
    }
    let channels: Vec<u8> = sqlx::query_scalar(sql::READ_LAYOUT)
        .bind(id)
        .fetch_one(pool)
        .await
        .map_err(|e| explain(&e))?;
    let channels = zstd::decode_all(&channels[..]).map_err(corrupt)?;
    let read = Arc::new(Layout::new(
        serde_json::from_slice(&channels).map_err(corrupt)?,
    ));
    layouts
        .lock()
        .unwrap_or_else(PoisonError::into_inner)
        .insert(id, Arc::clone(&read));
    Ok(read)
}

fn earliest(from: Option<OffsetDateTime>) -> i64 {
    from.map_or(i64::MIN, nanoseconds)
}

fn latest(to: Option<OffsetDateTime>) -> i64 {
    to.map_or(i64::MAX, nanoseconds)
}

fn count(limit: usize) -> i64 {
    i64::try_from(limit).unwrap_or(i64::MAX)
}
