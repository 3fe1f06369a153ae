//! The audit log: every change of model, token, alarm and decision; who, when,
//! what.

use serde::{Deserialize, Serialize};
use time::OffsetDateTime;
use utoipa::ToSchema;

/// Who did something.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case", tag = "by")]
pub enum Actor {
    /// Whoever holds a token.
    Token {
        /// Its number.
        id: i64,
        /// Its name.
        name: String,
    },
    /// Somebody on this machine, while the service has no tokens.
    Local,
    /// Whoever can run commands on the database file.
    CommandLine,
    /// The service itself.
    Service,
}

/// What was done, as it goes into the log with the change itself, in one
/// transaction.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Deed {
    /// Who.
    pub actor: Actor,
    /// When.
    pub at: OffsetDateTime,
    /// What kind of change.
    pub kind: DeedKind,
    /// The plant that it changed, if it was one.
    pub plant: Option<String>,
    /// What exactly, as a JSON object: names, numbers, reasons; never a secret.
    /// The store adds the numbers that it gives: `revision`, `id`, `version`.
    pub what: serde_json::Value,
}

/// Kinds of changes.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum DeedKind {
    /// A new revision of a plant.
    PlantPut,
    /// A person acted on an alarm.
    AlarmActed,
    /// An accusation was closed.
    AccusationClosed,
    /// A decision by hand was entered.
    ByHandEntered,
    /// A decision by hand was ended.
    ByHandEnded,
    /// A field reading was entered.
    FieldReadingEntered,
    /// A batch was reconciled again.
    ReconciledAgain,
    /// A replay was started.
    ReplayStarted,
    /// A replay was cancelled.
    ReplayCancelled,
    /// A backfill was started.
    BackfillStarted,
    /// A token was made.
    TokenMade,
    /// A token was revoked.
    TokenRevoked,
}

impl DeedKind {
    /// Its name, as it is stored and served.
    pub fn name(self) -> String {
        let name = serde_json::to_value(self).unwrap_or_default();
        name.as_str().unwrap_or_default().to_owned()
    }

    /// The kind of a name.
    pub fn of_name(name: &str) -> Option<DeedKind> {
        serde_json::from_value(name.into()).ok()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn kinds_have_names() {
        assert_eq!(DeedKind::PlantPut.name(), "plant-put");
        assert_eq!(
            DeedKind::of_name("token-revoked"),
            Some(DeedKind::TokenRevoked)
        );
        assert_eq!(DeedKind::of_name("rain"), None);
    }
}
