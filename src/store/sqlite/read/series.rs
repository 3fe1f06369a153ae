//! Numbers over time, without parsing a report: whole days from their chunks,
//! the others from the rows of their batches.

use super::{earliest, latest};
use crate::store::days::DayBatch;
use crate::store::numbers::{self, Layout};
use crate::store::sqlite::fault::{explain, time};
use crate::store::sqlite::history::{Chunked, Day, Layouts, Past, Values};
use crate::store::sqlite::sql;
use crate::store::{Column, Cursor, SeriesPage, SeriesQuery, SeriesRow, StoreError};
use sqlx::SqlitePool;
use std::collections::HashMap;

pub(in crate::store::sqlite) async fn series(
    pool: &SqlitePool,
    layouts: &Layouts,
    query: SeriesQuery,
) -> Result<SeriesPage, StoreError> {
    let mut table = Table::new(&query);
    let mut after = query.after.unwrap_or(Cursor {
        start_ns: i64::MIN,
        id: 0,
    });
    // One transaction: a day that is chunked meanwhile is whole here or there.
    let mut on = pool.begin().await.map_err(|e| explain(&e))?;
    let plant: Option<i64> = sqlx::query_scalar(sql::FIND_PLANT)
        .bind(&query.plant)
        .fetch_optional(&mut *on)
        .await
        .map_err(|e| explain(&e))?;
    let Some(plant) = plant else {
        return Ok(table.finish(None));
    };
    let time = (earliest(query.from).max(after.start_ns), latest(query.to));
    let past = Past::new(&mut on, plant, &query.selectors, vec![query.field], time);
    let mut past = past.await?;
    table.know(&past);
    loop {
        let days = past.days(|_, _| true).await?;
        if days.is_empty() {
            return Ok(table.finish(None));
        }
        for day in days {
            let full = table.fill(&mut past, layouts, &day, &mut after).await?;
            if full {
                return Ok(table.finish(Some(after)));
            }
        }
    }
}

/// Where the number of a selector is in the batches of one layout.
struct Plan {
    /// Place among the selector's columns.
    column: usize,
    /// Among the numbers of a batch.
    index: Option<usize>,
    /// Its channel, where it has chunks.
    channel: Option<i64>,
}

/// The columns of a series while they grow.
struct Table<'q> {
    query: &'q SeriesQuery,
    rows: Vec<SeriesRow>,
    /// For each selector the columns of each unit that it had.
    columns: Vec<Vec<Column>>,
    /// By layout, one for each selector.
    plans: HashMap<i64, Vec<Option<Plan>>>,
    channels: HashMap<numbers::Channel, i64>,
}

impl<'q> Table<'q> {
    fn new(query: &'q SeriesQuery) -> Self {
        let columns = query.selectors.iter().map(|_| Vec::new()).collect();
        Table {
            query,
            rows: Vec::new(),
            columns,
            plans: HashMap::new(),
            channels: HashMap::new(),
        }
    }

    fn know(&mut self, past: &Past<'_>) {
        let channels = past.channels().iter();
        self.channels = channels
            .map(|(id, channel)| (channel.clone(), *id))
            .collect();
    }

    /// Takes the batches of a day beyond a place, which is moved on; true where
    /// there are more than were asked for.
    async fn fill(
        &mut self,
        past: &mut Past<'_>,
        layouts: &Layouts,
        day: &Day,
        after: &mut Cursor,
    ) -> Result<bool, StoreError> {
        let chunked = past.chunked(day)?;
        loop {
            // One batch beyond the limit tells whether there are more.
            let wanted = self.query.limit + 1 - self.rows.len();
            let (batches, next) = past.batches(day, *after, wanted).await?;
            for found in batches {
                if self.rows.len() == self.query.limit {
                    return Ok(true);
                }
                *after = found.place();
                if !self.plans.contains_key(&found.batch.layout) {
                    let layout = layouts.get(past.on(), found.batch.layout).await?;
                    self.plan(found.batch.layout, &layout);
                }
                self.add(found.batch, &found.values, &chunked)?;
            }
            match next {
                Some(next) => *after = next,
                None => return Ok(false),
            }
        }
    }

    /// A layout that the next batch has.
    fn plan(&mut self, id: i64, layout: &Layout) {
        let mut plans = Vec::new();
        for (selector, columns) in self.query.selectors.iter().zip(&mut self.columns) {
            let Some(location) = layout.locate(selector, self.query.field) else {
                plans.push(None);
                continue;
            };
            let known = columns
                .iter()
                .position(|column| column.unit.as_deref() == Some(location.unit));
            let column = known.unwrap_or_else(|| {
                columns.push(Column {
                    selector: selector.clone(),
                    unit: Some(location.unit.to_owned()),
                    values: Vec::new(),
                });
                columns.len() - 1
            });
            plans.push(Some(Plan {
                column,
                index: location.index,
                channel: self.channels.get(location.channel).copied(),
            }));
        }
        self.plans.insert(id, plans);
    }

    fn add(
        &mut self,
        batch: DayBatch,
        values: &Values,
        chunked: &Chunked,
    ) -> Result<(), StoreError> {
        let place = self.rows.len();
        self.rows.push(SeriesRow {
            batch: batch.name,
            start: time(batch.start)?,
            end: time(batch.end)?,
            verdict: batch.verdict,
        });
        let plans = self.plans.get(&batch.layout).into_iter().flatten();
        for (plan, columns) in plans.zip(&mut self.columns) {
            let Some(plan) = plan else {
                continue;
            };
            let value = match (plan.index, values) {
                (None, _) => None,
                (Some(index), Values::Hot(numbers)) => numbers::read(numbers, index),
                // No channel has this number.
                (_, Values::Chunked(at)) => {
                    chunked.value(plan.channel.unwrap_or(0), self.query.field, *at)?
                }
            };
            let column = &mut columns[plan.column].values;
            column.resize(place, None);
            column.push(value);
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
