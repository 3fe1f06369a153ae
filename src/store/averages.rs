//! Hourly and daily means of a day's numbers.
//!
//! Means are plain means over batches. The standard deviation is that of a
//! sample (divided by one less than the number). They are kept for good, so they
//! are rounded to 25 significant bits (three parts in 10^8, far below any
//! uncertainty), wherever they are made: what is asked for before a day is
//! chunked is the same as after.

use super::columns::Damaged;
use super::days::{self, VERDICTS};
use super::{Field, Mean};
use crate::report::Verdict;

/// Nanoseconds of an hour.
pub(super) const HOUR: i64 = 3_600_000_000_000;

/// Nanoseconds of a day.
pub(super) const DAY: i64 = 24 * HOUR;

/// Bits of a double that a mean does without.
const DROPPED: u32 = 28;

/// Numbers that a mean has.
const NUMBERS: usize = 8;

/// The fields of a channel that means are made of, those that it has.
#[derive(Clone, Debug, Default)]
pub(super) struct Sources {
    /// Best estimates.
    pub reconciled: Vec<f64>,
    /// Their uncertainties.
    pub uncertainty: Vec<f64>,
    /// Readings.
    pub measured: Vec<f64>,
    /// Standardised adjustments.
    pub standardised: Vec<f64>,
}

impl Sources {
    /// From the columns of the fields that there are.
    pub fn new(mut column: impl FnMut(Field) -> Option<Vec<f64>>) -> Self {
        let mut get = |field| column(field).unwrap_or_default();
        Sources {
            reconciled: get(Field::Reconciled),
            uncertainty: get(Field::Uncertainty),
            measured: get(Field::Measured),
            standardised: get(Field::Standardised),
        }
    }

    /// The mean over some rows; `None` where none of them has a value.
    pub fn mean(&self, rows: &[usize]) -> Option<Mean> {
        let values = present(&self.reconciled, rows);
        let mean = average(&values)?;
        let squares: f64 = values.iter().map(|v| (v - mean).powi(2)).sum();
        let others = values.len().saturating_sub(1).max(1) as f64;
        let of = |column: &[f64]| average(&present(column, rows)).map(rounded);
        Some(Mean {
            batches: u32::try_from(values.len()).unwrap_or(u32::MAX),
            mean: rounded(mean),
            deviation: rounded((squares / others).sqrt()),
            least: rounded(values.iter().copied().fold(f64::INFINITY, f64::min)),
            greatest: rounded(values.iter().copied().fold(f64::NEG_INFINITY, f64::max)),
            uncertainty: of(&self.uncertainty),
            measured: of(&self.measured),
            standardised: of(&self.standardised),
        })
    }
}

fn present(column: &[f64], rows: &[usize]) -> Vec<f64> {
    let values = rows.iter().filter_map(|&row| column.get(row));
    values.copied().filter(|value| !value.is_nan()).collect()
}

fn average(values: &[f64]) -> Option<f64> {
    // Divided before it is summed where the sum leaves the doubles.
    let count = values.len() as f64;
    let sum: f64 = values.iter().sum();
    let mean = if sum.is_finite() {
        sum / count
    } else {
        values.iter().map(|value| value / count).sum()
    };
    (!values.is_empty()).then_some(mean)
}

/// To the nearest number of 25 significant bits.
fn rounded(value: f64) -> f64 {
    let half = 1u64 << (DROPPED - 1);
    let bits = value.to_bits().wrapping_add(half) & !((1 << DROPPED) - 1);
    let rounded = f64::from_bits(bits);
    if rounded.is_finite() { rounded } else { value }
}

/// The rows of each hour of a day, from the start of each row's period.
pub(super) fn by_hour(starts: impl Iterator<Item = i64>) -> Vec<Vec<usize>> {
    let mut hours = vec![Vec::new(); 24];
    for (row, start) in starts.enumerate() {
        // Within a day it is below 24.
        hours[(start.rem_euclid(DAY) / HOUR) as usize].push(row);
    }
    hours
}

/// Verdicts by hour: how many of each.
pub(super) type Counts = [[u32; VERDICTS.len()]; 24];

/// Counts the verdicts of a day's batches.
pub(super) fn count(batches: impl Iterator<Item = (i64, Verdict)>) -> Counts {
    let mut counts = Counts::default();
    for (start, verdict) in batches {
        let hour = &mut counts[(start.rem_euclid(DAY) / HOUR) as usize];
        if let Some(count) = hour.get_mut(days::place(verdict)) {
            *count += 1;
        }
    }
    counts
}

/// What some hours come to, verdicts that did not come left out.
pub(super) fn sum(hours: &[[u32; VERDICTS.len()]]) -> Vec<(Verdict, u32)> {
    let all = VERDICTS.iter().enumerate();
    let all = all.map(|(at, &verdict)| (verdict, hours.iter().map(|hour| hour[at]).sum()));
    all.filter(|&(_, count)| count > 0).collect()
}

/// Counts as bytes: the number of verdicts that there were, then hour by hour.
pub(super) fn write_counts(counts: &Counts) -> Vec<u8> {
    let mut bytes = vec![VERDICTS.len() as u8];
    bytes.extend(
        counts
            .iter()
            .flatten()
            .flat_map(|count| count.to_le_bytes()),
    );
    bytes
}

/// Reads them back, those of an older version with fewer verdicts too.
pub(super) fn read_counts(bytes: &[u8]) -> Result<Counts, Damaged> {
    let (&kinds, rest) = bytes.split_first().ok_or(Damaged)?;
    let kinds = usize::from(kinds);
    if kinds == 0 || kinds > VERDICTS.len() || rest.len() != 24 * kinds * 4 {
        return Err(Damaged);
    }
    let mut counts = Counts::default();
    for (at, bytes) in rest.chunks_exact(4).enumerate() {
        let count = bytes.try_into().map_err(|_| Damaged)?;
        counts[at / kinds][at % kinds] = u32::from_le_bytes(count);
    }
    Ok(counts)
}

fn numbers(mean: Option<Mean>) -> [f64; NUMBERS] {
    let Some(mean) = mean else {
        return [f64::NAN; NUMBERS];
    };
    [
        f64::from(mean.batches),
        mean.mean,
        mean.deviation,
        mean.least,
        mean.greatest,
        mean.uncertainty.unwrap_or(f64::NAN),
        mean.measured.unwrap_or(f64::NAN),
        mean.standardised.unwrap_or(f64::NAN),
    ]
}

fn mean(numbers: [f64; NUMBERS]) -> Option<Mean> {
    let [
        batches,
        mean,
        deviation,
        least,
        greatest,
        uncertainty,
        measured,
        standardised,
    ] = numbers;
    (!mean.is_nan()).then(|| Mean {
        batches: batches as u32,
        mean,
        deviation,
        least,
        greatest,
        uncertainty: Some(uncertainty).filter(|v| !v.is_nan()),
        measured: Some(measured).filter(|v| !v.is_nan()),
        standardised: Some(standardised).filter(|v| !v.is_nan()),
    })
}

/// The mean of a day as bytes.
pub(super) fn write_daily(mean: Option<Mean>) -> Vec<u8> {
    numbers(mean).iter().flat_map(|n| n.to_le_bytes()).collect()
}

/// Reads it back.
pub(super) fn read_daily(bytes: &[u8]) -> Result<Option<Mean>, Damaged> {
    let mut read = [f64::NAN; NUMBERS];
    if bytes.len() != 8 * NUMBERS {
        return Err(Damaged);
    }
    for (number, bytes) in read.iter_mut().zip(bytes.chunks_exact(8)) {
        *number = f64::from_le_bytes(bytes.try_into().map_err(|_| Damaged)?);
    }
    Ok(mean(read))
}

/// The means of the hours of a day as bytes.
pub(super) fn write_hourly(hours: &[Option<Mean>]) -> Vec<u8> {
    let rows: Vec<[f64; NUMBERS]> = hours.iter().map(|&mean| numbers(mean)).collect();
    let columns: Vec<Vec<f64>> = (0..NUMBERS)
        .map(|at| rows.iter().map(|row| row[at]).collect())
        .collect();
    days::write_table(&columns, |_| None)
}

/// Reads them back: one for each hour.
pub(super) fn read_hourly(bytes: &[u8]) -> Result<Vec<Option<Mean>>, Damaged> {
    let column = |at| days::read_table(bytes, NUMBERS, at, || Err(Damaged));
    let columns: Vec<Vec<f64>> = (0..NUMBERS).map(column).collect::<Result<_, _>>()?;
    if columns.iter().any(|column| column.len() != 24) {
        return Err(Damaged);
    }
    let row = |hour: usize| mean(std::array::from_fn(|at| columns[at][hour]));
    Ok((0..24).map(row).collect())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn means_are_those_of_the_formulas() {
        let sources = Sources {
            reconciled: vec![1.0, f64::NAN, 2.0, 6.0, 100.0],
            uncertainty: vec![0.5, f64::NAN, 0.5, 2.0, 1.0],
            measured: vec![1.5, 7.0, f64::NAN, f64::NAN, 1.0],
            standardised: Vec::new(),
        };
        let found = sources.mean(&[0, 1, 2, 3]).expect("a mean");
        assert_eq!(found.batches, 3);
        assert_eq!((found.mean, found.least, found.greatest), (3.0, 1.0, 6.0));
        assert!((found.deviation - 7f64.sqrt()).abs() < 1e-7, "{found:?}");
        assert_eq!((found.uncertainty, found.standardised), (Some(1.0), None));
        assert_eq!(found.measured, Some(4.25), "of every reading there is");
        let one = sources.mean(&[4]).expect("a mean");
        assert_eq!((one.batches, one.deviation), (1, 0.0));
        assert_eq!(sources.mean(&[1]), None);
        assert_eq!(sources.mean(&[]), None);
    }

    #[test]
    fn means_come_back() {
        let sources = Sources {
            reconciled: (0..100).map(|n| 0.1 + f64::from(n)).collect(),
            measured: (0..100).map(|n| -0.3 * f64::from(n)).collect(),
            ..Sources::default()
        };
        let mut hours: Vec<Option<Mean>> = vec![None; 24];
        hours[0] = sources.mean(&[0]);
        hours[23] = sources.mean(&[1, 2, 99]);
        assert_eq!(read_hourly(&write_hourly(&hours)), Ok(hours.clone()));
        for mean in hours {
            assert_eq!(read_daily(&write_daily(mean)), Ok(mean));
        }
        assert_eq!(read_daily(&[0; 63]), Err(Damaged));
        assert_eq!(read_hourly(&[0; 63]), Err(Damaged));
    }

    #[test]
    fn verdicts_are_counted_by_the_hour() {
        let batches = [
            (-1, Verdict::Consistent),
            (0, Verdict::NotRunning),
            (HOUR - 1, Verdict::NotRunning),
        ];
        let counts = count(batches.into_iter());
        assert_eq!(sum(&counts[..1]), [(Verdict::NotRunning, 2)]);
        assert_eq!(sum(&counts[23..]), [(Verdict::Consistent, 1)]);
        assert_eq!(read_counts(&write_counts(&counts)), Ok(counts));
        assert_eq!(sum(&counts).len(), 2);
    }

    #[test]
    fn rounding_is_to_eight_digits() {
        for value in [0.0, 1.0 / 3.0, -1e300, f64::MAX, 5e-324] {
            let error = (rounded(value) - value).abs();
            assert!(error <= 3e-8 * value.abs() || value == 5e-324, "{value}");
        }
    }
}
