//! Replays in SQLite.

use super::work::{AddReplay, AddReplayed, EndReplay};
use super::{SqliteStore, read};
use crate::access::Deed;
use crate::report::Report;
use crate::store::{
    Cursor, NewReplay, Page, ReplayRow, ReplayState, ReplayedBatch, ReplaysStore, Reply,
};
use futures::FutureExt;
use std::sync::Arc;
use time::OffsetDateTime;

impl ReplaysStore for SqliteStore {
    fn add_replay(&self, new: NewReplay) -> Reply<'_, Option<ReplayRow>> {
        self.write(AddReplay(new))
    }

    fn replay<'a>(&'a self, plant: &'a str, id: i64) -> Reply<'a, Option<ReplayRow>> {
        read::replay(&self.readers, plant, id).boxed()
    }

    fn replays<'a>(
        &'a self,
        plant: &'a str,
        before: Option<i64>,
        limit: usize,
    ) -> Reply<'a, Vec<ReplayRow>> {
        read::replays(&self.readers, plant, before, limit).boxed()
    }

    fn running_replays(&self) -> Reply<'_, Vec<ReplayRow>> {
        read::running_replays(&self.readers).boxed()
    }

    fn unreplayed(&self, id: i64, limit: usize) -> Reply<'_, Vec<String>> {
        read::unreplayed(&self.readers, id, limit).boxed()
    }

    fn add_replayed(&self, id: i64, batch: &str, report: Arc<Report>) -> Reply<'_, ()> {
        let batch = batch.to_owned();
        self.write_prepared(move || AddReplayed::new(id, batch, &report))
    }

    fn end_replay(
        &self,
        id: i64,
        state: ReplayState,
        at: OffsetDateTime,
        deed: Option<Deed>,
    ) -> Reply<'_, Option<ReplayRow>> {
        self.write(EndReplay {
            id,
            state,
            at,
            deed,
        })
    }

    fn replayed(
        &self,
        id: i64,
        after: Option<Cursor>,
        limit: usize,
    ) -> Reply<'_, Page<ReplayedBatch>> {
        read::replayed(&self.readers, id, after, limit).boxed()
    }
}
