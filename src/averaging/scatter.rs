//! The standard uncertainty of a mean from the scatter within its period.
//!
//! Neighbouring samples are alike, so s / root n would promise too much. For n
//! values with the autocorrelation rho_k of lag k (A. Zieba, "Effective number of
//! observations and unbiased estimators of variance for autocorrelated data",
//! Metrol. Meas. Syst. 17 (2010) 3-16, from memory):
//!
//!   n_eff = n / (1 + 2 sum (1 - k/n) rho_k)
//!   u^2   = s^2 (n - 1) / (n (n_eff - 1))
//!
//! The second takes into account that s^2 itself is too small for correlated
//! values. rho_k = r^k, with r the first autocorrelation of the series after its
//! small-sample bias is taken out, (n r + 1) / (n - 4) (M. G. Kendall, Biometrika
//! 41 (1954) 403; F. H. C. Marriott and J. A. Pope, ibid. 390). A negative r is
//! taken as none: it would promise more than independent values do. s has few
//! degrees of freedom, so that u is the standard deviation of Student's t with
//! nu = n_eff - 1 of them, u^2 nu / (nu - 2), as JCGM 101:2008, 6.4.9.4 has it.
//!
//! What varies more slowly than the period cannot be seen from within it: n_eff
//! is held at two and above and nu at three, which bounds u at 1.7 s. Unequal
//! weights w of the samples add their factor n sum w^2 / (sum w)^2 to u^2
//! (L. Kish, Survey Sampling, 1965).

use super::marks::Point;
use super::series::Series;
use super::signal::Weights;

const LEAST_EFFECTIVE: f64 = 2.0;
const LEAST_FREEDOM: f64 = 3.0;
const MOST_CORRELATION: f64 = 0.95;

/// Fewest values from which a correlation can be told, and from which its bias
/// can be taken out.
const FEWEST: usize = 5;
const FEWEST_UNBIASED: usize = 8;

/// Standard uncertainty of the mean; `None` of fewer than two values.
pub(super) fn of_mean(
    series: &Series,
    weights: &Weights,
    points: &[Point],
    length: f64,
) -> Option<f64> {
    let count = series.values.len() as f64;
    let variance = variance(&series.values)?;
    let effective = effective(&series.values).clamp(LEAST_EFFECTIVE.min(count), count);
    let of_mean = variance * (count - 1.0) / (count * (effective - 1.0));
    let unequal = if series.on_grid {
        1.0
    } else {
        inequality(weights, points, length)
    };
    Some((of_mean * unequal * few(effective - 1.0)).sqrt())
}

/// Standard uncertainty of one sample as a value of the period; `None` of fewer
/// than two samples.
pub(super) fn of_one(points: &[Point], length: f64) -> Option<f64> {
    let values: Vec<f64> = points
        .iter()
        .filter(|point| point.is_good() && (0.0..length).contains(&point.at))
        .map(|point| point.value)
        .collect();
    let variance = variance(&values)?;
    Some((variance * few(values.len() as f64 - 1.0)).sqrt())
}

/// The factor on a variance that few degrees of freedom add.
fn few(freedom: f64) -> f64 {
    let freedom = freedom.max(LEAST_FREEDOM);
    freedom / (freedom - 2.0)
}

/// The mean, about the first value, so that a constant comes out as itself.
pub(super) fn mean(values: &[f64]) -> f64 {
    let about = values[0];
    about + values.iter().map(|value| value - about).sum::<f64>() / values.len() as f64
}

fn variance(values: &[f64]) -> Option<f64> {
    if values.len() < 2 {
        return None;
    }
    let mean = mean(values);
    let squares: f64 = values.iter().map(|value| (value - mean).powi(2)).sum();
    Some(squares / (values.len() - 1) as f64)
}

/// The effective number of independent values.
fn effective(values: &[f64]) -> f64 {
    let count = values.len() as f64;
    let correlation = correlation(values);
    let mut sum = 0.0;
    let mut power = 1.0;
    for lag in 1..values.len() {
        power *= correlation;
        sum += (1.0 - lag as f64 / count) * power;
    }
    count / (1.0 + 2.0 * sum)
}

/// The first autocorrelation, its bias taken out, 0 to [`MOST_CORRELATION`].
fn correlation(values: &[f64]) -> f64 {
    if values.len() < FEWEST {
        return 0.0;
    }
    let mean = mean(values);
    let squares: f64 = values.iter().map(|value| (value - mean).powi(2)).sum();
    let products: f64 = values
        .windows(2)
        .map(|pair| (pair[0] - mean) * (pair[1] - mean))
        .sum();
    if squares <= 0.0 {
        return 0.0;
    }
    let count = values.len() as f64;
    let mut correlation = products / squares;
    if values.len() >= FEWEST_UNBIASED {
        correlation = (count * correlation + 1.0) / (count - 4.0);
    }
    correlation.clamp(0.0, MOST_CORRELATION)
}

/// How much more the mean varies because its samples weigh unequally.
fn inequality(weights: &Weights, points: &[Point], length: f64) -> f64 {
    let within = weights
        .of
        .iter()
        .zip(points)
        .filter(|(_, point)| point.is_good() && (0.0..length).contains(&point.at));
    let (mut count, mut sum, mut squares) = (0.0, 0.0, 0.0);
    for (weight, _) in within {
        count += 1.0;
        sum += weight;
        squares += weight * weight;
    }
    if sum > 0.0 {
        (count * squares / (sum * sum)).max(1.0)
    } else {
        1.0
    }
}
