//! One period's readings.

use time::OffsetDateTime;

/// The readings of one period, one value per tag.
#[derive(Clone, Debug, PartialEq)]
pub struct Batch {
    /// The client's own name for it.
    pub name: String,
    /// Start of the period.
    pub start: OffsetDateTime,
    /// End of the period.
    pub end: OffsetDateTime,
    /// At most one reading per tag; tags that the plant does not know are
    /// allowed and ignored.
    pub readings: Vec<Reading>,
    /// Whether the plant was steady, where somebody has judged it.
    pub steadiness: Option<Steadiness>,
}

/// Whether a plant was steady over a period, by its key tags.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Steadiness {
    /// It was.
    pub steady: bool,
    /// Key tags that were judged.
    pub judged: u32,
    /// Those of them that were not steady, by name.
    pub unsteady: Vec<String>,
}

/// One value of one tag.
#[derive(Clone, Debug, PartialEq)]
pub struct Reading {
    /// Name of the tag.
    pub tag: String,
    /// Value in the tag's unit; `None` where the source had none.
    pub value: Option<f64>,
    /// Quality.
    pub quality: Quality,
    /// What it was averaged from; `None` where it came as one value.
    pub averaged: Option<Averaged>,
}

/// What a mean over the period was made from.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Averaged {
    /// Samples that the period had.
    pub taken: u32,
    /// Samples that the mean uses.
    pub used: u32,
    /// Part of the period that good samples cover, 0 to 1.
    pub covered: f64,
    /// Standard uncertainty of the mean from the scatter within the period, in
    /// the tag's unit; it adds to the tag's own sigma as root of squares.
    pub scatter: Option<f64>,
    /// Whether the tag was steady; `None` where too few samples tell.
    pub steady: Option<bool>,
    /// What was found among the samples, and how many had it.
    pub flags: Vec<(Flag, u32)>,
    /// Why the value must not be used.
    pub unused: Option<String>,
}

/// What can be wrong with a sample.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Flag {
    /// Its quality is bad.
    Bad,
    /// Its quality is uncertain.
    Uncertain,
    /// It lies outside the tag's range.
    OutOfRange,
    /// It stands out from its neighbours (Hampel filter).
    Spike,
    /// It is older than the tag's signal may be.
    Stale,
    /// The signal has not moved for longer than it can stand still.
    Stuck,
}

impl Flag {
    /// Every flag, in the order in which they are told.
    pub const ALL: [Flag; 6] = [
        Flag::Bad,
        Flag::Uncertain,
        Flag::OutOfRange,
        Flag::Spike,
        Flag::Stale,
        Flag::Stuck,
    ];

    /// Its name in batches and reports.
    pub fn name(self) -> &'static str {
        match self {
            Flag::Bad => "bad",
            Flag::Uncertain => "uncertain",
            Flag::OutOfRange => "out-of-range",
            Flag::Spike => "spike",
            Flag::Stale => "stale",
            Flag::Stuck => "stuck",
        }
    }
}

/// Quality of a reading, with the source's own code where it sent one.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Quality {
    /// What it comes down to.
    pub grade: Grade,
    /// OPC UA status code as sent.
    pub code: Option<u32>,
}

/// The three grades of quality.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Grade {
    /// Used.
    Good,
    /// Used with a wider sigma.
    Uncertain,
    /// Kept and not used.
    Bad,
}

/// One value of one tag at one instant, as a historian sends it.
#[derive(Clone, Debug, PartialEq)]
pub struct Sample {
    /// When the value was taken.
    pub time: OffsetDateTime,
    /// Value in the tag's unit; `None` where the source had none.
    pub value: Option<f64>,
    /// Quality.
    pub quality: Quality,
}
