//! Rank of small dense blocks, by Householder QR with column pivoting
//! (Businger and Golub, Numer. Math. 7, 1965, 269).
//!
//! Columns are normalised first, so that the rank does not depend on the units
//! of the unknowns. A block has rank k when, after k steps, no column keeps
//! more than [`RANK_TOLERANCE`] of its length.

/// Fraction of its length that a column must keep to add to the rank.
///
/// Jacobians at a solution are right to about 1e-10 relative, and gradients of
/// real but weak dependence stay above 1e-6.
pub(super) const RANK_TOLERANCE: f64 = 1e-8;

/// An entry of a null vector below this fraction of the largest is zero.
pub(super) const NULL_TOLERANCE: f64 = 1e-7;

/// A = Q R P' of a block, by columns; reflectors below the diagonal.
pub(super) struct PivotedQr {
    columns: Vec<Vec<f64>>,
    /// Scale factor 2 / v'v of each reflector.
    reflector: Vec<f64>,
    /// Top entry of each reflector, whose place R's diagonal takes.
    head: Vec<f64>,
    /// Original number of each column.
    pub(super) order: Vec<usize>,
    /// Length of each original column.
    length: Vec<f64>,
    pub(super) rank: usize,
}

impl PivotedQr {
    /// Factors the block of `rows` rows with the given columns.
    pub(super) fn new(rows: usize, mut columns: Vec<Vec<f64>>) -> Self {
        let length: Vec<f64> = columns.iter().map(|column| square(column).sqrt()).collect();
        for (column, &length) in columns.iter_mut().zip(&length) {
            if length > 0.0 {
                column.iter_mut().for_each(|v| *v /= length);
            }
        }
        let order = (0..columns.len()).collect();
        let mut qr = PivotedQr {
            columns,
            reflector: Vec::new(),
            head: Vec::new(),
            order,
            length,
            rank: 0,
        };
        while qr.rank < rows.min(qr.columns.len()) && qr.eliminate() {
            qr.rank += 1;
        }
        qr
    }

    /// One Householder step; false where what is left counts as zero.
    fn eliminate(&mut self) -> bool {
        let step = self.rank;
        let mut best = (step, 0.0);
        for (j, column) in self.columns.iter().enumerate().skip(step) {
            let left = square(&column[step..]);
            // A tie goes to the earlier column, but for rounding.
            if left > best.1 * (1.0 + 1e-12) {
                best = (j, left);
            }
        }
        if best.1.sqrt() <= RANK_TOLERANCE {
            return false;
        }
        // The columns passed over keep their order: which ones end up dependent
        // should not depend on the pivots before.
        self.columns[step..=best.0].rotate_right(1);
        self.order[step..=best.0].rotate_right(1);
        let (done, rest) = self.columns.split_at_mut(step + 1);
        let pivot = &mut done[step][step..];
        let diagonal = if pivot[0] > 0.0 {
            -best.1.sqrt()
        } else {
            best.1.sqrt()
        };
        let head = pivot[0] - diagonal;
        pivot[0] = head;
        let scale = 2.0 / square(pivot);
        for column in rest {
            reflect(pivot, scale, &mut column[step..]);
        }
        pivot[0] = diagonal;
        self.head.push(head);
        self.reflector.push(scale);
        true
    }

    /// y = Q' y; the entries from the rank on belong to the left null space.
    pub(super) fn apply_transpose(&self, y: &mut [f64]) {
        for step in 0..self.rank {
            let below = &self.columns[step][step + 1..];
            let dot = self.head[step] * y[step]
                + below
                    .iter()
                    .zip(&y[step + 1..])
                    .map(|(a, b)| a * b)
                    .sum::<f64>();
            let factor = self.reflector[step] * dot;
            y[step] -= factor * self.head[step];
            for (v, b) in y[step + 1..].iter_mut().zip(below) {
                *v -= factor * b;
            }
        }
    }

    /// Vectors that span the right null space, each with the column that only it moves.
    pub(super) fn null_vectors(&self) -> Vec<(usize, Vec<f64>)> {
        (self.rank..self.columns.len())
            .map(|free| (self.order[free], self.null_vector(free)))
            .collect()
    }

    fn null_vector(&self, free: usize) -> Vec<f64> {
        let rank = self.rank;
        let mut top: Vec<f64> = self.columns[free][..rank].iter().map(|v| -v).collect();
        for i in (0..rank).rev() {
            top[i] /= self.columns[i][i];
            let value = top[i];
            for (v, r) in top[..i].iter_mut().zip(&self.columns[i][..i]) {
                *v -= r * value;
            }
        }
        let mut vector = vec![0.0; self.columns.len()];
        let largest = top.iter().fold(1.0, |largest: f64, v| largest.max(v.abs()));
        for (i, value) in top.into_iter().enumerate() {
            // What rounding left of a zero would make a determined state look undetermined.
            if value.abs() > NULL_TOLERANCE * largest {
                vector[self.order[i]] = value / self.length[self.order[i]];
            }
        }
        let length = self.length[self.order[free]];
        vector[self.order[free]] = if length > 0.0 { length.recip() } else { 1.0 };
        vector
    }
}

fn square(v: &[f64]) -> f64 {
    v.iter().map(|a| a * a).sum()
}

fn reflect(v: &[f64], scale: f64, y: &mut [f64]) {
    let factor = scale * v.iter().zip(y.iter()).map(|(a, b)| a * b).sum::<f64>();
    for (a, b) in y.iter_mut().zip(v) {
        *a -= factor * b;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn rank_null_space_and_left_null_space_of_a_deficient_block() {
        // Third column = first + 2 second; third row = first - second.
        let rows = [
            [1.0, 2.0, 5.0, 0.5],
            [3.0, -1.0, 1.0, 2.0],
            [-2.0, 3.0, 4.0, -1.5],
        ];
        let columns: Vec<Vec<f64>> = (0..4)
            .map(|j| rows.iter().map(|row| row[j]).collect())
            .collect();
        let qr = PivotedQr::new(3, columns.clone());
        assert_eq!(qr.rank, 2);
        for (_, vector) in qr.null_vectors() {
            for row in rows {
                let product: f64 = row.iter().zip(&vector).map(|(a, b)| a * b).sum();
                assert!(product.abs() < 1e-12);
            }
        }
        for mut column in columns {
            qr.apply_transpose(&mut column);
            assert!(column[2].abs() < 1e-12);
        }
    }

    #[test]
    fn columns_of_very_different_size_count_alike() {
        let qr = PivotedQr::new(2, vec![vec![1e9, 0.0], vec![0.0, 1e-9]]);
        assert_eq!(qr.rank, 2);
    }

    #[test]
    fn the_later_of_two_equal_columns_is_the_dependent_one() {
        let qr = PivotedQr::new(
            3,
            vec![
                vec![0.0, 1.0, 1.0],
                vec![1.0, 1.0, 0.0],
                vec![1.0, 1.0, 0.0],
            ],
        );
        assert_eq!((qr.rank, qr.order[2]), (2, 2));
    }
}
