//! Reports of the same batches under two revisions, side by side: verdicts,
//! suspects and values that move. Pure.
//!
//! A [`Tally`] takes one pair of reports after another and keeps sums only, so
//! that a year of batches needs no more memory than one. With x the reconciled
//! value of something and U its uncertainty (95 %), over the n batches that have
//! it on both sides:
//!
//! - moved = sum (x after - x before) / n;
//! - pooled uncertainty = root of sum (U before^2 + U after^2) / 2n;
//! - moved in uncertainties = moved / pooled.
//!
//! A shift that is the same in every batch stands out although each batch alone
//! would not show it, and a shift is told in the measure that matters: whether
//! what was believed before still lies within what is believed now.

mod tally;
#[cfg(test)]
mod tests;
mod values;

pub use tally::{Pair, Tally};

use crate::report::{Hypothesis, Verdict};
use serde::Serialize;
use time::OffsetDateTime;
use utoipa::ToSchema;

/// What another revision would change.
#[derive(Clone, Debug, PartialEq, Serialize, ToSchema)]
pub struct Comparison {
    /// Batches that have been compared.
    pub batches: u64,
    /// How many had which verdict before and after.
    pub verdicts: Vec<VerdictChange>,
    /// Mean statistic of the global test, over batches that have one on both
    /// sides; null where none has.
    pub statistic: Option<StatisticChange>,
    /// Who leads a group of suspects before or after, the most often changed
    /// first.
    pub suspects: Vec<SuspectChange>,
    /// Tags and quantities whose reconciled mean moved, the furthest first, in
    /// units of the pooled uncertainty; at most 100.
    pub moved: Vec<Moved>,
    /// What has a value on one side only, in some batches; at most 100.
    pub determined: Vec<DeterminedChange>,
    /// Tags that have another unit, so that their values are not compared.
    pub units_changed: Vec<String>,
    /// Batches that changed most, by the value in them that moved furthest; at
    /// most 20.
    pub largest: Vec<BatchChange>,
}

/// Batches with one verdict before and one after.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, ToSchema)]
pub struct VerdictChange {
    /// As it stands.
    pub before: Verdict,
    /// Under the other revision.
    pub after: Verdict,
    /// How many.
    pub batches: u64,
}

/// Mean of the global test's statistic.
#[derive(Clone, Debug, PartialEq, Serialize, ToSchema)]
pub struct StatisticChange {
    /// Batches that have it on both sides.
    pub batches: u64,
    /// As it stands.
    pub before: f64,
    /// Under the other revision.
    pub after: f64,
    /// Mean degrees of freedom as it stands.
    pub degrees_of_freedom_before: f64,
    /// The same under the other revision.
    pub degrees_of_freedom_after: f64,
}

/// How often a hypothesis is suspected.
#[derive(Clone, Debug, PartialEq, Serialize, ToSchema)]
pub struct SuspectChange {
    /// Who.
    #[serde(flatten)]
    pub hypothesis: Hypothesis,
    /// Batches in which it leads a group after, and is in no group before.
    pub gained: u64,
    /// Batches in which it leads a group before, and is in no group after.
    pub lost: u64,
    /// Batches in which it leads a group on one side and is in a group on the
    /// other.
    pub stayed: u64,
}

/// How far a reconciled mean moved.
#[derive(Clone, Debug, PartialEq, Serialize, ToSchema)]
pub struct Moved {
    /// Tag or assumption, or quantity as in a series
    /// (`live-steam.mass_flow`).
    #[schema(example = "live-steam.mass_flow")]
    pub of: String,
    /// Batches that have it on both sides.
    pub batches: u64,
    /// Mean as it stands.
    pub before: f64,
    /// Mean under the other revision.
    pub after: f64,
    /// After minus before.
    pub moved: f64,
    /// Pooled uncertainty (95 %).
    pub uncertainty: f64,
    /// Moved over pooled uncertainty; null where that is zero.
    pub in_uncertainties: Option<f64>,
    /// Unit.
    pub unit: String,
}

/// What has a value on one side only.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, ToSchema)]
pub struct DeterminedChange {
    /// As in [`Moved`].
    pub of: String,
    /// Batches in which only the present report has a value.
    pub only_before: u64,
    /// Batches in which only the other has one.
    pub only_after: u64,
}

/// What changed most in one batch.
#[derive(Clone, Debug, PartialEq, Serialize, ToSchema)]
pub struct BatchChange {
    /// Batch.
    pub batch: String,
    /// Start of its period, UTC.
    #[serde(with = "time::serde::rfc3339")]
    pub start: OffsetDateTime,
    /// Verdict as it stands.
    pub before: Verdict,
    /// Verdict under the other revision.
    pub after: Verdict,
    /// What moved furthest in it; absent where nothing has a value on both
    /// sides.
    pub furthest: Option<ValueChange>,
}

/// How far one value of one batch moved.
#[derive(Clone, Debug, PartialEq, Serialize, ToSchema)]
pub struct ValueChange {
    /// As in [`Moved`].
    pub of: String,
    /// As it stands.
    pub before: f64,
    /// Under the other revision.
    pub after: f64,
    /// Pooled uncertainty of the two (95 %).
    pub uncertainty: f64,
    /// After minus before, over that; null where it is zero.
    pub in_uncertainties: Option<f64>,
    /// Unit.
    pub unit: String,
}
