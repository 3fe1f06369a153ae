//! The signal between samples, as the weight in time that each sample has.
//!
//! Historians store exceptions only, so a value holds until the next sample
//! (stepped), or goes to it in a straight line (linear). Either way the mean is
//! a weighted sum of samples: a held one weighs as long as it holds, and a line
//! from (t0, v0) to (t1, v1) cut to [a, b] has the integral
//!
//!   (b - a) ((1 - m) v0 + m v1),   m = ((a + b) / 2 - t0) / (t1 - t0).
//!
//! A value holds no longer than the tag's signal may stand still; a gap longer
//! than that is not bridged by a line either. A bad sample ends what the one
//! before it holds: from there on the source itself knows nothing. A spike does
//! not, it is skipped.

use super::marks::Point;
use crate::plant::Flag;

/// Weights of samples over a period.
#[derive(Debug)]
pub(super) struct Weights {
    /// Seconds of the period by sample.
    pub of: Vec<f64>,
    /// Seconds that good samples cover.
    pub covered: f64,
    /// How often a value held for as long as it may, and no other came.
    pub stale: u32,
}

/// The weights of samples in order of time over a period of `length` seconds.
pub(super) fn weights(points: &[Point], linear: bool, holds: f64, length: f64) -> Weights {
    let mut weights = Weights {
        of: vec![0.0; points.len()],
        covered: 0.0,
        stale: 0,
    };
    let telling: Vec<usize> = (0..points.len())
        .filter(|&i| points[i].mark != Some(Flag::Spike))
        .collect();
    for (place, &i) in telling.iter().enumerate() {
        let point = &points[i];
        if !point.is_good() || point.at >= length {
            continue;
        }
        let next = telling.get(place + 1).map(|&j| (j, &points[j]));
        let until = next.map_or(f64::INFINITY, |(_, next)| next.at);
        let ends = until.min(point.at + holds);
        if ends < until.min(length) && until > 0.0 {
            weights.stale += 1;
        }
        let (from, to) = (point.at.max(0.0), ends.min(length));
        if to <= from {
            continue;
        }
        let share = match next {
            Some((j, next)) if linear && next.is_good() && ends == until => {
                let share = (0.5 * (from + to) - point.at) / (next.at - point.at);
                weights.of[j] += share * (to - from);
                share
            }
            _ => 0.0,
        };
        weights.of[i] += (1.0 - share) * (to - from);
        weights.covered += to - from;
    }
    weights
}

impl Weights {
    /// Weighted mean; `None` where nothing is covered.
    pub fn mean(&self, points: &[Point]) -> Option<f64> {
        // About one of the values, so that a constant comes out as itself.
        let about = points[self.of.iter().position(|&weight| weight > 0.0)?].value;
        let pairs = self.of.iter().zip(points);
        let sum: f64 = pairs
            .filter(|(weight, _)| **weight > 0.0)
            .map(|(weight, point)| weight / self.covered * (point.value - about))
            .sum();
        Some(about + sum)
    }

    /// Weighted standard deviation about a mean.
    pub fn deviation(&self, points: &[Point], mean: f64) -> f64 {
        let pairs = self.of.iter().zip(points);
        let sum: f64 = pairs
            .filter(|(weight, _)| **weight > 0.0)
            .map(|(weight, point)| weight / self.covered * (point.value - mean).powi(2))
            .sum();
        sum.sqrt()
    }

    /// Samples that weigh.
    pub fn used(&self) -> usize {
        self.of.iter().filter(|&&weight| weight > 0.0).count()
    }
}
