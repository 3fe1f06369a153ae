//! What tells whether a part of the plant, or the plant, is in service.

/// A tag that reads a state and measures nothing: a valve's limit switch, a
/// breaker.
#[derive(Clone, Debug, PartialEq)]
pub struct Status {
    /// Name as the historian knows it.
    pub name: String,
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
