//! Gauss-Newton steps on the augmented system for a fixed set of relations.
//!
//! At a point x with multipliers l the step d and the change of l solve
//!
//! ```text
//! G'G d + A' dl = G' r - A' l,      A d = -f
//! ```
//!
//! A factor from an earlier point serves as long as the steps it gives shrink
//! by a factor of five each; then the matrix is factored anew. Steps are
//! accepted by a filter, with a second-order correction of the first trial and
//! then shorter steps. Where fresh Gauss-Newton steps do not shrink, the
//! second derivatives of the relations join in, if the problem has them; the
//! inertia of the factor says whether the point is still convex enough, and a
//! shift of the diagonal makes it so. Where no step helps, a few steps restore
//! the relations alone.

use super::factor::WrongSign;
use super::filter::{Filter, Merit};
use super::outcome::{Hold, Options, Reason, Status};
use super::problem::{Evaluation, Outside, Problem};
use super::search::Search;
use super::symbolic::Symbolic;
use super::system::{Block, System};

/// A step with an old factor must be this much shorter than the one before.
const CONTRACTION: f64 = 0.2;
/// Fresh steps that shrink less than this call for second derivatives.
const SLOW: f64 = 0.6;
/// So many of them in a row do.
const SLOW_STEPS: usize = 3;
/// Residual of the linear system that a fresh step is refined to.
pub(super) const LINEAR_TOLERANCE: f64 = 1e-3;
/// The same once second derivatives are in.
const LINEAR_TOLERANCE_CURVED: f64 = 1e-6;
/// A gradient of the Lagrangian below this (per sigma) is rounding: where the
/// steps no longer shrink it is as good as zero.
const STATIONARY: f64 = 1e-9;
/// Second derivatives that make the matrix indefinite are taken in part, each
/// time this fraction of the last, and then not at all.
const CURVATURE_FRACTIONS: [f64; 3] = [1.0, 0.5, 0.2];
/// A fresh step below this many sigma along which nothing improves, with the
/// relations holding, is rounding: the point is the solution.
const ROUNDING: f64 = 1e-6;
/// A step below this many sigma that shrinks is taken without asking the filter.
const LOCAL: f64 = 1.0;

/// Where a run stands; the point, its evaluation and its multipliers belong together.
pub(super) struct Run<'a, P: Problem + ?Sized> {
    pub(super) problem: &'a P,
    pub(super) options: &'a Options,
    pub(super) system: System<'a>,
    pub(super) x: Vec<f64>,
    pub(super) evaluation: Evaluation,
    pub(super) multipliers: Vec<f64>,
    /// Which relations take part.
    pub(super) in_use: Vec<bool>,
    pub(super) iterations: usize,
    pub(super) factorisations: usize,
    pub(super) filter: Filter,
    pub(super) trial: Evaluation,
    pub(super) rhs: Vec<f64>,
    pub(super) direction: Vec<f64>,
    pub(super) step: Vec<f64>,
    /// How good the point is, with the row scales of the last factorisation.
    pub(super) here: Merit,
    /// Largest scaled change of a state in the last full step.
    pub(super) last_size: Option<f64>,
    pub(super) second_order: bool,
    pub(super) slow_steps: usize,
}

impl<'a, P: Problem + ?Sized> Run<'a, P> {
    /// Evaluates the start.
    pub(super) fn new(
        problem: &'a P,
        symbolic: &'a Symbolic,
        start: &[f64],
        options: &'a Options,
    ) -> (Self, Result<(), Outside>) {
        let structure = problem.structure();
        let mut in_use = vec![true; structure.relations.len()];
        for &k in &structure.bounds {
            in_use[k] = false;
        }
        let mut run = Run {
            problem,
            options,
            system: System::new(
                symbolic,
                structure,
                problem.state_scale(),
                problem.relation_scale(),
            ),
            x: start.to_vec(),
            evaluation: Evaluation::for_structure(structure),
            multipliers: vec![0.0; structure.relations.len()],
            in_use,
            iterations: 0,
            factorisations: 0,
            filter: Filter::default(),
            trial: Evaluation::for_structure(structure),
            rhs: vec![0.0; symbolic.dimension()],
            direction: vec![0.0; symbolic.dimension()],
            step: vec![0.0; structure.states],
            here: Merit {
                violation: f64::INFINITY,
                objective: f64::INFINITY,
                feasible: false,
            },
            last_size: None,
            second_order: false,
            slow_steps: 0,
        };
        let start = problem.evaluate(&run.x, &mut run.evaluation);
        (run, start)
    }

    /// Steps until the relations hold and the steps vanish, or says why not.
    pub(super) fn descend(&mut self) -> Status {
        self.filter.clear();
        self.last_size = None;
        self.slow_steps = 0;
        while self.iterations < self.options.max_iterations {
            match self.iterate() {
                Ok(true) => return Status::Converged,
                Ok(false) => {}
                Err(reason) => return Status::NotConverged(reason),
            }
        }
        Status::NotConverged(Reason::IterationLimit)
    }

    /// One step; true when it was the last one needed.
    fn iterate(&mut self) -> Result<bool, Reason> {
        self.iterations += 1;
        let hold = self
            .options
            .hold
            .as_ref()
            .filter(|hold| self.iterations <= hold.steps);
        let mut fresh = false;
        let mut size = f64::INFINITY;
        if let (Some(before), None) = (self.last_size, hold) {
            self.solve_with_old_factor();
            size = self.size();
            fresh = !(size <= CONTRACTION * before || size <= self.options.tolerance_step);
            if fresh && self.is_stationary() {
                return Ok(true);
            }
        }
        if !size.is_finite() || fresh {
            fresh = true;
            self.solve_afresh(hold);
            size = self.size();
        }
        if !size.is_finite() {
            return Err(Reason::Singular);
        }
        self.watch_contraction(size, fresh, hold.is_some());
        let limited = self.scale_and_limit();
        let shrinks =
            self.last_size.is_some_and(|before| size <= 0.5 * before) && size < LOCAL && !limited;
        if fresh {
            self.here = self.merit(&self.evaluation);
        }
        self.filter.remember(self.here);
        match self.search(shrinks) {
            Search::Full if !limited && hold.is_none() => {
                let left = self.left_after(size);
                self.last_size = Some(size);
                if left <= self.options.tolerance_step && self.here.feasible {
                    return Ok(true);
                }
                if size <= 1e-3 * self.options.tolerance_step {
                    // The steps have come to nothing and a relation still does not hold.
                    return Err(Reason::Stalled);
                }
            }
            Search::Full | Search::Shortened => self.last_size = None,
            Search::Failed(_) if fresh && self.here.feasible && size <= ROUNDING => {
                return Ok(true);
            }
            Search::Failed(outside) => self.recover(fresh, outside)?,
        }
        Ok(false)
    }

    /// How far the solution is after a step of this size, if the steps go on
    /// shrinking as they did; the step itself where they do not shrink.
    fn left_after(&self, size: f64) -> f64 {
        match self.last_size.map(|before| size / before) {
            Some(ratio) if ratio < 0.5 => size * ratio / (1.0 - ratio),
            _ => size,
        }
    }

    fn solve_with_old_factor(&mut self) {
        self.system
            .right_hand_side(&self.evaluation, &self.multipliers, &mut self.rhs);
        self.direction.copy_from_slice(&self.rhs);
        self.system
            .factor
            .solve(self.system.symbolic, &mut self.direction);
    }

    fn solve_afresh(&mut self, hold: Option<&Hold>) {
        let block = hold.map_or(Block::Observations, |hold| Block::Held(&hold.weights));
        if !(self.second_order && hold.is_none() && self.factorise_curved()) {
            self.system.assemble(&self.evaluation, &self.in_use, block);
            self.system.factorise(WrongSign::Replace);
            self.factorisations += 1;
        }
        self.system
            .right_hand_side(&self.evaluation, &self.multipliers, &mut self.rhs);
        let tolerance = if self.second_order {
            LINEAR_TOLERANCE_CURVED
        } else {
            LINEAR_TOLERANCE
        };
        self.system.solve(&self.rhs, &mut self.direction, tolerance);
    }

    /// Factors with second derivatives, shifted until the inertia is right.
    fn factorise_curved(&mut self) -> bool {
        let mut entries = Vec::new();
        if !self
            .problem
            .curvature(&self.x, &self.multipliers, &mut entries)
        {
            self.second_order = false;
            return false;
        }
        for fraction in CURVATURE_FRACTIONS {
            entries.iter_mut().for_each(|entry| entry.2 *= fraction);
            self.system
                .assemble(&self.evaluation, &self.in_use, Block::Curved(&entries));
            self.factorisations += 1;
            let w = self.system.factorise(WrongSign::Keep);
            if w {
                return true;
            }
        }
        false
    }

    /// Largest scaled change of a state.
    fn size(&self) -> f64 {
        let place = &self.system.symbolic.place[..self.system.symbolic.states];
        place.iter().fold(0.0, |largest: f64, &at| {
            let change = self.direction[at as usize].abs();
            if change.is_nan() {
                f64::NAN
            } else {
                largest.max(change)
            }
        })
    }

    /// True where the relations hold and the gradient of the Lagrangian is down to rounding.
    fn is_stationary(&self) -> bool {
        self.here.feasible && self.rhs.iter().all(|value| value.abs() <= STATIONARY)
    }

    fn watch_contraction(&mut self, size: f64, fresh: bool, held: bool) {
        if !fresh || held {
            return;
        }
        let slow = self.last_size.is_none_or(|before| size > SLOW * before);
        self.slow_steps = if slow { self.slow_steps + 1 } else { 0 };
        if self.slow_steps > SLOW_STEPS && !self.second_order {
            self.second_order = true;
            self.slow_steps = 0;
        }
    }

    /// Turns the direction into a step in the states' own units; true where the problem bent it.
    pub(super) fn scale_and_limit(&mut self) -> bool {
        for (j, step) in self.step.iter_mut().enumerate() {
            *step =
                self.direction[self.system.symbolic.place[j] as usize] * self.system.state_scale[j];
        }
        let before = self.step.clone();
        self.problem.limit(&self.x, &mut self.step);
        before != self.step
    }

    pub(super) fn merit(&self, at: &Evaluation) -> Merit {
        let mut violation = 0.0;
        let mut feasible = true;
        let tolerance = self.options.tolerance_relation;
        let scales = self
            .problem
            .relation_scale()
            .iter()
            .zip(&self.system.row_scale);
        for ((f, &used), (scale, row_scale)) in at.f.iter().zip(&self.in_use).zip(scales) {
            if used {
                violation += (f * row_scale).abs();
                feasible &= f.abs() <= tolerance * scale;
            }
        }
        Merit {
            violation,
            objective: 0.5 * at.r.iter().map(|r| r * r).sum::<f64>(),
            feasible,
        }
    }

    pub(super) fn move_to(&mut self, point: Vec<f64>, length: f64, merit: Merit) {
        self.x = point;
        self.here = merit;
        std::mem::swap(&mut self.evaluation, &mut self.trial);
        // Gauss-Newton multipliers are those of the linearised problem, whatever the length;
        // with second derivatives they are unknowns like the states.
        let fraction = if self.second_order { length } else { 1.0 };
        for (k, multiplier) in self.multipliers.iter_mut().enumerate() {
            let change =
                self.direction[self.system.symbolic.relation_place(k)] * self.system.row_scale[k];
            *multiplier += fraction * change;
        }
    }

    /// No point along the step was acceptable: fresh factor, second derivatives, restoration, in turn.
    fn recover(&mut self, fresh: bool, outside: Option<Outside>) -> Result<(), Reason> {
        self.last_size = None;
        if !fresh {
            return Ok(());
        }
        if !self.second_order
            && self
                .problem
                .curvature(&self.x, &self.multipliers, &mut Vec::new())
        {
            self.second_order = true;
            return Ok(());
        }
        if self.restore() {
            return Ok(());
        }
        Err(outside.map_or(Reason::Stalled, |at| Reason::OutsideDomain {
            state: at.state,
        }))
    }
}
