//! Keeping tokens, and noting in the audit log who changed what.

use super::Work;
use crate::access::Deed;
use crate::store::sqlite::fault::nanoseconds;
use crate::store::sqlite::{read, sql};
use crate::store::{NewToken, TokenRow};
use futures::FutureExt;
use futures::future::BoxFuture;
use serde_json::Value;
use sqlx::sqlite::SqliteConnection;
use time::OffsetDateTime;

/// Notes a deed, if there is one to note, with the numbers that the change was
/// given; to be called in the transaction of the change.
pub(super) async fn note<const N: usize>(
    on: &mut SqliteConnection,
    deed: Option<&Deed>,
    numbers: [(&str, Value); N],
) -> Result<(), sqlx::Error> {
    let Some(deed) = deed else {
        return Ok(());
    };
    let mut what = deed.what.clone();
    if let Value::Object(members) = &mut what {
        members.extend(numbers.map(|(name, value)| (name.to_owned(), value)));
    }
    let actor = serde_json::to_string(&deed.actor);
    let actor = actor.map_err(|error| sqlx::Error::Encode(Box::new(error)))?;
    sqlx::query(sql::INSERT_DEED)
        .bind(nanoseconds(deed.at))
        .bind(actor)
        .bind(deed.kind.name())
        .bind(&deed.plant)
        .bind(what.to_string())
        .execute(on)
        .await?;
    Ok(())
}

/// Keeps a token.
pub(in crate::store::sqlite) struct AddToken {
    new: NewToken,
    /// The names as JSON.
    plants: Option<String>,
    deed: Deed,
}

impl AddToken {
    pub fn new(new: NewToken, deed: Deed) -> Self {
        let plants = new
            .plants
            .clone()
            .map(|names| Value::from(names).to_string());
        AddToken { new, plants, deed }
    }
}

impl Work for AddToken {
    type Output = Option<TokenRow>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<TokenRow>, sqlx::Error>> {
        async move {
            let id: Option<i64> = sqlx::query_scalar(sql::INSERT_TOKEN)
                .bind(&self.new.name)
                .bind(&self.new.digest[..])
                .bind(self.new.scopes.to_string())
                .bind(&self.plants)
                .bind(self.new.expires.map(nanoseconds))
                .bind(self.new.rate.map(|rate| rate.a_second()))
                .bind(nanoseconds(self.deed.at))
                .fetch_optional(&mut *on)
                .await?;
            let Some(id) = id else {
                return Ok(None);
            };
            note(on, Some(&self.deed), [("id", id.into())]).await?;
            read::token(on, id).await
        }
        .boxed()
    }
}

/// Revokes a token.
pub(in crate::store::sqlite) struct RevokeToken {
    pub name: String,
    pub deed: Deed,
}

impl Work for RevokeToken {
    type Output = Option<TokenRow>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<TokenRow>, sqlx::Error>> {
        async move {
            let id: Option<i64> = sqlx::query_scalar(sql::REVOKE_TOKEN)
                .bind(&self.name)
                .bind(nanoseconds(self.deed.at))
                .fetch_optional(&mut *on)
                .await?;
            let Some(id) = id else {
                return Ok(None);
            };
            note(on, Some(&self.deed), [("id", id.into())]).await?;
            read::token(on, id).await
        }
        .boxed()
    }
}

/// Keeps when a token was last used; it never goes back.
pub(in crate::store::sqlite) struct TokenUsed(pub i64, pub OffsetDateTime);

impl Work for TokenUsed {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> BoxFuture<'a, Result<(), sqlx::Error>> {
        async move {
            sqlx::query(sql::TOKEN_USED)
                .bind(self.0)
                .bind(nanoseconds(self.1))
                .execute(on)
                .await?;
            Ok(())
        }
        .boxed()
    }
}
