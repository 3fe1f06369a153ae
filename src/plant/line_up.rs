//! What tells whether a part of the plant, or the plant, is in service.

use super::Plant;

/// A tag that reads a state and measures nothing: a valve's limit switch, a
/// breaker.
#[derive(Clone, Debug, PartialEq)]
pub struct Status {
    /// Name as the historian knows it.
    pub name: String,
    /// What it reads at normal operation: for the assessment.
    pub normal: Option<f64>,
}

/// In service when this holds.
#[derive(Clone, Debug, PartialEq)]
pub struct Condition {
    /// What is read.
    pub signal: Signal,
    /// What it has to be.
    pub test: Test,
}

/// What a condition reads.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Signal {
    /// A status, by place in [`Plant::statuses`](super::Plant::statuses).
    Status(usize),
    /// A measurement, by place in [`Plant::tags`](super::Plant::tags).
    Tag(usize),
}

/// What a signal has to be, in its own unit.
#[derive(Clone, Debug, PartialEq)]
pub enum Test {
    /// One of these values.
    OneOf(Vec<f64>),
    /// More than this.
    Above(f64),
    /// Less than this.
    Below(f64),
}

impl Plant {
    /// Whether anything of it may be out of service.
    pub fn has_conditions(&self) -> bool {
        self.running_when.is_some()
            || self.streams.iter().any(|s| s.in_service_when.is_some())
            || self.equipment.iter().any(|e| e.in_service_when.is_some())
            || self.assumptions.iter().any(|a| a.in_service_when.is_some())
    }
}

impl Condition {
    /// Whether it holds where its signal has this value, in the signal's own
    /// unit.
    pub fn holds(&self, value: f64) -> bool {
        match &self.test {
            // States are whole numbers that may have been averaged or scaled on
            // the way: the nearest counts.
            Test::OneOf(values) => values.iter().any(|one| (value - one).abs() < 0.5),
            Test::Above(least) => value > *least,
            Test::Below(most) => value < *most,
        }
    }
}
