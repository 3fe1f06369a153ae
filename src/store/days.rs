//! The numbers of one day: which batches they are of, and for each channel one
//! chunk of columns, a value for each batch.
//!
//! Three of a tag's seven numbers follow from the others up to rounding: the
//! adjustment is the reconciled value less the reading, the uncertainty that of
//! the reading times the root of one less the redundancy, and the standardised
//! adjustment the adjustment over its own sigma. Their columns hold what the
//! rounding left. The same holds for the standardised value of an imbalance.

use super::Field;
use super::columns::{self, Cursor, Damaged};
use super::numbers::ChannelKind;
use crate::plant::COVERAGE_FACTOR;
use crate::report::Verdict;

/// Every verdict; its place is its number in a day. New ones join at the end.
pub(super) const VERDICTS: [Verdict; 5] = [
    Verdict::Consistent,
    Verdict::Inconsistent,
    Verdict::NotRedundant,
    Verdict::NotConverged,
    Verdict::NotRunning,
];

/// A finished batch of a day.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct DayBatch {
    /// Ticket number.
    pub id: i64,
    /// The client's name for it.
    pub name: String,
    /// Start of the period, nanoseconds since 1970.
    pub start: i64,
    /// End of the period.
    pub end: i64,
    /// Verdict.
    pub verdict: Verdict,
    /// Layout of its numbers.
    pub layout: i64,
}

/// The batches of a day as bytes.
pub(super) fn write_batches(batches: &[DayBatch]) -> Vec<u8> {
    let mut bytes = (batches.len() as u32).to_le_bytes().to_vec();
    let column = |of: fn(&DayBatch) -> i64, into: &mut Vec<u8>| {
        let numbers: Vec<i64> = batches.iter().map(of).collect();
        columns::write_steps(&numbers, into);
    };
    column(|batch| batch.id, &mut bytes);
    column(|batch| batch.start, &mut bytes);
    column(|batch| batch.end, &mut bytes);
    column(|batch| place(batch.verdict) as i64, &mut bytes);
    column(|batch| batch.layout, &mut bytes);
    column(|batch| batch.name.len() as i64, &mut bytes);
    let names: String = batches.iter().map(|batch| batch.name.as_str()).collect();
    columns::write_plane(names.as_bytes(), &mut bytes);
    bytes
}

/// Reads them back.
pub(super) fn read_batches(bytes: &[u8]) -> Result<Vec<DayBatch>, Damaged> {
    let Some((head, rest)) = bytes.split_first_chunk() else {
        // Retention leaves nothing of a day.
        return if bytes.is_empty() {
            Ok(Vec::new())
        } else {
            Err(Damaged)
        };
    };
    let count = u32::from_le_bytes(*head) as usize;
    let mut from = Cursor(rest);
    let mut column = || from.steps(count);
    let (ids, starts, ends) = (column()?, column()?, column()?);
    let (verdicts, layouts, lengths) = (column()?, column()?, column()?);
    let lengths: Vec<usize> = lengths
        .into_iter()
        .map(|length| usize::try_from(length).map_err(|_| Damaged))
        .collect::<Result<_, _>>()?;
    let all = lengths
        .iter()
        .try_fold(0usize, |sum, &length| sum.checked_add(length));
    let all = all.filter(|&all| all <= 1 << 30).ok_or(Damaged)?;
    let names = String::from_utf8(from.plane(all)?).map_err(|_| Damaged)?;
    let mut first = 0;
    let mut batches = Vec::with_capacity(count);
    for (at, length) in lengths.into_iter().enumerate() {
        let verdict = usize::try_from(verdicts[at]).ok();
        let verdict = verdict
            .and_then(|place| VERDICTS.get(place))
            .ok_or(Damaged)?;
        batches.push(DayBatch {
            id: ids[at],
            name: names.get(first..first + length).ok_or(Damaged)?.to_owned(),
            start: starts[at],
            end: ends[at],
            verdict: *verdict,
            layout: layouts[at],
        });
        first += length;
    }
    Ok(batches)
}

/// The number of a verdict.
pub(super) fn place(verdict: Verdict) -> usize {
    VERDICTS
        .iter()
        .position(|&known| known == verdict)
        .unwrap_or(VERDICTS.len())
}

/// A channel's columns over a day as one chunk: one column for each field of its
/// kind, all as long.
pub(super) fn write_chunk(kind: ChannelKind, columns: &[Vec<f64>]) -> Vec<u8> {
    write_table(columns, |at| {
        let told = prediction(kind, at)?;
        let from: Vec<&[f64]> = told.from.iter().map(|&at| &columns[at][..]).collect();
        Some(predict(&told, &from, columns[at].len()))
    })
}

/// Columns as bytes: rows, the length of each column, the columns.
pub(super) fn write_table(
    columns: &[Vec<f64>],
    told: impl Fn(usize) -> Option<Vec<f64>>,
) -> Vec<u8> {
    let rows = columns.first().map_or(0, Vec::len);
    let mut bytes = (rows as u32).to_le_bytes().to_vec();
    let mut content = Vec::new();
    for (at, column) in columns.iter().enumerate() {
        let before = content.len();
        columns::write(column, told(at).as_deref(), &mut content);
        bytes.extend(((content.len() - before) as u32).to_le_bytes());
    }
    bytes.append(&mut content);
    bytes
}

/// One column of a chunk.
pub(super) fn read_field(
    kind: ChannelKind,
    chunk: &[u8],
    field: Field,
) -> Result<Vec<f64>, Damaged> {
    let at = kind.fields().iter().position(|&has| has == field);
    read_column(kind, chunk, at.ok_or(Damaged)?)
}

/// One column of a chunk, by its place.
pub(super) fn read_column(kind: ChannelKind, chunk: &[u8], at: usize) -> Result<Vec<f64>, Damaged> {
    read_table(chunk, kind.fields().len(), at, || {
        let told = prediction(kind, at).ok_or(Damaged)?;
        let from = told.from.iter().map(|&at| read_column(kind, chunk, at));
        let from = from.collect::<Result<Vec<_>, _>>()?;
        let rows = from.first().map_or(0, Vec::len);
        let from: Vec<&[f64]> = from.iter().map(|column| &column[..]).collect();
        Ok(predict(&told, &from, rows))
    })
}

/// One of so many columns.
pub(super) fn read_table(
    table: &[u8],
    columns: usize,
    at: usize,
    told: impl FnOnce() -> Result<Vec<f64>, Damaged>,
) -> Result<Vec<f64>, Damaged> {
    let number = |at: usize| -> Result<usize, Damaged> {
        let bytes = table.get(4 * at..4 * at + 4).ok_or(Damaged)?;
        Ok(u32::from_le_bytes(bytes.try_into().map_err(|_| Damaged)?) as usize)
    };
    let mut first = 4 * (1 + columns);
    for before in 0..at {
        first += number(1 + before)?;
    }
    let bytes = table.get(first..first + number(1 + at)?).ok_or(Damaged)?;
    columns::read(bytes, number(0)?, told)
}

/// How a column follows from columns before it.
struct Prediction {
    from: &'static [usize],
    with: fn(&[f64]) -> f64,
}

fn prediction(kind: ChannelKind, at: usize) -> Option<Prediction> {
    let told = |from, with| Some(Prediction { from, with });
    match (kind, kind.fields().get(at)?) {
        // In the order of the fields: measured 0, reconciled 1, adjustment 2,
        // uncertainty of the reading 3, redundancy 5.
        (ChannelKind::Tag, Field::Adjustment) => told(&[0, 1], |v| v[1] - v[0]),
        (ChannelKind::Tag, Field::Uncertainty) => {
            told(&[3, 5], |v| v[0] * (1.0 - v[1]).max(0.0).sqrt())
        }
        (ChannelKind::Tag, Field::Standardised) => told(&[2, 3, 5], |v| {
            v[0] / (v[1] / COVERAGE_FACTOR) / v[2].sqrt()
        }),
        (ChannelKind::Imbalance, Field::Standardised) => {
            told(&[0, 1], |v| v[0] / (v[1] / COVERAGE_FACTOR))
        }
        _ => None,
    }
}

fn predict(told: &Prediction, from: &[&[f64]], rows: usize) -> Vec<f64> {
    let mut at_once = vec![0.0; from.len()];
    let row = |row: usize| {
        for (value, column) in at_once.iter_mut().zip(from) {
            *value = column.get(row).copied().unwrap_or(f64::NAN);
        }
        (told.with)(&at_once)
    };
    (0..rows).map(row).collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn batch() -> impl Strategy<Value = DayBatch> {
        (
            any::<i64>(),
            ".{0,40}",
            any::<i64>(),
            any::<i64>(),
            0..VERDICTS.len(),
            0..9i64,
        )
            .prop_map(|(id, name, start, end, verdict, layout)| DayBatch {
                id,
                name,
                start,
                end,
                verdict: VERDICTS[verdict],
                layout,
            })
    }

    fn number() -> impl Strategy<Value = f64> {
        let finite = any::<f64>().prop_filter("finite", |v| v.is_finite());
        prop_oneof![4 => finite, 1 => Just(f64::NAN), 4 => 0.0..1.0]
    }

    proptest! {
        #[test]
        fn batches_come_back(batches in prop::collection::vec(batch(), 0..50)) {
            prop_assert_eq!(read_batches(&write_batches(&batches)), Ok(batches));
        }

        #[test]
        fn every_column_of_a_chunk_comes_back(rows in prop::collection::vec(prop::collection::vec(number(), 7), 0..60)) {
            for kind in [ChannelKind::Tag, ChannelKind::Quantity, ChannelKind::Imbalance] {
                let count = kind.fields().len();
                let columns: Vec<Vec<f64>> = (0..count)
                    .map(|at| rows.iter().map(|row| row[at]).collect())
                    .collect();
                let chunk = write_chunk(kind, &columns);
                for (column, &field) in columns.iter().zip(kind.fields()) {
                    let back = read_field(kind, &chunk, field).expect("a column");
                    let bits = |column: &[f64]| -> Vec<u64> {
                        column.iter().map(|v| if v.is_nan() { u64::MAX } else { v.to_bits() }).collect()
                    };
                    prop_assert_eq!(bits(&back), bits(column));
                }
            }
        }

        #[test]
        fn no_bytes_make_it_panic(bytes in prop::collection::vec(any::<u8>(), 0..200)) {
            let _ = read_batches(&bytes);
            for kind in [ChannelKind::Tag, ChannelKind::Quantity, ChannelKind::Imbalance] {
                for &field in kind.fields() {
                    let _ = read_field(kind, &bytes, field);
                }
            }
        }
    }

    #[test]
    fn what_follows_from_the_rest_costs_little() {
        let rows = 0..288u32;
        let noise = |n: u32, by: u32| {
            f64::from(n.wrapping_mul(2_654_435_761).wrapping_mul(by) >> 8) / 16_777_216.0
        };
        let columns: Vec<[f64; 7]> = rows
            .map(|n| {
                let (measured, reconciled) = (371.0 + noise(n, 3), 371.0 + noise(n, 7));
                let (sigma, redundancy) = (3.0 + 0.01 * noise(n, 11), 0.4 + 0.01 * noise(n, 13));
                let adjustment = reconciled - measured;
                let uncertainty = COVERAGE_FACTOR * sigma;
                [
                    measured,
                    reconciled,
                    adjustment,
                    uncertainty,
                    COVERAGE_FACTOR * sigma * (1.0 - redundancy).sqrt(),
                    redundancy,
                    adjustment / sigma / redundancy.sqrt(),
                ]
            })
            .collect();
        let whole: Vec<Vec<f64>> = (0..7)
            .map(|at| columns.iter().map(|row| row[at]).collect())
            .collect();
        let chunk = write_chunk(ChannelKind::Tag, &whole);
        assert!(chunk.len() < 288 * (4 * 7 + 3), "{} bytes", chunk.len());
    }
}
