//! Numeric LDL' factorisation of a symmetric quasi-definite matrix in 2x2
//! blocks, without pivoting (Vanderbei, SIAM J. Optim. 5, 1995, 100), and
//! solves with it.
//!
//! A quasi-definite matrix has such a factor in any elimination order. Every
//! diagonal block pairs a state with a relation,
//!
//! ```text
//! B = | h  e |,   h >= 0 >= d,   |det B| >= e^2,
//!     | e  d |
//! ```
//!
//! so that the tiny h and d of an unmeasured state and of a relation do not
//! amplify rounding. Where a block comes out next to singular all the same (a
//! small e, or rounding), h and d are moved away from zero by [`LEAST_PIVOT`]:
//! entries of 1e8 in what follows still leave half of the digits. The factor is
//! a preconditioner: refinement against the true matrix puts that right.

use super::symbolic::Symbolic;

/// Least magnitude of a pivot, in the scaled matrix.
const LEAST_PIVOT: f64 = 1e-8;

/// A 2x2 block by rows.
pub(super) type Block2 = [f64; 4];

/// A factor whose storage is kept from one factorisation to the next.
#[derive(Clone, Debug)]
pub(super) struct Factor {
    /// Blocks of L beside `FactorPattern::column_row`.
    pub(super) lower: Vec<Block2>,
    /// Diagonal blocks of D^-1 as h, e, d.
    pub(super) inverse: Vec<[f64; 3]>,
    /// Block column of the upper triangle, spread over all rows.
    column: Vec<Block2>,
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
        let n = symbolic.blocks();
        Factor {
            lower: vec![[0.0; 4]; symbolic.factor.column_row.len()],
            inverse: vec![[0.0; 3]; n],
            column: vec![[0.0; 4]; n],
            next: vec![0; n],
        }
    }

    /// Factors the matrix with the given values (see `Pattern`) and diagonal.
    ///
    /// Returns whether there are as many positive eigenvalues as there are at a
    /// point where the problem is convex on the null space of the relations:
    /// one per block.
    pub(super) fn factorise(
        &mut self,
        symbolic: &Symbolic,
        values: &[f64],
        diagonal: &[f64],
        wrong_sign: WrongSign,
    ) -> bool {
        let matrix = &symbolic.matrix;
        let n = symbolic.blocks();
        let (blocks, _) = values.as_chunks::<4>();
        let between = &values[4 * matrix.row.len()..];
        self.next
            .copy_from_slice(&symbolic.factor.column_start[..n]);
        let mut positive = 0;
        for k in 0..n {
            let range = matrix.start[k] as usize..matrix.start[k + 1] as usize;
            for (&i, &block) in matrix.row[range.clone()].iter().zip(&blocks[range]) {
                self.column[i as usize] = block;
            }
            let taken = self.eliminate(symbolic, k);
            let pivot = [
                diagonal[2 * k] - taken[0],
                between[k] - taken[1],
                diagonal[2 * k + 1] - taken[2],
            ];
            positive += self.invert(k, pivot, wrong_sign);
        }
        positive == n
    }

    /// Computes row k of L from the spread column; returns what it takes from the diagonal block.
    fn eliminate(&mut self, symbolic: &Symbolic, k: usize) -> [f64; 3] {
        let pattern = &symbolic.factor;
        let mut taken = [0.0; 3];
        for &j in
            &pattern.row_column[pattern.row_start[k] as usize..pattern.row_start[k + 1] as usize]
        {
            let j = j as usize;
            let (first, last) = (pattern.column_start[j] as usize, self.next[j] as usize);
            let [y00, y01, y10, y11] = std::mem::take(&mut self.column[j]);
            for (&i, l) in pattern.column_row[first..last]
                .iter()
                .zip(&self.lower[first..last])
            {
                let target = &mut self.column[i as usize];
                target[0] -= l[0] * y00 + l[1] * y10;
                target[1] -= l[0] * y01 + l[1] * y11;
                target[2] -= l[2] * y00 + l[3] * y10;
                target[3] -= l[2] * y01 + l[3] * y11;
            }
            let [h, e, d] = self.inverse[j];
            let (t00, t01) = (h * y00 + e * y10, h * y01 + e * y11);
            let (t10, t11) = (e * y00 + d * y10, e * y01 + d * y11);
            self.lower[last] = [t00, t10, t01, t11];
            self.next[j] += 1;
            taken[0] += t00 * y00 + t10 * y10;
            taken[1] += t00 * y01 + t10 * y11;
            taken[2] += t01 * y01 + t11 * y11;
        }
        taken
    }

    /// Inverts the diagonal block k; returns the number of its positive eigenvalues.
    fn invert(&mut self, k: usize, [mut h, e, mut d]: [f64; 3], wrong_sign: WrongSign) -> usize {
        if wrong_sign == WrongSign::Replace {
            // Written so that not-a-number ends up as zero too.
            h = if h > 0.0 { h } else { 0.0 };
            d = if d < 0.0 { d } else { 0.0 };
        }
        let singular = |h: f64, d: f64, pivot: f64| {
            let determinant = (h * d - e * e).abs();
            determinant < LEAST_PIVOT * pivot.abs().max(LEAST_PIVOT)
        };
        if singular(h, d, h) {
            d += if d > 0.0 { LEAST_PIVOT } else { -LEAST_PIVOT };
        }
        if singular(h, d, d) {
            h += if h < 0.0 { -LEAST_PIVOT } else { LEAST_PIVOT };
        }
        let determinant = h * d - e * e;
        self.inverse[k] = [d / determinant, -e / determinant, h / determinant];
        match determinant < 0.0 {
            true => 1,
            false if h > 0.0 => 2,
            false => 0,
        }
    }

    /// Solves in place, in the elimination order.
    pub(super) fn solve(&self, symbolic: &Symbolic, x: &mut [f64]) {
        let pattern = &symbolic.factor;
        let (x, _) = x.as_chunks_mut::<2>();
        for (j, [h, e, d]) in self.inverse.iter().enumerate() {
            let [a, b] = x[j];
            if a == 0.0 && b == 0.0 {
                continue;
            }
            let range = pattern.column(j);
            for (&i, l) in pattern.column_row[range.clone()]
                .iter()
                .zip(&self.lower[range])
            {
                let target = &mut x[i as usize];
                target[0] -= l[0] * a + l[1] * b;
                target[1] -= l[2] * a + l[3] * b;
            }
            x[j] = [h * a + e * b, e * a + d * b];
        }
        for j in (0..self.inverse.len()).rev() {
            let range = pattern.column(j);
            let [mut a, mut b] = x[j];
            for (&i, l) in pattern.column_row[range.clone()]
                .iter()
                .zip(&self.lower[range])
            {
                let [c, d] = x[i as usize];
                a -= l[0] * c + l[2] * d;
                b -= l[1] * c + l[3] * d;
            }
            x[j] = [a, b];
        }
    }

    /// Rows and blocks of column j of L.
    pub(super) fn column<'s>(&self, symbolic: &'s Symbolic, j: usize) -> (&'s [u32], &[Block2]) {
        let range = symbolic.factor.column(j);
        (
            &symbolic.factor.column_row[range.clone()],
            &self.lower[range],
        )
    }
}
