//! Keeping what people enter: decisions by hand, and readings in the field.

use super::Work;
use super::access::note;
use crate::plant::Action;
use crate::store::sqlite::fault::{corrupt, nanoseconds};
use crate::store::sqlite::{read, sql};
use crate::store::{ByHandRow, Ended, NewByHand, NewFieldReading, StoreError};
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;
use time::OffsetDateTime;

/// Keeps a decision.
pub(in crate::store::sqlite) struct AddByHand {
    plant: String,
    new: NewByHand,
}

impl AddByHand {
    /// Refuses an offset that is no number: there is no such column value.
    pub fn new(plant: String, new: NewByHand) -> Result<Self, StoreError> {
        match new.action {
            Action::Offset(offset) if !offset.is_finite() => Err(corrupt(format!(
                "an offset of {offset} to tag \"{}\"",
                new.tag
            ))),
            _ => Ok(AddByHand { plant, new }),
        }
    }
}

impl Work for AddByHand {
    type Output = Option<ByHandRow>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<ByHandRow>, sqlx::Error>> {
        async move {
            let added = match self.new.action {
                Action::OutOfService => None,
                Action::Offset(offset) => Some(offset),
            };
            let id: Option<i64> = sqlx::query_scalar(sql::INSERT_BY_HAND)
                .bind(&self.plant)
                .bind(&self.new.tag)
                .bind(added)
                .bind(nanoseconds(self.new.from))
                .bind(self.new.until.map(nanoseconds))
                .bind(&self.new.reason)
                .bind(&self.new.by)
                .bind(nanoseconds(self.new.entered))
                .fetch_optional(&mut *on)
                .await?;
            match id {
                Some(id) => {
                    note(&mut *on, self.new.deed.as_ref(), [("id", id.into())]).await?;
                    read::decision(on, &self.plant, id).await
                }
                None => Ok(None),
            }
        }
        .boxed()
    }
}

/// Has a decision hold until another time.
pub(in crate::store::sqlite) struct EndByHand {
    pub plant: String,
    pub id: i64,
    pub until: OffsetDateTime,
    pub ended: Ended,
}

impl Work for EndByHand {
    type Output = Option<ByHandRow>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<ByHandRow>, sqlx::Error>> {
        async move {
            let ended = sqlx::query(sql::INSERT_BY_HAND_END)
                .bind(&self.plant)
                .bind(self.id)
                .bind(nanoseconds(self.until))
                .bind(&self.ended.by)
                .bind(nanoseconds(self.ended.at))
                .execute(&mut *on)
                .await?;
            if ended.rows_affected() > 0 {
                let deed = self.ended.deed.as_ref();
                note(&mut *on, deed, [("id", self.id.into())]).await?;
            }
            read::decision(on, &self.plant, self.id).await
        }
        .boxed()
    }
}

/// Keeps a reading in the field.
pub(in crate::store::sqlite) struct AddFieldReading {
    pub plant: String,
    pub batch: String,
    pub new: NewFieldReading,
}

impl Work for AddFieldReading {
    type Output = Option<i64>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<i64>, sqlx::Error>> {
        async move {
            let id: Option<i64> = sqlx::query_scalar(sql::INSERT_FIELD_READING)
                .bind(&self.plant)
                .bind(&self.batch)
                .bind(&self.new.json)
                .bind(&self.new.by)
                .bind(nanoseconds(self.new.at))
                .fetch_optional(&mut *on)
                .await?;
            if let Some(id) = id {
                let numbers = [("batch", self.batch.as_str().into()), ("id", id.into())];
                note(on, self.new.deed.as_ref(), numbers).await?;
            }
            Ok(id)
        }
        .boxed()
    }
}
