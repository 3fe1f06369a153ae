//! What is kept: plants with their revisions, accepted batches, results.
//!
//! [`Store`] is the whole interface; [`SqliteStore`] is the one behind it. A
//! call that returns `Ok` from [`Store::accept`] has put the batch where a
//! power cut does not reach it. An error means that nothing was acknowledged.
//! Nothing outside this directory knows SQL.

mod numbers;
mod sqlite;
mod types;

pub use sqlite::{Hindrance, OLDEST_SQLITE, SqliteOptions, SqliteStore};
pub use types::{
    Acceptance, BatchLine, BatchQuery, Column, Cursor, Field, Health, Incoming, NewPlant, Page,
    PlantLine, Precondition, PutOutcome, Selector, SeriesPage, SeriesQuery, SeriesRow, StoreError,
    Stored, StoredPlant, Ticket, Unfinished,
};

use crate::report::{Report, SingleTest};
use futures::future::BoxFuture;
use std::sync::Arc;
use tokio::sync::watch;

/// What a call on a store comes to.
pub type Reply<'a, T> = BoxFuture<'a, Result<T, StoreError>>;

/// Where plants, batches and results are kept.
pub trait Store: Send + Sync + 'static {
    /// Takes a new revision of a plant, unless nothing changed or the
    /// precondition does not hold.
    fn put_plant(&self, new: NewPlant) -> Reply<'_, PutOutcome>;

    /// One revision of a plant, the current one where none is named.
    fn plant<'a>(&'a self, name: &'a str, revision: Option<u32>) -> Reply<'a, Option<StoredPlant>>;

    /// Critical values of the single tests that results of a revision were held
    /// against: kept with a result, the first of each class set.
    fn critical_values<'a>(&'a self, name: &'a str, revision: u32) -> Reply<'a, Vec<SingleTest>>;

    /// Plants in the order of their names, after the one named.
    fn plants<'a>(&'a self, after: Option<&'a str>, limit: usize) -> Reply<'a, Vec<PlantLine>>;

    /// Makes a batch durable. The same name with the same digest is known, with
    /// another it is a conflict.
    fn accept(&self, incoming: Incoming) -> Reply<'_, Acceptance>;

    /// Makes the result of an accepted batch durable. A second result of the
    /// same batch is dropped.
    fn finish(&self, ticket: Ticket, report: Arc<Report>) -> Reply<'_, ()>;

    /// What is known of a batch.
    fn batch<'a>(&'a self, plant: &'a str, batch: &'a str) -> Reply<'a, Option<Stored>>;

    /// Batches, the latest period first.
    fn batches(&self, query: BatchQuery) -> Reply<'_, Page<BatchLine>>;

    /// Numbers over time, the earliest period first.
    fn series(&self, query: SeriesQuery) -> Reply<'_, SeriesPage>;

    /// Accepted batches without a result, in the order of their acceptance,
    /// after the ticket number given.
    fn unfinished(&self, after: i64, limit: usize) -> Reply<'_, Vec<Unfinished>>;

    /// How the store is.
    fn health(&self) -> watch::Receiver<Health>;

    /// Writes everything back into the main file and closes.
    fn close(&self) -> Reply<'_, ()>;
}
