//! Which readings a reconciled value hangs on.

use serde::{Deserialize, Serialize};
use utoipa::ToSchema;

/// The readings that moved one reconciled value most.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Influences {
    /// Stream, piece of equipment, tag or assumption.
    pub of: String,
    /// Which of its quantities (`mass_flow`, `heat`...); null of a tag.
    pub quantity: Option<String>,
    /// Reconciled value.
    pub value: f64,
    /// Its uncertainty.
    pub uncertainty: f64,
    /// Unit of both.
    pub unit: String,
    /// Tags and assumptions, the largest share first.
    pub readings: Vec<Influence>,
}

/// What one reading has to do with a reconciled value.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Influence {
    /// Tag or assumption.
    pub tag: String,
    /// Change of the value by one unit of the reading.
    pub sensitivity: f64,
    /// Unit of the reading.
    pub unit: String,
    /// Part of the value's variance that comes from this reading, 0 to 1; the
    /// shares of all readings sum to 1.
    pub share: f64,
    /// The value less what it would be without this reading; null where nothing
    /// else checks the reading.
    pub moved: Option<f64>,
}
