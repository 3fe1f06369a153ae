//! The assessment of a plant: what its tags can and cannot determine.

use super::{Class, Limit, LineUp, Observability};
use indexmap::IndexMap;
use serde::{Deserialize, Serialize};
use utoipa::ToSchema;

/// What a plant's tags can and cannot determine, before any batch.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Assessment {
    /// Plant.
    pub plant: String,
    /// Revision.
    pub revision: u32,
    /// Where the numbers were taken: the operating point, in words.
    pub operating_point: String,
    /// What is in service there; absent where everything always is.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub line_up: Option<LineUp>,
    /// Number of states.
    pub states: usize,
    /// Independent relations.
    pub relations: usize,
    /// Observations: tags and assumptions.
    pub observations: usize,
    /// Directions in which the states are not determined.
    pub unobservable_directions: usize,
    /// Degrees of freedom with every tag in use.
    pub degrees_of_freedom: usize,
    /// Every tag.
    pub tags: IndexMap<String, AssessedTag>,
    /// Every assumption.
    pub assumptions: IndexMap<String, AssessedTag>,
    /// What would be found and what would go unseen, tag by tag and balance by
    /// balance: the unseen first.
    #[serde(default)]
    pub limits: Vec<Limit>,
    /// Every stream in service.
    pub streams: IndexMap<String, AssessedStream>,
    /// What is unobservable, and why.
    pub unobservable: Vec<AssessedQuantity>,
    /// Warnings of the plant file.
    pub warnings: Vec<String>,
}

/// A tag in an assessment.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct AssessedTag {
    /// Class.
    pub class: Class,
    /// Redundancy at the operating point.
    pub redundancy: Option<f64>,
    /// Smallest bias found with 80 % power, in `unit`.
    pub detectable: Option<f64>,
    /// Unit.
    pub unit: String,
}

/// A stream in an assessment.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct AssessedStream {
    /// Mass flow.
    pub mass_flow: Observability,
    /// Pressure.
    pub pressure: Observability,
    /// Temperature.
    pub temperature: Observability,
    /// Enthalpy.
    pub enthalpy: Observability,
}

/// A quantity that the observations do not determine.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct AssessedQuantity {
    /// Quantity (`mass-flow`, `pressure`, `heat-loss`...).
    pub quantity: String,
    /// Stream or equipment.
    pub of: String,
    /// Why, and what would determine it.
    pub why: String,
}
