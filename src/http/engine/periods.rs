//! Periods that are due become batches.
//!
//! A period is due when its end and the plant's wait for late readings have
//! passed. Its batch is made from the samples of the store, accepted and finished
//! like one that a client has sent. Samples that come later reopen it: the batch
//! is then made and reconciled again, and its report gets a new version.
//!
//! Everything that a period is lies in the store until its batch does, so a look
//! that fails leaves it for the next look, and the clock only ever decides when:
//! a clock that jumps makes a period early or late, never twice and never not at
//! all.
//!
//! Periods that only a backfill has touched wait for the live ones
//! ([`background`](super::background)).

use super::{Engine, compute, parse};
use crate::averaging;
use crate::http::error::Problem;
use crate::http::metrics::Fate;
use crate::ingest;
use crate::plant::{Batch, Plant, Sample};
use crate::store::{
    Again, Closed, Incoming, OpenPeriod, PeriodBatch, StoreError, Stored, TagSamples, Unfinished,
};
use futures::StreamExt;
use std::collections::HashMap;
use std::sync::Arc;
use time::OffsetDateTime;
use time::format_description::well_known::Rfc3339;

/// Plants whose periods are made side by side. What is computed is bounded by
/// the workers; this bounds the samples in memory.
const PLANTS_TOGETHER: usize = 8;

/// Periods of one plant in one look: a plant with a backlog does not keep the
/// next look from the others.
const PERIODS_TOGETHER: usize = 8;

/// How often a batch is looked at again when samples come while it is made.
const ROUNDS: usize = 4;

/// Tags that the reason of a new version names.
const TAGS_NAMED: usize = 8;

/// Who is told to have asked for a new version.
const LATE_READINGS: &str = "late readings";

impl Engine {
    /// Makes live periods that are due, some of each plant. Answers whether
    /// there was one.
    pub(super) async fn make_live_periods(self: &Arc<Self>) -> Result<bool, StoreError> {
        let plants = self.store.plants_with_open_periods().await?;
        let made = futures::stream::iter(plants).map(|plant| async move {
            self.make_some(&plant).await.unwrap_or_else(|problem| {
                tracing::warn!(
                    plant,
                    ?problem,
                    "periods could not be made; they are tried again"
                );
                false
            })
        });
        let made = made.buffer_unordered(PLANTS_TOGETHER);
        Ok(made.fold(false, |any, one| async move { any | one }).await)
    }

    async fn make_some(self: &Arc<Self>, plant: &str) -> Result<bool, Problem> {
        let now = self.clock.now();
        let open = self.due(plant, now, PERIODS_TOGETHER).await?;
        let mut any = false;
        for period in open.into_iter().filter(|period| !period.backfill) {
            let start = period.start;
            match self.make(period, now).await {
                Ok(()) => any = true,
                // One that fails for good does not stand in the way of the others.
                Err(problem) => tracing::warn!(
                    plant,
                    %start,
                    ?problem,
                    "a period could not be made; it is tried again"
                ),
            }
        }
        Ok(any)
    }

    /// Open periods of a plant that are due, live ones first.
    pub(super) async fn due(
        &self,
        plant: &str,
        now: OffsetDateTime,
        limit: usize,
    ) -> Result<Vec<OpenPeriod>, Problem> {
        let revision = self.revisions.get(plant, None).await?;
        let wait = revision.compiled.plant().averaging.wait;
        Ok(self.store.open_periods(plant, now - wait, limit).await?)
    }

    /// Makes the batch of one period and finishes it, whether or not anybody
    /// waits. An error leaves the period open, or its batch to be finished at the
    /// next start.
    pub(super) async fn make(
        self: &Arc<Self>,
        period: OpenPeriod,
        now: OffsetDateTime,
    ) -> Result<(), Problem> {
        let engine = Arc::clone(self);
        let made = self.detached(async move { engine.make_now(period, now).await });
        made.await?
    }

    async fn make_now(
        self: &Arc<Self>,
        period: OpenPeriod,
        now: OffsetDateTime,
    ) -> Result<(), Problem> {
        let (plant, backfill) = (period.plant.clone(), period.backfill);
        let name = name_of(&period);
        let before = self.store.inbox(&plant, &name).await?;
        // What late samples say is in the units of the revision that the batch
        // has, so that is how they are averaged.
        let number = before.as_ref().map(|before| before.ticket.revision);
        let revision = self.revisions.get(&plant, number).await?;
        let number = revision.compiled.revision();
        if self.is_past(&period, &name, now).await? {
            self.metrics.period(Fate::Dropped);
            tracing::warn!(
                plant,
                batch = name,
                "readings came for a period whose samples or report retention has removed; its report stays as it was"
            );
            return Ok(self.store.drop_period(period).await?);
        }
        let (start, end) = (period.start, period.end);
        let (from, reach) = {
            let plant = revision.compiled.plant();
            (start - averaging::lookback(plant), averaging::reach(plant))
        };
        let samples = self.store.samples(&plant, from, end, reach).await?;
        let batch_name = name.clone();
        let batch = compute(move || {
            let plant = revision.compiled.plant();
            batch(plant, start, end, &batch_name, &samples)
        })
        .await?;
        if batch.readings.is_empty() {
            self.metrics.period(Fate::Dropped);
            tracing::info!(
                plant,
                batch = name,
                "nothing in this period is usable; no batch is made"
            );
            return Ok(self.store.drop_period(period).await?);
        }
        let (body, parsed) = parse(ingest::write(&batch), now).await?;
        let parsed = parsed?;
        let reason = match before {
            Some(before) => changes(before, &parsed.batch).await,
            None => None,
        };
        let incoming = Incoming {
            plant: plant.clone(),
            batch: name.clone(),
            digest: parsed.digest,
            start,
            end,
            received: now,
            body,
        };
        let closing = PeriodBatch {
            incoming,
            generation: period.generation,
            revision: number,
        };
        match self.store.close_period(closing).await? {
            Closed::New(ticket) => {
                self.metrics.period(Fate::Made);
                self.start(ticket, parsed.batch, backfill).await?;
            }
            Closed::Changed(_) => {
                self.metrics.period(Fate::Again);
                self.settle(&plant, &name, reason).await?;
            }
            Closed::NameTaken => {
                self.metrics.period(Fate::NameTaken);
                tracing::warn!(
                    plant,
                    batch = name,
                    "a client has sent a batch of the name of this period; none is made of its readings"
                );
            }
            // Samples that came meanwhile have the period made again; a plant
            // never goes away.
            Closed::Same(_) | Closed::Overtaken | Closed::NoPlant => {}
        }
        Ok(())
    }

    /// Whether a period has a report that can no longer be made from the whole of
    /// its samples: retention has removed some of them, or the report itself.
    async fn is_past(
        &self,
        period: &OpenPeriod,
        name: &str,
        now: OffsetDateTime,
    ) -> Result<bool, Problem> {
        let known = self.store.batch(&period.plant, name).await?;
        match known {
            None => Ok(false),
            Some(Stored::Removed(_)) => Ok(true),
            Some(Stored::Pending(_) | Stored::Done(_)) => {
                let present = self.revisions.get(&period.plant, None).await?;
                let kept = present.compiled.plant().retention.samples;
                Ok(kept.is_some_and(|kept| period.start < now - kept))
            }
        }
    }

    /// Reconciles the newest that a batch was made from, until there is nothing
    /// newer.
    pub(super) async fn settle(
        self: &Arc<Self>,
        plant: &str,
        batch: &str,
        reason: Option<String>,
    ) -> Result<(), Problem> {
        for _ in 0..ROUNDS {
            let Some(newest) = self.store.inbox(plant, batch).await? else {
                return Ok(());
            };
            if !newest.pending {
                return Ok(());
            }
            if newest.again {
                let again = Again {
                    at: self.clock.now(),
                    by: LATE_READINGS.to_owned(),
                    deed: None,
                    reason: reason.clone().unwrap_or_else(|| LATE_READINGS.to_owned()),
                };
                self.again_newest(plant, batch, again).await?;
            } else {
                let parsed = parse(newest.body, newest.received).await?.1?;
                self.start(newest.ticket, parsed.batch, newest.backfill)
                    .await?;
            }
        }
        Ok(())
    }
}

/// The name of a period's batch: its start.
fn name_of(period: &OpenPeriod) -> String {
    let start = period.start.to_offset(time::UtcOffset::UTC);
    // It is a time that RFC 3339 can write: it was read as one.
    start
        .format(&Rfc3339)
        .unwrap_or_else(|_| start.unix_timestamp_nanos().to_string())
}

fn batch(
    plant: &Plant,
    start: OffsetDateTime,
    end: OffsetDateTime,
    name: &str,
    samples: &[TagSamples],
) -> Batch {
    let by_tag: HashMap<&str, &[Sample]> = samples
        .iter()
        .map(|tag| (tag.tag.as_str(), tag.samples.as_slice()))
        .collect();
    averaging::batch(plant, start, end, name, &by_tag)
}

/// What late readings have changed, in words; `None` where the batch before
/// cannot be read.
async fn changes(before: Unfinished, now: &Batch) -> Option<String> {
    let before = parse(before.body, before.received)
        .await
        .ok()?
        .1
        .ok()?
        .batch;
    let before: HashMap<&str, _> = (before.readings.iter())
        .map(|reading| (reading.tag.as_str(), reading))
        .collect();
    let taken = |averaged: &Option<crate::plant::Averaged>| {
        averaged.as_ref().map_or(0, |averaged| averaged.taken)
    };
    let changed = now.readings.iter().filter_map(|reading| {
        let before = before.get(reading.tag.as_str()).copied();
        if before == Some(reading) {
            return None;
        }
        let had = before.map_or(0, |before| taken(&before.averaged));
        let more = taken(&reading.averaged).saturating_sub(had);
        Some(match more {
            // A neighbour's sample has changed how far a value holds.
            0 => reading.tag.clone(),
            more => format!("{} ({more} more)", reading.tag),
        })
    });
    let changed: Vec<String> = changed.collect();
    let named = changed[..changed.len().min(TAGS_NAMED)].join(", ");
    Some(match changed.len().saturating_sub(TAGS_NAMED) {
        0 => format!("late readings of {named}"),
        others => format!("late readings of {named} and {others} other tags"),
    })
}
