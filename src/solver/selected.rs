//! Selected inverse: the entries of K^-1 on the pattern of the factor, without
//! the rest (Takahashi, Fagan and Chen 1973; Erisman and Tinney, Commun. ACM
//! 18, 1975, 177).
//!
//! From K = L D L' follows Z = D^-1 L^-1 + (I - L') Z for Z = K^-1, so that,
//! from the last column to the first and for i > j in the pattern,
//!
//! Z_ij = - sum over k of Z_ik L_kj,    Z_jj = 1 / D_j - sum over k of L_kj Z_kj.
//!
//! Every Z_ik on the right is in the pattern: the rows of a column of L form a
//! clique.
//!
//! A pair of the factor is taken as one column of 2x2 blocks. Where the entries
//! of L or of D^-1 are large all the same (a partner whose coefficient is small
//! here), the column of Z is solved for with the factor, before others build on
//! it: the squares of large entries would drown it in rounding.

use super::factor::Factor;
use super::symbolic::Symbolic;

/// Entries of the block form of L, and of its pivots' inverses, above which the
/// recurrence would lose half of its digits.
const LARGE: f64 = 1e4;

/// K^-1 on the diagonal and beside the entries of L.
#[derive(Clone, Debug)]
pub(super) struct Selected {
    diagonal: Vec<f64>,
    lower: Vec<f64>,
}

/// One column of the block form of L, and of Z, spread over all rows.
struct Spread {
    lower: Vec<f64>,
    /// Sums over k of Z_ik L_kj.
    sum: Vec<f64>,
}

impl Spread {
    fn new(n: usize) -> Self {
        Spread { lower: vec![0.0; n], sum: vec![0.0; n] }
    }
}

impl Selected {
    pub(super) fn of(symbolic: &Symbolic, factor: &Factor) -> Self {
        let n = symbolic.dimension();
        let mut selected = Selected { diagonal: vec![0.0; n], lower: vec![0.0; symbolic.fill()] };
        let mut owner = vec![u32::MAX; n];
        let (mut own, mut state) = (Spread::new(n), Spread::new(n));
        let mut j = n;
        while j > 0 {
            j -= 1;
            if j > 0 && symbolic.leads_pair[j - 1] {
                j -= 1;
                selected.pair(symbolic, factor, j, &mut owner, &mut state, &mut own);
            } else {
                selected.single(symbolic, factor, j, &mut owner, &mut own);
            }
        }
        selected
    }

    /// Column j on its own.
    fn single(&mut self, symbolic: &Symbolic, factor: &Factor, j: usize, owner: &mut [u32], own: &mut Spread) {
        let (rows, entries) = factor.single(symbolic, j);
        if largest(entries).max(factor.inverse[j].abs()) > LARGE {
            return self.solve_for(symbolic, factor, j);
        }
        for (&k, &l) in rows.iter().zip(entries) {
            own.lower[k as usize] = l;
            own.sum[k as usize] = 0.0;
            owner[k as usize] = j as u32;
        }
        for &k in rows {
            let k = k as usize;
            let l = own.lower[k];
            let mut total = own.sum[k] + self.diagonal[k] * l;
            let column = symbolic.factor.column(k);
            for (&i, &z) in symbolic.factor.column_row[column.clone()].iter().zip(&self.lower[column]) {
                let i = i as usize;
                if owner[i] == j as u32 {
                    total += z * own.lower[i];
                    own.sum[i] += z * l;
                }
            }
            own.sum[k] = total;
        }
        let mut pivot = factor.inverse[j];
        for (&k, (z, &l)) in rows.iter().zip(self.lower[symbolic.factor.column(j)].iter_mut().zip(entries)) {
            *z = -own.sum[k as usize];
            pivot -= l * *z;
        }
        self.diagonal[j] = pivot;
    }

    /// Columns j and j + 1, a state and its partner, as one block.
    fn pair(&mut self, symbolic: &Symbolic, factor: &Factor, j: usize, owner: &mut [u32], state: &mut Spread, own: &mut Spread) {
        let (rows, state_entries, entries) = factor.pair(symbolic, j);
        let (mut z_state, mut z_between, mut z_own) = (factor.inverse[j], factor.inverse_between[j], factor.inverse[j + 1]);
        if largest(entries).max(largest(state_entries)).max(largest(&[z_state, z_between, z_own])) > LARGE {
            self.solve_for(symbolic, factor, j + 1);
            return self.solve_for(symbolic, factor, j);
        }
        for (&k, (&s, &l)) in rows.iter().zip(state_entries.iter().zip(entries)) {
            let k = k as usize;
            (own.lower[k], own.sum[k]) = (l, 0.0);
            (state.lower[k], state.sum[k]) = (s, 0.0);
            owner[k] = j as u32;
        }
        for &k in rows {
            let k = k as usize;
            let (s, l) = (state.lower[k], own.lower[k]);
            let mut total_state = state.sum[k] + self.diagonal[k] * s;
            let mut total = own.sum[k] + self.diagonal[k] * l;
            let column = symbolic.factor.column(k);
            for (&i, &z) in symbolic.factor.column_row[column.clone()].iter().zip(&self.lower[column]) {
                let i = i as usize;
                if owner[i] == j as u32 {
                    total_state += z * state.lower[i];
                    total += z * own.lower[i];
                    state.sum[i] += z * s;
                    own.sum[i] += z * l;
                }
            }
            state.sum[k] = total_state;
            own.sum[k] = total;
        }
        let (first, second) = (symbolic.factor.column(j), symbolic.factor.column(j + 1));
        for (at, &k) in rows.iter().enumerate() {
            let k = k as usize;
            self.lower[first.start + 1 + at] = -state.sum[k];
            self.lower[second.start + at] = -own.sum[k];
            z_state += state.lower[k] * state.sum[k];
            z_between += own.lower[k] * state.sum[k];
            z_own += own.lower[k] * own.sum[k];
        }
        self.lower[first.start] = z_between;
        self.diagonal[j] = z_state;
        self.diagonal[j + 1] = z_own;
    }

    /// Column j by a solve with the factor.
    fn solve_for(&mut self, symbolic: &Symbolic, factor: &Factor, j: usize) {
        let mut column = vec![0.0; symbolic.dimension()];
        column[j] = 1.0;
        factor.solve(symbolic, &mut column);
        let range = symbolic.factor.column(j);
        for (&k, z) in symbolic.factor.column_row[range.clone()].iter().zip(&mut self.lower[range]) {
            *z = column[k as usize];
        }
        self.diagonal[j] = column[j];
    }

    /// Diagonal entry at a place of the elimination order.
    pub(super) fn diagonal(&self, place: usize) -> f64 {
        self.diagonal[place]
    }

    /// Entry at two places, if the pattern holds it.
    pub(super) fn entry(&self, symbolic: &Symbolic, a: usize, b: usize) -> Option<f64> {
        if a == b {
            return Some(self.diagonal[a]);
        }
        let (column, row) = (a.min(b), a.max(b) as u32);
        let range = symbolic.factor.column(column);
        let at = symbolic.factor.column_row[range.clone()].binary_search(&row).ok()?;
        Some(self.lower[range.start + at])
    }
}

fn largest(entries: &[f64]) -> f64 {
    entries.iter().fold(0.0, |largest, entry| largest.max(entry.abs()))
}
