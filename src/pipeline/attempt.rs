//! Finding the solution of one batch: start, solve, and the other side of the
//! saturation line where the first may be a false minimum.

use super::compiled::Compiled;
use super::phases;
use crate::equations::{Case, Measured, Modes, Relation, Role, Start, start};
use crate::plant::StreamId;
use crate::solver::{Hold, Options, Outcome, Problem, Reason, Status, solve};

/// Steps in which the start is held, one attempt after another.
const HELD_STEPS: [usize; 3] = [2, 6, 0];

/// A converged solution.
pub struct Found<'a> {
    /// The problem.
    pub case: Case<'a>,
    /// Its solution.
    pub outcome: Outcome,
    /// Streams whose phase the readings leave open.
    pub open: Vec<StreamId>,
}

/// Solves a batch.
///
/// # Errors
/// The reason in words, where no attempt converges.
pub fn attempt<'a>(
    compiled: &'a Compiled,
    measured: &[Option<Measured>],
) -> Result<Found<'a>, String> {
    let system = compiled.system();
    let start = start(compiled.plant(), system, measured);
    let plain = Modes::none(system.layout.streams());
    let plain = Case::new(system, measured.to_vec(), plain, &start.x);
    let mut modes = plain.modes().clone();
    phases::doubtful(&plain, &start.x, &mut modes);
    let case = plain.with_modes(modes);
    let mut reason = String::new();
    for held in HELD_STEPS {
        let outcome = solve(
            &case,
            compiled.symbolic(),
            &start.x,
            &options(&case, &start, held),
        );
        match outcome.status {
            Status::Converged => return Ok(phases::settle(compiled, case, outcome)),
            Status::NotConverged(why) if reason.is_empty() => {
                reason = in_words(compiled, &outcome, why);
            }
            Status::NotConverged(_) => {}
        }
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
