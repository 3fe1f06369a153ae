//! A plant revision, compiled once and reused for every batch.

use super::class_set::{ClassKey, ClassSet};
use crate::equations::{Hypothesis, System, hypotheses};
use crate::plant::Plant;
use crate::report::SingleTest;
use crate::solver::{Classes, Symbolic};
use std::collections::HashMap;
use std::sync::{Arc, Mutex, PoisonError};

/// Class sets that are kept: of a plant whose readings come and go there are as
/// many as there are sets of missing tags.
const SETS_KEPT: usize = 1024;

/// Variants that are kept: a suspect that stays is met in every batch.
const VARIANTS_KEPT: usize = 128;

/// A plant revision: topology, equations and symbolic factorisation, and the
/// classes of every set of phases met so far.
pub struct Compiled {
    plant: Arc<Plant>,
    revision: u32,
    system: System,
    symbolic: Symbolic,
    hypotheses: Arc<[Hypothesis]>,
    classes: Mutex<HashMap<ClassKey, Arc<Classes>>>,
    class_sets: Mutex<HashMap<ClassKey, Arc<ClassSet>>>,
    recalled: Mutex<HashMap<String, SingleTest>>,
    variants: Mutex<HashMap<Vec<usize>, Arc<Variant>>>,
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
    /// Compiles a plant.
    pub fn new(plant: Plant, revision: u32) -> Self {
        let system = System::new(&plant);
        let hypotheses = hypotheses(&plant, &system).into();
        Self::of(Arc::new(plant), revision, system, hypotheses)
    }

    fn of(plant: Arc<Plant>, revision: u32, system: System, hypotheses: Arc<[Hypothesis]>) -> Self {
        Compiled {
            symbolic: Symbolic::new(&system.structure),
            plant,
            revision,
            system,
            hypotheses,
            classes: Mutex::default(),
            class_sets: Mutex::default(),
            recalled: Mutex::default(),
            variants: Mutex::default(),
        }
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
        let mut recalled = self.recalled.lock().unwrap_or_else(PoisonError::into_inner);
        for test in tests {
            recalled.entry(test.class_set.clone()).or_insert(test);
        }
    }

    pub(super) fn system(&self) -> &System {
        &self.system
    }

    pub(super) fn symbolic(&self) -> &Symbolic {
        &self.symbolic
    }

    /// Every hypothesis.
    pub(super) fn hypotheses(&self) -> &[Hypothesis] {
        &self.hypotheses
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
        let named: Vec<&Hypothesis> = suspects.iter().map(|&h| &self.hypotheses[h]).collect();
        let (system, states) = self.system.with(&self.plant, &named);
        let (plant, all) = (Arc::clone(&self.plant), Arc::clone(&self.hypotheses));
        let states = suspects.iter().zip(states);
        let made = Arc::new(Variant {
            compiled: Self::of(plant, self.revision, system, all),
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
        let recalled = self.recalled.lock().unwrap_or_else(PoisonError::into_inner);
        recalled.get(class_set).cloned()
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
