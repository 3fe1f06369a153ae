//! The statistical tests on a solution: is the batch consistent, and how large
//! must an error be to show.
//!
//! With whitened residuals r of the observations and degrees of freedom d, the
//! sum of r^2 follows chi-square with d degrees of freedom where the readings
//! err as stated (global test). A standardised adjustment r_i / sqrt(R_ii),
//! with R the redundancy matrix, and a standardised multiplier
//! lambda_k / sqrt(V_k) follow the standard normal (Mah and Tamhane 1982); the
//! critical value is that of the largest of them all ([`critical_value`]). What
//! a balance would miss if it alone were let go is lambda_k / V_k with standard
//! uncertainty 1 / sqrt(V_k).

mod chi_square;
mod critical;

pub use chi_square::{chi_square_quantile, chi_square_tail};
pub use critical::{Critical, Method, critical_value};

/// Redundancy below which no error of believable size would show.
pub const HARDLY_REDUNDANT: f64 = 1e-3;

/// Standard normal quantile of 80 %: the power that a detectable error is
/// stated for.
const POWER_QUANTILE: f64 = 0.841_621;

/// Smallest bias that a single test finds with 80 % power, in the unit of
/// `sigma`: (c + 0.842) sigma / sqrt(redundancy).
pub fn detectable_bias(critical: f64, sigma: f64, redundancy: f64) -> f64 {
    (critical + POWER_QUANTILE) * sigma / redundancy.sqrt()
}

/// What one balance would miss if it alone were let go.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Miss {
    /// lambda / V.
    pub value: f64,
    /// Its standard uncertainty, 1 / sqrt(V).
    pub sigma: f64,
    /// lambda / sqrt(V).
    pub standardised: f64,
}

impl Miss {
    /// From a multiplier and its variance; `None` where the variance is zero:
    /// nothing checks the balance, and its multiplier is zero whatever is read.
    pub fn new(multiplier: f64, variance: f64) -> Option<Self> {
        (variance > 0.0).then(|| {
            let sigma = 1.0 / variance.sqrt();
            Miss {
                value: multiplier / variance,
                sigma,
                standardised: multiplier * sigma,
            }
        })
    }
}
