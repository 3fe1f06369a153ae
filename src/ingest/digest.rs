//! The canonical form of a batch and its hash.
//!
//! Every field is written with its length or in a fixed width, so that no two
//! different batches have the same bytes.

use super::batch::Draft;
use crate::plant::Grade;
use sha2::{Digest, Sha256};
use time::OffsetDateTime;

/// Hash of a batch whose readings stand in the order of their tags.
pub(super) fn of(
    name: &str,
    start: OffsetDateTime,
    end: OffsetDateTime,
    readings: &[Draft],
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
    hash.finalize().into()
}

fn text(hash: &mut Sha256, text: &str) {
    hash.update((text.len() as u64).to_le_bytes());
    hash.update(text.as_bytes());
}
