//! What the instruments show of the truth.
//!
//! A good reading is the true value plus sigma times a standard normal number,
//! with the sigma that the plant file states at the true value. The estimator
//! takes sigma at the reading instead; for a term in proportion to the reading
//! or its inverse the two differ by the relative sigma squared, less than a
//! thousandth here. Readings are rounded as instruments round, by a power of
//! ten of at most a twentieth of sigma.

use rand::Rng;

use super::normal::standard_normal;
use super::{Error, Truth};
use crate::plant::{Grade, Plant, Quality, Reading, Tag};

/// What is wrong with an instrument.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Fault {
    /// It reads this many sigma too much.
    Bias(f64),
    /// It sends nothing.
    Missing,
    /// It sends the lower end of its range, marked bad.
    Bad,
    /// Its readings scatter more, by the plant's factor, and are marked uncertain.
    Uncertain,
}

/// One reading of every tag in file order, and of every status behind them. Each tag
/// in service takes one normal number from `rng` whatever its fault, so that a
/// fault changes no other reading; what stands still shows nothing, without noise.
///
/// # Errors
/// [`Error::NoStream`] where the plant has a tag on a stream that the
/// simulation does not know.
pub fn readings(
    plant: &Plant,
    truth: &Truth,
    rng: &mut impl Rng,
    fault: impl Fn(&Tag) -> Option<Fault>,
) -> Result<Vec<Reading>, Error> {
    let reading = |tag: &str, value, grade| Reading {
        tag: tag.to_owned(),
        value,
        quality: Quality { grade, code: None },
        averaged: None,
    };
    let tags = plant.tags.iter().map(|tag| {
        if !truth.is_in_service(plant, tag.quantity) {
            let value = tag.unit.from_internal(truth.at_rest(tag.quantity));
            return Ok(reading(&tag.name, Some(value), Grade::Good));
        }
        let z = standard_normal(rng);
        let exact = tag.unit.from_internal(truth.value(plant, tag.quantity)?);
        let sigma = sigma(tag, exact);
        let decimals = decimals(tag, exact);
        let noisy = |z: f64| Some(round(exact + sigma * z, decimals));
        let (value, grade) = match fault(tag) {
            None => (noisy(z), Grade::Good),
            Some(Fault::Bias(bias)) => (noisy(z + bias), Grade::Good),
            Some(Fault::Missing) => (None, Grade::Bad),
            Some(Fault::Bad) => (tag.range.map(|(low, _)| low), Grade::Bad),
            Some(Fault::Uncertain) => (noisy(z * plant.uncertain_factor), Grade::Uncertain),
        };
        Ok(reading(&tag.name, value, grade))
    });
    let statuses = plant.statuses.iter().map(|status| {
        let shown = truth.line_up.status(&status.name);
        Ok(reading(&status.name, shown, Grade::Good))
    });
    tags.chain(statuses).collect()
}

/// Sigma of a tag at a reading, in its unit.
fn sigma(tag: &Tag, reading: f64) -> f64 {
    tag.uncertainty.sigma(reading).map_or(0.0, |s| s.get())
}

/// Decimals that a tag shows: always the same, so taken at its normal reading.
fn decimals(tag: &Tag, reading: f64) -> i32 {
    const SHARE_OF_SIGMA: f64 = 20.0;
    let step = sigma(tag, tag.normal.unwrap_or(reading)) / SHARE_OF_SIGMA;
    if step > 0.0 {
        (-step.log10().floor()).max(0.0) as i32
    } else {
        0
    }
}

fn round(value: f64, decimals: i32) -> f64 {
    let scale = 10f64.powi(decimals);
    (value * scale).round() / scale
}

#[cfg(test)]
mod tests {
    use super::super::{Assumed, Conditions, plant, truth};
    use super::*;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;

    fn at_ninety_per_cent(fault: impl Fn(&Tag) -> Option<Fault>) -> (Plant, Vec<Reading>) {
        let plant = plant().expect("the demo plant file has no faults");
        let truth = truth(&Conditions::at_load(0.9), &Assumed::stated(&plant)).expect("settles");
        let mut rng = ChaCha8Rng::seed_from_u64(3);
        let readings = readings(&plant, &truth, &mut rng, fault).expect("every stream is known");
        (plant, readings)
    }

    #[test]
    fn a_fault_changes_its_own_reading_only() {
        let (_, sound) = at_ninety_per_cent(|_| None);
        for fault in [
            Fault::Bias(5.0),
            Fault::Missing,
            Fault::Bad,
            Fault::Uncertain,
        ] {
            let (_, faulty) = at_ninety_per_cent(|tag| (tag.name == "FT-102").then_some(fault));
            for (a, b) in sound.iter().zip(&faulty) {
                assert_eq!(a == b, a.tag != "FT-102", "{} with {fault:?}", a.tag);
            }
        }
    }

    #[test]
    fn rounding_does_not_distort() {
        let (plant, readings) = at_ninety_per_cent(|_| None);
        for (tag, reading) in plant.tags.iter().zip(&readings) {
            let value = reading.value.expect("a value");
            let decimals = decimals(tag, value);
            assert_eq!(value, round(value, decimals), "{}", tag.name);
            assert!(
                10f64.powi(-decimals) <= sigma(tag, value) / 10.0,
                "{}",
                tag.name
            );
        }
    }
}
