//! How long what was stored is kept.

use time::Duration;

/// The table `[retention]` of a plant file. Hourly and daily means are kept for
/// good.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Retention {
    /// How long samples as they came are kept; `None`: for good.
    pub samples: Option<Duration>,
    /// How long batches and their reports are kept; `None`: for good.
    pub reports: Option<Duration>,
}
