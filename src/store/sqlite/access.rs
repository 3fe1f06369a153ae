//! Tokens and the audit log in SQLite.

use super::work::{AddToken, RevokeToken, TokenUsed};
use super::{SqliteStore, read};
use crate::access::Deed;
use crate::store::{AccessStore, DeedRow, NewToken, Reply, TokenRow};
use futures::FutureExt;
use time::OffsetDateTime;

impl AccessStore for SqliteStore {
    fn add_token(&self, new: NewToken, deed: Deed) -> Reply<'_, Option<TokenRow>> {
        self.write(AddToken::new(new, deed))
    }

    fn tokens(&self) -> Reply<'_, Vec<TokenRow>> {
        read::tokens(&self.readers).boxed()
    }

    fn revoke_token(&self, name: &str, deed: Deed) -> Reply<'_, Option<TokenRow>> {
        let name = name.to_owned();
        self.write(RevokeToken { name, deed })
    }

    fn token_used(&self, id: i64, at: OffsetDateTime) -> Reply<'_, ()> {
        self.write(TokenUsed(id, at))
    }

    fn tokens_version(&self) -> Reply<'_, i64> {
        read::tokens_version(&self.readers).boxed()
    }

    fn deeds<'a>(
        &'a self,
        plants: Option<&'a [String]>,
        before: Option<i64>,
        limit: usize,
    ) -> Reply<'a, Vec<DeedRow>> {
        read::deeds(&self.readers, plants, before, limit).boxed()
    }
}
