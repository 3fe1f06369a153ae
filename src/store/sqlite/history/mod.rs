//! What becomes of results with time.
//!
//! A result's numbers come into `hot_numbers` and its day is marked as dirty.
//! When the day is over, [`compact`] writes the day's chunks and means on a side
//! that nobody reads, in several short transactions, and a last one has readers
//! turn to them, unless a result has come meanwhile. Then the hot numbers go.
//! A day that becomes dirty again is read from both: hot numbers where there
//! are, its chunks where there are none. So the series never shows an old value,
//! and a kill at any place leaves what can be read and done again.

mod compact;
mod means;
mod source;

pub(super) use source::{Chunked, Day, Layouts, Past, Values};

use super::SqliteStore;
use super::fault::{explain, nanoseconds};
use super::sql;
use super::work::{CloseDay, GiveBack, MoveOld, Remove, RemoveSamples, Sweep};
use crate::plant::Retention;
use crate::store::averages::DAY;
use crate::store::{HistoryStore, MeansPage, MeansQuery, Reply, StoreError, Tidied};
use futures::FutureExt;
use time::{Duration, OffsetDateTime};

/// A day is left alone for so long after its end: most late results come then.
const REST: Duration = Duration::hours(1);

/// Added to a day, so that none is negative: 64 bits of nanoseconds reach from
/// day -106752 to 106751.
const FIRST_DAY: i64 = 1 << 17;

/// Room for the numbers of channels.
const CHANNEL_BITS: u32 = 24;

/// Free pages that are not given back: what comes next needs them again.
const SPARE_PAGES: i64 = 64;

/// The day of a time in nanoseconds.
pub(super) fn day_of(time: i64) -> i64 {
    time.div_euclid(DAY)
}

/// The first and the last nanosecond of a day.
pub(super) fn day_bounds(day: i64) -> (i64, i64) {
    let first = day.saturating_mul(DAY);
    (first, first.saturating_add(DAY - 1))
}

/// The number of a row in `chunks`.
pub(super) fn chunk_key(day: i64, side: i64, channel: i64) -> i64 {
    (day + FIRST_DAY) << (CHANNEL_BITS + 1) | side << CHANNEL_BITS | channel
}

/// The number of a row in `means`.
pub(super) fn means_key(day: i64, channel: i64) -> i64 {
    (day + FIRST_DAY) << CHANNEL_BITS | channel
}

impl HistoryStore for SqliteStore {
    fn tidy(&self, now: OffsetDateTime, retention: Vec<(String, Retention)>) -> Reply<'_, Tidied> {
        async move {
            let _turn = self.tidying.lock().await;
            self.turn(now, &retention).await
        }
        .boxed()
    }

    fn means(&self, query: MeansQuery) -> Reply<'_, MeansPage> {
        means::means(&self.readers, &self.layouts, query).boxed()
    }
}

impl SqliteStore {
    /// One of each kind of step.
    async fn turn(
        &self,
        now: OffsetDateTime,
        retention: &[(String, Retention)],
    ) -> Result<Tidied, StoreError> {
        let mut tidied = Tidied::default();
        // Days are chunked when every number stands in one place.
        if self.write(MoveOld).await? {
            tidied.more = true;
            return Ok(tidied);
        }
        let over = day_of(nanoseconds(now - REST)) - 1;
        if let Some(batches) = self.compact(over).await? {
            tidied.batches += batches;
            tidied.more = true;
        }
        if self.write(Sweep).await? {
            tidied.more = true;
        }
        for (plant, retention) in retention {
            if let Some(samples) = retention.samples {
                let plant = plant.clone();
                let before = nanoseconds(now - samples);
                let removed = self.write(RemoveSamples { plant, before }).await?;
                tidied.removed += removed;
                tidied.more |= removed > 0;
            }
            let Some(reports) = retention.reports else {
                continue;
            };
            let day = day_of(nanoseconds(now - reports)) - 1;
            let remove = Remove {
                plant: plant.clone(),
                day,
                at: nanoseconds(now),
            };
            let removed = self.write(remove).await?;
            let plant = plant.clone();
            let closed = self.write(CloseDay { plant, day }).await?;
            tidied.removed += removed;
            tidied.more |= removed > 0 || closed;
        }
        if !tidied.more {
            tidied.freed = self.give_back().await?;
            tidied.more = tidied.freed > 0;
        }
        Ok(tidied)
    }

    /// Gives free pages back, where the file was made so that it can; answers
    /// how many bytes.
    async fn give_back(&self) -> Result<u64, StoreError> {
        let (free, page, incremental) = self.free_pages().await?;
        if !incremental || free <= SPARE_PAGES {
            return Ok(0);
        }
        self.write(GiveBack).await?;
        let (left, _, _) = self.free_pages().await?;
        Ok(u64::try_from((free - left).max(0) * page).unwrap_or(0))
    }

    /// Free pages, their size, and whether they can be given back in steps.
    async fn free_pages(&self) -> Result<(i64, i64, bool), StoreError> {
        let (free, _, size, vacuum): (i64, i64, i64, i64) = sqlx::query_as(sql::FREE_PAGES)
            .fetch_one(&self.readers)
            .await
            .map_err(|e| explain(&e))?;
        Ok((free, size, vacuum == 2))
    }
}
