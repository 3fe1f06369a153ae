//! What is kept: plants with their revisions, accepted batches, results with
//! their versions, the watch over each plant, and what people entered by hand.
//!
//! [`Store`] is the whole interface; [`SqliteStore`] is the one behind it. A
//! call that returns `Ok` from [`Store::accept`] has put the batch where a
//! power cut does not reach it. An error means that nothing was acknowledged.
//! What is changed leaves a trace of what it was. Nothing is deleted, but for
//! what a plant's retention no longer keeps ([`HistoryStore::tidy`]): bodies,
//! reports and samples go, names, digests, verdicts and means stay.
//! Nothing outside this directory knows SQL.

mod access;
mod averages;
mod columns;
mod copies;
mod days;
mod history;
mod meters;
mod numbers;
mod readings;
mod records;
mod replays;
mod sqlite;
mod types;

pub use access::{AccessStore, DeedRow, NewToken, TokenRow};
pub use copies::{CopyError, Existing, Holdings, NewestBatch, Restored};
pub use history::{
    HistoryStore, Mean, MeansColumn, MeansPage, MeansQuery, MeansRow, Resolution, Tidied,
};
pub use meters::{Meters, Room};
pub use readings::{
    Backfill, BackfillMark, Closed, NewSamples, NewTagSamples, OpenPeriod, PeriodBatch,
    ReadingsStore, SamplesTaken, TagSamples,
};
pub use records::{
    AccusationRow, Again, ByHandRow, Ended, FieldReading, NewByHand, NewEvent, NewFieldReading,
    StoredEvent, VersionLine, Watched,
};
pub use replays::{NewReplay, ReplayRow, ReplayState, ReplayWith, ReplayedBatch, ReplaysStore};
pub use sqlite::{
    Hindrance, OLDEST_SQLITE, SqliteOptions, SqliteStore, Synchronous, backup, restore, verify,
};
pub use types::{
    Acceptance, BatchLine, BatchQuery, Column, Cursor, Field, Health, Incoming, NewPlant, Page,
    PlantLine, Precondition, PutOutcome, Removed, Selector, SeriesPage, SeriesQuery, SeriesRow,
    StoreError, Stored, StoredPlant, Ticket, Unfinished,
};

use crate::report::{Report, SingleTest};
use futures::future::BoxFuture;
use std::sync::Arc;
use time::OffsetDateTime;
use tokio::sync::watch;

/// What a call on a store comes to.
pub type Reply<'a, T> = BoxFuture<'a, Result<T, StoreError>>;

/// Where plants, batches and results are kept.
///
/// [`finish`](Store::finish), [`finish_again`](Store::finish_again),
/// [`change_watch`](Store::change_watch) and the calls that add something take
/// their turn **when they are called**, not when the future is polled: two
/// calls one after another are done in that order, whatever is awaited first.
/// What has been called is done even where the future is dropped. They have to
/// be called inside a Tokio runtime.
pub trait Store: AccessStore + HistoryStore + ReadingsStore + ReplaysStore {
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

    /// Makes the result of an accepted batch durable, and with it, in one
    /// transaction, what the look at it changed. Answers the numbers given to
    /// the events. A second result of the same batch is dropped with all that
    /// came with it, and answered with `None`.
    ///
    /// A result of a body that is not the newest any more is kept as well; the
    /// batch then waits for one of the newest.
    ///
    /// After an error nothing of either is kept: a caller that holds the watch
    /// in memory has to read it again.
    fn finish(
        &self,
        ticket: Ticket,
        report: Arc<Report>,
        watched: Option<Watched>,
    ) -> Reply<'_, Option<Vec<i64>>>;

    /// Puts a new result in the place of the present one, which becomes an
    /// older version and stays. The batch keeps its ticket. Answers the number
    /// of the new version; `None`, with nothing done, where the batch has no
    /// result yet, or one of a newer body than the ticket's. It ends the waiting
    /// for a result where there is no newer body.
    fn finish_again(
        &self,
        ticket: Ticket,
        report: Arc<Report>,
        again: Again,
    ) -> Reply<'_, Option<u32>>;

    /// The versions of a batch's result, the first one first; none where there
    /// is no such batch or it has no result.
    fn versions<'a>(&'a self, plant: &'a str, batch: &'a str) -> Reply<'a, Vec<VersionLine>>;

    /// One version of a batch's result, older or present.
    fn version<'a>(
        &'a self,
        plant: &'a str,
        batch: &'a str,
        version: u32,
    ) -> Reply<'a, Option<Report>>;

    /// What is known of a batch.
    fn batch<'a>(&'a self, plant: &'a str, batch: &'a str) -> Reply<'a, Option<Stored>>;

    /// A batch as it was accepted, finished or not, for reconciling it again; of
    /// one made from samples as it was made last.
    fn inbox<'a>(&'a self, plant: &'a str, batch: &'a str) -> Reply<'a, Option<Unfinished>>;

    /// Batches, the latest period first.
    fn batches(&self, query: BatchQuery) -> Reply<'_, Page<BatchLine>>;

    /// Numbers over time, the earliest period first.
    fn series(&self, query: SeriesQuery) -> Reply<'_, SeriesPage>;

    /// Accepted batches without a result of their newest body, in the order of
    /// their acceptance, after the ticket number given.
    fn unfinished(&self, after: i64, limit: usize) -> Reply<'_, Vec<Unfinished>>;

    /// The watch over a plant as it was last kept.
    fn watch<'a>(&'a self, plant: &'a str) -> Reply<'a, Option<String>>;

    /// Makes a change of the watch durable that no batch brought: what a person
    /// did, or time. Answers the numbers given to the events; `None` where there
    /// is no such plant.
    fn change_watch(&self, plant: &str, watched: Watched) -> Reply<'_, Option<Vec<i64>>>;

    /// Events of a plant after the number given, in their order.
    fn events<'a>(
        &'a self,
        plant: &'a str,
        after: i64,
        limit: usize,
    ) -> Reply<'a, Vec<StoredEvent>>;

    /// Events of all plants after the number given, in their order.
    fn events_of_all(&self, after: i64, limit: usize) -> Reply<'_, Vec<StoredEvent>>;

    /// The newest event of all plants; 0 where there is none.
    fn newest_event(&self) -> Reply<'_, i64>;

    /// Up to which event the receiver outside has been served; `None` where
    /// there never was one.
    fn delivered(&self) -> Reply<'_, Option<i64>>;

    /// Keeps that; it never goes back.
    fn set_delivered(&self, event: i64) -> Reply<'_, ()>;

    /// Accusations of a plant, those that are open or those that are closed
    /// where it is asked, after the number given, in the order of their numbers.
    fn accusations<'a>(
        &'a self,
        plant: &'a str,
        open: Option<bool>,
        after: u64,
        limit: usize,
    ) -> Reply<'a, Vec<AccusationRow>>;

    /// One accusation.
    fn accusation<'a>(&'a self, plant: &'a str, id: u64) -> Reply<'a, Option<AccusationRow>>;

    /// Keeps a decision by hand; `None` where there is no such plant.
    fn add_by_hand(&self, plant: &str, new: NewByHand) -> Reply<'_, Option<ByHandRow>>;

    /// Decisions by hand in the order of entering: all of them, or those that
    /// hold for a period that starts at the time given.
    fn by_hand<'a>(
        &'a self,
        plant: &'a str,
        at: Option<OffsetDateTime>,
    ) -> Reply<'a, Vec<ByHandRow>>;

    /// Has a decision by hand hold until another time; answers it as it is now.
    /// What it was before is kept. `None` where the plant has no such decision.
    fn end_by_hand(
        &self,
        plant: &str,
        id: i64,
        until: OffsetDateTime,
        ended: Ended,
    ) -> Reply<'_, Option<ByHandRow>>;

    /// Keeps a reading taken in the field; answers its number, `None` where
    /// there is no such batch.
    fn add_field_reading(
        &self,
        plant: &str,
        batch: &str,
        new: NewFieldReading,
    ) -> Reply<'_, Option<i64>>;

    /// Readings taken in the field for a batch, in the order of entering.
    fn field_readings<'a>(&'a self, plant: &'a str, batch: &'a str)
    -> Reply<'a, Vec<FieldReading>>;

    /// What it has done since the start.
    fn meters(&self) -> Arc<Meters>;

    /// What it holds now.
    fn room(&self) -> Reply<'_, Room>;

    /// How the store is.
    fn health(&self) -> watch::Receiver<Health>;

    /// Writes everything back into the main file and closes.
    fn close(&self) -> Reply<'_, ()>;
}
