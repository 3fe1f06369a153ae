//! The keys of the file's top level, the barometer above all.

use super::amount::{Amount, amount, fraction};
use super::assumptions::AssumptionDraft;
use super::reader::{At, Context, Fields, Shape, check_name};
use super::tags::{BAROMETER, TagDraft};
use super::terms::{Span, Subject, uncertainty};
use super::tree::{Content, Place};
use crate::plant::{Assumption, Barometer, Dimension, PressureReference, Quantity};

/// The top level.
pub(super) const PLANT: Shape = Shape {
    owner: "a plant file",
    keys: &[
        "plant",
        "title",
        "barometer",
        "uncertain-factor",
        "confidence",
        "robust-start",
        "running-when",
        "streams",
        "equipment",
        "tags",
        "assumptions",
        "alarms",
        "averaging",
        "portable",
        "retention",
    ],
};

const BAROMETER_SHAPE: Shape = Shape {
    owner: "the barometer",
    keys: &["value", "uncertainty", "tag"],
};

const BAROMETER_EXAMPLE: &str =
    "{ value = \"1013 mbar\", uncertainty = { absolute = \"2 mbar\" } }";

const UNCERTAIN_FACTOR: f64 = 2.0;
const CONFIDENCE: f64 = 0.95;

/// What stands above the tables; each `None` after a fault of its own.
pub(super) struct Heading<'n> {
    pub name: Option<String>,
    pub title: Option<String>,
    pub uncertain_factor: Option<f64>,
    pub confidence: Option<f64>,
    pub robust_start: Option<bool>,
    pub barometer: BarometerDraft<'n>,
}

/// The barometer as read.
pub(super) enum BarometerDraft<'n> {
    Absent,
    /// Exact, MPa.
    Exact(f64),
    /// With an uncertainty.
    Assumed(Assumption),
    /// Read by a tag: its name, where it is named.
    Tag(&'n str, Place),
    /// A fault was reported.
    Unclear,
}

impl<'n> Heading<'n> {
    pub fn read(root: &Fields<'n>, cx: &mut Context<'_>) -> Heading<'n> {
        let name = name(root, cx);
        let title = match root.get("title") {
            Some(at) => at.string(cx, "a text in quotes").map(str::to_owned),
            None => name.clone().or(Some(String::new())),
        };
        Heading {
            name,
            title,
            uncertain_factor: uncertain_factor(root, cx),
            confidence: confidence(root, cx),
            robust_start: match root.get("robust-start") {
                Some(at) => at.boolean(cx),
                None => Some(true),
            },
            barometer: barometer(root, cx),
        }
    }

    /// Checks what depends on the barometer: its tag, gauge pressures.
    pub fn check_references(
        &self,
        tags: &[TagDraft<'n>],
        assumptions: &[AssumptionDraft<'n>],
        cx: &mut Context<'_>,
    ) {
        if let BarometerDraft::Tag(name, place) = &self.barometer {
            check_tag(name, place, tags, cx);
        }
        if let BarometerDraft::Assumed(_) = &self.barometer {
            for tag in tags.iter().filter(|t| t.name == BAROMETER) {
                let what = "`barometer` is the assumption that the plant's barometer makes";
                cx.error(&tag.at.key, what, "give the tag another name");
            }
        }
        for tag in tags.iter().filter(|t| t.is_barometer) {
            self.check_barometer_tag(tag, cx);
        }
        if !matches!(self.barometer, BarometerDraft::Absent) {
            return;
        }
        let tags = tags.iter().map(|t| (t.touches, &t.at));
        let assumptions = assumptions.iter().map(|a| (a.touches, &a.at));
        for (quantity, at) in tags.chain(assumptions) {
            let reference = match quantity {
                Some(Quantity::Pressure(_, PressureReference::Gauge)) => "gauge",
                Some(Quantity::Pressure(_, PressureReference::Vacuum)) => "vacuum",
                _ => continue,
            };
            let place = member_place(at, "reference");
            let what = format!("a {reference} pressure, and the plant has no barometer");
            let mend = format!("add barometer = {BAROMETER_EXAMPLE} at the top of the file");
            cx.error(&place, what, mend);
        }
    }

    fn check_barometer_tag(&self, tag: &TagDraft<'_>, cx: &mut Context<'_>) {
        let place = &tag.at.key;
        let name = tag.name.as_str();
        if member(&tag.at, "reference").is_some_and(|text| text != "absolute") {
            let place = member_place(&tag.at, "reference");
            let what = format!("the barometer `{name}` can only be absolute");
            cx.error(&place, what, "remove `reference`");
        }
        match &self.barometer {
            BarometerDraft::Absent if member(&tag.at, "of").is_some() => {
                let what = format!("`{name}` measures the barometer, and the plant has none");
                cx.error(
                    place,
                    what,
                    format!("add barometer = {{ tag = \"{name}\" }} at the top of the file"),
                );
            }
            BarometerDraft::Absent => {
                let what = "`of` is missing";
                cx.error(place, what, "write of = \"...\" with the name of a stream");
            }
            BarometerDraft::Exact(_) => {
                let what = format!("`{name}` measures the barometer, which has an exact value");
                cx.error(
                    place,
                    what,
                    format!(
                        "write barometer = {{ tag = \"{name}\" }}, or give the value an uncertainty"
                    ),
                );
            }
            BarometerDraft::Tag(..) | BarometerDraft::Assumed(_) => {
                if member(&tag.at, "of").is_none() && !self.is_tag(name) {
                    cx.error(
                        place,
                        "`of` is missing",
                        "write of = \"...\" with the name of a stream, or \"barometer\"",
                    );
                }
            }
            BarometerDraft::Unclear => {}
        }
    }

    fn is_tag(&self, name: &str) -> bool {
        matches!(&self.barometer, BarometerDraft::Tag(tag, _) if *tag == name)
    }
}

impl BarometerDraft<'_> {
    pub fn model(&self) -> Barometer {
        match self {
            BarometerDraft::Absent | BarometerDraft::Unclear => Barometer::Absent,
            BarometerDraft::Exact(value) => Barometer::Exact(*value),
            BarometerDraft::Assumed(_) | BarometerDraft::Tag(..) => Barometer::Unknown,
        }
    }

    pub fn assumption(&self) -> Option<Assumption> {
        match self {
            BarometerDraft::Assumed(assumption) => Some(assumption.clone()),
            _ => None,
        }
    }
}

fn name(root: &Fields<'_>, cx: &mut Context<'_>) -> Option<String> {
    let at = root.require(
        "plant",
        cx,
        "write plant = \"tarn-mill\", the name in its address",
    )?;
    let name = at.string(cx, "\"tarn-mill\"")?;
    let faults_before = cx.findings.errors();
    check_name(name, &[], &at.place, cx);
    let fits = |c: char| c.is_ascii_alphanumeric() || c == '-' || c == '_';
    if let Some(c) = name
        .chars()
        .find(|c| !fits(*c))
        .filter(|_| cx.findings.errors() == faults_before)
    {
        let what = format!(
            "`{}` in the plant's name, which is part of its address",
            c.escape_debug()
        );
        cx.error(
            &at.place,
            what,
            "use letters, digits, `-` and `_`; `title` is free",
        );
    }
    Some(name.to_owned())
}

fn uncertain_factor(root: &Fields<'_>, cx: &mut Context<'_>) -> Option<f64> {
    let Some(at) = root.get("uncertain-factor") else {
        return Some(UNCERTAIN_FACTOR);
    };
    let factor = at.number(cx, "2")?;
    if factor < 1.0 {
        let what =
            format!("a factor of {factor} would trust uncertain readings more than good ones");
        cx.error(&at.place, what, "write 1 or more");
        return None;
    }
    Some(factor)
}

fn confidence(root: &Fields<'_>, cx: &mut Context<'_>) -> Option<f64> {
    let Some(at) = root.get("confidence") else {
        return Some(CONFIDENCE);
    };
    let value = match at.node.value {
        Content::Number(_) => at.number(cx, "0.95")?,
        _ => fraction(&at, cx)?,
    };
    if !(0.5..1.0).contains(&value) {
        let mend = "write 50 % or more and less than 100 %, such as \"95 %\"";
        cx.error(&at.place, "no test can have this confidence", mend);
        return None;
    }
    Some(value)
}

fn barometer<'n>(root: &Fields<'n>, cx: &mut Context<'_>) -> BarometerDraft<'n> {
    let Some(at) = root.get("barometer") else {
        return BarometerDraft::Absent;
    };
    let faults_before = cx.findings.errors();
    let Some(fields) = at.fields(cx, &BAROMETER_SHAPE, BAROMETER_EXAMPLE) else {
        return BarometerDraft::Unclear;
    };
    if let Some(tag) = fields.get("tag") {
        for key in ["value", "uncertainty"] {
            if let Some(other) = fields.get(key) {
                let what =
                    format!("`{key}` beside `tag`: the tag gives both value and uncertainty");
                cx.error(&other.key, what, "remove one of them");
            }
        }
        return match tag.string(cx, "the name of a pressure tag") {
            Some(name) => BarometerDraft::Tag(name, tag.place),
            None => BarometerDraft::Unclear,
        };
    }
    let mend = "write a value with an uncertainty, or tag = \"...\"";
    let value = fields.require("value", cx, mend).and_then(|at| {
        let value = amount(&at, Dimension::Pressure, cx)?;
        check_pressure(&value, &at, cx)
    });
    if fields.get("uncertainty").is_none() {
        let Some(value) = value.filter(|_| cx.findings.errors() == faults_before) else {
            return BarometerDraft::Unclear;
        };
        let what = "the barometer is taken as exact: its error shows up in every gauge pressure";
        cx.findings
            .warning(&at.key, what, "add uncertainty = { absolute = \"2 mbar\" }");
        return BarometerDraft::Exact(value.internal());
    }
    let subject = Subject {
        dimension: Some(Dimension::Pressure),
        unit: value.as_ref().map(|v| &v.unit),
        span: Span::Impossible,
    };
    let uncertainty = uncertainty(&fields, &subject, cx);
    match (value, uncertainty) {
        (Some(value), Some(uncertainty)) if cx.findings.errors() == faults_before => {
            BarometerDraft::Assumed(Assumption {
                name: BAROMETER.to_owned(),
                quantity: Quantity::Barometer,
                unit: value.unit,
                value: value.value,
                uncertainty,
                in_service_when: None,
            })
        }
        _ => BarometerDraft::Unclear,
    }
}

/// Atmospheric pressures on Earth at any height of a plant, MPa.
const ATMOSPHERIC: std::ops::RangeInclusive<f64> = 0.04..=0.12;

fn check_pressure(value: &Amount, at: &At<'_>, cx: &mut Context<'_>) -> Option<Amount> {
    if !ATMOSPHERIC.contains(&value.internal()) {
        let what = format!("no atmosphere has {} {}", value.value, value.unit.symbol);
        cx.error(
            &at.place,
            what,
            "write the pressure at the station, 400 to 1200 mbar",
        );
        return None;
    }
    Some(value.clone())
}

fn check_tag(name: &str, place: &Place, tags: &[TagDraft<'_>], cx: &mut Context<'_>) {
    let Some(tag) = tags.iter().find(|t| t.name == name) else {
        let mend = cx.did_you_mean(name, tags.iter().map(|t| t.name.as_str()), || {
            format!("add `{name}` to [tags], with measures = \"pressure\"")
        });
        cx.error(place, format!("there is no tag `{name}`"), mend);
        return;
    };
    match (member(&tag.at, "measures"), member(&tag.at, "of")) {
        (Some("pressure"), None | Some(BAROMETER)) | (None, _) => {}
        (Some("pressure"), Some(of)) => {
            let what = format!("`{name}` measures the pressure of `{of}`, not of the atmosphere");
            cx.error(
                place,
                what,
                format!("write of = \"{BAROMETER}\" there, or name another tag"),
            );
        }
        (Some(measures), _) => {
            let what = format!("`{name}` measures {measures}, not pressure");
            cx.error(place, what, "name a tag with measures = \"pressure\"");
        }
    }
}

/// The text of a member of a table.
pub(super) fn member<'n>(at: &At<'n>, key: &str) -> Option<&'n str> {
    let Content::Table(table) = &at.node.value else {
        return None;
    };
    match &table.entries.iter().find(|e| e.key == key)?.node.value {
        Content::String(s) => Some(s),
        _ => None,
    }
}

fn member_place(at: &At<'_>, key: &str) -> Place {
    let Content::Table(table) = &at.node.value else {
        return at.key.clone();
    };
    match table.entries.iter().find(|e| e.key == key) {
        Some(entry) => At::member(&at.key, entry).place,
        None => at.key.clone(),
    }
}
