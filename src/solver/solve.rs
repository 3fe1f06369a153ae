//! The whole solve: Gauss-Newton runs inside an active-set loop over the bounds.
//!
//! A bound f >= 0 that the solution violates becomes an equation; one that is
//! an equation and whose multiplier of L = 1/2 sum r^2 + l f is positive pulls
//! the wrong way and is let go. All at once at first, then, so that no set of
//! bounds comes back for ever, one at a time with the lowest number first
//! (Bland's rule).

use super::gauss_newton::Run;
use super::outcome::{Options, Outcome, Reason, Status};
use super::problem::{Problem, Structure};
use super::symbolic::Symbolic;

/// Rounds in which all bounds change at once.
const FREE_ROUNDS: usize = 8;
/// Rounds in all, per bound and on top.
const ROUNDS: usize = 20;

/// Solves `problem` from `start`.
///
/// Never fails: where no solution was found the status says why, and the
/// outcome holds the last point reached.
pub fn solve<P: Problem + ?Sized>(
    problem: &P,
    symbolic: &Symbolic,
    start: &[f64],
    options: &Options,
) -> Outcome {
    let structure = problem.structure();
    let (mut run, first) = Run::new(problem, symbolic, start, options);
    let status = match first {
        Err(outside) => Status::NotConverged(Reason::OutsideDomain {
            state: outside.state,
        }),
        Ok(()) => with_bounds(&mut run, problem, options),
    };
    outcome(run, status, structure, problem.relation_scale())
}

fn with_bounds<P: Problem + ?Sized>(run: &mut Run<P>, problem: &P, options: &Options) -> Status {
    let bounds = &problem.structure().bounds;
    let scale = problem.relation_scale();
    for round in 0..ROUNDS + 2 * bounds.len() {
        let status = run.descend();
        if status != Status::Converged {
            return status;
        }
        let wrong = bounds.iter().copied().filter(|&k| {
            if run.in_use[k] {
                run.multipliers[k] > 1e-9 / scale[k]
            } else {
                run.evaluation.f[k] < -options.tolerance_relation * scale[k]
            }
        });
        let change: Vec<usize> = wrong
            .take(if round < FREE_ROUNDS { usize::MAX } else { 1 })
            .collect();
        if change.is_empty() {
            return Status::Converged;
        }
        for k in change {
            run.in_use[k] = !run.in_use[k];
            run.multipliers[k] = 0.0;
        }
    }
    Status::NotConverged(Reason::BoundsCycle)
}

fn outcome<P: Problem + ?Sized>(
    run: Run<P>,
    status: Status,
    structure: &Structure,
    relation_scale: &[f64],
) -> Outcome {
    let worst = (0..structure.relations.len())
        .filter(|&k| run.in_use[k])
        .map(|k| (k, run.evaluation.f[k].abs() / relation_scale[k]))
        .max_by(|a, b| a.1.total_cmp(&b.1));
    Outcome {
        status,
        objective: run.evaluation.r.iter().map(|r| r * r).sum(),
        active_bounds: structure.bounds.iter().map(|&k| run.in_use[k]).collect(),
        iterations: run.iterations,
        factorisations: run.factorisations,
        worst_relation: worst.map(|(k, _)| k),
        worst_residual_scaled: worst.map_or(0.0, |(_, size)| size),
        x: run.x,
        multipliers: run.multipliers,
        evaluation: run.evaluation,
    }
}
