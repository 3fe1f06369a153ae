//! Keeping the store tidy: whole days into chunks and means, what retention no
//! longer keeps out, in small steps beside everything else.

use super::ambient::Clock;
use super::engine::Engine;
use super::error::Problem;
use crate::plant::Retention;
use crate::store::Store;
use std::collections::HashMap;
use std::sync::Arc;
use std::time::Duration;
use tokio::time::{Instant, sleep};

/// After the start, so that what was left over goes first.
const SETTLING: Duration = Duration::from_secs(1);

/// Least rest between two steps; beyond it a step rests for as long as it took,
/// so that the background never takes more than half of what there is.
const LEAST_REST: Duration = Duration::from_millis(5);

/// Plants that are read at once.
const PLANTS: usize = 100;

/// Retention by plant, with the revision that says so.
type Known = HashMap<String, (u32, Retention)>;

/// Tidies at once and then each so often; for ever.
pub(super) async fn run(
    store: Arc<dyn Store>,
    engine: Arc<Engine>,
    clock: Arc<dyn Clock>,
    every: Duration,
) {
    let mut known = Known::new();
    sleep(SETTLING).await;
    loop {
        if let Err(problem) = tidy(&*store, &engine, &*clock, &mut known).await {
            let document = String::from_utf8(problem.document()).unwrap_or_default();
            tracing::warn!(
                problem = document,
                "the store could not be tidied; it will be later"
            );
        }
        sleep(every).await;
    }
}

async fn tidy(
    store: &dyn Store,
    engine: &Engine,
    clock: &dyn Clock,
    known: &mut Known,
) -> Result<(), Problem> {
    let retention = retention(store, engine, known).await?;
    let (mut batches, mut samples, mut removed, mut freed) = (0, 0, 0, 0);
    loop {
        let began = Instant::now();
        let done = store.tidy(clock.now(), retention.clone()).await?;
        batches += done.batches;
        samples += done.samples;
        removed += done.removed;
        freed += done.freed;
        if !done.more {
            break;
        }
        sleep(began.elapsed().max(LEAST_REST)).await;
    }
    if batches + samples + removed + freed > 0 {
        tracing::info!(batches, samples, removed, freed, "the store was tidied");
    }
    Ok(())
}

/// What each plant's present revision says; a revision is read once.
async fn retention(
    store: &dyn Store,
    engine: &Engine,
    known: &mut Known,
) -> Result<Vec<(String, Retention)>, Problem> {
    let mut all = Vec::new();
    let mut after: Option<String> = None;
    loop {
        let lines = store.plants(after.as_deref(), PLANTS).await?;
        let Some(last) = lines.last() else {
            return Ok(all);
        };
        after = Some(last.name.clone());
        for line in lines {
            let retention = match known.get(&line.name) {
                Some((revision, retention)) if *revision == line.revision => *retention,
                _ => {
                    let revision = engine.revisions().get(&line.name, Some(line.revision));
                    match revision.await {
                        Ok(revision) => revision.compiled.plant().retention,
                        // Nothing of it is removed; the others go on.
                        Err(problem) => {
                            tracing::warn!(plant = line.name, ?problem, "its retention is unread");
                            all.push((line.name, Retention::default()));
                            continue;
                        }
                    }
                }
            };
            known.insert(line.name.clone(), (line.revision, retention));
            all.push((line.name, retention));
        }
    }
}
