//! The store in one SQLite file.
//!
//! WAL mode with `synchronous=FULL`: a commit returns after its bytes have been
//! fsynced. One writer takes jobs from a queue and commits many in one
//! transaction, because the fsync costs more than everything else together. A
//! job enters the queue when it is called for, so that the order of calls is the
//! order of the transactions; new batches are refused where the queue is long.
//! Readers have a pool of their own and never wait for the writer.

mod access;
mod copies;
mod fault;
mod history;
mod open;
mod read;
mod readings;
mod replays;
mod sql;
mod values;
mod work;
mod writer;

#[cfg(test)]
mod tests;

pub use copies::{backup, restore, verify};
pub use open::OLDEST_SQLITE;

use super::{
    Acceptance, AccusationRow, Again, BatchLine, BatchQuery, ByHandRow, Ended, FieldReading,
    Health, Incoming, Meters, NewByHand, NewFieldReading, NewPlant, Page, PlantLine, PutOutcome,
    Reply, Room, SeriesPage, SeriesQuery, Store, StoreError, Stored, StoredEvent, StoredPlant,
    Ticket, Unfinished, VersionLine, Watched,
};
use crate::report::{Report, SingleTest};
use futures::FutureExt;
use history::Layouts;
use sqlx::SqlitePool;
use sqlx::sqlite::{SqliteConnection, SqlitePoolOptions};
use std::path::PathBuf;
use std::sync::Arc;
use std::time::Duration;
use time::OffsetDateTime;
use tokio::sync::{OwnedSemaphorePermit, Semaphore, mpsc, oneshot, watch};
use work::{
    Accept, AddByHand, AddFieldReading, ChangeWatch, EndByHand, Finish, FinishAgain, Prepared,
    PutPlant, SetDelivered, Work,
};
use writer::{Message, Task, Writer};

/// How a SQLite store is set up.
#[derive(Clone, Debug)]
pub struct SqliteOptions {
    /// The database file; made where it is missing.
    pub path: PathBuf,
    /// Jobs that may be with the writer before new batches are refused. What
    /// has been accepted is always let in: its number is bounded by that.
    pub queue: usize,
    /// Jobs that one transaction takes at most; heavy ones count as several.
    pub group: usize,
    /// How long a lock of another process is waited for.
    pub lock_timeout: Duration,
    /// How long after a failure the writer tries again by itself.
    pub retry: Duration,
    /// Whether a commit waits for the disk.
    pub synchronous: Synchronous,
}

/// Whether a commit waits until the disk has it.
///
/// A batch is acknowledged after its commit, so that only [`Full`](Self::Full)
/// keeps what was promised, and no setting of the service reaches anything else.
/// The other is there for the trial of power cuts, which has to find losses with
/// it or it would prove nothing.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Synchronous {
    /// Every commit is synced before it returns.
    #[default]
    Full,
    /// The log is synced before a checkpoint only: a power cut loses commits.
    Normal,
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
            synchronous: Synchronous::Full,
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
    jobs: mpsc::UnboundedSender<Message>,
    /// Places in the queue. A batch needs one; other jobs take one that is free,
    /// and go without where there is none.
    places: Arc<Semaphore>,
    readers: SqlitePool,
    health: watch::Receiver<Health>,
    layouts: Layouts,
    /// One turn of the background work at a time.
    tidying: tokio::sync::Mutex<()>,
    meters: Arc<Meters>,
    path: PathBuf,
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
        Ok(SqliteStore::around(options, connection))
    }

    /// Opens the file beside a service that may be running on it: brings its
    /// schema up to date and looks no further, since the service has.
    ///
    /// # Errors
    ///
    /// [`StoreError::Unusable`] where SQLite is too old or the file was written
    /// by a newer version; [`StoreError::Unavailable`] where there is none and
    /// none is to be made.
    pub async fn open_beside(options: SqliteOptions, make: bool) -> Result<Self, StoreError> {
        let connection = open::beside(&options, make).await?;
        Ok(SqliteStore::around(options, connection))
    }

    fn around(options: SqliteOptions, connection: SqliteConnection) -> Self {
        let readers = SqlitePoolOptions::new()
            .max_connections(4)
            .acquire_timeout(options.lock_timeout)
            .connect_lazy_with(open::reader(&options));
        let (jobs, queue) = mpsc::unbounded_channel();
        let places = Arc::new(Semaphore::new(options.queue));
        let (report_health, health) = watch::channel(Health::Ready);
        let (meters, path) = (Arc::<Meters>::default(), options.path.clone());
        let writer = Writer::new(options, connection, queue, report_health);
        tokio::spawn(writer.counted_by(Arc::clone(&meters)).run());
        SqliteStore {
            jobs,
            places,
            readers,
            health,
            layouts: Layouts::default(),
            tidying: tokio::sync::Mutex::default(),
            meters,
            path,
        }
    }

    /// Hinders the writer, or frees it again.
    pub async fn hinder(&self, hindrance: Hindrance) -> Result<(), StoreError> {
        let (reply, done) = oneshot::channel();
        self.send(Message::Hinder(hindrance, reply))?;
        done.await.map_err(|_| gone())
    }

    fn send(&self, message: Message) -> Result<(), StoreError> {
        self.jobs.send(message).map_err(|_| gone())
    }

    /// Has the writer do some work: it is in the queue when this returns, and
    /// done whether or not the answer is waited for.
    fn write<W: Work>(&self, work: W) -> Reply<'static, W::Output> {
        let place = Arc::clone(&self.places).try_acquire_owned().ok();
        self.queue(work, place)
    }

    /// The same, refused where the queue is full.
    fn write_now<W: Work>(&self, work: W) -> Reply<'static, W::Output> {
        match Arc::clone(&self.places).try_acquire_owned() {
            Ok(place) => self.queue(work, Some(place)),
            Err(_) => std::future::ready(Err(StoreError::Overloaded)).boxed(),
        }
    }

    fn queue<W: Work>(
        &self,
        work: W,
        place: Option<OwnedSemaphorePermit>,
    ) -> Reply<'static, W::Output> {
        let (task, done) = Task::queued(work, place);
        self.meters.queue();
        let sent = self.send(Message::Job(task));
        async move {
            sent?;
            done.await.map_err(|_| gone())?
        }
        .boxed()
    }

    /// Has the writer do work that has to be made ready first: it takes its
    /// place in the queue all the same now.
    fn write_prepared<W: Work + Sync>(
        &self,
        prepare: impl FnOnce() -> Result<W, StoreError> + Send + 'static,
    ) -> Reply<'static, W::Output> {
        let written = self.write(Prepared::start(prepare));
        async { written.await? }.boxed()
    }
}

fn gone() -> StoreError {
    StoreError::Unavailable("the store is closed".to_owned())
}

impl Store for SqliteStore {
    fn put_plant(&self, new: NewPlant) -> Reply<'_, PutOutcome> {
        self.write(PutPlant(new))
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

    fn finish(
        &self,
        ticket: Ticket,
        report: Arc<Report>,
        watched: Option<Watched>,
    ) -> Reply<'_, Option<Vec<i64>>> {
        self.write_prepared(move || Finish::new(&ticket, &report, watched))
    }

    fn finish_again(
        &self,
        ticket: Ticket,
        report: Arc<Report>,
        again: Again,
    ) -> Reply<'_, Option<u32>> {
        self.write_prepared(move || FinishAgain::new(&ticket, &report, again))
    }

    fn versions<'a>(&'a self, plant: &'a str, batch: &'a str) -> Reply<'a, Vec<VersionLine>> {
        read::versions(&self.readers, plant, batch).boxed()
    }

    fn version<'a>(
        &'a self,
        plant: &'a str,
        batch: &'a str,
        version: u32,
    ) -> Reply<'a, Option<Report>> {
        read::version(&self.readers, plant, batch, version).boxed()
    }

    fn batch<'a>(&'a self, plant: &'a str, batch: &'a str) -> Reply<'a, Option<Stored>> {
        read::batch(&self.readers, plant, batch).boxed()
    }

    fn inbox<'a>(&'a self, plant: &'a str, batch: &'a str) -> Reply<'a, Option<Unfinished>> {
        read::inbox(&self.readers, plant, batch).boxed()
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

    fn watch<'a>(&'a self, plant: &'a str) -> Reply<'a, Option<String>> {
        read::watch(&self.readers, plant).boxed()
    }

    fn change_watch(&self, plant: &str, watched: Watched) -> Reply<'_, Option<Vec<i64>>> {
        let plant = plant.to_owned();
        self.write_prepared(move || ChangeWatch::new(plant, watched))
    }

    fn events<'a>(
        &'a self,
        plant: &'a str,
        after: i64,
        limit: usize,
    ) -> Reply<'a, Vec<StoredEvent>> {
        read::events(&self.readers, plant, after, limit).boxed()
    }

    fn events_of_all(&self, after: i64, limit: usize) -> Reply<'_, Vec<StoredEvent>> {
        read::events_of_all(&self.readers, after, limit).boxed()
    }

    fn newest_event(&self) -> Reply<'_, i64> {
        read::newest_event(&self.readers).boxed()
    }

    fn delivered(&self) -> Reply<'_, Option<i64>> {
        read::delivered(&self.readers).boxed()
    }

    fn set_delivered(&self, event: i64) -> Reply<'_, ()> {
        self.write(SetDelivered(event))
    }

    fn accusations<'a>(
        &'a self,
        plant: &'a str,
        open: Option<bool>,
        after: u64,
        limit: usize,
    ) -> Reply<'a, Vec<AccusationRow>> {
        read::accusations(&self.readers, plant, open, after, limit).boxed()
    }

    fn accusation<'a>(&'a self, plant: &'a str, id: u64) -> Reply<'a, Option<AccusationRow>> {
        read::accusation(&self.readers, plant, id).boxed()
    }

    fn add_by_hand(&self, plant: &str, new: NewByHand) -> Reply<'_, Option<ByHandRow>> {
        match AddByHand::new(plant.to_owned(), new) {
            Ok(work) => self.write(work),
            Err(error) => std::future::ready(Err(error)).boxed(),
        }
    }

    fn by_hand<'a>(
        &'a self,
        plant: &'a str,
        at: Option<OffsetDateTime>,
    ) -> Reply<'a, Vec<ByHandRow>> {
        read::by_hand(&self.readers, plant, at).boxed()
    }

    fn end_by_hand(
        &self,
        plant: &str,
        id: i64,
        until: OffsetDateTime,
        ended: Ended,
    ) -> Reply<'_, Option<ByHandRow>> {
        self.write(EndByHand {
            plant: plant.to_owned(),
            id,
            until,
            ended,
        })
    }

    fn add_field_reading(
        &self,
        plant: &str,
        batch: &str,
        new: NewFieldReading,
    ) -> Reply<'_, Option<i64>> {
        self.write(AddFieldReading {
            plant: plant.to_owned(),
            batch: batch.to_owned(),
            new,
        })
    }

    fn field_readings<'a>(
        &'a self,
        plant: &'a str,
        batch: &'a str,
    ) -> Reply<'a, Vec<FieldReading>> {
        read::field_readings(&self.readers, plant, batch).boxed()
    }

    fn meters(&self) -> Arc<Meters> {
        Arc::clone(&self.meters)
    }

    fn room(&self) -> Reply<'_, Room> {
        read::room(&self.readers, &self.path).boxed()
    }

    fn health(&self) -> watch::Receiver<Health> {
        self.health.clone()
    }

    fn close(&self) -> Reply<'_, ()> {
        async {
            // Readers first: a checkpoint cannot pass an open read.
            self.readers.close().await;
            let (reply, done) = oneshot::channel();
            self.send(Message::Close(reply))?;
            done.await.map_err(|_| gone())?
        }
        .boxed()
    }
}
