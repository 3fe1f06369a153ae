//! Taking batches into the inbox.

use super::Work;
use crate::store::sqlite::fault::nanoseconds;
use crate::store::sqlite::sql;
use crate::store::sqlite::values::compress;
use crate::store::{Acceptance, Incoming, StoreError, Ticket};
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;

/// Takes a batch into the inbox.
pub(in crate::store::sqlite) struct Accept {
    incoming: Incoming,
    body: Vec<u8>,
}

impl Accept {
    pub fn new(mut incoming: Incoming) -> Result<Self, StoreError> {
        let body = compress(&std::mem::take(&mut incoming.body))?;
        Ok(Accept { incoming, body })
    }
}

impl Work for Accept {
    type Output = Acceptance;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Acceptance, sqlx::Error>> {
        async move {
            let incoming = &self.incoming;
            let ticket = |id, revision, body| Ticket {
                id,
                plant: incoming.plant.clone(),
                batch: incoming.batch.clone(),
                revision,
                body,
            };
            let plant: Option<(i64, u32)> = sqlx::query_as(sql::PLANT_FOR_BATCH)
                .bind(&incoming.plant)
                .fetch_optional(&mut *on)
                .await?;
            let Some((plant, revision)) = plant else {
                return Ok(Acceptance::NoPlant);
            };
            let known: Option<(i64, u32, u32, Vec<u8>)> = sqlx::query_as(sql::KNOWN_BATCH)
                .bind(plant)
                .bind(&incoming.batch)
                .fetch_optional(&mut *on)
                .await?;
            if let Some((id, revision, body, digest)) = known {
                return Ok(if digest == incoming.digest {
                    Acceptance::Known(ticket(id, revision, body))
                } else {
                    Acceptance::Conflict
                });
            }
            let id: i64 = sqlx::query_scalar(sql::INSERT_BATCH)
                .bind(plant)
                .bind(&incoming.batch)
                .bind(revision)
                .bind(&incoming.digest[..])
                .bind(nanoseconds(incoming.start))
                .bind(nanoseconds(incoming.end))
                .bind(nanoseconds(incoming.received))
                .bind(&self.body)
                .fetch_one(&mut *on)
                .await?;
            sqlx::query(sql::INSERT_PENDING)
                .bind(id)
                .bind(false)
                .execute(&mut *on)
                .await?;
            Ok(Acceptance::New(ticket(id, revision, 1)))
        }
        .boxed()
    }
}
