//! Spikes: single samples that stand out from their neighbours.
//!
//! The filter of Hampel (F. R. Hampel, "The influence curve and its role in
//! robust estimation", JASA 69, 1974; as a moving window: R. K. Pearson,
//! "Outliers in process modeling and identification", IEEE Trans. Control Syst.
//! Technol. 10, 2002): with k neighbours on each side, a sample is a spike where
//!
//!   |x - median| > n S,   S = 1.4826 median |x_i - median|
//!
//! over the window, the sample included; 1.4826 S is the standard deviation of
//! normal noise. Three additions, because S is zero for a signal that stands
//! still and windows are cut off where samples end:
//!
//! - S is at least the resolution of the signal, the smallest difference between
//!   two values of the other samples of the window: a change of the last digit
//!   is no spike.
//! - What departs by no more than the tag's own standard uncertainty is none: it
//!   cannot harm the mean.
//! - It stands out from the median of those before it, and of those after it. A
//!   step stands with those after it; without any neighbour on a side nothing can
//!   be told.

/// A median absolute deviation of normal noise times this is its standard
/// deviation: one over the 0.75 quantile.
const NORMAL: f64 = 1.4826;

/// Fewest samples of a window that tell what is usual.
const FEWEST: usize = 5;

/// The places of the spikes among values in order of time. `harmless` is a
/// departure that does not matter, in the unit of the values.
pub(super) fn find(
    values: &[f64],
    neighbours: usize,
    deviations: f64,
    harmless: f64,
) -> Vec<usize> {
    let is_spike = |&i: &usize| {
        let first = i.saturating_sub(neighbours);
        let last = (i + neighbours).min(values.len() - 1);
        let window = &values[first..=last];
        if window.len() < FEWEST {
            return false;
        }
        let Some((middle, deviation)) = middle(window) else {
            return false;
        };
        let mut bound = (deviations * NORMAL * deviation).max(harmless);
        let departure = (values[i] - middle).abs();
        if departure <= bound {
            return false;
        }
        bound = bound.max(deviations * resolution(window, values[i]));
        let stands_out =
            |from: &[f64]| median(from).is_some_and(|middle| (values[i] - middle).abs() > bound);
        departure > bound && stands_out(&values[first..i]) && stands_out(&values[i + 1..=last])
    };
    (0..values.len()).filter(is_spike).collect()
}

/// The median; `None` of nothing.
pub(super) fn median(values: &[f64]) -> Option<f64> {
    let mut sorted = values.to_vec();
    sorted.sort_by(f64::total_cmp);
    let half = sorted.len() / 2;
    let upper = *sorted.get(half)?;
    Some(if sorted.len() % 2 == 1 {
        upper
    } else {
        // Half of each, as their sum may be beyond the range of a double.
        0.5 * sorted[half - 1] + 0.5 * upper
    })
}

/// Median and median absolute deviation.
fn middle(window: &[f64]) -> Option<(f64, f64)> {
    let middle = median(window)?;
    let departures: Vec<f64> = window.iter().map(|value| (value - middle).abs()).collect();
    Some((middle, median(&departures)?))
}

/// The smallest difference between two values, `but` left out; zero where all
/// are equal.
fn resolution(window: &[f64], but: f64) -> f64 {
    let mut others: Vec<f64> = window
        .iter()
        .copied()
        .filter(|&value| value != but)
        .collect();
    // Where it occurs more than once it is a value like the others.
    if window.len() - others.len() > 1 {
        others.push(but);
    }
    others.sort_by(f64::total_cmp);
    let differences = others.windows(2).map(|pair| pair[1] - pair[0]);
    let smallest = differences
        .filter(|&difference| difference > 0.0)
        .fold(f64::INFINITY, f64::min);
    if smallest.is_finite() { smallest } else { 0.0 }
}
