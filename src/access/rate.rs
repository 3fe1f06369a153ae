//! How often something may be asked for.

use std::fmt;
use std::str::FromStr;

/// Requests a second: positive, and small enough to count.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rate(f64);

/// Why a number is no rate.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error("give requests a second, more than 0 and up to 1000000")]
pub struct NoRate;

impl Rate {
    /// What a token may ask for unless something else is said: more than a
    /// historian needs.
    pub const USUAL: Rate = Rate(200.0);

    const LEAST: f64 = 1e-6;
    const MOST: f64 = 1e6;

    /// Requests a second as a rate.
    ///
    /// # Errors
    ///
    /// Where it is not positive, too small to mean anything, or more than a
    /// million.
    pub fn new(a_second: f64) -> Result<Self, NoRate> {
        if (Rate::LEAST..=Rate::MOST).contains(&a_second) {
            Ok(Rate(a_second))
        } else {
            Err(NoRate)
        }
    }

    /// Requests a second.
    pub fn a_second(self) -> f64 {
        self.0
    }
}

impl FromStr for Rate {
    type Err = NoRate;

    fn from_str(text: &str) -> Result<Self, NoRate> {
        Rate::new(text.trim().parse().map_err(|_| NoRate)?)
    }
}

impl fmt::Display for Rate {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        self.0.fmt(f)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn only_what_can_be_counted_is_a_rate() {
        for good in ["50", "0.5", " 1000000 ", "1e-6"] {
            assert!(good.parse::<Rate>().is_ok(), "{good}");
        }
        for bad in ["0", "-1", "NaN", "inf", "1e7", "1e-9", "", "fast"] {
            assert_eq!(bad.parse::<Rate>(), Err(NoRate), "{bad}");
        }
    }
}
