//! A first guess of every stream's pressure from readings and topology.
//!
//! Streams that a relation holds at one pressure form a group. A group takes
//! the weighted mean of its readings; assumed pressure drops and saturation
//! temperatures carry pressures on; what is left is smoothed in ln p over the
//! equipment between its neighbours.

use super::relation::{Law, Role};
use super::system::{Measured, System};
use crate::fluid;
use crate::plant::{Barometer, Kind, Plant, PressureReference, Quantity, StreamId};

/// Standard atmosphere, MPa: where no barometer reads.
const STANDARD_ATMOSPHERE: f64 = 0.101_325;
/// Where nothing tells: MPa.
const ANYWHERE: f64 = 1.0;
/// Standard uncertainties of a guess, relative: at least, where it is read;
/// carried over a drop or from saturation; smoothed.
const GIVEN: f64 = 0.01;
const CARRIED: f64 = 0.03;
const GUESSED: f64 = 0.3;
/// Most sweeps of the smoothing; it converges geometrically.
const SWEEPS: usize = 200;
/// Change of ln p at which the smoothing ends: a guess needs no more.
const SMOOTH_ENOUGH: f64 = 1e-3;

/// Guessed pressures.
pub struct Pressures {
    /// MPa, per stream.
    pub stream: Vec<f64>,
    /// Whether readings or exact relations give it (or the guess is smoothed).
    pub known: Vec<bool>,
    /// How far the guess may be off, as a standard uncertainty, MPa.
    pub sigma: Vec<f64>,
    /// Atmospheric pressure, MPa.
    pub barometer: f64,
}

/// Guesses the pressures of a plant.
/// Those that are smoothed come out `factor` times as high.
pub fn guess(
    plant: &Plant,
    system: &System,
    measured: &[Option<Measured>],
    factor: f64,
) -> Pressures {
    let barometer = barometer(plant, system, measured);
    let mut groups = Groups::new(plant.streams.len());
    for relation in &system.relations {
        if relation.role == Role::Condition("equal pressure")
            && let Law::Linear(terms) = &relation.law
            && let [(a, _), (b, _)] = terms[..]
        {
            groups.join(a / 3, b / 3);
        }
    }
    let n = plant.streams.len();
    let mut ln_p: Vec<Option<f64>> = vec![None; n];
    let read_sigma = read(system, measured, barometer, &mut groups, &mut ln_p);
    carry(plant, system, measured, &mut groups, &mut ln_p);
    let known: Vec<bool> = (0..n).map(|s| ln_p[groups.of(s)].is_some()).collect();
    smooth(plant, &mut groups, &mut ln_p);
    let stream: Vec<f64> = (0..n)
        .map(|s| {
            let p = ln_p[groups.of(s)].map_or(ANYWHERE, f64::exp);
            if known[s] {
                p
            } else {
                (factor * p).clamp(7e-4, 90.0)
            }
        })
        .collect();
    let sigma = (0..n)
        .map(|s| match (read_sigma[groups.of(s)], known[s]) {
            (Some(sigma), _) => sigma.max(GIVEN * stream[s]),
            (None, true) => CARRIED * stream[s],
            (None, false) => GUESSED * stream[s],
        })
        .collect();
    Pressures {
        stream,
        known,
        sigma,
        barometer,
    }
}

/// Streams of equal pressure, as disjoint sets.
struct Groups(Vec<usize>);

impl Groups {
    fn new(n: usize) -> Self {
        Groups((0..n).collect())
    }

    fn of(&mut self, s: usize) -> usize {
        let mut root = s;
        while self.0[root] != root {
            root = self.0[root];
        }
        self.0[s] = root;
        root
    }

    fn join(&mut self, a: usize, b: usize) {
        let (a, b) = (self.of(a), self.of(b));
        // The lower index leads, so that the result does not depend on order.
        self.0[a.max(b)] = a.min(b);
    }
}

fn barometer(plant: &Plant, system: &System, measured: &[Option<Measured>]) -> f64 {
    if let Barometer::Exact(p) = plant.barometer {
        return p;
    }
    let observed = system.observations.iter().zip(measured);
    observed
        .filter(|(o, _)| o.quantity == Quantity::Barometer)
        .find_map(|(_, m)| m.map(|m| m.value))
        .filter(|p| *p > 0.0)
        .unwrap_or(STANDARD_ATMOSPHERE)
}

/// Groups take the weighted mean of their pressure readings; its sigma by
/// group, MPa.
fn read(
    system: &System,
    measured: &[Option<Measured>],
    barometer: f64,
    groups: &mut Groups,
    ln_p: &mut [Option<f64>],
) -> Vec<Option<f64>> {
    let mut sums = vec![(0.0, 0.0); ln_p.len()];
    for (observation, measured) in system.observations.iter().zip(measured) {
        let (Quantity::Pressure(s, reference), Some(m)) = (observation.quantity, measured) else {
            continue;
        };
        let p = match reference {
            PressureReference::Absolute => m.value,
            PressureReference::Gauge => barometer + m.value,
            PressureReference::Vacuum => barometer - m.value,
        };
        let weight = m.sigma.get().powi(-2);
        let sum = &mut sums[groups.of(s.0)];
        *sum = (sum.0 + weight * p, sum.1 + weight);
    }
    for (group, &(sum, weight)) in sums.iter().enumerate() {
        if weight > 0.0 {
            // A vacuum can read below nothing; the state cannot.
            ln_p[group] = Some((sum / weight).clamp(7e-4, 99.0).ln());
        }
    }
    let sigmas = sums
        .iter()
        .map(|(_, weight)| (*weight > 0.0).then(|| weight.powf(-0.5)));
    sigmas.collect()
}

/// Carries pressures over assumed drops and from saturation temperatures.
fn carry(
    plant: &Plant,
    system: &System,
    measured: &[Option<Measured>],
    groups: &mut Groups,
    ln_p: &mut [Option<f64>],
) {
    let observed: Vec<(Quantity, f64)> = system
        .observations
        .iter()
        .zip(measured)
        .filter_map(|(o, m)| m.map(|m| (o.quantity, m.value)))
        .collect();
    let condenses = |s: StreamId| {
        let to = plant.streams[s.0].to;
        to.is_some_and(|e| matches!(plant.equipment[e.0].kind, Kind::Condenser { .. }))
    };
    loop {
        let mut changed = false;
        for &(quantity, value) in &observed {
            match quantity {
                Quantity::PressureDrop(a, b) => {
                    let (a, b) = (groups.of(a.0), groups.of(b.0));
                    let (target, p) = match (ln_p[a], ln_p[b]) {
                        (Some(known), None) => (b, known.exp() - value),
                        (None, Some(known)) => (a, known.exp() + value),
                        _ => continue,
                    };
                    if p > 0.0 {
                        ln_p[target] = Some(p.ln());
                        changed = true;
                    }
                }
                Quantity::Temperature(s) if system.on_saturation[s.0].is_some() || condenses(s) => {
                    let group = groups.of(s.0);
                    if let (None, Ok(saturation)) = (ln_p[group], fluid::saturation_t(value)) {
                        ln_p[group] = Some(saturation.p.ln());
                        changed = true;
                    }
                }
                _ => {}
            }
        }
        if !changed {
            return;
        }
    }
}

/// Smooths ln p over the equipment, for groups that nothing gives.
fn smooth(plant: &Plant, groups: &mut Groups, ln_p: &mut [Option<f64>]) {
    let edges: Vec<(usize, usize, f64, f64)> = edges(plant)
        .into_iter()
        .map(|(a, b, rise, weight)| (groups.of(a.0), groups.of(b.0), rise, weight))
        .filter(|(a, b, ..)| a != b)
        .collect();
    let free: Vec<bool> = ln_p.iter().map(Option::is_none).collect();
    for _ in 0..SWEEPS {
        let mut sums = vec![(0.0, 0.0); ln_p.len()];
        for &(a, b, rise, weight) in &edges {
            if let (true, Some(known)) = (free[b], ln_p[a]) {
                sums[b] = (sums[b].0 + weight * (known + rise), sums[b].1 + weight);
            }
            if let (true, Some(known)) = (free[a], ln_p[b]) {
                sums[a] = (sums[a].0 + weight * (known - rise), sums[a].1 + weight);
            }
        }
        let mut change: f64 = 0.0;
        for (group, (sum, weight)) in sums.into_iter().enumerate() {
            if weight > 0.0 {
                let new = (sum / weight).clamp(-7.0, 4.5);
                change = change.max(ln_p[group].map_or(1.0, |old| (new - old).abs()));
                ln_p[group] = Some(new);
            }
        }
        if change < SMOOTH_ENOUGH {
            return;
        }
    }
}

/// Neighbours: (from, to, expected rise of ln p, weight). Machines that change
/// the pressure on purpose bind weakly.
fn edges(plant: &Plant) -> Vec<(StreamId, StreamId, f64, f64)> {
    let mut edges = Vec::new();
    for equipment in &plant.equipment {
        let mut all = |from: &[StreamId], to: &[StreamId], rise: f64, weight: f64| {
            for &a in from {
                edges.extend(to.iter().map(|&b| (a, b, rise, weight)));
            }
        };
        match &equipment.kind {
            Kind::Mixer { inlets, outlet } => all(inlets, &[*outlet], 0.0, 1.0),
            Kind::OpenHeater { inlets, outlet, .. } => all(inlets, &[*outlet], -0.1, 0.3),
            Kind::Valve { inlet, outlet } => all(&[*inlet], &[*outlet], -0.3, 0.02),
            Kind::Pump { inlet, outlet } => all(&[*inlet], &[*outlet], 2.0, 0.02),
            Kind::Turbine { inlets, outlets } => all(inlets, outlets, -1.0, 0.02),
            Kind::ClosedHeater {
                steam,
                drains_in,
                tube_in,
                tube_out,
                ..
            } => {
                all(&[*tube_in], &[*tube_out], 0.0, 1.0);
                all(drains_in, &[*steam], 0.0, 0.3);
            }
            Kind::Condenser {
                steam,
                condensate,
                cooling,
                ..
            } => {
                all(steam, &[*condensate], 0.0, 0.3);
                if let Some((into, out)) = cooling {
                    all(&[*into], &[*out], -0.1, 1.0);
                }
            }
            Kind::Exchanger { hot, cold } => {
                for (into, out) in [hot, cold].into_iter().flatten() {
                    all(&[*into], &[*out], 0.0, 1.0);
                }
            }
            Kind::Boiler {
                water_in,
                water_out,
                reheats,
            } => {
                all(water_in, water_out, -0.1, 0.5);
                for (inlets, outlet) in reheats {
                    all(inlets, &[*outlet], -0.1, 0.5);
                }
            }
            Kind::Splitter { .. }
            | Kind::Header { .. }
            | Kind::Generator { .. }
            | Kind::Shaft { .. }
            | Kind::Motor { .. } => {}
        }
    }
    edges
}
