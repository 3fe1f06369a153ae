//! Readings in: what the plant knows of them is sorted out and made durable.
//!
//! Samples are the record that is acknowledged; the batches of their periods are
//! made later, by [`periods`](super::periods).

use super::{Engine, no_plant};
use crate::averaging;
use crate::http::error::Problem;
use crate::http::revisions::Revision;
use crate::ingest::Readings;
use crate::plant::{Plant, Sample};
use crate::store::{BackfillMark, NewSamples, NewTagSamples, SamplesTaken};
use indexmap::IndexSet;
use serde::Serialize;
use std::sync::Arc;
use time::{Duration, OffsetDateTime};
use utoipa::ToSchema;

/// Readings that are told by name; the rest is counted.
pub(in crate::http) const MOST_TOLD: usize = 1000;

/// A reading that was not taken.
#[derive(Clone, Debug, Serialize, ToSchema)]
pub(in crate::http) struct RefusedReading {
    /// Tag.
    #[schema(example = "FT-201")]
    pub tag: String,
    /// When it was taken, UTC.
    #[serde(with = "time::serde::rfc3339")]
    pub time: OffsetDateTime,
    /// Why.
    #[schema(example = "its period ended more than 24 h ago")]
    pub reason: String,
}

/// What became of readings.
#[derive(Clone, Debug, Default, Serialize, ToSchema)]
pub(in crate::http) struct Taken {
    /// Readings that are new.
    pub taken: u64,
    /// Readings that were there already.
    pub known: u64,
    /// Readings that were not taken; the first thousand.
    pub refused: Vec<RefusedReading>,
    /// How many were not taken.
    pub refused_count: u64,
    /// Tags that the plant file does not know; the first thousand. Their
    /// readings are neither kept nor refused.
    #[schema(value_type = Vec<String>)]
    pub ignored_tags: IndexSet<String>,
    /// Readings of tags that the plant file does not know.
    pub ignored_count: u64,
}

/// Readings that the plant knows what to do with.
pub(super) struct Sorted {
    tags: Vec<NewTagSamples>,
    taken: Taken,
}

impl Sorted {
    /// Sorts readings out: unknown tags, times that cannot be kept and, where
    /// there is a horizon, those beyond it are left out. `now` is when they
    /// came.
    pub fn new(plant: &Plant, readings: Readings, now: Option<OffsetDateTime>) -> Self {
        let mut sorted = Sorted {
            tags: Vec::with_capacity(readings.tags.len()),
            taken: Taken::default(),
        };
        for (tag, samples) in readings.tags {
            let Some(holds) = averaging::holds(plant, &tag) else {
                sorted.taken.ignored_count += samples.len() as u64;
                if sorted.taken.ignored_tags.len() < MOST_TOLD {
                    sorted.taken.ignored_tags.insert(tag);
                }
                continue;
            };
            let samples = sorted.keep(plant, &tag, samples, now);
            if !samples.is_empty() {
                sorted.tags.push(NewTagSamples {
                    reaches_back: averaging::reaches_back(plant, &tag),
                    tag,
                    holds,
                    samples,
                });
            }
        }
        sorted
    }

    /// How many are refused so far.
    pub fn refused(&self) -> u64 {
        self.taken.refused_count
    }

    fn keep(
        &mut self,
        plant: &Plant,
        tag: &str,
        mut samples: Vec<Sample>,
        now: Option<OffsetDateTime>,
    ) -> Vec<Sample> {
        samples.retain(|sample| match reason(plant, sample.time, now) {
            Some(reason) => {
                self.taken.refuse(tag, sample.time, reason);
                false
            }
            None => true,
        });
        samples
    }

    /// As the store takes them.
    pub fn into_new(
        self,
        plant: &Plant,
        received: OffsetDateTime,
        backfill: Option<BackfillMark>,
    ) -> (NewSamples, Names, Taken) {
        let names = Names::of(&self.tags);
        let new = NewSamples {
            plant: plant.name.clone(),
            received,
            period: plant.averaging.period,
            tags: self.tags,
            backfill,
        };
        (new, names, self.taken)
    }
}

/// Tags and times of samples that are on their way to the store.
pub(super) struct Names(Vec<(String, Vec<OffsetDateTime>)>);

impl Names {
    fn of(tags: &[NewTagSamples]) -> Self {
        let times = |tag: &NewTagSamples| tag.samples.iter().map(|sample| sample.time).collect();
        Names(
            tags.iter()
                .map(|tag| (tag.tag.clone(), times(tag)))
                .collect(),
        )
    }
}

impl Taken {
    /// Adds what the store made of the rest.
    pub(super) fn stored(&mut self, stored: &SamplesTaken, names: &Names) {
        self.taken += stored.new;
        self.known += stored.known;
        let conflicting = stored.conflicting.iter().filter_map(|&(tag, sample)| {
            let (tag, times) = names.0.get(tag)?;
            Some((tag, *times.get(sample)?))
        });
        for (tag, time) in conflicting {
            let reason = "another value of this tag stands at this time".to_owned();
            self.refuse(tag, time, reason);
        }
    }

    /// Adds what became of others, in bounded memory.
    pub fn add(&mut self, other: Taken) {
        self.taken += other.taken;
        self.known += other.known;
        let room = MOST_TOLD.saturating_sub(self.refused.len());
        self.refused.extend(other.refused.into_iter().take(room));
        self.refused_count += other.refused_count;
        for tag in other.ignored_tags {
            if self.ignored_tags.len() < MOST_TOLD {
                self.ignored_tags.insert(tag);
            }
        }
        self.ignored_count += other.ignored_count;
    }

    fn refuse(&mut self, tag: &str, time: OffsetDateTime, reason: String) {
        self.refused_count += 1;
        if self.refused.len() < MOST_TOLD {
            self.refused.push(RefusedReading {
                tag: tag.to_owned(),
                time,
                reason,
            });
        }
    }
}

/// Why a reading of a time is not taken.
fn reason(plant: &Plant, time: OffsetDateTime, now: Option<OffsetDateTime>) -> Option<String> {
    // What is kept is nanoseconds in 64 bits.
    let start = period_start(time, plant.averaging.period);
    let Some(start) = start.filter(|_| i64::try_from(time.unix_timestamp_nanos()).is_ok()) else {
        return Some("this time cannot be kept".to_owned());
    };
    let horizon = plant.averaging.horizon;
    let late = now? - start - plant.averaging.period;
    (late > horizon).then(|| {
        let hours = horizon.as_seconds_f64() / 3600.0;
        format!("its period ended more than {hours} h ago: the horizon of late readings; a backfill takes it")
    })
}

/// Start of the period that a time belongs to.
fn period_start(time: OffsetDateTime, period: Duration) -> Option<OffsetDateTime> {
    let (time, period) = (time.unix_timestamp_nanos(), period.whole_nanoseconds());
    let start = time.checked_div_euclid(period)? * period;
    OffsetDateTime::from_unix_timestamp_nanos(start).ok()
}

impl Engine {
    /// Makes live readings durable.
    pub async fn take(
        &self,
        revision: Arc<Revision>,
        readings: Readings,
        received: OffsetDateTime,
    ) -> Result<Taken, Problem> {
        let plant = revision.compiled.plant();
        let sorted = Sorted::new(plant, readings, Some(received));
        let (new, names, mut taken) = sorted.into_new(plant, received, None);
        if !new.tags.is_empty() {
            let stored = self.store.add_samples(new).await?;
            let stored = stored.ok_or_else(|| no_plant(&plant.name))?;
            taken.stored(&stored, &names);
        }
        (self.metrics).samples(taken.taken, taken.known, taken.refused_count);
        Ok(taken)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use time::macros::datetime;

    #[test]
    fn periods_are_aligned_to_1970() {
        let five = Duration::minutes(5);
        let start = |time| period_start(time, five);
        let ten = datetime!(2031-04-02 10:00 UTC);
        assert_eq!(start(ten), Some(ten));
        assert_eq!(start(ten + five - Duration::nanoseconds(1)), Some(ten));
        assert_eq!(start(ten + five), Some(ten + five));
        let before = datetime!(1969-12-31 23:59 UTC);
        assert_eq!(start(before), Some(datetime!(1969-12-31 23:55 UTC)));
        assert_eq!(period_start(ten, Duration::ZERO), None);
    }
}
