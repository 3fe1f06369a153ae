//! Selected inverse: the entries of K^-1 on the pattern of the factor, without
//! the rest (Takahashi, Fagan and Chen 1973; Erisman and Tinney, Commun. ACM
//! 18, 1975, 177).
//!
//! From K = L D L' follows Z = D^-1 L^-1 + (I - L') Z for Z = K^-1, so that,
//! from the last block column to the first and for i > j in the pattern,
//!
//! Z_ij = - sum over k of Z_ik L_kj,    Z_jj = D_j^-1 - sum over k of L_kj' Z_kj.
//!
//! Every Z_ik on the right is in the pattern: the rows of a column of L form a
//! clique. Where entries of L or of D^-1 are large (a partner whose coefficient
//! is small here), the column of Z is solved for with the factor, before others
//! build on it: the squares of large entries would drown it in rounding.

use super::factor::{Block2, Factor};
use super::symbolic::Symbolic;

/// Entries above this would cost the recurrence half of its digits.
const LARGE: f64 = 1e4;

/// K^-1 in blocks on the diagonal and beside those of L.
#[derive(Clone, Debug)]
pub(super) struct Selected {
    diagonal: Vec<Block2>,
    lower: Vec<Block2>,
}

/// One block column of L spread over all rows, and the sums over k of Z_ik L_kj.
struct Spread {
    owner: Vec<u32>,
    lower: Vec<Block2>,
    sum: Vec<Block2>,
}

impl Selected {
    pub(super) fn of(symbolic: &Symbolic, factor: &Factor) -> Self {
        let n = symbolic.blocks();
        let mut selected = Selected {
            diagonal: vec![[0.0; 4]; n],
            lower: vec![[0.0; 4]; factor.lower.len()],
        };
        let mut spread = Spread {
            owner: vec![u32::MAX; n],
            lower: vec![[0.0; 4]; n],
            sum: vec![[0.0; 4]; n],
        };
        for j in (0..n).rev() {
            let largest = |entries: &[f64]| entries.iter().fold(0.0, |a: f64, b| a.max(b.abs()));
            let (_, blocks) = factor.column(symbolic, j);
            if largest(blocks.as_flattened()).max(largest(&factor.inverse[j])) > LARGE {
                selected.solve_for(symbolic, factor, j);
            } else {
                selected.recur(symbolic, factor, j, &mut spread);
            }
        }
        selected
    }

    /// Block column j by the recurrence.
    fn recur(&mut self, symbolic: &Symbolic, factor: &Factor, j: usize, spread: &mut Spread) {
        let pattern = &symbolic.factor;
        let (rows, blocks) = factor.column(symbolic, j);
        for (&k, &block) in rows.iter().zip(blocks) {
            let k = k as usize;
            (spread.owner[k], spread.lower[k], spread.sum[k]) = (j as u32, block, [0.0; 4]);
        }
        for &k in rows {
            let k = k as usize;
            let own = spread.lower[k];
            let mut total = spread.sum[k];
            add_product(&mut total, &self.diagonal[k], &own);
            let column = pattern.column(k);
            for (&i, z) in pattern.column_row[column.clone()]
                .iter()
                .zip(&self.lower[column])
            {
                let i = i as usize;
                if spread.owner[i] == j as u32 {
                    add_product(&mut total, &transposed(z), &spread.lower[i]);
                    add_product(&mut spread.sum[i], z, &own);
                }
            }
            spread.sum[k] = total;
        }
        let [h, e, d] = factor.inverse[j];
        let mut diagonal = [h, e, e, d];
        for ((&k, block), z) in rows
            .iter()
            .zip(blocks)
            .zip(&mut self.lower[pattern.column(j)])
        {
            let sum = &spread.sum[k as usize];
            *z = sum.map(|value| -value);
            add_product(&mut diagonal, &transposed(block), sum);
        }
        self.diagonal[j] = diagonal;
    }

    /// Block column j by solves with the factor.
    fn solve_for(&mut self, symbolic: &Symbolic, factor: &Factor, j: usize) {
        let range = symbolic.factor.column(j);
        let rows = &symbolic.factor.column_row[range.clone()];
        for side in 0..2 {
            let mut column = vec![0.0; symbolic.dimension()];
            column[2 * j + side] = 1.0;
            factor.solve(symbolic, &mut column);
            for (&k, z) in rows.iter().zip(&mut self.lower[range.clone()]) {
                let k = 2 * k as usize;
                (z[side], z[2 + side]) = (column[k], column[k + 1]);
            }
            (self.diagonal[j][side], self.diagonal[j][2 + side]) =
                (column[2 * j], column[2 * j + 1]);
        }
    }

    /// Adds `weight` z z' on the pattern.
    pub(super) fn add_outer_product(&mut self, symbolic: &Symbolic, weight: f64, z: &[f64]) {
        let (z, _) = z.as_chunks::<2>();
        let add = |block: &mut Block2, [a, b]: [f64; 2], [c, d]: [f64; 2]| {
            block[0] += weight * a * c;
            block[1] += weight * a * d;
            block[2] += weight * b * c;
            block[3] += weight * b * d;
        };
        for (j, diagonal) in self.diagonal.iter_mut().enumerate() {
            add(diagonal, z[j], z[j]);
            let range = symbolic.factor.column(j);
            let rows = &symbolic.factor.column_row[range.clone()];
            for (&i, block) in rows.iter().zip(&mut self.lower[range]) {
                add(block, z[i as usize], z[j]);
            }
        }
    }

    /// Diagonal entry at a place of the elimination order.
    pub(super) fn diagonal(&self, place: usize) -> f64 {
        self.diagonal[place / 2][3 * (place % 2)]
    }

    /// Entry at two places, if the pattern holds it.
    pub(super) fn entry(&self, symbolic: &Symbolic, a: usize, b: usize) -> Option<f64> {
        let (early, late) = (a.min(b), a.max(b));
        let within = 2 * (late % 2) + early % 2;
        if early / 2 == late / 2 {
            return Some(self.diagonal[early / 2][within]);
        }
        let range = symbolic.factor.column(early / 2);
        let at = symbolic.factor.column_row[range.clone()]
            .binary_search(&((late / 2) as u32))
            .ok()?;
        Some(self.lower[range.start + at][within])
    }
}

fn transposed(a: &Block2) -> Block2 {
    [a[0], a[2], a[1], a[3]]
}

/// sum += a b
fn add_product(sum: &mut Block2, a: &Block2, b: &Block2) {
    sum[0] += a[0] * b[0] + a[1] * b[2];
    sum[1] += a[0] * b[1] + a[1] * b[3];
    sum[2] += a[2] * b[0] + a[3] * b[2];
    sum[3] += a[2] * b[1] + a[3] * b[3];
}
