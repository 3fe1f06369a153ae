//! Finding the solution of one batch: start, solve, and the other side of the
//! saturation line where the first may be a false minimum.

use super::compiled::Compiled;
use super::phases::{self, Intervals};
use crate::equations::{Case, Measured, Modes, Relation, Role, Start, start};
use crate::plant::{Sigma, StreamId};
use crate::solver::{Evaluation, Hold, Options, Outcome, Problem, Reason, Status, solve};

/// Steps in which the start is held, one attempt after another.
const HELD_STEPS: [usize; 4] = [2, 6, 0, 40];

/// Factors on pressures that the start only guesses, one attempt after another.
const PRESSURE_FACTORS: [f64; 3] = [1.0, 8.0, 0.125];

/// Factor on the sigma of a normal reading that stands in for a missing one.
const LOOSE: f64 = 10.0;
/// Standard deviations above the mean that an objective is not believed at.
const INCREDIBLE: f64 = 5.0;
/// Objectives this near, as a part, are of one point.
const SAME: f64 = 1e-6;

/// A converged solution.
pub struct Found<'a> {
    /// The problem.
    pub case: Case<'a>,
    /// Its solution.
    pub outcome: Outcome,
    /// Streams whose phase the readings leave open.
    pub open: Vec<StreamId>,
}

impl<'a> Found<'a> {
    /// No solution, but a point at which rank can be told.
    pub fn unsolved(compiled: &'a Compiled, measured: Vec<Option<Measured>>, x: &[f64]) -> Self {
        let system = compiled.system();
        let modes = Modes::none(system.layout.streams());
        let case = Case::new(system, measured, modes, x);
        let mut evaluation = Evaluation::for_structure(&system.structure);
        // Outside the range of the properties the rows stay zero: nothing is known.
        if case.evaluate(x, &mut evaluation).is_err() {
            evaluation = Evaluation::for_structure(&system.structure);
        }
        let outcome = Outcome {
            status: Status::NotConverged(Reason::Stalled),
            x: x.to_vec(),
            multipliers: vec![0.0; system.relations.len()],
            objective: 0.0,
            evaluation,
            active_bounds: vec![false; system.structure.bounds.len()],
            iterations: 0,
            factorisations: 0,
            worst_relation: None,
            worst_residual_scaled: 0.0,
        };
        Found {
            case,
            outcome,
            open: Vec::new(),
        }
    }
}

/// Solves a batch.
///
/// # Errors
/// The reason in words, where no attempt converges.
pub fn attempt<'a>(
    compiled: &'a Compiled,
    measured: &[Option<Measured>],
) -> Result<Found<'a>, String> {
    let believable = believable(compiled, measured);
    let guide = guide(compiled, measured);
    let mut best: Option<Found> = None;
    let mut first_reason = None;
    for factor in PRESSURE_FACTORS {
        let start = start(compiled.plant(), compiled.system(), &guide, factor);
        for held in HELD_STEPS {
            match attempt_from(compiled, measured, &start, held) {
                Ok(found) if found.outcome.objective <= believable => return Ok(found),
                Ok(found) => {
                    let objective = found.outcome.objective;
                    let known = best.as_ref().map(|best| best.outcome.objective);
                    // Another start that ends at the same point: a reading is
                    // grossly wrong, and the point is right.
                    if known.is_some_and(|known| (objective - known).abs() < SAME * known) {
                        return Ok(found);
                    }
                    if known.is_none_or(|known| objective < known) {
                        best = Some(found);
                    }
                }
                Err(reason) => {
                    first_reason.get_or_insert(reason);
                }
            }
        }
        if !start.guesses_pressures {
            break;
        }
    }
    best.ok_or_else(|| first_reason.unwrap_or_default())
}

/// What the start goes by: the readings and, for tags that have none, their
/// normal reading where the plant file states one, loosely. The solution does
/// not see it.
fn guide(compiled: &Compiled, measured: &[Option<Measured>]) -> Vec<Option<Measured>> {
    let mut guide = measured.to_vec();
    for (slot, tag) in guide.iter_mut().zip(&compiled.plant().tags) {
        if slot.is_none()
            && let Some(normal) = tag.normal
            && let Some(sigma) = tag.uncertainty.sigma(normal)
        {
            let sigma = LOOSE * tag.unit.difference_to_internal(sigma.get());
            let value = tag.unit.to_internal(normal);
            *slot = Sigma::new(sigma).map(|sigma| Measured { value, sigma });
        }
    }
    guide
}

/// The largest objective that is believed at once: far above what chi-square
/// gives by chance. Beyond it either a reading is grossly wrong or the solution
/// is a false minimum, and other starts are tried before the first is believed.
/// Never more degrees of freedom than observations and relations beyond the
/// states, unobservable directions aside.
fn believable(compiled: &Compiled, measured: &[Option<Measured>]) -> f64 {
    let structure = &compiled.system().structure;
    let used = measured.iter().flatten().count();
    let relations = structure.relations.len() - structure.bounds.len();
    let degrees = (used + relations).saturating_sub(structure.states).max(1) as f64;
    degrees + INCREDIBLE * (2.0 * degrees).sqrt() + INCREDIBLE.powi(2)
}

fn attempt_from<'a>(
    compiled: &'a Compiled,
    measured: &[Option<Measured>],
    start: &Start,
    held: usize,
) -> Result<Found<'a>, String> {
    let system = compiled.system();
    let plain = Modes::none(system.layout.streams());
    let plain = Case::new(system, measured.to_vec(), plain, &start.x);
    let doubts = Intervals::of(&plain, &start.x);
    let case = phases::sided(&plain, &doubts, &start.x);
    let try_from = |case: &Case<'a>, x: &[f64]| {
        solve(case, compiled.symbolic(), x, &options(case, start, held))
    };
    let outcome = try_from(&case, &start.x);
    let reason = match outcome.status {
        Status::Converged => return Ok(phases::settle(compiled, case, outcome)),
        Status::NotConverged(why) => in_words(compiled, &outcome, why),
    };
    // The side that the readings show may be the wrong one.
    let mut best: Option<(Case, Outcome)> = None;
    for chain in &doubts {
        let shown = chain.at(system, &start.x);
        for n in chain.all().filter(|&n| n != shown && chain.allows(n)) {
            let mut modes = case.modes().clone();
            chain.put(n, &mut modes);
            let case = case.with_modes(modes);
            let outcome = try_from(&case, &chain.start(system, n, &start.x));
            let lower = |(_, best): &(_, Outcome)| outcome.objective < best.objective;
            if outcome.status == Status::Converged && best.as_ref().is_none_or(lower) {
                best = Some((case, outcome));
            }
        }
    }
    if let Some((case, outcome)) = best {
        return Ok(phases::settle(compiled, case, outcome));
    }
    Err(reason)
}

fn options(case: &Case, start: &Start, steps: usize) -> Options {
    let hold = (steps > 0).then(|| Hold {
        weights: start.hold(case.state_scale()),
        steps,
    });
    Options {
        hold,
        ..Options::default()
    }
}

fn in_words(compiled: &Compiled, outcome: &Outcome, why: Reason) -> String {
    let state = |j: usize| {
        let stream = compiled.system().layout.stream_of(j);
        stream.map_or_else(String::new, |s| {
            format!(" of stream {}", compiled.plant().streams[s.0].name)
        })
    };
    let cause = match why {
        Reason::IterationLimit => "the steps allowed were used up".to_owned(),
        Reason::Stalled => "no step improves the solution".to_owned(),
        Reason::OutsideDomain { state: j } => {
            format!("the properties{} leave their range", state(j))
        }
        Reason::Singular => "the equations have no usable solution".to_owned(),
        Reason::BoundsCycle => "no set of active bounds agrees with itself".to_owned(),
    };
    match outcome.worst_relation {
        Some(k) if outcome.worst_residual_scaled > Options::default().tolerance_relation => {
            let relation = &compiled.system().relations[k];
            format!(
                "{cause}; furthest from balance is {}",
                name(compiled, relation)
            )
        }
        _ => cause,
    }
}

/// A relation's name for people.
fn name(compiled: &Compiled, relation: &Relation) -> String {
    let what = match &relation.role {
        Role::Mass { side } => format!("the mass balance ({side})"),
        Role::Energy => "the energy balance".to_owned(),
        Role::Condition(what) | Role::Bound(what) => format!("the condition \"{what}\""),
        Role::SideOfSaturation => "a side of the saturation line".to_owned(),
    };
    match relation.of {
        Some(e) => format!("{what} of {}", compiled.plant().equipment[e.0].name),
        None => what,
    }
}
