//! An alarm, its states, and what is told of its changes.

use super::Key;
use crate::plant::{Priorities, Priority};
use crate::report::Hypothesis;
use serde::{Deserialize, Serialize};
use time::OffsetDateTime;
use utoipa::ToSchema;

/// State of an alarm, as in ISA-18.2 and IEC 62682.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum State {
    /// It does not stand, and somebody knows that it did.
    Normal,
    /// It stands, and nobody has acknowledged it.
    ActiveUnacknowledged,
    /// It stands, and somebody has acknowledged it.
    ActiveAcknowledged,
    /// It stood and returned before anybody acknowledged it.
    ReturnedUnacknowledged,
    /// Somebody has silenced it until a time.
    Shelved,
    /// Somebody has taken it out of service until it is returned.
    OutOfService,
}

/// What an alarm watches.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum AlarmKind {
    /// A suspect of the report.
    Suspect,
    /// A balance whose imbalance no suspect explains.
    Imbalance,
    /// A tag or assumption whose adjustment no suspect explains.
    Adjustment,
}

/// An alarm.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Alarm {
    /// Number, of its plant.
    pub id: u64,
    /// Plant.
    pub plant: String,
    /// What it is about. That of a suspect is the member that was the likeliest
    /// when it was raised, and stays for as long as that one is in the group.
    pub key: Key,
    /// What it watches.
    pub kind: AlarmKind,
    /// What it is about, for people: of a suspect the newest group, the
    /// likeliest first.
    pub title: String,
    /// How urgent it is.
    pub priority: Priority,
    /// State.
    pub state: State,
    /// Whether its condition holds; told of in `state` unless it is shelved or
    /// out of service.
    pub standing: bool,
    /// Members of the suspect's newest group, the likeliest first; empty where
    /// it is not about a suspect.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub members: Vec<Hypothesis>,
    /// End of the period of the batch with which the row of batches began that
    /// raised it.
    #[serde(with = "time::serde::rfc3339")]
    pub since: OffsetDateTime,
    /// When it was raised last.
    #[serde(with = "time::serde::rfc3339")]
    pub raised: OffsetDateTime,
    /// When it returned; absent while it stands.
    #[serde(
        default,
        with = "time::serde::rfc3339::option",
        skip_serializing_if = "Option::is_none"
    )]
    pub returned: Option<OffsetDateTime>,
    /// Who acknowledged it since it was raised last.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub acknowledged: Option<Act>,
    /// Who shelved it and until when, while it is shelved.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub shelved: Option<Shelving>,
    /// Who took it out of service and why, while it is.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub out_of_service: Option<OutOfService>,
    /// The newest batch in which it was over the critical value.
    pub last: Figures,
    /// Batches over the critical value since `since`.
    pub batches: u32,
    /// How often it was raised, quietly while shelved or out of service too.
    pub raises: u32,
    /// The accusation that it made when it was raised last.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub accusation: Option<u64>,
    /// How far it is from its next change.
    pub tally: Tally,
}

/// What a person did, and when.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct Act {
    /// Who.
    pub by: String,
    /// When.
    #[serde(with = "time::serde::rfc3339")]
    pub at: OffsetDateTime,
    /// What they remarked.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub note: Option<String>,
}

/// A shelving.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct Shelving {
    /// When it ends by itself.
    #[serde(with = "time::serde::rfc3339")]
    pub until: OffsetDateTime,
    /// Who shelved it.
    #[serde(flatten)]
    pub act: Act,
}

/// A removal from service.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct OutOfService {
    /// Why.
    pub reason: String,
    /// Who removed it.
    pub by: String,
    /// When.
    #[serde(with = "time::serde::rfc3339")]
    pub at: OffsetDateTime,
}

/// Figures of a batch that is over the critical value.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Figures {
    /// Batch.
    pub batch: String,
    /// End of its period.
    #[serde(with = "time::serde::rfc3339")]
    pub end: OffsetDateTime,
    /// Size of the suspect's likeliest member, imbalance, or adjustment.
    pub value: Option<f64>,
    /// Its uncertainty, where the report has one.
    pub uncertainty: Option<f64>,
    /// Unit of both.
    pub unit: String,
    /// Size of the standardised imbalance or adjustment; of a suspect the root
    /// of its likeliest member's likelihood ratio.
    pub statistic: f64,
    /// What it is held against.
    pub critical_value: f64,
}

/// Batches that count towards a change.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
pub struct Tally {
    /// Over the critical value, in a row.
    pub over: u32,
    /// Below the dead band, in a row.
    pub below: u32,
    /// End of the period of the first batch of the row over the critical value.
    #[serde(
        default,
        with = "time::serde::rfc3339::option",
        skip_serializing_if = "Option::is_none"
    )]
    pub since: Option<OffsetDateTime>,
}

/// A change of an alarm.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Event {
    /// What happened.
    pub kind: EventKind,
    /// The alarm after the change.
    pub alarm: Alarm,
    /// When.
    #[serde(with = "time::serde::rfc3339")]
    pub at: OffsetDateTime,
    /// Who did it; absent where nobody did.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub by: Option<String>,
    /// What they remarked.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub note: Option<String>,
}

/// Kinds of changes.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum EventKind {
    /// It stands.
    Raised,
    /// It no longer stands.
    Returned,
    /// Somebody knows of it.
    Acknowledged,
    /// Silenced until a time.
    Shelved,
    /// No longer silenced, by a person or because the time is up.
    Unshelved,
    /// Taken out of service.
    RemovedFromService,
    /// Back in service.
    ReturnedToService,
    /// The member that the alarm has its key from is no longer in the suspect's
    /// group: it has the key of the likeliest now.
    Renamed,
}

impl State {
    /// Whether nothing is told of the alarm's condition.
    pub fn is_suppressed(self) -> bool {
        matches!(self, State::Shelved | State::OutOfService)
    }

    /// As in JSON.
    pub fn word(self) -> &'static str {
        match self {
            State::Normal => "normal",
            State::ActiveUnacknowledged => "active-unacknowledged",
            State::ActiveAcknowledged => "active-acknowledged",
            State::ReturnedUnacknowledged => "returned-unacknowledged",
            State::Shelved => "shelved",
            State::OutOfService => "out-of-service",
        }
    }
}

impl Alarm {
    /// Whether it is more than a memory: one that is not belongs to no suspect
    /// of a report.
    pub fn is_live(&self) -> bool {
        self.state != State::Normal
    }

    /// The change that it has just undergone.
    pub(super) fn event(&self, kind: EventKind, at: OffsetDateTime) -> Event {
        Event {
            kind,
            alarm: self.clone(),
            at,
            by: None,
            note: None,
        }
    }
}

impl AlarmKind {
    /// Its priority.
    pub(super) fn priority(self, priorities: &Priorities) -> Priority {
        match self {
            AlarmKind::Suspect => priorities.suspect,
            AlarmKind::Imbalance => priorities.imbalance,
            AlarmKind::Adjustment => priorities.adjustment,
        }
    }
}
