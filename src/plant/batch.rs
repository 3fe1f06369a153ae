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
