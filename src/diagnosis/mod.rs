//! The statistical tests on a solution: is the batch consistent, and how large
//! must an error be to show.
//!
//! With whitened residuals r of the observations and degrees of freedom d, the
//! sum of r^2 follows chi-square with d degrees of freedom where the readings
//! err as stated (global test). A standardised adjustment r_i / sqrt(R_ii),
//! with R the redundancy matrix, and a standardised multiplier
//! lambda_k / sqrt(V_k) follow the standard normal (Mah and Tamhane 1982); the
//! critical value is that of the largest of all hypotheses ([`critical_value`]).
//! What a balance would miss if it alone were let go is lambda_k / V_k with
//! standard uncertainty 1 / sqrt(V_k).
//!
//! A hypothesis of one unknown b ([`Evidence`]) that shifts the readings by w
//! and the relations by phi has the numerator n = w'r - phi'lambda, whose
//! variance v is the response of n to b: its estimate is n / v, with standard
//! uncertainty 1 / sqrt(v), and its generalised likelihood ratio n^2 / v is what
//! the weighted sum of squares would fall by (Narasimhan and Mah 1987).

mod chi_square;
mod critical;
mod evidence;

pub use chi_square::{chi_square_quantile, chi_square_tail};
pub use critical::{Critical, Method, critical_value};
pub use evidence::Evidence;

/// Redundancy below which no error of believable size would show.
pub const HARDLY_REDUNDANT: f64 = 1e-3;

/// Standard normal quantile of 80 %: the power that a detectable error is
/// stated for.
const POWER_QUANTILE: f64 = 0.841_621;

/// Smallest size that a single test finds with 80 % power, in the unit of
/// `sigma`, the standard uncertainty of its estimate: (c + 0.842) sigma. Of a
/// tag's bias sigma is that of the reading over the root of its redundancy.
pub fn detectable(critical: f64, sigma: f64) -> f64 {
    (critical + POWER_QUANTILE) * sigma
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
