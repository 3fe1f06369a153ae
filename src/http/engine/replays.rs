//! Replays: past batches under another revision, or under a plant file that is
//! not accepted, beside their results and never in their place.
//!
//! A batch is replayed as its present report was made: the same readings, the
//! decisions by hand and the field readings that the report was made with. So
//! what differs comes from the revision, and under its own revision a report
//! comes out bit for bit.
//!
//! A replay has a compiled plant of its own. It knows the critical values that
//! the revision's results were held against, and those of the replay so far, but
//! none that it works out reaches a live batch.

use super::again::decisions_of;
use super::{Engine, compute, lock, no_plant};
use crate::comparison::Pair;
use crate::http::engine::field::Extended;
use crate::http::error::{Kind, Problem};
use crate::http::revisions::{compile, format_of};
use crate::pipeline::{self, Compiled};
use crate::plant;
use crate::store::{NewReplay, ReplayRow, ReplayState, ReplayWith};
use std::collections::{HashSet, VecDeque};
use std::sync::{Arc, Mutex};

/// Replays that may go on at once.
const MOST_RUNNING: usize = 16;

/// Names of batches that are read together.
const NAMES_TOGETHER: usize = 64;

/// Number of the revision in reports under a plant file that is not accepted.
pub(in crate::http) const CANDIDATE: u32 = 0;

/// A replay that goes on.
pub(super) struct Replaying {
    compiled: Compiled,
    canonical: String,
    queue: Mutex<Queue>,
}

#[derive(Default)]
struct Queue {
    names: VecDeque<String>,
    /// Batches that cannot be replayed; they are passed over.
    failed: HashSet<String>,
}

impl Engine {
    /// Keeps a replay, to be worked off after the live batches.
    pub async fn begin_replay(&self, new: NewReplay) -> Result<ReplayRow, Problem> {
        if self.store.running_replays().await?.len() >= MOST_RUNNING {
            let detail = "as many replays as can be go on; wait for one, or cancel one";
            return Err(Problem::new(Kind::Overloaded, detail));
        }
        let plant = new.plant.clone();
        let row = self.store.add_replay(new).await?;
        row.ok_or_else(|| no_plant(&plant))
    }

    /// Replays one batch. Answers whether there was something to do.
    pub(super) async fn replay_step(self: &Arc<Self>) -> Result<bool, Problem> {
        let rows = self.store.running_replays().await?;
        lock(&self.replaying).retain(|id, _| rows.iter().any(|row| row.id == *id));
        if rows.is_empty() {
            return Ok(false);
        }
        // In turns.
        let steps = self.steps.load(std::sync::atomic::Ordering::Relaxed);
        let row = &rows[steps / 2 % rows.len()];
        let replaying = match self.replaying(row).await {
            Ok(replaying) => replaying,
            Err(problem) if problem.is_passing() => return Err(problem),
            Err(problem) => {
                // It was read when it was asked for: another edition reads it
                // now.
                tracing::error!(id = row.id, ?problem, "a replay cannot go on");
                let (state, now) = (ReplayState::Cancelled, self.clock.now());
                self.store.end_replay(row.id, state, now, None).await?;
                return Ok(true);
            }
        };
        let Some(name) = self.next_name(row.id, &replaying).await? else {
            let (state, now) = (ReplayState::Done, self.clock.now());
            self.store.end_replay(row.id, state, now, None).await?;
            return Ok(true);
        };
        if let Err(problem) = self.replay_one(row, &replaying, &name).await {
            if problem.is_passing() {
                // It is tried again.
                lock(&replaying.queue).names.push_front(name);
                return Err(problem);
            }
            tracing::error!(
                id = row.id,
                batch = name,
                ?problem,
                "a batch cannot be replayed"
            );
            lock(&replaying.queue).failed.insert(name);
        }
        Ok(true)
    }

    async fn next_name(&self, id: i64, replaying: &Replaying) -> Result<Option<String>, Problem> {
        if let Some(name) = lock(&replaying.queue).names.pop_front() {
            return Ok(Some(name));
        }
        let failed = lock(&replaying.queue).failed.len();
        let names = self.store.unreplayed(id, NAMES_TOGETHER + failed).await?;
        let mut queue = lock(&replaying.queue);
        let queue = &mut *queue;
        let fresh = names
            .into_iter()
            .filter(|name| !queue.failed.contains(name));
        queue.names.extend(fresh);
        Ok(queue.names.pop_front())
    }

    async fn replay_one(
        self: &Arc<Self>,
        row: &ReplayRow,
        replaying: &Arc<Replaying>,
        name: &str,
    ) -> Result<(), Problem> {
        let finished = self.finished(&row.new.plant, name).await?;
        let entered = self.entered_in(&finished).await?;
        let before = Arc::new(*finished.report);
        let by_hand = decisions_of(&before, &finished.batch);
        let (replaying, batch) = (Arc::clone(replaying), finished.batch);
        let worker = self.workers.acquire().await;
        let after = compute(move || {
            let compiled = &replaying.compiled;
            if !entered.is_empty() {
                let canonical = &replaying.canonical;
                let extended = Extended::new(compiled, canonical, batch.clone(), &entered);
                // Where they do not fit this plant the batch goes without.
                if let Ok(extended) = extended {
                    return pipeline::reconcile_with(&extended.compiled, &extended.batch, &by_hand);
                }
            }
            pipeline::reconcile_with(compiled, &batch, &by_hand)
        })
        .await?;
        drop(worker);
        let after = Arc::new(after);
        let compared = self.compared(row.id);
        let mut compared = compared.lock().await;
        compared.catch_up(&*self.store, row.id).await?;
        let kept = self.store.add_replayed(row.id, name, Arc::clone(&after));
        kept.await?;
        let pair = Pair {
            before: &before,
            after: &after,
        };
        compared.take(pair);
        let row = self.store.replay(&row.new.plant, row.id).await?;
        if row.is_none_or(|row| row.state != ReplayState::Running) {
            // It was cancelled meanwhile, and this one may not have been kept.
            compared.start_over();
        }
        Ok(())
    }

    /// The compiled plant of a replay.
    async fn replaying(&self, row: &ReplayRow) -> Result<Arc<Replaying>, Problem> {
        if let Some(known) = lock(&self.replaying).get(&row.id) {
            return Ok(Arc::clone(known));
        }
        let plant = &row.new.plant;
        let (compiled, canonical) = match &row.new.with {
            ReplayWith::Revision(number) => {
                let stored = self.revisions.stored(plant, Some(*number)).await?;
                let known = self.store.critical_values(plant, *number).await?;
                let canonical = stored.canonical.clone();
                let revision = compute(move || compile(&stored, known)).await??;
                (revision.compiled, canonical)
            }
            ReplayWith::Candidate { media_type, source } => {
                candidate(media_type.clone(), source.clone()).await?
            }
        };
        let compared = self.compared(row.id);
        let mut compared = compared.lock().await;
        compared.catch_up(&*self.store, row.id).await?;
        compiled.recall(compared.tests());
        let made = Arc::new(Replaying {
            compiled,
            canonical,
            queue: Mutex::default(),
        });
        lock(&self.replaying).insert(row.id, Arc::clone(&made));
        Ok(made)
    }
}

/// Compiles a plant file that is not accepted.
async fn candidate(media_type: String, source: String) -> Result<(Compiled, String), Problem> {
    let unreadable = |detail: String| Problem::new(Kind::Unacceptable, detail);
    let format = format_of(&media_type).ok_or_else(|| unreadable(media_type))?;
    let read = compute(move || {
        let file = plant::read(&source, format)?;
        let canonical = plant::canonical_json(&source, format)?;
        Ok::<_, plant::Faults>((Compiled::new(file.plant, CANDIDATE), canonical.to_string()))
    });
    read.await?.map_err(|faults| unreadable(faults.to_string()))
}
