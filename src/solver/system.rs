//! The augmented system at one point: assembled, scaled, factored, solved.
//!
//! States are scaled by their typical uncertainty, relations by the norm of
//! their (scaled) gradient, so that every unknown and every right-hand side is
//! of order one, in units of sigma. A relation that is out of use gets -1 on
//! its diagonal and nothing else: its multiplier stays zero and nothing else
//! notices.
//!
//! The factor is that of K + diag(+d, -e): regularised. Solutions are those of
//! K itself, by refinement and, where that is too slow (nearly unobservable
//! states), by a few steps of GMRES preconditioned with the factor.

use super::factor::{Factor, WrongSign};
use super::problem::{Evaluation, Structure};
use super::symbolic::Symbolic;

/// Added to the diagonal of each scaled state.
pub(super) const STATE_REGULARISATION: f64 = 1e-7;
/// Taken from the diagonal of each normalised relation.
pub(super) const RELATION_REGULARISATION: f64 = 1e-9;
/// Steps of GMRES before the best solution so far is taken.
const KRYLOV_STEPS: usize = 20;
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
    upper: Vec<f64>,
    diagonal: Vec<f64>,
    regularised: Vec<f64>,
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
    pub(super) fn new(symbolic: &'a Symbolic, structure: &'a Structure, state_scale: &'a [f64], relation_scale: &'a [f64]) -> Self {
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
            upper: vec![0.0; symbolic.matrix.row.len()],
            diagonal: vec![0.0; n],
            regularised: vec![0.0; n],
        }
    }

    /// Fills the matrix at a point. `in_use` says which relations take part.
    pub(super) fn assemble(&mut self, at: &Evaluation, in_use: &[bool], block: Block) {
        self.upper.fill(0.0);
        self.diagonal.fill(0.0);
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
        for k in 0..rows.len() {
            let range = rows.range(k);
            let (index, values) = (&rows.index[range.clone()], &at.f_values[range.clone()]);
            let square: f64 = index.iter().zip(values).map(|(&j, v)| (v * self.state_scale[j]).powi(2)).sum();
            let norm = square.sqrt();
            let place = self.symbolic.relation_place(k);
            if in_use[k] && norm > NO_GRADIENT * self.relation_scale[k] {
                let scale = norm.recip();
                self.row_scale[k] = scale;
                for ((&j, v), &slot) in index.iter().zip(values).zip(&self.symbolic.relation_slot[range]) {
                    self.upper[slot as usize] = v * self.state_scale[j] * scale;
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
                self.upper[slot] = -at.g_values[at_entry] * self.state_scale[rows.index[at_entry]];
            }
        }
    }

    fn add_curvature(&mut self, entries: &[(usize, usize, f64)]) {
        for &(i, j, value) in entries {
            let value = value * self.state_scale[i] * self.state_scale[j];
            if i == j {
                self.diagonal[self.symbolic.place[i] as usize] += value;
            } else if let Some(slot) = self.symbolic.slot_of_pair(i, j) {
                self.upper[slot as usize] += value;
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
        self.factor.factorise(self.symbolic, &self.upper, &self.regularised, wrong_sign)
    }

    /// Right-hand side of a step: minus the gradient of the Lagrangian, minus the relations.
    pub(super) fn right_hand_side(&self, at: &Evaluation, multipliers: &[f64], rhs: &mut [f64]) {
        rhs.fill(0.0);
        let (place, scale) = (&self.symbolic.place, self.state_scale);
        let observations = &self.structure.observations;
        for i in 0..observations.len() {
            let range = observations.range(i);
            for (&j, g) in observations.index[range.clone()].iter().zip(&at.g_values[range]) {
                rhs[place[j] as usize] += scale[j] * g * at.r[i];
            }
        }
        let relations = &self.structure.relations;
        for k in 0..relations.len() {
            if self.row_scale[k] == 0.0 {
                continue;
            }
            rhs[self.symbolic.relation_place(k)] = -self.row_scale[k] * at.f[k];
            let range = relations.range(k);
            for (&j, v) in relations.index[range.clone()].iter().zip(&at.f_values[range]) {
                rhs[place[j] as usize] -= scale[j] * v * multipliers[k];
            }
        }
    }

    /// y = K x, without the regularisation.
    fn multiply(&self, x: &[f64], y: &mut [f64]) {
        let matrix = &self.symbolic.matrix;
        for k in 0..x.len() {
            let range = matrix.start[k] as usize..matrix.start[k + 1] as usize;
            let mut sum = self.diagonal[k] * x[k];
            for (&i, &value) in matrix.row[range.clone()].iter().zip(&self.upper[range]) {
                sum += value * x[i as usize];
                y[i as usize] += value * x[k];
            }
            y[k] = sum;
        }
    }

    /// Solves K x = rhs until the residual is below `tolerance` times the
    /// right-hand side, or gets no smaller. Returns the ratio reached.
    pub(super) fn solve(&self, rhs: &[f64], x: &mut [f64], tolerance: f64) -> f64 {
        let size = norm(rhs);
        if size == 0.0 {
            x.fill(0.0);
            return 0.0;
        }
        x.copy_from_slice(rhs);
        self.factor.solve(self.symbolic, x);
        let mut residual = vec![0.0; rhs.len()];
        let mut reached = self.residual(rhs, x, &mut residual) / size;
        while reached > tolerance {
            let mut correction = residual.clone();
            self.factor.solve(self.symbolic, &mut correction);
            let before = reached;
            add(x, 1.0, &correction);
            reached = self.residual(rhs, x, &mut residual) / size;
            if !(reached < 0.1 * before) {
                break;
            }
        }
        if reached > tolerance || reached.is_nan() {
            reached = self.krylov(rhs, x, tolerance, size);
        }
        reached
    }

    /// residual = rhs - K x; returns its norm.
    fn residual(&self, rhs: &[f64], x: &[f64], residual: &mut [f64]) -> f64 {
        self.multiply(x, residual);
        for (r, b) in residual.iter_mut().zip(rhs) {
            *r = b - *r;
        }
        norm(residual)
    }

    /// GMRES from zero, preconditioned from the right with the factor (Saad and Schultz 1986).
    fn krylov(&self, rhs: &[f64], x: &mut [f64], tolerance: f64, size: f64) -> f64 {
        let n = rhs.len();
        let mut basis: Vec<Vec<f64>> = vec![rhs.iter().map(|b| b / size).collect()];
        // Upper triangle of the Hessenberg matrix after Givens rotations, by columns.
        let mut columns: Vec<Vec<f64>> = Vec::new();
        let mut rotations: Vec<(f64, f64)> = Vec::new();
        let mut reduced = vec![size];
        while columns.len() < KRYLOV_STEPS && reduced[columns.len()].abs() > tolerance * size {
            let mut direction = basis[columns.len()].clone();
            self.factor.solve(self.symbolic, &mut direction);
            let mut image = vec![0.0; n];
            self.multiply(&direction, &mut image);
            let mut column = Vec::with_capacity(basis.len() + 1);
            for v in &basis {
                let h = dot(v, &image);
                add(&mut image, -h, v);
                column.push(h);
            }
            for (v, h) in basis.iter().zip(&mut column) {
                let again = dot(v, &image);
                add(&mut image, -again, v);
                *h += again;
            }
            let rest = norm(&image);
            for (i, &(c, s)) in rotations.iter().enumerate() {
                (column[i], column[i + 1]) = rotate(c, s, column[i], column[i + 1]);
            }
            let last = column.len() - 1;
            let length = column[last].hypot(rest);
            if !(length > 0.0) || !length.is_finite() {
                break;
            }
            let (c, s) = (column[last] / length, rest / length);
            column[last] = length;
            columns.push(column);
            rotations.push((c, s));
            let top = reduced[columns.len() - 1];
            reduced[columns.len() - 1] = c * top;
            reduced.push(-s * top);
            if rest <= 1e-14 * length {
                break;
            }
            basis.push(image.iter().map(|v| v / rest).collect());
        }
        let steps = columns.len();
        let mut weights = vec![0.0; steps];
        for i in (0..steps).rev() {
            let known: f64 = (i + 1..steps).map(|j| columns[j][i] * weights[j]).sum();
            weights[i] = (reduced[i] - known) / columns[i][i];
        }
        x.fill(0.0);
        for (v, weight) in basis.iter().zip(&weights) {
            add(x, *weight, v);
        }
        self.factor.solve(self.symbolic, x);
        self.residual(rhs, x, &mut vec![0.0; n]) / size
    }
}

fn rotate(c: f64, s: f64, a: f64, b: f64) -> (f64, f64) {
    (c * a + s * b, c * b - s * a)
}

fn add(x: &mut [f64], factor: f64, y: &[f64]) {
    for (a, b) in x.iter_mut().zip(y) {
        *a += factor * b;
    }
}

fn dot(x: &[f64], y: &[f64]) -> f64 {
    x.iter().zip(y).map(|(a, b)| a * b).sum()
}

/// Euclidean norm.
pub(super) fn norm(x: &[f64]) -> f64 {
    dot(x, x).sqrt()
}
