//! Durations as a plant file writes them: `"5 min"`, `"24 h"`, `"90 d"`.

use super::amount::parts;
use super::reader::{At, Context};
use time::Duration;

/// Units of time by their UCUM codes, in seconds. Months and years are none:
/// they have no fixed length.
const UNITS: [(&str, f64); 4] = [("s", 1.0), ("min", 60.0), ("h", 3600.0), ("d", 86_400.0)];

/// What people write instead, and what is meant.
const ANSWERS: [(&str, &str); 12] = [
    ("sec", "s"),
    ("second", "s"),
    ("seconds", "s"),
    ("m", "min"),
    ("minute", "min"),
    ("minutes", "min"),
    ("hr", "h"),
    ("hour", "h"),
    ("hours", "h"),
    ("day", "d"),
    ("days", "d"),
    ("min.", "min"),
];

/// Reads a duration from `least` to `most`, in whole seconds.
pub(super) fn duration(
    at: &At<'_>,
    least: Duration,
    most: Duration,
    cx: &mut Context<'_>,
) -> Option<Duration> {
    let (value, unit) = parts(at, "min", cx)?;
    let Some((_, factor)) = UNITS.iter().find(|(code, _)| *code == unit) else {
        let lower = unit.to_ascii_lowercase();
        let meant = ANSWERS.iter().find(|(written, _)| *written == lower);
        let mend = match meant {
            Some((_, code)) => format!("write \"{value} {code}\""),
            None => "write s, min, h or d, such as \"5 min\"".to_owned(),
        };
        cx.error(&at.place, format!("`{unit}` is no unit of time"), mend);
        return None;
    };
    let seconds = value * factor;
    if seconds < least.as_seconds_f64() || seconds > most.as_seconds_f64() {
        let what = format!("{value} {unit} is out of bounds");
        let mend = format!("write {} to {}", words(least), words(most));
        cx.error(&at.place, what, mend);
        return None;
    }
    if (seconds - seconds.round()).abs() > 1e-6 {
        let what = format!("{value} {unit} is no whole number of seconds");
        cx.error(&at.place, what, format!("write \"{} s\"", seconds.round()));
        return None;
    }
    Some(Duration::seconds(seconds.round() as i64))
}

/// In the largest unit that goes into it.
pub(super) fn words(duration: Duration) -> String {
    let seconds = duration.whole_seconds();
    let unit = UNITS
        .iter()
        .rev()
        .find(|(_, factor)| seconds % *factor as i64 == 0 && seconds > 0);
    let (code, factor) = unit.copied().unwrap_or(("s", 1.0));
    format!("{} {code}", seconds / factor as i64)
}
