//! Backfills: the content of a long stream becomes samples, block by block, each
//! with the mark of how far it has come.
//!
//! While a block is on its way to the disk the next is read and parsed; at most
//! one is on its way, so what is settled is always a beginning of the content,
//! and memory does not depend on its length.

use super::readings::{MOST_TOLD, Names, Sorted, Taken};
use super::{Engine, lock, no_plant};
use crate::access::Deed;
use crate::http::error::{Kind, Problem, count};
use crate::http::metrics::Metrics;
use crate::http::revisions::Revision;
use crate::http::streamed::{Cut, Streamed};
use crate::ingest::{Block, ReadingsForm, ReadingsLines};
use crate::plant::Fault;
use crate::store::{Backfill, BackfillMark, Reply, SamplesTaken, Store, StoreError};
use axum::http::HeaderName;
use std::collections::HashSet;
use std::io::{ErrorKind, Read};
use std::sync::{Arc, Mutex};
use time::OffsetDateTime;
use tokio::runtime::Handle;

/// Bytes of content that are settled together: some four thousand lines.
const BLOCK: usize = 256 << 10;

/// Bytes that are read at once.
const PIECE: usize = 64 << 10;

/// The header that tells a client where to go on.
const SETTLED_BYTES: HeaderName = HeaderName::from_static("settled-bytes");

/// A backfill whose content comes in.
pub(in crate::http) struct Filling {
    revision: Arc<Revision>,
    store: Arc<dyn Store>,
    metrics: Arc<Metrics>,
    received: OffsetDateTime,
    mark: BackfillMark,
    lines: ReadingsLines,
    filled: Filled,
    _alone: Alone,
}

/// What became of the content of one request.
#[derive(Default)]
pub(in crate::http) struct Filled {
    /// What became of its sound readings.
    pub taken: Taken,
    /// Lines that are no readings, the first thousand.
    pub faults: Vec<Fault>,
    /// How many there were.
    pub faulty: u64,
}

/// Holds the name of a backfill for as long as its content comes in.
struct Alone {
    all: Arc<Mutex<HashSet<(String, String)>>>,
    name: (String, String),
}

impl Drop for Alone {
    fn drop(&mut self) {
        lock(&self.all).remove(&self.name);
    }
}

/// A block on its way to the disk.
struct Sent<'s> {
    reply: Reply<'s, Option<SamplesTaken>>,
    names: Names,
    mark: BackfillMark,
    taken: Taken,
}

impl Engine {
    /// Whether the content of a backfill is coming in now.
    pub fn is_filling(&self, plant: &str, name: &str) -> bool {
        lock(&self.filling).contains(&(plant.to_owned(), name.to_owned()))
    }

    /// Prepares to take content of a backfill from `from` bytes on.
    ///
    /// # Errors
    ///
    /// Where its state is another.
    pub async fn begin_filling(
        &self,
        plant: &str,
        name: &str,
        from: u64,
        form: ReadingsForm,
        deed: Deed,
    ) -> Result<Filling, Problem> {
        let alone = self.alone(plant, name)?;
        let now = self.clock.now();
        let begun = self.store.begin_backfill(plant, name, now, Some(deed));
        let begun = begun.await?;
        let Backfill { mark, complete, .. } = begun.ok_or_else(|| no_plant(plant))?;
        if complete {
            let detail = format!("backfill \"{name}\" is complete; give what is more another name");
            return Err(Problem::new(Kind::Refused, detail));
        }
        if from != mark.bytes {
            let detail = "the content does not go on where the last ended";
            return Err(going_on(Problem::new(Kind::Refused, detail), &mark));
        }
        if mark.bytes > 0 && (form == ReadingsForm::Csv) != mark.header.is_some() {
            let detail = format!("backfill \"{name}\" was begun in another form");
            return Err(Problem::new(Kind::Refused, detail));
        }
        let (header, bytes, lines) = (mark.header.as_deref(), mark.bytes, mark.lines);
        Ok(Filling {
            lines: ReadingsLines::resumed(form, now, header, bytes, lines),
            revision: self.revisions.get(plant, None).await?,
            store: Arc::clone(&self.store),
            metrics: Arc::clone(&self.metrics),
            received: now,
            mark,
            filled: Filled::default(),
            _alone: alone,
        })
    }

    fn alone(&self, plant: &str, name: &str) -> Result<Alone, Problem> {
        let name = (plant.to_owned(), name.to_owned());
        if !lock(&self.filling).insert(name.clone()) {
            let detail = format!("content of backfill \"{}\" is coming in already", name.1);
            return Err(Problem::new(Kind::Refused, detail));
        }
        Ok(Alone {
            all: Arc::clone(&self.filling),
            name,
        })
    }

    /// Takes the content to its end on a thread that may block, whether or not
    /// anybody waits; `until_then` is dropped at the end. What has been settled
    /// stays, whatever ends it.
    pub async fn fill(
        &self,
        filling: Filling,
        body: Streamed,
        complete: bool,
        until_then: impl Send + 'static,
    ) -> Result<Filled, Problem> {
        let handle = Handle::current();
        let span = tracing::Span::current();
        let filled = self.tasks.spawn_blocking(move || {
            let _until_then = until_then;
            span.in_scope(|| filling.run(body, complete, &handle))
        });
        filled.await.map_err(|error| {
            tracing::error!(%error, "a backfill broke off");
            Problem::new(Kind::Internal, "a backfill broke off; the log says more")
        })?
    }
}

impl Filling {
    fn run(mut self, body: Streamed, complete: bool, handle: &Handle) -> Result<Filled, Problem> {
        let store = Arc::clone(&self.store);
        let mut sent = None;
        let read = match body.open() {
            Ok(mut body) => self.read(&store, &mut body, complete, &mut sent, handle),
            Err(error) => Err(Stop::Body(Cut::problem(&error))),
        };
        // What has come whole is settled, whatever ended it.
        let settled = match &read {
            Err(Stop::Content(_) | Stop::Store(_)) => self.arrive(sent, handle),
            Ok(()) | Err(Stop::Body(_)) => self.settle(&store, sent, handle),
        };
        let problem = match (read, settled) {
            (Err(stop), _) | (Ok(()), Err(stop)) => Some(stop.problem()),
            (Ok(()), Ok(())) => None,
        };
        if let Some(problem) = problem {
            return Err(going_on(problem, &self.mark));
        }
        if complete {
            let (plant, name) = (self.plant(), &self.mark.name);
            let ended = self.store.end_backfill(plant, name, self.received);
            let ended = handle.block_on(ended);
            ended.map_err(|error| going_on(error.into(), &self.mark))?;
        }
        Ok(self.filled)
    }

    fn plant(&self) -> &str {
        &self.revision.compiled.plant().name
    }

    /// Reads the body and sends whole blocks to the store.
    fn read<'s>(
        &mut self,
        store: &'s Arc<dyn Store>,
        body: &mut dyn Read,
        complete: bool,
        sent: &mut Option<Sent<'s>>,
        handle: &Handle,
    ) -> Result<(), Stop> {
        let mut piece = vec![0; PIECE];
        let mut fed = 0;
        loop {
            match body.read(&mut piece) {
                Ok(0) => {
                    if complete {
                        self.lines.end();
                    }
                    return Ok(());
                }
                Ok(read) => {
                    self.lines.feed(&piece[..read]);
                    fed += read;
                }
                Err(error) if error.kind() == ErrorKind::Interrupted => {}
                Err(error) => return Err(Stop::Body(Cut::problem(&error))),
            }
            if fed >= BLOCK {
                fed = 0;
                let block = self.lines.take();
                self.arrive(sent.take(), handle)?;
                self.check(&block)?;
                *sent = Some(self.send(store, block));
            }
        }
    }

    /// Refuses content that is nothing of what it is said to be.
    fn check(&self, block: &Block) -> Result<(), Stop> {
        let nothing_yet = self.mark.lines == 0 && block.readings.count == 0;
        let is_none = block.syntax || (nothing_yet && block.faulty > 0);
        if !is_none {
            return Ok(());
        }
        let kind = if block.syntax {
            Kind::Malformed
        } else {
            Kind::Unacceptable
        };
        let detail = format!("{} in the content, and no reading", count(&block.faults));
        let problem = Problem::new(kind, detail).with_faults(block.faults.clone());
        Err(Stop::Content(problem))
    }

    fn send<'s>(&mut self, store: &'s Arc<dyn Store>, block: Block) -> Sent<'s> {
        let plant = self.revision.compiled.plant();
        let sorted = Sorted::new(plant, block.readings, None);
        let filled = &mut self.filled;
        let room = MOST_TOLD.saturating_sub(filled.faults.len());
        filled.faults.extend(block.faults.into_iter().take(room));
        filled.faulty += block.faulty;
        let mark = BackfillMark {
            name: self.mark.name.clone(),
            header: self.lines.header().map(str::to_owned),
            bytes: block.bytes,
            lines: block.lines,
            refused: self.mark.refused + block.faulty + sorted.refused(),
        };
        let (new, names, taken) = sorted.into_new(plant, self.received, Some(mark.clone()));
        Sent {
            reply: store.add_samples(new),
            names,
            mark,
            taken,
        }
    }

    /// Waits until a block is on disk.
    fn arrive(&mut self, sent: Option<Sent<'_>>, handle: &Handle) -> Result<(), Stop> {
        let Some(mut sent) = sent else {
            return Ok(());
        };
        let stored = handle.block_on(sent.reply).map_err(Stop::Store)?;
        let stored = stored.unwrap_or_default();
        let known = sent.taken.refused_count;
        sent.taken.stored(&stored, &sent.names);
        self.mark = sent.mark;
        // The store finds these; the next mark tells them.
        self.mark.refused += sent.taken.refused_count - known;
        let taken = &sent.taken;
        (self.metrics).samples(taken.taken, taken.known, taken.refused_count);
        self.filled.taken.add(sent.taken);
        Ok(())
    }

    /// Settles what is on its way and the whole lines that have come since.
    fn settle(
        &mut self,
        store: &Arc<dyn Store>,
        sent: Option<Sent<'_>>,
        handle: &Handle,
    ) -> Result<(), Stop> {
        self.arrive(sent, handle)?;
        let block = self.lines.take();
        self.check(&block)?;
        let last = self.send(store, block);
        let told = last.mark.refused;
        self.arrive(Some(last), handle)?;
        if self.mark.refused > told {
            // What the store refused of the last block is told by a mark alone.
            let block = self.lines.take();
            let mark = self.send(store, block);
            self.arrive(Some(mark), handle)?;
        }
        Ok(())
    }
}

/// A problem that tells where to go on.
fn going_on(problem: Problem, mark: &BackfillMark) -> Problem {
    let BackfillMark { name, bytes, .. } = mark;
    let more = format!("{bytes} bytes of backfill \"{name}\" are settled: go on with from={bytes}");
    problem
        .adding(&more)
        .with_header(SETTLED_BYTES, bytes.to_string())
}

/// What ends the reading before its end.
enum Stop {
    /// The body.
    Body(Problem),
    /// What it contains.
    Content(Problem),
    /// The store.
    Store(StoreError),
}

impl Stop {
    fn problem(self) -> Problem {
        match self {
            Stop::Body(problem) | Stop::Content(problem) => problem,
            Stop::Store(error) => error.into(),
        }
    }
}
