//! Keeping the past: the steps of the background work, each short.

use super::Work;
use crate::store::numbers::Channel;
use crate::store::sqlite::history::{chunk_key, day_bounds, means_key};
use crate::store::sqlite::sql;
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;

/// Results of an older schema whose numbers one step moves.
const MOVED: i64 = 32;

/// Rows of numbers that one step deletes.
const SWEPT: i64 = 512;

/// Batches that one step removes.
const REMOVED: i64 = 128;

/// Samples that one step removes.
const REMOVED_SAMPLES: i64 = 4096;

type Ran<'a, T> = BoxFuture<'a, Result<T, sqlx::Error>>;

/// Keeps the numbers of a result where its day finds them, and tells the day.
pub(super) async fn keep_numbers(
    on: &mut SqliteConnection,
    inbox_id: i64,
    numbers: &[u8],
) -> Result<(), sqlx::Error> {
    sqlx::query(sql::PUT_HOT_NUMBERS)
        .bind(inbox_id)
        .bind(numbers)
        .execute(&mut *on)
        .await?;
    for statement in [sql::MARK_DIRTY, sql::UNREMOVE] {
        sqlx::query(statement)
            .bind(inbox_id)
            .execute(&mut *on)
            .await?;
    }
    Ok(())
}

/// Moves numbers that an older schema kept with the reports; answers whether
/// there were any.
pub(in crate::store::sqlite) struct MoveOld;

impl Work for MoveOld {
    type Output = bool;

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, bool> {
        async move {
            let left: Option<(i64, i64)> = sqlx::query_as(sql::OLD_NUMBERS)
                .fetch_optional(&mut *on)
                .await?;
            let Some((done, last)) = left else {
                return Ok(false);
            };
            let (to, count): (i64, i64) = sqlx::query_as(sql::OLD_STEP)
                .bind(done)
                .bind(last)
                .bind(MOVED)
                .fetch_one(&mut *on)
                .await?;
            let to = if count < MOVED { last } else { to };
            for statement in [sql::COPY_OLD_NUMBERS, sql::EMPTY_OLD_NUMBERS] {
                let step = sqlx::query(statement).bind(done).bind(to);
                step.execute(&mut *on).await?;
            }
            sqlx::query(sql::SET_OLD_NUMBERS)
                .bind(to)
                .execute(on)
                .await?;
            Ok(true)
        }
        .boxed()
    }
}

/// Makes channels known.
pub(in crate::store::sqlite) struct PutChannels {
    /// Number of the plant.
    pub plant: i64,
    /// Those that may be new.
    pub channels: Vec<Channel>,
}

impl Work for PutChannels {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, ()> {
        async move {
            for channel in &self.channels {
                sqlx::query(sql::INSERT_CHANNEL)
                    .bind(self.plant)
                    .bind(&channel.name)
                    .bind(channel.kind.name())
                    .bind(&channel.unit)
                    .execute(&mut *on)
                    .await?;
            }
            Ok(())
        }
        .boxed()
    }
}

/// What one channel has of a day.
pub(in crate::store::sqlite) struct Channelled {
    /// Number of the channel.
    pub channel: i64,
    /// Its chunk.
    pub numbers: Vec<u8>,
    /// Its means: daily and hourly; `None` where they stand.
    pub means: Option<(Vec<u8>, Vec<u8>)>,
}

/// Removes what an attempt that was given up has left on a side that nobody
/// reads: a chunk of it would not fit the day as it is now.
pub(in crate::store::sqlite) struct ClearSide {
    /// Number of the plant.
    pub plant: i64,
    /// The day.
    pub day: i64,
    /// The side.
    pub side: i64,
}

impl Work for ClearSide {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, ()> {
        delete_chunks(on, self.plant, self.day, self.side).boxed()
    }
}

/// Writes chunks of a day on a side that nobody reads yet.
pub(in crate::store::sqlite) struct PutChunks {
    /// The day.
    pub day: i64,
    /// The side.
    pub side: i64,
    /// What to write.
    pub rows: Vec<Channelled>,
}

impl Work for PutChunks {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, ()> {
        async move {
            for row in &self.rows {
                sqlx::query(sql::PUT_CHUNK)
                    .bind(chunk_key(self.day, self.side, row.channel))
                    .bind(&row.numbers)
                    .execute(&mut *on)
                    .await?;
                let Some((daily, hourly)) = &row.means else {
                    continue;
                };
                sqlx::query(sql::PUT_MEANS)
                    .bind(means_key(self.day, row.channel))
                    .bind(daily)
                    .bind(hourly)
                    .execute(&mut *on)
                    .await?;
            }
            Ok(())
        }
        .boxed()
    }
}

/// Has a day be read from the chunks that were written. Answers false, with
/// nothing done, where a result has come since.
pub(in crate::store::sqlite) struct DayDone {
    /// Number of the plant.
    pub plant: i64,
    /// The day.
    pub day: i64,
    /// What it was made from.
    pub generation: i64,
    /// Where its chunks are.
    pub side: i64,
    /// Its batches and verdicts; `None` where it has none.
    pub batches: Option<(Vec<u8>, Vec<u8>)>,
}

impl Work for DayDone {
    type Output = bool;

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, bool> {
        async move {
            let cleaned = sqlx::query(sql::CLEAN)
                .bind(self.plant)
                .bind(self.day)
                .bind(self.generation)
                .execute(&mut *on)
                .await?;
            if cleaned.rows_affected() == 0 {
                return Ok(false);
            }
            if let Some((batches, verdicts)) = &self.batches {
                sqlx::query(sql::PUT_DAY)
                    .bind(self.plant)
                    .bind(self.day)
                    .bind(self.side)
                    .bind(batches)
                    .bind(verdicts)
                    .execute(on)
                    .await?;
            }
            Ok(true)
        }
        .boxed()
    }
}

/// Deletes what a chunked day does not need any more; answers whether there
/// was such a day.
pub(in crate::store::sqlite) struct Sweep;

impl Work for Sweep {
    type Output = bool;

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, bool> {
        async move {
            let next: Option<(i64, i64, i64, i64)> = sqlx::query_as(sql::NEXT_TO_SWEEP)
                .fetch_optional(&mut *on)
                .await?;
            let Some((id, plant, day, side)) = next else {
                return Ok(false);
            };
            let (first, last) = day_bounds(day);
            let swept = sqlx::query(sql::SWEEP_NUMBERS)
                .bind(plant)
                .bind(first)
                .bind(last)
                .bind(SWEPT)
                .execute(&mut *on)
                .await?;
            // A full step may have left some.
            if swept.rows_affected() < SWEPT.unsigned_abs() {
                delete_chunks(&mut *on, plant, day, 1 - side).await?;
                sqlx::query(sql::SET_SWEPT).bind(id).execute(on).await?;
            }
            Ok(true)
        }
        .boxed()
    }
}

async fn delete_chunks(
    on: &mut SqliteConnection,
    plant: i64,
    day: i64,
    side: i64,
) -> Result<(), sqlx::Error> {
    sqlx::query(sql::DELETE_CHUNKS)
        .bind(plant)
        .bind(chunk_key(day, side, 0))
        .execute(on)
        .await?;
    Ok(())
}

/// Removes bodies and reports of days up to one; answers how many.
pub(in crate::store::sqlite) struct Remove {
    /// Name of the plant.
    pub plant: String,
    /// The last day of which nothing has to be kept.
    pub day: i64,
    /// When, nanoseconds since 1970.
    pub at: i64,
}

impl Work for Remove {
    type Output = u64;

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, u64> {
        async move {
            let plant: Option<i64> = sqlx::query_scalar(sql::FIND_PLANT)
                .bind(&self.plant)
                .fetch_optional(&mut *on)
                .await?;
            let Some(plant) = plant else {
                return Ok(0);
            };
            let held: String = sqlx::query_scalar(sql::HELD_SPANS)
                .bind(plant)
                .fetch_one(&mut *on)
                .await?;
            let batches: Vec<(i64, i64)> = sqlx::query_as(sql::REMOVABLE)
                .bind(plant)
                .bind(self.day)
                .bind(held)
                .bind(REMOVED)
                .fetch_all(&mut *on)
                .await?;
            for (id, _) in &batches {
                sqlx::query(sql::REMOVE_BODY)
                    .bind(id)
                    .bind(self.at)
                    .execute(&mut *on)
                    .await?;
                for statement in [
                    sql::REMOVE_LATER_BODIES,
                    sql::REMOVE_REPORT,
                    sql::REMOVE_FORMER,
                ] {
                    sqlx::query(statement).bind(id).execute(&mut *on).await?;
                }
            }
            let days = batches.iter().map(|&(_, day)| day);
            if let (Some(first), Some(last)) = (days.clone().min(), days.max()) {
                let bare = sqlx::query(sql::SET_BARE).bind(plant);
                bare.bind(first).bind(last).execute(on).await?;
            }
            Ok(batches.len() as u64)
        }
        .boxed()
    }
}

/// Removes the chunks of a day of which no report is left; answers whether there
/// was one.
pub(in crate::store::sqlite) struct CloseDay {
    /// Name of the plant.
    pub plant: String,
    /// The last day of which nothing has to be kept.
    pub day: i64,
}

impl Work for CloseDay {
    type Output = bool;

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, bool> {
        async move {
            let plant: Option<i64> = sqlx::query_scalar(sql::FIND_PLANT)
                .bind(&self.plant)
                .fetch_optional(&mut *on)
                .await?;
            let Some(plant) = plant else {
                return Ok(false);
            };
            let next: Option<(i64, i64, i64)> = sqlx::query_as(sql::NEXT_BARE)
                .bind(plant)
                .bind(self.day)
                .fetch_optional(&mut *on)
                .await?;
            let Some((id, day, side)) = next else {
                return Ok(false);
            };
            delete_chunks(&mut *on, plant, day, side).await?;
            sqlx::query(sql::CLOSE_DAY).bind(id).execute(on).await?;
            Ok(true)
        }
        .boxed()
    }
}

/// Removes samples before a time; answers how many.
pub(in crate::store::sqlite) struct RemoveSamples {
    /// Name of the plant.
    pub plant: String,
    /// The time, nanoseconds since 1970.
    pub before: i64,
}

impl Work for RemoveSamples {
    type Output = u64;

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, u64> {
        async move {
            let removed = sqlx::query(sql::REMOVE_SAMPLES)
                .bind(&self.plant)
                .bind(self.before)
                .bind(REMOVED_SAMPLES)
                .execute(on)
                .await?;
            Ok(removed.rows_affected())
        }
        .boxed()
    }
}

/// Gives free pages back to the file system, a bounded number.
pub(in crate::store::sqlite) struct GiveBack;

impl Work for GiveBack {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> Ran<'a, ()> {
        async move {
            sqlx::query(sql::GIVE_BACK).execute(on).await?;
            Ok(())
        }
        .boxed()
    }
}
