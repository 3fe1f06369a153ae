//! Suspects in a report: what explains a disagreement, with its size, what it
//! repairs, and what would settle it.

use super::{EquipmentReport, GlobalTest, StreamReport, TagReport};
use indexmap::IndexMap;
use serde::{Deserialize, Serialize};
use utoipa::ToSchema;

/// Kinds of hypotheses.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize, ToSchema,
)]
#[serde(rename_all = "kebab-case")]
pub enum Cause {
    /// A tag reads too much (positive) or too little.
    Bias,
    /// An assumption's true value differs from the stated one: the size is
    /// stated minus true, as a bias is.
    Departure,
    /// Mass leaves one side of a piece of equipment to the outside.
    Leak,
    /// Mass leaks from one side of a piece of equipment into the other.
    LeakBetween,
    /// A stream that is normally closed lets something through.
    Passing,
    /// A balance of energy loses heat or power that nothing states.
    HeatLoss,
}

/// A hypothesis, by what it blames.
#[derive(Clone, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, ToSchema)]
pub struct Hypothesis {
    /// Kind.
    pub cause: Cause,
    /// Tag, assumption, stream or piece of equipment.
    pub of: String,
    /// Side of the equipment that leaks (`steam`), or from which side into which
    /// (`tube into steam`).
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub side: Option<String>,
}

/// A suspect: one cause, or several that the readings cannot tell apart.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Suspect {
    /// The members, the likeliest first; the true one is among them with 95 %.
    pub group: Vec<Accused>,
    /// Weighted sum of squares before this suspect was taken out.
    pub statistic_before: f64,
    /// The same after.
    pub statistic_after: f64,
    /// Balances that look better with it taken out, the largest change first.
    pub balances: Vec<Repaired>,
    /// Tags and assumptions that look better with it taken out, likewise.
    pub tags: Vec<Repaired>,
    /// Field checks that would tell the members of the group apart, the most
    /// decisive first; empty where the group has one member.
    pub checks: Vec<FieldCheck>,
}

/// One member of a group.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Accused {
    /// What it blames.
    #[serde(flatten)]
    pub hypothesis: Hypothesis,
    /// Size, positive as the cause's sign convention says.
    pub size: f64,
    /// Its uncertainty.
    pub uncertainty: f64,
    /// Unit of both.
    pub unit: String,
    /// Generalised likelihood ratio: by how much the weighted sum of squares
    /// falls with it.
    pub ratio: f64,
    /// Smallest size found with 80 % power.
    pub detectable: f64,
    /// Where the size is a linear estimate, because the solve with it failed.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub remark: Option<String>,
}

/// A standardised statistic before and after a suspect is taken out.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Repaired {
    /// Tag, assumption, or equipment with its balance (`heater-6 energy`,
    /// `heater-6 mass steam`).
    pub of: String,
    /// Before.
    pub standardised_before: f64,
    /// After; null where nothing checks it any more.
    pub standardised_after: Option<f64>,
}

/// A check in the field.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct FieldCheck {
    /// `read`: take a reading with a portable instrument; `close`: make sure
    /// that a valve is shut, and look again.
    pub action: String,
    /// Quantity to read (`mass-flow`, `pressure`, `temperature`).
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub quantity: Option<String>,
    /// Stream.
    pub of: String,
    /// Uncertainty of the portable instrument that was reckoned with.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub uncertainty: Option<f64>,
    /// What it would read under each member of the group, in the group's order.
    pub expected: Vec<f64>,
    /// Unit of both.
    pub unit: String,
    /// How surely it decides: the part of the other members that it is expected
    /// to clear, 0 to 1, whichever member is true.
    pub decides: f64,
}

/// What would be found, and what would go unseen.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Limit {
    /// Of what.
    #[serde(flatten)]
    pub hypothesis: Hypothesis,
    /// Smallest size found with 80 % power; null where it would go unseen.
    pub detectable: Option<f64>,
    /// Estimate of the size over its sigma, by linear theory without any suspect
    /// in: what is held against the critical value. Null of an assessment.
    #[serde(default)]
    pub standardised: Option<f64>,
    /// Unit.
    pub unit: String,
    /// Why it would go unseen.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub reason: Option<String>,
}

/// What an engineer's decision did to a tag in this batch.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct ByHandReport {
    /// Number of the decision.
    pub id: i64,
    /// Tag.
    pub tag: String,
    /// `out-of-service` or `offset`.
    pub action: String,
    /// What was added to the reading, in the tag's unit.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub offset: Option<f64>,
    /// Why.
    pub reason: String,
    /// Who decided it.
    pub by: String,
}

/// Reconciled values with the suspects taken out.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct AfterSuspects {
    /// Global test; its degrees of freedom are fewer by one for each suspect.
    pub global_test: GlobalTest,
    /// Every tag.
    pub tags: IndexMap<String, TagReport>,
    /// Every assumption.
    pub assumptions: IndexMap<String, TagReport>,
    /// Every stream.
    pub streams: IndexMap<String, StreamReport>,
    /// Every piece of equipment.
    pub equipment: IndexMap<String, EquipmentReport>,
}
