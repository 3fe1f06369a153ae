//! Trying the other side of the saturation line.
//!
//! T(p, h) of wet steam does not depend on h, so a stream that starts on the
//! wrong side can converge to a false minimum with perfect residuals. Where a
//! temperature lies within 4 sigma of saturation, or a wet stream's temperature
//! disagrees, the batch is solved again from the other side, and the lower
//! objective is kept. Where the two do not differ significantly (chi-square with
//! one degree of freedom) the phase is open.

use super::compiled::Compiled;
use crate::equations::{Case, Law, Measured, Role, System};
use crate::plant::{Quantity, StreamId};
use crate::solver::{Options, Outcome, Status, solve};

/// A temperature this near saturation, in sigma, does not tell the side.
const NEAR: f64 = 4.0;
/// A wet stream's temperature adjustment that is suspicious, in sigma. Lower
/// than any critical value: a needless second solve costs time only.
const SUSPICIOUS: f64 = 2.0;
/// Chi-square with one degree of freedom at 95 %.
const SIGNIFICANT: f64 = 3.841_459;
/// Improvement of the objective that is more than rounding.
const LOWER: f64 = 1e-7;

/// The best of the solutions on either side, and the streams whose phase is open.
pub fn settle(compiled: &Compiled, case: &Case, first: Outcome) -> (Outcome, Vec<StreamId>) {
    let system = compiled.system();
    let mut best = first;
    let mut open = Vec::new();
    for (i, observation) in system.observations.iter().enumerate() {
        let (Quantity::Temperature(s), Some(measured)) =
            (observation.quantity, case.measured()[i])
        else {
            continue;
        };
        let Some(start) = other_side(system, s, measured, &best, i) else {
            continue;
        };
        let other = solve(case, compiled.symbolic(), &start, &Options::default());
        if other.status != Status::Converged || !apart(system, s, &best.x, &other.x) {
            continue;
        }
        let difference = other.objective - best.objective;
        if difference.abs() < SIGNIFICANT {
            open.push(s);
        }
        if difference < -LOWER {
            best = other;
        }
    }
    open.dedup();
    (best, open)
}

/// The solution moved to the other side of the saturation line for `s` and all
/// streams of equal enthalpy; `None` where there is no need to try.
fn other_side(
    system: &System,
    s: StreamId,
    measured: Measured,
    best: &Outcome,
    observation: usize,
) -> Option<Vec<f64>> {
    if system.on_saturation[s.0].is_some() {
        return None;
    }
    let state = system.state(s, &best.x).ok()?;
    let (liquid, vapour) = system.saturated_enthalpies(s, &best.x)?;
    let sigma = measured.sigma.get();
    let saturation_temperature = system.saturation_temperature(s, &best.x)?;
    let near = (measured.value - saturation_temperature).abs() < NEAR * sigma;
    let wet = state.h > liquid && state.h < vapour;
    let suspicious = wet && best.evaluation.r[observation].abs() > SUSPICIOUS;
    if !(near || suspicious) {
        return None;
    }
    let latent = vapour - liquid;
    let beyond = (measured.value - saturation_temperature).abs().max(sigma);
    let h = if !wet {
        // Into the wet region from the side that it is on.
        if state.h >= vapour { vapour - 0.02 * latent } else { liquid + 0.02 * latent }
    } else if state.h > 0.5 * (liquid + vapour) {
        vapour + 2.5 * beyond
    } else {
        liquid - 4.3 * beyond
    };
    let mut start = best.x.clone();
    for stream in equal_enthalpy(system, s) {
        start[system.layout.h(stream)] = h;
    }
    Some(start)
}

/// True where the two solutions have the stream on different sides.
fn apart(system: &System, s: StreamId, a: &[f64], b: &[f64]) -> bool {
    match (system.state(s, a), system.state(s, b)) {
        (Ok(a), Ok(b)) => a.phase != b.phase,
        _ => false,
    }
}

/// `s` and every stream that relations hold at its enthalpy.
fn equal_enthalpy(system: &System, s: StreamId) -> Vec<StreamId> {
    let mut members = vec![s];
    let mut next = 0;
    while next < members.len() {
        let h = system.layout.h(members[next]);
        next += 1;
        for relation in &system.relations {
            let (Role::Condition("equal enthalpy"), Law::Linear(terms)) =
                (&relation.role, &relation.law)
            else {
                continue;
            };
            if terms.iter().any(|&(j, _)| j == h) {
                for stream in terms.iter().filter_map(|&(j, _)| system.layout.stream_of(j)) {
                    if !members.contains(&stream) {
                        members.push(stream);
                    }
                }
            }
        }
    }
    members
}
