//! Small problems and dense answers for the tests of the solver.
//!
//! Problems are polynomial: every relation and observation is a sum of terms
//! c x_i x_j ..., so that Jacobians and second derivatives are exact. The
//! dense answers use singular values and none of the solver's own algebra.

use nalgebra::{DMatrix, DVector};

use super::{Evaluation, Options, Outcome, Outside, Problem, Rows, Structure, Symbolic, solve};

/// Numbers from a seed (Steele, Lea and Flood's SplitMix64), the same on every machine.
pub(super) struct Random(pub(super) u64);

impl Random {
    fn bits(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        z ^ (z >> 31)
    }

    /// Uniform in [0, 1).
    pub(super) fn uniform(&mut self) -> f64 {
        (self.bits() >> 11) as f64 / (1_u64 << 53) as f64
    }

    pub(super) fn between(&mut self, low: f64, high: f64) -> f64 {
        low + (high - low) * self.uniform()
    }

    pub(super) fn below(&mut self, n: usize) -> usize {
        (self.uniform() * n as f64) as usize
    }

    /// Standard normal (Box and Muller).
    pub(super) fn normal(&mut self) -> f64 {
        let radius = (-2.0 * (1.0 - self.uniform()).ln()).sqrt();
        radius * (std::f64::consts::TAU * self.uniform()).cos()
    }
}

/// Sum of terms: coefficient times the product of the states listed.
#[derive(Clone, Debug, Default)]
pub(super) struct Polynomial(pub(super) Vec<(f64, Vec<usize>)>);

impl Polynomial {
    pub(super) fn linear(terms: &[(usize, f64)]) -> Self {
        Polynomial(terms.iter().map(|&(j, c)| (c, vec![j])).collect())
    }

    fn states(&self) -> Vec<usize> {
        let mut states: Vec<usize> = self
            .0
            .iter()
            .flat_map(|(_, product)| product.clone())
            .collect();
        states.sort_unstable();
        states.dedup();
        states
    }

    pub(super) fn value(&self, x: &[f64]) -> f64 {
        self.0
            .iter()
            .map(|(c, product)| c * product.iter().map(|&j| x[j]).product::<f64>())
            .sum()
    }

    fn without(&self, state: usize) -> Polynomial {
        let mut terms = Vec::new();
        for (c, product) in &self.0 {
            for (at, _) in product.iter().enumerate().filter(|&(_, &j)| j == state) {
                let mut rest = product.clone();
                rest.remove(at);
                terms.push((*c, rest));
            }
        }
        Polynomial(terms)
    }
}

/// A reading of a polynomial.
#[derive(Clone, Debug)]
pub(super) struct Reading {
    pub(super) of: Polynomial,
    pub(super) value: f64,
    pub(super) sigma: f64,
    pub(super) used: bool,
}

/// A polynomial problem.
#[derive(Clone, Debug)]
pub(super) struct Sample {
    pub(super) relations: Vec<Polynomial>,
    /// Subtracted from each relation.
    pub(super) offsets: Vec<f64>,
    pub(super) relation_used: Vec<bool>,
    pub(super) readings: Vec<Reading>,
    pub(super) state_scale: Vec<f64>,
    pub(super) relation_scale: Vec<f64>,
    /// States below which a function has no value.
    pub(super) lowest: Vec<f64>,
    pub(super) with_curvature: bool,
    structure: Structure,
}

impl Sample {
    pub(super) fn new(
        states: usize,
        relations: Vec<Polynomial>,
        readings: Vec<Reading>,
        bounds: Vec<usize>,
    ) -> Self {
        let lists: Vec<Vec<usize>> = relations.iter().map(Polynomial::states).collect();
        let seen: Vec<Vec<usize>> = readings.iter().map(|reading| reading.of.states()).collect();
        let mut pairs = Vec::new();
        for (_, product) in relations.iter().flat_map(|relation| &relation.0) {
            for (at, &i) in product.iter().enumerate() {
                pairs.extend(
                    product[at + 1..]
                        .iter()
                        .filter(|&&j| j != i)
                        .map(|&j| (i.max(j), i.min(j))),
                );
            }
        }
        pairs.sort_unstable();
        pairs.dedup();
        Sample {
            offsets: vec![0.0; relations.len()],
            relation_used: vec![true; relations.len()],
            state_scale: vec![1.0; states],
            relation_scale: vec![1.0; relations.len()],
            lowest: vec![f64::NEG_INFINITY; states],
            with_curvature: true,
            structure: Structure {
                states,
                relations: Rows::from_lists(&lists),
                observations: Rows::from_lists(&seen),
                bounds,
                pairs,
            },
            relations,
            readings,
        }
    }

    pub(super) fn used(&self) -> Vec<bool> {
        self.readings.iter().map(|reading| reading.used).collect()
    }

    pub(super) fn solve(&self, start: &[f64]) -> Outcome {
        let symbolic = Symbolic::new(&self.structure);
        solve(self, &symbolic, start, &Options::default())
    }
}

impl Problem for Sample {
    fn structure(&self) -> &Structure {
        &self.structure
    }

    fn evaluate(&self, x: &[f64], into: &mut Evaluation) -> Result<(), Outside> {
        if let Some(state) = (0..x.len()).find(|&j| x[j] < self.lowest[j]) {
            return Err(Outside { state });
        }
        for (k, relation) in self.relations.iter().enumerate() {
            let weight = if self.relation_used[k] { 1.0 } else { 0.0 };
            into.f[k] = weight * (relation.value(x) - self.offsets[k]);
            for at in self.structure.relations.range(k) {
                into.f_values[at] = weight
                    * relation
                        .without(self.structure.relations.index[at])
                        .value(x);
            }
        }
        for (i, reading) in self.readings.iter().enumerate() {
            let weight = if reading.used {
                reading.sigma.recip()
            } else {
                0.0
            };
            into.r[i] = weight * (reading.value - reading.of.value(x));
            for at in self.structure.observations.range(i) {
                into.g_values[at] = weight
                    * reading
                        .of
                        .without(self.structure.observations.index[at])
                        .value(x);
            }
        }
        Ok(())
    }

    fn state_scale(&self) -> &[f64] {
        &self.state_scale
    }

    fn relation_scale(&self) -> &[f64] {
        &self.relation_scale
    }

    fn limit(&self, _x: &[f64], _step: &mut [f64]) {}

    fn curvature(
        &self,
        x: &[f64],
        multipliers: &[f64],
        into: &mut Vec<(usize, usize, f64)>,
    ) -> bool {
        into.clear();
        for (relation, multiplier) in self.relations.iter().zip(multipliers) {
            for i in relation.states() {
                let slope = relation.without(i);
                for j in slope.states().into_iter().filter(|&j| j <= i) {
                    into.push((i, j, multiplier * slope.without(j).value(x)));
                }
            }
        }
        self.with_curvature
    }
}

/// Everything about a point, by singular values of dense matrices.
pub(super) struct Oracle {
    /// Covariance of the states, right for those that are determined.
    pub(super) covariance: DMatrix<f64>,
    pub(super) redundancy: Vec<f64>,
    pub(super) relation_rank: usize,
    pub(super) unobservable: usize,
    pub(super) degrees_of_freedom: usize,
    pub(super) observable: Vec<bool>,
    /// Basis of what nothing determines.
    pub(super) null: DMatrix<f64>,
    /// Multipliers and their covariance; where relations depend, of least norm.
    pub(super) multiplier_covariance: DMatrix<f64>,
}

const TINY: f64 = 1e-9;

/// Orthonormal basis of what the matrix sends to rounding of numbers as large as `size`.
fn null_space(matrix: &DMatrix<f64>, size: f64) -> DMatrix<f64> {
    let n = matrix.ncols();
    if n == 0 {
        return DMatrix::zeros(0, 0);
    }
    // Rows of zeros make the matrix square, so that all right vectors come out.
    let mut square = DMatrix::zeros(matrix.nrows().max(n), n);
    square.rows_mut(0, matrix.nrows()).copy_from(matrix);
    let svd = square.svd(false, true);
    let vectors = svd.v_t.expect("asked for").transpose();
    let zero: Vec<usize> = (0..n)
        .filter(|&i| svd.singular_values[i] <= TINY * size)
        .collect();
    vectors.select_columns(&zero)
}

impl Oracle {
    pub(super) fn at(sample: &Sample, evaluation: &Evaluation, active: &[bool]) -> Oracle {
        let structure = sample.structure();
        let n = structure.states;
        let dense = |rows: &Rows, values: &[f64]| {
            let mut matrix = DMatrix::zeros(rows.len(), n);
            for i in 0..rows.len() {
                for at in rows.range(i) {
                    matrix[(i, rows.index[at])] = values[at];
                }
            }
            matrix
        };
        let mut a = dense(&structure.relations, &evaluation.f_values);
        for (&k, _) in structure
            .bounds
            .iter()
            .zip(active)
            .filter(|&(_, &active)| !active)
        {
            a.row_mut(k).fill(0.0);
        }
        let g = dense(&structure.observations, &evaluation.g_values);
        let scale = DMatrix::from_diagonal(&DVector::from_column_slice(&sample.state_scale));
        let (a_scaled, g_scaled) = (&a * &scale, &g * &scale);
        let mut stacked = DMatrix::zeros(a.nrows() + g.nrows(), n);
        stacked.rows_mut(0, a.nrows()).copy_from(&a_scaled);
        stacked.rows_mut(a.nrows(), g.nrows()).copy_from(&g_scaled);
        let null = null_space(&stacked, stacked.norm());
        let free = null_space(&a_scaled, a_scaled.norm());
        let reduced = &g_scaled * &free;
        let idle = null_space(&reduced, g_scaled.norm());
        let inverse = (reduced.transpose() * &reduced + &idle * idle.transpose())
            .try_inverse()
            .expect("regular");
        let scaled = &free * (inverse - &idle * idle.transpose()) * free.transpose();
        let checks = null_space(&reduced.transpose(), g_scaled.norm());
        let residual = &checks * checks.transpose();
        let used = sample.used();
        let redundancy: Vec<f64> = (0..g.nrows())
            .map(|i| if used[i] { residual[(i, i)] } else { 0.0 })
            .collect();
        let relation_rank = n - free.ncols();
        let count = used.iter().filter(|&&used| used).count();
        // l = -A'^+ (G' R r) with R = I - G P G', so cov(l) = A'^+ G' R G A^+.
        let left = null_space(&a.transpose(), a.norm());
        let inverse = (&a * a.transpose() + &left * left.transpose())
            .try_inverse()
            .expect("regular");
        let pull = (inverse - &left * left.transpose()) * &a * g.transpose();
        Oracle {
            redundancy,
            relation_rank,
            unobservable: null.ncols(),
            degrees_of_freedom: relation_rank + count + null.ncols() - n,
            observable: (0..n).map(|j| null.row(j).norm() < 1e-7).collect(),
            null: &scale * null,
            multiplier_covariance: &pull * residual * pull.transpose(),
            covariance: &scale * scaled * &scale,
        }
    }
}

/// A random network of flow balances: `nodes` balances over streams from and to
/// nodes or the edge, some streams read, some read as sums, some read twice.
pub(super) fn random_network(
    random: &mut Random,
    nodes: usize,
    streams: usize,
    measured: f64,
) -> Sample {
    let mut balances = vec![Vec::new(); nodes];
    for j in 0..streams {
        let (from, to) = (random.below(nodes + 1), random.below(nodes + 1));
        if from != to {
            if from < nodes {
                balances[from].push((j, -1.0));
            }
            if to < nodes {
                balances[to].push((j, 1.0));
            }
        }
    }
    let relations = balances
        .iter()
        .filter(|terms| !terms.is_empty())
        .map(|terms| Polynomial::linear(terms))
        .collect();
    let mut readings = Vec::new();
    for j in 0..streams {
        while random.uniform() < measured {
            readings.push(reading(&[(j, 1.0)], random));
            if random.uniform() < 0.8 {
                break;
            }
        }
        if random.uniform() < 0.1 {
            let other = random.below(streams);
            if other != j {
                readings.push(reading(
                    &[(j, 1.0), (other, random.between(-1.0, 1.0))],
                    random,
                ));
            }
        }
    }
    let mut sample = Sample::new(streams, relations, readings, Vec::new());
    sample.state_scale = (0..streams)
        .map(|_| 10_f64.powf(random.between(-1.0, 1.0)))
        .collect();
    sample
}

fn reading(terms: &[(usize, f64)], random: &mut Random) -> Reading {
    Reading {
        of: Polynomial::linear(terms),
        value: random.between(1.0, 10.0),
        sigma: 10_f64.powf(random.between(-0.5, 0.5)),
        used: random.uniform() < 0.95,
    }
}
