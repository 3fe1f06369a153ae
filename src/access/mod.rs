//! Who may do what: scopes, tokens, and the record of what was changed.

mod audit;
mod scope;

pub use audit::{Actor, Deed, DeedKind};
pub use scope::{Scope, Scopes};
