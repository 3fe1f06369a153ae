//! How the plant was operated while the batch was taken: its line-up, whether
//! it was steady, and what the readings came from.

use indexmap::IndexMap;
use serde::{Deserialize, Serialize};
use utoipa::ToSchema;

/// Which parts of a plant are in service.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct LineUp {
    /// Name: `full`, what was switched off, as `without heater-6, pump-2`, or
    /// `not running`.
    pub name: String,
    /// Streams out of service, those that hang on others included.
    pub streams_out: Vec<String>,
    /// Equipment out of service, likewise.
    pub equipment_out: Vec<String>,
    /// Equipment in service that is left with one stream in and one out: a length
    /// of pipe, without a balance of its own.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub pipes: Vec<String>,
    /// What the statuses and other signals read that decide; null where one was
    /// missing or bad.
    pub decided_by: IndexMap<String, Option<f64>>,
}

/// What stands out before any balance is made.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Finding {
    /// What kind.
    pub kind: FindingKind,
    /// Tags that it is about.
    pub tags: Vec<String>,
    /// The stream or equipment that it is about.
    pub of: String,
    /// Of several tags on one quantity the one that the others speak against;
    /// null where that is not told.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub odd_one_out: Option<String>,
    /// In words.
    pub text: String,
    /// How strongly it shows: a standardised difference.
    pub standardised: Option<f64>,
}

/// Kinds of findings.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum FindingKind {
    /// Several tags on one quantity differ by more than they can.
    SameQuantityDisagrees,
    /// It is said to be out of service, and something flows.
    OutOfServiceAndFlowing,
    /// It is said to be in service, and nothing flows.
    InServiceAndNotFlowing,
    /// A signal that decides about service is missing or bad.
    StatusUnknown,
}

/// Whether the plant was steady over the period, by its key tags.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct Steadiness {
    /// It was; a batch in transition is left out of degradation.
    pub steady: bool,
    /// Key tags that were judged.
    pub judged: u32,
    /// Those of them that were not steady.
    pub unsteady: Vec<String>,
}

/// What the mean of a tag was made from.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Averaged {
    /// Samples that the period had.
    pub samples: u32,
    /// Samples that the mean uses.
    pub used: u32,
    /// Part of the period that good samples cover, 0 to 1.
    pub covered: f64,
    /// What the scatter within the period adds to the uncertainty (95 %), in
    /// the tag's unit.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub scatter: Option<f64>,
    /// Whether the tag was steady; null where too few samples tell.
    pub steady: Option<bool>,
    /// What was found among the samples, and how many had it: `bad`,
    /// `uncertain`, `out-of-range`, `spike`, `stale`, `stuck`.
    #[serde(default, skip_serializing_if = "IndexMap::is_empty")]
    pub flags: IndexMap<String, u32>,
}
