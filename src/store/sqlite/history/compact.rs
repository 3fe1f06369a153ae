//! One day's numbers into chunks and means.
//!
//! Numbers come by batch and go by channel: a day is turned around in memory, in
//! parts of a bounded size, so that a plant with very many batches takes more
//! turns and not more memory.

use super::source::read_chunks;
use super::{SqliteStore, chunk_key, day_bounds};
use crate::store::averages::{self, Sources};
use crate::store::days::{self, DayBatch};
use crate::store::numbers::{self, Channel, ChannelKind, Layout};
use crate::store::sqlite::fault::{corrupt, explain};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::verdict;
use crate::store::sqlite::work::{Channelled, ClearSide, DayDone, PutChannels, PutChunks};
use crate::store::{Field, StoreError};
use futures::TryStreamExt;
use sqlx::sqlite::SqliteConnection;
use std::collections::hash_map::Entry;
use std::collections::{HashMap, HashSet};
use std::sync::Arc;

/// Numbers of a day that are in memory at once: 32 MB.
const TOGETHER: usize = 4 << 20;

/// Bytes that one transaction writes at most.
const WRITTEN: usize = 512 << 10;

type Next = (i64, i64, i64, Option<i64>, bool, Option<Vec<u8>>);

/// Ticket, name, start, end, verdict, layout, and whether it has numbers of its
/// own.
type HotBatch = (i64, String, i64, i64, String, i64, bool);

/// A day to be done.
struct Turning {
    plant: i64,
    day: i64,
    generation: i64,
    /// Where its chunks are now, and of what.
    before: Option<(i64, Vec<DayBatch>)>,
    closed: bool,
    batches: Vec<DayBatch>,
    /// Rows by the tickets of their batches.
    rows: HashMap<i64, usize>,
    layouts: HashMap<i64, Arc<Layout>>,
}

/// Every column of some channels.
type Columns = Vec<(Channel, Vec<Vec<f64>>)>;

impl SqliteStore {
    /// Chunks the first day up to one that has to be; answers of how many
    /// batches, `None` where there is no such day.
    pub(super) async fn compact(&self, up_to: i64) -> Result<Option<u64>, StoreError> {
        // One transaction: every part is of the same state, and whether that
        // still stands is asked at the end.
        let mut on = self.readers.begin().await.map_err(|e| explain(&e))?;
        let next: Option<Next> = sqlx::query_as(sql::NEXT_DIRTY)
            .bind(up_to)
            .fetch_optional(&mut *on)
            .await
            .map_err(|e| explain(&e))?;
        let Some(next) = next else {
            return Ok(None);
        };
        let turning = Turning::load(&mut on, &self.layouts, next).await?;
        let side = turning.before.as_ref().map_or(0, |(side, _)| 1 - side);
        let (plant, day) = (turning.plant, turning.day);
        self.write(ClearSide { plant, day, side }).await?;
        for part in turning.parts() {
            let columns = turning.columns(&mut on, part).await?;
            let starts: Vec<i64> = turning.batches.iter().map(|batch| batch.start).collect();
            let closed = turning.closed;
            let encoded = tokio::task::spawn_blocking(move || encode(columns, &starts, closed));
            let encoded = encoded.await.map_err(corrupt)?;
            self.put(&turning, side, encoded).await?;
        }
        drop(on);
        let batches = (!turning.batches.is_empty()).then(|| {
            let all = turning.batches.iter();
            let verdicts = averages::count(all.map(|batch| (batch.start, batch.verdict)));
            let verdicts = averages::write_counts(&verdicts);
            (days::write_batches(&turning.batches), verdicts)
        });
        let count = turning.batches.len() as u64;
        let done = self.write(DayDone {
            plant: turning.plant,
            day: turning.day,
            generation: turning.generation,
            side,
            batches,
        });
        let done = done.await?;
        Ok(Some(if done { count } else { 0 }))
    }

    /// Writes what was encoded, in several transactions.
    async fn put(
        &self,
        turning: &Turning,
        side: i64,
        encoded: Vec<(Channel, Channelled)>,
    ) -> Result<(), StoreError> {
        let mut known = self.channels(turning.plant).await?;
        let new = encoded.iter().map(|(channel, _)| channel);
        let new: Vec<Channel> = new.filter(|c| !known.contains_key(c)).cloned().collect();
        if !new.is_empty() {
            let plant = turning.plant;
            self.write(PutChannels {
                plant,
                channels: new,
            })
            .await?;
            known = self.channels(plant).await?;
        }
        let mut rows = Vec::new();
        let mut bytes = 0;
        let mut encoded = encoded.into_iter().peekable();
        while let Some((channel, mut row)) = encoded.next() {
            row.channel = *known
                .get(&channel)
                .ok_or_else(|| corrupt("a channel is gone"))?;
            bytes += row.numbers.len() + row.means.as_ref().map_or(0, |(d, h)| d.len() + h.len());
            rows.push(row);
            if bytes > WRITTEN || encoded.peek().is_none() {
                let (day, rows) = (turning.day, std::mem::take(&mut rows));
                self.write(PutChunks { day, side, rows }).await?;
                bytes = 0;
            }
        }
        Ok(())
    }

    async fn channels(&self, plant: i64) -> Result<HashMap<Channel, i64>, StoreError> {
        let mut on = self.readers.acquire().await.map_err(|e| explain(&e))?;
        channels(&mut on, plant).await
    }
}

async fn channels(
    on: &mut SqliteConnection,
    plant: i64,
) -> Result<HashMap<Channel, i64>, StoreError> {
    let rows: Vec<(i64, String, String, String)> = sqlx::query_as(sql::CHANNELS)
        .bind(plant)
        .fetch_all(on)
        .await
        .map_err(|e| explain(&e))?;
    rows.into_iter()
        .map(|(id, name, kind, unit)| {
            let kind = ChannelKind::named(&kind).ok_or_else(|| corrupt(format!("kind {kind}")))?;
            Ok((Channel { name, unit, kind }, id))
        })
        .collect()
}

impl Turning {
    async fn load(
        on: &mut SqliteConnection,
        layouts: &super::Layouts,
        next: Next,
    ) -> Result<Self, StoreError> {
        let (plant, day, generation, side, closed, chunked) = next;
        let before = match (side, chunked) {
            (Some(side), Some(bytes)) => Some((side, days::read_batches(&bytes).map_err(corrupt)?)),
            _ => None,
        };
        let chunked = before.iter().flat_map(|(_, batches)| batches);
        let chunked: HashMap<i64, ()> = chunked.map(|batch| (batch.id, ())).collect();
        let (first, last) = day_bounds(day);
        let rows: Vec<HotBatch> = sqlx::query_as(sql::HOT_BATCHES)
            .bind(plant)
            .bind(first)
            .bind(last)
            .fetch_all(&mut *on)
            .await
            .map_err(|e| explain(&e))?;
        let mut turning = Turning {
            plant,
            day,
            generation,
            before,
            closed,
            batches: Vec::new(),
            rows: HashMap::new(),
            layouts: HashMap::new(),
        };
        for (id, name, start, end, verdict_name, layout, hot) in rows {
            if !hot && !chunked.contains_key(&id) {
                // Retention has removed its numbers.
                continue;
            }
            if let Entry::Vacant(new) = turning.layouts.entry(layout) {
                new.insert(layouts.get(&mut *on, layout).await?);
            }
            turning.rows.insert(id, turning.batches.len());
            turning.batches.push(DayBatch {
                id,
                name,
                start,
                end,
                verdict: verdict(&verdict_name)?,
                layout,
            });
        }
        Ok(turning)
    }

    /// The day's channels in parts of a bounded size.
    fn parts(&self) -> Vec<Vec<Channel>> {
        let mut all: Vec<&Channel> = Vec::new();
        let mut seen = HashSet::new();
        let mut layouts: Vec<_> = self.layouts.iter().collect();
        layouts.sort_by_key(|(id, _)| **id);
        for (_, layout) in layouts {
            let channels = layout.channels().map(|(channel, _)| channel);
            all.extend(channels.filter(|channel| seen.insert(*channel)));
        }
        all.sort_by(|a, b| (&a.name, &a.unit).cmp(&(&b.name, &b.unit)));
        let wide = 7 * self.batches.len().max(1);
        let parts = all.chunks((TOGETHER / wide).max(1));
        parts
            .map(|part| part.iter().map(|c| (*c).clone()).collect())
            .collect()
    }

    /// The columns of some channels over the day.
    async fn columns(
        &self,
        on: &mut SqliteConnection,
        part: Vec<Channel>,
    ) -> Result<Columns, StoreError> {
        let empty = vec![f64::NAN; self.batches.len()];
        let columns = part.into_iter().map(|channel| {
            let fields = channel.kind.fields().len();
            (channel, vec![empty.clone(); fields])
        });
        let mut columns: Columns = columns.collect();
        self.fill_from_chunks(on, &mut columns).await?;
        let places: HashMap<&Channel, usize> = columns
            .iter()
            .enumerate()
            .map(|(at, (c, _))| (c, at))
            .collect();
        // Where each layout has the channels of this part: place, first number.
        let plans: HashMap<i64, Vec<(usize, usize)>> = self
            .layouts
            .iter()
            .map(|(id, layout)| {
                let found = layout.channels();
                let found = found.filter_map(|(c, first)| Some((*places.get(c)?, first)));
                (*id, found.collect())
            })
            .collect();
        let (first, last) = day_bounds(self.day);
        let mut rows = sqlx::query_as::<_, (i64, Vec<u8>)>(sql::HOT_NUMBERS)
            .bind(self.plant)
            .bind(first)
            .bind(last)
            .fetch(on);
        while let Some((id, numbers)) = rows.try_next().await.map_err(|e| explain(&e))? {
            let Some(&row) = self.rows.get(&id).filter(|_| !numbers.is_empty()) else {
                continue;
            };
            let plan = plans.get(&self.batches[row].layout).into_iter().flatten();
            for &(place, first) in plan {
                for (field, column) in columns[place].1.iter_mut().enumerate() {
                    column[row] = numbers::read(&numbers, first + field).unwrap_or(f64::NAN);
                }
            }
        }
        Ok(columns)
    }

    /// What the day's chunks have; hot numbers are put over it.
    async fn fill_from_chunks(
        &self,
        on: &mut SqliteConnection,
        columns: &mut Columns,
    ) -> Result<(), StoreError> {
        let Some((side, before)) = &self.before else {
            return Ok(());
        };
        let known = channels(&mut *on, self.plant).await?;
        for (channel, columns) in columns {
            let Some(id) = known.get(channel) else {
                continue;
            };
            let key = chunk_key(self.day, *side, *id);
            let Some(chunk) = read_chunks(&mut *on, &[key]).await?.remove(&key) else {
                continue;
            };
            for (at, column) in columns.iter_mut().enumerate() {
                let old = days::read_column(channel.kind, &chunk, at).map_err(corrupt)?;
                if old.len() != before.len() {
                    return Err(corrupt("a chunk that does not fit its day"));
                }
                for (batch, value) in before.iter().zip(old) {
                    if let Some(&row) = self.rows.get(&batch.id) {
                        column[row] = value;
                    }
                }
            }
        }
        Ok(())
    }
}

fn encode(columns: Columns, starts: &[i64], closed: bool) -> Vec<(Channel, Channelled)> {
    let hours = averages::by_hour(starts.iter().copied());
    let all: Vec<usize> = (0..starts.len()).collect();
    let encode = |(channel, columns): (Channel, Vec<Vec<f64>>)| {
        let numbers = days::write_chunk(channel.kind, &columns);
        let mut columns = columns;
        let sources = Sources::new(|field: Field| {
            let at = channel.kind.fields().iter().position(|&has| has == field)?;
            Some(std::mem::take(&mut columns[at]))
        });
        let means = (!closed).then(|| {
            let hourly: Vec<_> = hours.iter().map(|rows| sources.mean(rows)).collect();
            let daily = averages::write_daily(sources.mean(&all));
            (daily, averages::write_hourly(&hourly))
        });
        let row = Channelled {
            channel: 0,
            numbers,
            means,
        };
        (channel, row)
    };
    columns.into_iter().map(encode).collect()
}
