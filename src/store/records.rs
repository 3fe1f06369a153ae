//! What stands beside the results: the watch over a plant with its events and
//! accusations, decisions by hand, field readings, and older versions of a
//! result.
//!
//! A store does not know what alarms are. It keeps the watch, the events and
//! the accusations as the JSON that it was given, with what it needs to find
//! them again.

use crate::access::Deed;
use crate::plant::{Action, ByHand};
use crate::report::Verdict;
use time::OffsetDateTime;

/// What a look at a plant changed; kept whole or not at all.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Watched {
    /// The whole watch as JSON; it takes the place of the one before.
    pub watch: String,
    /// What happened, in its order.
    pub events: Vec<NewEvent>,
    /// Accusations that are new or have changed; the others stay as they are.
    pub accusations: Vec<AccusationRow>,
    /// What of it goes into the audit log.
    pub deed: Option<Deed>,
}

/// Something that happened to an alarm.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct NewEvent {
    /// The alarm: the watch's own number for it.
    pub alarm: u64,
    /// The event as JSON.
    pub json: String,
}

/// An event with its place in the one sequence of all plants.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct StoredEvent {
    /// Larger than that of every event before it, of whichever plant.
    pub id: i64,
    /// As it was given.
    pub json: String,
}

/// An accusation.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct AccusationRow {
    /// The watch's own number for it, one sequence for each plant.
    pub id: u64,
    /// Nobody has closed it yet.
    pub open: bool,
    /// The accusation as JSON.
    pub json: String,
}

/// A decision by hand to be kept.
#[derive(Clone, Debug, PartialEq)]
pub struct NewByHand {
    /// Name of the tag.
    pub tag: String,
    /// What is done to its readings.
    pub action: Action,
    /// It holds for periods that start at this time or later...
    pub from: OffsetDateTime,
    /// ...and before this time; without one, until it is ended.
    pub until: Option<OffsetDateTime>,
    /// Why.
    pub reason: String,
    /// Who decided it.
    pub by: String,
    /// When it was entered.
    pub entered: OffsetDateTime,
    /// What of it goes into the audit log.
    pub deed: Option<Deed>,
}

/// A decision by hand as it stands.
#[derive(Clone, Debug, PartialEq)]
pub struct ByHandRow {
    /// The decision; its `until` is that of the latest end.
    pub decision: ByHand,
    /// When it was entered.
    pub entered: OffsetDateTime,
    /// The latest end that a person put to it.
    pub ended: Option<Ended>,
}

/// Who put an end to something.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Ended {
    /// Who.
    pub by: String,
    /// When they entered it.
    pub at: OffsetDateTime,
    /// What of it goes into the audit log; `None` of what is read.
    pub deed: Option<Deed>,
}

/// Why a batch was reconciled again.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Again {
    /// When.
    pub at: OffsetDateTime,
    /// Who asked for it.
    pub by: String,
    /// Why.
    pub reason: String,
    /// What of it goes into the audit log; `None` of what is read.
    pub deed: Option<Deed>,
}

/// A version of a result in a list.
#[derive(Clone, Debug, PartialEq)]
pub struct VersionLine {
    /// Number, from 1; the largest is the present one.
    pub version: u32,
    /// Why it was made; `None` of the first, which every batch gets.
    pub again: Option<Again>,
    /// Verdict.
    pub verdict: Verdict,
    /// Weighted sum of squares.
    pub statistic: Option<f64>,
    /// Which body of the batch it was made from.
    pub body: u32,
}

/// A reading taken in the field for one batch.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct NewFieldReading {
    /// The reading as JSON.
    pub json: String,
    /// Who entered it.
    pub by: String,
    /// When it was entered.
    pub at: OffsetDateTime,
    /// What of it goes into the audit log.
    pub deed: Option<Deed>,
}

/// A reading taken in the field, with its number.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct FieldReading {
    /// Number, in the order of entering.
    pub id: i64,
    /// The reading as JSON.
    pub json: String,
    /// Who entered it.
    pub by: String,
    /// When it was entered.
    pub at: OffsetDateTime,
}
