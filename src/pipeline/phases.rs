//! Choosing the side of the saturation line.
//!
//! T(p, h) of wet steam does not depend on h, so a stream on the wrong side can
//! hold a false minimum with perfect residuals. A stream whose temperature lies
//! within 4 sigma of saturation is therefore solved on one side at a time
//! ([`Mode`]), beginning with the side that the readings show; where it is near
//! at the solution, or wet with a temperature that disagrees, the other side is
//! solved too and the lower objective kept. Where the two do not differ
//! significantly (chi-square with one degree of freedom at 95 %) the phase is
//! open.
//!
//! Streams of one enthalpy (valves, splitters) change sides together. The
//! saturation enthalpies of a chain's doubtful members cut the h axis into
//! intervals ([`Intervals`]), and in each of them every member has one mode.

use super::attempt::Found;
use super::compiled::Compiled;
use crate::equations::{Case, Law, Measured, Mode, Modes, Role, System};
use crate::plant::{Quantity, StreamId};
use crate::solver::{Options, Outcome, Problem, Status, solve};

/// A temperature this near saturation, in sigma, does not tell the side.
const NEAR: f64 = 4.0;
/// A temperature adjustment that is suspicious, in sigma. Lower
/// than any critical value: a needless second solve costs time only.
const SUSPICIOUS: f64 = 2.0;
/// Chi-square with one degree of freedom at 95 %, whatever the plant's
/// confidence is: the design's rule for an open phase.
const SIGNIFICANT: f64 = 3.841_459;
/// Improvement of the objective that is more than rounding.
const LOWER: f64 = 1e-7;
/// Last step of a coarse solve, in sigma: the objective is then right to about
/// its square.
const COARSE: f64 = 1e-2;
/// Steps of a coarse solve: one that starts next door needs few.
const COARSE_STEPS: usize = 30;
/// Enthalpy that no wet steam reaches, kJ/kg: IF97 has 2803.3 at 3 MPa at most.
const NEVER_WET: f64 = 2804.0;
/// Superheat that no error of pressure makes up for, K.
const FAR: f64 = 40.0;
/// Saturation enthalpies this close are of one pressure, kJ/kg.
const SAME: f64 = 1e-3;
/// How far a stream starts on the other side, kJ/kg.
const ACROSS: f64 = 5.0;

/// Where the enthalpy of a chain of streams can lie: between neighbouring
/// saturation enthalpies of its doubtful members.
pub struct Intervals {
    members: Vec<StreamId>,
    /// (saturated liquid, saturated vapour) of each doubtful member, kJ/kg.
    doubtful: Vec<(StreamId, f64, f64)>,
    /// Ends of the intervals, ascending; the first and last are open.
    cuts: Vec<f64>,
    /// Enthalpies that the members whose side is plain leave open.
    allowed: (f64, f64),
}

impl Intervals {
    /// The chains that have a doubtful member at `x`.
    pub fn of(case: &Case, x: &[f64]) -> Vec<Intervals> {
        let chains = case.system().chains.iter();
        chains
            .filter_map(|chain| Self::of_chain(case, x, chain))
            .collect()
    }

    fn of_chain(case: &Case, x: &[f64], chain: &[StreamId]) -> Option<Intervals> {
        let system = case.system();
        let mut intervals = Intervals {
            members: chain.to_vec(),
            doubtful: Vec::new(),
            cuts: Vec::new(),
            allowed: (f64::NEG_INFINITY, f64::INFINITY),
        };
        // A relation holds the whole chain at one enthalpy: nothing to choose.
        if chain.iter().any(|s| system.on_saturation[s.0].is_some()) {
            return None;
        }
        for &(s, measured) in &thermometers(case, chain) {
            let liquid_only = system.always_liquid[s.0];
            let plain = !liquid_only && !may_be_near(case, s, measured, x);
            let Some(at) = system.saturation(s, x).filter(|_| !plain) else {
                continue;
            };
            let h = x[system.layout.h(s)];
            let (liquid, vapour) = (at.liquid.h, at.vapour.h);
            let near = measured.is_some_and(|m| near(case, s, m, at.t, at.t_p));
            if measured.is_none() || (liquid_only && (near || h > liquid)) {
                // Subcooling is stated of liquid, and a drain is nothing else.
                intervals.doubtful.push((s, liquid, vapour));
                intervals.allowed.1 = intervals.allowed.1.min(liquid);
            } else if near || (h > liquid && h < vapour) {
                intervals.doubtful.push((s, liquid, vapour));
            } else if h <= liquid {
                intervals.allowed.1 = intervals.allowed.1.min(liquid);
            } else {
                intervals.allowed.0 = intervals.allowed.0.max(vapour);
            }
        }
        let ends = intervals
            .doubtful
            .iter()
            .flat_map(|&(_, liquid, vapour)| [liquid, vapour]);
        intervals.cuts = ends.collect();
        intervals.cuts.sort_by(f64::total_cmp);
        intervals.cuts.dedup_by(|a, b| (*a - *b).abs() < SAME);
        (!intervals.doubtful.is_empty()).then_some(intervals)
    }

    /// Number of the interval that `x` has the chain in.
    pub fn at(&self, system: &System, x: &[f64]) -> usize {
        let h = x[system.layout.h(self.members[0])];
        // Readings can contradict each other: then the upper end holds.
        let allowed = h.max(self.allowed.0).min(self.allowed.1);
        // On the upper end of what is allowed it belongs below.
        self.cuts.iter().filter(|&&cut| cut < allowed).count()
    }

    /// Numbers of all intervals.
    pub fn all(&self) -> std::ops::RangeInclusive<usize> {
        0..=self.cuts.len()
    }

    /// Whether the members whose side is plain can be in interval `n`.
    pub fn allows(&self, n: usize) -> bool {
        let (low, high) = self.ends(n);
        low < self.allowed.1 && high > self.allowed.0
    }

    /// Whether interval `next` may fit better than `current`. Of one saturation
    /// pressure it is the nearer neighbour: wet steam does not become liquid for
    /// a temperature near saturation. Of several (a valve) it is any, since the
    /// way from one that fits to another can lead through one that does not.
    fn is_worth(&self, system: &System, current: usize, next: usize, x: &[f64]) -> bool {
        if self.cuts.len() > 2 {
            return true;
        }
        let (low, high) = self.ends(current);
        let h = x[system.layout.h(self.members[0])];
        let (below, above) = (h - low, high - h);
        (next + 1 == current && below <= above) || (next == current + 1 && above <= below)
    }

    /// Puts the modes of interval `n` on its doubtful members.
    pub fn put(&self, n: usize, modes: &mut Modes) {
        let (low, high) = self.ends(n);
        for &(s, liquid, vapour) in &self.doubtful {
            let mode = if high <= liquid {
                Mode::Liquid
            } else if low >= vapour {
                Mode::Vapour
            } else {
                Mode::Wet
            };
            modes.set(s, mode);
        }
    }

    /// `x` with the chain in interval `n`, near the end that it comes from.
    pub fn start(&self, system: &System, n: usize, x: &[f64]) -> Vec<f64> {
        let (low, high) = self.ends(n);
        let across = ACROSS.min(0.5 * (high - low));
        let from = x[system.layout.h(self.members[0])];
        let h = if from <= low {
            low + across
        } else {
            high - across
        };
        let mut start = x.to_vec();
        for &s in &self.members {
            start[system.layout.h(s)] = h;
        }
        start
    }

    fn ends(&self, n: usize) -> (f64, f64) {
        let low = n
            .checked_sub(1)
            .map_or(f64::NEG_INFINITY, |below| self.cuts[below]);
        let high = self.cuts.get(n).copied().unwrap_or(f64::INFINITY);
        (low, high)
    }
}

/// Streams of a chain with a temperature (and what it reads) or a subcooling in
/// use.
fn thermometers(case: &Case, chain: &[StreamId]) -> Vec<(StreamId, Option<Measured>)> {
    let observations = case.system().observations.iter().zip(case.measured());
    observations
        .filter_map(
            |(observation, measured)| match (observation.quantity, measured) {
                (Quantity::Temperature(s), Some(measured)) => Some((s, Some(*measured))),
                (Quantity::Subcooling(s), Some(_)) => Some((s, None)),
                _ => None,
            },
        )
        .filter(|(s, _)| chain.contains(s))
        .collect()
}

/// Whether a temperature is so near saturation that it does not tell the side:
/// the pressure that saturation is taken at is uncertain too.
fn near(case: &Case, s: StreamId, measured: Measured, saturated: f64, slope: f64) -> bool {
    let pressure = case.state_scale()[case.system().layout.p(s)];
    let sigma = measured.sigma.get().hypot(slope * pressure);
    (measured.value - saturated).abs() < NEAR * sigma
}

/// Whether it pays to work out the saturated states: not for steam that is
/// plainly superheated.
fn may_be_near(case: &Case, s: StreamId, measured: Option<Measured>, x: &[f64]) -> bool {
    let system = case.system();
    let saturated = system.saturation_temperature(s, x).unwrap_or(f64::INFINITY);
    let far = |m: Measured| m.value - saturated > FAR.max(2.0 * NEAR * m.sigma.get());
    x[system.layout.h(s)] < NEVER_WET || !measured.is_some_and(far)
}

/// The case with every doubtful stream on the side that `x` has it on; no others
/// are held to a side.
pub fn sided<'a>(plain: &Case<'a>, doubts: &[Intervals], x: &[f64]) -> Case<'a> {
    let system = plain.system();
    let mut modes = Modes::none(system.layout.streams());
    for chain in doubts {
        chain.put(chain.at(system, x), &mut modes);
    }
    plain.with_modes(modes)
}

/// The best of the solutions on either side.
pub fn settle<'a>(compiled: &Compiled, mut case: Case<'a>, mut best: Outcome) -> Found<'a> {
    let system = compiled.system();
    let mut open = Vec::new();
    for intervals in Intervals::of(&case, &best.x) {
        let mut current = intervals.at(system, &best.x);
        let mut modes = case.modes().clone();
        intervals.put(current, &mut modes);
        case = case.with_modes(modes);
        let mut tried = vec![current];
        let mut fits_too = Vec::new();
        while worth_trying(&case, &intervals, &best) {
            let next = intervals.all().find(|&n| {
                let open = !tried.contains(&n) && intervals.allows(n);
                open && intervals.is_worth(system, current, n, &best.x)
            });
            let Some(next) = next else {
                break;
            };
            tried.push(next);
            let mut modes = case.modes().clone();
            intervals.put(next, &mut modes);
            let other_case = case.with_modes(modes);
            let start = intervals.start(system, next, &best.x);
            let Some(other) = explore(compiled, &other_case, &start, best.objective) else {
                continue;
            };
            let difference = other.objective - best.objective;
            let apart =
                !on_the_line(system, &intervals, &best) && !on_the_line(system, &intervals, &other);
            if difference < -SIGNIFICANT {
                fits_too.clear();
            } else if apart {
                let differs = |s: &StreamId| case.modes().get(*s) != other_case.modes().get(*s);
                let members = intervals.doubtful.iter().map(|&(s, ..)| s);
                fits_too.extend(members.filter(differs));
            }
            if difference < -LOWER {
                (best, case, current) = (other, other_case, next);
            }
        }
        open.extend(fits_too);
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
        max_iterations: COARSE_STEPS,
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

/// Whether another side may fit better: a temperature is near saturation, the
/// chain is held at the line, or a wet member's temperature disagrees.
fn worth_trying(case: &Case, intervals: &Intervals, best: &Outcome) -> bool {
    let system = case.system();
    let disagrees = |(i, measured): (usize, &Option<Measured>)| {
        let Quantity::Temperature(s) = system.observations[i].quantity else {
            return false;
        };
        let (Some(measured), Some(mode)) = (*measured, case.modes().get(s)) else {
            return false;
        };
        let at = system.saturation(s, &best.x);
        let near = || at.is_some_and(|at| near(case, s, measured, at.t, at.t_p));
        let suspicious = mode == Mode::Wet && best.evaluation.r[i].abs() > SUSPICIOUS;
        intervals.members.contains(&s) && (suspicious || near())
    };
    on_the_line(system, intervals, best) || case.measured().iter().enumerate().any(disagrees)
}

/// Whether a bound holds a member of the chain at the saturation line.
fn on_the_line(system: &System, intervals: &Intervals, outcome: &Outcome) -> bool {
    let bounds = system.structure.bounds.iter().zip(&outcome.active_bounds);
    bounds.filter(|(_, active)| **active).any(|(&k, _)| {
        let relation = &system.relations[k];
        let of_chain = matches!(&relation.law,
            Law::Saturated { stream, .. } if intervals.members.contains(stream));
        relation.role == Role::SideOfSaturation && of_chain
    })
}
