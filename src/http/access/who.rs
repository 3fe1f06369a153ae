//! Who asks: what a handler is told by the guard.

use crate::access::{Actor, Deed, DeedKind, Scope};
use crate::http::App;
use crate::http::access::gate::Kept;
use crate::http::error::{Kind, Problem};
use axum::extract::FromRequestParts;
use axum::http::request::Parts;
use serde_json::Value;
use std::sync::Arc;
use time::OffsetDateTime;

/// Who asks. A handler that takes one gets what the guard has let in.
#[derive(Clone)]
pub(in crate::http) enum Who {
    /// Somebody on this machine, while there are no tokens.
    Local,
    /// Whoever holds a token.
    Token(Arc<Kept>),
}

impl Who {
    /// Whether they have a scope.
    pub fn may(&self, scope: Scope) -> bool {
        match self {
            Who::Local => true,
            Who::Token(kept) => kept.token.scopes.contains(scope),
        }
    }

    /// The plants that they reach; `None`: every plant.
    pub fn plants(&self) -> Option<&[String]> {
        match self {
            Who::Local => None,
            Who::Token(kept) => kept.token.plants.as_deref(),
        }
    }

    /// Whether they reach a plant.
    pub fn reaches(&self, plant: &str) -> bool {
        self.plants()
            .is_none_or(|plants| plants.iter().any(|name| name == plant))
    }

    /// An entry of the audit log: that they did something to a plant.
    pub fn deed(&self, kind: DeedKind, plant: &str, what: Value, at: OffsetDateTime) -> Deed {
        Deed {
            actor: self.actor(),
            at,
            kind,
            plant: Some(plant.to_owned()),
            what,
        }
    }

    fn actor(&self) -> Actor {
        match self {
            Who::Local => Actor::Local,
            Who::Token(kept) => Actor::Token {
                id: kept.id,
                name: kept.token.name.clone(),
            },
        }
    }
}

impl FromRequestParts<App> for Who {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &App) -> Result<Self, Problem> {
        let who = parts.extensions.get::<Who>().cloned();
        // An open route has no one, and no business asking.
        who.ok_or_else(|| Problem::new(Kind::Internal, "nobody was let in by this route"))
    }
}
