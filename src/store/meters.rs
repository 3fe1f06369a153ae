//! What a store tells of its own work, for whoever watches over it.

use crate::meter::{COUNTS, Histogram, SECONDS};
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

/// Counted since the start.
#[derive(Debug)]
pub struct Meters {
    /// Time of a transaction from its beginning to its end on the disk, seconds.
    pub commit_time: Histogram,
    /// Jobs in a transaction.
    pub commit_jobs: Histogram,
    failures: AtomicU64,
    queued: AtomicU64,
}

impl Default for Meters {
    fn default() -> Self {
        Meters {
            commit_time: Histogram::new(SECONDS),
            commit_jobs: Histogram::new(COUNTS),
            failures: AtomicU64::new(0),
            queued: AtomicU64::new(0),
        }
    }
}

impl Meters {
    /// Transactions that failed.
    pub fn failures(&self) -> u64 {
        self.failures.load(Ordering::Relaxed)
    }

    /// Jobs that have been asked for and not been answered.
    pub fn queued(&self) -> u64 {
        self.queued.load(Ordering::Relaxed)
    }

    /// A job is asked for.
    pub(super) fn queue(&self) {
        self.queued.fetch_add(1, Ordering::Relaxed);
    }

    /// A transaction has ended.
    pub(super) fn committed(&self, jobs: usize, time: Duration, failed: bool) {
        let jobs = u64::try_from(jobs).unwrap_or(u64::MAX);
        self.queued.fetch_sub(jobs, Ordering::Relaxed);
        if failed {
            self.failures.fetch_add(1, Ordering::Relaxed);
            return;
        }
        self.commit_time.took(time);
        self.commit_jobs.observe(jobs as f64);
    }
}

/// What a store holds now.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Room {
    /// Size of the database, bytes.
    pub bytes: u64,
    /// Of these, how many are free for new content.
    pub free: u64,
    /// Size of the log that has not been written back, bytes.
    pub log: u64,
    /// Bytes that the disk has left for it; `None` where the system does not
    /// tell.
    pub disk_free: Option<u64>,
    /// Accepted batches without a result.
    pub pending: u64,
    /// Periods whose batch has to be made, or made again.
    pub open_periods: u64,
}
