//! Every relation and every measurement function has the Jacobian that finite
//! differences of its residual show, at random states on all sides of the
//! saturation line.
//!
//! The plants are those of `tests/reference`, which between them use every kind
//! of equipment, every measured quantity and every assumption.

use counterpoise::equations::{Observation, System, hypotheses};
use counterpoise::fluid;
use counterpoise::plant::{self, Format, Plant, Quantity, StreamId};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

/// Random states per plant.
const STATES: usize = 1000;
/// Agreement that is asked for, relative to the largest entry of the row in
/// units of the states' size.
const TOLERANCE: f64 = 1e-6;
/// Steps, relative to the size of a state: a shorter one serves where a longer
/// one crosses a phase or region edge.
const STEPS: [f64; 4] = [1e-3, 1e-4, 2e-5, 4e-6];

fn plants() -> Vec<Plant> {
    [
        include_str!("../reference/hazel-quay.toml"),
        include_str!("../reference/ferrow-bridge.toml"),
        include_str!("../reference/corrow-mill.toml"),
        include_str!("../reference/alder-weir.toml"),
    ]
    .map(|text| plant::read(text, Format::Toml).unwrap().plant)
    .into()
}

/// A random pressure and an enthalpy of liquid, nearly saturated liquid, wet
/// steam, nearly saturated vapour or superheated steam.
fn random_stream(random: &mut ChaCha8Rng) -> (f64, f64) {
    let p = 10_f64.powf(random.random_range(-2.3..1.2));
    let saturation = fluid::saturation(p).unwrap();
    let (liquid, vapour) = (saturation.liquid.h, saturation.vapour.h);
    let latent = vapour - liquid;
    let h = match random.random_range(0..7) {
        0 => liquid * random.random_range(0.1..0.98),
        1 => liquid - random.random_range(0.05..2.0),
        2 => liquid + random.random_range(0.05..2.0),
        3 => liquid + latent * random.random_range(0.05..0.95),
        4 => vapour - random.random_range(0.05..2.0),
        5 => vapour + random.random_range(0.05..2.0),
        _ => vapour + random.random_range(5.0..600.0),
    };
    (p, h)
}

fn random_state(system: &System, random: &mut ChaCha8Rng) -> Vec<f64> {
    let layout = &system.layout;
    let mut x: Vec<f64> = (0..layout.len())
        .map(|_| random.random_range(-5e4..5e4))
        .collect();
    for s in (0..layout.streams()).map(StreamId) {
        let (p, h) = random_stream(random);
        x[layout.m(s)] = random.random_range(-5.0..200.0);
        x[layout.p(s)] = p;
        x[layout.h(s)] = h;
    }
    for own in &layout.own {
        if let Some(j) = own.holdup {
            x[j] = random.random_range(-2.0..2.0);
        }
    }
    if let Some(j) = layout.barometer {
        x[j] = 0.1 + random.random_range(-0.005..0.005);
    }
    x
}

/// Central differences with one Richardson extrapolation.
fn difference(f: &dyn Fn(&[f64]) -> Option<f64>, x: &[f64], j: usize, step: f64) -> Option<f64> {
    let central = |step: f64| {
        let mut at = x.to_vec();
        at[j] = x[j] + step;
        let above = f(&at)?;
        at[j] = x[j] - step;
        Some((above - f(&at)?) / (2.0 * step))
    };
    Some((4.0 * central(step / 2.0)? - central(step)?) / 3.0)
}

/// The worst disagreement of a row, or why there is none to measure.
fn check(
    f: &dyn Fn(&[f64]) -> Option<f64>,
    x: &[f64],
    row: &[usize],
    exact: &[f64],
) -> Option<f64> {
    let size = |j: usize| x[j].abs().max(1e-3);
    let largest = row
        .iter()
        .zip(exact)
        .map(|(&j, value)| (value * size(j)).abs())
        .fold(1e-12, f64::max);
    let mut worst = 0.0_f64;
    for (&j, &value) in row.iter().zip(exact) {
        let best = STEPS
            .iter()
            .filter_map(|&step| difference(f, x, j, step * size(j)))
            .map(|found| ((found - value) * size(j)).abs() / largest)
            .fold(f64::INFINITY, f64::min);
        worst = worst.max(best);
    }
    worst.is_finite().then_some(worst)
}

/// An efficiency over next to no pressure ratio is the quotient of two small
/// differences, which no finite difference of it resolves.
fn is_idle_machine(observation: &Observation, x: &[f64]) -> bool {
    match (observation.quantity, &observation.row[..]) {
        (Quantity::IsentropicEfficiency { .. }, &[inlet, _, outlet, _]) => {
            (x[inlet] / x[outlet]).ln().abs() < 0.3
        }
        _ => false,
    }
}

#[test]
fn relations_and_measurements_have_exact_jacobians() {
    let mut random = ChaCha8Rng::seed_from_u64(11);
    let (mut checked, mut without_value) = (0, 0);
    for plant in plants() {
        let system = System::new(&plant);
        for _ in 0..STATES {
            let x = random_state(&system, &mut random);
            for (k, relation) in system.relations.iter().enumerate() {
                let f = |x: &[f64]| Some(system.residual(k, x)?.0);
                let (_, exact) = system.residual(k, &x).unwrap();
                let worst = check(&f, &x, &relation.row, &exact).unwrap();
                assert!(worst < TOLERANCE, "{:?}: {worst:e}", relation.role);
                checked += 1;
            }
            for (i, observation) in system.observations.iter().enumerate() {
                let f = |x: &[f64]| Some(system.predict(i, x)?.0);
                if is_idle_machine(observation, &x) {
                    without_value += 1;
                    continue;
                }
                let exact = system.predict(i, &x);
                // An efficiency has no value where the isentropic end state lies
                // outside the range of the properties.
                let Some(worst) =
                    exact.and_then(|(_, exact)| check(&f, &x, &observation.row, &exact))
                else {
                    without_value += 1;
                    continue;
                };
                let at: Vec<f64> = observation.row.iter().map(|&j| x[j]).collect();
                assert!(
                    worst < TOLERANCE,
                    "{:?} at {at:?}: {worst:e}",
                    observation.quantity
                );
                checked += 1;
            }
        }
    }
    assert!(checked > 100_000, "{checked}");
    assert!(
        without_value < checked / 100,
        "{without_value} of {checked} had no value"
    );
}

/// A hypothesis adds a state of its own; what it adds to each relation is the
/// derivative by that state, and where it is zero nothing else has changed.
#[test]
fn hypotheses_add_what_they_say_to_the_relations() {
    let mut random = ChaCha8Rng::seed_from_u64(12);
    let mut checked = 0;
    for plant in plants() {
        let plain = System::new(&plant);
        for hypothesis in hypotheses(&plant, &plain) {
            let (system, states) = plain.with(&plant, &[&hypothesis]);
            let Some(state) = states[0] else {
                assert!(hypothesis.observation().is_some());
                assert_eq!(system.relations, plain.relations);
                continue;
            };
            assert_eq!(state, plain.layout.len());
            for _ in 0..20 {
                let mut x = random_state(&plain, &mut random);
                x.push(0.0);
                for (k, relation) in system.relations.iter().enumerate() {
                    let (without, with) = (plain.residual(k, &x), system.residual(k, &x));
                    assert_eq!(without.unwrap().0, with.unwrap().0, "{:?}", relation.role);
                }
                let rows = hypothesis.rows(&plain.layout, &x);
                x[state] = random.random_range(-3.0..3.0);
                for (k, relation) in system.relations.iter().enumerate() {
                    let (_, exact) = system.residual(k, &x).unwrap();
                    let f = |x: &[f64]| Some(system.residual(k, x)?.0);
                    let worst = check(&f, &x, &relation.row, &exact).unwrap();
                    assert!(worst < TOLERANCE, "{:?}: {worst:e}", relation.role);
                    let slot = relation.row.iter().position(|&j| j == state);
                    let phi = rows.iter().find(|&&(row, _)| row == k).map(|&(_, phi)| phi);
                    assert_eq!(slot.map(|slot| exact[slot]), phi, "{:?}", hypothesis.blame);
                    checked += 1;
                }
            }
        }
    }
    assert!(checked > 10_000, "{checked}");
}
