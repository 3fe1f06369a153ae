//! Keeping samples, and with them which periods have to be made.
//!
//! A call costs a handful of statements whatever the number of its tags: one
//! asks for all samples that may be there already, few insert what is new, one
//! opens periods.

mod kept;
mod periods;
mod sift;

use super::Work;
use crate::store::sqlite::fault::{corrupt, nanoseconds};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::signed;
use crate::store::{BackfillMark, NewSamples, SamplesTaken, StoreError};
use futures::FutureExt;
use futures::future::BoxFuture;
use kept::Kept;
use periods::{Periods, aligned};
use sift::{Row, Tag};
use sqlx::sqlite::SqliteConnection;
use std::collections::HashMap;

/// Samples that take as long as one ordinary job.
const SAMPLES_A_JOB: usize = 64;

/// Where so many more samples than came lie among them, they are looked for one
/// by one: a few samples across a year of others must not read the year.
const MANY: usize = 1000;

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
                let ids = self.tag_ids(&mut *on, plant).await?;
                let most = self.count.saturating_mul(4).saturating_add(MANY);
                let apart: Vec<Tag>;
                let (tags, there) = match there(&mut *on, &self.tags, &ids, most).await? {
                    Some(there) => (&self.tags, there),
                    None => {
                        apart = self.tags.iter().map(Tag::apart).collect();
                        let there = there(&mut *on, &apart, &ids, usize::MAX).await?;
                        (&apart, there.unwrap_or_default())
                    }
                };
                let kept = sift(tags, &ids, there, &mut taken);
                insert(&mut *on, &kept).await?;
                self.open_periods(&mut *on, plant, &kept).await?;
            }
            self.mark(on, plant, taken.new).await?;
            Ok(Some(taken))
        }
        .boxed()
    }
}

/// What is there in each stretch, in order of time; `None` where it is more than
/// so many.
async fn there(
    on: &mut SqliteConnection,
    tags: &[Tag],
    ids: &[i64],
    most: usize,
) -> Result<Option<Vec<Vec<Row>>>, sqlx::Error> {
    let asked: Vec<(i64, i64, i64)> = tags
        .iter()
        .zip(ids)
        .flat_map(|(tag, id)| tag.stretches.iter().map(|s| (*id, s.first, s.last)))
        .collect();
    let rows: Vec<ThereRow> = sqlx::query_as(sql::SAMPLES_OF_STRETCHES)
        .bind(json(&asked)?)
        .bind(i64::try_from(most).unwrap_or(i64::MAX))
        .fetch_all(on)
        .await?;
    if rows.len() >= most {
        return Ok(None);
    }
    let mut there: Vec<Vec<Row>> = asked.iter().map(|_| Vec::new()).collect();
    for (place, time, value, grade, code) in rows {
        let stretch = usize::try_from(place).ok();
        if let Some(stretch) = stretch.and_then(|place| there.get_mut(place)) {
            stretch.push(Row {
                time,
                value,
                grade,
                code,
            });
        }
    }
    for stretch in &mut there {
        stretch.sort_unstable_by_key(|row| row.time);
    }
    Ok(Some(there))
}

/// What is new in each stretch, the rest counted.
fn sift<'a>(
    tags: &'a [Tag],
    ids: &[i64],
    there: Vec<Vec<Row>>,
    taken: &mut SamplesTaken,
) -> Vec<Kept<'a>> {
    let stretches = tags.iter().zip(ids);
    let stretches =
        stretches.flat_map(|(tag, id)| tag.stretches.iter().map(move |s| (tag, *id, s)));
    let mut kept = Vec::new();
    for ((tag, tag_id, stretch), there) in stretches.zip(there) {
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
    kept
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
