//! The table `[retention]`: every key may be left out, and so may the table;
//! what is left out is kept for good.

use super::durations::{duration, words};
use super::reader::{Context, Fields, Shape};
use crate::plant::{AveragingSettings, Retention};
use time::Duration;

const SHAPE: Shape = Shape {
    owner: "the retention",
    keys: &["samples", "reports"],
};

const EXAMPLE: &str = "{ samples = \"60 d\", reports = \"400 d\" }";

/// Shorter is taken for a slip: days are chunked when they are over.
const SHORTEST: Duration = Duration::days(2);

/// Longer than any plant stands.
const LONGEST: Duration = Duration::days(36_525);

/// A fit of performance over a season needs so much of the past.
const USEFUL_REPORTS: Duration = Duration::days(90);

/// A period that is looked into is seldom older.
const USEFUL_SAMPLES: Duration = Duration::days(14);

/// Reads the table; `None` after a fault.
pub(super) fn read(
    root: &Fields<'_>,
    averaging: Option<&AveragingSettings>,
    cx: &mut Context<'_>,
) -> Option<Retention> {
    let Some(at) = root.get("retention") else {
        return Some(Retention::default());
    };
    let fields = at.fields(cx, &SHAPE, EXAMPLE)?;
    let samples = span(&fields, "samples", cx);
    let reports = span(&fields, "reports", cx);
    let retention = Retention {
        samples: samples?,
        reports: reports?,
    };
    warn(&fields, retention, averaging, cx);
    Some(retention)
}

/// `Some(None)` where there is none.
fn span(fields: &Fields<'_>, key: &str, cx: &mut Context<'_>) -> Option<Option<Duration>> {
    match fields.get(key) {
        None => Some(None),
        Some(at) => duration(&at, SHORTEST, LONGEST, cx).map(Some),
    }
}

fn warn(
    fields: &Fields<'_>,
    retention: Retention,
    averaging: Option<&AveragingSettings>,
    cx: &mut Context<'_>,
) {
    if let (Some(at), Some(samples)) = (fields.get("samples"), retention.samples) {
        let horizon = averaging.map_or(Duration::ZERO, |averaging| averaging.horizon);
        // A late reading needs those of its period and before it.
        let needed = horizon + SHORTEST;
        if samples < needed {
            let what = format!(
                "samples go after {}, and late readings are taken for {}: a period that they \
                 reopen may lack its other samples",
                words(samples),
                words(horizon)
            );
            let mend = format!("keep them for {} or longer", words(needed));
            cx.findings.warning(&at.place, what, mend);
        } else if samples < USEFUL_SAMPLES {
            let what = format!(
                "samples are kept for {}: what a reading was averaged from can be looked into \
                 no longer than that",
                words(samples)
            );
            let mend = format!("keep them for {} or longer", words(USEFUL_SAMPLES));
            cx.findings.warning(&at.place, what, mend);
        }
    }
    if let (Some(at), Some(reports)) = (fields.get("reports"), retention.reports)
        && reports < USEFUL_REPORTS
    {
        let what = format!(
            "reports are kept for {}: trends by the batch and replays reach no further back",
            words(reports)
        );
        let mend = format!("keep them for {} or longer", words(USEFUL_REPORTS));
        cx.findings.warning(&at.place, what, mend);
    }
}
