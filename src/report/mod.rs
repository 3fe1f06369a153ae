//! The report of one batch and the assessment of a plant: the shapes that the
//! service answers with and stores.
//!
//! Uncertainties are half-widths at 95 % coverage. Tags and assumptions come in
//! their own units; streams in kg/s, bar (absolute), Cel and kJ/kg; heat, work,
//! power and losses in kW.

mod assessment;
mod document;
mod influence;
mod operation;
mod suspects;
mod tell_apart;

pub use assessment::{AssessedQuantity, AssessedStream, AssessedTag, Assessment};
pub use document::{
    Class, EquipmentReport, GlobalTest, Imbalance, Imbalances, Observability, Phase,
    QuantityReport, Report, SingleTest, StreamReport, TagReport, Verdict,
};
pub use influence::{Influence, Influences};
pub use operation::{Averaged, Finding, FindingKind, LineUp, Steadiness};
pub use suspects::{
    Accused, AfterSuspects, ByHandReport, Cause, FieldCheck, Hypothesis, Limit, Repaired, Suspect,
};
pub use tell_apart::{Apart, MixedUp, TellApart};
