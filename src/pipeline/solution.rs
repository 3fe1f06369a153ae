//! A converged batch, with classes and variances: what the report is made of.

use super::attempt::Found;
use super::class_set::{self, ClassSet};
use super::compiled::Compiled;
use crate::diagnosis::{Evidence, Miss};
use crate::equations::{Hypothesis, Layout, Measured, Role, State, System};
use crate::plant::{Quantity, StreamId};
use crate::report::SingleTest;
use crate::solver::{Classes, Column, Covariance, Problem};

/// A solution, ready to be asked.
pub struct Solution<'a> {
    found: &'a Found<'a>,
    class_set: &'a ClassSet,
    covariance: Covariance<'a>,
    multipliers: Vec<f64>,
    states: Vec<Option<State>>,
}

/// What one unit of a hypothesis shifts: readings by w (in sigma), relations by
/// phi.
pub struct Shift {
    reading: Option<(usize, f64)>,
    relations: Vec<(usize, f64)>,
}

impl Shift {
    /// The numerator w'r - phi'lambda of the hypothesis' statistic.
    pub fn numerator(&self, residuals: &[f64], multipliers: &[f64]) -> f64 {
        let reading = self.reading.map_or(0.0, |(i, w)| w * residuals[i]);
        let relations = self.relations.iter();
        reading - relations.map(|&(k, phi)| phi * multipliers[k]).sum::<f64>()
    }
}

impl<'a> Solution<'a> {
    /// What was found, with its class set ([`class_set::of`]).
    pub fn new(compiled: &'a Compiled, found: &'a Found<'a>, class_set: &'a ClassSet) -> Self {
        let covariance = class_set::covariance(compiled, found, &class_set.classes);
        let multipliers = covariance.multipliers();
        let system = compiled.system();
        let streams = (0..system.layout.streams()).map(StreamId);
        let states = streams
            .map(|s| system.state(s, &found.outcome.x).ok())
            .collect();
        Solution {
            found,
            class_set,
            covariance,
            multipliers,
            states,
        }
    }

    /// The states.
    pub fn x(&self) -> &[f64] {
        &self.found.outcome.x
    }

    /// Weighted sum of squared adjustments.
    pub fn objective(&self) -> f64 {
        self.found.outcome.objective
    }

    /// Rank and classes.
    pub fn classes(&self) -> &Classes {
        &self.class_set.classes
    }

    /// What observation `i` reads, internal units.
    pub fn measured(&self, i: usize) -> Option<Measured> {
        self.found.case.measured()[i]
    }

    /// Where each state stands.
    pub fn layout(&self) -> &'a Layout {
        &self.system().layout
    }

    /// Degrees of freedom.
    pub fn degrees_of_freedom(&self) -> usize {
        self.class_set.classes.degrees_of_freedom
    }

    /// Critical value of the single tests.
    pub fn single_test(&self) -> Option<SingleTest> {
        self.class_set.single_test.clone()
    }

    /// Reconciled minus measured of observation `i`, in sigma.
    pub fn adjustment(&self, i: usize) -> f64 {
        -self.found.outcome.evaluation.r[i]
    }

    /// Redundancy of observation `i`; zero where it is not redundant by rank.
    pub fn redundancy(&self, i: usize) -> f64 {
        if self.is_redundant(i) {
            self.covariance.redundancy(i).clamp(0.0, 1.0)
        } else {
            0.0
        }
    }

    /// Whether observation `i` is redundant by rank.
    pub fn is_redundant(&self, i: usize) -> bool {
        self.class_set.classes.redundant[i]
    }

    /// Whether a combination of states is determined.
    pub fn is_observable(&self, gradient: &[(usize, f64)]) -> bool {
        self.class_set.classes.combination_observable(gradient)
    }

    /// Sigma of a combination of states; `None` where it is unobservable.
    pub fn uncertainty(&self, gradient: &[(usize, f64)]) -> Option<f64> {
        let variance = self.covariance.combination_variance(gradient);
        variance.is_finite().then(|| variance.max(0.0).sqrt())
    }

    /// What observation `i` should read and the sigma of that, in internal
    /// units; `None` where it is unobservable.
    pub fn predict(&self, i: usize) -> Option<(f64, f64)> {
        let (value, gradient) = self.prediction(i)?;
        Some((value, self.uncertainty(&gradient)?))
    }

    /// What observation `i` should read, with its gradient by the states.
    pub fn prediction(&self, i: usize) -> Option<(f64, Vec<(usize, f64)>)> {
        let system = self.system();
        let (value, slopes) = system.predict(i, self.x())?;
        let row = system.observations[i].row.iter().copied();
        Some((value, row.zip(slopes).collect()))
    }

    /// Temperature of a stream and its sigma, K; `None` where it is
    /// unobservable. Where nothing determines the enthalpy, the phase at which
    /// the solver happens to stand says nothing of the temperature: then only
    /// a thermometer on the stream itself does.
    pub fn temperature(&self, s: StreamId) -> Option<(f64, f64)> {
        let system = self.system();
        let h = system.layout.h(s);
        let known = self.is_observable(&[(h, 1.0)]) || self.has_thermometer(s);
        let state = self.state(s).filter(|_| known)?;
        let gradient = [(system.layout.p(s), state.t_p), (h, state.t_h)];
        Some((state.t, self.uncertainty(&gradient)?))
    }

    fn has_thermometer(&self, s: StreamId) -> bool {
        let observations = self.system().observations.iter();
        let mut used = observations.zip(self.found.case.measured());
        used.any(|(o, m)| m.is_some() && o.quantity == Quantity::Temperature(s))
    }

    /// Thermodynamic state of a stream.
    pub fn state(&self, s: StreamId) -> Option<State> {
        self.states[s.0]
    }

    /// Whether the readings fit both sides of the saturation line.
    pub fn is_phase_open(&self, s: StreamId) -> bool {
        self.found.open.contains(&s)
    }

    /// What balance `k` would miss; `None` where nothing checks it.
    pub fn miss(&self, k: usize) -> Option<Miss> {
        Miss::new(self.multipliers[k], self.covariance.multiplier_variance(k))
    }

    /// What one unit of a hypothesis shifts; a reading that is not in use shifts
    /// nothing.
    pub fn shift(&self, hypothesis: &Hypothesis) -> Shift {
        let reading = hypothesis.observation().and_then(|i| {
            let measured = self.measured(i)?;
            Some((i, 1.0 / measured.sigma.get()))
        });
        Shift {
            reading,
            relations: hypothesis.rows(&self.system().layout, self.x()),
        }
    }

    /// What the solution says of a hypothesis, in internal units; `None` where
    /// nothing of it shows.
    pub fn evidence(&self, hypothesis: &Hypothesis) -> Option<Evidence> {
        let shift = self.shift(hypothesis);
        let residuals = &self.found.outcome.evaluation.r;
        let numerator = shift.numerator(residuals, &self.multipliers);
        let variance = match shift.reading {
            Some((i, w)) => w * w * self.redundancy(i),
            None => self
                .covariance
                .multiplier_combination_variance(&shift.relations),
        };
        Evidence::new(numerator, variance)
    }

    /// How the solution would have come out otherwise, had one unit of a
    /// hypothesis not been there: the change that it makes, to first order.
    pub fn response(&self, hypothesis: &Hypothesis) -> Column {
        let shift = self.shift(hypothesis);
        let structure = &self.system().structure;
        let mut readings = vec![0.0; structure.observations.len()];
        if let Some((i, w)) = shift.reading {
            readings[i] = w;
        }
        let mut relations = vec![0.0; structure.relations.len()];
        for &(k, phi) in &shift.relations {
            relations[k] = phi;
        }
        self.covariance.column(&[], &relations, &readings)
    }

    /// Variances and responses.
    pub fn covariance(&self) -> &Covariance<'a> {
        &self.covariance
    }

    /// Whether nothing checks any of these relations.
    pub fn is_unchecked(&self, relations: &[(usize, f64)]) -> bool {
        let checked = &self.class_set.classes.relation_checked;
        relations.iter().all(|&(k, _)| !checked[k])
    }

    /// Whether an enthalpy enters a balance of energy that something checks.
    pub fn checks_energy_of(&self, h: usize) -> bool {
        let checked = &self.class_set.classes.relation_checked;
        let relations = self.system().relations.iter().zip(checked);
        let mut energy = relations.filter(|(relation, _)| relation.role == Role::Energy);
        energy.any(|(relation, &checked)| checked && relation.row.contains(&h))
    }

    /// A typical size of the terms of relation `k`.
    pub fn relation_scale(&self, k: usize) -> f64 {
        self.found.case.relation_scale()[k]
    }

    /// What a person should see: bounds that are active, phases that are open.
    pub fn remarks(&self, compiled: &Compiled) -> Vec<String> {
        let system = self.system();
        let stream_name = |s: StreamId| &compiled.plant().streams[s.0].name;
        let mut remarks = Vec::new();
        let bounds = system.structure.bounds.iter();
        for (&k, _) in bounds
            .zip(&self.found.outcome.active_bounds)
            .filter(|(_, active)| **active)
        {
            let relation = &system.relations[k];
            let stream = relation
                .row
                .iter()
                .find_map(|&j| system.layout.stream_of(j));
            if let (Some(s), Role::Bound(what)) = (stream, &relation.role) {
                remarks.push(format!(
                    "{}: the bound \"{what}\" is active",
                    stream_name(s)
                ));
            }
        }
        for &s in &self.found.open {
            remarks.push(format!(
                "{}: the readings fit both sides of the saturation line",
                stream_name(s)
            ));
        }
        remarks
    }

    fn system(&self) -> &'a System {
        self.found.case.system()
    }
}
