//! The canonical form of a batch and its hash.
//!
//! Every field is written with its length or in a fixed width, so that no two
//! different batches have the same bytes.

use super::batch::Draft;
use crate::plant::{Averaged, Grade, Steadiness};
use sha2::{Digest, Sha256};
use time::OffsetDateTime;

/// Stands where the length of a name would: what follows is no reading.
const NO_LENGTH: u64 = u64::MAX;

/// Hash of a batch whose readings stand in the order of their tags.
///
/// What readings were averaged from comes behind them, and only where there is
/// any: batches without it hash as they did before there was such a thing.
pub(super) fn of(
    name: &str,
    (start, end): (OffsetDateTime, OffsetDateTime),
    readings: &[Draft],
    steadiness: Option<&Steadiness>,
) -> [u8; 32] {
    let mut hash = Sha256::new();
    text(&mut hash, name);
    hash.update(start.unix_timestamp_nanos().to_le_bytes());
    hash.update(end.unix_timestamp_nanos().to_le_bytes());
    for Draft { reading, time } in readings {
        text(&mut hash, &reading.tag);
        match reading.value {
            // Adding zero turns -0 into 0: the same reading.
            Some(value) => {
                hash.update([1]);
                hash.update((value + 0.0).to_bits().to_le_bytes());
            }
            None => hash.update([0]),
        }
        hash.update([match reading.quality.grade {
            Grade::Good => 0,
            Grade::Uncertain => 1,
            Grade::Bad => 2,
        }]);
        match reading.quality.code {
            Some(code) => {
                hash.update([1]);
                hash.update(code.to_le_bytes());
            }
            None => hash.update([0]),
        }
        match time {
            Some(time) => {
                hash.update([1]);
                hash.update(time.unix_timestamp_nanos().to_le_bytes());
            }
            None => hash.update([0]),
        }
    }
    if readings
        .iter()
        .any(|draft| draft.reading.averaged.is_some())
    {
        hash.update(NO_LENGTH.to_le_bytes());
        hash.update([0]);
        for Draft { reading, .. } in readings {
            averaged(&mut hash, reading.averaged.as_ref());
        }
    }
    if let Some(steadiness) = steadiness {
        hash.update(NO_LENGTH.to_le_bytes());
        hash.update([1, u8::from(steadiness.steady)]);
        hash.update(steadiness.judged.to_le_bytes());
        hash.update((steadiness.unsteady.len() as u64).to_le_bytes());
        for tag in &steadiness.unsteady {
            text(&mut hash, tag);
        }
    }
    hash.finalize().into()
}

fn averaged(hash: &mut Sha256, averaged: Option<&Averaged>) {
    let Some(averaged) = averaged else {
        hash.update([0]);
        return;
    };
    hash.update([1]);
    hash.update(averaged.taken.to_le_bytes());
    hash.update(averaged.used.to_le_bytes());
    hash.update((averaged.covered + 0.0).to_bits().to_le_bytes());
    match averaged.scatter {
        Some(scatter) => {
            hash.update([1]);
            hash.update((scatter + 0.0).to_bits().to_le_bytes());
        }
        None => hash.update([0]),
    }
    hash.update([averaged.steady.map_or(2, u8::from)]);
    hash.update((averaged.flags.len() as u64).to_le_bytes());
    for (flag, count) in &averaged.flags {
        text(hash, flag.name());
        hash.update(count.to_le_bytes());
    }
    match &averaged.unused {
        Some(reason) => {
            hash.update([1]);
            text(hash, reason);
        }
        None => hash.update([0]),
    }
}

fn text(hash: &mut Sha256, text: &str) {
    hash.update((text.len() as u64).to_le_bytes());
    hash.update(text.as_bytes());
}
