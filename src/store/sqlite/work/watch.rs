//! Keeping what a look at a plant changed: its watch, events, accusations.

use super::Work;
use super::access::note;
use crate::access::Deed;
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{compress, signed};
use crate::store::{AccusationRow, NewEvent, StoreError, Watched};
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;

/// Keeps a change that no batch brought.
pub(in crate::store::sqlite) struct ChangeWatch {
    plant: String,
    look: Look,
}

impl ChangeWatch {
    pub fn new(plant: String, watched: Watched) -> Result<Self, StoreError> {
        Ok(ChangeWatch {
            plant,
            look: Look::new(watched)?,
        })
    }
}

impl Work for ChangeWatch {
    type Output = Option<Vec<i64>>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<Vec<i64>>, sqlx::Error>> {
        async move {
            let plant: Option<i64> = sqlx::query_scalar(sql::FIND_PLANT)
                .bind(&self.plant)
                .fetch_optional(&mut *on)
                .await?;
            match plant {
                Some(plant) => self.look.keep(on, plant).await.map(Some),
                None => Ok(None),
            }
        }
        .boxed()
    }
}

/// What a look changed, ready to be written.
pub(super) struct Look {
    watch: Vec<u8>,
    events: Vec<NewEvent>,
    accusations: Vec<AccusationRow>,
    deed: Option<Deed>,
}

impl Look {
    pub fn new(watched: Watched) -> Result<Self, StoreError> {
        Ok(Look {
            watch: compress(watched.watch.as_bytes())?,
            events: watched.events,
            accusations: watched.accusations,
            deed: watched.deed,
        })
    }

    /// Writes it; answers the numbers of the events.
    pub async fn keep(
        &self,
        on: &mut SqliteConnection,
        plant: i64,
    ) -> Result<Vec<i64>, sqlx::Error> {
        sqlx::query(sql::PUT_WATCH)
            .bind(plant)
            .bind(&self.watch)
            .execute(&mut *on)
            .await?;
        for accusation in &self.accusations {
            for statement in [sql::KEEP_FORMER_CLOSING, sql::PUT_ACCUSATION] {
                sqlx::query(statement)
                    .bind(plant)
                    .bind(signed(accusation.id))
                    .bind(accusation.open)
                    .bind(&accusation.json)
                    .execute(&mut *on)
                    .await?;
            }
        }
        let mut ids = Vec::with_capacity(self.events.len());
        for event in &self.events {
            let id = sqlx::query_scalar(sql::INSERT_EVENT)
                .bind(plant)
                .bind(signed(event.alarm))
                .bind(&event.json)
                .fetch_one(&mut *on)
                .await?;
            ids.push(id);
        }
        note(on, self.deed.as_ref(), []).await?;
        Ok(ids)
    }
}
