//! Which samples are to be trusted, and why the others are not.

use super::spikes;
use crate::plant::{AveragingMethod, Flag, Grade, Sample, Tag, TagAveraging};
use time::{Duration, OffsetDateTime};

/// A sample on the period's own time scale.
#[derive(Clone, Debug)]
pub(super) struct Point {
    /// Seconds after the start of the period.
    pub at: f64,
    /// Value; zero where there is none, and then it is marked bad.
    pub value: f64,
    pub grade: Grade,
    pub code: Option<u32>,
    /// Why it is not used; `None` where it is good.
    pub mark: Option<Flag>,
}

/// How far a signal that works may go below and above its range, as a part of
/// the span: 3.8 and 20.5 mA of 4 to 20 mA (NAMUR NE 43, from memory).
const BELOW: f64 = 0.0125;
const ABOVE: f64 = 0.03125;

/// Fewest samples of one value that make a stuck signal: of two it is no
/// wonder.
const FEWEST_STUCK: usize = 3;

impl Point {
    pub fn is_good(&self) -> bool {
        self.mark.is_none()
    }
}

/// Samples as points in order of time, the bad ones marked.
pub(super) fn points(samples: &[Sample], start: OffsetDateTime) -> Vec<Point> {
    let mut points: Vec<Point> = samples.iter().map(|sample| point(sample, start)).collect();
    points.sort_by(|a, b| a.at.total_cmp(&b.at));
    points
}

fn point(sample: &Sample, start: OffsetDateTime) -> Point {
    let value = sample.value.filter(|value| value.is_finite());
    let is_bad = value.is_none() || sample.quality.grade == Grade::Bad;
    Point {
        at: (sample.time - start).as_seconds_f64(),
        value: value.unwrap_or(0.0),
        grade: sample.quality.grade,
        code: sample.quality.code,
        mark: is_bad.then_some(Flag::Bad),
    }
}

/// Marks what lies outside the range, what is stuck before the end of the
/// period, and what stands out.
pub(super) fn mark(points: &mut [Point], tag: &Tag, settings: &TagAveraging, end: f64) {
    if let Some((low, high)) = tag.range {
        let (low, high) = (low - BELOW * (high - low), high + ABOVE * (high - low));
        set(points, Flag::OutOfRange, |point| {
            point.value < low || point.value > high
        });
    }
    if let Some(after) = settings.stuck_after {
        stuck(points, after, end);
    }
    // Every part of a sum counts, also one that stands out.
    if let Some((neighbours, deviations)) = settings.spikes
        && settings.method != AveragingMethod::Sum
    {
        let good: Vec<usize> = (0..points.len()).filter(|&i| points[i].is_good()).collect();
        let values: Vec<f64> = good.iter().map(|&i| points[i].value).collect();
        let sigma = spikes::median(&values).and_then(|middle| tag.uncertainty.sigma(middle));
        let harmless = sigma.map_or(0.0, |sigma| sigma.get());
        for found in spikes::find(&values, neighbours, deviations, harmless) {
            points[good[found]].mark = Some(Flag::Spike);
        }
    }
}

fn set(points: &mut [Point], flag: Flag, is_so: impl Fn(&Point) -> bool) {
    for point in points {
        if point.is_good() && is_so(point) {
            point.mark = Some(flag);
        }
    }
}

/// Marks every stretch of good samples of one value that lasts for `after`, as
/// far as it is known at the end of the period.
fn stuck(points: &mut [Point], after: Duration, end: f64) {
    let after = after.as_seconds_f64();
    let good: Vec<usize> = (0..points.len())
        .filter(|&i| points[i].is_good() && points[i].at < end)
        .collect();
    let stretches: Vec<&[usize]> = good
        .chunk_by(|&a, &b| points[a].value == points[b].value)
        .collect();
    for stretch in stretches {
        let (Some(&first), Some(&last)) = (stretch.first(), stretch.last()) else {
            continue;
        };
        if stretch.len() >= FEWEST_STUCK && points[last].at - points[first].at >= after {
            for &i in stretch {
                points[i].mark = Some(Flag::Stuck);
            }
        }
    }
}
