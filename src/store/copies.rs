//! Copies of a database: what one holds, and why one is refused.

use std::path::{Path, PathBuf};
use time::OffsetDateTime;

/// What a database holds, as it was counted when it was verified.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Holdings {
    /// Size of the file, bytes.
    pub bytes: u64,
    /// Number of the newest migration that it has.
    pub schema: i64,
    /// Plants.
    pub plants: u64,
    /// Revisions of all plants.
    pub revisions: u64,
    /// Accepted batches.
    pub batches: u64,
    /// Those of them without a result yet.
    pub unfinished: u64,
    /// Those of them whose body, and report if there is one, was read back.
    pub sampled: u64,
    /// The batch accepted last.
    pub newest: Option<NewestBatch>,
}

/// The batch that a database accepted last.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct NewestBatch {
    /// Name of the plant.
    pub plant: String,
    /// The client's name for the batch.
    pub batch: String,
    /// End of its period.
    pub end: OffsetDateTime,
    /// When it came.
    pub received: OffsetDateTime,
}

/// What a restore did.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Restored {
    /// What stands in the place of the database now.
    pub holdings: Holdings,
    /// Where the database that stood there before is kept.
    pub kept: Option<PathBuf>,
}

/// What to do where a file of the name is there already.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Existing {
    /// Nothing is done.
    Refuse,
    /// The new one takes its place.
    Replace,
}

/// Why there is no copy. What stood under the names that were given stands
/// there as before, unless the message says otherwise.
#[derive(Clone, Debug, thiserror::Error)]
pub enum CopyError {
    /// The file is not a whole database of this program, with every fault found.
    #[error("{}: {}", file.display(), faults.join("; "))]
    Unsound {
        /// The file.
        file: PathBuf,
        /// What is wrong with it.
        faults: Vec<String>,
    },
    /// Something stands in the way: a file that is there or is not, a lock, the
    /// disk.
    #[error("{}: {what}; {mend}", place.display())]
    Refused {
        /// Where.
        place: PathBuf,
        /// What stands in the way.
        what: String,
        /// How to mend it.
        mend: String,
    },
}

impl CopyError {
    /// Something in the way.
    pub(super) fn refused(
        place: &Path,
        what: impl Into<String>,
        mend: impl Into<String>,
    ) -> CopyError {
        CopyError::Refused {
            place: place.to_owned(),
            what: what.into(),
            mend: mend.into(),
        }
    }

    /// A file with one fault.
    pub(super) fn unsound(file: &Path, fault: impl Into<String>) -> CopyError {
        CopyError::Unsound {
            file: file.to_owned(),
            faults: vec![fault.into()],
        }
    }
}
