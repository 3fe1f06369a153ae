//! Numeric LDL' factorisation of a symmetric quasi-definite matrix, without
//! pivoting (Vanderbei, SIAM J. Optim. 5, 1995, 100), and solves with it.
//!
//! A quasi-definite matrix has a factor with a diagonal D in any elimination
//! order, with as many positive pivots as states. Regularisation makes the
//! augmented matrix so. A state and its partner are eliminated as one block
//!
//! ```text
//! B = | h  e |,   h > 0 > d,   |det B| >= e^2,
//!     | e  d |
//! ```
//!
//! so that the tiny pivots h and d of an unmeasured state and of a relation do
//! not amplify rounding. Where a pivot comes out next to nothing all the same
//! (a block with a small e, or rounding), it is moved away from zero by
//! [`LEAST_PIVOT`]: entries of 1e8 in what follows still leave half of the
//! digits. The factor is a preconditioner: refinement against the true matrix
//! puts that right.

use super::symbolic::Symbolic;

/// Least magnitude of a pivot, in the scaled matrix.
const LEAST_PIVOT: f64 = 1e-8;

/// A factor whose storage is kept from one factorisation to the next.
#[derive(Clone, Debug)]
pub(super) struct Factor {
    /// Entries of L beside `FactorPattern::column_row`; zero within a pair.
    pub(super) lower: Vec<f64>,
    /// Diagonal of D^-1.
    pub(super) inverse: Vec<f64>,
    /// Entry of D^-1 between the first of a pair and the second, at the first.
    pub(super) inverse_between: Vec<f64>,
    row: Vec<f64>,
    next: Vec<u32>,
}

/// What to do about a pivot of the wrong sign.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum WrongSign {
    /// It is rounding, and stands for zero: the matrix is quasi-definite.
    Replace,
    /// Keep it: the inertia is in question.
    Keep,
}

impl Factor {
    pub(super) fn new(symbolic: &Symbolic) -> Self {
        let n = symbolic.dimension();
        Factor {
            lower: vec![0.0; symbolic.fill()],
            inverse: vec![0.0; n],
            inverse_between: vec![0.0; n],
            row: vec![0.0; n],
            next: vec![0; n],
        }
    }

    /// Factors the matrix with the given strict upper triangle and diagonal.
    ///
    /// Returns whether there are as many positive pivots as states, as there are at a point
    /// where the problem is convex on the null space of the relations.
    pub(super) fn factorise(
        &mut self,
        symbolic: &Symbolic,
        upper: &[f64],
        diagonal: &[f64],
        wrong_sign: WrongSign,
    ) -> bool {
        let matrix = &symbolic.matrix;
        let n = diagonal.len();
        self.next.copy_from_slice(&symbolic.factor.column_start[..n]);
        let mut positive = 0;
        for k in 0..n {
            let range = matrix.start[k] as usize..matrix.start[k + 1] as usize;
            for (&i, &value) in matrix.row[range.clone()].iter().zip(&upper[range]) {
                self.row[i as usize] = value;
            }
            let sign = if symbolic.positive[k] { 1.0 } else { -1.0 };
            let mut pivot = diagonal[k] - self.eliminate(symbolic, k);
            if wrong_sign == WrongSign::Replace && !(pivot * sign > 0.0) {
                pivot = 0.0;
            }
            let second = k > 0 && symbolic.leads_pair[k - 1];
            if second {
                positive += self.invert_pair(k - 1, pivot);
            } else if symbolic.leads_pair[k] {
                // Kept as it is until the partner completes the block.
                self.inverse[k] = pivot;
            } else {
                if !(pivot.abs() >= LEAST_PIVOT) {
                    pivot = sign * LEAST_PIVOT;
                }
                positive += usize::from(pivot > 0.0);
                self.inverse[k] = pivot.recip();
            }
        }
        positive == symbolic.states
    }

    /// Computes row k of L from the spread row; returns what it takes from the pivot.
    fn eliminate(&mut self, symbolic: &Symbolic, k: usize) -> f64 {
        let pattern = &symbolic.factor;
        let mut taken = 0.0;
        let columns = &pattern.row_column[pattern.row_start[k] as usize..pattern.row_start[k + 1] as usize];
        let mut at = 0;
        while at < columns.len() {
            let j = columns[at] as usize;
            at += 1;
            let (first, last) = (pattern.column_start[j] as usize, self.next[j] as usize);
            if !symbolic.leads_pair[j] {
                let value = std::mem::take(&mut self.row[j]);
                for (&i, &l) in pattern.column_row[first..last].iter().zip(&self.lower[first..last]) {
                    self.row[i as usize] -= l * value;
                }
                let scaled = value * self.inverse[j];
                self.lower[last] = scaled;
                self.next[j] += 1;
                taken += scaled * value;
                continue;
            }
            self.next[j] += 1;
            if j + 1 == k {
                // The partner itself: what is left of the row is the block's off-diagonal entry.
                self.lower[last] = 0.0;
                self.inverse_between[j] = std::mem::take(&mut self.row[j]);
                continue;
            }
            at += 1;
            let (a, b) = (std::mem::take(&mut self.row[j]), std::mem::take(&mut self.row[j + 1]));
            let (own_first, own_last) = (pattern.column_start[j + 1] as usize, self.next[j + 1] as usize);
            let rows = pattern.column_row[own_first..own_last].iter();
            let lower = self.lower[first + 1..last].iter().zip(&self.lower[own_first..own_last]);
            for (&i, (&la, &lb)) in rows.zip(lower) {
                self.row[i as usize] -= la * a + lb * b;
            }
            let scaled_a = self.inverse[j] * a + self.inverse_between[j] * b;
            let scaled_b = self.inverse_between[j] * a + self.inverse[j + 1] * b;
            self.lower[last] = scaled_a;
            self.lower[own_last] = scaled_b;
            self.next[j + 1] += 1;
            taken += scaled_a * a + scaled_b * b;
        }
        taken
    }

    /// Inverts the block of the pair that starts at j; returns its positive eigenvalues.
    fn invert_pair(&mut self, j: usize, mut d: f64) -> usize {
        let (mut h, e) = (self.inverse[j], self.inverse_between[j]);
        let size = (h * d - e * e).abs();
        if !(LEAST_PIVOT * h.abs() <= size) {
            d -= LEAST_PIVOT;
        }
        if !(LEAST_PIVOT * d.abs() <= size) {
            h += LEAST_PIVOT;
        }
        let determinant = h * d - e * e;
        self.inverse[j] = d / determinant;
        self.inverse[j + 1] = h / determinant;
        self.inverse_between[j] = -e / determinant;
        match determinant < 0.0 {
            true => 1,
            false if h > 0.0 => 2,
            false => 0,
        }
    }

    /// Solves in place, in the elimination order.
    pub(super) fn solve(&self, symbolic: &Symbolic, x: &mut [f64]) {
        let n = x.len();
        let mut j = 0;
        while j < n {
            if symbolic.leads_pair[j] {
                let (a, b) = (x[j], x[j + 1]);
                if a != 0.0 || b != 0.0 {
                    let (rows, lower_a, lower_b) = self.pair(symbolic, j);
                    for (&i, (&la, &lb)) in rows.iter().zip(lower_a.iter().zip(lower_b)) {
                        x[i as usize] -= la * a + lb * b;
                    }
                }
                x[j] = self.inverse[j] * a + self.inverse_between[j] * b;
                x[j + 1] = self.inverse_between[j] * a + self.inverse[j + 1] * b;
                j += 2;
                continue;
            }
            let value = x[j];
            if value != 0.0 {
                let (rows, lower) = self.single(symbolic, j);
                for (&i, &l) in rows.iter().zip(lower) {
                    x[i as usize] -= l * value;
                }
            }
            x[j] = value * self.inverse[j];
            j += 1;
        }
        while j > 0 {
            j -= 1;
            if j > 0 && symbolic.leads_pair[j - 1] {
                j -= 1;
                let (rows, lower_a, lower_b) = self.pair(symbolic, j);
                let (mut a, mut b) = (x[j], x[j + 1]);
                for (&i, (&la, &lb)) in rows.iter().zip(lower_a.iter().zip(lower_b)) {
                    let value = x[i as usize];
                    a -= la * value;
                    b -= lb * value;
                }
                (x[j], x[j + 1]) = (a, b);
                continue;
            }
            let (rows, lower) = self.single(symbolic, j);
            let mut value = x[j];
            for (&i, &l) in rows.iter().zip(lower) {
                value -= l * x[i as usize];
            }
            x[j] = value;
        }
    }

    /// Rows and entries of column j.
    pub(super) fn single<'s>(&self, symbolic: &'s Symbolic, j: usize) -> (&'s [u32], &[f64]) {
        let range = symbolic.factor.column(j);
        (&symbolic.factor.column_row[range.clone()], &self.lower[range])
    }

    /// Rows below a pair, and the entries of its two columns there.
    pub(super) fn pair<'s>(&self, symbolic: &'s Symbolic, j: usize) -> (&'s [u32], &[f64], &[f64]) {
        let (first, second) = (symbolic.factor.column(j), symbolic.factor.column(j + 1));
        (&symbolic.factor.column_row[second.clone()], &self.lower[first.start + 1..first.end], &self.lower[second])
    }
}
