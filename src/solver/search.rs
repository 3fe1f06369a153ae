//! Where a step leads: the first acceptable point along it, or, where there is
//! none, a point that satisfies the relations better.

use super::factor::WrongSign;
use super::gauss_newton::{LINEAR_TOLERANCE, Run};
use super::problem::{Evaluation, Outside, Problem};
use super::refine::norm;
use super::system::Block;

/// Halvings of a step before it is given up.
const HALVINGS: usize = 14;
/// Steps that restore the relations alone.
const RESTORATION_STEPS: usize = 30;

/// What a search along a step found.
pub(super) enum Search {
    Full,
    Shortened,
    Failed(Option<Outside>),
}

impl<P: Problem + ?Sized> Run<'_, P> {
    /// Tries the step, corrected and then shorter; moves to the first acceptable point.
    pub(super) fn search(&mut self, shrinks: bool) -> Search {
        let mut outside = None;
        let mut length = 1.0;
        for nth in 0..HALVINGS {
            let trial: Vec<f64> = self
                .x
                .iter()
                .zip(&self.step)
                .map(|(x, step)| x + length * step)
                .collect();
            match self.problem.evaluate(&trial, &mut self.trial) {
                Ok(()) => {
                    let merit = self.merit(&self.trial);
                    let finite = merit.violation.is_finite() && merit.objective.is_finite();
                    if self.filter.accepts(merit) || (nth == 0 && shrinks && finite) {
                        self.move_to(trial, length, merit);
                        return if nth == 0 {
                            Search::Full
                        } else {
                            Search::Shortened
                        };
                    }
                    if nth == 0 && finite && self.corrected() {
                        return Search::Shortened;
                    }
                }
                Err(at) => outside = Some(at),
            }
            length *= 0.5;
        }
        Search::Failed(outside)
    }

    /// Second-order correction: the relations' values at the trial point join the right-hand side.
    fn corrected(&mut self) -> bool {
        let symbolic = self.system.symbolic;
        let mut correction = vec![0.0; symbolic.dimension()];
        for k in 0..symbolic.relations {
            correction[symbolic.relation_place(k)] = -self.system.row_scale[k] * self.trial.f[k];
        }
        self.system.factor.solve(symbolic, &mut correction);
        let mut step = self.step.clone();
        for (j, step) in step.iter_mut().enumerate() {
            *step += correction[symbolic.place[j] as usize] * self.system.state_scale[j];
        }
        self.problem.limit(&self.x, &mut step);
        let trial: Vec<f64> = self.x.iter().zip(&step).map(|(x, step)| x + step).collect();
        if self.problem.evaluate(&trial, &mut self.trial).is_err() {
            return false;
        }
        let merit = self.merit(&self.trial);
        let fine = self.filter.accepts(merit);
        if fine {
            self.move_to(trial, 1.0, merit);
        }
        fine
    }

    /// Shortest steps (in sigma) towards the relations alone, until the filter accepts the point.
    pub(super) fn restore(&mut self) -> bool {
        let start = self.merit(&self.evaluation).violation;
        for _ in 0..RESTORATION_STEPS {
            self.system
                .assemble(&self.evaluation, &self.in_use, Block::Identity);
            self.system.factorise(WrongSign::Replace);
            self.factorisations += 1;
            let here = self.violation(&self.evaluation);
            self.rhs.fill(0.0);
            for k in 0..self.system.symbolic.relations {
                self.rhs[self.system.symbolic.relation_place(k)] =
                    -self.system.row_scale[k] * self.evaluation.f[k];
            }
            self.system
                .solve(&self.rhs, &mut self.direction, LINEAR_TOLERANCE);
            self.scale_and_limit();
            let mut length = 1.0;
            let mut moved = false;
            for _ in 0..HALVINGS {
                let trial: Vec<f64> = self
                    .x
                    .iter()
                    .zip(&self.step)
                    .map(|(x, step)| x + length * step)
                    .collect();
                if self.problem.evaluate(&trial, &mut self.trial).is_ok()
                    && self.violation(&self.trial) < (1.0 - 0.1 * length) * here
                {
                    self.x = trial;
                    std::mem::swap(&mut self.evaluation, &mut self.trial);
                    moved = true;
                    break;
                }
                length *= 0.5;
            }
            if !moved {
                return false;
            }
            let merit = self.merit(&self.evaluation);
            if merit.violation <= 0.5 * start && self.filter.accepts(merit) {
                self.multipliers.fill(0.0);
                return true;
            }
        }
        false
    }

    fn violation(&self, at: &Evaluation) -> f64 {
        let scaled: Vec<f64> =
            at.f.iter()
                .zip(&self.system.row_scale)
                .map(|(f, scale)| f * scale)
                .collect();
        norm(&scaled)
    }
}
