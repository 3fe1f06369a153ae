//! The reading of one tag.

use super::marks::{self, Point};
use super::series::series;
use super::signal::{Weights, weights};
use super::{Period, scatter, steady};
use crate::plant::{
    Averaged, AveragingMethod, Flag, Grade, Quality, Reading, Sample, Tag, TagAveraging,
};

/// A mean counts as uncertain where samples of uncertain quality make more than
/// this part of it.
const UNCERTAIN_PART: f64 = 0.2;

/// The order in which flags are told.
const FLAGS: [(Flag, &str); 6] = [
    (Flag::Bad, "bad"),
    (Flag::Uncertain, "uncertain"),
    (Flag::OutOfRange, "out of range"),
    (Flag::Spike, "spikes"),
    (Flag::Stale, "stale"),
    (Flag::Stuck, "stuck"),
];

/// Averages the samples of a tag, of which there are some.
pub(super) fn reading(
    tag: &Tag,
    settings: &TagAveraging,
    period: Period,
    samples: &[Sample],
) -> Reading {
    let length = period.length;
    let mut points = marks::points(samples, period.start);
    marks::mark(&mut points, tag, settings, length);
    let weights = weights_of(&points, settings, length);
    let value = value(&points, &weights, settings.method);
    let mut made = Averaged {
        taken: within(&points, length).count() as u32,
        used: weights.used() as u32,
        covered: (weights.covered / length).clamp(0.0, 1.0),
        flags: flags(&points, &weights, length),
        ..Averaged::default()
    };
    made.unused = unused(&made, settings, value);
    if made.unused.is_none() {
        let sigma = value.and_then(|value| tag.uncertainty.sigma(value));
        let harmless = settings.steady_within * sigma.map_or(0.0, |sigma| sigma.get());
        judge(&mut made, &points, &weights, settings, length, harmless);
    }
    Reading {
        tag: tag.name.clone(),
        value,
        quality: quality(&points, &weights, value.is_some()),
        averaged: Some(made),
    }
}

/// Points of the period.
fn within(points: &[Point], length: f64) -> impl Iterator<Item = &Point> {
    points
        .iter()
        .filter(move |point| (0.0..length).contains(&point.at))
}

fn weights_of(points: &[Point], settings: &TagAveraging, length: f64) -> Weights {
    let holds = settings.stale_after.as_seconds_f64();
    match settings.method {
        AveragingMethod::Stepped => weights(points, false, holds, length),
        AveragingMethod::Linear => weights(points, true, holds, length),
        // It stands for the whole period if it is not stale at its end.
        AveragingMethod::Last => {
            let last = points
                .iter()
                .rposition(|point| point.is_good() && point.at < length);
            let fresh = last.filter(|&i| points[i].at + holds >= length);
            Weights {
                of: one(points, |i| Some(i) == fresh, length),
                covered: if fresh.is_some() { length } else { 0.0 },
                stale: u32::from(last.is_some() && fresh.is_none()),
            }
        }
        // A part that is missing cannot be made up for.
        AveragingMethod::Sum => {
            let complete = within(points, length).all(Point::is_good);
            let counts = |i: usize| points[i].is_good() && (0.0..length).contains(&points[i].at);
            Weights {
                of: one(points, counts, length),
                covered: if complete && within(points, length).next().is_some() {
                    length
                } else {
                    0.0
                },
                stale: 0,
            }
        }
    }
}

fn one(points: &[Point], is_used: impl Fn(usize) -> bool, length: f64) -> Vec<f64> {
    (0..points.len())
        .map(|i| if is_used(i) { length } else { 0.0 })
        .collect()
}

fn value(points: &[Point], weights: &Weights, method: AveragingMethod) -> Option<f64> {
    let value = if method == AveragingMethod::Sum {
        let used = weights.of.iter().zip(points).filter(|(w, _)| **w > 0.0);
        let values: Vec<f64> = used.map(|(_, point)| point.value).collect();
        (!values.is_empty()).then(|| values.iter().sum())
    } else if weights.covered > 0.0 {
        weights.mean(points)
    } else {
        None
    };
    value.filter(|value| value.is_finite())
}

fn flags(points: &[Point], weights: &Weights, length: f64) -> Vec<(Flag, u32)> {
    let counted = FLAGS.iter().map(|&(flag, _)| {
        let count = within(points, length)
            .filter(|point| match flag {
                Flag::Uncertain => point.is_good() && point.grade == Grade::Uncertain,
                _ => point.mark == Some(flag),
            })
            .count() as u32;
        (
            flag,
            if flag == Flag::Stale {
                weights.stale
            } else {
                count
            },
        )
    });
    counted.filter(|(_, count)| *count > 0).collect()
}

/// Why a value must not be used.
fn unused(made: &Averaged, settings: &TagAveraging, value: Option<f64>) -> Option<String> {
    let found: Vec<String> = made
        .flags
        .iter()
        .filter(|(flag, _)| *flag != Flag::Uncertain)
        .filter_map(|(flag, count)| {
            let (_, word) = FLAGS.iter().find(|(known, _)| known == flag)?;
            Some(format!("{count} {word}"))
        })
        .collect();
    let found = match found.is_empty() {
        true => String::new(),
        false => format!(" ({})", found.join(", ")),
    };
    if settings.method == AveragingMethod::Sum && value.is_some() && made.covered <= 0.0 {
        return Some(format!("a part of the sum is missing{found}"));
    }
    if value.is_none() {
        return Some(format!("no good sample{found}"));
    }
    let percent = |part: f64| (100.0 * part).floor();
    (made.covered < settings.least_coverage).then(|| {
        format!(
            "good samples cover {} % of the period, {} % are needed{found}",
            percent(made.covered),
            (100.0 * settings.least_coverage).ceil()
        )
    })
}

/// Scatter and steadiness of a value that is used.
fn judge(
    made: &mut Averaged,
    points: &[Point],
    weights: &Weights,
    settings: &TagAveraging,
    length: f64,
    harmless: f64,
) {
    match settings.method {
        AveragingMethod::Stepped | AveragingMethod::Linear => {
            let series = series(points, length);
            made.scatter = scatter::of_mean(&series, weights, points, length);
            let significance = settings.steady_significance;
            made.steady = steady::is_steady(&series, weights, points, significance, harmless);
        }
        AveragingMethod::Last => made.scatter = scatter::of_one(points, length),
        AveragingMethod::Sum => {}
    }
    made.scatter = made.scatter.filter(|scatter| scatter.is_finite());
}

/// The quality of the reading, with the status code of the latest sample that
/// has this quality.
fn quality(points: &[Point], weights: &Weights, has_value: bool) -> Quality {
    if !has_value {
        let bad = points.iter().rev().find(|point| point.grade == Grade::Bad);
        return Quality {
            grade: Grade::Bad,
            code: bad.and_then(|point| point.code),
        };
    }
    let used = || weights.of.iter().zip(points).filter(|(w, _)| **w > 0.0);
    let total: f64 = used().map(|(weight, _)| weight).sum();
    let uncertain: f64 = used()
        .filter(|(_, point)| point.grade == Grade::Uncertain)
        .map(|(weight, _)| weight)
        .sum();
    let grade = if uncertain > UNCERTAIN_PART * total {
        Grade::Uncertain
    } else {
        Grade::Good
    };
    let latest = used().rfind(|(_, point)| point.grade == grade);
    Quality {
        grade,
        code: latest.and_then(|(_, point)| point.code),
    }
}
