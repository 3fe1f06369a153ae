//! What the service takes from its surroundings, injected so that a test can
//! run from a seed.

use time::OffsetDateTime;

/// Tells the time.
pub trait Clock: Send + Sync + 'static {
    /// Now.
    fn now(&self) -> OffsetDateTime;
}

/// Gives random bytes.
pub trait Entropy: Send + Sync + 'static {
    /// Ten of them: what a version 7 UUID needs beside the time.
    fn ten_bytes(&self) -> [u8; 10];
}

/// The clock of the machine.
#[derive(Clone, Copy, Debug, Default)]
pub struct SystemClock;

impl Clock for SystemClock {
    fn now(&self) -> OffsetDateTime {
        OffsetDateTime::now_utc()
    }
}

/// The random source of the operating system.
#[derive(Clone, Copy, Debug, Default)]
pub struct SystemEntropy;

impl Entropy for SystemEntropy {
    fn ten_bytes(&self) -> [u8; 10] {
        let mut bytes = [0; 10];
        // Request ids are no secrets: where the source fails, zeros with the
        // time beside them still tell requests of different milliseconds apart.
        if let Err(error) = getrandom::fill(&mut bytes) {
            tracing::warn!(%error, "no random bytes");
        }
        bytes
    }
}

/// A new request id: a UUID of version 7 (RFC 9562), ordered by time.
pub(super) fn request_id(clock: &dyn Clock, entropy: &dyn Entropy) -> String {
    let milliseconds = clock.now().unix_timestamp_nanos() / 1_000_000;
    let milliseconds = u64::try_from(milliseconds).unwrap_or(0);
    uuid::Builder::from_unix_timestamp_millis(milliseconds, &entropy.ten_bytes())
        .into_uuid()
        .to_string()
}
