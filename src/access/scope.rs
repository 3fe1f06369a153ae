//! Scopes: what a token allows.

use serde::{Deserialize, Serialize};
use std::fmt;
use utoipa::ToSchema;

/// One thing that a token may allow. None implies another.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize, ToSchema,
)]
#[serde(rename_all = "kebab-case")]
pub enum Scope {
    /// Post batches and readings.
    Send,
    /// Read everything of a plant.
    Read,
    /// Act on alarms, decide by hand, reconcile again, replay, enter field readings.
    Operate,
    /// Put plant files; read the audit log.
    Administer,
}

/// A set of scopes.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Scopes(u8);

impl Scope {
    /// Every scope.
    pub const ALL: [Scope; 4] = [Scope::Send, Scope::Read, Scope::Operate, Scope::Administer];

    /// Its name.
    pub fn name(self) -> &'static str {
        match self {
            Scope::Send => "send",
            Scope::Read => "read",
            Scope::Operate => "operate",
            Scope::Administer => "administer",
        }
    }

    /// The scope of a name.
    pub fn of_name(name: &str) -> Option<Scope> {
        Scope::ALL.into_iter().find(|scope| scope.name() == name)
    }

    fn bit(self) -> u8 {
        1 << self as u8
    }
}

impl Scopes {
    /// All of them.
    pub fn all() -> Self {
        Scope::ALL.into_iter().collect()
    }

    /// Whether a scope is among them.
    pub fn contains(self, scope: Scope) -> bool {
        self.0 & scope.bit() != 0
    }

    /// Those that are there, in the order of [`Scope::ALL`].
    pub fn iter(self) -> impl Iterator<Item = Scope> {
        Scope::ALL
            .into_iter()
            .filter(move |scope| self.contains(*scope))
    }
}

impl FromIterator<Scope> for Scopes {
    fn from_iter<I: IntoIterator<Item = Scope>>(scopes: I) -> Self {
        Scopes(scopes.into_iter().fold(0, |bits, scope| bits | scope.bit()))
    }
}

impl fmt::Display for Scopes {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let names: Vec<&str> = self.iter().map(Scope::name).collect();
        f.write_str(&names.join(","))
    }
}
