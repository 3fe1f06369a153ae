//! A robust start for the search: many gross errors at once do not mask each
//! other.
//!
//! Least squares spreads a gross error over its neighbours; of several, the sum
//! can look like something else. The M-estimator of Welsch (Dennis and Welsch
//! 1978) minimises the sum of k^2/2 (1 - exp(-(r/k)^2)), whose influence falls
//! back to nothing for large r. It is found by solving again with each sigma
//! divided by the root of the weight exp(-(r/k)^2), from a wide k, where it is
//! nearly least squares, down to k = 2.985, which has 95 % efficiency on normal
//! errors. The readings that it leaves far out are the first to be suspected.
//! It lets no leak be: relations hold whatever the weights, so a leak looks like
//! several readings, and the search from here is kept only where it comes out
//! cheaper than the one that starts from nothing.

use super::attempt::Found;
use super::compiled::Compiled;
use crate::equations::{Case, Measured};
use crate::plant::Sigma;
use crate::solver::{Options, Status, solve};

/// Tuning constants, one solve after another.
const TUNING: [f64; 9] = [12.0, 8.0, 6.0, 4.5, 3.5, 2.985, 2.985, 2.985, 2.985];
/// Least weight: sigma grows a thousandfold at most.
const LEAST_WEIGHT: f64 = 1e-6;

/// Observations that the robust solution leaves further out than `critical`, the
/// furthest first; none where it is not found.
pub fn left_out(compiled: &Compiled, found: &Found, critical: f64) -> Vec<usize> {
    let readings = found.case.measured();
    let mut weights = vec![1.0; readings.len()];
    let mut residuals = found.outcome.evaluation.r.clone();
    let mut x = found.outcome.x.clone();
    for k in TUNING {
        for (weight, r) in weights.iter_mut().zip(&residuals) {
            *weight = (-(r / k).powi(2)).exp().max(LEAST_WEIGHT);
        }
        let measured = readings.iter().zip(&weights);
        let measured = measured.map(|(m, &weight)| m.and_then(|m| widened(m, weight)));
        let modes = found.case.modes().clone();
        let case = Case::new(compiled.system(), measured.collect(), modes, &x);
        let outcome = solve(&case, compiled.symbolic(), &x, &Options::default());
        if outcome.status != Status::Converged {
            return Vec::new();
        }
        let weighted = outcome.evaluation.r.iter().zip(&weights);
        residuals = weighted.map(|(r, weight)| r / weight.sqrt()).collect();
        x = outcome.x;
    }
    let mut out: Vec<usize> = (0..residuals.len())
        .filter(|&i| residuals[i].abs() > critical)
        .collect();
    out.sort_by(|&a, &b| residuals[b].abs().total_cmp(&residuals[a].abs()));
    out
}

fn widened(measured: Measured, weight: f64) -> Option<Measured> {
    Some(Measured {
        sigma: Sigma::new(measured.sigma.get() / weight.sqrt())?,
        ..measured
    })
}
