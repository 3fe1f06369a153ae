//! Samples as historians send them, the periods that they belong to, and how a
//! period becomes a batch.
//!
//! Samples are the acknowledged record: `Ok` from
//! [`add_samples`](ReadingsStore::add_samples) means that they are on disk, and
//! with them, in one transaction, which periods have to be made or made again.
//! A period stays open in the store until its batch is accepted, so that a start
//! goes on where the end left off.

use super::{Incoming, Reply, Ticket};
use crate::plant::Sample;
use time::{Duration, OffsetDateTime};

/// Samples to be kept.
#[derive(Clone, Debug)]
pub struct NewSamples {
    /// Name of the plant.
    pub plant: String,
    /// When they came.
    pub received: OffsetDateTime,
    /// Length of the plant's periods, aligned to 1970.
    pub period: Duration,
    /// Samples by tag, in any order of time.
    pub tags: Vec<NewTagSamples>,
    /// Which backfill brought them, and how far it has come with them; live
    /// ones have none.
    pub backfill: Option<BackfillMark>,
}

/// Samples of one tag.
#[derive(Clone, Debug)]
pub struct NewTagSamples {
    /// Name of the tag.
    pub tag: String,
    /// A value holds for so long: a late one changes the means of the periods
    /// up to the next sample, but not beyond this.
    pub holds: Duration,
    /// The samples.
    pub samples: Vec<Sample>,
}

/// How far a backfill has come: kept with the samples, so that it can go on
/// after a cut.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct BackfillMark {
    /// The client's name for it.
    pub name: String,
    /// Bytes of its content (after decompression) that are settled.
    pub bytes: u64,
    /// Lines of its content that are settled.
    pub lines: u64,
    /// Samples refused so far, by reason.
    pub refused: u64,
}

/// What became of samples.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct SamplesTaken {
    /// Samples that are new.
    pub new: u64,
    /// Samples that were there already with the same content.
    pub known: u64,
    /// Samples at an instant for which the tag has another value, by place of
    /// the tag and of the sample; the earlier one stands.
    pub conflicting: Vec<(usize, usize)>,
}

/// A period that has to be made.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct OpenPeriod {
    /// Name of the plant.
    pub plant: String,
    /// Its start.
    pub start: OffsetDateTime,
    /// Its end.
    pub end: OffsetDateTime,
    /// Grows whenever samples that matter to it come.
    pub generation: i64,
    /// Only a backfill has touched it: live ones go first.
    pub backfill: bool,
    /// When the newest sample that matters to it came.
    pub touched: OffsetDateTime,
}

/// A period's batch.
#[derive(Clone, Debug)]
pub struct PeriodBatch {
    /// The batch.
    pub incoming: Incoming,
    /// The generation of the period that it was made from.
    pub generation: i64,
}

/// What became of a period's batch.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Closed {
    /// It is a new batch.
    New(Ticket),
    /// The batch was there with other content: this is what it is made from
    /// from now on, and it has to be reconciled (again).
    Changed(Ticket),
    /// The batch was there with this content; nothing is to be done.
    Same(Ticket),
    /// Samples have come since; the period stays open.
    Overtaken,
    /// A client has sent a batch of this name; the period is closed without.
    NameTaken,
    /// There is no such plant.
    NoPlant,
}

/// Samples of one tag as they are stored.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct TagSamples {
    /// Name of the tag.
    pub tag: String,
    /// In order of time: those within the period asked for, the last one before
    /// its start and the first one at or after its end, where there are.
    pub samples: Vec<Sample>,
}

/// A backfill.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Backfill {
    /// How far it has come.
    pub mark: BackfillMark,
    /// When it was begun.
    pub begun: OffsetDateTime,
    /// When it last came on.
    pub touched: OffsetDateTime,
    /// Its content has been settled to the end.
    pub complete: bool,
    /// Samples of it that were new.
    pub new: u64,
    /// Periods of the plant that backfills have opened and that are not made.
    pub periods_open: u64,
}

/// Samples and periods.
pub trait ReadingsStore: Send + Sync + 'static {
    /// Makes samples durable and opens the periods whose means they change: of
    /// a sample its own period, and of those that have a batch every one from
    /// the sample before it to the sample after it, but not beyond `holds`.
    /// `None` where there is no such plant.
    fn add_samples(&self, new: NewSamples) -> Reply<'_, Option<SamplesTaken>>;

    /// Samples of all tags of a plant that matter to a period; see
    /// [`TagSamples`].
    fn samples<'a>(
        &'a self,
        plant: &'a str,
        from: OffsetDateTime,
        to: OffsetDateTime,
        holds: Duration,
    ) -> Reply<'a, Vec<TagSamples>>;

    /// Open periods that end at or before a time, live ones first, the earliest
    /// first.
    fn open_periods(&self, due: OffsetDateTime, limit: usize) -> Reply<'_, Vec<OpenPeriod>>;

    /// Accepts a period's batch and closes the period, in one transaction. The
    /// batch is then pending like any other, also where it has a result
    /// already: [`Unfinished::again`](super::Unfinished) tells.
    fn close_period(&self, batch: PeriodBatch) -> Reply<'_, Closed>;

    /// Closes a period from which nothing can be made.
    fn drop_period(&self, period: OpenPeriod) -> Reply<'_, ()>;

    /// Begins a backfill, or answers how far the one of that name has come;
    /// `None` where there is no such plant.
    fn begin_backfill(
        &self,
        plant: &str,
        name: &str,
        at: OffsetDateTime,
    ) -> Reply<'_, Option<Backfill>>;

    /// Marks a backfill's content as settled to the end.
    fn end_backfill(&self, plant: &str, name: &str, at: OffsetDateTime) -> Reply<'_, ()>;

    /// One backfill.
    fn backfill<'a>(&'a self, plant: &'a str, name: &'a str) -> Reply<'a, Option<Backfill>>;

    /// Backfills of a plant in the order of their names, after the one named.
    fn backfills<'a>(
        &'a self,
        plant: &'a str,
        after: Option<&'a str>,
        limit: usize,
    ) -> Reply<'a, Vec<Backfill>>;
}
