//! What SQLite's errors mean to a caller.
//!
//! Codes from SQLite's documentation, "Result and Error Codes".

use crate::store::StoreError;
use time::OffsetDateTime;

const BUSY: i32 = 5;
const LOCKED: i32 = 6;
const READ_ONLY: i32 = 8;
const IO_ERROR: i32 = 10;
const CORRUPT: i32 = 11;
const FULL: i32 = 13;
const CANNOT_OPEN: i32 = 14;
const NOT_A_DATABASE: i32 = 26;
const IO_ERROR_FSYNC: i32 = IO_ERROR | (4 << 8);
const IO_ERROR_DIRECTORY_FSYNC: i32 = IO_ERROR | (5 << 8);

fn code(error: &sqlx::Error) -> Option<i32> {
    error.as_database_error()?.code()?.parse().ok()
}

/// What a caller is told.
pub(super) fn explain(error: &sqlx::Error) -> StoreError {
    let Some(code) = code(error) else {
        return match error {
            sqlx::Error::Decode(_) | sqlx::Error::ColumnDecode { .. } => {
                StoreError::Corrupt(error.to_string())
            }
            _ => StoreError::Unavailable(error.to_string()),
        };
    };
    let reason = match code & 0xff {
        BUSY | LOCKED => "the database file is locked by another program",
        READ_ONLY => "the database file is read-only",
        IO_ERROR => "the disk reports an error",
        FULL => "the disk is full",
        CANNOT_OPEN => "the database file cannot be opened",
        CORRUPT | NOT_A_DATABASE => return StoreError::Corrupt(error.to_string()),
        _ => return StoreError::Corrupt(format!("unexpected: {error}")),
    };
    StoreError::Unavailable(reason.to_owned())
}

/// After a failed fsync nobody knows what the disk holds, and trying again can
/// succeed without having written anything.
pub(super) fn is_fatal(error: &sqlx::Error) -> bool {
    matches!(code(error), Some(IO_ERROR_FSYNC | IO_ERROR_DIRECTORY_FSYNC))
}

/// Nanoseconds since 1970. Times outside 1678 to 2262 do not get past the edge
/// of the service; here they are cut to the nearest that fits.
pub(super) fn nanoseconds(time: OffsetDateTime) -> i64 {
    let exact = time.unix_timestamp_nanos();
    i64::try_from(exact).unwrap_or(if exact < 0 { i64::MIN } else { i64::MAX })
}

/// A time from nanoseconds since 1970: every 64-bit number is one.
pub(super) fn time(nanoseconds: i64) -> Result<OffsetDateTime, StoreError> {
    OffsetDateTime::from_unix_timestamp_nanos(i128::from(nanoseconds)).map_err(corrupt)
}

/// Something that was read makes no sense.
pub(super) fn corrupt(error: impl std::fmt::Display) -> StoreError {
    StoreError::Corrupt(error.to_string())
}
