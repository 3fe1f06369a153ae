//! What an `of` names: a stream or a piece of equipment, and the quantity that
//! is measured or stated there.

use super::kinds::Direction;
use super::network::Network;
use super::reader::{At, Context, Fields, quoted};
use crate::plant::{EquipmentId, PressureReference, Quantity, StreamId};

/// What an `of` comes to.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum Target {
    /// A quantity.
    Known(Quantity),
    /// A fault was reported; the quantity that is probably meant.
    Unclear(Option<Quantity>),
}

impl Target {
    pub fn touches(self) -> Option<Quantity> {
        match self {
            Target::Known(q) => Some(q),
            Target::Unclear(q) => q,
        }
    }
}

/// Finds what `of` names: a stream, or for power a machine.
pub(super) fn target(
    measures: &str,
    reference: PressureReference,
    fields: &Fields<'_>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Target {
    let mend = if measures == "power" {
        "write of = \"...\" with the name of a turbine, pump, generator or motor"
    } else {
        "write of = \"...\" with the name of a stream"
    };
    let Some(at) = fields.require("of", cx, mend) else {
        return Target::Unclear(None);
    };
    if measures == "power" {
        return power(&at, network, cx);
    }
    let quantity = |stream| match measures {
        "mass-flow" => Quantity::MassFlow(stream),
        "temperature" => Quantity::Temperature(stream),
        "quality" => Quantity::Quality(stream),
        _ => Quantity::Pressure(stream, reference),
    };
    match stream(&at, network, cx) {
        Ok(stream) => Target::Known(quantity(stream)),
        Err(meant) => Target::Unclear(meant.map(quantity)),
    }
}

/// The stream that a value names; the one probably meant after a fault.
pub(super) fn stream(
    at: &At<'_>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Result<StreamId, Option<StreamId>> {
    let Some(name) = at.string(cx, "the name of a stream, such as \"live-steam\"") else {
        return Err(None);
    };
    if let Some(id) = network.stream_id(name) {
        return Ok(id);
    }
    let (machine, port) = name.split_once('.').unwrap_or((name, ""));
    if let Some(id) = network.equipment_id(machine) {
        let draft = network.draft(id);
        let mut on: Vec<StreamId> = Vec::new();
        for direction in [Direction::In, Direction::Out] {
            on.extend(draft.on(port, direction));
        }
        if port.is_empty() {
            on = draft.joints.iter().map(|(_, _, s)| *s).collect();
        }
        let names: Vec<&str> = on.iter().take(8).map(|s| network.stream_name(*s)).collect();
        let mend = match names[..] {
            [] => "name a stream".to_owned(),
            [one] => format!("name the stream: `{one}`"),
            _ => format!("name one of its streams: {}", quoted(&names)),
        };
        let what = format!("`{name}` is equipment, and this is measured in a stream");
        cx.error(&at.place, what, mend);
        return Err(on.first().copied());
    }
    let meant = cx.suggester.closest(name, network.stream_names());
    let mend = match meant {
        Some(meant) => format!("did you mean `{meant}`?"),
        None => format!("add `{name}` to [streams], or name one that is there"),
    };
    cx.error(&at.place, format!("there is no stream `{name}`"), mend);
    Err(meant.and_then(|m| network.stream_id(m)))
}

fn power(at: &At<'_>, network: &Network<'_>, cx: &mut Context<'_>) -> Target {
    let machines = ["turbine", "pump", "generator", "motor"];
    match equipment(at, network, cx) {
        Err(meant) => Target::Unclear(meant.map(Quantity::Power)),
        Ok(id) => match network.draft(id).row {
            Some(row) if !machines.contains(&row.name) => {
                let what = format!("a {} has no power", row.name);
                cx.error(
                    &at.place,
                    what,
                    format!("name one of these kinds: {}", quoted(&machines)),
                );
                Target::Unclear(Some(Quantity::Power(id)))
            }
            Some(_) => Target::Known(Quantity::Power(id)),
            None => Target::Unclear(Some(Quantity::Power(id))),
        },
    }
}

/// The equipment that a value names; the one probably meant after a fault.
pub(super) fn equipment(
    at: &At<'_>,
    network: &Network<'_>,
    cx: &mut Context<'_>,
) -> Result<EquipmentId, Option<EquipmentId>> {
    let Some(name) = at.string(cx, "the name of a piece of equipment") else {
        return Err(None);
    };
    if let Some(id) = network.equipment_id(name) {
        return Ok(id);
    }
    let meant = cx.suggester.closest(name, network.equipment_names());
    let mend = match meant {
        Some(meant) => format!("did you mean `{meant}`?"),
        None if network.stream_id(name).is_some() => {
            format!("`{name}` is a stream: name a piece of equipment")
        }
        None => format!("add `{name}` to [equipment], or name one that is there"),
    };
    cx.error(&at.place, format!("there is no equipment `{name}`"), mend);
    Err(meant.and_then(|m| network.equipment_id(m)))
}
