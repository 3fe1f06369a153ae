//! A short, evenly spread series of a period's good samples, from which scatter
//! and steadiness are judged.
//!
//! Samples that come about evenly are taken in blocks of equal number, at most
//! [`MOST`] of them, and the means of the blocks are the series: of white noise
//! they are independent like the samples, while noise that is correlated over a
//! few samples loses most of its correlation. The number is odd: in an even one
//! values that swing to and fro, as exceptions do, cancel to something that
//! wanders. Otherwise (exceptions only) the
//! signal is read off a regular grid as it is held there. The grid is no finer
//! than the longest gap, so that no sample is read twice: one that was would look
//! like a signal that moves slowly. (For that reason the grid reads held values
//! of a linear signal too; points of one line share its samples.) Where such a
//! grid has too few points, the blocks are taken all the same.

use super::marks::Point;

/// Most values of a series.
pub(super) const MOST: usize = 30;

/// Fewest points of a grid.
const FEWEST_ON_GRID: usize = 12;

/// Samples come about evenly where the longest gap is within this many mean
/// ones.
const EVEN: f64 = 2.5;

/// The series.
#[derive(Debug)]
pub(super) struct Series {
    pub values: Vec<f64>,
    /// It was read off a grid.
    pub on_grid: bool,
}

/// The series of the good samples within a period of `length` seconds.
pub(super) fn series(points: &[Point], length: f64) -> Series {
    let within: Vec<&Point> = points
        .iter()
        .filter(|point| point.is_good() && (0.0..length).contains(&point.at))
        .collect();
    if let Some(values) = grid(&within, length) {
        return Series {
            values,
            on_grid: true,
        };
    }
    let size = within.len().div_ceil(MOST).max(1);
    let size = if size.is_multiple_of(2) {
        size + 1
    } else {
        size
    };
    // What does not fill a block is left out at the beginning.
    let whole = &within[within.len() % size..];
    let mean = |block: &[&Point]| {
        let about = block[0].value;
        let sum: f64 = block.iter().map(|point| point.value - about).sum();
        about + sum / block.len() as f64
    };
    Series {
        values: whole.chunks_exact(size).map(mean).collect(),
        on_grid: false,
    }
}

fn grid(within: &[&Point], length: f64) -> Option<Vec<f64>> {
    let (first, last) = (within.first()?, within.last()?);
    let gaps = within.windows(2).map(|pair| pair[1].at - pair[0].at);
    let longest = gaps.fold(0.0, f64::max);
    let span = last.at - first.at;
    if longest * (within.len() - 1) as f64 <= EVEN * span {
        return None;
    }
    let spacing = longest.max(length / MOST as f64);
    let count = (span / spacing).floor() as usize + 1;
    if count < FEWEST_ON_GRID {
        return None;
    }
    let held = |k: usize| {
        let at = first.at + k as f64 * spacing;
        let place = within.partition_point(|point| point.at <= at);
        within[place.saturating_sub(1)].value
    };
    Some((0..count).map(held).collect())
}
