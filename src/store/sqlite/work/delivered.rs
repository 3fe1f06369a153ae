//! Keeping how far the events have been handed to the receiver outside.

use super::Work;
use crate::store::sqlite::sql;
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;

/// Everything up to this event is settled; it never goes back.
pub(in crate::store::sqlite) struct SetDelivered(pub i64);

impl Work for SetDelivered {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> BoxFuture<'a, Result<(), sqlx::Error>> {
        async move {
            sqlx::query(sql::SET_DELIVERED)
                .bind(self.0)
                .execute(on)
                .await?;
            Ok(())
        }
        .boxed()
    }
}
