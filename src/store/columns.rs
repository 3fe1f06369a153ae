//! Columns of numbers as few bytes, without loss.
//!
//! A column of doubles is taken in the cheapest of three ways, each of which
//! gives back the same bits:
//!
//! - *decimal*: readings are mostly short decimals, and `round(v 10^k)` over
//!   `10^k` is the same double (a correctly rounded quotient of two exact
//!   numbers), so that a small whole number stands for it;
//! - *predicted*: where other columns tell the value up to rounding, the
//!   distance in representable doubles is small;
//! - *plain*: the doubles as whole numbers in their order.
//!
//! What comes out are whole numbers: the least is taken off (frame of
//! reference), and the rest is stored by bytes of equal weight, because the
//! high ones of a column are alike and compress, and the low ones are noise and
//! do not. NaN stands for "none" and is kept as a bit each.

use std::cell::RefCell;
use std::io;
use zstd::bulk::{Compressor, Decompressor};

/// zstd's own default; chunks are made once and in the background.
const LEVEL: i32 = 3;

/// Digits after the point that are tried.
const MOST_DIGITS: u8 = 9;

/// Whole numbers up to this are exact doubles.
const LARGEST_EXACT: f64 = 9_007_199_254_740_992.0;

/// Rows that a column may have: a bound on what a damaged one can ask for.
const MOST_ROWS: usize = 1 << 24;

const PLAIN: u8 = 0;
const DECIMAL: u8 = 1;
const PREDICTED: u8 = 2;
const EMPTY: u8 = 3;

const RAW: u8 = 0;
const CONSTANT: u8 = 1;
const COMPRESSED: u8 = 2;

/// Bytes that no column has.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error("a damaged column")]
pub(super) struct Damaged;

/// Writes a column of finite numbers, NaN for none. `predicted` is as long, and
/// has to be the same when it is read.
pub(super) fn write(values: &[f64], predicted: Option<&[f64]>, into: &mut Vec<u8>) {
    let present: Vec<f64> = values.iter().copied().filter(|v| !v.is_nan()).collect();
    if present.is_empty() {
        into.push(EMPTY);
        return;
    }
    let mut best = vec![PLAIN];
    write_words(present.iter().map(|&v| order(v)), &mut best);
    if let Some(digits) = digits(&present) {
        let mut decimal = vec![DECIMAL, digits];
        let factor = 10f64.powi(i32::from(digits));
        write_words(
            present.iter().map(|v| (v * factor).round() as i64),
            &mut decimal,
        );
        keep_shorter(&mut best, decimal);
    }
    if let Some(predicted) = predicted {
        let mut told = vec![PREDICTED];
        let pairs = values.iter().zip(predicted).filter(|(v, _)| !v.is_nan());
        write_words(
            pairs.map(|(&v, &p)| order(v).wrapping_sub(order_told(p))),
            &mut told,
        );
        keep_shorter(&mut best, told);
    }
    into.append(&mut best);
    if present.len() == values.len() {
        into.push(0);
    } else {
        into.push(1);
        let mut bits = vec![0u8; values.len().div_ceil(8)];
        for (at, value) in values.iter().enumerate() {
            bits[at / 8] |= u8::from(!value.is_nan()) << (at % 8);
        }
        write_plane(&bits, into);
    }
}

/// Reads a column of so many rows; `predicted` is asked for where it is needed.
pub(super) fn read(
    bytes: &[u8],
    rows: usize,
    predicted: impl FnOnce() -> Result<Vec<f64>, Damaged>,
) -> Result<Vec<f64>, Damaged> {
    if rows > MOST_ROWS {
        return Err(Damaged);
    }
    let mut from = Cursor(bytes);
    let method = from.byte()?;
    if method == EMPTY {
        return Ok(vec![f64::NAN; rows]);
    }
    let digits = if method == DECIMAL { from.byte()? } else { 0 };
    let words = from.words(rows)?;
    let there: Vec<bool> = match from.byte()? {
        0 => vec![true; rows],
        _ => {
            let bits = from.plane(rows.div_ceil(8))?;
            (0..rows)
                .map(|at| bits[at / 8] >> (at % 8) & 1 == 1)
                .collect()
        }
    };
    let predicted = if method == PREDICTED {
        predicted()?
    } else {
        Vec::new()
    };
    let factor = 10f64.powi(i32::from(digits));
    let mut words = words.into_iter();
    let mut values = Vec::with_capacity(rows);
    for (at, there) in there.into_iter().enumerate() {
        if !there {
            values.push(f64::NAN);
            continue;
        }
        let word = words.next().ok_or(Damaged)?;
        values.push(match method {
            PLAIN => disorder(word),
            DECIMAL => word as f64 / factor,
            PREDICTED => {
                let told = *predicted.get(at).ok_or(Damaged)?;
                disorder(order_told(told).wrapping_add(word))
            }
            _ => return Err(Damaged),
        });
    }
    Ok(values)
}

/// Writes whole numbers, each as what it differs from the one before.
pub(super) fn write_steps(numbers: &[i64], into: &mut Vec<u8>) {
    let before = std::iter::once(0).chain(numbers.iter().copied());
    write_words(
        numbers.iter().zip(before).map(|(n, b)| n.wrapping_sub(b)),
        into,
    );
}

fn keep_shorter(best: &mut Vec<u8>, other: Vec<u8>) {
    if other.len() < best.len() {
        *best = other;
    }
}

/// The fewest digits after the point with which every value is a decimal.
fn digits(values: &[f64]) -> Option<u8> {
    let mut digits = 0;
    for &value in values {
        while !is_decimal(value, digits) {
            digits += 1;
            if digits > MOST_DIGITS {
                return None;
            }
        }
    }
    // Those that came first may have been written with fewer digits.
    values
        .iter()
        .all(|&value| is_decimal(value, digits))
        .then_some(digits)
}

fn is_decimal(value: f64, digits: u8) -> bool {
    let factor = 10f64.powi(i32::from(digits));
    let whole = (value * factor).round();
    whole.abs() < LARGEST_EXACT && ((whole as i64) as f64 / factor).to_bits() == value.to_bits()
}

/// A double as a whole number, so that neighbours are neighbours.
fn order(value: f64) -> i64 {
    let bits = value.to_bits() as i64;
    bits ^ ((bits >> 63) as u64 >> 1) as i64
}

/// The same of a prediction. Which NaN an operation gives depends on the
/// processor, so that one counts as nothing.
fn order_told(value: f64) -> i64 {
    if value.is_nan() { 0 } else { order(value) }
}

/// The way back.
fn disorder(word: i64) -> f64 {
    f64::from_bits((word ^ ((word >> 63) as u64 >> 1) as i64) as u64)
}

/// How many, the least, and what each is above it by bytes of equal weight. The
/// difference wraps: it fits 64 bits without a sign whatever the numbers are.
fn write_words(words: impl Iterator<Item = i64>, into: &mut Vec<u8>) {
    let words: Vec<i64> = words.collect();
    let least = words.iter().copied().min().unwrap_or(0);
    let above: Vec<u64> = words.iter().map(|w| w.wrapping_sub(least) as u64).collect();
    let widest = above.iter().copied().max().unwrap_or(0);
    let width = 8 - widest.leading_zeros() as usize / 8;
    write_count(above.len(), into);
    into.push(width as u8);
    into.extend(least.to_le_bytes());
    for weight in 0..width {
        let plane: Vec<u8> = above.iter().map(|w| (w >> (8 * weight)) as u8).collect();
        write_plane(&plane, into);
    }
}

/// A length, seven bits a byte.
fn write_count(mut count: usize, into: &mut Vec<u8>) {
    while count > 0x7f {
        into.push(count as u8 | 0x80);
        count >>= 7;
    }
    into.push(count as u8);
}

/// Bytes in the shortest of three ways.
pub(super) fn write_plane(plane: &[u8], into: &mut Vec<u8>) {
    if let Some((&first, rest)) = plane.split_first()
        && rest.iter().all(|&byte| byte == first)
    {
        into.extend([CONSTANT, first]);
        return;
    }
    match compress(plane) {
        Ok(frame) if frame.len() + 2 < plane.len() => {
            into.push(COMPRESSED);
            write_count(frame.len(), into);
            into.extend(frame);
        }
        _ => {
            into.push(RAW);
            into.extend(plane);
        }
    }
}

thread_local! {
    // Making one costs more than what it does here.
    static COMPRESSOR: RefCell<Option<Compressor<'static>>> = const { RefCell::new(None) };
    static DECOMPRESSOR: RefCell<Option<Decompressor<'static>>> = const { RefCell::new(None) };
}

fn compress(plane: &[u8]) -> io::Result<Vec<u8>> {
    COMPRESSOR.with_borrow_mut(|kept| {
        if kept.is_none() {
            let mut new = Compressor::new(LEVEL)?;
            new.include_checksum(false)?;
            *kept = Some(new);
        }
        let zstd = kept.as_mut().ok_or(io::ErrorKind::Other)?;
        zstd.compress(plane)
    })
}

fn decompress(frame: &[u8], length: usize) -> io::Result<Vec<u8>> {
    DECOMPRESSOR.with_borrow_mut(|kept| {
        if kept.is_none() {
            *kept = Some(Decompressor::new()?);
        }
        let zstd = kept.as_mut().ok_or(io::ErrorKind::Other)?;
        zstd.decompress(frame, length)
    })
}

/// What is left to be read.
pub(super) struct Cursor<'b>(pub &'b [u8]);

impl<'b> Cursor<'b> {
    fn byte(&mut self) -> Result<u8, Damaged> {
        let (&first, rest) = self.0.split_first().ok_or(Damaged)?;
        self.0 = rest;
        Ok(first)
    }

    fn take(&mut self, length: usize) -> Result<&'b [u8], Damaged> {
        let (taken, rest) = self.0.split_at_checked(length).ok_or(Damaged)?;
        self.0 = rest;
        Ok(taken)
    }

    fn count(&mut self) -> Result<usize, Damaged> {
        let mut count = 0;
        for shift in (0..28).step_by(7) {
            let byte = self.byte()?;
            count |= usize::from(byte & 0x7f) << shift;
            if byte & 0x80 == 0 {
                return Ok(count);
            }
        }
        Err(Damaged)
    }

    /// Bytes of which the number is known.
    pub fn plane(&mut self, length: usize) -> Result<Vec<u8>, Damaged> {
        let plane = match self.byte()? {
            CONSTANT => vec![self.byte()?; length],
            RAW => self.take(length)?.to_vec(),
            COMPRESSED => {
                let length_of_frame = self.count()?;
                let frame = self.take(length_of_frame)?;
                decompress(frame, length).map_err(|_| Damaged)?
            }
            _ => return Err(Damaged),
        };
        if plane.len() == length {
            Ok(plane)
        } else {
            Err(Damaged)
        }
    }

    /// At most so many whole numbers.
    fn words(&mut self, most: usize) -> Result<Vec<i64>, Damaged> {
        let count = self.count()?;
        let width = self.byte()?;
        if count > most || width > 8 {
            return Err(Damaged);
        }
        let least = self.take(8)?.try_into().map_err(|_| Damaged)?;
        let mut above = vec![0u64; count];
        for weight in 0..width {
            let plane = self.plane(count)?;
            for (word, byte) in above.iter_mut().zip(plane) {
                *word |= u64::from(byte) << (8 * weight);
            }
        }
        let least = i64::from_le_bytes(least);
        Ok(above
            .into_iter()
            .map(|w| least.wrapping_add(w as i64))
            .collect())
    }

    /// What [`write_steps`] wrote, so many of them.
    pub fn steps(&mut self, count: usize) -> Result<Vec<i64>, Damaged> {
        let mut sum = 0i64;
        let mut numbers = self.words(count)?;
        if numbers.len() != count {
            return Err(Damaged);
        }
        for number in &mut numbers {
            sum = sum.wrapping_add(*number);
            *number = sum;
        }
        Ok(numbers)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn through(values: &[f64], predicted: Option<&[f64]>) -> (Vec<u64>, usize) {
        let mut bytes = Vec::new();
        write(values, predicted, &mut bytes);
        let told = || predicted.map(<[f64]>::to_vec).ok_or(Damaged);
        let back = read(&bytes, values.len(), told).expect("a column");
        (back.iter().map(|v| v.to_bits()).collect(), bytes.len())
    }

    fn bits(values: &[f64]) -> Vec<u64> {
        let canonical = values
            .iter()
            .map(|v| if v.is_nan() { f64::NAN } else { *v });
        canonical.map(f64::to_bits).collect()
    }

    fn number() -> impl Strategy<Value = f64> {
        prop_oneof![
            any::<f64>().prop_filter("finite", |v| v.is_finite()),
            (-1_000_000i64..1_000_000, 0..5).prop_map(|(n, k)| n as f64 / 10f64.powi(k)),
            Just(f64::NAN),
            Just(-0.0),
            Just(0.0),
            Just(f64::MAX),
            Just(f64::MIN),
            Just(f64::from_bits(1)),
        ]
    }

    proptest! {
        #[test]
        fn whatever_goes_in_comes_out(pairs in prop::collection::vec((number(), number()), 0..600)) {
            let (values, other): (Vec<f64>, Vec<f64>) = pairs.into_iter().unzip();
            prop_assert_eq!(through(&values, None).0, bits(&values));
            prop_assert_eq!(through(&values, Some(&other)).0, bits(&values));
            prop_assert_eq!(through(&values, Some(&values)).0, bits(&values));
        }

        #[test]
        fn whole_numbers_come_back(numbers in prop::collection::vec(any::<i64>(), 0..300)) {
            let mut bytes = Vec::new();
            write_steps(&numbers, &mut bytes);
            prop_assert_eq!(Cursor(&bytes).steps(numbers.len()), Ok(numbers));
        }

        #[test]
        fn no_bytes_make_it_panic(bytes in prop::collection::vec(any::<u8>(), 0..200), rows in 0usize..400) {
            let _ = read(&bytes, rows, || Ok(vec![1.0; rows]));
            let _ = Cursor(&bytes).steps(rows);
        }
    }

    #[test]
    fn what_is_alike_is_short() {
        let constant = vec![1.5; 288];
        assert!(through(&constant, None).1 < 20);
        let readings: Vec<f64> = (0..288)
            .map(|n| f64::from(37_000 + n * 7919 % 256) / 100.0)
            .collect();
        assert!(through(&readings, None).1 < 288 + 20, "one byte each");
        let sums: Vec<f64> = readings.iter().map(|v| v + 0.3).collect();
        let nearly: Vec<f64> = sums.iter().map(|v| v * (1.0 + 2e-16)).collect();
        assert!(through(&sums, Some(&nearly)).1 < 288);
    }
}
