//! Keeping samples, and with them which periods have to be made.
//!
//! A call costs a handful of statements whatever the number of its tags: one
//! asks for all samples that may be there already, few insert what is new, one
//! opens periods.

mod periods;
mod sift;

use super::Work;
use crate::store::sqlite::fault::{corrupt, nanoseconds};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::signed;
use crate::store::{BackfillMark, NewSamples, SamplesTaken, StoreError};
use futures::FutureExt;
use futures::future::BoxFuture;
use periods::{Periods, aligned};
use sift::{Row, Stretch, Tag};
use sqlx::sqlite::SqliteConnection;
use std::collections::HashMap;

/// Samples that take as long as one ordinary job.
const SAMPLES_A_JOB: usize = 64;

/// Keeps samples.
pub(in crate::store::sqlite) struct AddSamples {
    plant: String,
    received: i64,
    period: i64,
    tags: Vec<Tag>,
    count: usize,
    backfill: Option<BackfillMark>,
}

/// A sample that is there, with the place of the stretch that it lies in.
type ThereRow = (i64, i64, Option<f64>, i64, Option<i64>);

/// What is new in a stretch, and what else is there.
struct Kept<'a> {
    tag: &'a Tag,
    tag_id: i64,
    stretch: &'a Stretch,
    there: Vec<Row>,
    new: Vec<Row>,
}

impl AddSamples {
    /// Refuses a value that is no number, and a period without length: there are
    /// no such columns.
    pub fn new(new: NewSamples) -> Result<Self, StoreError> {
        let period = i64::try_from(new.period.whole_nanoseconds()).unwrap_or(0);
        if period <= 0 {
            return Err(corrupt(format!("a period of {}", new.period)));
        }
        Ok(AddSamples {
            plant: new.plant,
            received: nanoseconds(new.received),
            period,
            count: new.tags.iter().map(|tag| tag.samples.len()).sum(),
            tags: sift::by_tag(new.tags, period)?,
            backfill: new.backfill,
        })
    }

    async fn tag_ids(
        &self,
        on: &mut SqliteConnection,
        plant: i64,
    ) -> Result<Vec<i64>, sqlx::Error> {
        let names: Vec<&str> = self.tags.iter().map(|tag| tag.name.as_str()).collect();
        let known: Vec<(String, i64)> = sqlx::query_as(sql::SAMPLE_TAGS)
            .bind(plant)
            .bind(json(&names)?)
            .fetch_all(&mut *on)
            .await?;
        let known: HashMap<String, i64> = known.into_iter().collect();
        let mut ids = Vec::with_capacity(names.len());
        for name in names {
            ids.push(match known.get(name) {
                Some(id) => *id,
                None => {
                    sqlx::query_scalar(sql::INSERT_SAMPLE_TAG)
                        .bind(plant)
                        .bind(name)
                        .fetch_one(&mut *on)
                        .await?
                }
            });
        }
        Ok(ids)
    }

    /// Looks at what is there and keeps what is not.
    async fn keep(
        &self,
        on: &mut SqliteConnection,
        plant: i64,
        taken: &mut SamplesTaken,
    ) -> Result<Vec<Kept<'_>>, sqlx::Error> {
        let ids = self.tag_ids(&mut *on, plant).await?;
        let stretches: Vec<(&Tag, i64, &Stretch)> = self
            .tags
            .iter()
            .zip(ids)
            .flat_map(|(tag, id)| tag.stretches.iter().map(move |stretch| (tag, id, stretch)))
            .collect();
        let asked: Vec<(i64, i64, i64)> = stretches
            .iter()
            .map(|(_, id, stretch)| (*id, stretch.first, stretch.last))
            .collect();
        let mut there: Vec<Vec<Row>> = stretches.iter().map(|_| Vec::new()).collect();
        let rows: Vec<ThereRow> = sqlx::query_as(sql::SAMPLES_OF_STRETCHES)
            .bind(json(&asked)?)
            .fetch_all(&mut *on)
            .await?;
        for (place, time, value, grade, code) in rows {
            let rows = usize::try_from(place).ok().and_then(|at| there.get_mut(at));
            if let Some(rows) = rows {
                rows.push(Row {
                    time,
                    value,
                    grade,
                    code,
                });
            }
        }
        let mut kept = Vec::new();
        for ((tag, tag_id, stretch), there) in stretches.into_iter().zip(there) {
            let sifted = stretch.sift(&there);
            taken.known += sifted.known;
            taken.new += u64::try_from(sifted.new.len()).unwrap_or(u64::MAX);
            taken.conflicting.extend(sifted.conflicting);
            if !sifted.new.is_empty() {
                kept.push(Kept {
                    tag,
                    tag_id,
                    stretch,
                    there,
                    new: sifted.new,
                });
            }
        }
        taken.conflicting.sort_unstable();
        insert(on, &kept).await?;
        Ok(kept)
    }

    async fn open_periods(
        &self,
        on: &mut SqliteConnection,
        plant: i64,
        kept: &[Kept<'_>],
    ) -> Result<(), sqlx::Error> {
        let first = kept.iter().map(|kept| kept.reach().0).min();
        let last = kept.iter().map(|kept| kept.reach().1).max();
        let (Some(first), Some(last)) = (first, last) else {
            return Ok(());
        };
        let known = sqlx::query_as(sql::KNOWN_PERIODS)
            .bind(plant)
            .bind(aligned(first, self.period))
            .bind(last.saturating_add(self.period))
            .fetch_all(&mut *on)
            .await?;
        let mut periods = Periods::new(self.period, known);
        for row in kept.iter().flat_map(|kept| &kept.new) {
            periods.open_own(row.time);
        }
        let further: Vec<&Kept<'_>> = kept
            .iter()
            .filter(|kept| {
                let (from, to) = kept.reach();
                periods.would_open(from, to)
            })
            .collect();
        let asked: Vec<_> = further.iter().map(|kept| kept.asked()).collect();
        let neighbours: Vec<(Option<i64>, Option<i64>)> = if asked.is_empty() {
            Vec::new()
        } else {
            sqlx::query_as(sql::NEIGHBOURS)
                .bind(json(&asked)?)
                .fetch_all(&mut *on)
                .await?
        };
        let intervals = further.iter().zip(neighbours);
        let intervals = intervals.flat_map(|(kept, (before, after))| kept.changed(before, after));
        periods.open_within(intervals.collect());
        let generation: i64 = sqlx::query_scalar(sql::NEXT_GENERATION)
            .fetch_one(&mut *on)
            .await?;
        sqlx::query(sql::OPEN_PERIODS)
            .bind(plant)
            .bind(json(&periods.opened())?)
            .bind(generation)
            .bind(self.backfill.is_some())
            .bind(self.received)
            .execute(on)
            .await?;
        Ok(())
    }

    async fn mark(
        &self,
        on: &mut SqliteConnection,
        plant: i64,
        new: u64,
    ) -> Result<(), sqlx::Error> {
        let Some(mark) = &self.backfill else {
            return Ok(());
        };
        sqlx::query(sql::MARK_BACKFILL)
            .bind(plant)
            .bind(&mark.name)
            .bind(signed(mark.bytes))
            .bind(signed(mark.lines))
            .bind(signed(mark.refused))
            .bind(&mark.header)
            .bind(self.received)
            .bind(signed(new))
            .execute(on)
            .await?;
        Ok(())
    }
}

impl Work for AddSamples {
    type Output = Option<SamplesTaken>;

    fn weight(&self) -> usize {
        1 + self.count / SAMPLES_A_JOB
    }

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<SamplesTaken>, sqlx::Error>> {
        async move {
            let plant: Option<i64> = sqlx::query_scalar(sql::FIND_PLANT)
                .bind(&self.plant)
                .fetch_optional(&mut *on)
                .await?;
            let Some(plant) = plant else {
                return Ok(None);
            };
            let mut taken = SamplesTaken::default();
            if !self.tags.is_empty() {
                let kept = self.keep(&mut *on, plant, &mut taken).await?;
                self.open_periods(&mut *on, plant, &kept).await?;
            }
            self.mark(on, plant, taken.new).await?;
            Ok(Some(taken))
        }
        .boxed()
    }
}

impl Kept<'_> {
    /// As far as these samples can change anything.
    fn reach(&self) -> (i64, i64) {
        (
            self.stretch.first.saturating_sub(self.tag.reaches_back),
            self.stretch.last.saturating_add(self.tag.holds),
        )
    }

    /// What to ask [`sql::NEIGHBOURS`] for.
    fn asked(&self) -> (i64, i64, i64, i64, i64) {
        let (from, to) = self.reach();
        (self.tag_id, self.stretch.first, self.stretch.last, from, to)
    }

    /// The open intervals that the new samples change, given the samples before
    /// and after the stretch.
    fn changed(&self, before: Option<i64>, after: Option<i64>) -> Vec<(i64, i64)> {
        let within = self.there.iter().chain(&self.new).map(|row| row.time);
        let mut times: Vec<i64> = before.into_iter().chain(within).chain(after).collect();
        times.sort_unstable();
        let intervals = self.new.iter().map(|row| {
            let at = times.partition_point(|&time| time < row.time);
            let former = at.checked_sub(1).map_or(i64::MIN, |at| times[at]);
            let next = times.get(at + 1).copied().unwrap_or(i64::MAX);
            (
                former.max(row.time.saturating_sub(self.tag.reaches_back)),
                next.min(row.time.saturating_add(self.tag.holds)),
            )
        });
        intervals.collect()
    }
}

/// Inserts what is new, many samples by statement.
async fn insert(on: &mut SqliteConnection, kept: &[Kept<'_>]) -> Result<(), sqlx::Error> {
    let rows: Vec<(i64, &Row)> = kept
        .iter()
        .flat_map(|kept| kept.new.iter().map(|row| (kept.tag_id, row)))
        .collect();
    let mut rest = &rows[..];
    for (together, statement) in sql::INSERT_SAMPLES.iter() {
        while let Some((some, others)) = rest.split_at_checked(*together) {
            let mut query = sqlx::query(statement.as_str());
            for (tag, row) in some {
                query = query
                    .bind(tag)
                    .bind(row.time)
                    .bind(row.value)
                    .bind(row.grade)
                    .bind(row.code);
            }
            query.execute(&mut *on).await?;
            rest = others;
        }
    }
    Ok(())
}

/// Numbers or names for `json_each`.
fn json<T: serde::Serialize>(list: &[T]) -> Result<String, sqlx::Error> {
    serde_json::to_string(list).map_err(|error| sqlx::Error::Encode(Box::new(error)))
}
