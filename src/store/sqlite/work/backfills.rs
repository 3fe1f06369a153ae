//! The beginning and the end of backfills; what lies between is kept with the
//! samples.

use super::Work;
use super::access::note;
use crate::access::Deed;
use crate::store::Backfill;
use crate::store::sqlite::fault::nanoseconds;
use crate::store::sqlite::{read, sql};
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;
use time::OffsetDateTime;

/// Begins a backfill, or finds it.
pub(in crate::store::sqlite) struct BeginBackfill {
    pub plant: String,
    pub name: String,
    pub at: OffsetDateTime,
    pub deed: Option<Deed>,
}

impl Work for BeginBackfill {
    type Output = Option<Backfill>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<Backfill>, sqlx::Error>> {
        async move {
            let plant: Option<i64> = sqlx::query_scalar(sql::FIND_PLANT)
                .bind(&self.plant)
                .fetch_optional(&mut *on)
                .await?;
            let Some(plant) = plant else {
                return Ok(None);
            };
            let begun = sqlx::query(sql::BEGIN_BACKFILL)
                .bind(plant)
                .bind(&self.name)
                .bind(nanoseconds(self.at))
                .execute(&mut *on)
                .await?;
            if begun.rows_affected() > 0 {
                note(&mut *on, self.deed.as_ref(), []).await?;
            }
            read::begun_backfill(on, &self.plant, &self.name).await
        }
        .boxed()
    }
}

/// Marks a backfill as settled to the end.
pub(in crate::store::sqlite) struct EndBackfill {
    pub plant: String,
    pub name: String,
    pub at: OffsetDateTime,
}

impl Work for EndBackfill {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> BoxFuture<'a, Result<(), sqlx::Error>> {
        async move {
            sqlx::query(sql::END_BACKFILL)
                .bind(&self.plant)
                .bind(&self.name)
                .bind(nanoseconds(self.at))
                .execute(on)
                .await?;
            Ok(())
        }
        .boxed()
    }
}
