//! The reading of a status: its last good value before the end of the period.

use super::marks::{self, Point};
use super::{Period, STATUS_HOLDS};
use crate::plant::{Averaged, Flag, Grade, Quality, Reading, Sample};

/// Reads a status off its samples, of which there are some. It holds until the
/// next good one. Where it changed within the period the batch describes neither
/// state, so it counts as not steady.
pub(super) fn reading(name: &str, period: Period, samples: &[Sample]) -> Reading {
    let length = period.length;
    let points = marks::points(samples, period.start);
    let within = |point: &&Point| (0.0..length).contains(&point.at);
    let oldest = -STATUS_HOLDS.as_seconds_f64();
    let good: Vec<&Point> = points
        .iter()
        .filter(|point| point.is_good() && (oldest..length).contains(&point.at))
        .collect();
    // Those that the period saw: the last before it, and its own.
    let before = good.partition_point(|point| point.at <= 0.0);
    let seen = &good[before.saturating_sub(1)..];
    let bad = points
        .iter()
        .filter(within)
        .filter(|point| point.mark == Some(Flag::Bad))
        .count() as u32;
    let made = Averaged {
        taken: points.iter().filter(within).count() as u32,
        used: u32::from(!seen.is_empty()),
        covered: seen.first().map_or(0.0, |first| {
            ((length - first.at.max(0.0)) / length).clamp(0.0, 1.0)
        }),
        scatter: None,
        steady: (!seen.is_empty()).then(|| seen.iter().all(|point| point.value == seen[0].value)),
        flags: if bad > 0 {
            vec![(Flag::Bad, bad)]
        } else {
            Vec::new()
        },
        unused: seen.is_empty().then(|| "no good sample".to_owned()),
    };
    let quality = match seen.last() {
        Some(last) => Quality {
            grade: last.grade,
            code: last.code,
        },
        None => Quality {
            grade: Grade::Bad,
            code: points
                .iter()
                .rev()
                .find(|point| point.grade == Grade::Bad)
                .and_then(|point| point.code),
        },
    };
    Reading {
        tag: name.to_owned(),
        value: seen.last().map(|point| point.value),
        quality,
        averaged: Some(made),
    }
}
