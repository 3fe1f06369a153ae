//! What a plant's readings tell apart, and what they mix up.

use super::{Hypothesis, Limit};
use serde::{Deserialize, Serialize};
use utoipa::ToSchema;

/// For every cause that would be found: which others it would be mixed up with.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct TellApart {
    /// Plant.
    pub plant: String,
    /// Revision.
    pub revision: u32,
    /// Where it was reckoned: the batch, or the operating point in words.
    pub operating_point: String,
    /// Why there are no rows, where there are none.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub reason: Option<String>,
    /// Critical value of the single tests; null without rows.
    pub critical_value: Option<f64>,
    /// Likelihood ratios within this of the best are not told apart; null
    /// without rows.
    pub group_distance: Option<f64>,
    /// Causes that would be found, in the order of the hypotheses; those that
    /// are mixed up with the same others share a row.
    pub rows: Vec<Apart>,
    /// Causes that would go unseen.
    pub unseen: Vec<Limit>,
}

/// Causes with the same group: what is told of one holds for each.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Apart {
    /// The causes with their limits; several are mixed up with each other.
    pub causes: Vec<Limit>,
    /// Correlation of the two causes of the row that are the least alike; null
    /// where there is only one.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub alike: Option<f64>,
    /// The others that each would be mixed up with at twice its limit, the most
    /// alike first.
    pub mixed_up_with: Vec<MixedUp>,
}

/// A cause that another would be mixed up with.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct MixedUp {
    /// What it blames.
    #[serde(flatten)]
    pub hypothesis: Hypothesis,
    /// Correlation of its statistic with that of the row's cause which it is the
    /// most alike, -1 to 1: negative where a positive size of the one looks like
    /// a negative size of the other.
    pub correlation: f64,
}
