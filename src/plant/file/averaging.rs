//! The table `[averaging]`, and `averaging` of a tag: every key may be left out.
//!
//! What holds for every tag unless it says otherwise stands in the table itself,
//! so a tag's own keys are read on top of them.

use super::amount::fraction;
use super::durations::{duration, words};
use super::reader::{At, Context, Fields, Shape, quoted};
use super::tags::TagDraft;
use super::tree::Content;
use crate::plant::{AveragingMethod, AveragingSettings, TagAveraging};
use time::Duration;

const SHAPE: Shape = Shape {
    owner: "the averaging",
    keys: &[
        "period",
        "wait",
        "horizon",
        "key-tags",
        "unsteady-allowed",
        "method",
        "stale-after",
        "stuck-after",
        "spikes",
        "least-coverage",
        "steady-significance",
        "steady-within",
    ],
};

const TAG_SHAPE: Shape = Shape {
    owner: "a tag's averaging",
    keys: &[
        "method",
        "stale-after",
        "stuck-after",
        "spikes",
        "least-coverage",
        "steady-significance",
        "steady-within",
    ],
};

const SPIKES_SHAPE: Shape = Shape {
    owner: "the spike filter",
    keys: &["neighbours", "deviations"],
};

const EXAMPLE: &str = "{ period = \"5 min\", wait = \"2 min\" }";
const TAG_EXAMPLE: &str = "{ method = \"linear\", stale-after = \"20 min\" }";
const SPIKES_EXAMPLE: &str = "{ neighbours = 5, deviations = 5 }, or false for no filter";

const METHODS: [(&str, AveragingMethod); 4] = [
    ("stepped", AveragingMethod::Stepped),
    ("linear", AveragingMethod::Linear),
    ("last", AveragingMethod::Last),
    ("sum", AveragingMethod::Sum),
];

const SECOND: Duration = Duration::SECOND;
const DAY: Duration = Duration::DAY;

/// Longest that a signal may stand still, be waited for or come late.
const LONGEST: Duration = Duration::days(31);

/// Most neighbours on a side, and deviations, of the spike filter.
const MOST_NEIGHBOURS: f64 = 100.0;
const MOST_DEVIATIONS: f64 = 1000.0;

/// Reads the table, and what tags say on top of it; `None` after a fault.
pub(super) fn read(
    root: &Fields<'_>,
    tags: &mut [TagDraft<'_>],
    cx: &mut Context<'_>,
) -> Option<AveragingSettings> {
    let settings = table(root, tags, cx);
    let usual = settings.as_ref().map(|settings| settings.usual.clone());
    let usual = usual.unwrap_or_default();
    let mut whole = true;
    for draft in tags {
        // Its keys have been looked at where the tag was read.
        let entries = match draft.at.is_table() {
            true => draft.at.entries(cx, TAG_EXAMPLE).unwrap_or_default(),
            false => continue,
        };
        let Some((_, at)) = entries.into_iter().find(|(key, _)| *key == "averaging") else {
            continue;
        };
        let fields = at.fields(cx, &TAG_SHAPE, TAG_EXAMPLE);
        let own = fields.and_then(|fields| of_tag(&fields, &usual, cx));
        whole &= own.is_some();
        if let Some(tag) = &mut draft.tag {
            tag.averaging = own;
        }
    }
    settings.filter(|_| whole)
}

fn table(
    root: &Fields<'_>,
    tags: &[TagDraft<'_>],
    cx: &mut Context<'_>,
) -> Option<AveragingSettings> {
    let usual = AveragingSettings::default();
    let Some(at) = root.get("averaging") else {
        return Some(usual);
    };
    let fields = at.fields(cx, &SHAPE, EXAMPLE)?;
    // Each is read before any is asked for, so that every fault is found.
    let period = period(&fields, usual.period, cx);
    let wait = span(&fields, "wait", usual.wait, (Duration::ZERO, LONGEST), cx);
    let horizon = horizon(&fields, usual.horizon, wait.unwrap_or(usual.wait), cx);
    let key_tags = key_tags(&fields, tags, cx);
    let allowed = part(&fields, "unsteady-allowed", usual.unsteady_allowed, cx);
    let of_tags = of_tag(&fields, &usual.usual, cx);
    Some(AveragingSettings {
        period: period?,
        wait: wait?,
        horizon: horizon?,
        key_tags: key_tags?,
        unsteady_allowed: allowed?,
        usual: of_tags?,
    })
}

fn of_tag(fields: &Fields<'_>, usual: &TagAveraging, cx: &mut Context<'_>) -> Option<TagAveraging> {
    let method = method(fields, usual.method, cx);
    let bounds = (SECOND, LONGEST);
    let stale_after = span(fields, "stale-after", usual.stale_after, bounds, cx);
    let stuck_after = stuck_after(fields, usual.stuck_after, cx);
    let spikes = spikes(fields, usual.spikes, cx);
    let least_coverage = part(fields, "least-coverage", usual.least_coverage, cx);
    let significance = significance(fields, usual.steady_significance, cx);
    let within = within(fields, usual.steady_within, cx);
    Some(TagAveraging {
        method: method?,
        stale_after: stale_after?,
        stuck_after: stuck_after?,
        spikes: spikes?,
        least_coverage: least_coverage?,
        steady_significance: significance?,
        steady_within: within?,
    })
}

fn span(
    fields: &Fields<'_>,
    key: &str,
    usual: Duration,
    (least, most): (Duration, Duration),
    cx: &mut Context<'_>,
) -> Option<Duration> {
    match fields.get(key) {
        None => Some(usual),
        Some(at) => duration(&at, least, most, cx),
    }
}

/// Periods start at the same times every day, so their length divides one.
fn period(fields: &Fields<'_>, usual: Duration, cx: &mut Context<'_>) -> Option<Duration> {
    let Some(at) = fields.get("period") else {
        return Some(usual);
    };
    let period = duration(&at, SECOND, DAY, cx)?;
    let (day, seconds) = (DAY.whole_seconds(), period.whole_seconds());
    if day % seconds != 0 {
        let below = (1..=seconds).rev().find(|length| day % length == 0);
        let above = (seconds..=day).find(|length| day % length == 0);
        let near: Vec<String> = below
            .into_iter()
            .chain(above)
            .map(|length| format!("\"{}\"", words(Duration::seconds(length))))
            .collect();
        let what = format!("a day is no whole number of periods of {}", words(period));
        cx.error(&at.place, what, format!("write {}", near.join(" or ")));
        return None;
    }
    Some(period)
}

fn horizon(
    fields: &Fields<'_>,
    usual: Duration,
    wait: Duration,
    cx: &mut Context<'_>,
) -> Option<Duration> {
    let horizon = span(fields, "horizon", usual.max(wait), (SECOND, LONGEST), cx)?;
    if horizon < wait {
        if let Some(at) = fields.get("horizon") {
            let what = format!("late readings are waited for longer ({})", words(wait));
            cx.error(&at.place, what, "write a horizon no shorter than `wait`");
        }
        return None;
    }
    Some(horizon)
}

fn key_tags(
    fields: &Fields<'_>,
    tags: &[TagDraft<'_>],
    cx: &mut Context<'_>,
) -> Option<Vec<usize>> {
    let Some(at) = fields.get("key-tags") else {
        return Some(Vec::new());
    };
    let mut places = Vec::new();
    let mut whole = true;
    for item in at.array(cx, "[\"FT-201\", \"PT-201\"]")? {
        let Some(name) = item.string(cx, "the name of a tag, such as \"FT-201\"") else {
            whole = false;
            continue;
        };
        match tags.iter().position(|tag| tag.name == name) {
            Some(place) if places.contains(&place) => {
                cx.error(&item.place, format!("`{name}` stands twice"), "remove one");
                whole = false;
            }
            Some(place) => places.push(place),
            None => {
                let names = tags.iter().map(|tag| tag.name.as_str());
                let mend = cx.did_you_mean(name, names, || "name a tag of [tags]".to_owned());
                cx.error(&item.place, format!("there is no tag `{name}`"), mend);
                whole = false;
            }
        }
    }
    whole.then_some(places)
}

fn method(
    fields: &Fields<'_>,
    usual: AveragingMethod,
    cx: &mut Context<'_>,
) -> Option<AveragingMethod> {
    let Some(at) = fields.get("method") else {
        return Some(usual);
    };
    let word = at.string(cx, "\"stepped\"")?;
    let found = METHODS.iter().find(|(name, _)| *name == word);
    if found.is_none() {
        let names = METHODS.map(|(name, _)| name);
        let mend = cx.did_you_mean(word, names, || format!("write one of {}", quoted(&names)));
        cx.error(&at.place, format!("there is no method `{word}`"), mend);
    }
    found.map(|(_, method)| *method)
}

fn stuck_after(
    fields: &Fields<'_>,
    usual: Option<Duration>,
    cx: &mut Context<'_>,
) -> Option<Option<Duration>> {
    match fields.get("stuck-after") {
        None => Some(usual),
        Some(at) if is_false(&at) => Some(None),
        Some(at) => duration(&at, SECOND, LONGEST, cx).map(Some),
    }
}

fn spikes(
    fields: &Fields<'_>,
    usual: Option<(usize, f64)>,
    cx: &mut Context<'_>,
) -> Option<Option<(usize, f64)>> {
    let Some(at) = fields.get("spikes") else {
        return Some(usual);
    };
    if is_false(&at) {
        return Some(None);
    }
    let keys = at.fields(cx, &SPIKES_SHAPE, SPIKES_EXAMPLE)?;
    let (near, far) = usual.or(TagAveraging::default().spikes)?;
    let neighbours = number(&keys, "neighbours", near as f64, (2.0, MOST_NEIGHBOURS), cx);
    let deviations = number(&keys, "deviations", far, (1.0, MOST_DEVIATIONS), cx);
    if let (Some(at), Some(count)) = (keys.get("neighbours"), neighbours)
        && count.fract() != 0.0
    {
        let what = format!("{count} is no number of samples");
        cx.error(&at.place, what, "write a whole number");
        return None;
    }
    Some(Some((neighbours? as usize, deviations?)))
}

fn is_false(at: &At<'_>) -> bool {
    matches!(at.node.value, Content::Boolean(false))
}

fn number(
    fields: &Fields<'_>,
    key: &str,
    usual: f64,
    (least, most): (f64, f64),
    cx: &mut Context<'_>,
) -> Option<f64> {
    let Some(at) = fields.get(key) else {
        return Some(usual);
    };
    let number = at.number(cx, &usual.to_string())?;
    if !(least..=most).contains(&number) {
        let what = format!("{number} is out of bounds");
        cx.error(&at.place, what, format!("write {least} to {most}"));
        return None;
    }
    Some(number)
}

/// A part, as `"50 %"` or as a number.
fn part(fields: &Fields<'_>, key: &str, usual: f64, cx: &mut Context<'_>) -> Option<f64> {
    let Some(at) = fields.get(key) else {
        return Some(usual);
    };
    let part = written(&at, cx)?;
    if !(0.0..=1.0).contains(&part) {
        let mend = "write 0 % to 100 %, such as \"50 %\"";
        cx.error(&at.place, "a part of a whole is needed here", mend);
        return None;
    }
    Some(part)
}

fn significance(fields: &Fields<'_>, usual: f64, cx: &mut Context<'_>) -> Option<f64> {
    let Some(at) = fields.get("steady-significance") else {
        return Some(usual);
    };
    let level = written(&at, cx)?;
    // Beyond six digits the tail is not worth its name.
    if !(1e-6..=0.5).contains(&level) {
        let what = "a steady signal cannot be called unsteady as rarely or often as this";
        let mend = "write 0.0001 % to 50 %, such as \"0.1 %\"";
        cx.error(&at.place, what, mend);
        return None;
    }
    Some(level)
}

fn within(fields: &Fields<'_>, usual: f64, cx: &mut Context<'_>) -> Option<f64> {
    let Some(at) = fields.get("steady-within") else {
        return Some(usual);
    };
    let part = written(&at, cx)?;
    if !(0.0..=10.0).contains(&part) {
        let mend = "write a part of the standard uncertainty from 0 to 10, such as 0.25";
        cx.error(&at.place, format!("{part} is out of bounds"), mend);
        return None;
    }
    Some(part)
}

fn written(at: &At<'_>, cx: &mut Context<'_>) -> Option<f64> {
    match at.node.value {
        Content::Number(_) => at.number(cx, "\"10 %\""),
        _ => fraction(at, cx),
    }
}
