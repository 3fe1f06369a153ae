//! Keeping results: the first of a batch, and those that take its place.

use super::Work;
use super::access::note;
use super::history::keep_numbers;
use super::watch::Look;
use crate::report::Report;
use crate::store::numbers;
use crate::store::sqlite::fault::{corrupt, nanoseconds};
use crate::store::sqlite::sql;
use crate::store::sqlite::values::{compress, verdict_name};
use crate::store::{Again, StoreError, Ticket, Watched};
use futures::FutureExt;
use futures::future::BoxFuture;
use sha2::{Digest, Sha256};
use sqlx::sqlite::SqliteConnection;

/// Keeps the first result of a batch with what the look at it changed.
pub(in crate::store::sqlite) struct Finish {
    row: Row,
    look: Option<Look>,
}

impl Finish {
    pub fn new(
        ticket: &Ticket,
        report: &Report,
        watched: Option<Watched>,
    ) -> Result<Self, StoreError> {
        Ok(Finish {
            row: Row::new(ticket, report)?,
            look: watched.map(Look::new).transpose()?,
        })
    }
}

impl Work for Finish {
    type Output = Option<Vec<i64>>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<Vec<i64>>, sqlx::Error>> {
        async move {
            if self.row.write(&mut *on, sql::INSERT_RESULT).await? == 0 {
                return Ok(None);
            }
            sqlx::query(sql::PENDING_TO_AGAIN)
                .bind(self.row.inbox_id)
                .bind(self.row.body)
                .execute(&mut *on)
                .await?;
            sqlx::query(sql::DELETE_PENDING)
                .bind(self.row.inbox_id)
                .execute(&mut *on)
                .await?;
            let Some(look) = &self.look else {
                return Ok(Some(Vec::new()));
            };
            let plant: i64 = sqlx::query_scalar(sql::PLANT_OF_BATCH)
                .bind(self.row.inbox_id)
                .fetch_one(&mut *on)
                .await?;
            look.keep(on, plant).await.map(Some)
        }
        .boxed()
    }
}

/// Puts a result in the place of the present one.
pub(in crate::store::sqlite) struct FinishAgain {
    row: Row,
    batch: String,
    again: Again,
}

impl FinishAgain {
    pub fn new(ticket: &Ticket, report: &Report, again: Again) -> Result<Self, StoreError> {
        Ok(FinishAgain {
            row: Row::new(ticket, report)?,
            batch: ticket.batch.clone(),
            again,
        })
    }
}

impl Work for FinishAgain {
    type Output = Option<u32>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<u32>, sqlx::Error>> {
        async move {
            let former: Option<u32> = sqlx::query_scalar(sql::KEEP_FORMER_RESULT)
                .bind(self.row.inbox_id)
                .bind(self.row.body)
                .fetch_optional(&mut *on)
                .await?;
            let Some(former) = former else {
                return Ok(None);
            };
            self.row.write(&mut *on, sql::REPLACE_RESULT).await?;
            sqlx::query(sql::INSERT_AGAIN)
                .bind(self.row.inbox_id)
                .bind(former + 1)
                .bind(nanoseconds(self.again.at))
                .bind(&self.again.by)
                .bind(&self.again.reason)
                .execute(&mut *on)
                .await?;
            sqlx::query(sql::DELETE_PENDING_AGAIN)
                .bind(self.row.inbox_id)
                .bind(self.row.body)
                .execute(&mut *on)
                .await?;
            let numbers = [
                ("batch", self.batch.as_str().into()),
                ("version", (former + 1).into()),
            ];
            note(on, self.again.deed.as_ref(), numbers).await?;
            Ok(Some(former + 1))
        }
        .boxed()
    }
}

/// A result as it stands in the database.
struct Row {
    inbox_id: i64,
    body: u32,
    revision: u32,
    verdict: &'static str,
    statistic: Option<f64>,
    degrees_of_freedom: Option<i64>,
    layout_digest: Vec<u8>,
    channels: Vec<u8>,
    numbers: Vec<u8>,
    report: Vec<u8>,
    /// Class set, and the test as JSON.
    single_test: Option<(String, String)>,
}

impl Row {
    fn new(ticket: &Ticket, report: &Report) -> Result<Self, StoreError> {
        let encoded = numbers::encode(report);
        let channels = serde_json::to_vec(&encoded.channels).map_err(corrupt)?;
        let test = report.global_test.as_ref();
        let single_test = report.single_test.as_ref().map(|test| {
            let json = serde_json::to_string(test).map_err(corrupt)?;
            Ok((test.class_set.clone(), json))
        });
        Ok(Row {
            single_test: single_test.transpose()?,
            inbox_id: ticket.id,
            body: ticket.body,
            revision: report.revision,
            verdict: verdict_name(report.verdict),
            statistic: test.map(|test| test.statistic),
            degrees_of_freedom: test.and_then(|test| i64::try_from(test.degrees_of_freedom).ok()),
            layout_digest: Sha256::digest(&channels).to_vec(),
            channels: compress(&channels)?,
            numbers: encoded.numbers,
            report: compress(&serde_json::to_vec(report).map_err(corrupt)?)?,
        })
    }

    /// Inserts or replaces, with the critical value that was used; answers how
    /// many rows were written.
    async fn write(
        &self,
        on: &mut SqliteConnection,
        statement: &'static str,
    ) -> Result<u64, sqlx::Error> {
        let layout = self.layout(&mut *on).await?;
        let written = sqlx::query(statement)
            .bind(self.inbox_id)
            .bind(self.verdict)
            .bind(self.statistic)
            .bind(self.degrees_of_freedom)
            .bind(layout)
            .bind(&[][..])
            .bind(&self.report)
            .bind(self.body)
            .execute(&mut *on)
            .await?
            .rows_affected();
        if written > 0 {
            keep_numbers(&mut *on, self.inbox_id, &self.numbers).await?;
        }
        if written > 0
            && let Some((class_set, test)) = &self.single_test
        {
            sqlx::query(sql::INSERT_CRITICAL_VALUE)
                .bind(self.inbox_id)
                .bind(self.revision)
                .bind(class_set)
                .bind(test)
                .execute(on)
                .await?;
        }
        Ok(written)
    }

    async fn layout(&self, on: &mut SqliteConnection) -> Result<i64, sqlx::Error> {
        let known: Option<i64> = sqlx::query_scalar(sql::FIND_LAYOUT)
            .bind(&self.layout_digest)
            .fetch_optional(&mut *on)
            .await?;
        match known {
            Some(id) => Ok(id),
            None => {
                sqlx::query_scalar(sql::INSERT_LAYOUT)
                    .bind(&self.layout_digest)
                    .bind(&self.channels)
                    .fetch_one(on)
                    .await
            }
        }
    }
}
