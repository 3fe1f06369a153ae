//! A batch solved again with suspects in it as unknowns.
//!
//! A suspected reading is left out, which is the same as letting it be off by
//! any amount; a suspected leak, passing valve or loss is a state of its own in a
//! variant of the plant. The solve starts from a solution nearby.

use super::attempt::Found;
use super::class_set::{self, ClassSet};
use super::compiled::{Compiled, Variant};
use super::phases::{self, Intervals};
use super::solution::Solution;
use crate::equations::{Case, Measured, Modes};
use crate::plant::StreamId;
use crate::report::SingleTest;
use crate::solver::{Options, Outcome, Status, solve};
use std::sync::Arc;

/// A batch solved with some suspects in.
#[derive(Clone)]
pub struct Trial {
    /// The suspects, by their place among the hypotheses, in the order in which
    /// they were taken in.
    pub suspects: Vec<usize>,
    /// The solution.
    pub outcome: Outcome,
    variant: Option<Arc<Variant>>,
    measured: Vec<Option<Measured>>,
    modes: Modes,
    open: Vec<StreamId>,
}

/// A trial with its classes, ready for a [`Solution`].
pub struct View<'a> {
    compiled: &'a Compiled,
    found: Found<'a>,
    class_set: ClassSet,
}

impl Trial {
    /// The batch as it was solved, with no suspect in.
    pub fn without_suspects(found: &Found) -> Self {
        Trial {
            suspects: Vec::new(),
            outcome: found.outcome.clone(),
            variant: None,
            measured: found.case.measured().to_vec(),
            modes: found.case.modes().clone(),
            open: found.open.clone(),
        }
    }

    /// Solves with one more suspect, of about the size `guess` in internal units.
    /// `None` where the solve does not converge.
    pub fn with(&self, base: &Compiled, suspect: usize, guess: f64) -> Option<Trial> {
        let mut suspects = self.suspects.clone();
        suspects.push(suspect);
        let mut measured = self.measured.clone();
        if let Some(i) = base.hypotheses()[suspect].observation() {
            measured[i] = None;
        }
        self.solve(base, suspects, measured, &[(suspect, guess)])
    }

    /// The same solution, or a better one on another side of saturation.
    pub fn settled(self, base: &Compiled) -> Trial {
        let compiled = self.compiled(base);
        let (measured, modes) = (self.measured.clone(), self.modes.clone());
        let case = Case::new(compiled.system(), measured, modes, &self.outcome.x);
        let found = phases::settle(compiled, case, self.outcome.clone());
        Trial {
            modes: found.case.modes().clone(),
            open: found.open,
            outcome: found.outcome,
            ..self
        }
    }

    /// Solves without suspect number `nth`; `readings` are those of the batch.
    pub fn less(
        &self,
        base: &Compiled,
        nth: usize,
        readings: &[Option<Measured>],
    ) -> Option<Trial> {
        let mut suspects = self.suspects.clone();
        let suspect = suspects.remove(nth);
        let mut measured = self.measured.clone();
        if let Some(i) = base.hypotheses()[suspect].observation() {
            measured[i] = readings[i];
        }
        self.solve(base, suspects, measured, &[])
    }

    fn solve(
        &self,
        base: &Compiled,
        suspects: Vec<usize>,
        measured: Vec<Option<Measured>>,
        guesses: &[(usize, f64)],
    ) -> Option<Trial> {
        let mut of_relations: Vec<usize> = (suspects.iter().copied())
            .filter(|&h| base.hypotheses()[h].observation().is_none())
            .collect();
        of_relations.sort_unstable();
        let variant = (!of_relations.is_empty()).then(|| base.variant(&of_relations));
        let compiled = variant.as_ref().map_or(base, |variant| &variant.compiled);
        let mut start = self.outcome.x.clone();
        start.truncate(base.system().layout.len());
        let states = variant.iter().flat_map(|variant| &variant.states);
        start.extend(states.map(|&(h, _)| {
            let guess = guesses
                .iter()
                .find(|&&(g, _)| g == h)
                .map(|&(_, size)| size);
            guess.or_else(|| self.state_of(h)).unwrap_or(0.0)
        }));
        // A stream whose thermometer is left out is held to no side any more.
        let free = Modes::none(compiled.system().layout.streams());
        let plain = Case::new(compiled.system(), measured, free, &start);
        let case = phases::sided(&plain, &Intervals::of(&plain, &start), &start);
        let outcome = solve(&case, compiled.symbolic(), &start, &Options::default());
        if outcome.status != Status::Converged {
            return None;
        }
        Some(Trial {
            suspects,
            measured: case.measured().to_vec(),
            modes: case.modes().clone(),
            open: Vec::new(),
            outcome,
            variant,
        })
    }

    /// Size of a suspect that is in, in internal units; of a reading, `reading`
    /// less what the others say of it.
    pub fn size(&self, base: &Compiled, suspect: usize, reading: Option<Measured>) -> Option<f64> {
        match base.hypotheses()[suspect].observation() {
            Some(i) => {
                let (predicted, _) = self.compiled(base).system().predict(i, &self.outcome.x)?;
                Some(reading?.value - predicted)
            }
            None => self.state_of(suspect),
        }
    }

    /// The state of a suspected relation.
    pub fn state(&self, suspect: usize) -> Option<usize> {
        let states = &self.variant.as_ref()?.states;
        states.iter().find(|&&(h, _)| h == suspect).map(|&(_, j)| j)
    }

    fn state_of(&self, suspect: usize) -> Option<f64> {
        self.state(suspect).map(|j| self.outcome.x[j])
    }

    /// The plant with the suspects in.
    pub fn compiled<'a>(&'a self, base: &'a Compiled) -> &'a Compiled {
        self.variant
            .as_ref()
            .map_or(base, |variant| &variant.compiled)
    }

    /// The trial with its classes.
    pub fn view<'a>(&'a self, base: &'a Compiled, test: &SingleTest) -> View<'a> {
        let compiled = self.compiled(base);
        let (measured, modes) = (self.measured.clone(), self.modes.clone());
        let found = Found {
            case: Case::new(compiled.system(), measured, modes, &self.outcome.x),
            outcome: self.outcome.clone(),
            open: self.open.clone(),
        };
        View {
            class_set: class_set::with_test(compiled, &found, test),
            compiled,
            found,
        }
    }
}

impl View<'_> {
    /// Variances and statistics.
    pub fn solution(&self) -> Solution<'_> {
        Solution::new(self.compiled, &self.found, &self.class_set)
    }
}
