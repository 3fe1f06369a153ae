//! Tags: what each instrument measures, in which unit, how well.

use super::heading::member;
use super::network::{Network, description, section};
use super::reader::{At, Context, Fields, Shape, check_name, quoted};
use super::targets::{Target, target};
use super::terms::{Span, Subject, uncertainty};
use super::tree::Content;
use crate::plant::{Dimension, PressureReference, Quantity, Status, Tag, Unit};

/// A tag as read.
pub(super) struct TagDraft<'n> {
    pub name: String,
    pub at: At<'n>,
    /// What it measures, or probably would if faults were mended; the latter
    /// keeps one fault from causing others.
    pub touches: Option<Quantity>,
    /// The tag, where it has no fault of its own.
    pub tag: Option<Tag>,
    /// The name of what it measures is the atmosphere, or absent.
    pub is_barometer: bool,
    /// It reads a state and measures nothing.
    pub is_status: bool,
    /// That, where it has no fault of its own.
    pub status: Option<Status>,
}

/// What a tag that reads a state measures.
pub(super) const STATUS: &str = "status";

/// The measurements of tags (and of assumptions too).
pub(super) const MEASUREMENTS: &[&str] =
    &["mass-flow", "pressure", "temperature", "quality", "power"];

/// Measurements that later versions know.
pub(super) const LATER: &[&str] = &[
    "volume-flow",
    "differential-pressure",
    "level",
    "holdup",
    "design-density-flow",
];

/// What a tag's or assumption's `of` names.
pub(super) const BAROMETER: &str = "barometer";

const TAG: Shape = Shape {
    owner: "a tag",
    keys: &[
        "measures",
        "of",
        "unit",
        "range",
        "reference",
        "uncertainty",
        "normal",
        "averaging",
        "description",
    ],
};

const TAG_EXAMPLE: &str = "{ measures = \"mass-flow\", of = \"live-steam\", unit = \"t/h\", \
                           uncertainty = { of-reading = \"1 %\" } }";

/// Reads the table `tags`.
pub(super) fn read<'n>(
    root: &Fields<'n>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Vec<TagDraft<'n>> {
    let mut out = Vec::new();
    for (name, at) in section(root, "tags", TAG_EXAMPLE, cx) {
        if is_nest(&at) {
            unnest(name, &at, network, &mut out, cx);
            continue;
        }
        check_name(name, &['/'], &at.key, cx);
        out.push(tag(name.to_owned(), at, network, cx));
    }
    // What a repeated name measures counts as touched.
    for (name, at) in root.get("tags").iter().flat_map(At::repeated) {
        if at.is_table() {
            out.push(tag(name.to_owned(), at, network, cx));
        }
    }
    out
}

/// A dotted name without quotes became tables inside tables.
fn is_nest(at: &At<'_>) -> bool {
    let Content::Table(table) = &at.node.value else {
        return false;
    };
    !table.entries.is_empty()
        && table.entries.iter().all(|entry| {
            matches!(entry.node.value, Content::Table(_)) && !TAG.keys.contains(&entry.key.as_str())
        })
}

/// Reads the tags of such tables too, under the names that were meant, so that
/// all their faults show, and no others that come from their absence.
fn unnest<'n>(
    name: &str,
    at: &At<'n>,
    network: &Network<'_>,
    out: &mut Vec<TagDraft<'n>>,
    cx: &mut Context<'_>,
) {
    let Content::Table(table) = &at.node.value else {
        return;
    };
    for entry in &table.entries {
        let member = At::member(&at.key, entry);
        let full = format!("{name}.{}", entry.key);
        if is_nest(&member) {
            unnest(&full, &member, network, out, cx);
            continue;
        }
        let what = format!(
            "`{full}` without quotes is a table `{name}` with a member `{}`",
            entry.key
        );
        let mend = format!("put the tag's name in quotes: \"{full}\"");
        cx.error(&member.key, what, mend);
        out.push(tag(full, member, network, cx));
    }
}

fn tag<'n>(name: String, at: At<'n>, network: &Network<'_>, cx: &mut Context<'_>) -> TagDraft<'n> {
    let mut draft = TagDraft {
        name,
        touches: None,
        tag: None,
        is_barometer: false,
        is_status: false,
        status: None,
        at,
    };
    let faults_before = cx.findings.errors();
    let Some(fields) = draft.at.fields(cx, &TAG, TAG_EXAMPLE) else {
        return draft;
    };
    description(&fields, cx);
    if member(&draft.at, "measures") == Some(STATUS) {
        draft.is_status = true;
        draft.status = status(&draft.name, &fields, cx);
        return draft;
    }
    let measures = measurement(&fields, cx);
    let reference = reference(&fields, measures, cx);
    let dimension = measures.and_then(dimension_of);
    draft.is_barometer = measures == Some("pressure")
        && fields
            .get("of")
            .is_none_or(|of| matches!(&of.node.value, Content::String(s) if s == BAROMETER));
    let quantity = match measures {
        Some(_) if draft.is_barometer => Target::Known(Quantity::Barometer),
        Some(measures) => target(measures, reference, &fields, network, cx),
        None => Target::Unclear(None),
    };
    draft.touches = quantity.touches();
    if measures.is_none() {
        whereabouts(&fields, network, cx);
    }
    let unit = unit(&fields, dimension, cx);
    let is_absolute = measures == Some("pressure") && reference == PressureReference::Absolute;
    let range = range(&fields, dimension, unit.as_ref(), is_absolute, cx);
    let normal = fields.get("normal").and_then(|n| n.number(cx, "350"));
    let subject = Subject {
        dimension,
        unit: unit.as_ref(),
        span: match range {
            Range::Known(low, high) => Span::Known(high - low),
            Range::Absent => Span::Absent,
            Range::Unclear => Span::Unclear,
        },
    };
    let uncertainty = uncertainty(&fields, &subject, cx);
    if cx.findings.errors() > faults_before {
        return draft;
    }
    if let (Target::Known(quantity), Some(unit), Some(uncertainty)) = (quantity, unit, uncertainty)
    {
        draft.tag = Some(Tag {
            name: draft.name.clone(),
            quantity,
            unit,
            range: match range {
                Range::Known(low, high) => Some((low, high)),
                Range::Absent | Range::Unclear => None,
            },
            uncertainty,
            normal,
            averaging: None,
        });
    }
    draft
}

/// A tag that reads a state: it has no unit, and nothing to be uncertain of.
fn status(name: &str, fields: &Fields<'_>, cx: &mut Context<'_>) -> Option<Status> {
    let faults_before = cx.findings.errors();
    for key in ["of", "unit", "range", "reference", "uncertainty"] {
        if let Some(at) = fields.get(key) {
            let what = format!("`{key}` says nothing about a status, which measures nothing");
            cx.error(&at.key, what, "remove it");
        }
    }
    let normal = fields.get("normal").and_then(|n| n.number(cx, "1"));
    (cx.findings.errors() == faults_before).then(|| Status {
        name: name.to_owned(),
        normal,
    })
}

fn measurement<'n>(fields: &Fields<'n>, cx: &mut Context<'_>) -> Option<&'n str> {
    let names = [MEASUREMENTS, &[STATUS]].concat();
    let all = || format!("a tag can measure {}", quoted(&names));
    let at = fields.require(
        "measures",
        cx,
        &format!("write measures = \"...\"; {}", all()),
    )?;
    let name = at.string(cx, "\"mass-flow\"")?;
    if MEASUREMENTS.contains(&name) {
        return Some(name);
    }
    if LATER.contains(&name) {
        let what = format!("measuring `{name}` is not available yet");
        cx.error(&at.place, what, all());
    } else {
        let mend = cx.did_you_mean(name, names.iter().copied(), all);
        cx.error(&at.place, format!("there is no quantity `{name}`"), mend);
    }
    None
}

/// The dimension of a measurement.
pub(super) fn dimension_of(measures: &str) -> Option<Dimension> {
    match measures {
        "mass-flow" => Some(Dimension::MassFlow),
        "pressure" => Some(Dimension::Pressure),
        "temperature" => Some(Dimension::Temperature),
        "quality" => Some(Dimension::Fraction),
        "power" => Some(Dimension::Power),
        _ => None,
    }
}

/// Reads the optional key `reference` of a pressure.
pub(super) fn reference(
    fields: &Fields<'_>,
    measures: Option<&str>,
    cx: &mut Context<'_>,
) -> PressureReference {
    let Some(at) = fields.get("reference") else {
        return PressureReference::Absolute;
    };
    if measures.is_some_and(|m| m != "pressure") {
        cx.error(&at.key, "only a pressure has a `reference`", "remove it");
        return PressureReference::Absolute;
    }
    let names = ["absolute", "gauge", "vacuum"];
    match at.string(cx, "\"gauge\"") {
        Some("gauge") => PressureReference::Gauge,
        Some("vacuum") => PressureReference::Vacuum,
        Some("absolute") | None => PressureReference::Absolute,
        Some(other) => {
            let mend = cx.did_you_mean(other, names, || format!("write one of {}", quoted(&names)));
            cx.error(&at.place, format!("there is no reference `{other}`"), mend);
            PressureReference::Absolute
        }
    }
}

/// Looks at an `of` of which nobody knows what is measured there.
fn whereabouts(fields: &Fields<'_>, network: &Network<'_>, cx: &mut Context<'_>) {
    let Some(at) = fields.get("of") else {
        return;
    };
    let Some(name) = at.string(cx, "the name of a stream, such as \"live-steam\"") else {
        return;
    };
    let machine = name.split_once('.').map_or(name, |(machine, _)| machine);
    let is_known = name == BAROMETER
        || network.stream_id(name).is_some()
        || network.equipment_id(machine).is_some();
    if !is_known {
        let names = network.stream_names().chain(network.equipment_names());
        let mend = cx.did_you_mean(name, names, || {
            "name a stream, or for power a machine".to_owned()
        });
        let what = format!("there is no stream or equipment `{name}`");
        cx.error(&at.place, what, mend);
    }
}

/// Reads the unit; where its dimension is unclear, one of any tag will do.
fn unit(fields: &Fields<'_>, dimension: Option<Dimension>, cx: &mut Context<'_>) -> Option<Unit> {
    let common = dimension.unwrap_or(Dimension::MassFlow).common();
    let mend = format!("write unit = \"{}\" or another that fits", common[0]);
    let at = fields.require("unit", cx, &mend)?;
    let text = at.string(cx, &format!("\"{}\"", common[0]))?;
    let Some(dimension) = dimension else {
        let mut dimensions = MEASUREMENTS.iter().filter_map(|m| dimension_of(m));
        if !dimensions.any(|dimension| dimension.unit(text).is_ok()) {
            let what = format!("nothing that a tag measures has the unit `{text}`");
            cx.error(&at.place, what, mend);
        }
        return None;
    };
    match dimension.unit(text) {
        Ok(unit) => Some(unit),
        Err(fault) => {
            cx.error(&at.place, fault.what, fault.mend);
            None
        }
    }
}

enum Range {
    Known(f64, f64),
    Absent,
    Unclear,
}

fn range(
    fields: &Fields<'_>,
    dimension: Option<Dimension>,
    unit: Option<&Unit>,
    is_absolute_pressure: bool,
    cx: &mut Context<'_>,
) -> Range {
    let Some(at) = fields.get("range") else {
        return Range::Absent;
    };
    let example = "the lower and upper end, such as [0, 400]";
    let Some(ends) = at.array(cx, example) else {
        return Range::Unclear;
    };
    let [low, high] = &ends[..] else {
        let what = format!("a range has two ends, this has {}", ends.len());
        cx.error(&at.place, what, format!("write {example}"));
        return Range::Unclear;
    };
    let (Some(low), Some(high)) = (low.number(cx, "0"), high.number(cx, "400")) else {
        return Range::Unclear;
    };
    if low >= high {
        let what = format!(
            "the range from {low} to {high} has {} span",
            if low > high { "a negative" } else { "no" }
        );
        let mend = if low > high {
            format!("write the lower end first: [{high}, {low}]")
        } else {
            "write the lower and the upper end of what the instrument can show".to_owned()
        };
        cx.error(&at.place, what, mend);
        return Range::Unclear;
    }
    let below_zero = |unit: &Unit| unit.to_internal(low) < -1e-9 * unit.factor;
    let absolute_scale = is_absolute_pressure || dimension == Some(Dimension::Temperature);
    if absolute_scale && unit.is_some_and(below_zero) {
        let (what, mend) = if is_absolute_pressure {
            (
                format!("an absolute pressure cannot be {low}"),
                "start the range at 0 or above, or write reference = \"gauge\" or \"vacuum\"",
            )
        } else {
            (
                format!("{low} is below absolute zero"),
                "start the range above it",
            )
        };
        cx.error(&at.place, what, mend);
        return Range::Unclear;
    }
    Range::Known(low, high)
}
