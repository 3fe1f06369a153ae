//! Replays: a past period reconciled under another revision, kept beside the
//! results and never in their place.

use super::{BatchLine, Reply};
use crate::access::Deed;
use crate::report::Report;
use std::sync::Arc;
use time::OffsetDateTime;

/// A replay to be made.
#[derive(Clone, Debug, PartialEq)]
pub struct NewReplay {
    /// Name of the plant.
    pub plant: String,
    /// Periods that start at this time or later.
    pub from: OffsetDateTime,
    /// Periods that start before this time.
    pub to: OffsetDateTime,
    /// What it is made with.
    pub with: ReplayWith,
    /// Who asked for it, and why.
    pub by: String,
    /// Why.
    pub reason: String,
    /// When.
    pub at: OffsetDateTime,
    /// The entry of the audit log that goes with it; none when it is read.
    pub deed: Option<Deed>,
}

/// What a replay is made with.
#[derive(Clone, Debug, PartialEq)]
pub enum ReplayWith {
    /// A revision that was accepted.
    Revision(u32),
    /// A plant file that is not accepted yet.
    Candidate {
        /// Media type of `source`.
        media_type: String,
        /// As sent.
        source: String,
    },
}

/// Where a replay is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ReplayState {
    /// It goes on.
    Running,
    /// Every batch has been made.
    Done,
    /// Somebody ended it; what was made stays.
    Cancelled,
}

/// A replay.
#[derive(Clone, Debug, PartialEq)]
pub struct ReplayRow {
    /// Its number.
    pub id: i64,
    /// What was asked for.
    pub new: NewReplay,
    /// Where it is.
    pub state: ReplayState,
    /// Batches that can be made: those of the period that had a result when it
    /// was asked for, and those that came by one since and have been made.
    pub batches: u64,
    /// Batches that have been made.
    pub made: u64,
    /// When it ended.
    pub ended: Option<OffsetDateTime>,
}

/// A batch of a replay: what it was, and what it would be.
#[derive(Clone, Debug, PartialEq)]
pub struct ReplayedBatch {
    /// The batch as it stands.
    pub line: BatchLine,
    /// Its report as it stands.
    pub before: Arc<Report>,
    /// Its report under the replay.
    pub after: Arc<Report>,
}

/// Replays.
pub trait ReplaysStore: Send + Sync + 'static {
    /// Keeps a replay to be made; `None` where there is no such plant or revision.
    fn add_replay(&self, new: NewReplay) -> Reply<'_, Option<ReplayRow>>;

    /// One replay.
    fn replay<'a>(&'a self, plant: &'a str, id: i64) -> Reply<'a, Option<ReplayRow>>;

    /// Replays of a plant, the newest first, before the number given.
    fn replays<'a>(
        &'a self,
        plant: &'a str,
        before: Option<i64>,
        limit: usize,
    ) -> Reply<'a, Vec<ReplayRow>>;

    /// Replays that go on, in order of their numbers.
    fn running_replays(&self) -> Reply<'_, Vec<ReplayRow>>;

    /// Names of the next batches of a replay that have not been made, in order
    /// of time; batches without a result are left out. None of one that has
    /// ended.
    fn unreplayed(&self, id: i64, limit: usize) -> Reply<'_, Vec<String>>;

    /// Keeps what a batch would be. A second one of the same batch is dropped,
    /// and so is one of a replay that has ended.
    fn add_replayed(&self, id: i64, batch: &str, report: Arc<Report>) -> Reply<'_, ()>;

    /// Ends a replay, unless it has ended, and notes it then; answers how it is
    /// after that.
    fn end_replay(
        &self,
        id: i64,
        state: ReplayState,
        at: OffsetDateTime,
        deed: Option<Deed>,
    ) -> Reply<'_, Option<ReplayRow>>;

    /// What has been made, in order of time, after the place given; without
    /// batches whose report is kept no longer.
    fn replayed(
        &self,
        id: i64,
        after: Option<super::Cursor>,
        limit: usize,
    ) -> Reply<'_, super::Page<ReplayedBatch>>;
}
