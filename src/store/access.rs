//! Tokens and the audit log.

use super::Reply;
use crate::access::{Deed, Rate, Scopes, TokenDigest};
use time::OffsetDateTime;

/// A token to be kept: never the token itself, only its hash.
#[derive(Clone, Debug, PartialEq)]
pub struct NewToken {
    /// A name for people, unique among those that are not revoked.
    pub name: String,
    /// SHA-256 of the token.
    pub digest: TokenDigest,
    /// What it allows.
    pub scopes: Scopes,
    /// The plants that it reaches; `None`: every plant.
    pub plants: Option<Vec<String>>,
    /// When it ends by itself.
    pub expires: Option<OffsetDateTime>,
    /// Requests a second that it may make; `None`: as the service allows.
    pub rate: Option<Rate>,
}

/// A token as it is kept.
#[derive(Clone, Debug, PartialEq)]
pub struct TokenRow {
    /// Its number.
    pub id: i64,
    /// What it was made as.
    pub token: NewToken,
    /// When it was made.
    pub made: OffsetDateTime,
    /// When it was revoked.
    pub revoked: Option<OffsetDateTime>,
    /// When it was last used, to the minute.
    pub last_used: Option<OffsetDateTime>,
}

/// An entry of the audit log.
#[derive(Clone, Debug, PartialEq)]
pub struct DeedRow {
    /// Its number.
    pub id: i64,
    /// What was done.
    pub deed: Deed,
}

/// Tokens and the audit log.
pub trait AccessStore: Send + Sync + 'static {
    /// Keeps a token and notes it; `None` where the name is taken.
    fn add_token(&self, new: NewToken, deed: Deed) -> Reply<'_, Option<TokenRow>>;

    /// Every token, revoked ones too, in the order of making.
    fn tokens(&self) -> Reply<'_, Vec<TokenRow>>;

    /// Revokes the token of a name and notes it; `None` where none of that name
    /// is in force.
    fn revoke_token(&self, name: &str, deed: Deed) -> Reply<'_, Option<TokenRow>>;

    /// Keeps when a token was last used.
    fn token_used(&self, id: i64, at: OffsetDateTime) -> Reply<'_, ()>;

    /// Grows with every change of tokens, also by another process: what is
    /// cached of them is good as long as this stands.
    fn tokens_version(&self) -> Reply<'_, i64>;

    /// Entries of the audit log before the number given, the newest first; of
    /// some plants alone where they are named.
    fn deeds<'a>(
        &'a self,
        plants: Option<&'a [String]>,
        before: Option<i64>,
        limit: usize,
    ) -> Reply<'a, Vec<DeedRow>>;
}
