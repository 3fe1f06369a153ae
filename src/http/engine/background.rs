//! What is worked off beside the live batches: periods that a backfill has
//! brought, and replays.
//!
//! Live goes first: one step at a time is taken, and only while fewer plants
//! have live batches in work than there are workers. So a live batch waits for
//! at most the one step that had begun when it came, and a fleet that is busy
//! all the time leaves its backfills for the night.

use super::{Engine, lock};
use crate::http::error::Problem;
use std::collections::HashSet;
use std::sync::Arc;
use std::sync::atomic::Ordering;
use std::time::Duration;
use time::{Duration as Span, OffsetDateTime};

/// A backfill that has not come on for so long does not hold up the periods that
/// it has brought.
const ABANDONED: Span = Span::hours(1);

/// Backfills of one plant that are looked at for one that goes on.
const BACKFILLS_LOOKED_AT: usize = 1000;

/// What a step came to.
enum Step {
    Done,
    Nothing,
    /// Live batches are in work.
    Busy,
}

impl Engine {
    /// Makes periods that are due, live ones first, and works off replays; for
    /// ever. Where there is nothing to do, the clock is looked at every `tick`.
    pub async fn work_off(self: Arc<Self>, tick: Duration) {
        loop {
            match self.make_live_periods().await {
                Ok(true) => continue,
                Ok(false) => {}
                Err(error) => {
                    tracing::warn!(%error, "open periods cannot be read; tried again");
                    tokio::time::sleep(tick).await;
                    continue;
                }
            }
            let freed = self.freed.notified();
            match self.background_step().await {
                Step::Done => {}
                Step::Nothing => tokio::time::sleep(tick).await,
                Step::Busy => {
                    let _ = tokio::time::timeout(tick, freed).await;
                }
            }
        }
    }

    async fn background_step(self: &Arc<Self>) -> Step {
        if !self.has_room() {
            return Step::Busy;
        }
        // In turns, so that neither keeps the other waiting for good.
        let turn = self.steps.fetch_add(1, Ordering::Relaxed);
        for at in 0..2 {
            let done = if (turn + at).is_multiple_of(2) {
                self.backfill_step().await
            } else {
                self.replay_step().await
            };
            match done {
                Ok(true) => return Step::Done,
                Ok(false) => {}
                Err(problem) => tracing::warn!(?problem, "work aside failed; it is tried again"),
            }
        }
        Step::Nothing
    }

    /// Whether a worker is left over by the live batches.
    fn has_room(&self) -> bool {
        let running = lock(&self.running);
        let live = running.values().filter(|work| !work.backfill);
        let plants: HashSet<&str> = live.map(|work| work.plant.as_str()).collect();
        plants.len() < self.most_workers
    }

    /// Makes one period that a backfill has brought.
    async fn backfill_step(self: &Arc<Self>) -> Result<bool, Problem> {
        let mut plants = self.store.plants_with_open_periods().await?;
        if plants.is_empty() {
            return Ok(false);
        }
        let now = self.clock.now();
        let first = self.steps.load(Ordering::Relaxed) / 2 % plants.len();
        plants.rotate_left(first);
        for plant in plants {
            let open = self.due(&plant, now, 1).await?;
            let Some(period) = open.into_iter().find(|period| period.backfill) else {
                continue;
            };
            if self.is_being_filled(&plant).await? {
                continue;
            }
            self.make(period, now).await?;
            return Ok(true);
        }
        Ok(false)
    }

    /// Whether a backfill of the plant goes on. Its periods wait for its end: a
    /// file in order of tags would have every period made again with each tag.
    async fn is_being_filled(&self, plant: &str) -> Result<bool, Problem> {
        if lock(&self.filling).iter().any(|(of, _)| of == plant) {
            return Ok(true);
        }
        let backfills = self.store.backfills(plant, None, BACKFILLS_LOOKED_AT);
        let now = self.clock.now();
        let goes_on = |touched: OffsetDateTime| (now - touched).abs() < ABANDONED;
        let mut backfills = backfills.await?.into_iter();
        Ok(backfills.any(|backfill| !backfill.complete && goes_on(backfill.touched)))
    }
}
