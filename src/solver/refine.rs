//! Solutions of the true augmented matrix with the factor of the regularised one.
//!
//! Iterative refinement first; where that is too slow (nearly unobservable
//! states), a few steps of GMRES preconditioned with the factor (Saad and
//! Schultz, SIAM J. Sci. Stat. Comput. 7, 1986, 856).

use super::system::System;

/// Steps of GMRES before the best solution so far is taken.
const KRYLOV_STEPS: usize = 20;

impl System<'_> {
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
            if reached.is_nan() || reached >= 0.1 * before {
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
            if length == 0.0 || !length.is_finite() {
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
