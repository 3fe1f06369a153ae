//! The augmented system at one point: assembled, scaled, factored, solved.
//!
//! States are scaled by their typical uncertainty, relations by the norm of
//! their (scaled) gradient, so that every unknown and every right-hand side is
//! of order one, in units of sigma. A relation that is out of use gets -1 on
//! its diagonal and nothing else: its multiplier stays zero and nothing else
//! notices.
//!
//! The factor is that of K + diag(+d, -e): regularised. Solutions are those of
//! K itself (see `refine`).

use super::factor::{Factor, WrongSign};
use super::problem::{Evaluation, Structure};
use super::symbolic::Symbolic;

/// Added to the diagonal of each scaled state.
pub(super) const STATE_REGULARISATION: f64 = 1e-7;
/// Taken from the diagonal of each normalised relation.
pub(super) const RELATION_REGULARISATION: f64 = 1e-9;
/// A gradient below this fraction of the relation's own scale counts as none.
const NO_GRADIENT: f64 = 1e-13;

/// The augmented system of one structure, with its factor and work space.
pub(super) struct System<'a> {
    pub(super) symbolic: &'a Symbolic,
    pub(super) structure: &'a Structure,
    pub(super) state_scale: &'a [f64],
    relation_scale: &'a [f64],
    /// Turns f into the normalised relation; zero where a relation is out of use.
    pub(super) row_scale: Vec<f64>,
    pub(super) factor: Factor,
    /// Regularisation of each place, with its sign.
    pub(super) regularisation: Vec<f64>,
    /// See `Pattern`.
    values: Vec<f64>,
    diagonal: Vec<f64>,
    regularised: Vec<f64>,
    /// Gradient by the states in their own units.
    gradient: Vec<f64>,
}

/// What goes on the diagonal block of the states.
#[derive(Clone, Copy)]
pub(super) enum Block<'b> {
    /// The observations.
    Observations,
    /// The observations, and an extra weight per scaled state.
    Held(&'b [f64]),
    /// The observations, and second derivatives as (row, column, value).
    Curved(&'b [(usize, usize, f64)]),
    /// Nothing but one per scaled state: steps that only restore the relations.
    Identity,
}

impl<'a> System<'a> {
    pub(super) fn new(
        symbolic: &'a Symbolic,
        structure: &'a Structure,
        state_scale: &'a [f64],
        relation_scale: &'a [f64],
    ) -> Self {
        let n = symbolic.dimension();
        let mut regularisation = vec![0.0; n];
        for &place in &symbolic.place[..symbolic.states] {
            regularisation[place as usize] = STATE_REGULARISATION;
        }
        for k in 0..symbolic.relations {
            regularisation[symbolic.relation_place(k)] = -RELATION_REGULARISATION;
        }
        System {
            symbolic,
            structure,
            state_scale,
            relation_scale,
            row_scale: vec![0.0; symbolic.relations],
            factor: Factor::new(symbolic),
            regularisation,
            values: vec![0.0; symbolic.values()],
            diagonal: vec![0.0; n],
            regularised: vec![0.0; n],
            gradient: vec![0.0; symbolic.states],
        }
    }

    /// Fills the matrix at a point. `in_use` says which relations take part.
    pub(super) fn assemble(&mut self, at: &Evaluation, in_use: &[bool], block: Block) {
        self.values.fill(0.0);
        self.diagonal.fill(0.0);
        for &place in &self.symbolic.idle {
            self.diagonal[place as usize] = if place % 2 == 0 { 1.0 } else { -1.0 };
        }
        self.assemble_relations(at, in_use);
        let place = &self.symbolic.place;
        for nth in 0..self.symbolic.several.len() {
            self.diagonal[self.symbolic.residual_place(nth)] = -1.0;
        }
        match block {
            Block::Observations => self.assemble_observations(at),
            Block::Held(weights) => {
                self.assemble_observations(at);
                for (&place, weight) in place[..self.symbolic.states].iter().zip(weights) {
                    self.diagonal[place as usize] += weight;
                }
            }
            Block::Curved(entries) => {
                self.assemble_observations(at);
                self.add_curvature(entries);
            }
            Block::Identity => {
                for &place in &place[..self.symbolic.states] {
                    self.diagonal[place as usize] = 1.0;
                }
            }
        }
    }

    fn assemble_relations(&mut self, at: &Evaluation, in_use: &[bool]) {
        let rows = &self.structure.relations;
        for (k, &used) in in_use.iter().enumerate() {
            let range = rows.range(k);
            let (index, values) = (&rows.index[range.clone()], &at.f_values[range.clone()]);
            let square: f64 = index
                .iter()
                .zip(values)
                .map(|(&j, v)| (v * self.state_scale[j]).powi(2))
                .sum();
            let norm = square.sqrt();
            let place = self.symbolic.relation_place(k);
            if used && norm > NO_GRADIENT * self.relation_scale[k] {
                let scale = norm.recip();
                self.row_scale[k] = scale;
                for ((&j, v), &slot) in index
                    .iter()
                    .zip(values)
                    .zip(&self.symbolic.relation_slot[range])
                {
                    self.values[slot as usize] = v * self.state_scale[j] * scale;
                }
            } else {
                self.row_scale[k] = 0.0;
                self.diagonal[place] = -1.0;
            }
        }
    }

    fn assemble_observations(&mut self, at: &Evaluation) {
        let rows = &self.structure.observations;
        for i in 0..rows.len() {
            let range = rows.range(i);
            if let [j] = rows.index[range.clone()] {
                let g = at.g_values[range.start] * self.state_scale[j];
                self.diagonal[self.symbolic.place[j] as usize] += g * g;
                continue;
            }
            for at_entry in range {
                let slot = self.symbolic.observation_slot[at_entry] as usize;
                self.values[slot] = -at.g_values[at_entry] * self.state_scale[rows.index[at_entry]];
            }
        }
    }

    fn add_curvature(&mut self, entries: &[(usize, usize, f64)]) {
        for &(i, j, value) in entries {
            let value = value * self.state_scale[i] * self.state_scale[j];
            if i == j {
                self.diagonal[self.symbolic.place[i] as usize] += value;
            } else if let Some(slot) = self.symbolic.slot_of_pair(i, j) {
                self.values[slot as usize] += value;
            }
        }
    }

    /// Diagonal of what was assembled, without the regularisation.
    pub(super) fn diagonal(&self, place: usize) -> f64 {
        self.diagonal[place]
    }

    /// Factors what was assembled; returns whether the inertia is right.
    pub(super) fn factorise(&mut self, wrong_sign: WrongSign) -> bool {
        for k in 0..self.diagonal.len() {
            self.regularised[k] = self.diagonal[k] + self.regularisation[k];
        }
        self.factor
            .factorise(self.symbolic, &self.values, &self.regularised, wrong_sign)
    }

    /// Right-hand side of a step: minus the gradient of the Lagrangian, minus the relations.
    pub(super) fn right_hand_side(
        &mut self,
        at: &Evaluation,
        multipliers: &[f64],
        rhs: &mut [f64],
    ) {
        rhs.fill(0.0);
        let gradient = &mut self.gradient;
        gradient.fill(0.0);
        let observations = &self.structure.observations;
        for (bounds, r) in observations.start.windows(2).zip(&at.r) {
            let range = bounds[0]..bounds[1];
            for (&j, g) in observations.index[range.clone()]
                .iter()
                .zip(&at.g_values[range])
            {
                gradient[j] += g * r;
            }
        }
        let relations = &self.structure.relations;
        let places = &self.symbolic.place[self.symbolic.states..];
        for (k, bounds) in relations.start.windows(2).enumerate() {
            let (scale, multiplier) = (self.row_scale[k], multipliers[k]);
            if scale == 0.0 {
                continue;
            }
            rhs[places[k] as usize] = -scale * at.f[k];
            let range = bounds[0]..bounds[1];
            for (&j, v) in relations.index[range.clone()]
                .iter()
                .zip(&at.f_values[range])
            {
                gradient[j] -= v * multiplier;
            }
        }
        for ((&place, scale), value) in self
            .symbolic
            .place
            .iter()
            .zip(self.state_scale)
            .zip(gradient)
        {
            rhs[place as usize] = scale * *value;
        }
    }

    /// y = K x, without the regularisation.
    pub(super) fn multiply(&self, x: &[f64], y: &mut [f64]) {
        let matrix = &self.symbolic.matrix;
        let (blocks, _) = self.values.as_chunks::<4>();
        let between = &self.values[4 * matrix.row.len()..];
        let ((x, _), (y, _), (diagonal, _)) = (
            x.as_chunks::<2>(),
            y.as_chunks_mut::<2>(),
            self.diagonal.as_chunks::<2>(),
        );
        for k in 0..x.len() {
            let [a, b] = x[k];
            let mut sum = [
                diagonal[k][0] * a + between[k] * b,
                between[k] * a + diagonal[k][1] * b,
            ];
            let range = matrix.start[k] as usize..matrix.start[k + 1] as usize;
            for (&i, v) in matrix.row[range.clone()].iter().zip(&blocks[range]) {
                let i = i as usize;
                sum[0] += v[0] * x[i][0] + v[2] * x[i][1];
                sum[1] += v[1] * x[i][0] + v[3] * x[i][1];
                y[i][0] += v[0] * a + v[1] * b;
                y[i][1] += v[2] * a + v[3] * b;
            }
            y[k] = sum;
        }
    }
}
