//! Plant revisions, compiled once each and kept while they are used.

use super::engine::{compute, no_plant};
use super::error::{Kind, Problem};
use crate::pipeline::Compiled;
use crate::plant::{self, Fault, Format};
use crate::report::SingleTest;
use crate::store::{Store, StoredPlant};
use std::collections::{HashMap, HashSet};
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use tokio::sync::OnceCell;

/// Compiled revisions that are kept: the current ones of some dozen plants and
/// those of late batches.
const KEPT: usize = 64;

/// The media type of a plant file in TOML.
pub(super) const TOML: &str = "application/toml";

/// The media type of a plant file, or anything else, in JSON.
pub(super) const JSON: &str = "application/json";

/// One revision, ready for use.
pub(super) struct Revision {
    pub compiled: Compiled,
    pub warnings: Vec<Fault>,
}

#[derive(Default)]
struct Slot {
    revision: Arc<OnceCell<Arc<Revision>>>,
    last_use: u64,
}

#[derive(Default)]
struct Kept {
    slots: HashMap<(String, u32), Slot>,
    uses: u64,
    /// Names of plants that there are: a plant never goes away.
    names: HashSet<String>,
}

/// See the module.
pub(super) struct Revisions {
    store: Arc<dyn Store>,
    kept: Mutex<Kept>,
}

impl Revisions {
    pub fn new(store: Arc<dyn Store>) -> Self {
        Revisions {
            store,
            kept: Mutex::default(),
        }
    }

    /// Makes sure that there is a plant, without reading its file every time.
    pub async fn know(&self, plant: &str) -> Result<(), Problem> {
        if self.kept().names.contains(plant) {
            return Ok(());
        }
        self.stored(plant, None).await?;
        self.kept().names.insert(plant.to_owned());
        Ok(())
    }

    /// A revision as it was stored, the current one where none is named.
    pub async fn stored(&self, plant: &str, number: Option<u32>) -> Result<StoredPlant, Problem> {
        let stored = self.store.plant(plant, number).await?;
        stored.ok_or_else(|| match number {
            None => no_plant(plant),
            Some(number) => Problem::new(
                Kind::NotFound,
                format!("there is no revision {number} of plant \"{plant}\""),
            ),
        })
    }

    /// A revision, compiled.
    pub async fn get(&self, plant: &str, number: Option<u32>) -> Result<Arc<Revision>, Problem> {
        let (number, stored) = match number {
            Some(number) => (number, None),
            None => {
                let stored = self.stored(plant, None).await?;
                (stored.revision, Some(stored))
            }
        };
        let slot = self.slot(plant, number);
        let load = || async {
            let stored = match stored {
                Some(stored) => stored,
                None => self.stored(plant, Some(number)).await?,
            };
            let known = self.store.critical_values(plant, number).await?;
            compute(move || compile(&stored, known).map(Arc::new)).await?
        };
        slot.get_or_try_init(load).await.cloned()
    }

    fn slot(&self, plant: &str, number: u32) -> Arc<OnceCell<Arc<Revision>>> {
        let mut kept = self.kept();
        kept.uses += 1;
        let now = kept.uses;
        let slot = kept.slots.entry((plant.to_owned(), number)).or_default();
        slot.last_use = now;
        let revision = Arc::clone(&slot.revision);
        if kept.slots.len() > KEPT {
            let oldest = kept.slots.iter().min_by_key(|(_, slot)| slot.last_use);
            if let Some(key) = oldest.map(|(key, _)| key.clone()) {
                kept.slots.remove(&key);
            }
        }
        revision
    }

    /// Single insertions and removals: the content is whole whatever happened
    /// to a thread that held the lock.
    fn kept(&self) -> MutexGuard<'_, Kept> {
        self.kept.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

/// The format that a media type stands for.
pub(super) fn format_of(media_type: &str) -> Option<Format> {
    match media_type {
        JSON => Some(Format::Json),
        TOML => Some(Format::Toml),
        _ => None,
    }
}

/// Compiles a revision anew.
pub(super) fn compile(stored: &StoredPlant, known: Vec<SingleTest>) -> Result<Revision, Problem> {
    let unreadable = |detail: String| {
        tracing::error!(
            plant = stored.name,
            revision = stored.revision,
            detail,
            "unreadable"
        );
        Problem::new(
            Kind::Internal,
            "a stored plant file cannot be read any more",
        )
    };
    let format = format_of(&stored.media_type)
        .ok_or_else(|| unreadable(format!("media type {}", stored.media_type)))?;
    let file =
        plant::read(&stored.source, format).map_err(|faults| unreadable(faults.to_string()))?;
    let compiled = Compiled::new(file.plant, stored.revision);
    compiled.recall(known);
    Ok(Revision {
        compiled,
        warnings: file.warnings,
    })
}
