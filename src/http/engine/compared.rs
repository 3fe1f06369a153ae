//! What a replay's comparison has come to, kept while it is asked for: a year of
//! batches is not read again for every question.

use super::{Engine, lock};
use crate::comparison::{Comparison, Pair, Tally};
use crate::http::error::Problem;
use crate::report::SingleTest;
use crate::store::{Cursor, Store};
use std::collections::HashMap;
use std::sync::Arc;
use tokio::sync::Mutex;

/// Comparisons that are kept.
const KEPT: usize = 32;

/// Replayed batches that are read together.
const TOGETHER: usize = 32;

/// The comparisons that are kept, with when each was last asked for.
#[derive(Default)]
pub(super) struct Remembered {
    kept: HashMap<i64, (Arc<Mutex<Compared>>, u64)>,
    uses: u64,
}

/// The batches of a replay up to a place, compared.
#[derive(Default)]
pub(super) struct Compared {
    after: Option<Cursor>,
    tally: Tally,
    /// Critical values by class set, the first one of each.
    tests: HashMap<String, SingleTest>,
    read: bool,
}

impl Engine {
    /// What a replay comes to so far.
    pub async fn comparison(&self, id: i64) -> Result<Comparison, Problem> {
        let compared = self.compared(id);
        let mut compared = compared.lock().await;
        compared.catch_up(&*self.store, id).await?;
        Ok(compared.tally.comparison())
    }

    pub(super) fn compared(&self, id: i64) -> Arc<Mutex<Compared>> {
        let mut remembered = lock(&self.compared);
        remembered.uses += 1;
        let now = remembered.uses;
        let (compared, last_use) = remembered.kept.entry(id).or_default();
        *last_use = now;
        let compared = Arc::clone(compared);
        if remembered.kept.len() > KEPT {
            let oldest = remembered
                .kept
                .iter()
                .min_by_key(|(_, (_, last_use))| last_use);
            if let Some(id) = oldest.map(|(&id, _)| id) {
                remembered.kept.remove(&id);
            }
        }
        compared
    }
}

impl Compared {
    /// Takes in what has been made before this process took part. What is made
    /// since is added as it is made, under the lock that this is behind.
    pub async fn catch_up(&mut self, store: &dyn Store, id: i64) -> Result<(), Problem> {
        while !self.read {
            let page = store.replayed(id, self.after, TOGETHER).await?;
            for replayed in &page.items {
                let pair = Pair {
                    before: &replayed.before,
                    after: &replayed.after,
                };
                self.take(pair);
            }
            match page.next {
                Some(next) => self.after = Some(next),
                None => self.read = true,
            }
        }
        Ok(())
    }

    /// Forgets everything; the next look reads it from the store.
    pub fn start_over(&mut self) {
        *self = Compared::default();
    }

    /// Critical values that the replay's reports were held against.
    pub fn tests(&self) -> impl Iterator<Item = SingleTest> {
        self.tests.values().cloned()
    }

    /// Takes in one batch.
    pub fn take(&mut self, pair: Pair) {
        if let Some(test) = &pair.after.single_test {
            let tests = &mut self.tests;
            tests
                .entry(test.class_set.clone())
                .or_insert_with(|| test.clone());
        }
        self.tally.add(pair);
    }
}
