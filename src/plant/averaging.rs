//! How samples become the readings of a period.

use time::Duration;

/// The table `[averaging]` of a plant file.
#[derive(Clone, Debug, PartialEq)]
pub struct AveragingSettings {
    /// Length of a period; periods are aligned to 1970-01-01T00:00Z.
    pub period: Duration,
    /// How long after the end of a period its batch waits for late readings.
    pub wait: Duration,
    /// How long after the end of a period late readings still reopen it.
    pub horizon: Duration,
    /// Tags by which the plant is judged steady, by place in the plant's tags;
    /// every tag where it is empty.
    pub key_tags: Vec<usize>,
    /// Part of the key tags that may be unsteady while the plant counts as
    /// steady, 0 to 1.
    pub unsteady_allowed: f64,
    /// What holds for a tag unless it says otherwise.
    pub usual: TagAveraging,
}

/// How the samples of one tag are averaged and judged.
#[derive(Clone, Debug, PartialEq)]
pub struct TagAveraging {
    /// What the reading of a period is.
    pub method: AveragingMethod,
    /// A value holds for so long and not longer: beyond it the signal is stale.
    pub stale_after: Duration,
    /// A signal that has not moved at all for so long is stuck; `None`: never.
    pub stuck_after: Option<Duration>,
    /// Half the number of neighbours of the Hampel filter, and how many scaled
    /// median deviations a sample may stand out; `None`: no filter.
    pub spikes: Option<(usize, f64)>,
    /// Part of the period that good samples have to cover, 0 to 1.
    pub least_coverage: f64,
    /// Probability of calling a steady signal unsteady.
    pub steady_significance: f64,
    /// A signal that wanders by no more than this part of the tag's standard
    /// uncertainty is steady whatever the test says.
    pub steady_within: f64,
}

/// What the reading of a period is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum AveragingMethod {
    /// Time-weighted mean; a value holds until the next.
    Stepped,
    /// Time-weighted mean; straight lines between values.
    Linear,
    /// The last good value.
    Last,
    /// The sum of the good values.
    Sum,
}

impl Default for AveragingSettings {
    fn default() -> Self {
        AveragingSettings {
            period: Duration::minutes(5),
            wait: Duration::minutes(2),
            horizon: Duration::hours(24),
            key_tags: Vec::new(),
            unsteady_allowed: 0.1,
            usual: TagAveraging::default(),
        }
    }
}

impl Default for TagAveraging {
    fn default() -> Self {
        TagAveraging {
            method: AveragingMethod::Stepped,
            stale_after: Duration::minutes(15),
            stuck_after: None,
            spikes: Some((5, 5.0)),
            least_coverage: 0.5,
            steady_significance: 0.001,
            steady_within: 0.25,
        }
    }
}
