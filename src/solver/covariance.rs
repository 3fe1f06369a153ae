//! How sure the solution is: variances and responses from the augmented matrix
//! at the solution, with the true Jacobians.
//!
//! With residuals of unit variance, and K as in `symbolic`,
//!
//! ```text
//! K^-1 = | P  .   .  |    P  covariance of the states
//!        | . -S   .  |    S  covariance of the multipliers
//!        | .  .  -R  |    R  covariance of the residuals: its diagonal is the redundancy
//! ```
//!
//! The diagonal and the pairs that the factor's pattern holds come from the
//! selected inverse, with the regularisation taken out (see `unbiased`). Where
//! that cannot be done, variances are solved one by one by refined columns.
//!
//! Directions that nothing determines are held at one state each, which
//! changes nothing for whatever is determined; relations that others imply are
//! set aside, so that every multiplier left is unique.

use super::classes::Classes;
use super::problem::{Evaluation, Structure};
use super::selected::Selected;
use super::symbolic::Symbolic;
use super::system::{Block, System};
use super::unbiased::inverse;

/// Residual that columns are refined to.
const COLUMN_TOLERANCE: f64 = 1e-11;

/// Variances at a solution, and responses to whatever may be changed there.
pub struct Covariance<'a> {
    system: System<'a>,
    evaluation: &'a Evaluation,
    classes: &'a Classes,
    selected: Selected,
    /// The selected inverse is too biased somewhere to be used.
    biased: bool,
}

/// The response of the solution to a change (see [`Covariance::column`]).
#[derive(Clone, Debug, PartialEq)]
pub struct Column {
    /// Change of each state, in its own unit.
    pub states: Vec<f64>,
    /// Change of each multiplier, per unit of f.
    pub multipliers: Vec<f64>,
    /// Change of each whitened residual.
    pub residuals: Vec<f64>,
}

impl<'a> Covariance<'a> {
    /// Factors the matrix at the solution; `classes` are those at the same point.
    pub fn new(
        symbolic: &'a Symbolic,
        structure: &'a Structure,
        evaluation: &'a Evaluation,
        state_scale: &'a [f64],
        relation_scale: &'a [f64],
        classes: &'a Classes,
    ) -> Self {
        let mut system = System::new(symbolic, structure, state_scale, relation_scale);
        let in_use: Vec<bool> = classes
            .relation_used
            .iter()
            .zip(&classes.dependent_relations)
            .map(|(&used, &dependent)| used && !dependent)
            .collect();
        let mut held = vec![0.0; structure.states];
        for &j in &classes.free_states {
            held[j] = 1.0;
        }
        system.assemble(evaluation, &in_use, Block::Held(&held));
        let (selected, unbiased) = inverse(&mut system);
        Covariance {
            system,
            evaluation,
            classes,
            selected,
            biased: !unbiased,
        }
    }

    /// Variance of a state, in its unit squared; infinite where nothing determines it.
    pub fn state_variance(&self, j: usize) -> f64 {
        if !self.classes.state_observable(j) {
            return f64::INFINITY;
        }
        let scaled = if self.biased {
            let mut rhs = self.zeros();
            let place = self.state_place(j);
            rhs[place] = 1.0;
            self.refined(&rhs)[place]
        } else {
            self.selected.diagonal(self.state_place(j))
        };
        scaled.max(0.0) * self.system.state_scale[j].powi(2)
    }

    /// Covariance of two states, both of them determined.
    pub fn state_covariance(&self, i: usize, j: usize) -> f64 {
        let (a, b) = (self.state_place(i), self.state_place(j));
        let held = self
            .selected
            .entry(self.system.symbolic, a, b)
            .filter(|_| !self.biased);
        let scaled = held.unwrap_or_else(|| {
            let mut rhs = self.zeros();
            rhs[b] = 1.0;
            self.refined(&rhs)[a]
        });
        scaled * self.system.state_scale[i] * self.system.state_scale[j]
    }

    /// Variance of a quantity with this gradient by the states, as (state,
    /// derivative); infinite where nothing determines it.
    pub fn combination_variance(&self, gradient: &[(usize, f64)]) -> f64 {
        if !self.classes.combination_observable(gradient) {
            return f64::INFINITY;
        }
        let scaled: Vec<(usize, f64)> = gradient
            .iter()
            .map(|&(j, d)| (self.state_place(j), d * self.system.state_scale[j]))
            .collect();
        self.within_fill(&scaled).unwrap_or_else(|| {
            let mut rhs = self.zeros();
            scaled.iter().for_each(|&(place, d)| rhs[place] += d);
            let solution = self.refined(&rhs);
            scaled.iter().map(|&(place, d)| d * solution[place]).sum()
        })
    }

    /// The same from the selected inverse, where that holds all pairs.
    fn within_fill(&self, gradient: &[(usize, f64)]) -> Option<f64> {
        if self.biased {
            return None;
        }
        let mut sum = 0.0;
        for (nth, &(a, da)) in gradient.iter().enumerate() {
            sum += da * da * self.selected.diagonal(a);
            for &(b, db) in &gradient[nth + 1..] {
                sum += 2.0 * da * db * self.selected.entry(self.system.symbolic, a, b)?;
            }
        }
        Some(sum)
    }

    /// Variance of the adjustment of an observation over that of its reading,
    /// from 0 (nothing checks it) to 1; exactly 0 where it is not redundant.
    pub fn redundancy(&self, observation: usize) -> f64 {
        if !self.classes.redundant[observation] {
            return 0.0;
        }
        let rows = &self.system.structure.observations;
        let range = rows.range(observation);
        let redundancy = if self.biased {
            let mut change = vec![0.0; rows.len()];
            change[observation] = 1.0;
            self.column(&[], &[], &change).residuals[observation]
        } else if let [j] = rows.index[range.clone()] {
            let g = self.evaluation.g_values[range.start] * self.system.state_scale[j];
            1.0 - g * g * self.selected.diagonal(self.state_place(j))
        } else if let Ok(nth) = self.system.symbolic.several.binary_search(&observation) {
            -self
                .selected
                .diagonal(self.system.symbolic.residual_place(nth))
        } else {
            1.0
        };
        redundancy.clamp(0.0, 1.0)
    }

    /// Variance of a multiplier, per unit of f squared; exactly zero for a
    /// relation that is out of use, set aside or not checked.
    pub fn multiplier_variance(&self, relation: usize) -> f64 {
        let scale = self.system.row_scale[relation];
        if scale == 0.0 || !self.classes.relation_checked[relation] {
            return 0.0;
        }
        let place = self.system.symbolic.relation_place(relation);
        let scaled = if self.biased {
            let mut rhs = self.zeros();
            rhs[place] = 1.0;
            -self.refined(&rhs)[place]
        } else {
            -self.selected.diagonal(place)
        };
        scaled.max(0.0) * scale * scale
    }

    /// Variance of a combination of multipliers, as (relation, factor); exactly
    /// zero where none of the relations is checked. By a refined column: the
    /// terms of a leak nearly cancel, and the selected inverse keeps too few
    /// digits for what is left.
    pub fn multiplier_combination_variance(&self, terms: &[(usize, f64)]) -> f64 {
        let checked = terms
            .iter()
            .filter(|&&(k, _)| self.system.row_scale[k] != 0.0 && self.classes.relation_checked[k]);
        let scaled: Vec<(usize, f64)> = checked
            .map(|&(k, factor)| {
                let place = self.system.symbolic.relation_place(k);
                (place, factor * self.system.row_scale[k])
            })
            .collect();
        if scaled.is_empty() {
            return 0.0;
        }
        let mut rhs = self.zeros();
        scaled.iter().for_each(|&(place, f)| rhs[place] += f);
        let solution = self.refined(&rhs);
        let variance: f64 = scaled.iter().map(|&(place, f)| f * solution[place]).sum();
        (-variance).max(0.0)
    }

    /// Multipliers with the dependent relations set aside: those in use are
    /// unique and belong to [`Self::multiplier_variance`].
    pub fn multipliers(&self) -> Vec<f64> {
        self.column(&[], &[], &self.evaluation.r).multipliers
    }

    /// Response of the solution, to first order:
    ///
    /// - `rhs_states`: a gradient added to the objective's (per unit of each
    ///   state), so that the answer's states are its covariances with all states;
    /// - `rhs_relations`: what A dx is to be, that is minus a change of f;
    /// - `rhs_observations`: change of each reading, in sigma.
    ///
    /// A slice may be empty for zeros. Only determined quantities answer
    /// meaningfully.
    pub fn column(
        &self,
        rhs_states: &[f64],
        rhs_relations: &[f64],
        rhs_observations: &[f64],
    ) -> Column {
        let symbolic = self.system.symbolic;
        let scale = self.system.state_scale;
        let mut rhs = self.zeros();
        for (j, value) in rhs_states.iter().enumerate() {
            rhs[self.state_place(j)] += value * scale[j];
        }
        for (k, value) in rhs_relations.iter().enumerate() {
            rhs[symbolic.relation_place(k)] = value * self.system.row_scale[k];
        }
        let rows = &self.system.structure.observations;
        let mut nth = 0;
        for (i, &change) in rhs_observations.iter().enumerate() {
            let range = rows.range(i);
            if symbolic.several.get(nth) == Some(&i) {
                rhs[symbolic.residual_place(nth)] = -change;
                nth += 1;
            } else if let [j] = rows.index[range.clone()] {
                rhs[self.state_place(j)] +=
                    change * self.evaluation.g_values[range.start] * scale[j];
            }
        }
        let solution = self.refined(&rhs);
        let states: Vec<f64> = (0..symbolic.states)
            .map(|j| solution[self.state_place(j)] * scale[j])
            .collect();
        let multipliers = (0..symbolic.relations)
            .map(|k| solution[symbolic.relation_place(k)] * self.system.row_scale[k])
            .collect();
        let residuals = (0..rows.len())
            .map(|i| {
                let range = rows.range(i);
                let moved: f64 = rows.index[range.clone()]
                    .iter()
                    .zip(&self.evaluation.g_values[range])
                    .map(|(&j, g)| g * states[j])
                    .sum();
                rhs_observations.get(i).copied().unwrap_or(0.0) - moved
            })
            .collect();
        Column {
            states,
            multipliers,
            residuals,
        }
    }

    fn state_place(&self, j: usize) -> usize {
        self.system.symbolic.place[j] as usize
    }

    fn zeros(&self) -> Vec<f64> {
        vec![0.0; self.system.symbolic.dimension()]
    }

    fn refined(&self, rhs: &[f64]) -> Vec<f64> {
        let mut solution = self.zeros();
        self.system.solve(rhs, &mut solution, COLUMN_TOLERANCE);
        solution
    }
}

#[cfg(test)]
mod tests {
    use super::super::testing::{Oracle, Polynomial, Random, Sample, random_network};
    use super::super::{Evaluation, Problem, Symbolic, classify};
    use super::*;

    fn close(a: f64, b: f64, relative: f64) -> bool {
        (a - b).abs() <= relative * (a.abs() + b.abs()) + 1e-5
    }

    /// Compares everything at the point x with dense algebra.
    fn agree(sample: &Sample, x: &[f64]) {
        let structure = sample.structure();
        let mut evaluation = Evaluation::for_structure(structure);
        sample.evaluate(x, &mut evaluation).expect("inside");
        let (states, relations) = (sample.state_scale(), sample.relation_scale());
        let classes = classify(
            structure,
            &evaluation,
            states,
            relations,
            &[],
            &sample.used(),
        );
        let symbolic = Symbolic::new(structure);
        let covariance = Covariance::new(
            &symbolic,
            structure,
            &evaluation,
            states,
            relations,
            &classes,
        );
        let oracle = Oracle::at(sample, &evaluation, &[]);
        // Rounding is a fraction of the largest variance around.
        let scaled = |i: usize, j: usize| {
            oracle.covariance[(i, j)] / (sample.state_scale[i] * sample.state_scale[j])
        };
        let largest = (0..x.len()).map(|j| scaled(j, j)).fold(1.0, f64::max);
        let rounding = 1e-8 * largest + 1e-5;
        for (i, &expected) in oracle.redundancy.iter().enumerate() {
            let redundancy = covariance.redundancy(i);
            assert!(
                (redundancy - expected).abs() < 1e-5,
                "redundancy {redundancy} {expected}"
            );
        }
        for j in (0..x.len()).filter(|&j| classes.state_observable(j)) {
            let variance = covariance.state_variance(j);
            let got = variance / sample.state_scale[j].powi(2);
            let expected = scaled(j, j);
            assert!(
                (got - expected).abs() <= 1e-4 * expected + rounding,
                "{got} {expected} {largest}"
            );
            for i in (0..j).filter(|&i| classes.state_observable(i)) {
                let size = (scaled(i, i) * scaled(j, j)).abs().sqrt();
                let got = covariance.state_covariance(i, j)
                    / (sample.state_scale[i] * sample.state_scale[j]);
                let off = (got - scaled(i, j)).abs();
                assert!(off <= 1e-4 * size + rounding, "{off} {size} {largest}");
            }
        }
        if classes.relations_independent == sample.relations.len() {
            for k in 0..sample.relations.len() {
                let expected = oracle.multiplier_covariance[(k, k)];
                let variance = covariance.multiplier_variance(k);
                assert!(
                    close(variance, expected, 1e-4),
                    "multiplier {variance} {expected}"
                );
                for l in 0..k {
                    // A pair with factors of its own, as of a leak.
                    let (a, b) = (-1.0, -2.5);
                    let entry = |i, j| oracle.multiplier_covariance[(i, j)];
                    let expected =
                        a * a * entry(k, k) + b * b * entry(l, l) + 2.0 * a * b * entry(k, l);
                    let got = covariance.multiplier_combination_variance(&[(k, a), (l, b)]);
                    assert!(close(got, expected, 1e-6), "{got} {expected}");
                }
            }
        }
    }

    #[test]
    fn random_networks_agree_with_dense_algebra() {
        for seed in 0..200 {
            let mut random = Random(seed);
            let nodes = 2 + random.below(10);
            let streams = nodes + random.below(2 * nodes);
            let measured = random.between(0.2, 0.9);
            let sample = random_network(&mut random, nodes, streams, measured);
            agree(&sample, &vec![1.0; streams]);
        }
    }

    #[test]
    fn bilinear_networks_agree_with_dense_algebra() {
        for seed in 0..60 {
            let mut random = Random(500 + seed);
            let flows = random_network(&mut random, 6, 14, 0.6);
            let mut relations = flows.relations.clone();
            for relation in &flows.relations {
                relations.push(Polynomial(
                    relation
                        .0
                        .iter()
                        .map(|(c, j)| (*c, vec![j[0], 14 + j[0]]))
                        .collect(),
                ));
            }
            let mut readings = flows.readings.clone();
            for (i, reading) in flows.readings.iter().enumerate() {
                let mut extra = reading.clone();
                extra.of = Polynomial::linear(&[(14 + i % 14, 1.0), (i % 5, 0.3)]);
                readings.push(extra);
            }
            let sample = Sample::new(28, relations, readings, Vec::new());
            let x: Vec<f64> = (0..28).map(|_| random.between(0.5, 2.0)).collect();
            agree(&sample, &x);
        }
    }

    #[test]
    fn a_weakly_determined_state_keeps_its_true_variance() {
        // x1 = w x0 with a tiny w: the reading of x1 says little about x0.
        for weight in [1e-2, 1e-4, 1e-5, 1e-6, 1e-7] {
            let relation = Polynomial::linear(&[(1, 1.0), (0, -weight), (2, -1.0)]);
            let readings = [1, 2].map(|j| super::super::testing::Reading {
                of: Polynomial::linear(&[(j, 1.0)]),
                value: 1.0,
                sigma: 1.0,
                used: true,
            });
            let sample = Sample::new(3, vec![relation], readings.to_vec(), Vec::new());
            agree(&sample, &[1.0; 3]);
        }
    }

    #[test]
    fn what_nothing_determines_has_infinite_variance_and_harms_nothing() {
        let relations = vec![
            Polynomial::linear(&[(0, 1.0), (1, -1.0)]),
            Polynomial::linear(&[(2, 1.0), (3, -1.0)]),
        ];
        let readings = [0, 1].map(|j| super::super::testing::Reading {
            of: Polynomial::linear(&[(j, 1.0)]),
            value: 1.0,
            sigma: 1.0,
            used: true,
        });
        let sample = Sample::new(5, relations, readings.to_vec(), Vec::new());
        let outcome = sample.solve(&[0.0, 0.0, 7.0, 9.0, 3.0]);
        let (states, relations) = (sample.state_scale(), sample.relation_scale());
        let classes = classify(
            sample.structure(),
            &outcome.evaluation,
            states,
            relations,
            &[],
            &sample.used(),
        );
        let symbolic = Symbolic::new(sample.structure());
        let covariance = Covariance::new(
            &symbolic,
            sample.structure(),
            &outcome.evaluation,
            states,
            relations,
            &classes,
        );
        assert!((covariance.state_variance(0) - 0.5).abs() < 1e-9);
        assert!(
            [2, 3, 4]
                .iter()
                .all(|&j| covariance.state_variance(j).is_infinite())
        );
        assert!(covariance.combination_variance(&[(2, 1.0)]).is_infinite());
        assert!(
            covariance
                .combination_variance(&[(2, 1.0), (3, -1.0)])
                .abs()
                < 1e-6
        );
        assert_eq!(outcome.x[4], 3.0);
        assert!((outcome.x[2] - 8.0).abs() < 1e-6 && (outcome.x[3] - 8.0).abs() < 1e-6);
    }
}
