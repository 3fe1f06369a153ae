//! How values stand in the database.

use super::fault::corrupt;
use crate::report::{Report, Verdict};
use crate::store::{ReplayState, StoreError};

/// zstd's quick level: a batch must not wait for its compression.
const LEVEL: i32 = 1;

/// Bytes as a zstd frame.
pub(super) fn compress(bytes: &[u8]) -> Result<Vec<u8>, StoreError> {
    zstd::encode_all(bytes, LEVEL).map_err(corrupt)
}

/// What a zstd frame holds.
pub(super) fn expand(frame: &[u8]) -> Result<Vec<u8>, StoreError> {
    zstd::decode_all(frame).map_err(corrupt)
}

/// A report from its frame. One that an older version wrote is read as well: the
/// fields that it lacks have defaults.
pub(super) fn report(frame: &[u8]) -> Result<Report, StoreError> {
    serde_json::from_slice(&expand(frame)?).map_err(corrupt)
}

/// A verdict as it stands in the database, and in reports.
pub(super) fn verdict_name(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Consistent => "consistent",
        Verdict::Inconsistent => "inconsistent",
        Verdict::NotRedundant => "not-redundant",
        Verdict::NotConverged => "not-converged",
        Verdict::NotRunning => "not-running",
    }
}

/// The verdict of a name in the database.
pub(super) fn verdict(name: &str) -> Result<Verdict, StoreError> {
    [
        Verdict::Consistent,
        Verdict::Inconsistent,
        Verdict::NotRedundant,
        Verdict::NotConverged,
        Verdict::NotRunning,
    ]
    .into_iter()
    .find(|&verdict| verdict_name(verdict) == name)
    .ok_or_else(|| corrupt(format!("verdict {name}")))
}

/// The state of a replay as it stands in the database.
pub(super) fn replay_state_name(state: ReplayState) -> &'static str {
    match state {
        ReplayState::Running => "running",
        ReplayState::Done => "done",
        ReplayState::Cancelled => "cancelled",
    }
}

/// The state of a replay of a name in the database.
pub(super) fn replay_state(name: &str) -> Result<ReplayState, StoreError> {
    [
        ReplayState::Running,
        ReplayState::Done,
        ReplayState::Cancelled,
    ]
    .into_iter()
    .find(|&state| replay_state_name(state) == name)
    .ok_or_else(|| corrupt(format!("a replay that is {name}")))
}

/// Bytes as hexadecimal digits.
pub(super) fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}

/// A number that counts from 1: none ever reaches the end of the signed ones.
pub(super) fn signed(number: u64) -> i64 {
    i64::try_from(number).unwrap_or(i64::MAX)
}
