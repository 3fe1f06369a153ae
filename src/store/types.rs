//! What goes into a store and comes out of it.

use crate::access::Deed;
use crate::report::{Report, Verdict};
use time::OffsetDateTime;

/// Why a store did not do what it was asked. Nothing was acknowledged.
#[derive(Clone, Debug, thiserror::Error)]
pub enum StoreError {
    /// It cannot write or read now: full disk, locked or read-only file. It may
    /// be able to later.
    #[error("the store cannot be used now: {0}")]
    Unavailable(String),
    /// More is waiting than it is allowed to queue.
    #[error("the store has too much to do")]
    Overloaded,
    /// It cannot be opened: too old, too new, damaged.
    #[error("{0}")]
    Unusable(String),
    /// What it holds does not make sense.
    #[error("the store holds something unreadable: {0}")]
    Corrupt(String),
}

/// How a store is.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Health {
    /// It takes writes.
    Ready,
    /// It does not now, and tries again by itself.
    Unready(String),
    /// The disk did not keep a write that it had been asked to keep: nothing
    /// that is written from here on can be trusted, so the service has to end.
    Failed(String),
}

/// A plant file to be taken.
#[derive(Clone, Debug)]
pub struct NewPlant {
    /// Name of the plant.
    pub name: String,
    /// Its title.
    pub title: String,
    /// Media type of `source`.
    pub media_type: String,
    /// As sent.
    pub source: String,
    /// The same as JSON.
    pub canonical: String,
    /// When it came.
    pub received: OffsetDateTime,
    /// What must hold for it to be taken.
    pub precondition: Precondition,
    /// What of it goes into the audit log.
    pub deed: Option<Deed>,
}

/// A condition on the current revision.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub enum Precondition {
    /// None.
    #[default]
    Any,
    /// There is no such plant yet (`If-None-Match: *`).
    Absent,
    /// There is one (`If-Match: *`).
    Present,
    /// The current revision is one of these (`If-Match`): number and the first
    /// digits of the digest.
    OneOf(Vec<(u32, String)>),
    /// It is none of these (`If-None-Match`).
    NoneOf(Vec<(u32, String)>),
}

impl Precondition {
    /// Whether it holds for the current revision of a plant.
    pub fn holds(&self, current: Option<&StoredPlant>) -> bool {
        let is_among = |revisions: &[(u32, String)]| {
            current.is_some_and(|current| {
                revisions.iter().any(|(revision, digits)| {
                    *revision == current.revision && current.digest.starts_with(digits)
                })
            })
        };
        match self {
            Precondition::Any => true,
            Precondition::Absent => current.is_none(),
            Precondition::Present => current.is_some(),
            Precondition::OneOf(revisions) => is_among(revisions),
            Precondition::NoneOf(revisions) => !is_among(revisions),
        }
    }
}

/// What became of a plant file.
#[derive(Clone, Debug, PartialEq)]
pub enum PutOutcome {
    /// It is a new revision.
    Created(StoredPlant),
    /// It is what the current revision is.
    Unchanged(StoredPlant),
    /// The precondition does not hold; nothing was done.
    PreconditionFailed,
}

/// One revision of a plant.
#[derive(Clone, Debug, PartialEq)]
pub struct StoredPlant {
    /// Name of the plant.
    pub name: String,
    /// Number, from 1.
    pub revision: u32,
    /// SHA-256 of `canonical`, in hexadecimal.
    pub digest: String,
    /// Media type of `source`.
    pub media_type: String,
    /// As sent.
    pub source: String,
    /// The same as JSON.
    pub canonical: String,
    /// When it came.
    pub created: OffsetDateTime,
}

/// A plant in a list.
#[derive(Clone, Debug, PartialEq)]
pub struct PlantLine {
    /// Name.
    pub name: String,
    /// Title.
    pub title: String,
    /// Current revision.
    pub revision: u32,
    /// When that came.
    pub created: OffsetDateTime,
}

/// A batch to be accepted.
#[derive(Clone, Debug)]
pub struct Incoming {
    /// Name of the plant.
    pub plant: String,
    /// The client's name for the batch.
    pub batch: String,
    /// Hash of the canonical content.
    pub digest: [u8; 32],
    /// Start of the period.
    pub start: OffsetDateTime,
    /// End of the period.
    pub end: OffsetDateTime,
    /// When it came.
    pub received: OffsetDateTime,
    /// As sent.
    pub body: Vec<u8>,
}

/// The receipt of an accepted batch.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Ticket {
    /// Number in the order of acceptance.
    pub id: i64,
    /// Name of the plant.
    pub plant: String,
    /// The client's name for the batch.
    pub batch: String,
    /// The revision that it is reconciled with.
    pub revision: u32,
    /// Which of its bodies it stands for: 1, or a later one where late samples
    /// have changed what it is made from.
    pub body: u32,
}

/// What became of an incoming batch.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Acceptance {
    /// It is durable now.
    New(Ticket),
    /// It was already, with this content.
    Known(Ticket),
    /// The name is taken by other content.
    Conflict,
    /// There is no such plant.
    NoPlant,
}

/// What is known of an accepted batch.
#[derive(Clone, Debug, PartialEq)]
pub enum Stored {
    /// Accepted, not finished.
    Pending(Ticket),
    /// Finished.
    Done(Box<Report>),
    /// Finished, and its report removed since.
    Removed(Removed),
}

/// What is left of a batch that retention has removed.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Removed {
    /// When body and report were removed.
    pub at: OffsetDateTime,
    /// The verdict that the report had.
    pub verdict: Verdict,
}

/// An accepted batch, with its newest body.
#[derive(Clone, Debug, PartialEq)]
pub struct Unfinished {
    /// Its receipt.
    pub ticket: Ticket,
    /// When it came.
    pub received: OffsetDateTime,
    /// As sent; of a batch made from samples, as it was made last.
    pub body: Vec<u8>,
    /// It has a result already.
    pub again: bool,
    /// It waits for a result of this body.
    pub pending: bool,
    /// It waits, and only a backfill brought it.
    pub backfill: bool,
}

/// A place in a list by time: what comes next is beyond it.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Cursor {
    /// Start of the last period seen, nanoseconds since 1970.
    pub start_ns: i64,
    /// Ticket number of the last batch seen.
    pub id: i64,
}

/// Which batches to list.
#[derive(Clone, Debug)]
pub struct BatchQuery {
    /// Name of the plant.
    pub plant: String,
    /// Periods that start at this time or later.
    pub from: Option<OffsetDateTime>,
    /// Periods that start before this time.
    pub to: Option<OffsetDateTime>,
    /// With this verdict.
    pub verdict: Option<Verdict>,
    /// After this place.
    pub after: Option<Cursor>,
    /// At most so many.
    pub limit: usize,
}

/// A part of a list.
#[derive(Clone, Debug, PartialEq)]
pub struct Page<T> {
    /// The items.
    pub items: Vec<T>,
    /// Where the next part starts, if there is one.
    pub next: Option<Cursor>,
}

/// A batch in a list.
#[derive(Clone, Debug, PartialEq)]
pub struct BatchLine {
    /// The client's name for it.
    pub batch: String,
    /// Start of the period.
    pub start: OffsetDateTime,
    /// End of the period.
    pub end: OffsetDateTime,
    /// The revision that it is reconciled with.
    pub revision: u32,
    /// Verdict; `None` while it is not finished.
    pub verdict: Option<Verdict>,
    /// Weighted sum of squares.
    pub statistic: Option<f64>,
    /// Degrees of freedom.
    pub degrees_of_freedom: Option<u32>,
}

/// One of the things that have a series.
#[derive(Clone, Debug, PartialEq, Eq, Hash)]
pub enum Selector {
    /// A tag or an assumption.
    Tag(String),
    /// A quantity of a stream or piece of equipment: `live-steam.mass_flow`,
    /// `heater-6.imbalance.energy`.
    Quantity(String),
}

impl Selector {
    /// The name.
    pub fn name(&self) -> &str {
        match self {
            Selector::Tag(name) | Selector::Quantity(name) => name,
        }
    }
}

/// Which of its numbers.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Field {
    /// The reading.
    Measured,
    /// The best estimate.
    Reconciled,
    /// Reconciled minus measured.
    Adjustment,
    /// Uncertainty of the reading.
    UncertaintyMeasured,
    /// Uncertainty of the best estimate.
    Uncertainty,
    /// Redundancy.
    Redundancy,
    /// Adjustment, or imbalance, over its own sigma.
    Standardised,
}

/// Which numbers over which time.
#[derive(Clone, Debug)]
pub struct SeriesQuery {
    /// Name of the plant.
    pub plant: String,
    /// Of what.
    pub selectors: Vec<Selector>,
    /// Which number of each.
    pub field: Field,
    /// Periods that start at this time or later.
    pub from: Option<OffsetDateTime>,
    /// Periods that start before this time.
    pub to: Option<OffsetDateTime>,
    /// After this place.
    pub after: Option<Cursor>,
    /// At most so many batches.
    pub limit: usize,
}

/// Numbers over time.
#[derive(Clone, Debug, PartialEq)]
pub struct SeriesPage {
    /// The finished batches.
    pub rows: Vec<SeriesRow>,
    /// One column for each selector and each unit that it had; as many values
    /// as there are rows.
    pub columns: Vec<Column>,
    /// Where the next part starts, if there is one.
    pub next: Option<Cursor>,
}

/// The batch that a row of numbers belongs to.
#[derive(Clone, Debug, PartialEq)]
pub struct SeriesRow {
    /// The client's name for it.
    pub batch: String,
    /// Start of the period.
    pub start: OffsetDateTime,
    /// End of the period.
    pub end: OffsetDateTime,
    /// Verdict.
    pub verdict: Verdict,
}

/// One number over time.
#[derive(Clone, Debug, PartialEq)]
pub struct Column {
    /// Of what.
    pub selector: Selector,
    /// Unit; `None` where no row has the selector.
    pub unit: Option<String>,
    /// Values; `None` where the report has none.
    pub values: Vec<Option<f64>>,
}
