//! What becomes of results with time: chunks by quantity and day, hourly and
//! daily means, and the end of what is kept no longer.

use super::Reply;
use crate::plant::Retention;
use crate::report::Verdict;
use time::OffsetDateTime;

/// Width of a mean.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Resolution {
    /// By hour, UTC.
    Hourly,
    /// By day, UTC.
    Daily,
}

/// Which means.
#[derive(Clone, Debug)]
pub struct MeansQuery {
    /// Name of the plant.
    pub plant: String,
    /// Of what.
    pub selectors: Vec<super::Selector>,
    /// Width.
    pub resolution: Resolution,
    /// Those that start at this time or later.
    pub from: Option<OffsetDateTime>,
    /// Those that start before this time.
    pub to: Option<OffsetDateTime>,
    /// At most so many rows.
    pub limit: usize,
    /// Beyond this place.
    pub after: Option<OffsetDateTime>,
}

/// The mean of one quantity over an hour or a day.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Mean {
    /// Batches that had a value.
    pub batches: u32,
    /// Mean of the reconciled values.
    pub mean: f64,
    /// Their standard deviation; 0 for one.
    pub deviation: f64,
    /// The least.
    pub least: f64,
    /// The greatest.
    pub greatest: f64,
    /// Mean of the uncertainties (95 %); `None` where no batch had one.
    pub uncertainty: Option<f64>,
    /// Mean of the readings, of tags only.
    pub measured: Option<f64>,
    /// Mean of the standardised adjustments, of tags only.
    pub standardised: Option<f64>,
}

/// A row of means: one for each column.
#[derive(Clone, Debug, PartialEq)]
pub struct MeansRow {
    /// Start of the hour or day.
    pub start: OffsetDateTime,
    /// Batches of each verdict.
    pub verdicts: Vec<(Verdict, u32)>,
    /// One for each column; `None` where no batch had a value.
    pub means: Vec<Option<Mean>>,
}

/// What a column of means is of.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct MeansColumn {
    /// Of what.
    pub selector: super::Selector,
    /// Unit; `None` where the plant never had the selector.
    pub unit: Option<String>,
}

/// A part of a table of means.
#[derive(Clone, Debug, PartialEq)]
pub struct MeansPage {
    /// One column for each selector and each unit that it had.
    pub columns: Vec<MeansColumn>,
    /// Rows in order of time.
    pub rows: Vec<MeansRow>,
    /// Where the next part starts.
    pub next: Option<OffsetDateTime>,
}

/// What a turn of the background work did.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Tidied {
    /// Batches whose numbers went into chunks and means.
    pub batches: u64,
    /// Samples that went into chunks.
    pub samples: u64,
    /// Reports and samples that were removed.
    pub removed: u64,
    /// Bytes given back to the file system.
    pub freed: u64,
    /// There is more to do at once.
    pub more: bool,
}

/// The store's past.
pub trait HistoryStore: Send + Sync + 'static {
    /// Does a bounded part of the background work: whole days of results and
    /// samples into chunks and means, removal of what `retention` no longer
    /// keeps, free pages back to the file system. Each part is one transaction
    /// of its own, short enough not to be felt by those who post.
    fn tidy(&self, now: OffsetDateTime, retention: Vec<(String, Retention)>) -> Reply<'_, Tidied>;

    /// Hourly or daily means of finished batches, the earliest first, those of
    /// today among them. An hour or day belongs to the batches whose periods
    /// start in it. What comes for a day after its numbers were removed is not
    /// in its means.
    fn means(&self, query: MeansQuery) -> Reply<'_, MeansPage>;
}
