//! Who may do what: scopes, tokens, and the record of what was changed.

mod audit;
mod rate;
mod scope;
mod token;

pub use audit::{Actor, Deed, DeedKind};
pub use rate::{NoRate, Rate};
pub use scope::{Scope, Scopes};
pub use token::{LENGTH, PREFIX, Token, TokenDigest, masked, same};
