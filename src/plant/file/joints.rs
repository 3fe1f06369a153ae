//! From the streams on its ports to the kind of each piece of equipment.

use std::collections::{BTreeSet, HashMap};

use super::equipment::EquipmentDraft;
use super::kinds::{Direction, REHEAT};
use super::network::Network;
use super::reader::{At, Context};
use crate::plant::{EquipmentId, Kind, StreamId};

use Direction::{In, Out};

/// Checks every port and coupling; one kind per piece of equipment, `None`
/// where faults were found.
pub(super) fn kinds(network: &Network<'_>, cx: &mut Context<'_>) -> Vec<Option<Kind>> {
    for draft in &network.equipment {
        check_ports(network, draft, cx);
    }
    let mut couplings = Couplings {
        network,
        coupled: HashMap::new(),
    };
    let equipment = network.equipment.iter();
    equipment.map(|draft| couplings.kind(draft, cx)).collect()
}

/// Streams too many on a port are shown at the stream, streams missing at the
/// equipment.
fn check_ports(network: &Network<'_>, draft: &EquipmentDraft<'_>, cx: &mut Context<'_>) {
    let Some(row) = draft.row else { return };
    let mut ports: BTreeSet<(usize, u32)> = BTreeSet::new();
    for (i, port) in row.ports.iter().enumerate() {
        if port.name != REHEAT {
            ports.insert((i, 0));
        }
    }
    ports.extend(draft.joints.iter().map(|(p, n, _)| (*p, *n)));
    if draft.joints.is_empty() && !row.ports.is_empty() && draft.unclear == [false; 2] {
        let what = format!("no stream joins the {} `{}`", row.name, draft.name);
        let mend = format!("lead streams to and from it: {}", wanted(draft));
        cx.error(&draft.place, what, mend);
        return;
    }
    for &(index, number) in &ports {
        let port = &row.ports[index];
        let name = port_name(port.name, number);
        let streams = draft.on(&name, port.direction);
        let other = port.direction.other();
        let has_partner = !draft.on(&name, other).is_empty();
        if port.is_single() && streams.len() > 1 {
            too_many(network, draft, &name, port.direction, &streams, cx);
        }
        if streams.len() < port.least(has_partner) {
            missing(draft, &name, port.direction, cx);
        }
        // A reheater stands here only if a stream joins it: it needs the other
        // end too.
        if number > 0 && !has_partner {
            missing(draft, &name, other, cx);
        }
    }
    check_numbers(draft, &ports, cx);
}

/// Reheaters are numbered from 1 without gaps.
fn check_numbers(draft: &EquipmentDraft<'_>, ports: &BTreeSet<(usize, u32)>, cx: &mut Context<'_>) {
    let numbers: BTreeSet<u32> = ports.iter().map(|p| p.1).filter(|n| *n > 0).collect();
    let gap = (1..)
        .zip(&numbers)
        .find(|(expected, number)| expected != *number);
    if let Some((expected, number)) = gap {
        let name = draft.name;
        let what = format!("`{name}` has a reheat-{number} but no reheat-{expected}");
        cx.error(
            &draft.place,
            what,
            "number the reheaters from 1 without gaps",
        );
    }
}

fn port_name(name: &str, number: u32) -> String {
    if number > 0 {
        format!("{name}{number}")
    } else {
        name.to_owned()
    }
}

/// The required ends of a kind, for messages.
fn wanted(draft: &EquipmentDraft<'_>) -> String {
    let ports = draft.row.map_or(&[][..], |row| row.ports);
    let needed = ports.iter().filter(|p| p.least(true) > 0);
    let ends: Vec<String> = needed.map(|p| end(draft, p.name, p.direction)).collect();
    ends.join(", ")
}

/// `to = "heater-6.steam"`, for messages.
fn end(draft: &EquipmentDraft<'_>, port: &str, direction: Direction) -> String {
    let key = direction.key();
    if port == direction.name() {
        format!("{key} = \"{}\"", draft.name)
    } else {
        format!("{key} = \"{}.{port}\"", draft.name)
    }
}

fn missing(draft: &EquipmentDraft<'_>, port: &str, direction: Direction, cx: &mut Context<'_>) {
    if draft.is_unclear(direction) {
        return;
    }
    let kind = draft.row.map_or("equipment", |row| row.name);
    let name = draft.name;
    let what = match (direction, port == direction.name()) {
        (In, true) => format!("the {kind} `{name}` has no inlet"),
        (Out, true) => format!("the {kind} `{name}` has no outlet"),
        (In, false) => format!("the {kind} `{name}` has no stream into `{port}`"),
        (Out, false) => format!("the {kind} `{name}` has no stream out of `{port}`"),
    };
    let mend = format!("give one stream {}", end(draft, port, direction));
    cx.error(&draft.place, what, mend);
}

fn too_many(
    network: &Network<'_>,
    draft: &EquipmentDraft<'_>,
    port: &str,
    direction: Direction,
    streams: &[StreamId],
    cx: &mut Context<'_>,
) {
    let kind = draft.row.map_or("equipment", |row| row.name);
    let first = network.stream_name(streams[0]);
    for &stream in &streams[1..] {
        let stream = &network.streams[stream.0];
        let what = format!(
            "`{port}` of the {kind} `{}` takes one stream {}; `{}` joins it beside `{first}`",
            draft.name,
            match direction {
                In => "in",
                Out => "out",
            },
            stream.name
        );
        let mend = match direction {
            In => "join the streams in a mixer before it, or name another port",
            Out => "part the stream in a splitter after it, or name another port",
        };
        cx.error(&stream.place, what, mend);
    }
}

/// Builds kinds, and sees that no machine is coupled twice.
struct Couplings<'a, 'n> {
    network: &'a Network<'n>,
    coupled: HashMap<EquipmentId, &'n str>,
}

impl<'n> Couplings<'_, 'n> {
    fn kind(&mut self, draft: &EquipmentDraft<'n>, cx: &mut Context<'_>) -> Option<Kind> {
        let row = draft.row?;
        let one = |port: &str, direction| match draft.on(port, direction)[..] {
            [stream] => Some(stream),
            _ => None,
        };
        let many = |port: &str, direction| {
            Some(draft.on(port, direction)).filter(|streams| !streams.is_empty())
        };
        let vent = draft.on("vent", Out).first().copied();
        let pair = |port: &str| Some((one(port, In)?, one(port, Out)?));
        Some(match row.name {
            "mixer" => Kind::Mixer {
                inlets: many("in", In)?,
                outlet: one("out", Out)?,
            },
            "splitter" => Kind::Splitter {
                inlet: one("in", In)?,
                outlets: many("out", Out)?,
            },
            "header" => {
                let well_mixed = flag(draft, "well-mixed", true, cx);
                Kind::Header {
                    inlets: many("in", In)?,
                    outlets: many("out", Out)?,
                    well_mixed,
                }
            }
            "valve" => Kind::Valve {
                inlet: one("in", In)?,
                outlet: one("out", Out)?,
            },
            "pump" => Kind::Pump {
                inlet: one("in", In)?,
                outlet: one("out", Out)?,
            },
            "turbine" => Kind::Turbine {
                inlets: many("in", In)?,
                outlets: many("out", Out)?,
            },
            "closed-heater" => {
                let drain_saturated = is_saturated(draft, "drain-outlet", cx);
                Kind::ClosedHeater {
                    steam: one("steam", In)?,
                    drains_in: draft.on("drain", In),
                    drain_out: one("drain", Out)?,
                    tube_in: one("tube", In)?,
                    tube_out: one("tube", Out)?,
                    vent,
                    drain_saturated,
                }
            }
            "open-heater" => {
                let outlet_saturated = is_saturated(draft, "outlet", cx);
                Kind::OpenHeater {
                    inlets: many("in", In)?,
                    outlet: one("out", Out)?,
                    vent,
                    outlet_saturated,
                }
            }
            "condenser" => {
                let condensate_saturated = is_saturated(draft, "condensate", cx);
                Kind::Condenser {
                    steam: many("steam", In)?,
                    condensate: one("condensate", Out)?,
                    cooling: pair("cooling"),
                    vent,
                    condensate_saturated,
                }
            }
            "exchanger" => {
                let (hot, cold) = (pair("hot"), pair("cold"));
                hot.or(cold)?;
                Kind::Exchanger { hot, cold }
            }
            "boiler" => Kind::Boiler {
                water_in: many("water", In)?,
                water_out: many("water", Out)?,
                reheats: reheats(draft)?,
            },
            "generator" => Kind::Generator {
                driven_by: self.machines(draft, "driven-by", "turbine", cx)?,
            },
            "shaft" => {
                let drivers = self.machines(draft, "drivers", "turbine", cx);
                let driven = self.machines(draft, "driven", "pump", cx);
                Kind::Shaft {
                    drivers: drivers?,
                    driven: driven?,
                }
            }
            "motor" => {
                let fields = draft.fields.as_ref()?;
                let at = fields.require("drives", cx, "write drives = \"pump-1\"")?;
                Kind::Motor {
                    drives: self.machine(draft, &at, "pump", cx)?,
                }
            }
            // Every name of the table of kinds stands above.
            _ => return None,
        })
    }

    /// The machines that a key lists.
    fn machines(
        &mut self,
        draft: &EquipmentDraft<'n>,
        key: &str,
        kind: &str,
        cx: &mut Context<'_>,
    ) -> Option<Vec<EquipmentId>> {
        let example = format!("{key} = [\"{kind}-1\"]");
        let fields = draft.fields.as_ref()?;
        let at = fields.require(key, cx, &format!("write {example}"))?;
        let items = at.array(cx, &format!("[\"{kind}-1\"]"))?;
        if items.is_empty() {
            let what = format!("`{key}` of `{}` is empty", draft.name);
            cx.error(
                &at.place,
                what,
                format!("name at least one {kind}: {example}"),
            );
            return None;
        }
        let machines: Vec<_> = items
            .iter()
            .map(|item| self.machine(draft, item, kind, cx))
            .collect();
        machines.into_iter().collect()
    }

    fn machine(
        &mut self,
        draft: &EquipmentDraft<'n>,
        at: &At<'n>,
        kind: &str,
        cx: &mut Context<'_>,
    ) -> Option<EquipmentId> {
        let name = at.string(cx, &format!("\"{kind}-1\""))?;
        let network = self.network;
        let Some(id) = network.equipment_id(name) else {
            let of_kind = network
                .equipment
                .iter()
                .filter(|e| e.row.is_some_and(|r| r.name == kind));
            let mend = cx.did_you_mean(name, of_kind.map(|e| e.name), || {
                format!("name a {kind} of [equipment]")
            });
            cx.error(&at.place, format!("there is no equipment `{name}`"), mend);
            return None;
        };
        let row = network.draft(id).row?;
        if row.name != kind {
            let what = format!("`{name}` is a {}, not a {kind}", row.name);
            cx.error(&at.place, what, format!("name a {kind}"));
            return None;
        }
        if let Some(first) = self.coupled.insert(id, draft.name) {
            let what = format!("`{name}` is coupled to `{first}` already");
            let mend = "its work can be counted once only: remove it from one of them";
            cx.error(&at.place, what, mend);
            return None;
        }
        Some(id)
    }
}

fn reheats(draft: &EquipmentDraft<'_>) -> Option<Vec<(Vec<StreamId>, StreamId)>> {
    let row = draft.row?;
    let numbers = draft
        .joints
        .iter()
        .filter(|(p, _, _)| row.ports[*p].name == REHEAT);
    let last = numbers.map(|(_, n, _)| *n).max().unwrap_or(0);
    let reheat = |n| {
        let name = port_name(REHEAT, n);
        let inlets = draft.on(&name, In);
        let outlets = draft.on(&name, Out);
        match outlets[..] {
            [outlet] if !inlets.is_empty() => Some((inlets, outlet)),
            _ => None,
        }
    };
    (1..=last).map(reheat).collect()
}

fn flag(draft: &EquipmentDraft<'_>, key: &str, default: bool, cx: &mut Context<'_>) -> bool {
    let at = draft.fields.as_ref().and_then(|f| f.get(key));
    at.and_then(|at| at.boolean(cx)).unwrap_or(default)
}

fn is_saturated(draft: &EquipmentDraft<'_>, key: &str, cx: &mut Context<'_>) -> bool {
    let Some(at) = draft.fields.as_ref().and_then(|f| f.get(key)) else {
        return false;
    };
    let text = at.string(cx, "\"saturated\"");
    if let Some(text) = text.filter(|t| *t != "saturated") {
        let what = format!("`{key}` cannot be `{text}`");
        cx.error(&at.place, what, "write \"saturated\", or leave the key out");
    }
    text.is_some()
}
