//! The plant: what is balanced, what is measured, and what is assumed.
//!
//! [`Plant`] is the parsed form of a plant file. Whoever holds one may rely on
//! it: every port is joined as its kind allows, every unit fits its quantity,
//! every uncertainty can be worked out. Values are in the internal units kg/s,
//! MPa (absolute), K, kJ/kg, kJ/(kg K) and kW wherever a field does not say
//! otherwise; [`Unit`] converts to and from the units of tags.

mod alarms;
mod averaging;
mod batch;
mod by_hand;
mod dimension;
mod file;
mod kind;
mod line_up;
mod model;
mod portable;
mod reduction;
mod retention;
mod service;
mod uncertainty;
mod unit;

pub use alarms::{AlarmSettings, Priorities, Priority};
pub use averaging::{AveragingMethod, AveragingSettings, TagAveraging};
pub use batch::{Averaged, Batch, Flag, Grade, Quality, Reading, Sample, Steadiness};
pub use by_hand::{Action, ByHand};
pub use dimension::{ALIASES, ANSWERS, Dimension, UnitFault};
pub use file::{
    Fault, Faults, Format, MAX_BYTES, PlantFile, Severity, canonical_json, read, render,
};
pub use line_up::{Condition, Signal, Status, Test};
pub use model::{
    Assumption, Barometer, Equipment, EquipmentId, Kind, Plant, PressureReference, Quantity,
    Stream, StreamId, Tag,
};
pub use portable::Portable;
pub use reduction::{Places, Reduced};
pub use retention::Retention;
pub use service::Service;
pub use uncertainty::{COVERAGE_FACTOR, Sigma, Uncertainty};
pub use unit::Unit;
