//! A plant revision, compiled once and reused for every batch.
//!
//! Each line-up of the plant is a plant of its own with an equation structure of
//! its own, compiled when a batch first needs it and kept. Line-ups share nothing
//! but the critical values that are recalled, under names that tell them apart.

use super::class_set::{ClassKey, ClassSet};
use crate::equations::{Hypothesis, System, hypotheses};
use crate::plant::{Places, Plant, Reduced, Service};
use crate::report::SingleTest;
use crate::solver::{Classes, Symbolic};
use std::collections::HashMap;
use std::sync::atomic::{AtomicU64, AtomicUsize, Ordering};
use std::sync::{Arc, Mutex, MutexGuard, OnceLock, PoisonError};

/// Class sets that are kept: of a plant whose readings come and go there are as
/// many as there are sets of missing tags.
const SETS_KEPT: usize = 1024;

/// Variants that are kept: a suspect that stays is met in every batch.
const VARIANTS_KEPT: usize = 128;

/// Line-ups that are kept, those used last.
const LINE_UPS_KEPT: usize = 32;

/// A plant revision: topology, equations and symbolic factorisation, and the
/// classes of every set of phases met so far.
pub struct Compiled {
    plant: Arc<Plant>,
    revision: u32,
    /// What tells its class sets from those of other line-ups; empty where
    /// everything is in service.
    mark: Vec<u8>,
    structure: OnceLock<Structure>,
    classes: Mutex<HashMap<ClassKey, Arc<Classes>>>,
    class_sets: Mutex<HashMap<ClassKey, Arc<ClassSet>>>,
    variants: Mutex<HashMap<Vec<usize>, Arc<Variant>>>,
    line_ups: Mutex<HashMap<Service, Slot>>,
    shared: Arc<Shared>,
}

/// What costs time to compile.
struct Structure {
    system: System,
    symbolic: Symbolic,
    hypotheses: Arc<[Hypothesis]>,
}

/// What the line-ups of a revision have in common.
#[derive(Default)]
struct Shared {
    recalled: Mutex<HashMap<String, SingleTest>>,
    compilations: AtomicUsize,
    uses: AtomicU64,
}

/// A line-up that is kept, or about to be made.
#[derive(Default)]
struct Slot {
    line_up: Arc<OnceLock<Arc<LinedUp>>>,
    last_use: u64,
}

/// A plant with parts out of service.
pub struct LinedUp {
    /// What is left, compiled.
    pub compiled: Compiled,
    /// Where the members of the whole plant are in it.
    pub places: Places,
}

impl Structure {
    fn of(system: System, hypotheses: Arc<[Hypothesis]>) -> Self {
        Structure {
            symbolic: Symbolic::new(&system.structure),
            system,
            hypotheses,
        }
    }
}

/// A plant in which some hypotheses hold, each with a state of its own behind
/// the others.
pub struct Variant {
    /// The plant with the states of the hypotheses.
    pub compiled: Compiled,
    /// Hypotheses with their states.
    pub states: Vec<(usize, usize)>,
}

impl Compiled {
    /// Compiles a plant. One whose parts may be out of service is compiled line-up
    /// by line-up, as batches need them.
    pub fn new(plant: Plant, revision: u32) -> Self {
        let compiled = Self::of(Arc::new(plant), revision, Vec::new(), Arc::default());
        if !compiled.plant.has_conditions() {
            compiled.structure();
        }
        compiled
    }

    fn of(plant: Arc<Plant>, revision: u32, mark: Vec<u8>, shared: Arc<Shared>) -> Self {
        Compiled {
            plant,
            revision,
            mark,
            structure: OnceLock::new(),
            classes: Mutex::default(),
            class_sets: Mutex::default(),
            variants: Mutex::default(),
            line_ups: Mutex::default(),
            shared,
        }
    }

    fn structure(&self) -> &Structure {
        self.structure.get_or_init(|| {
            self.shared.compilations.fetch_add(1, Ordering::Relaxed);
            let system = System::new(&self.plant);
            let hypotheses = hypotheses(&self.plant, &system).into();
            Structure::of(system, hypotheses)
        })
    }

    /// How often an equation structure was compiled so far: once per line-up.
    pub fn compilations(&self) -> usize {
        self.shared.compilations.load(Ordering::Relaxed)
    }

    /// The plant with what is in service, which is closed; `None` where that is
    /// everything. Compiled where it is met for the first time.
    pub(super) fn line_up(&self, service: &Service) -> Option<Arc<LinedUp>> {
        if service.is_full() {
            return None;
        }
        let slot = self.slot(service);
        let made = slot.get_or_init(|| {
            let Reduced { plant, places } = Reduced::new(&self.plant, service);
            let shared = Arc::clone(&self.shared);
            let compiled = Self::of(Arc::new(plant), self.revision, service.mark(), shared);
            compiled.structure();
            Arc::new(LinedUp { compiled, places })
        });
        Some(Arc::clone(made))
    }

    fn slot(&self, service: &Service) -> Arc<OnceLock<Arc<LinedUp>>> {
        let now = self.shared.uses.fetch_add(1, Ordering::Relaxed);
        let line_ups = self.line_ups.lock();
        let mut line_ups = line_ups.unwrap_or_else(PoisonError::into_inner);
        let slot = line_ups.entry(service.clone()).or_default();
        slot.last_use = now;
        let found = Arc::clone(&slot.line_up);
        if line_ups.len() > LINE_UPS_KEPT {
            let oldest = line_ups.iter().min_by_key(|(_, slot)| slot.last_use);
            let oldest = oldest.map(|(service, _)| service.clone());
            let gone = oldest.and_then(|service| line_ups.remove(&service));
            // Its critical values stand.
            if let Some(gone) = gone.as_ref().and_then(|slot| slot.line_up.get()) {
                gone.compiled.keep_critical_values();
            }
        }
        found
    }

    /// Critical values that were worked out here outlast the class sets.
    fn keep_critical_values(&self) {
        let sets = self.class_sets.lock();
        let sets = sets.unwrap_or_else(PoisonError::into_inner);
        let tests = sets.values().filter_map(|set| set.single_test.clone());
        self.recall(tests.collect::<Vec<_>>());
    }

    /// What tells its class sets from those of other line-ups.
    pub(super) fn mark(&self) -> &[u8] {
        &self.mark
    }

    /// The plant.
    pub fn plant(&self) -> &Plant {
        &self.plant
    }

    /// Its revision.
    pub fn revision(&self) -> u32 {
        self.revision
    }

    /// Takes over critical values that earlier reports of this revision were
    /// held against, so that a replay is held against the same. The first one
    /// of a class set stands.
    pub fn recall(&self, tests: impl IntoIterator<Item = SingleTest>) {
        let mut recalled = self.recalled_tests();
        for test in tests {
            recalled.entry(test.class_set.clone()).or_insert(test);
        }
    }

    pub(super) fn system(&self) -> &System {
        &self.structure().system
    }

    pub(super) fn symbolic(&self) -> &Symbolic {
        &self.structure().symbolic
    }

    /// Every hypothesis.
    pub(super) fn hypotheses(&self) -> &[Hypothesis] {
        &self.structure().hypotheses
    }

    /// The plant with these hypotheses, which blame relations, as unknowns. What
    /// it is does not depend on whether it was kept.
    pub(super) fn variant(&self, suspects: &[usize]) -> Arc<Variant> {
        let lock = || {
            let variants = self.variants.lock();
            variants.unwrap_or_else(PoisonError::into_inner)
        };
        if let Some(known) = lock().get(suspects) {
            return Arc::clone(known);
        }
        let all = &self.structure().hypotheses;
        let named: Vec<&Hypothesis> = suspects.iter().map(|&h| &all[h]).collect();
        let (system, states) = self.system().with(&self.plant, &named);
        let plant = Arc::clone(&self.plant);
        let compiled = Self::of(plant, self.revision, self.mark.clone(), Arc::default());
        let structure = Structure::of(system, Arc::clone(all));
        let compiled = Compiled {
            structure: OnceLock::from(structure),
            ..compiled
        };
        let states = suspects.iter().zip(states);
        let made = Arc::new(Variant {
            compiled,
            states: states.filter_map(|(&h, j)| Some((h, j?))).collect(),
        });
        let mut variants = lock();
        if variants.len() >= VARIANTS_KEPT {
            variants.clear();
        }
        variants.insert(suspects.to_vec(), Arc::clone(&made));
        made
    }

    pub(super) fn recalled(&self, class_set: &str) -> Option<SingleTest> {
        self.recalled_tests().get(class_set).cloned()
    }

    fn recalled_tests(&self) -> MutexGuard<'_, HashMap<String, SingleTest>> {
        let recalled = self.shared.recalled.lock();
        recalled.unwrap_or_else(PoisonError::into_inner)
    }

    /// The class set of a key, made by `make` where it is new. A panic of
    /// another thread leaves the cache whole: entries are inserted complete.
    pub(super) fn class_set(
        &self,
        key: ClassKey,
        make: impl FnOnce() -> ClassSet,
    ) -> Arc<ClassSet> {
        let lock = || {
            self.class_sets
                .lock()
                .unwrap_or_else(PoisonError::into_inner)
        };
        if let Some(known) = lock().get(&key) {
            return Arc::clone(known);
        }
        let made = Arc::new(make());
        let mut sets = lock();
        if sets.len() >= SETS_KEPT {
            // Their critical values stand, whoever else is forgotten.
            let tests = sets.values().filter_map(|set| set.single_test.clone());
            self.recall(tests.collect::<Vec<_>>());
            sets.clear();
        }
        Arc::clone(sets.entry(key).or_insert(made))
    }

    /// The classes of a key, likewise.
    pub(super) fn classes(&self, key: ClassKey, make: impl FnOnce() -> Classes) -> Arc<Classes> {
        let lock = || self.classes.lock().unwrap_or_else(PoisonError::into_inner);
        if let Some(known) = lock().get(&key) {
            return Arc::clone(known);
        }
        let made = Arc::new(make());
        let mut classes = lock();
        if classes.len() >= SETS_KEPT {
            classes.clear();
        }
        Arc::clone(classes.entry(key).or_insert(made))
    }
}
