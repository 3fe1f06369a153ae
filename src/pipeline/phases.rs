//! Choosing the side of the saturation line.
//!
//! T(p, h) of wet steam does not depend on h, so a stream on the wrong side can
//! hold a false minimum with perfect residuals. A stream whose temperature lies
//! within 4 sigma of saturation is therefore solved on one side at a time
//! ([`Mode`]), beginning with the side that the readings show; where it is near
//! at the solution, or wet with a temperature that disagrees, the other side is
//! solved too and the lower objective kept. Where the two do not differ
//! significantly (chi-square with one degree of freedom) the phase is open.

use super::attempt::Found;
use super::compiled::Compiled;
use crate::equations::{Case, Law, Measured, Mode, Modes, Role, System};
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
/// Last step of a coarse solve, in sigma: the objective is then right to about
/// its square.
const COARSE: f64 = 1e-2;
/// Enthalpy that no wet steam reaches, kJ/kg: IF97 has 2803.3 at 3 MPa at most.
const NEVER_WET: f64 = 2804.0;
/// How far a stream starts on the other side, kJ/kg.
const ACROSS: f64 = 5.0;

/// Gives a mode to every stream whose temperature does not tell its side at
/// `x`: the side that `x` has it on.
pub fn doubtful(case: &Case, x: &[f64], modes: &mut Modes) {
    let system = case.system();
    for (i, observation) in system.observations.iter().enumerate() {
        if let (Quantity::Temperature(s), Some(measured)) =
            (observation.quantity, case.measured()[i])
            && system.on_saturation[s.0].is_none()
            && modes.get(s).is_none()
            && may_be_near(system, s, measured, x)
            && let Some(saturation) = system.saturation(s, x)
        {
            let h = x[system.layout.h(s)];
            let mode = mode_at(h, saturation.liquid.h, saturation.vapour.h);
            let near = (measured.value - saturation.t).abs() < NEAR * measured.sigma.get();
            if near || mode == Mode::Wet {
                modes.set(s, mode);
            }
        }
    }
}

/// Whether it pays to work out the saturated states: not for steam that is
/// plainly superheated.
fn may_be_near(system: &System, s: StreamId, measured: Measured, x: &[f64]) -> bool {
    let saturated = system.saturation_temperature(s, x).unwrap_or(f64::INFINITY);
    x[system.layout.h(s)] < NEVER_WET
        || (measured.value - saturated).abs() < NEAR * measured.sigma.get()
}

fn mode_at(h: f64, liquid: f64, vapour: f64) -> Mode {
    if h <= liquid {
        Mode::Liquid
    } else if h >= vapour {
        Mode::Vapour
    } else {
        Mode::Wet
    }
}

/// The best of the solutions on either side.
pub fn settle<'a>(compiled: &Compiled, mut case: Case<'a>, mut best: Outcome) -> Found<'a> {
    let system = compiled.system();
    let mut modes = case.modes().clone();
    doubtful(&case, &best.x, &mut modes);
    case = case.with_modes(modes);
    let mut open = Vec::new();
    let mut settled: Vec<StreamId> = Vec::new();
    for (i, observation) in system.observations.iter().enumerate() {
        let Quantity::Temperature(s) = observation.quantity else {
            continue;
        };
        if settled.contains(&s) || !worth_trying(&case, s, i, &best) {
            continue;
        }
        let together = equal_state(system, s);
        let Some((other_case, start)) = other_side(&case, &together, s, &best) else {
            continue;
        };
        settled.extend(together);
        let Some(other) = explore(compiled, &other_case, &start, best.objective) else {
            continue;
        };
        let difference = other.objective - best.objective;
        let apart = !on_the_line(system, s, &best) && !on_the_line(system, s, &other);
        if difference.abs() < SIGNIFICANT && apart {
            open.push(s);
        }
        if difference < -LOWER {
            best = other;
            case = other_case;
        }
    }
    Found {
        case: case.rescaled(&best.x),
        outcome: best,
        open,
    }
}

/// The solution of the other side where it is not significantly worse. A coarse
/// solve tells; only one that is worth it is carried to the end.
fn explore(
    compiled: &Compiled,
    case: &Case,
    start: &[f64],
    best_objective: f64,
) -> Option<Outcome> {
    let coarse = Options {
        tolerance_step: COARSE,
        ..Options::default()
    };
    let converged = |start: &[f64], options: &Options| {
        let outcome = solve(case, compiled.symbolic(), start, options);
        (outcome.status == Status::Converged).then_some(outcome)
    };
    let first = converged(start, &coarse)?;
    if first.objective > best_objective + SIGNIFICANT {
        return None;
    }
    converged(&first.x, &Options::default())
}

/// Whether the other side may fit better: the temperature is near saturation,
/// the stream is held at the line, or it is wet and its temperature disagrees.
fn worth_trying(case: &Case, s: StreamId, observation: usize, best: &Outcome) -> bool {
    let system = case.system();
    let (Some(mode), Some(measured), Some(saturation)) = (
        case.modes().get(s),
        case.measured()[observation],
        system.saturation(s, &best.x),
    ) else {
        return false;
    };
    let near = (measured.value - saturation.t).abs() < NEAR * measured.sigma.get();
    let disagrees = best.evaluation.r[observation].abs() > SUSPICIOUS;
    near || on_the_line(system, s, best) || (mode == Mode::Wet && disagrees)
}

/// The problem with `together` on the other side of the line that `s` is
/// nearest to, and a start there.
fn other_side<'a>(
    case: &Case<'a>,
    together: &[StreamId],
    s: StreamId,
    best: &Outcome,
) -> Option<(Case<'a>, Vec<f64>)> {
    let system = case.system();
    let saturation = system.saturation(s, &best.x)?;
    let (liquid, vapour) = (saturation.liquid.h, saturation.vapour.h);
    let h = best.x[system.layout.h(s)];
    let nearer_vapour = h > 0.5 * (liquid + vapour);
    let (mode, h) = match (case.modes().get(s)?, nearer_vapour) {
        (Mode::Wet, true) => (Mode::Vapour, vapour + ACROSS),
        (Mode::Wet, false) => (Mode::Liquid, liquid - ACROSS),
        (Mode::Vapour, _) => (Mode::Wet, vapour - ACROSS),
        (Mode::Liquid, _) => (Mode::Wet, liquid + ACROSS),
    };
    let mut modes = case.modes().clone();
    let mut start = best.x.clone();
    for &stream in together {
        if modes.get(stream).is_some() {
            modes.set(stream, mode);
        }
        start[system.layout.h(stream)] = h;
    }
    Some((case.with_modes(modes), start))
}

/// Whether a bound holds the stream at the saturation line.
fn on_the_line(system: &System, s: StreamId, outcome: &Outcome) -> bool {
    let bounds = system.structure.bounds.iter().zip(&outcome.active_bounds);
    bounds.filter(|(_, active)| **active).any(|(&k, _)| {
        let relation = &system.relations[k];
        let of_stream = matches!(&relation.law, Law::Saturated { stream, .. } if *stream == s);
        relation.role == Role::SideOfSaturation && of_stream
    })
}

/// `s` and every stream that relations hold at its pressure and enthalpy, as
/// those of a splitter or of a well-mixed header are.
fn equal_state(system: &System, s: StreamId) -> Vec<StreamId> {
    let mut members = vec![s];
    let mut next = 0;
    while next < members.len() {
        let of = members[next];
        next += 1;
        let by_enthalpy = partners(system, "equal enthalpy", system.layout.h(of));
        let by_pressure = partners(system, "equal pressure", system.layout.p(of));
        for stream in by_enthalpy {
            if by_pressure.contains(&stream) && !members.contains(&stream) {
                members.push(stream);
            }
        }
    }
    members
}

/// Streams that share a condition on state `j`.
fn partners(system: &System, condition: &'static str, j: usize) -> Vec<StreamId> {
    let relations = system.relations.iter();
    relations
        .filter(|relation| relation.role == Role::Condition(condition))
        .filter(|relation| relation.row.contains(&j))
        .flat_map(|relation| &relation.row)
        .filter_map(|&state| system.layout.stream_of(state))
        .collect()
}
