//! Assumptions about what happens between two streams of a piece of equipment:
//! pressure drop and isentropic efficiency.

use super::equipment::EquipmentDraft;
use super::kinds::{Direction, REHEAT};
use super::network::Network;
use super::reader::{At, Context, Fields, quoted};
use super::targets::{self, Target};
use crate::plant::{Quantity, StreamId};

use Direction::{In, Out};

/// The side by which a stream may pass through: name, port in, port out.
struct Side {
    name: String,
    inlet: String,
    outlet: String,
}

/// Pressure of an inlet minus pressure of an outlet, `of` equipment or one of
/// its sides.
pub(super) fn pressure_drop(
    at: &At<'_>,
    fields: &Fields<'_>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Target {
    let Some(name) = at.string(cx, "\"heater-6.tube\"") else {
        return Target::Unclear(None);
    };
    let (machine, side) = match name.split_once('.') {
        Some((machine, side)) => (machine, Some(side)),
        None => (name, None),
    };
    let Some(id) = network.equipment_id(machine) else {
        unknown(machine, at, network, cx);
        return Target::Unclear(None);
    };
    let draft = network.draft(id);
    let Some(row) = draft.row else {
        return Target::Unclear(None);
    };
    if matches!(row.name, "splitter" | "header") {
        let what = format!(
            "all streams of the {} `{machine}` have one pressure",
            row.name
        );
        cx.error(
            &at.place,
            what,
            "remove the assumption, or put a valve where the pressure drops",
        );
        return Target::Unclear(None);
    }
    let sides = sides(draft);
    let names: Vec<&str> = sides.iter().map(|s| s.name.as_str()).collect();
    if names.is_empty() {
        cx.error(
            &at.place,
            format!("no stream passes the {} `{machine}`", row.name),
            "name other equipment",
        );
        return Target::Unclear(None);
    }
    let chosen = side.and_then(|wanted| sides.iter().find(|s| s.name == wanted));
    let between = fields.get("between");
    let is_port = |side: &str| row.port(side, In).or(row.port(side, Out)).is_some();
    let enough = |side: &str| between.is_some() && is_port(side);
    if let (Some(side), None) = (side.filter(|side| !enough(side)), chosen) {
        let written: Vec<String> = names.iter().map(|n| format!("{machine}.{n}")).collect();
        let mend = cx.did_you_mean(side, names.iter().copied(), || {
            format!("write {}", quoted(&written))
        });
        cx.error(
            &at.place,
            format!("the {} `{machine}` has no side `{side}`", row.name),
            mend,
        );
        return Target::Unclear(None);
    }
    let (from, to) = if let Some(between) = between {
        match two_streams(&between, draft, network, cx) {
            Some(pair) => pair,
            None => return Target::Unclear(None),
        }
    } else {
        let side = match (chosen, &sides[..]) {
            (Some(side), _) => side,
            (None, [only]) => only,
            (None, _) => {
                let written: Vec<String> = names.iter().map(|n| format!("{machine}.{n}")).collect();
                let what = format!("the {} `{machine}` has several sides", row.name);
                cx.error(
                    &at.place,
                    what,
                    format!("write one of {}", quoted(&written)),
                );
                return Target::Unclear(None);
            }
        };
        match (
            &draft.on(&side.inlet, In)[..],
            &draft.on(&side.outlet, Out)[..],
        ) {
            ([inlet], [outlet]) => (*inlet, *outlet),
            ([], _) | (_, []) => return Target::Unclear(None),
            _ => {
                let what = format!("several streams pass this side of `{machine}`");
                let mend = "say which two with between = [\"inlet\", \"outlet\"]";
                cx.error(&at.place, what, mend);
                return Target::Unclear(None);
            }
        }
    };
    if has_equal_pressures(draft, from, to) {
        let what = format!(
            "`{}` and `{}` have one pressure in the {} `{machine}` already",
            network.stream_name(from),
            network.stream_name(to),
            row.name
        );
        cx.error(&at.place, what, "remove the assumption");
        return Target::Unclear(None);
    }
    Target::Known(Quantity::PressureDrop(from, to))
}

/// Isentropic efficiency of a turbine or pump.
pub(super) fn efficiency(
    at: &At<'_>,
    fields: &Fields<'_>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Target {
    let Ok(of) = targets::equipment(at, network, cx) else {
        return Target::Unclear(None);
    };
    let draft = network.draft(of);
    let Some(row) = draft.row else {
        return Target::Unclear(None);
    };
    if !matches!(row.name, "turbine" | "pump") {
        let what = format!("a {} has no isentropic efficiency", row.name);
        cx.error(&at.place, what, "name a turbine or a pump");
        return Target::Unclear(None);
    }
    let pair = match fields.get("between") {
        Some(between) => two_streams(&between, draft, network, cx),
        None => match (&draft.on("in", In)[..], &draft.on("out", Out)[..]) {
            ([inlet], [outlet]) => Some((*inlet, *outlet)),
            ([], _) | (_, []) => None,
            _ => {
                let what = format!("`{}` has several inlets or outlets", draft.name);
                let mend = "say from which stream to which with between = [\"inlet\", \"outlet\"]";
                cx.error(&at.place, what, mend);
                None
            }
        },
    };
    match pair {
        Some((inlet, outlet)) => {
            Target::Known(Quantity::IsentropicEfficiency { of, inlet, outlet })
        }
        None => Target::Unclear(None),
    }
}

fn unknown(machine: &str, at: &At<'_>, network: &Network<'_>, cx: &mut Context<'_>) {
    let mend = cx.did_you_mean(machine, network.equipment_names(), || {
        if network.stream_id(machine).is_some() {
            format!("`{machine}` is a stream: name the equipment, and the two streams in `between`")
        } else {
            "name a piece of equipment, or one of its sides, such as \"heater-6.tube\"".to_owned()
        }
    });
    cx.error(
        &at.place,
        format!("there is no equipment `{machine}`"),
        mend,
    );
}

/// Reads `between`: the first joins the equipment either way (a bleed may be
/// where a section starts), the second leaves it.
fn two_streams(
    between: &At<'_>,
    draft: &EquipmentDraft<'_>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Option<(StreamId, StreamId)> {
    let items = between.array(cx, "[\"inlet\", \"outlet\"]")?;
    let [first, second] = &items[..] else {
        let what = format!("`between` names two streams, this has {}", items.len());
        cx.error(&between.place, what, "write [\"inlet\", \"outlet\"]");
        return None;
    };
    let from = targets::stream(first, network, cx);
    let to = targets::stream(second, network, cx);
    let (from, to) = (from.ok()?, to.ok()?);
    if draft.unclear != [false; 2] {
        return None;
    }
    let is_on = |stream, direction| draft.port_of(stream, direction).is_some();
    let mut good = true;
    if !is_on(from, In) && !is_on(from, Out) {
        let what = format!(
            "`{}` does not join `{}`",
            network.stream_name(from),
            draft.name
        );
        cx.error(&first.place, what, "name a stream that enters it");
        good = false;
    }
    if from == to {
        cx.error(
            &second.place,
            "the same stream twice",
            "name the stream where it ends",
        );
        good = false;
    } else if !is_on(to, Out) {
        let what = format!(
            "`{}` does not leave `{}`",
            network.stream_name(to),
            draft.name
        );
        cx.error(&second.place, what, "name a stream that leaves it");
        good = false;
    }
    good.then_some((from, to))
}

/// The sides of a piece of equipment that streams pass.
fn sides(draft: &EquipmentDraft<'_>) -> Vec<Side> {
    let Some(row) = draft.row else {
        return Vec::new();
    };
    let side = |name: &str, inlet: &str, outlet: &str| Side {
        name: name.to_owned(),
        inlet: inlet.to_owned(),
        outlet: outlet.to_owned(),
    };
    let passed = |port: &str| !draft.on(port, In).is_empty() || !draft.on(port, Out).is_empty();
    let mut sides = match row.name {
        "closed-heater" => vec![
            side("tube", "tube", "tube"),
            side("steam", "steam", "drain"),
        ],
        "condenser" => vec![
            side("cooling", "cooling", "cooling"),
            side("steam", "steam", "condensate"),
        ],
        "exchanger" => vec![side("hot", "hot", "hot"), side("cold", "cold", "cold")],
        "boiler" => vec![side("water", "water", "water")],
        "generator" | "shaft" | "motor" => Vec::new(),
        // The one side of these has no name of its own.
        _ => vec![side("in", "in", "out")],
    };
    if row.name == "boiler" {
        let mut numbers: Vec<u32> = draft.joints.iter().map(|(_, n, _)| *n).collect();
        numbers.sort_unstable();
        numbers.dedup();
        for n in numbers.into_iter().filter(|n| *n > 0) {
            let name = format!("{REHEAT}{n}");
            sides.push(side(&name, &name, &name));
        }
    }
    sides.retain(|s| passed(&s.inlet) || passed(&s.outlet));
    sides
}

/// A closed heater's drain and vent have the steam's pressure, a vent has that
/// of its vessel's outlet.
fn has_equal_pressures(draft: &EquipmentDraft<'_>, a: StreamId, b: StreamId) -> bool {
    let mut vessel: Vec<StreamId> = draft.on("vent", Out);
    match draft.row.map(|row| row.name) {
        Some("closed-heater") => {
            vessel.extend(draft.on("steam", In));
            vessel.extend(draft.on("drain", Out));
        }
        Some("condenser") => vessel.extend(draft.on("condensate", Out)),
        Some("open-heater") => vessel.extend(draft.on("out", Out)),
        _ => {}
    }
    vessel.contains(&a) && vessel.contains(&b)
}
