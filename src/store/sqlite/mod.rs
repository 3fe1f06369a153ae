//! The store in one SQLite file.
//!
//! WAL mode with `synchronous=FULL`: a commit returns after its bytes have been
//! fsynced. One writer takes jobs from a bounded queue and commits many in one
//! transaction, because the fsync costs more than everything else together.
//! Readers have a pool of their own and never wait for the writer.

mod fault;
mod open;
mod read;
mod sql;
mod work;
mod writer;

#[cfg(test)]
mod tests;

pub use open::OLDEST_SQLITE;

use super::numbers::Layout;
use super::{
    Acceptance, BatchLine, BatchQuery, Health, Incoming, NewPlant, Page, PlantLine, PutOutcome,
    Reply, SeriesPage, SeriesQuery, Store, StoreError, Stored, StoredPlant, Ticket, Unfinished,
};
use crate::report::{Report, SingleTest};
use futures::FutureExt;
use sqlx::SqlitePool;
use sqlx::sqlite::SqlitePoolOptions;
use std::collections::HashMap;
use std::path::PathBuf;
use std::sync::{Arc, Mutex};
use std::time::Duration;
use tokio::sync::{mpsc, oneshot, watch};
use work::{Accept, Finish, PutPlant};
use writer::{Message, Task, Writer};

/// How a SQLite store is set up.
#[derive(Clone, Debug)]
pub struct SqliteOptions {
    /// The database file; made where it is missing.
    pub path: PathBuf,
    /// Jobs that may wait for the writer.
    pub queue: usize,
    /// Jobs that one transaction takes at most.
    pub group: usize,
    /// How long a lock of another process is waited for.
    pub lock_timeout: Duration,
    /// How long after a failure the writer tries again by itself.
    pub retry: Duration,
}

impl SqliteOptions {
    /// The usual set-up for a file.
    pub fn new(path: impl Into<PathBuf>) -> Self {
        SqliteOptions {
            path: path.into(),
            queue: 1024,
            group: 256,
            lock_timeout: Duration::from_secs(5),
            retry: Duration::from_secs(1),
        }
    }
}

/// What a full or a read-only disk does to the writer, for tests and drills.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Hindrance {
    /// The file may grow to so many pages.
    pub max_pages: Option<u32>,
    /// Nothing can be written.
    pub read_only: bool,
}

/// The store in one SQLite file.
pub struct SqliteStore {
    jobs: mpsc::Sender<Message>,
    readers: SqlitePool,
    health: watch::Receiver<Health>,
    layouts: Mutex<HashMap<i64, Arc<Layout>>>,
}

impl SqliteStore {
    /// Opens the file, brings its schema up to date, checks it, and proves with
    /// a durable write and a full checkpoint that it can be written to.
    ///
    /// # Errors
    ///
    /// [`StoreError::Unusable`] where SQLite is too old, the file is damaged, or
    /// it was written by a newer version; [`StoreError::Unavailable`] where it
    /// cannot be written.
    pub async fn open(options: SqliteOptions) -> Result<Self, StoreError> {
        let connection = open::first(&options).await?;
        let readers = SqlitePoolOptions::new()
            .max_connections(4)
            .acquire_timeout(options.lock_timeout)
            .connect_lazy_with(open::reader(&options));
        let (jobs, queue) = mpsc::channel(options.queue);
        let (report_health, health) = watch::channel(Health::Ready);
        tokio::spawn(Writer::new(options, connection, queue, report_health).run());
        Ok(SqliteStore {
            jobs,
            readers,
            health,
            layouts: Mutex::default(),
        })
    }

    /// Hinders the writer, or frees it again.
    pub async fn hinder(&self, hindrance: Hindrance) -> Result<(), StoreError> {
        let (reply, done) = oneshot::channel();
        self.send(Message::Hinder(hindrance, reply)).await?;
        done.await.map_err(|_| gone())
    }

    async fn send(&self, message: Message) -> Result<(), StoreError> {
        self.jobs.send(message).await.map_err(|_| gone())
    }

    /// Has the writer do some work, waiting for a place in its queue.
    async fn write<W: work::Work>(&self, work: W) -> Result<W::Output, StoreError> {
        let (task, done) = Task::queued(work);
        self.send(Message::Job(task)).await?;
        done.await.map_err(|_| gone())?
    }

    /// The same, refused where the queue is full.
    async fn write_now<W: work::Work>(&self, work: W) -> Result<W::Output, StoreError> {
        let (task, done) = Task::queued(work);
        self.jobs
            .try_send(Message::Job(task))
            .map_err(|error| match error {
                mpsc::error::TrySendError::Full(_) => StoreError::Overloaded,
                mpsc::error::TrySendError::Closed(_) => gone(),
            })?;
        done.await.map_err(|_| gone())?
    }
}

fn gone() -> StoreError {
    StoreError::Unavailable("the store is closed".to_owned())
}

impl Store for SqliteStore {
    fn put_plant(&self, new: NewPlant) -> Reply<'_, PutOutcome> {
        self.write(PutPlant(new)).boxed()
    }

    fn plant<'a>(&'a self, name: &'a str, revision: Option<u32>) -> Reply<'a, Option<StoredPlant>> {
        read::plant(&self.readers, name, revision).boxed()
    }

    fn critical_values<'a>(&'a self, name: &'a str, revision: u32) -> Reply<'a, Vec<SingleTest>> {
        read::critical_values(&self.readers, name, revision).boxed()
    }

    fn plants<'a>(&'a self, after: Option<&'a str>, limit: usize) -> Reply<'a, Vec<PlantLine>> {
        read::plants(&self.readers, after.unwrap_or_default(), limit).boxed()
    }

    fn accept(&self, incoming: Incoming) -> Reply<'_, Acceptance> {
        async { self.write_now(Accept::new(incoming)?).await }.boxed()
    }

    fn finish(&self, ticket: Ticket, report: Arc<Report>) -> Reply<'_, ()> {
        async move {
            // Some 60 kB of JSON to be compressed: no work for an async thread.
            let prepared = tokio::task::spawn_blocking(move || Finish::new(&ticket, &report));
            let work = prepared
                .await
                .map_err(|error| StoreError::Corrupt(error.to_string()))??;
            self.write(work).await
        }
        .boxed()
    }

    fn batch<'a>(&'a self, plant: &'a str, batch: &'a str) -> Reply<'a, Option<Stored>> {
        read::batch(&self.readers, plant, batch).boxed()
    }

    fn batches(&self, query: BatchQuery) -> Reply<'_, Page<BatchLine>> {
        read::batches(&self.readers, query).boxed()
    }

    fn series(&self, query: SeriesQuery) -> Reply<'_, SeriesPage> {
        read::series(&self.readers, &self.layouts, query).boxed()
    }

    fn unfinished(&self, after: i64, limit: usize) -> Reply<'_, Vec<Unfinished>> {
        read::unfinished(&self.readers, after, limit).boxed()
    }

    fn health(&self) -> watch::Receiver<Health> {
        self.health.clone()
    }

    fn close(&self) -> Reply<'_, ()> {
        async {
            // Readers first: a checkpoint cannot pass an open read.
            self.readers.close().await;
            let (reply, done) = oneshot::channel();
            self.send(Message::Close(reply)).await?;
            done.await.map_err(|_| gone())?
        }
        .boxed()
    }
}
