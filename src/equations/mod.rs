//! The equations of a plant: its states, the relations between them, and what
//! tags and assumptions say of them.
//!
//! Water and steam are in state (p, h), which is continuous across the
//! saturation line where (p, T) is not. Everything here knows the plant and
//! nothing of how the problem is solved: [`Case`] hands residuals and exact
//! sparse Jacobians to the solver.

mod hypothesis;
mod kinds;
mod layout;
mod modes;
mod observation;
mod pressures;
mod relation;
mod start;
mod system;

pub use hypothesis::{Blame, Hypothesis, hypotheses};
pub use layout::{Layout, OwnStates, StateKind};
pub use modes::{Mode, Modes};
pub use observation::Observation;
pub use relation::{Carried, Law, Relation, Role, Side};
pub use start::{Start, start};
pub use system::{Case, Measured, System};

pub use crate::fluid::{Phase, State};
