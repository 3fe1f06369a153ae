//! Closing periods.

use super::Work;
use crate::store::sqlite::fault::nanoseconds;
use crate::store::sqlite::sql;
use crate::store::sqlite::values::compress;
use crate::store::{Closed, Incoming, OpenPeriod, PeriodBatch, StoreError, Ticket};
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;

/// Accepts a period's batch and closes the period.
pub(in crate::store::sqlite) struct ClosePeriod {
    incoming: Incoming,
    generation: i64,
    averaged_under: u32,
    body: Vec<u8>,
}

impl ClosePeriod {
    pub fn new(batch: PeriodBatch) -> Result<Self, StoreError> {
        let mut incoming = batch.incoming;
        let body = compress(&std::mem::take(&mut incoming.body))?;
        Ok(ClosePeriod {
            incoming,
            generation: batch.generation,
            averaged_under: batch.revision,
            body,
        })
    }

    fn start(&self) -> i64 {
        nanoseconds(self.incoming.start)
    }

    /// Whether there is a batch of this name.
    async fn is_taken(&self, on: &mut SqliteConnection, plant: i64) -> Result<bool, sqlx::Error> {
        let known = sqlx::query(sql::KNOWN_BATCH)
            .bind(plant)
            .bind(&self.incoming.batch)
            .fetch_optional(on)
            .await?;
        Ok(known.is_some())
    }

    /// A batch of a period that had none, unless a client has taken its name.
    async fn first(
        &self,
        on: &mut SqliteConnection,
        plant: i64,
        revision: u32,
        backfill: bool,
    ) -> Result<Closed, sqlx::Error> {
        let incoming = &self.incoming;
        if self.is_taken(on, plant).await? {
            return Ok(Closed::NameTaken);
        }
        let end = nanoseconds(incoming.end);
        let id: i64 = sqlx::query_scalar(sql::INSERT_BATCH)
            .bind(plant)
            .bind(&incoming.batch)
            .bind(revision)
            .bind(&incoming.digest[..])
            .bind(self.start())
            .bind(end)
            .bind(nanoseconds(incoming.received))
            .bind(&self.body)
            .fetch_one(&mut *on)
            .await?;
        sqlx::query(sql::INSERT_PENDING)
            .bind(id)
            .bind(backfill)
            .execute(&mut *on)
            .await?;
        sqlx::query(sql::INSERT_MADE_PERIOD)
            .bind(plant)
            .bind(self.start())
            .bind(end)
            .bind(id)
            .execute(on)
            .await?;
        Ok(Closed::New(Ticket {
            id,
            plant: incoming.plant.clone(),
            batch: incoming.batch.clone(),
            revision,
            body: 1,
        }))
    }

    /// Another body of a batch, which waits for a result from now on.
    async fn next(
        &self,
        on: &mut SqliteConnection,
        former: Ticket,
        backfill: bool,
    ) -> Result<Closed, sqlx::Error> {
        let ticket = Ticket {
            body: former.body + 1,
            ..former
        };
        sqlx::query(sql::INSERT_BODY)
            .bind(ticket.id)
            .bind(ticket.body)
            .bind(&self.incoming.digest[..])
            .bind(nanoseconds(self.incoming.received))
            .bind(&self.body)
            .execute(&mut *on)
            .await?;
        for statement in [sql::LOWER_PENDING_BACKFILL, sql::INSERT_PENDING_AGAIN] {
            sqlx::query(statement)
                .bind(ticket.id)
                .bind(backfill)
                .execute(&mut *on)
                .await?;
        }
        Ok(Closed::Changed(ticket))
    }
}

impl Work for ClosePeriod {
    type Output = Closed;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Closed, sqlx::Error>> {
        async move {
            let plant: Option<(i64, u32)> = sqlx::query_as(sql::PLANT_FOR_BATCH)
                .bind(&self.incoming.plant)
                .fetch_optional(&mut *on)
                .await?;
            let Some((plant, revision)) = plant else {
                return Ok(Closed::NoPlant);
            };
            let open: Option<(i64, bool)> = sqlx::query_as(sql::ONE_OPEN_PERIOD)
                .bind(plant)
                .bind(self.start())
                .fetch_optional(&mut *on)
                .await?;
            let made: Option<(i64, String, u32, u32, Vec<u8>)> = sqlx::query_as(sql::MADE_PERIOD)
                .bind(plant)
                .bind(self.start())
                .fetch_optional(&mut *on)
                .await?;
            let made = made.map(|(id, batch, revision, body, digest)| {
                let ticket = Ticket {
                    id,
                    plant: self.incoming.plant.clone(),
                    batch,
                    revision,
                    body,
                };
                (ticket, digest == self.incoming.digest)
            });
            let backfill = match open {
                Some((generation, backfill)) if generation == self.generation => backfill,
                None if matches!(made, Some((_, true))) => false,
                _ => return Ok(Closed::Overtaken),
            };
            let is_current = revision == self.averaged_under;
            if made.is_none() && !is_current && !self.is_taken(on, plant).await? {
                return Ok(Closed::Overtaken);
            }
            sqlx::query(sql::DELETE_OPEN_PERIOD)
                .bind(plant)
                .bind(self.start())
                .execute(&mut *on)
                .await?;
            match made {
                None => self.first(on, plant, revision, backfill).await,
                Some((ticket, true)) => Ok(Closed::Same(ticket)),
                Some((former, false)) => self.next(on, former, backfill).await,
            }
        }
        .boxed()
    }
}

/// Closes a period from which nothing can be made.
pub(in crate::store::sqlite) struct DropPeriod(pub OpenPeriod);

impl Work for DropPeriod {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> BoxFuture<'a, Result<(), sqlx::Error>> {
        async move {
            sqlx::query(sql::DROP_PERIOD)
                .bind(&self.0.plant)
                .bind(nanoseconds(self.0.start))
                .bind(self.0.generation)
                .execute(on)
                .await?;
            Ok(())
        }
        .boxed()
    }
}
