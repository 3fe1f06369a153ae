//! What an engineer decides by hand about a tag: that it is not to be used, or
//! that it reads off by a known amount, for a time, with a reason and a name.

use super::Batch;
use time::OffsetDateTime;

/// A decision about one tag.
#[derive(Clone, Debug, PartialEq)]
pub struct ByHand {
    /// Number that the service gave it.
    pub id: i64,
    /// Name of the tag.
    pub tag: String,
    /// What is done to its readings.
    pub action: Action,
    /// It holds for batches whose period starts at this time or later...
    pub from: OffsetDateTime,
    /// ...and before this time; without one, until it is ended.
    pub until: Option<OffsetDateTime>,
    /// Why.
    pub reason: String,
    /// Who decided it.
    pub by: String,
}

/// What is done to the readings of a tag.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Action {
    /// They are kept and not used.
    OutOfService,
    /// This much is added to them, in the tag's unit.
    Offset(f64),
}

impl ByHand {
    /// Whether it holds for a batch.
    pub fn covers(&self, batch: &Batch) -> bool {
        self.from <= batch.start && self.until.is_none_or(|until| batch.start < until)
    }
}
