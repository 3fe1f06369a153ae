//! Assumptions: values from design data.

use super::amount::{amount, parts};
use super::equipment::EquipmentDraft;
use super::kinds::{Direction, KINDS};
use super::network::{End, MAX_MEMBERS, Network, description};
use super::reader::{At, Context, Fields, Shape, check_name, quoted};
use super::sides::{efficiency, pressure_drop};
use super::tags::{self, BAROMETER, MEASUREMENTS, TagDraft, dimension_of, reference};
use super::targets::{self, Target};
use super::terms::{Span, Subject, uncertainty};
use crate::plant::{Assumption, Dimension, EquipmentId, PressureReference, Quantity, StreamId};
use std::collections::HashSet;

/// An assumption as read.
pub(super) struct AssumptionDraft<'n> {
    pub at: At<'n>,
    /// What it states, or probably would if faults were mended.
    pub touches: Option<Quantity>,
    /// The assumption, where it has no fault of its own.
    pub assumption: Option<Assumption>,
}

/// What only an assumption states.
const STATEMENTS: &[&str] = &[
    "heat-loss",
    "loss",
    "pressure-drop",
    "subcooling",
    "isentropic-efficiency",
    "holdup-change",
    "enthalpy",
];

const ASSUMPTION: Shape = Shape {
    owner: "an assumption",
    keys: &[
        "value-of",
        "of",
        "between",
        "value",
        "uncertainty",
        "reference",
        "in-service-when",
        "description",
    ],
};

const EXAMPLE: &str = "{ value-of = \"heat-loss\", of = \"heater-6\", value = \"25 kW\", \
                       uncertainty = { absolute = \"40 kW\" } }";

/// Reads the optional table `assumptions`.
pub(super) fn read<'n>(
    root: &Fields<'n>,
    network: &Network<'_>,
    tags: &[TagDraft<'_>],
    cx: &mut Context<'_>,
) -> Vec<AssumptionDraft<'n>> {
    let Some(at) = root.get("assumptions") else {
        return Vec::new();
    };
    let members = at.entries(cx, "a table [assumptions]").unwrap_or_default();
    if members.len() > MAX_MEMBERS {
        let what = format!("[assumptions] has {} members", members.len());
        cx.error(&at.key, what, format!("at most {MAX_MEMBERS} are possible"));
        return Vec::new();
    }
    let taken: HashSet<&str> = tags.iter().map(|tag| tag.name.as_str()).collect();
    for (name, at) in members.iter().filter(|(name, _)| taken.contains(name)) {
        let what = format!("`{name}` is a tag already: a series of it would be one of the two");
        cx.error(&at.key, what, "give the assumption another name");
    }
    let drafts = members.into_iter();
    drafts
        .map(|(name, at)| assumption(name, at, network, cx))
        .collect()
}

fn assumption<'n>(
    name: &'n str,
    at: At<'n>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> AssumptionDraft<'n> {
    let faults_before = cx.findings.errors();
    check_name(name, &['/'], &at.key, cx);
    if name == BAROMETER {
        let what = "`barometer` is the assumption that the plant's barometer makes";
        cx.error(
            &at.key,
            what,
            "give this one another name, or move it to the key `barometer`",
        );
    }
    let mut draft = AssumptionDraft {
        touches: None,
        assumption: None,
        at,
    };
    let Some(fields) = draft.at.fields(cx, &ASSUMPTION, EXAMPLE) else {
        return draft;
    };
    description(&fields, cx);
    let Some(statement) = statement(&fields, cx) else {
        shape(&fields, cx);
        return draft;
    };
    let reference = reference(&fields, Some(statement), cx);
    let target = match dimension_of(statement) {
        Some(_) => targets::target(statement, reference, &fields, network, cx),
        None => stated(statement, &fields, network, cx),
    };
    draft.touches = target.touches();
    let takes_between = matches!(statement, "pressure-drop" | "isentropic-efficiency");
    if let Some(between) = fields.get("between").filter(|_| !takes_between) {
        let what = format!("`between` says nothing about `{statement}`");
        cx.error(&between.key, what, "remove it");
    }
    let dimension = dimension_of(statement).unwrap_or(match statement {
        "heat-loss" | "loss" => Dimension::Power,
        "pressure-drop" => Dimension::Pressure,
        "subcooling" => Dimension::TemperatureDifference,
        "isentropic-efficiency" => Dimension::Fraction,
        "holdup-change" => Dimension::MassFlow,
        _ => Dimension::SpecificEnthalpy,
    });
    let example = format!("write value = \"1 {}\"", dimension.common()[0]);
    let value = fields.require("value", cx, &example).and_then(|at| {
        let value = amount(&at, dimension, cx)?;
        check_value(
            statement,
            reference == PressureReference::Absolute,
            value.internal(),
            &at,
            cx,
        )?;
        Some(value)
    });
    let subject = Subject {
        dimension: Some(dimension),
        unit: value.as_ref().map(|v| &v.unit),
        span: Span::Impossible,
    };
    let uncertainty = uncertainty(&fields, &subject, cx);
    if cx.findings.errors() > faults_before {
        return draft;
    }
    if let (Target::Known(quantity), Some(value), Some(uncertainty)) = (target, value, uncertainty)
    {
        if uncertainty.sigma(value.value).is_none() {
            let what = "the uncertainty of this value comes out zero";
            let place = fields
                .get("uncertainty")
                .map_or(draft.at.key.clone(), |at| at.place);
            cx.error(&place, what, "state an `absolute` term too");
            return draft;
        }
        draft.assumption = Some(Assumption {
            name: name.to_owned(),
            quantity,
            unit: value.unit,
            value: value.value,
            uncertainty,
            in_service_when: None,
        });
    }
    draft
}

/// Looks at the value and the uncertainty of nobody knows what.
fn shape(fields: &Fields<'_>, cx: &mut Context<'_>) {
    if let Some(at) = fields.require("value", cx, "write value = \"1 bar\"") {
        parts(&at, "bar", cx);
    }
    let subject = Subject {
        dimension: None,
        unit: None,
        span: Span::Impossible,
    };
    uncertainty(fields, &subject, cx);
}

fn statement<'n>(fields: &Fields<'n>, cx: &mut Context<'_>) -> Option<&'n str> {
    let names: Vec<&str> = STATEMENTS.iter().chain(MEASUREMENTS).copied().collect();
    let all = format!("an assumption can state {}", quoted(&names));
    let at = fields.require("value-of", cx, &format!("write value-of = \"...\"; {all}"))?;
    let name = at.string(cx, "\"heat-loss\"")?;
    if names.contains(&name) {
        return Some(name);
    }
    if tags::LATER.contains(&name) {
        cx.error(
            &at.place,
            format!("stating `{name}` is not available yet"),
            all,
        );
    } else {
        let mend = cx.did_you_mean(name, names, || all);
        cx.error(&at.place, format!("there is no quantity `{name}`"), mend);
    }
    None
}

/// Refuses values that no state of matter or machine has.
fn check_value(
    statement: &str,
    is_absolute: bool,
    internal: f64,
    at: &At<'_>,
    cx: &mut Context<'_>,
) -> Option<()> {
    let possible = match statement {
        "isentropic-efficiency" => (
            internal > 0.0 && internal <= 1.0,
            "above 0 and at most 100 %",
        ),
        "quality" => ((0.0..=1.0).contains(&internal), "from 0 to 100 %"),
        "pressure" if is_absolute => (internal > 0.0, "above 0 where it is absolute"),
        "temperature" => (internal > 0.0, "above absolute zero"),
        _ => (true, ""),
    };
    if !possible.0 {
        let what = format!("no {statement} has this value");
        cx.error(&at.place, what, format!("state one {}", possible.1));
        return None;
    }
    Some(())
}

/// Finds what a statement that no tag makes is about.
fn stated(
    statement: &str,
    fields: &Fields<'_>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Target {
    let mend = match statement {
        "enthalpy" => "write of = \"...\" with the name of a stream",
        "subcooling" => "write of = \"...\" with the name of a stream or heater",
        _ => "write of = \"...\" with the name of a piece of equipment",
    };
    let Some(at) = fields.require("of", cx, mend) else {
        return Target::Unclear(None);
    };
    match statement {
        "enthalpy" => of_stream(targets::stream(&at, network, cx), Quantity::Enthalpy),
        "subcooling" => subcooling(&at, network, cx),
        "pressure-drop" => pressure_drop(&at, fields, network, cx),
        "isentropic-efficiency" => efficiency(&at, fields, network, cx),
        _ => of_equipment(statement, &at, network, cx),
    }
}

fn of_stream(
    found: Result<StreamId, Option<StreamId>>,
    quantity: fn(StreamId) -> Quantity,
) -> Target {
    match found {
        Ok(stream) => Target::Known(quantity(stream)),
        Err(meant) => Target::Unclear(meant.map(quantity)),
    }
}

/// `heat-loss`, `loss`, `holdup-change`: each of the kinds that have one.
fn of_equipment(
    statement: &str,
    at: &At<'_>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Target {
    let quantity: fn(EquipmentId) -> Quantity = match statement {
        "heat-loss" => Quantity::HeatLoss,
        "loss" => Quantity::Loss,
        _ => Quantity::HoldupChange,
    };
    let id = match targets::equipment(at, network, cx) {
        Ok(id) => id,
        Err(meant) => return Target::Unclear(meant.map(quantity)),
    };
    let draft = network.draft(id);
    let Some(row) = draft.row else {
        return Target::Unclear(Some(quantity(id)));
    };
    let machines = ["generator", "shaft", "motor"];
    let has = |name: &str| match statement {
        "loss" => machines.contains(&name),
        "heat-loss" => KINDS.iter().any(|r| r.name == name && r.has_heat_loss),
        _ => KINDS.iter().any(|r| r.name == name && r.has_holdup),
    };
    if !has(row.name) {
        let mend = match statement {
            "heat-loss" if machines.contains(&row.name) => "write value-of = \"loss\"".to_owned(),
            "loss" if row.has_heat_loss => "write value-of = \"heat-loss\"".to_owned(),
            _ => {
                let kinds: Vec<&str> = KINDS.iter().map(|r| r.name).filter(|n| has(n)).collect();
                format!("name one of these kinds: {}", quoted(&kinds))
            }
        };
        cx.error(
            &at.place,
            format!("a {} has no {statement}", row.name),
            mend,
        );
        return Target::Unclear(Some(quantity(id)));
    }
    if statement == "heat-loss" && has_free_heat(draft) {
        let what = format!(
            "the heat of `{}` goes to what is not part of the plant: its loss cannot be told from it",
            draft.name
        );
        cx.error(
            &at.place,
            what,
            "add the other side's streams, or remove the assumption",
        );
        return Target::Unclear(Some(quantity(id)));
    }
    Target::Known(quantity(id))
}

/// One side only: the heat passed on is a state of its own.
fn has_free_heat(draft: &EquipmentDraft<'_>) -> bool {
    let lacks = |port| {
        draft.on(port, Direction::In).is_empty() && draft.on(port, Direction::Out).is_empty()
    };
    match draft.row.map(|row| row.name) {
        Some("condenser") => lacks("cooling") && draft.unclear == [false; 2],
        Some("exchanger") => lacks("hot") != lacks("cold") && draft.unclear == [false; 2],
        _ => false,
    }
}

/// Outlets that carry liquid: (kind, port, the key that makes it saturated).
const LIQUID_OUTLETS: &[(&str, &str, &str)] = &[
    ("closed-heater", "drain", "drain-outlet"),
    ("condenser", "condensate", "condensate"),
    ("open-heater", "out", "outlet"),
];

/// Of a stream, or of the liquid outlet of a vessel.
fn subcooling(at: &At<'_>, network: &Network<'_>, cx: &mut Context<'_>) -> Target {
    let Some(name) = at.string(cx, "the name of a stream or heater") else {
        return Target::Unclear(None);
    };
    let stream = match network.stream_id(name) {
        Some(stream) => stream,
        None => {
            let (machine, port) = match name.split_once('.') {
                Some((machine, port)) => (machine, Some(port)),
                None => (name, None),
            };
            let vessel = network.equipment_id(machine).map(|id| network.draft(id));
            let Some(vessel) = vessel else {
                return of_stream(targets::stream(at, network, cx), Quantity::Subcooling);
            };
            let Some(row) = vessel.row else {
                return Target::Unclear(None);
            };
            let outlet = LIQUID_OUTLETS.iter().find(|(kind, _, _)| *kind == row.name);
            let outlet = outlet.filter(|(_, p, _)| port.is_none_or(|port| port == *p));
            let Some((_, port, _)) = outlet else {
                return of_stream(targets::stream(at, network, cx), Quantity::Subcooling);
            };
            match vessel.on(port, Direction::Out)[..] {
                [stream] => stream,
                _ => return Target::Unclear(None),
            }
        }
    };
    if let Some((key, vessel)) = saturated_by(stream, network) {
        let what = format!(
            "`{}` is saturated already by `{key}` of `{vessel}`",
            network.stream_name(stream)
        );
        cx.error(
            &at.place,
            what,
            format!("remove `{key}` there, or this assumption"),
        );
        return Target::Unclear(Some(Quantity::Subcooling(stream)));
    }
    Target::Known(Quantity::Subcooling(stream))
}

/// The key that declares a stream saturated, and the vessel that it leaves.
fn saturated_by<'n>(stream: StreamId, network: &Network<'n>) -> Option<(&'static str, &'n str)> {
    let End::Joined(id, _, _) = network.streams[stream.0].from else {
        return None;
    };
    let vessel = network.draft(id);
    let port = vessel.port_of(stream, Direction::Out)?;
    let (_, _, key) = LIQUID_OUTLETS.iter().find(|(kind, name, _)| {
        vessel.row.is_some_and(|r| r.name == *kind) && port.name == *name
    })?;
    vessel.fields.as_ref()?.get(key)?;
    Some((key, vessel.name))
}
