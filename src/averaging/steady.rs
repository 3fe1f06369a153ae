//! Whether a signal was steady over a period.
//!
//! Von Neumann's ratio of the mean square successive difference to the variance
//! (J. von Neumann, "Distribution of the ratio of the mean square successive
//! difference to the variance", Ann. Math. Stat. 12 (1941) 367)
//!
//!   v = sum (x_i - x_{i+1})^2 / sum (x_i - mean)^2
//!
//! lies about 2 for independent normal values whatever their level and scatter,
//! and falls where they drift, swing or jump. (The ratio of variances of S. Cao
//! and R. R. Rhinehart, J. Process Control 5 (1995) 363, compares the same two
//! with exponential filters, for a signal without end; over a period of known
//! length von Neumann's needs no settling and has an exact distribution.)
//!
//! Exactly, v <= x where sum (l_k - x) z_k^2 <= 0 with independent standard normal
//! z_k and l_k = 2 - 2 cos(pi k / n), k = 1 ... n - 1. The probability is the
//! integral of J. P. Imhof, "Computing the distribution of quadratic forms in
//! normal variables", Biometrika 48 (1961) 419, with u = e^t:
//!
//!   P = 1/2 - 1/pi int sin(theta(e^t)) / rho(e^t) dt,
//!   theta(u) = 1/2 sum atan(a_k u),  rho(u) = prod (1 + a_k^2 u^2)^(1/4),  a_k = l_k - x
//!
//! The integrand is analytic about the real line and falls off exponentially, so
//! the trapezoidal rule is good to ten digits.

use super::marks::Point;
use super::scatter::mean;
use super::series::Series;
use super::signal::Weights;
use std::f64::consts::PI;

/// Fewest values of a series by which a signal is judged.
const FEWEST: usize = 5;

/// Step of the trapezoidal rule in t, and where the integrand is nothing any
/// more: on the left it falls like e^t, on the right like e^(-t (n - 1) / 4).
const STEP: f64 = 0.25;
const NOTHING: f64 = 26.0;

/// Whether a signal was steady; `None` where too few values tell. What wanders by
/// no more than `harmless` (a standard deviation, in the tag's unit) is steady
/// whatever the test says.
pub(super) fn is_steady(
    series: &Series,
    weights: &Weights,
    points: &[Point],
    significance: f64,
    harmless: f64,
) -> Option<bool> {
    let middle = weights.mean(points)?;
    if weights.deviation(points, middle) <= harmless {
        return Some(true);
    }
    if series.values.len() < FEWEST {
        return None;
    }
    let Some(ratio) = ratio(&series.values) else {
        return Some(true);
    };
    // The distribution is symmetric about 2, and no significance is beyond a half.
    Some(ratio >= 2.0 || probability(series.values.len(), ratio) >= significance)
}

/// Von Neumann's ratio; `None` where all values are equal.
pub(super) fn ratio(values: &[f64]) -> Option<f64> {
    let mean = mean(values);
    let squares: f64 = values.iter().map(|value| (value - mean).powi(2)).sum();
    let differences = values.windows(2).map(|pair| (pair[1] - pair[0]).powi(2));
    (squares > 0.0).then(|| differences.sum::<f64>() / squares)
}

/// Probability that the ratio of `count` independent normal values is no larger
/// than this one.
pub(super) fn probability(count: usize, ratio: f64) -> f64 {
    let root = |k: usize| 2.0 - 2.0 * (PI * k as f64 / count as f64).cos();
    if count < 3 || ratio <= root(1) {
        return 0.0;
    }
    if ratio >= root(count - 1) {
        return 1.0;
    }
    let factors: Vec<f64> = (1..count).map(|k| root(k) - ratio).collect();
    // Where every a_k u is small the integrand is that of their sum.
    let last = NOTHING * 4.0 / (count - 1) as f64 - smallest(&factors).ln().min(0.0);
    let steps = ((last + NOTHING) / STEP).ceil() as usize;
    let integral: f64 = (0..=steps)
        .map(|step| integrand(&factors, (step as f64 * STEP - NOTHING).exp()))
        .sum();
    (0.5 - STEP * integral / PI).clamp(0.0, 1.0)
}

fn integrand(factors: &[f64], u: f64) -> f64 {
    let mut angle = 0.0;
    let mut decay = 0.0;
    for factor in factors {
        let x = factor * u;
        angle += x.atan();
        decay += (x * x).ln_1p();
    }
    (0.5 * angle).sin() * (-0.25 * decay).exp()
}

fn smallest(factors: &[f64]) -> f64 {
    let sizes = factors.iter().map(|factor| factor.abs());
    // A factor of zero takes no part in the form.
    sizes
        .filter(|&size| size > 1e-12)
        .fold(f64::INFINITY, f64::min)
}
