//! What the writer can do, each inside a transaction that it does not own.

use super::fault::{corrupt, nanoseconds};
use super::{read, sql};
use crate::report::{Report, Verdict};
use crate::store::numbers;
use crate::store::{Acceptance, Incoming, NewPlant, PutOutcome, StoreError, StoredPlant, Ticket};
use futures::FutureExt;
use futures::future::BoxFuture;
use sha2::{Digest, Sha256};
use sqlx::sqlite::SqliteConnection;

/// zstd's quick level: a batch must not wait for its compression.
const LEVEL: i32 = 1;

/// One thing to be done inside a transaction.
pub(super) trait Work: Send + 'static {
    /// What the caller gets after the commit.
    type Output: Send;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Self::Output, sqlx::Error>>;
}

/// Takes a plant file.
pub(super) struct PutPlant(pub NewPlant);

impl Work for PutPlant {
    type Output = PutOutcome;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<PutOutcome, sqlx::Error>> {
        async move {
            let new = &self.0;
            let current = read::current_plant(&mut *on, &new.name).await?;
            if !new.precondition.holds(current.as_ref()) {
                return Ok(PutOutcome::PreconditionFailed);
            }
            let digest = Sha256::digest(new.canonical.as_bytes());
            let hexadecimal = hex(&digest);
            let revision = match current {
                Some(current) if current.digest == hexadecimal => {
                    return Ok(PutOutcome::Unchanged(current));
                }
                Some(current) => current.revision + 1,
                None => 1,
            };
            sqlx::query(sql::INSERT_PLANT)
                .bind(&new.name)
                .execute(&mut *on)
                .await?;
            sqlx::query(sql::INSERT_REVISION)
                .bind(&new.name)
                .bind(revision)
                .bind(&new.title)
                .bind(&digest[..])
                .bind(&new.media_type)
                .bind(&new.source)
                .bind(&new.canonical)
                .bind(nanoseconds(new.received))
                .execute(&mut *on)
                .await?;
            Ok(PutOutcome::Created(StoredPlant {
                name: new.name.clone(),
                revision,
                digest: hexadecimal,
                media_type: new.media_type.clone(),
                source: new.source.clone(),
                canonical: new.canonical.clone(),
                created: new.received,
            }))
        }
        .boxed()
    }
}

/// Takes a batch into the inbox.
pub(super) struct Accept {
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
            let ticket = |id, revision| Ticket {
                id,
                plant: incoming.plant.clone(),
                batch: incoming.batch.clone(),
                revision,
            };
            let plant: Option<(i64, u32)> = sqlx::query_as(sql::PLANT_FOR_BATCH)
                .bind(&incoming.plant)
                .fetch_optional(&mut *on)
                .await?;
            let Some((plant, revision)) = plant else {
                return Ok(Acceptance::NoPlant);
            };
            let known: Option<(i64, u32, Vec<u8>)> = sqlx::query_as(sql::KNOWN_BATCH)
                .bind(plant)
                .bind(&incoming.batch)
                .fetch_optional(&mut *on)
                .await?;
            if let Some((id, revision, digest)) = known {
                return Ok(if digest == incoming.digest {
                    Acceptance::Known(ticket(id, revision))
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
                .execute(&mut *on)
                .await?;
            Ok(Acceptance::New(ticket(id, revision)))
        }
        .boxed()
    }
}

/// Keeps the result of a batch.
pub(super) struct Finish {
    inbox_id: i64,
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

impl Finish {
    pub fn new(ticket: &Ticket, report: &Report) -> Result<Self, StoreError> {
        let encoded = numbers::encode(report);
        let channels = serde_json::to_vec(&encoded.channels).map_err(corrupt)?;
        let test = report.global_test.as_ref();
        let single_test = report.single_test.as_ref().map(|test| {
            let json = serde_json::to_string(test).map_err(corrupt)?;
            Ok((test.class_set.clone(), json))
        });
        Ok(Finish {
            single_test: single_test.transpose()?,
            inbox_id: ticket.id,
            verdict: verdict_name(report.verdict),
            statistic: test.map(|test| test.statistic),
            degrees_of_freedom: test.and_then(|test| i64::try_from(test.degrees_of_freedom).ok()),
            layout_digest: Sha256::digest(&channels).to_vec(),
            channels: compress(&channels)?,
            numbers: encoded.numbers,
            report: compress(&serde_json::to_vec(report).map_err(corrupt)?)?,
        })
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

impl Work for Finish {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> BoxFuture<'a, Result<(), sqlx::Error>> {
        async move {
            let layout = self.layout(&mut *on).await?;
            sqlx::query(sql::INSERT_RESULT)
                .bind(self.inbox_id)
                .bind(self.verdict)
                .bind(self.statistic)
                .bind(self.degrees_of_freedom)
                .bind(layout)
                .bind(&self.numbers)
                .bind(&self.report)
                .execute(&mut *on)
                .await?;
            if let Some((class_set, test)) = &self.single_test {
                sqlx::query(sql::INSERT_CRITICAL_VALUE)
                    .bind(self.inbox_id)
                    .bind(class_set)
                    .bind(test)
                    .execute(&mut *on)
                    .await?;
            }
            sqlx::query(sql::DELETE_PENDING)
                .bind(self.inbox_id)
                .execute(on)
                .await?;
            Ok(())
        }
        .boxed()
    }
}

/// A verdict as it stands in the database, and in reports.
pub(super) fn verdict_name(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Consistent => "consistent",
        Verdict::Inconsistent => "inconsistent",
        Verdict::NotRedundant => "not-redundant",
        Verdict::NotConverged => "not-converged",
    }
}

/// The verdict of a name in the database.
pub(super) fn verdict(name: &str) -> Result<Verdict, StoreError> {
    [
        Verdict::Consistent,
        Verdict::Inconsistent,
        Verdict::NotRedundant,
        Verdict::NotConverged,
    ]
    .into_iter()
    .find(|&verdict| verdict_name(verdict) == name)
    .ok_or_else(|| corrupt(format!("verdict {name}")))
}

fn compress(bytes: &[u8]) -> Result<Vec<u8>, StoreError> {
    zstd::encode_all(bytes, LEVEL).map_err(corrupt)
}

/// Bytes as hexadecimal digits.
pub(super) fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}
