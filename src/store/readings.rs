//! Samples as historians send them, the periods that they belong to, and how a
//! period becomes a batch.
//!
//! Samples are the acknowledged record: `Ok` from
//! [`add_samples`](ReadingsStore::add_samples) means that they are on disk, and
//! with them, in one transaction, which periods have to be made or made again.
//! A period stays open in the store until its batch is accepted, so that a start
//! goes on where the end left off.

use super::{Incoming, Reply, Ticket};
use crate::access::Deed;
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
    /// Where straight lines join the samples, one changes the means back to the
    /// sample before it as well, but not further than this; zero where a value
    /// holds until the next.
    pub reaches_back: Duration,
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
    /// Samples refused so far, for whatever reason.
    pub refused: u64,
    /// The first line of its content where that names the columns: who goes on
    /// with the rest need not send it again.
    pub header: Option<String>,
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
    /// Grows whenever samples that matter to it come, also over closings.
    pub generation: i64,
    /// Only a backfill has touched it: live ones go first.
    pub backfill: bool,
    /// When the newest sample that matters to it came.
    pub touched: OffsetDateTime,
}

/// A period's batch. That only a backfill brought it is known from the period.
#[derive(Clone, Debug)]
pub struct PeriodBatch {
    /// The batch.
    pub incoming: Incoming,
    /// The generation of the period that it was made from.
    pub generation: i64,
    /// The revision that it was averaged under: a new batch under another than
    /// the current one is overtaken.
    pub revision: u32,
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
    /// Samples or a revision have come since; the period stays open.
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
    /// its start and the first one at or after its end, where there are such no
    /// further away than `holds`: what lies beyond opens no period when it
    /// comes, so no mean may depend on it.
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
///
/// A batch made from samples has bodies, numbered from 1: a late sample adds
/// one, none is ever lost, and the newest counts. A [`Ticket`] says which body it
/// stands for, and the result that is kept with it is a result of that body. So
/// a result of an older body never ends the waiting for one of the newer.
pub trait ReadingsStore: Send + Sync + 'static {
    /// Makes samples durable and opens the periods whose means they change: of
    /// a sample its own period, and of those that have a batch or are open
    /// already every one from the sample before it (`reaches_back`) to the
    /// sample after it (`holds`). Where a period of another length lies in the
    /// way, made before the length was changed, that one is the sample's own or
    /// its own is shortened: periods never overlap. Samples that were there
    /// open nothing. Without samples only the backfill's mark is moved on; it
    /// never goes back.
    ///
    /// `None` where there is no such plant. Refused like a batch
    /// ([`Overloaded`](super::StoreError::Overloaded)) where the queue is full.
    fn add_samples(&self, new: NewSamples) -> Reply<'_, Option<SamplesTaken>>;

    /// Samples of all tags of a plant that matter to a period, in the order of
    /// the tags' names; see [`TagSamples`]. Tags without any are left out.
    fn samples<'a>(
        &'a self,
        plant: &'a str,
        from: OffsetDateTime,
        to: OffsetDateTime,
        holds: Duration,
    ) -> Reply<'a, Vec<TagSamples>>;

    /// Open periods of a plant that end at or before a time, live ones first,
    /// the earliest first.
    fn open_periods<'a>(
        &'a self,
        plant: &'a str,
        due: OffsetDateTime,
        limit: usize,
    ) -> Reply<'a, Vec<OpenPeriod>>;

    /// Names of the plants that have open periods, in their order.
    fn plants_with_open_periods(&self) -> Reply<'_, Vec<String>>;

    /// Accepts a period's batch and closes the period, in one transaction. The
    /// batch is then pending like any other, also where it has a result
    /// already: [`Unfinished::again`](super::Unfinished) tells. A period that is
    /// not open any more answers [`Closed::Same`] to the content that it has, and
    /// [`Closed::Overtaken`] to any other.
    fn close_period(&self, batch: PeriodBatch) -> Reply<'_, Closed>;

    /// Closes a period from which nothing can be made, unless samples have come
    /// since.
    fn drop_period(&self, period: OpenPeriod) -> Reply<'_, ()>;

    /// A body of a batch by its number: what a version of its report
    /// ([`VersionLine::body`](super::VersionLine)) was made from. Body 1 is the
    /// batch as it was accepted.
    fn body<'a>(&'a self, plant: &'a str, batch: &'a str, body: u32) -> Reply<'a, Option<Vec<u8>>>;

    /// Begins a backfill and notes it, or answers how far the one of that name
    /// has come; `None` where there is no such plant.
    fn begin_backfill(
        &self,
        plant: &str,
        name: &str,
        at: OffsetDateTime,
        deed: Option<Deed>,
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
