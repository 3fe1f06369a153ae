//! The table `[alarms]`: every key may be left out, and so may the table.

use super::amount::fraction;
use super::reader::{Context, Fields, Shape, quoted};
use super::tree::Content;
use crate::plant::{AlarmSettings, Priorities, Priority};

const SHAPE: Shape = Shape {
    owner: "the alarms",
    keys: &[
        "raise-after",
        "clear-after",
        "dead-band",
        "suspect",
        "imbalance",
        "adjustment",
    ],
};

const EXAMPLE: &str = "{ raise-after = 3, clear-after = 3 }";

/// Most batches that an alarm can be made to wait for.
const MOST_BATCHES: u32 = 1000;

/// Widest dead band, as a fraction of the critical value.
const WIDEST_BAND: f64 = 0.9;

const PRIORITIES: [(&str, Priority); 3] = [
    ("high", Priority::High),
    ("medium", Priority::Medium),
    ("low", Priority::Low),
];

/// Reads the settings; `None` after a fault.
pub(super) fn read(root: &Fields<'_>, cx: &mut Context<'_>) -> Option<AlarmSettings> {
    let usual = AlarmSettings::default();
    let Some(at) = root.get("alarms") else {
        return Some(usual);
    };
    let fields = at.fields(cx, &SHAPE, EXAMPLE)?;
    // Each is read before any is asked for, so that every fault is found.
    let raise_after = batches(&fields, "raise-after", usual.raise_after, cx);
    let clear_after = batches(&fields, "clear-after", usual.clear_after, cx);
    let dead_band = dead_band(&fields, usual.dead_band, cx);
    let suspect = priority(&fields, "suspect", usual.priorities.suspect, cx);
    let imbalance = priority(&fields, "imbalance", usual.priorities.imbalance, cx);
    let adjustment = priority(&fields, "adjustment", usual.priorities.adjustment, cx);
    Some(AlarmSettings {
        raise_after: raise_after?,
        clear_after: clear_after?,
        dead_band: dead_band?,
        priorities: Priorities {
            suspect: suspect?,
            imbalance: imbalance?,
            adjustment: adjustment?,
        },
    })
}

fn batches(fields: &Fields<'_>, key: &str, usual: u32, cx: &mut Context<'_>) -> Option<u32> {
    let Some(at) = fields.get(key) else {
        return Some(usual);
    };
    let number = at.number(cx, "3")?;
    if number.fract() != 0.0 || !(1.0..=f64::from(MOST_BATCHES)).contains(&number) {
        let mend = format!("write a whole number from 1 to {MOST_BATCHES}");
        cx.error(&at.place, format!("{number} is no number of batches"), mend);
        return None;
    }
    Some(number as u32)
}

fn dead_band(fields: &Fields<'_>, usual: f64, cx: &mut Context<'_>) -> Option<f64> {
    let Some(at) = fields.get("dead-band") else {
        return Some(usual);
    };
    let band = match at.node.value {
        // As the file's confidence may be written.
        Content::Number(_) => at.number(cx, "\"20 %\"")?,
        _ => fraction(&at, cx)?,
    };
    if !(0.0..=WIDEST_BAND).contains(&band) {
        let what = "a statistic cannot fall below the critical value by this much of it";
        let mend = "write 0 % to 90 %, such as \"20 %\"";
        cx.error(&at.place, what, mend);
        return None;
    }
    Some(band)
}

fn priority(
    fields: &Fields<'_>,
    key: &str,
    usual: Priority,
    cx: &mut Context<'_>,
) -> Option<Priority> {
    let Some(at) = fields.get(key) else {
        return Some(usual);
    };
    let word = at.string(cx, "\"high\"")?;
    let found = PRIORITIES.iter().find(|(name, _)| *name == word);
    if found.is_none() {
        let names = PRIORITIES.map(|(name, _)| name);
        let mend = cx.did_you_mean(word, names, || format!("write one of {}", quoted(&names)));
        cx.error(&at.place, format!("`{word}` is no priority"), mend);
    }
    found.map(|(_, priority)| *priority)
}
