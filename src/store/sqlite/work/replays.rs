//! Keeping replays and what they make.

use super::Work;
use super::access::note;
use crate::access::Deed;
use crate::report::Report;
use crate::store::sqlite::fault::{corrupt, nanoseconds};
use crate::store::sqlite::values::{compress, replay_state_name};
use crate::store::sqlite::{read, sql};
use crate::store::{NewReplay, ReplayRow, ReplayState, ReplayWith, StoreError};
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;
use time::OffsetDateTime;

/// Keeps a replay to be made.
pub(in crate::store::sqlite) struct AddReplay(pub NewReplay);

impl Work for AddReplay {
    type Output = Option<ReplayRow>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<ReplayRow>, sqlx::Error>> {
        async move {
            let new = &self.0;
            let (revision, media_type, source) = match &new.with {
                ReplayWith::Revision(revision) => (Some(*revision), None, None),
                ReplayWith::Candidate { media_type, source } => {
                    (None, Some(media_type), Some(source))
                }
            };
            let id: Option<i64> = sqlx::query_scalar(sql::INSERT_REPLAY)
                .bind(&new.plant)
                .bind(nanoseconds(new.from))
                .bind(nanoseconds(new.to))
                .bind(revision)
                .bind(media_type)
                .bind(source)
                .bind(&new.by)
                .bind(&new.reason)
                .bind(nanoseconds(new.at))
                .fetch_optional(&mut *on)
                .await?;
            let Some(id) = id else {
                return Ok(None);
            };
            note(&mut *on, new.deed.as_ref(), [("id", id.into())]).await?;
            read::kept_replay(on, id).await
        }
        .boxed()
    }
}

/// Keeps what a batch would be.
pub(in crate::store::sqlite) struct AddReplayed {
    id: i64,
    batch: String,
    report: Vec<u8>,
}

impl AddReplayed {
    pub fn new(id: i64, batch: String, report: &Report) -> Result<Self, StoreError> {
        let json = serde_json::to_vec(report).map_err(corrupt)?;
        Ok(AddReplayed {
            id,
            batch,
            report: compress(&json)?,
        })
    }
}

impl Work for AddReplayed {
    type Output = ();

    fn run<'a>(&'a self, on: &'a mut SqliteConnection) -> BoxFuture<'a, Result<(), sqlx::Error>> {
        async move {
            let added = sqlx::query(sql::INSERT_REPLAYED)
                .bind(self.id)
                .bind(&self.batch)
                .bind(&self.report)
                .execute(&mut *on)
                .await?;
            if added.rows_affected() > 0 {
                sqlx::query(sql::COUNT_REPLAYED)
                    .bind(self.id)
                    .execute(on)
                    .await?;
            }
            Ok(())
        }
        .boxed()
    }
}

/// Ends a replay.
pub(in crate::store::sqlite) struct EndReplay {
    pub id: i64,
    pub state: ReplayState,
    pub at: OffsetDateTime,
    pub deed: Option<Deed>,
}

impl Work for EndReplay {
    type Output = Option<ReplayRow>;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Option<ReplayRow>, sqlx::Error>> {
        async move {
            if self.state != ReplayState::Running {
                let ended = sqlx::query(sql::END_REPLAY)
                    .bind(self.id)
                    .bind(replay_state_name(self.state))
                    .bind(nanoseconds(self.at))
                    .execute(&mut *on)
                    .await?;
                if ended.rows_affected() > 0 {
                    note(&mut *on, self.deed.as_ref(), [("id", self.id.into())]).await?;
                }
            }
            read::kept_replay(on, self.id).await
        }
        .boxed()
    }
}
