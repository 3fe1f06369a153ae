//! Alarms: what stays wrong over several batches, who knows of it, and what came
//! of it.
//!
//! A pure state machine. [`Watch`] holds everything of one plant; reports,
//! settings, the time and the acts of people go in, [`Event`]s come out, and
//! nothing here reads a clock. States and transitions are those of ISA-18.2 and
//! IEC 62682 (from memory), without suppression by design.
//!
//! One cause raises one alarm. Where a report has suspects, each suspect is
//! watched, and imbalances and adjustments are judged with the suspects taken
//! out, so that what a suspect explains raises nothing.

mod accusation;
mod alarm;
mod matching;
mod record;
mod sight;
mod transitions;
mod watch;
mod words;

#[cfg(test)]
mod tests;

pub use accusation::{Accusation, AsFound, Closing, NotClosed, Outcome};
pub use alarm::{
    Act, Alarm, AlarmKind, Event, EventKind, Figures, OutOfService, Shelving, State, Tally,
};
pub use record::{CauseScore, HitRate, Record, Score, SizeError, record};
pub use transitions::{Action, Refused};
pub use watch::{KEPT_NORMAL, Watch};
pub use words::Key;
