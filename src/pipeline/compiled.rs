//! A plant revision, compiled once and reused for every batch.

use super::class_set::{ClassKey, ClassSet};
use crate::equations::System;
use crate::plant::Plant;
use crate::report::SingleTest;
use crate::solver::Symbolic;
use std::collections::HashMap;
use std::sync::{Arc, Mutex, PoisonError};

/// A plant revision: topology, equations and symbolic factorisation, and the
/// classes of every set of phases met so far.
pub struct Compiled {
    plant: Plant,
    revision: u32,
    system: System,
    symbolic: Symbolic,
    class_sets: Mutex<HashMap<ClassKey, Arc<ClassSet>>>,
    recalled: Mutex<HashMap<String, SingleTest>>,
}

impl Compiled {
    /// Compiles a plant.
    pub fn new(plant: Plant, revision: u32) -> Self {
        let system = System::new(&plant);
        let symbolic = Symbolic::new(&system.structure);
        Compiled {
            plant,
            revision,
            system,
            symbolic,
            class_sets: Mutex::default(),
            recalled: Mutex::default(),
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
        Arc::clone(lock().entry(key).or_insert(made))
    }
}
