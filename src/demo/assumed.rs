//! The true values of the plant file's assumptions.
//!
//! The estimator takes an assumption for a normal variable about its stated
//! value, so the simulated plant has to be built the same way: each true value
//! is stated value + sigma * z with z standard normal. Only then are p-values
//! uniform and intervals as wide as they say.

use std::collections::BTreeMap;

use rand::Rng;
use serde::Serialize;

use super::Error;
use super::normal::standard_normal;
use crate::plant::{Assumption, Plant};

/// Assumptions of stand-by equipment, and those of the equipment that it stands by
/// for: of one make, so what is true of one is true of the other. Only one of
/// them is ever in service.
const TWINS: [(&str, &str); 1] = [("condensate-motor-b-loss", "condensate-motor-loss")];

/// A true value for every assumption, in internal units.
#[derive(Clone, Debug, PartialEq, Serialize)]
#[serde(transparent)]
pub struct Assumed(BTreeMap<String, f64>);

impl Assumed {
    /// Every assumption exactly as stated.
    pub fn stated(plant: &Plant) -> Self {
        Self::with(plant, |_| 0.0)
    }

    /// Every assumption drawn from its stated distribution, in file order.
    pub fn drawn(plant: &Plant, rng: &mut impl Rng) -> Self {
        Self::with(plant, |_| standard_normal(rng))
    }

    /// Draws one assumption again and leaves the others; no effect where the
    /// plant has none of that name.
    pub fn redraw(&mut self, plant: &Plant, name: &str, rng: &mut impl Rng) {
        if let Some(assumption) = plant.assumptions.iter().find(|a| a.name == name) {
            let value = true_value(assumption, standard_normal(rng));
            self.0.insert(assumption.name.clone(), value);
        }
    }

    /// Moves the true value of one assumption away by this many standard
    /// deviations of its stated distribution; no effect where the plant has none
    /// of that name.
    pub fn shift(&mut self, plant: &Plant, name: &str, sigmas: f64) {
        if let Some(assumption) = plant.assumptions.iter().find(|a| a.name == name)
            && let Some(value) = self.0.get_mut(name)
        {
            *value += true_value(assumption, sigmas) - true_value(assumption, 0.0);
        }
    }

    /// The true value of an assumption, in its internal unit.
    ///
    /// # Errors
    /// [`Error::NoAssumption`] where the plant file has none of that name.
    pub fn get(&self, name: &'static str) -> Result<f64, Error> {
        self.0.get(name).copied().ok_or(Error::NoAssumption(name))
    }

    /// Names and true values, by name.
    pub fn iter(&self) -> impl Iterator<Item = (&str, f64)> {
        self.0.iter().map(|(name, value)| (name.as_str(), *value))
    }

    fn with(plant: &Plant, mut z: impl FnMut(&Assumption) -> f64) -> Self {
        let is_twin = |a: &&Assumption| TWINS.iter().any(|(twin, _)| *twin == a.name);
        let all = plant.assumptions.iter();
        let mut values: BTreeMap<String, f64> = all
            .filter(|a| !is_twin(a))
            .map(|a| (a.name.clone(), true_value(a, z(a))))
            .collect();
        for twin in plant.assumptions.iter().filter(is_twin) {
            let first = TWINS.iter().find(|(name, _)| *name == twin.name);
            if let Some(value) = first.and_then(|(_, first)| values.get(*first)) {
                values.insert(twin.name.clone(), *value);
            }
        }
        Assumed(values)
    }
}

/// The value at `z` standard deviations from the stated one.
fn true_value(assumption: &Assumption, z: f64) -> f64 {
    let sigma = assumption
        .uncertainty
        .sigma(assumption.value)
        .map_or(0.0, |sigma| sigma.get());
    assumption.unit.to_internal(assumption.value + sigma * z)
}
