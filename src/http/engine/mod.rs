//! The way of a batch: read, made durable, reconciled, looked at, its result made
//! durable.
//!
//! What has been accepted is finished whether or not the client still waits:
//! the work runs in a task of its own, and everybody who asks for the same batch
//! meanwhile waits for that one task. Reconciling is pure computation, so it
//! runs on threads that may block, a bounded number at once and one at a time
//! per plant. What is remembered of a plant between its batches is in [`lane`].

mod again;
mod backfill;
mod background;
mod compared;
mod field;
mod lane;
mod periods;
mod readings;
mod replays;
mod traces;

pub(super) use again::{no_batch, removed};
pub use field::FieldReading;
pub(super) use field::{Extended, FieldReadings};
pub(super) use lane::NotActed;
pub(super) use readings::Taken;
pub(super) use replays::CANDIDATE;

use super::Limits;
use super::ambient::Clock;
use super::error::{Kind, Problem};
use super::metrics::Metrics;
use super::revisions::{Revision, Revisions};
use super::trace::carried;
use crate::ingest::{self, Parsed};
use crate::pipeline;
use crate::plant::Batch;
use crate::report::{Assessment, Report};
use crate::store::{Acceptance, Incoming, Store, StoreError, Stored, Ticket, Unfinished};
use compared::Remembered;
use futures::future::{BoxFuture, Shared};
use futures::{FutureExt, StreamExt};
use lane::{Lane, Place};
use replays::Replaying;
use std::collections::{HashMap, HashSet};
use std::sync::atomic::AtomicUsize;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use time::OffsetDateTime;
use tokio::sync::{Notify, OwnedMutexGuard, OwnedSemaphorePermit, Semaphore, watch};
use tokio_util::task::TaskTracker;
use traces::Traces;

/// Bodies longer than this are read on a thread that may block.
const LONG_BODY: usize = 64 << 10;

/// What room for batches is counted in, bytes.
const ROOM_UNIT: usize = 4 << 10;

/// Most units: what a semaphore hands out at once.
const MOST_UNITS: usize = 1 << 28;

/// Unfinished batches that are read and worked on together.
const RESUMED_TOGETHER: usize = 64;

type Outcome = Result<Arc<Report>, Problem>;
type Running = Shared<BoxFuture<'static, Outcome>>;

/// See the module.
pub(super) struct Engine {
    store: Arc<dyn Store>,
    clock: Arc<dyn Clock>,
    revisions: Revisions,
    workers: Semaphore,
    most_workers: usize,
    /// Wakes what waits for a worker that the live batches leave over.
    freed: Notify,
    /// Room for accepted batches that nobody waits for, in units.
    waiting: Arc<Semaphore>,
    most_units: usize,
    /// One for each plant that has been met.
    lanes: Mutex<HashMap<String, Arc<Lane>>>,
    /// Changes whenever an event of any plant has been kept.
    told: watch::Sender<u64>,
    /// What is being worked on, by number of the ticket.
    running: Mutex<HashMap<i64, Work>>,
    tasks: TaskTracker,
    metrics: Arc<Metrics>,
    /// Of the newest events.
    traces: Traces,
    /// Steps of the work aside so far.
    steps: AtomicUsize,
    replaying: Mutex<HashMap<i64, Arc<Replaying>>>,
    compared: Mutex<Remembered>,
    /// Backfills whose content is coming in, by plant and name.
    filling: Arc<Mutex<HashSet<(String, String)>>>,
}

/// A batch that is being worked on.
struct Work {
    plant: String,
    /// It comes from a backfill: no alarm hangs on it.
    backfill: bool,
    running: Running,
}

/// A batch that is durable.
pub(super) struct Accepted {
    pub ticket: Ticket,
    work: Begun,
}

/// How far an accepted batch is.
enum Begun {
    /// It is being worked on.
    Running(Running),
    /// It was accepted before, so that there may be a result already.
    Known(Batch),
}

impl Engine {
    pub fn new(
        store: Arc<dyn Store>,
        clock: Arc<dyn Clock>,
        limits: &Limits,
        metrics: Arc<Metrics>,
    ) -> Self {
        let most_workers = limits.workers.max(1);
        let most_units = limits.waiting.div_ceil(ROOM_UNIT).clamp(1, MOST_UNITS);
        Engine {
            revisions: Revisions::new(Arc::clone(&store)),
            store,
            clock,
            workers: Semaphore::new(most_workers),
            most_workers,
            freed: Notify::new(),
            waiting: Arc::new(Semaphore::new(most_units)),
            most_units,
            lanes: Mutex::default(),
            told: watch::Sender::new(0),
            running: Mutex::default(),
            tasks: TaskTracker::new(),
            metrics,
            traces: Traces::default(),
            steps: AtomicUsize::new(0),
            replaying: Mutex::default(),
            compared: Mutex::default(),
            filling: Arc::default(),
        }
    }

    /// Workers that are free, and batches that are being worked on.
    pub fn load(&self) -> (usize, usize) {
        let underway = lock(&self.running).len();
        (self.workers.available_permits(), underway)
    }

    /// The traces of the newest events.
    pub fn traces(&self) -> &Traces {
        &self.traces
    }

    /// Compiled revisions.
    pub fn revisions(&self) -> &Revisions {
        &self.revisions
    }

    /// Reads a batch, makes it durable, and has it worked on: also where the client
    /// is gone before it is durable, and nobody is left to ask for more.
    pub async fn accept(
        self: &Arc<Self>,
        plant: &str,
        body: Vec<u8>,
        received: OffsetDateTime,
    ) -> Result<Accepted, Problem> {
        let (body, parsed) = parse(body, received).await?;
        let Parsed { batch, digest } = parsed?;
        let incoming = Incoming {
            plant: plant.to_owned(),
            batch: batch.name.clone(),
            digest,
            start: batch.start,
            end: batch.end,
            received,
            body,
        };
        let name = batch.name.clone();
        let (engine, lane) = (Arc::clone(self), self.lane(plant));
        // Whichever thread runs first, batches get into the store's queue, and
        // later to work, in the order in which they came here.
        let (place, start) = (Place::of(&lane.accepting), Place::of(&lane.starting));
        let accepted = self.detached(async move {
            let placing = place.turn().await;
            let mut kept = engine.store.accept(incoming);
            let at_once = (&mut kept).now_or_never();
            drop(placing);
            let acceptance = match at_once {
                Some(acceptance) => acceptance,
                None => kept.await,
            }?;
            let _starting = start.turn().await;
            let work = match &acceptance {
                Acceptance::New(ticket) => {
                    Begun::Running(engine.start(ticket.clone(), batch, false))
                }
                _ => Begun::Known(batch),
            };
            Ok::<_, StoreError>((acceptance, work))
        });
        let (acceptance, work) = accepted.await??;
        match acceptance {
            Acceptance::New(ticket) | Acceptance::Known(ticket) => Ok(Accepted { ticket, work }),
            Acceptance::NoPlant => Err(no_plant(plant)),
            Acceptance::Conflict => Err(Problem::new(
                Kind::Conflict,
                format!("batch \"{name}\" was accepted before with other content"),
            )),
        }
    }

    /// The report of an accepted batch, as soon as there is one.
    pub async fn finish(self: &Arc<Self>, accepted: Accepted) -> Outcome {
        let Accepted { ticket, work } = accepted;
        let batch = match work {
            Begun::Running(running) => return running.await,
            Begun::Known(batch) => batch,
        };
        match self.store.batch(&ticket.plant, &ticket.batch).await? {
            Some(Stored::Done(report)) => return Ok(Arc::new(*report)),
            Some(Stored::Removed(gone)) => return Err(removed(&ticket.batch, &gone)),
            Some(Stored::Pending(_)) | None => {}
        }
        self.start(ticket, batch, false).await
    }

    /// Room for a batch that nobody will wait for: what is accepted and not
    /// finished is held in memory, so there is only so much of it.
    ///
    /// # Errors
    ///
    /// Where there is none now.
    pub fn room(&self, bytes: usize) -> Result<OwnedSemaphorePermit, Problem> {
        let room = Arc::clone(&self.waiting).try_acquire_many_owned(self.units(bytes));
        room.map_err(|_| {
            let detail = "as many accepted batches as can be are waiting to be finished";
            Problem::new(Kind::Overloaded, detail)
        })
    }

    /// The same, as soon as there is some.
    pub async fn next_room(&self, bytes: usize) -> Option<OwnedSemaphorePermit> {
        let room = Arc::clone(&self.waiting).acquire_many_owned(self.units(bytes));
        // It is never closed.
        room.await.ok()
    }

    fn units(&self, bytes: usize) -> u32 {
        let units = bytes.div_ceil(ROOM_UNIT).clamp(1, self.most_units);
        u32::try_from(units).unwrap_or(u32::MAX)
    }

    /// Has an accepted batch finished without waiting for it; what `until_then`
    /// holds is dropped at the end.
    pub fn finish_later(self: &Arc<Self>, accepted: Accepted, until_then: impl Send + 'static) {
        let engine = Arc::clone(self);
        self.tasks.spawn(carried(async move {
            // Whoever asks for the report will be told what went wrong.
            let _ = engine.finish(accepted).await;
            drop(until_then);
        }));
    }

    /// Finishes what was accepted and has no result, in order of acceptance.
    pub async fn resume(self: &Arc<Self>) -> Result<(), StoreError> {
        let mut after = 0;
        loop {
            let unfinished = self.store.unfinished(after, RESUMED_TOGETHER).await?;
            let Some(last) = unfinished.last() else {
                return Ok(());
            };
            after = last.ticket.id;
            tracing::info!(
                batches = unfinished.len(),
                "finishing what was accepted before"
            );
            let resumed = futures::stream::iter(unfinished).map(|one| self.resume_one(one));
            resumed
                .buffered(RESUMED_TOGETHER)
                .for_each(|()| async {})
                .await;
        }
    }

    async fn resume_one(self: &Arc<Self>, unfinished: Unfinished) {
        let Unfinished {
            ticket,
            received,
            body,
            again,
            backfill,
            ..
        } = unfinished;
        let id = ticket.id;
        let outcome = match parse(body, received).await {
            _ if again => self.settle(&ticket.plant, &ticket.batch, None).await,
            Ok((_, Ok(parsed))) => {
                let report = self.start(ticket, parsed.batch, backfill).await;
                report.map(|_| ())
            }
            Ok((_, Err(refusal))) => Err(refusal.into()),
            Err(problem) => Err(problem),
        };
        if let Err(problem) = outcome {
            tracing::error!(id, ?problem, "an accepted batch could not be finished");
        }
    }

    /// Waits until nothing is being worked on. Nothing new may be started.
    pub async fn drain(&self) {
        self.tasks.close();
        self.tasks.wait().await;
    }

    /// The task that works on a batch: the one that runs already, or a new one.
    fn start(self: &Arc<Self>, ticket: Ticket, batch: Batch, backfill: bool) -> Running {
        let (id, plant) = (ticket.id, ticket.plant.clone());
        let mut running = lock(&self.running);
        if let Some(same) = running.get(&id) {
            return same.running.clone();
        }
        let engine = Arc::clone(self);
        let lane = self.lane(&ticket.plant);
        // In the queue before the next batch, whichever thread runs first.
        let turn = Place::of(&lane.turn);
        let work = async move {
            let turn = turn.turn().await;
            let outcome = engine.work(&lane, turn, ticket, batch, backfill).await;
            lock(&engine.running).remove(&id);
            engine.freed.notify_one();
            outcome
        };
        let work = carried(work).boxed().shared();
        let entry = Work {
            plant,
            backfill,
            running: work.clone(),
        };
        running.insert(id, entry);
        self.tasks.spawn(work.clone());
        work
    }

    async fn work(
        &self,
        lane: &Lane,
        turn: OwnedMutexGuard<()>,
        ticket: Ticket,
        batch: Batch,
        backfill: bool,
    ) -> Outcome {
        let revision = self
            .revisions
            .get(&ticket.plant, Some(ticket.revision))
            .await?;
        let settings = revision.compiled.plant().alarms;
        let by_hand = self.decisions(lane).await?;
        let worker = self.workers.acquire().await;
        let metrics = Arc::clone(&self.metrics);
        let reconcile = move || pipeline::reconcile_with(&revision.compiled, &batch, &by_hand);
        let report = compute(move || metrics.reconciled(reconcile)).await?;
        drop(worker);
        let report = Arc::new(report);
        if backfill {
            // What is long past raises no alarm.
            let kept = self.store.finish(ticket, Arc::clone(&report), None);
            drop(turn);
            kept.await?;
            self.metrics.finished(&report);
            return Ok(report);
        }
        self.look(lane, turn, ticket, Arc::clone(&report), &settings)
            .await?;
        self.metrics.finished(&report);
        tracing::debug!(batch = report.batch, verdict = ?report.verdict, "reconciled");
        Ok(report)
    }

    /// What the tags of a revision can and cannot determine.
    pub async fn assess(&self, revision: Arc<Revision>) -> Result<Assessment, Problem> {
        let _worker = self.workers.acquire().await;
        compute(move || {
            let mut assessment = pipeline::assess(&revision.compiled);
            let warnings = revision.warnings.iter().map(ToString::to_string);
            assessment.warnings.extend(warnings);
            assessment
        })
        .await
    }
}

/// Runs pure computation on a thread of the runtime's blocking pool.
pub(super) async fn compute<T: Send + 'static>(
    work: impl FnOnce() -> T + Send + 'static,
) -> Result<T, Problem> {
    let span = tracing::Span::current();
    tokio::task::spawn_blocking(move || span.in_scope(work))
        .await
        .map_err(|error| {
            tracing::error!(%error, "a computation broke off");
            Problem::new(Kind::Internal, "a computation broke off; the log says more")
        })
}

async fn parse(
    body: Vec<u8>,
    received: OffsetDateTime,
) -> Result<(Vec<u8>, Result<Parsed, ingest::Refusal>), Problem> {
    let long = body.len() > LONG_BODY;
    let read = move || {
        let parsed = ingest::parse(&body, received);
        (body, parsed)
    };
    if long {
        compute(read).await
    } else {
        Ok(read())
    }
}

/// The answer where a plant is not known.
pub(super) fn no_plant(plant: &str) -> Problem {
    Problem::new(Kind::NotFound, format!("there is no plant \"{plant}\""))
}

/// A lock whose content is whole whatever happened to a thread that held it:
/// single insertions and removals.
fn lock<T>(mutex: &Mutex<T>) -> MutexGuard<'_, T> {
    mutex.lock().unwrap_or_else(PoisonError::into_inner)
}
