//! Where the numbers of a day are: in its chunks, in the hot rows, or some here
//! and some there.

use super::{chunk_key, day_bounds};
use crate::store::days::{self, DayBatch};
use crate::store::numbers::{Channel, ChannelKind, Layout};
use crate::store::sqlite::fault::{corrupt, explain};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{expand, verdict};
use crate::store::{Cursor, Field, Selector, StoreError};
use serde_json::Value;
use sqlx::sqlite::SqliteConnection;
use std::collections::HashMap;
use std::sync::{Arc, Mutex, PoisonError};

/// Rows of hot numbers that are held in memory at once: some 5 MB.
const HOT: usize = 512;

/// Chunks that are held in memory at once.
const HELD: usize = 2000;

/// Days that are looked up at once.
const MOST_DAYS: usize = 64;

/// Layouts that have been read.
#[derive(Default)]
pub(in crate::store::sqlite) struct Layouts(Mutex<HashMap<i64, Arc<Layout>>>);

impl Layouts {
    /// One of them.
    pub async fn get(&self, on: &mut SqliteConnection, id: i64) -> Result<Arc<Layout>, StoreError> {
        // The map stays whole whatever happened to a thread that held it.
        let known = self
            .0
            .lock()
            .unwrap_or_else(PoisonError::into_inner)
            .get(&id)
            .cloned();
        if let Some(known) = known {
            return Ok(known);
        }
        let channels: Vec<u8> = sqlx::query_scalar(sql::READ_LAYOUT)
            .bind(id)
            .fetch_one(on)
            .await
            .map_err(|e| explain(&e))?;
        let channels = serde_json::from_slice(&expand(&channels)?).map_err(corrupt)?;
        let read = Arc::new(Layout::new(channels));
        let mut all = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        all.insert(id, Arc::clone(&read));
        Ok(read)
    }
}

/// A batch with its numbers.
pub(in crate::store::sqlite) struct Batch {
    /// The batch.
    pub batch: DayBatch,
    /// Its numbers.
    pub values: Values,
}

impl Batch {
    /// Its place in the order of time.
    pub fn place(&self) -> Cursor {
        Cursor {
            start_ns: self.batch.start,
            id: self.batch.id,
        }
    }
}

/// Where the numbers of a batch are.
pub(in crate::store::sqlite) enum Values {
    /// Here, as its layout says.
    Hot(Vec<u8>),
    /// At this place of the day's columns.
    Chunked(usize),
}

/// A day of a plant.
pub(in crate::store::sqlite) struct Day {
    /// Its number.
    pub day: i64,
    /// It has changed since it was chunked, or never was.
    pub dirty: bool,
    /// Retention has removed its numbers.
    pub closed: bool,
    /// Where its chunks are.
    pub side: Option<i64>,
    /// Of what its chunks are, where they were asked for.
    pub chunked: Vec<DayBatch>,
    /// Verdicts by hour, as bytes.
    pub verdicts: Vec<u8>,
}

type DayRow = (
    i64,
    Option<i64>,
    Option<i64>,
    bool,
    Option<Vec<u8>>,
    Option<Vec<u8>>,
);

/// Ticket, name, start, end, verdict, layout, numbers.
type HotRow = (i64, String, i64, i64, String, i64, Vec<u8>);

/// The columns of a day that were asked for, by channel.
#[derive(Default)]
pub(in crate::store::sqlite) struct Chunked(HashMap<(i64, Field), Vec<f64>>);

impl Chunked {
    /// One value; `None` for none.
    pub fn value(&self, channel: i64, field: Field, at: usize) -> Result<Option<f64>, StoreError> {
        let column = self.0.get(&(channel, field));
        let value = column.and_then(|column| column.get(at)).copied();
        let value = value.ok_or_else(|| corrupt("a day that lacks a chunk"))?;
        Ok((!value.is_nan()).then_some(value))
    }
}

/// Some channels of a plant over time, in one read transaction.
pub(in crate::store::sqlite) struct Past<'c> {
    on: &'c mut SqliteConnection,
    /// Number of the plant.
    plant: i64,
    /// Channels that were asked for.
    channels: Vec<(i64, Channel)>,
    fields: Vec<Field>,
    from: i64,
    to: i64,
    /// The day that comes next.
    next: i64,
    last: i64,
    /// Chunks of the days that were answered last.
    chunks: HashMap<i64, Vec<u8>>,
}

impl<'c> Past<'c> {
    /// From a time, and before another, both in nanoseconds.
    pub async fn new(
        on: &'c mut SqliteConnection,
        plant: i64,
        selectors: &[Selector],
        fields: Vec<Field>,
        (from, to): (i64, i64),
    ) -> Result<Self, StoreError> {
        let names: Vec<&str> = selectors.iter().map(Selector::name).collect();
        let rows: Vec<(i64, String, String, String)> = sqlx::query_as(sql::CHANNELS_NAMED)
            .bind(plant)
            .bind(Value::from(names).to_string())
            .fetch_all(&mut *on)
            .await
            .map_err(|e| explain(&e))?;
        let mut channels = Vec::new();
        for (id, name, kind, unit) in rows {
            let kind = ChannelKind::named(&kind).ok_or_else(|| corrupt(format!("kind {kind}")))?;
            let mut selected = selectors.iter().filter(|s| s.name() == name);
            if selected.any(|selector| kind.answers(selector)) {
                channels.push((id, Channel { name, unit, kind }));
            }
        }
        Ok(Past {
            on,
            plant,
            channels,
            fields,
            from,
            to,
            next: super::day_of(from),
            last: if to > from {
                super::day_of(to.saturating_sub(1))
            } else {
                i64::MIN
            },
            chunks: HashMap::new(),
        })
    }

    /// The channels, with their numbers.
    pub fn channels(&self) -> &[(i64, Channel)] {
        &self.channels
    }

    /// The connection.
    pub fn on(&mut self) -> &mut SqliteConnection {
        self.on
    }

    /// The next days that have anything, none at the end. Chunks are read of
    /// those that `chunks` says yes to, being told whether a day is dirty and
    /// whether it is closed.
    pub async fn days(&mut self, chunks: fn(bool, bool) -> bool) -> Result<Vec<Day>, StoreError> {
        if self.next > self.last {
            return Ok(Vec::new());
        }
        let window = (HELD / self.channels.len().max(1)).clamp(1, MOST_DAYS);
        let rows: Vec<DayRow> = sqlx::query_as(sql::DAYS)
            .bind(self.plant)
            .bind(self.next)
            .bind(self.last)
            .bind(window as i64)
            .fetch_all(&mut *self.on)
            .await
            .map_err(|e| explain(&e))?;
        let full = rows.len() == window;
        let mut found = Vec::new();
        let mut keys = Vec::new();
        for (day, generation, side, closed, batches, verdicts) in rows {
            let mut day = Day {
                day,
                dirty: generation.is_some(),
                closed,
                side,
                chunked: Vec::new(),
                verdicts: verdicts.unwrap_or_default(),
            };
            if let Some(side) = side
                && chunks(day.dirty, closed)
            {
                day.chunked = days::read_batches(&batches.unwrap_or_default()).map_err(corrupt)?;
                if !day.chunked.is_empty() {
                    let of_day = self.channels.iter();
                    keys.extend(of_day.map(|(id, _)| chunk_key(day.day, side, *id)));
                }
            }
            found.push(day);
        }
        self.next = match found.last() {
            Some(day) if full => day.day + 1,
            _ => i64::MAX,
        };
        self.chunks = read_chunks(self.on, &keys).await?;
        Ok(found)
    }

    /// The columns of a day's chunks.
    pub fn chunked(&self, day: &Day) -> Result<Chunked, StoreError> {
        let mut columns = HashMap::new();
        let Some(side) = day.side else {
            return Ok(Chunked(columns));
        };
        for (id, channel) in &self.channels {
            let Some(chunk) = self.chunks.get(&chunk_key(day.day, side, *id)) else {
                continue;
            };
            for &field in &self.fields {
                if !channel.kind.fields().contains(&field) {
                    continue;
                }
                let column = days::read_field(channel.kind, chunk, field).map_err(corrupt)?;
                if column.len() != day.chunked.len() {
                    return Err(corrupt("a chunk that does not fit its day"));
                }
                columns.insert((*id, field), column);
            }
        }
        Ok(Chunked(columns))
    }

    /// Batches of a day that have numbers, beyond a place and within the time
    /// asked for, at most so many. Fewer than asked for does not mean that there
    /// are no more: the place where it goes on is answered too, `None` at the
    /// end of the day.
    pub async fn batches(
        &mut self,
        day: &Day,
        after: Cursor,
        limit: usize,
    ) -> Result<(Vec<Batch>, Option<Cursor>), StoreError> {
        let is_asked = |batch: &DayBatch| {
            (self.from..self.to).contains(&batch.start)
                && (batch.start, batch.id) > (after.start_ns, after.id)
        };
        if !day.dirty {
            let all = day.chunked.iter().enumerate();
            let asked = all.filter(|(_, batch)| is_asked(batch)).take(limit);
            let asked = asked.map(|(at, batch)| Batch {
                batch: batch.clone(),
                values: Values::Chunked(at),
            });
            return Ok((asked.collect(), None));
        }
        let (first, last) = day_bounds(day.day);
        let places: HashMap<i64, usize> = day
            .chunked
            .iter()
            .enumerate()
            .map(|(at, batch)| (batch.id, at))
            .collect();
        let wanted = limit.min(HOT);
        let rows: Vec<HotRow> = sqlx::query_as(sql::HOT_ROWS)
            .bind(self.plant)
            .bind(first.max(self.from))
            .bind(last.saturating_add(1).min(self.to))
            .bind(after.start_ns)
            .bind(after.id)
            .bind(wanted as i64)
            .fetch_all(&mut *self.on)
            .await
            .map_err(|e| explain(&e))?;
        let next = rows.last().filter(|_| rows.len() == wanted);
        let next = next.map(|row| Cursor {
            start_ns: row.2,
            id: row.0,
        });
        let mut batches = Vec::with_capacity(rows.len());
        for (id, name, start, end, verdict_name, layout, numbers) in rows {
            let values = match places.get(&id) {
                _ if !numbers.is_empty() => Values::Hot(numbers),
                Some(&at) => Values::Chunked(at),
                // Retention has removed them.
                None => continue,
            };
            batches.push(Batch {
                batch: DayBatch {
                    id,
                    name,
                    start,
                    end,
                    verdict: verdict(&verdict_name)?,
                    layout,
                },
                values,
            });
        }
        Ok((batches, next))
    }
}

/// Chunks by their numbers, those that there are.
pub(super) async fn read_chunks(
    on: &mut SqliteConnection,
    keys: &[i64],
) -> Result<HashMap<i64, Vec<u8>>, StoreError> {
    if keys.is_empty() {
        return Ok(HashMap::new());
    }
    let rows: Vec<(i64, Vec<u8>)> = sqlx::query_as(sql::CHUNKS)
        .bind(Value::from(keys.to_vec()).to_string())
        .fetch_all(on)
        .await
        .map_err(|e| explain(&e))?;
    Ok(rows.into_iter().collect())
}
