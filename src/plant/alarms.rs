//! When a plant's alarms rise and return, and how urgent they are.

use serde::{Deserialize, Serialize};
use utoipa::ToSchema;

/// The table `[alarms]` of a plant file.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct AlarmSettings {
    /// Batches in a row over the critical value after which an alarm rises.
    pub raise_after: u32,
    /// Batches in a row below the dead band after which it returns.
    pub clear_after: u32,
    /// Fraction of the critical value by which a statistic has to fall below it
    /// before it counts towards the alarm's return.
    pub dead_band: f64,
    /// How urgent the alarms of each kind are.
    pub priorities: Priorities,
}

/// Priority of each kind of alarm.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Priorities {
    /// Of suspects.
    pub suspect: Priority,
    /// Of imbalances that no suspect explains.
    pub imbalance: Priority,
    /// Of adjustments that no suspect explains.
    pub adjustment: Priority,
}

/// How soon somebody should act. ISA-18.2 and IEC 62682 recommend three or four
/// priorities (from memory): more are not told apart under stress.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize, ToSchema,
)]
#[serde(rename_all = "kebab-case")]
pub enum Priority {
    /// First.
    High,
    /// Soon.
    Medium,
    /// When there is time.
    Low,
}

impl Default for AlarmSettings {
    /// Three batches up, three batches down, 20 % of dead band.
    fn default() -> Self {
        AlarmSettings {
            raise_after: 3,
            clear_after: 3,
            dead_band: 0.2,
            priorities: Priorities::default(),
        }
    }
}

impl Default for Priorities {
    fn default() -> Self {
        Priorities {
            suspect: Priority::High,
            imbalance: Priority::Medium,
            adjustment: Priority::Low,
        }
    }
}
