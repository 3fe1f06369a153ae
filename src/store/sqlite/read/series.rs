//! Numbers over time, without parsing a report.

use super::{count, earliest, latest};
use crate::store::numbers::{self, Layout};
use crate::store::sqlite::fault::{corrupt, explain, time};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{expand, verdict};
use crate::store::{Column, Cursor, SeriesPage, SeriesQuery, SeriesRow, StoreError};
use sqlx::SqlitePool;
use std::collections::HashMap;
use std::sync::{Arc, Mutex, PoisonError};

/// Rows of numbers that are held in memory at once: some 5 MB.
const SERIES_CHUNK: usize = 512;

type SeriesRowData = (i64, String, i64, i64, String, i64, Vec<u8>);

pub(in crate::store::sqlite) async fn series(
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
    let channels = expand(&channels)?;
    let read = Arc::new(Layout::new(
        serde_json::from_slice(&channels).map_err(corrupt)?,
    ));
    layouts
        .lock()
        .unwrap_or_else(PoisonError::into_inner)
        .insert(id, Arc::clone(&read));
    Ok(read)
}
