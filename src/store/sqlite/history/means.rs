//! Hourly and daily means: of chunked days as they were kept, of others worked
//! out from their batches.

use super::source::{Day, Layouts, Past, Values};
use super::{day_bounds, means_key};
use crate::store::averages::{self, Counts, DAY, HOUR, Sources};
use crate::store::numbers::{self, Channel};
use crate::store::sqlite::fault::{corrupt, explain, nanoseconds, time};
use crate::store::sqlite::sql;
use crate::store::{
    Cursor, Field, Mean, MeansColumn, MeansPage, MeansQuery, MeansRow, Resolution, StoreError,
};
use serde_json::Value;
use sqlx::SqlitePool;
use std::collections::HashMap;

/// What means are made of.
const FIELDS: [Field; 4] = [
    Field::Reconciled,
    Field::Uncertainty,
    Field::Measured,
    Field::Standardised,
];

/// Batches of a day that are looked at at once.
const BATCHES: usize = 512;

/// What a day comes to: verdicts, and by channel the means of its parts.
struct DayMeans {
    counts: Counts,
    channels: Vec<(Channel, Vec<Option<Mean>>)>,
}

pub(super) async fn means(
    pool: &SqlitePool,
    layouts: &Layouts,
    query: MeansQuery,
) -> Result<MeansPage, StoreError> {
    let mut table = Table::new(&query);
    let mut on = pool.begin().await.map_err(|e| explain(&e))?;
    let plant: Option<i64> = sqlx::query_scalar(sql::FIND_PLANT)
        .bind(&query.plant)
        .fetch_optional(&mut *on)
        .await
        .map_err(|e| explain(&e))?;
    let Some(plant) = plant else {
        return Ok(table.finish(false));
    };
    let (from, _) = day_bounds(super::day_of(table.from));
    let (_, to) = day_bounds(super::day_of(table.to.saturating_sub(1)));
    let to = if table.to > table.from {
        to.saturating_add(1)
    } else {
        from
    };
    let past = Past::new(
        &mut on,
        plant,
        &query.selectors,
        FIELDS.to_vec(),
        (from, to),
    );
    let mut past = past.await?;
    loop {
        let days = past.days(|dirty, closed| dirty && !closed).await?;
        if days.is_empty() {
            return Ok(table.finish(false));
        }
        let mut kept = kept(&mut past, &days, query.resolution).await?;
        for day in days {
            let means = match kept.remove(&day.day) {
                Some(means) => means,
                None => worked_out(&mut past, layouts, &query, &day).await?,
            };
            if table.add(day.day, means)? {
                return Ok(table.finish(true));
            }
        }
    }
}

/// The means that are kept of those days that have them.
async fn kept(
    past: &mut Past<'_>,
    days: &[Day],
    resolution: Resolution,
) -> Result<HashMap<i64, DayMeans>, StoreError> {
    let is_kept = |day: &&Day| day.side.is_some() && (!day.dirty || day.closed);
    let mut keys = Vec::new();
    for day in days.iter().filter(is_kept) {
        let channels = past.channels().iter();
        keys.extend(channels.map(|(id, _)| means_key(day.day, *id)));
    }
    let statement = match resolution {
        Resolution::Hourly => sql::HOURLY_MEANS,
        Resolution::Daily => sql::DAILY_MEANS,
    };
    let rows: Vec<(i64, Vec<u8>)> = sqlx::query_as(statement)
        .bind(Value::from(keys).to_string())
        .fetch_all(past.on())
        .await
        .map_err(|e| explain(&e))?;
    let rows: HashMap<i64, Vec<u8>> = rows.into_iter().collect();
    let mut kept = HashMap::new();
    for day in days.iter().filter(is_kept) {
        let mut channels = Vec::new();
        for (id, channel) in past.channels() {
            let Some(bytes) = rows.get(&means_key(day.day, *id)) else {
                continue;
            };
            let means = match resolution {
                Resolution::Hourly => averages::read_hourly(bytes),
                Resolution::Daily => averages::read_daily(bytes).map(|mean| vec![mean]),
            };
            channels.push((channel.clone(), means.map_err(corrupt)?));
        }
        let counts = averages::read_counts(&day.verdicts).map_err(corrupt)?;
        kept.insert(day.day, DayMeans { counts, channels });
    }
    Ok(kept)
}

/// The means of a day that is not chunked, or not any more.
async fn worked_out(
    past: &mut Past<'_>,
    layouts: &Layouts,
    query: &MeansQuery,
    day: &Day,
) -> Result<DayMeans, StoreError> {
    let chunked = past.chunked(day)?;
    let ids: HashMap<Channel, i64> = past
        .channels()
        .iter()
        .map(|(id, channel)| (channel.clone(), *id))
        .collect();
    let mut found: Vec<(Channel, [Vec<f64>; FIELDS.len()])> = Vec::new();
    let mut batches = Vec::new();
    let mut after = Cursor {
        start_ns: i64::MIN,
        id: 0,
    };
    loop {
        let (part, next) = past.batches(day, after, BATCHES).await?;
        for one in part {
            let row = batches.len();
            let layout = layouts.get(past.on(), one.batch.layout).await?;
            for selector in &query.selectors {
                let Some(location) = layout.locate(selector, Field::Reconciled) else {
                    continue;
                };
                let channel = location.channel;
                let place = found.iter().position(|(known, _)| known == channel);
                let place = place.unwrap_or_else(|| {
                    found.push((channel.clone(), Default::default()));
                    found.len() - 1
                });
                for (field, column) in FIELDS.into_iter().zip(&mut found[place].1) {
                    let index = layout.locate(selector, field).and_then(|l| l.index);
                    let value = match (index, &one.values) {
                        (None, _) => None,
                        (Some(index), Values::Hot(numbers)) => numbers::read(numbers, index),
                        (_, Values::Chunked(at)) => {
                            let id = ids.get(channel).copied().unwrap_or(0);
                            chunked.value(id, field, *at)?
                        }
                    };
                    column.resize(row, f64::NAN);
                    column.push(value.unwrap_or(f64::NAN));
                }
            }
            batches.push((one.batch.start, one.batch.verdict));
        }
        match next {
            Some(next) => after = next,
            None => break,
        }
    }
    let parts = match query.resolution {
        Resolution::Hourly => averages::by_hour(batches.iter().map(|(start, _)| *start)),
        Resolution::Daily => vec![(0..batches.len()).collect()],
    };
    let channels = found.into_iter().map(|(channel, columns)| {
        let mut columns = FIELDS.into_iter().zip(columns).collect::<HashMap<_, _>>();
        let sources = Sources::new(|field| columns.remove(&field));
        let means = parts.iter().map(|rows| sources.mean(rows));
        (channel, means.collect())
    });
    Ok(DayMeans {
        channels: channels.collect(),
        counts: averages::count(batches.into_iter()),
    })
}

/// Means while they grow.
struct Table<'q> {
    query: &'q MeansQuery,
    from: i64,
    to: i64,
    rows: Vec<MeansRow>,
    /// For each selector its units, and the means of each row.
    columns: Vec<Vec<(String, Vec<Option<Mean>>)>>,
}

impl<'q> Table<'q> {
    fn new(query: &'q MeansQuery) -> Self {
        let after = query
            .after
            .map(|after| nanoseconds(after).saturating_add(1));
        let from = query.from.map_or(i64::MIN, nanoseconds);
        Table {
            from: from.max(after.unwrap_or(i64::MIN)),
            to: query.to.map_or(i64::MAX, nanoseconds),
            rows: Vec::new(),
            columns: query.selectors.iter().map(|_| Vec::new()).collect(),
            query,
        }
    }

    /// Takes the means of a day; true where there are more than were asked for.
    fn add(&mut self, day: i64, means: DayMeans) -> Result<bool, StoreError> {
        let (first, _) = day_bounds(day);
        let (hours, width) = match self.query.resolution {
            Resolution::Hourly => (1, HOUR),
            Resolution::Daily => (24, DAY),
        };
        for (part, counts) in means.counts.chunks(hours).enumerate() {
            let start = first.saturating_add(part as i64 * width);
            let verdicts = averages::sum(counts);
            if verdicts.is_empty() || !(self.from..self.to).contains(&start) {
                continue;
            }
            if self.rows.len() == self.query.limit {
                return Ok(true);
            }
            let row = self.rows.len();
            self.rows.push(MeansRow {
                start: time(start)?,
                verdicts,
                means: Vec::new(),
            });
            for (selector, columns) in self.query.selectors.iter().zip(&mut self.columns) {
                let of_it = means.channels.iter().filter(|(channel, _)| {
                    channel.name == selector.name() && channel.kind.answers(selector)
                });
                for (channel, means) in of_it {
                    let known = columns.iter().position(|(unit, _)| *unit == channel.unit);
                    let place = known.unwrap_or_else(|| {
                        columns.push((channel.unit.clone(), Vec::new()));
                        columns.len() - 1
                    });
                    let column = &mut columns[place].1;
                    column.resize(row, None);
                    column.push(means.get(part).copied().flatten());
                }
            }
        }
        Ok(false)
    }

    fn finish(mut self, more: bool) -> MeansPage {
        let mut columns = Vec::new();
        for (selector, mut units) in self.query.selectors.iter().zip(self.columns) {
            // Which came first is known of batches, not of days.
            units.sort_by(|a, b| a.0.cmp(&b.0));
            let selector = || selector.clone();
            if units.is_empty() {
                columns.push(MeansColumn {
                    selector: selector(),
                    unit: None,
                });
                self.rows.iter_mut().for_each(|row| row.means.push(None));
            }
            for (unit, means) in units {
                columns.push(MeansColumn {
                    selector: selector(),
                    unit: Some(unit),
                });
                let means = means.into_iter().chain(std::iter::repeat(None));
                for (row, mean) in self.rows.iter_mut().zip(means) {
                    row.means.push(mean);
                }
            }
        }
        let next = self.rows.last().filter(|_| more).map(|row| row.start);
        MeansPage {
            columns,
            rows: self.rows,
            next,
        }
    }
}
