//! What is remembered of a plant between its batches: its watch and what was
//! decided by hand about its tags.
//!
//! The watch is read from the store when it is first needed and then kept, and
//! everything that changes it goes through one lock per plant, so that events
//! get their numbers in the order in which they happened. A result goes to the
//! store together with the watch after it, and takes its place in the store's
//! queue under that lock.
//!
//! Where a look has something to tell, its commit is waited for under the lock:
//! what comes next must not build upon a watch whose events are lost. Where it
//! has only counted, the next batch does not wait. Should the commit then fail,
//! the batch has been counted once too early at most, and will not be counted
//! again when it is finished later.

use super::{Engine, lock};
use crate::access::Deed;
use crate::alarms::{Accusation, Alarm, Closing, Event, NotClosed, Refused, Watch};
use crate::http::engine::no_plant;
use crate::http::error::{Kind, Problem};
use crate::http::trace::carried;
use crate::plant::{AlarmSettings, ByHand};
use crate::report::Report;
use crate::store::{AccusationRow, ByHandRow, Ended, NewByHand, NewEvent, Ticket, Watched};
use futures::FutureExt;
use futures::future::BoxFuture;
use std::sync::Arc;
use time::OffsetDateTime;
use tokio::sync::{Mutex, MutexGuard, OwnedMutexGuard, RwLock, watch};

/// One plant.
pub(super) struct Lane {
    plant: String,
    /// Whose turn it is to have something reconciled.
    pub turn: Arc<Mutex<()>>,
    /// Whose turn it is to put a batch into the store's queue.
    pub accepting: Arc<Mutex<()>>,
    /// Whose turn it is to have an accepted batch started.
    pub starting: Arc<Mutex<()>>,
    memory: Mutex<Memory>,
    /// Shared by the looks that are on their way to the disk. The watch is not
    /// read from the store before they have arrived.
    underway: Arc<RwLock<()>>,
    /// Changes whenever an event of the plant has been kept.
    told: watch::Sender<u64>,
}

/// A place in a queue that was taken when it was made.
pub(super) struct Place {
    had: Option<OwnedMutexGuard<()>>,
    waiting: BoxFuture<'static, OwnedMutexGuard<()>>,
}

impl Place {
    /// Takes the next place.
    pub fn of(queue: &Arc<Mutex<()>>) -> Self {
        let mut waiting = Arc::clone(queue).lock_owned().boxed();
        // Polled once, it stands in the queue.
        let had = (&mut waiting).now_or_never();
        Place { had, waiting }
    }

    /// Waits for the turn.
    pub async fn turn(self) -> OwnedMutexGuard<()> {
        match self.had {
            Some(turn) => turn,
            None => self.waiting.await,
        }
    }
}

/// What is in memory; `None` is read from the store when it is needed.
#[derive(Default)]
struct Memory {
    watch: Option<Watch>,
    by_hand: Option<Arc<[ByHand]>>,
}

/// What no batch has changed of a plant.
struct Change<'e> {
    /// The watch as it is from now on.
    next: Watch,
    events: &'e [Event],
    accusation: Option<AccusationRow>,
    deed: Option<Deed>,
}

/// Why a person's act was not done.
pub(in crate::http) enum NotActed {
    /// The alarm does not allow it.
    Refused(Refused),
    /// It could not be kept.
    Failed(Problem),
}

impl From<Problem> for NotActed {
    fn from(problem: Problem) -> Self {
        NotActed::Failed(problem)
    }
}

impl Lane {
    fn new(plant: &str) -> Self {
        Lane {
            plant: plant.to_owned(),
            turn: Arc::default(),
            accepting: Arc::default(),
            starting: Arc::default(),
            memory: Mutex::default(),
            underway: Arc::default(),
            told: watch::Sender::new(0),
        }
    }
}

impl Engine {
    /// The lane of a plant that there is.
    pub(super) fn lane(&self, plant: &str) -> Arc<Lane> {
        let mut lanes = lock(&self.lanes);
        if let Some(lane) = lanes.get(plant) {
            return Arc::clone(lane);
        }
        let lane = Arc::new(Lane::new(plant));
        lanes.insert(plant.to_owned(), Arc::clone(&lane));
        lane
    }

    /// Tells when an event of a plant has been kept.
    pub fn told_of(&self, plant: &str) -> watch::Receiver<u64> {
        self.lane(plant).told.subscribe()
    }

    /// Tells when an event of any plant has been kept.
    pub fn told(&self) -> watch::Receiver<u64> {
        self.told.subscribe()
    }

    /// The decisions by hand of a plant.
    pub(super) async fn decisions(&self, lane: &Lane) -> Result<Arc<[ByHand]>, Problem> {
        let mut memory = lane.memory.lock().await;
        if let Some(known) = &memory.by_hand {
            return Ok(Arc::clone(known));
        }
        let rows = self.store.by_hand(&lane.plant, None).await?;
        let read: Arc<[ByHand]> = rows.into_iter().map(|row| row.decision).collect();
        memory.by_hand = Some(Arc::clone(&read));
        Ok(read)
    }

    /// Looks at a report and has it kept with what the look changed. The turn is
    /// over as soon as the next may look.
    pub(super) async fn look(
        &self,
        lane: &Lane,
        turn: OwnedMutexGuard<()>,
        ticket: Ticket,
        report: Arc<Report>,
        settings: &AlarmSettings,
    ) -> Result<(), Problem> {
        let mut memory = lane.memory.lock().await;
        let watch = self.read_watch(lane, &mut memory).await?;
        let events = watch.look(&report, settings, self.clock.now());
        let watched = match watched(watch, &events) {
            Ok(watched) => watched,
            Err(problem) => {
                memory.watch = None;
                return Err(problem);
            }
        };
        let tells = !events.is_empty() || !watched.accusations.is_empty();
        // Nobody waits to write it but with the memory locked.
        let underway = Arc::clone(&lane.underway).read_owned().await;
        let kept = self.store.finish(ticket, report, Some(watched));
        drop(turn);
        if tells {
            let kept = kept.await;
            match &kept {
                Ok(Some(ids)) => {
                    self.traces.remember(ids);
                    self.tell(lane, &events);
                }
                _ => memory.watch = None,
            }
            kept?;
            return Ok(());
        }
        drop(memory);
        let kept = kept.await;
        drop(underway);
        if !matches!(kept, Ok(Some(_))) {
            lane.memory.lock().await.watch = None;
        }
        kept?;
        Ok(())
    }

    /// The alarms of a plant, and the number of the newest event of all: events
    /// after it are not in them.
    pub async fn alarms(&self, plant: &str) -> Result<(Vec<Alarm>, i64), Problem> {
        let lane = self.lane(plant);
        let mut memory = lane.memory.lock().await;
        let alarms = self.read_watch(&lane, &mut memory).await?.alarms().to_vec();
        Ok((alarms, self.store.newest_event().await?))
    }

    /// Does to an alarm what a person asked for, whether or not they still wait.
    pub async fn act(
        self: &Arc<Self>,
        plant: &str,
        deed: Deed,
        act: impl FnOnce(&mut Watch) -> Result<Event, Refused> + Send + 'static,
    ) -> Result<Event, NotActed> {
        let (engine, lane) = (Arc::clone(self), self.lane(plant));
        self.detached(async move {
            let mut memory = lane.memory.lock().await;
            let mut next = engine.read_watch(&lane, &mut memory).await?.clone();
            let mut events = next.pass_time(engine.clock.now());
            let acted = act(&mut next);
            events.extend(acted.iter().cloned());
            if !events.is_empty() {
                let deed = acted.is_ok().then_some(deed);
                let change = Change {
                    next,
                    events: &events,
                    accusation: None,
                    deed,
                };
                engine.change(&lane, &mut memory, change).await?;
            }
            acted.map_err(NotActed::Refused)
        })
        .await?
    }

    /// Closes an accusation; `Ok(None)` where there is none of that number.
    pub async fn close(
        self: &Arc<Self>,
        plant: &str,
        id: u64,
        closing: Closing,
        deed: Deed,
    ) -> Result<Option<Result<Accusation, NotClosed>>, Problem> {
        let (engine, lane) = (Arc::clone(self), self.lane(plant));
        self.detached(async move {
            let mut memory = lane.memory.lock().await;
            let Some(row) = engine.store.accusation(&lane.plant, id).await? else {
                return Ok(None);
            };
            let accusation: Accusation = serde_json::from_str(&row.json).map_err(unreadable)?;
            let mut next = engine.read_watch(&lane, &mut memory).await?.clone();
            let closed = match next.close(&accusation, closing) {
                Ok(closed) => closed,
                Err(not) => return Ok(Some(Err(not))),
            };
            let change = Change {
                next,
                events: &[],
                accusation: Some(accusation_row(&closed)?),
                deed: Some(deed),
            };
            engine.change(&lane, &mut memory, change).await?;
            Ok(Some(Ok(closed)))
        })
        .await?
    }

    /// Keeps a decision by hand.
    pub async fn decide(
        self: &Arc<Self>,
        plant: &str,
        new: NewByHand,
    ) -> Result<ByHandRow, Problem> {
        let (engine, lane) = (Arc::clone(self), self.lane(plant));
        self.detached(async move {
            let mut memory = lane.memory.lock().await;
            memory.by_hand = None;
            let kept = engine.store.add_by_hand(&lane.plant, new).await?;
            kept.ok_or_else(|| no_plant(&lane.plant))
        })
        .await?
    }

    /// Has a decision by hand end at another time; `None` where there is none of
    /// that number.
    pub async fn end_decision(
        self: &Arc<Self>,
        plant: &str,
        id: i64,
        until: OffsetDateTime,
        ended: Ended,
    ) -> Result<Option<ByHandRow>, Problem> {
        let (engine, lane) = (Arc::clone(self), self.lane(plant));
        self.detached(async move {
            let mut memory = lane.memory.lock().await;
            memory.by_hand = None;
            let store = &engine.store;
            Ok(store.end_by_hand(&lane.plant, id, until, ended).await?)
        })
        .await?
    }

    /// Meets every plant, so that its shelvings end in time.
    pub async fn meet_all(&self) -> Result<(), Problem> {
        const TOGETHER: usize = 100;
        let mut after: Option<String> = None;
        loop {
            let plants = self.store.plants(after.as_deref(), TOGETHER).await?;
            for plant in &plants {
                self.lane(&plant.name);
            }
            match plants.last() {
                Some(last) if plants.len() == TOGETHER => after = Some(last.name.clone()),
                _ => return Ok(()),
            }
        }
    }

    /// Ends every shelving whose time is up. A plant where that fails does not
    /// hold up the others.
    pub async fn pass_time(self: &Arc<Self>) {
        let lanes: Vec<Arc<Lane>> = lock(&self.lanes).values().map(Arc::clone).collect();
        for lane in lanes {
            let engine = Arc::clone(self);
            let ended = self.detached({
                let lane = Arc::clone(&lane);
                async move { engine.end_shelvings(&lane).await }
            });
            if let Err(problem) = ended.await.and_then(|ended| ended) {
                let plant = &lane.plant;
                tracing::warn!(
                    plant,
                    ?problem,
                    "a shelving that is over could not be ended"
                );
            }
        }
    }

    async fn end_shelvings(&self, lane: &Lane) -> Result<(), Problem> {
        let mut memory = lane.memory.lock().await;
        let now = self.clock.now();
        let watch = self.read_watch(lane, &mut memory).await?;
        if watch.next_time().is_none_or(|next| now < next) {
            return Ok(());
        }
        let mut next = watch.clone();
        let events = next.pass_time(now);
        let change = Change {
            next,
            events: &events,
            accusation: None,
            deed: None,
        };
        self.change(lane, &mut memory, change).await
    }

    /// The watch in memory, read where it is not there.
    async fn read_watch<'m>(
        &self,
        lane: &Lane,
        memory: &'m mut MutexGuard<'_, Memory>,
    ) -> Result<&'m mut Watch, Problem> {
        let watch = match memory.watch.take() {
            Some(watch) => watch,
            None => {
                let _arrived = lane.underway.write().await;
                match self.store.watch(&lane.plant).await? {
                    Some(json) => serde_json::from_str(&json).map_err(unreadable)?,
                    None => Watch::new(&lane.plant),
                }
            }
        };
        Ok(memory.watch.insert(watch))
    }

    /// Keeps a watch that no batch has changed.
    async fn change(
        &self,
        lane: &Lane,
        memory: &mut MutexGuard<'_, Memory>,
        change: Change<'_>,
    ) -> Result<(), Problem> {
        let Change {
            mut next,
            events,
            accusation,
            deed,
        } = change;
        let mut watched = watched(&mut next, events)?;
        watched.accusations.extend(accusation);
        watched.deed = deed;
        // Whatever comes of it, the one before is no longer to be built upon.
        memory.watch = None;
        match self.store.change_watch(&lane.plant, watched).await? {
            Some(ids) => {
                self.traces.remember(&ids);
                memory.watch = Some(next);
                self.tell(lane, events);
                Ok(())
            }
            None => Err(no_plant(&lane.plant)),
        }
    }

    fn tell(&self, lane: &Lane, events: &[Event]) {
        if !events.is_empty() {
            lane.told.send_modify(|times| *times += 1);
            self.told.send_modify(|times| *times += 1);
        }
    }

    /// Runs to its end whether or not the caller stays.
    pub(super) async fn detached<T: Send + 'static>(
        &self,
        work: impl Future<Output = T> + Send + 'static,
    ) -> Result<T, Problem> {
        self.tasks.spawn(carried(work)).await.map_err(|error| {
            tracing::error!(%error, "a task broke off");
            Problem::new(Kind::Internal, "a task broke off; the log says more")
        })
    }
}

/// A watch as the store keeps it.
fn watched(watch: &mut Watch, events: &[Event]) -> Result<Watched, Problem> {
    let accusations = watch.changed_accusations();
    let accusations = accusations.iter().map(accusation_row);
    let events = events.iter().map(|event| {
        Ok(NewEvent {
            alarm: event.alarm.id,
            json: json(event)?,
        })
    });
    Ok(Watched {
        accusations: accusations.collect::<Result<_, Problem>>()?,
        events: events.collect::<Result<_, Problem>>()?,
        watch: json(watch)?,
        deed: None,
    })
}

fn accusation_row(accusation: &Accusation) -> Result<AccusationRow, Problem> {
    Ok(AccusationRow {
        id: accusation.id,
        open: accusation.closing.is_none(),
        json: json(accusation)?,
    })
}

fn json(value: &impl serde::Serialize) -> Result<String, Problem> {
    serde_json::to_string(value).map_err(|error| Problem::new(Kind::Internal, error.to_string()))
}

fn unreadable(error: serde_json::Error) -> Problem {
    tracing::error!(%error, "the store holds something unreadable");
    Problem::new(
        Kind::Internal,
        "the store holds something unreadable; the log says more",
    )
}
