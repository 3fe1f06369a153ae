//! What the writer can do, each inside a transaction that it does not own.
//!
//! No work may fail on what it was given: an error fails the whole transaction,
//! and with it what others have asked for. What cannot be done (no such plant,
//! no such batch) is an answer.

mod access;
mod backfills;
mod batches;
mod by_hand;
mod delivered;
mod history;
mod periods;
mod plants;
mod replays;
mod results;
mod samples;
mod watch;

pub(super) use access::{AddToken, RevokeToken, TokenUsed};
pub(super) use backfills::{BeginBackfill, EndBackfill};
pub(super) use batches::Accept;
pub(super) use by_hand::{AddByHand, AddFieldReading, EndByHand};
pub(super) use delivered::SetDelivered;
pub(super) use history::{
    Channelled, ClearSide, CloseDay, DayDone, GiveBack, MoveOld, PutChannels, PutChunks, Remove,
    RemoveSamples, Sweep,
};
pub(super) use periods::{ClosePeriod, DropPeriod};
pub(super) use plants::PutPlant;
pub(super) use replays::{AddReplay, AddReplayed, EndReplay};
pub(super) use results::{Finish, FinishAgain};
pub(super) use samples::AddSamples;
pub(super) use watch::ChangeWatch;

use super::fault::corrupt;
use crate::store::StoreError;
use futures::FutureExt;
use futures::future::BoxFuture;
use sqlx::sqlite::SqliteConnection;
use tokio::task::JoinHandle;

/// One thing to be done inside a transaction.
pub(super) trait Work: Send + 'static {
    /// What the caller gets after the commit.
    type Output: Send;

    /// How many ordinary jobs it takes as long as: a transaction takes less of
    /// what is heavy, so that those who wait behind it wait no longer.
    fn weight(&self) -> usize {
        1
    }

    /// Waits for what has to be there before the transaction begins.
    fn ready(&mut self) -> BoxFuture<'_, ()> {
        async {}.boxed()
    }

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Self::Output, sqlx::Error>>;
}

/// Work that takes its place in the queue at once and is made ready meanwhile
/// on a thread that may block: a report is some 100 kB of JSON to be compressed,
/// no work for an async thread, and the order of the queue must not depend on
/// how long it takes.
pub(super) enum Prepared<W> {
    /// It is being made ready.
    Running(JoinHandle<Result<W, StoreError>>),
    /// What came of it.
    Done(Result<W, StoreError>),
}

impl<W: Work> Prepared<W> {
    /// Begins to make work ready.
    pub fn start(prepare: impl FnOnce() -> Result<W, StoreError> + Send + 'static) -> Self {
        Prepared::Running(tokio::task::spawn_blocking(prepare))
    }
}

impl<W: Work + Sync> Work for Prepared<W> {
    type Output = Result<W::Output, StoreError>;

    fn ready(&mut self) -> BoxFuture<'_, ()> {
        async move {
            if let Prepared::Running(handle) = self {
                let done = handle.await.unwrap_or_else(|error| Err(corrupt(error)));
                *self = Prepared::Done(done);
            }
        }
        .boxed()
    }

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<Self::Output, sqlx::Error>> {
        async move {
            match self {
                Prepared::Done(Ok(work)) => Ok(Ok(work.run(on).await?)),
                Prepared::Done(Err(error)) => Ok(Err(error.clone())),
                Prepared::Running(_) => Ok(Err(corrupt("work that was not made ready"))),
            }
        }
        .boxed()
    }
}
