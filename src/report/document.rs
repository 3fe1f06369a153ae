//! The report of one batch.

use super::operation::{Averaged, Finding, LineUp, Steadiness};
use super::suspects::{AfterSuspects, ByHandReport, Limit, Suspect};
use indexmap::IndexMap;
use serde::{Deserialize, Serialize};
use time::OffsetDateTime;
use utoipa::ToSchema;

/// What a batch came to.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Report {
    /// Plant.
    pub plant: String,
    /// Revision of the plant file that was used.
    pub revision: u32,
    /// The client's name for the batch.
    pub batch: String,
    /// Start of the period, UTC.
    #[serde(with = "time::serde::rfc3339")]
    pub start: OffsetDateTime,
    /// End of the period, UTC.
    #[serde(with = "time::serde::rfc3339")]
    pub end: OffsetDateTime,
    /// The verdict on the batch as a whole.
    pub verdict: Verdict,
    /// Why, where the verdict is `not-converged` or `not-running`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub reason: Option<String>,
    /// What is in service; absent where everything always is.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub line_up: Option<LineUp>,
    /// What stands out before any balance is made: tags on one quantity that
    /// disagree, a status that contradicts what flows.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub findings: Vec<Finding>,
    /// Global chi-square test; absent where nothing converged.
    pub global_test: Option<GlobalTest>,
    /// What the tests of single tags and balances are held against.
    pub single_test: Option<SingleTest>,
    /// Every tag of the plant file.
    pub tags: IndexMap<String, TagReport>,
    /// Every assumption of the plant file.
    pub assumptions: IndexMap<String, TagReport>,
    /// Every stream in service.
    pub streams: IndexMap<String, StreamReport>,
    /// Every piece of equipment in service.
    pub equipment: IndexMap<String, EquipmentReport>,
    /// What explains the disagreement, in the order in which it was found.
    #[serde(default)]
    pub suspects: Vec<Suspect>,
    /// What the search for suspects came to, where the suspects alone do not
    /// tell: no single cause explains a failed global test, the redundancy is
    /// used up.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub suspects_remarks: Vec<String>,
    /// Reconciled values with the suspects taken out; absent without suspects.
    /// The verdict stays what the readings earned.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub after_suspects: Option<Box<AfterSuspects>>,
    /// What this batch would show and what would go unseen: the unseen first.
    #[serde(default)]
    pub limits: Vec<Limit>,
    /// What was decided by hand about tags of this batch.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub by_hand: Vec<ByHandReport>,
    /// Whether the plant was steady; absent where nobody has judged it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub steadiness: Option<Steadiness>,
    /// Tags of the batch that the plant file does not know.
    pub ignored_tags: Vec<String>,
    /// Remarks that a person should see: a negative flow that was used, a
    /// phase that is open, an active bound.
    pub remarks: Vec<String>,
}

/// Verdict on a batch.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Verdict {
    /// The global test accepts the batch.
    Consistent,
    /// The global test rejects it.
    Inconsistent,
    /// There is nothing to test: zero degrees of freedom.
    NotRedundant,
    /// No solution was found; there are no reconciled values.
    NotConverged,
    /// The plant was down; nothing was reconciled.
    NotRunning,
}

/// Chi-square test of the weighted sum of squares.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct GlobalTest {
    /// Weighted sum of squared adjustments.
    pub statistic: f64,
    /// Independent relations + observations used - states + unobservable directions.
    pub degrees_of_freedom: usize,
    /// Critical value; null at zero degrees of freedom.
    pub critical_value: Option<f64>,
    /// Probability of a statistic at least as large; null at zero degrees of freedom.
    pub p_value: Option<f64>,
    /// Confidence, 0 to 1.
    pub confidence: f64,
}

/// Critical value of the single tests: that of the largest of all statistics.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct SingleTest {
    /// Critical value of a standardised adjustment or imbalance.
    pub critical_value: f64,
    /// `simulated`, or `sidak` where the plant is too large for the simulation.
    pub method: String,
    /// Number of statistics it is the largest of.
    pub statistics: usize,
    /// The set of tags in use, phases, zero flows and active bounds that it
    /// holds for; the same set of one revision has the same critical value.
    pub class_set: String,
    /// Likelihood ratios within this of the best are not told apart: the true
    /// cause is then among them with 95 %.
    #[serde(default)]
    pub group_distance: f64,
}

/// What the observations can say of a tag.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Class {
    /// Others check it.
    Redundant,
    /// Others check it so weakly that no error of believable size would show.
    HardlyRedundant,
    /// Nothing checks it.
    NotRedundant,
    /// It took no part.
    Unused,
}

/// A tag or assumption in a report; all numbers in its own unit.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct TagReport {
    /// Reading (value of an assumption), an offset by hand added; null where it
    /// is missing.
    pub measured: Option<f64>,
    /// Best estimate; null where it cannot be determined.
    pub reconciled: Option<f64>,
    /// Reconciled minus measured.
    pub adjustment: Option<f64>,
    /// Unit.
    pub unit: String,
    /// Uncertainty of the reading.
    pub uncertainty_measured: Option<f64>,
    /// Uncertainty of the best estimate.
    pub uncertainty_reconciled: Option<f64>,
    /// Variance of the adjustment over variance of the reading, 0 to 1.
    pub redundancy: Option<f64>,
    /// Adjustment over its own sigma; of redundant tags only.
    pub standardised_adjustment: Option<f64>,
    /// Smallest bias that the single test finds with 80 % power; of redundant
    /// tags only.
    pub detectable: Option<f64>,
    /// Class.
    pub class: Class,
    /// Why it was not used or what was done to it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub reason: Option<String>,
    /// What it was averaged from; absent where it came as one value.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub averaged: Option<Averaged>,
}

/// Whether the observations determine a quantity.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Observability {
    /// They do.
    Observable,
    /// They do not; it has no value.
    Unobservable,
}

/// A quantity of a stream or piece of equipment.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct QuantityReport {
    /// Best estimate; null where it is unobservable.
    pub value: Option<f64>,
    /// Its uncertainty.
    pub uncertainty: Option<f64>,
    /// Unit.
    pub unit: String,
    /// Class.
    pub class: Observability,
}

/// Phase of a stream.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Phase {
    /// Liquid, saturated liquid included.
    Liquid,
    /// Wet steam.
    Wet,
    /// Superheated steam, saturated steam included.
    Vapour,
    /// Above the critical pressure and temperature.
    Supercritical,
    /// The readings fit both sides of the saturation line.
    Open,
}

/// A stream in a report.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct StreamReport {
    /// kg/s.
    pub mass_flow: QuantityReport,
    /// bar, absolute.
    pub pressure: QuantityReport,
    /// Cel.
    pub temperature: QuantityReport,
    /// kJ/kg.
    pub enthalpy: QuantityReport,
    /// Phase; null where pressure or enthalpy cannot be determined.
    pub phase: Option<Phase>,
}

/// A piece of equipment in a report: what its kind has, in kW.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct EquipmentReport {
    /// Kind, as in the plant file.
    pub kind: String,
    /// Heat taken up (boiler, lone cold side of an exchanger) or given away
    /// (condenser without cooling streams, lone hot side).
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub heat: Option<QuantityReport>,
    /// Shaft work.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub work: Option<QuantityReport>,
    /// Electrical power.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub power: Option<QuantityReport>,
    /// Loss.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub loss: Option<QuantityReport>,
    /// Holdup change, kg/s.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub holdup_change: Option<QuantityReport>,
    /// Imbalances.
    pub imbalance: Imbalances,
}

/// Imbalances of one piece of equipment.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Imbalances {
    /// Mass balance of each side, kg/s.
    pub mass: IndexMap<String, Imbalance>,
    /// Energy balance, kW; null where the kind has none.
    pub energy: Option<Imbalance>,
}

/// What a balance would miss if it alone were let go, positive where more
/// enters than leaves.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Imbalance {
    /// Estimate; null where nothing checks the balance.
    pub value: Option<f64>,
    /// Its uncertainty.
    pub uncertainty: Option<f64>,
    /// Unit.
    pub unit: String,
    /// Value over its sigma.
    pub standardised: Option<f64>,
}
