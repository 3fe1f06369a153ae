//! When to try again, and what a status means.
//!
//! The n-th wait (from 0) lies between half and the whole of min(longest, 2^n
//! first), the part drawn anew each time, so that senders that failed together do
//! not come back together. With the usual bounds that is 1 s to 5 min.

use std::time::Duration;
use time::OffsetDateTime;
use time::format_description::well_known::Rfc2822;

/// Longest wait that a receiver can ask for by Retry-After.
pub const LONGEST_RETRY_AFTER: Duration = Duration::from_secs(3600);

/// Bounds of the waits between attempts.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Schedule {
    /// Longest first wait.
    pub first: Duration,
    /// Longest wait.
    pub longest: Duration,
}

/// What the status of an answer means.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Meaning {
    /// The event was taken.
    Done,
    /// It may be taken later.
    Again,
    /// It will not be taken.
    GivenUp,
}

impl Default for Schedule {
    /// 1 s to 2 s at first, up to 5 min.
    fn default() -> Self {
        Schedule {
            first: Duration::from_secs(2),
            longest: Duration::from_secs(300),
        }
    }
}

impl Schedule {
    /// The wait after so many failed attempts of one event, from 1; `jitter` is
    /// drawn evenly from 0 to 1.
    pub fn wait(&self, failed: u32, jitter: f64) -> Duration {
        let doublings = failed.saturating_sub(1).min(31);
        let ceiling = self.first.saturating_mul(1 << doublings).min(self.longest);
        let jitter = if jitter.is_nan() { 1.0 } else { jitter };
        ceiling.mul_f64(0.5 + 0.5 * jitter.clamp(0.0, 1.0))
    }
}

/// What a status means. 408, 425 and 429 say that it was too slow, too early or
/// too much (RFC 9110, 8470, 6585); any other of the 4xx is as true the next time. A
/// redirection is not followed, since the address is signed.
pub fn meaning(status: u16) -> Meaning {
    match status {
        200..=299 => Meaning::Done,
        408 | 425 | 429 | 500..=599 => Meaning::Again,
        _ => Meaning::GivenUp,
    }
}

/// The wait that a Retry-After asks for (RFC 9110, section 10.2.3), in seconds or
/// until a date, up to [`LONGEST_RETRY_AFTER`].
pub fn retry_after(value: &str, now: OffsetDateTime) -> Option<Duration> {
    let value = value.trim();
    let is_seconds = !value.is_empty() && value.bytes().all(|b| b.is_ascii_digit());
    let wait = if is_seconds {
        // More digits than fit are a long time.
        Duration::from_secs(value.parse().unwrap_or(u64::MAX))
    } else {
        // The date of HTTP is one of mail that ends with GMT.
        let date = OffsetDateTime::parse(value, &Rfc2822).ok()?;
        Duration::try_from(date - now).unwrap_or_default()
    };
    Some(wait.min(LONGEST_RETRY_AFTER))
}

#[cfg(test)]
mod tests {
    use super::*;
    use time::macros::datetime;

    #[test]
    fn waits_double_up_to_the_longest() {
        let schedule = Schedule::default();
        let waits = |jitter| {
            let waits = (1..=12).map(|failed| schedule.wait(failed, jitter).as_secs_f64());
            waits.collect::<Vec<_>>()
        };
        let whole = [2, 4, 8, 16, 32, 64, 128, 256, 300, 300, 300, 300].map(f64::from);
        assert_eq!(waits(1.0), whole);
        assert_eq!(waits(0.0), whole.map(|s| s / 2.0));
        assert_eq!(waits(0.5), whole.map(|s| s * 0.75));
        for (failed, jitter) in [(0, 0.0), (1, -3.0), (u32::MAX, 7.0), (40, f64::NAN)] {
            let wait = schedule.wait(failed, jitter);
            assert!(
                (1..=300).contains(&wait.as_secs()),
                "{failed} {jitter}: {wait:?}"
            );
        }
    }

    #[test]
    fn statuses() {
        for status in [200, 202, 204, 299] {
            assert_eq!(meaning(status), Meaning::Done);
        }
        for status in [408, 425, 429, 500, 502, 503, 504] {
            assert_eq!(meaning(status), Meaning::Again);
        }
        for status in [400, 401, 403, 404, 410, 422, 301, 304, 308, 199, 600] {
            assert_eq!(meaning(status), Meaning::GivenUp);
        }
    }

    #[test]
    fn retry_after_in_seconds_or_until_a_date() {
        let now = datetime!(1994-11-06 08:49:00 UTC);
        let wait = |value| retry_after(value, now).map(|wait| wait.as_secs());
        assert_eq!(wait("120"), Some(120));
        assert_eq!(wait(" 0 "), Some(0));
        // The date of RFC 9110, section 5.6.7.
        assert_eq!(wait("Sun, 06 Nov 1994 08:49:37 GMT"), Some(37));
        assert_eq!(wait("Sun, 06 Nov 1994 08:48:37 GMT"), Some(0));
        assert_eq!(wait("Mon, 06 Nov 1995 08:49:37 GMT"), Some(3600));
        assert_eq!(wait("99999999999999999999999"), Some(3600));
        for value in ["", "soon", "-1", "1.5", "2031-04-02T10:05:00Z"] {
            assert_eq!(wait(value), None, "{value}");
        }
    }
}
