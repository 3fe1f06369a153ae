//! Faults that only show when the network is seen as a whole.

use std::collections::HashSet;

use super::assumptions::AssumptionDraft;
use super::network::{End, Network};
use super::parts::{Parts, rings};
use super::reader::{Context, quoted};
use super::tags::TagDraft;
use crate::plant::{EquipmentId, Kind, Quantity, StreamId};

/// What a quantity belongs to.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Owner {
    Stream(StreamId),
    Streams(StreamId, StreamId),
    Equipment(EquipmentId),
    Atmosphere,
}

/// The streams or equipment that a quantity belongs to.
pub(super) fn owner(quantity: Quantity) -> Owner {
    match quantity {
        Quantity::MassFlow(s)
        | Quantity::Pressure(s, _)
        | Quantity::Temperature(s)
        | Quantity::Quality(s)
        | Quantity::Enthalpy(s)
        | Quantity::Subcooling(s) => Owner::Stream(s),
        Quantity::PressureDrop(a, b) => Owner::Streams(a, b),
        Quantity::IsentropicEfficiency { inlet, outlet, .. } => Owner::Streams(inlet, outlet),
        Quantity::Power(e)
        | Quantity::HeatLoss(e)
        | Quantity::Loss(e)
        | Quantity::HoldupChange(e) => Owner::Equipment(e),
        Quantity::Barometer => Owner::Atmosphere,
    }
}

/// Rings whose flow nothing determines, and parts of the plant without a tag.
pub(super) fn check(
    network: &Network<'_>,
    kinds: &[Option<Kind>],
    tags: &[TagDraft<'_>],
    assumptions: &[AssumptionDraft<'_>],
    cx: &mut Context<'_>,
) {
    let observed: Vec<Quantity> = tags
        .iter()
        .filter_map(|t| t.touches)
        .chain(assumptions.iter().filter_map(|a| a.touches))
        .collect();
    check_rings(network, &observed, cx);
    if !tags.is_empty() {
        check_parts(network, kinds, tags, cx);
    }
}

/// Mixers, splitters, headers and valves that lead back to themselves: pressure
/// only falls on the way and enthalpy says nothing of the flow, so that it could
/// have any value unless one of the streams is metered.
fn check_rings(network: &Network<'_>, observed: &[Quantity], cx: &mut Context<'_>) {
    let is_passive = |id: EquipmentId| network.draft(id).row.is_some_and(|row| row.is_passive());
    let mut edges = Vec::new();
    let mut streams = Vec::new();
    for (i, stream) in network.streams.iter().enumerate() {
        if let (End::Joined(a, ..), End::Joined(b, ..)) = (stream.from, stream.to)
            && is_passive(a)
            && is_passive(b)
        {
            edges.push((a.0, b.0));
            streams.push(StreamId(i));
        }
    }
    let metered: HashSet<StreamId> = observed
        .iter()
        .filter_map(|q| match q {
            Quantity::MassFlow(s) => Some(*s),
            _ => None,
        })
        .collect();
    for ring in rings(network.equipment.len(), &edges) {
        let inside = edges
            .iter()
            .zip(&streams)
            .filter(|((a, b), _)| ring.binary_search(a).is_ok() && ring.binary_search(b).is_ok());
        let members: Vec<StreamId> = inside.map(|(_, stream)| *stream).collect();
        if members.iter().any(|s| metered.contains(s)) {
            continue;
        }
        let names: Vec<&str> = members.iter().map(|s| network.stream_name(*s)).collect();
        let what = format!(
            "the streams {} go round in a circle that nothing drives and no flow tag observes",
            some(&names)
        );
        let mend = "lead one of them elsewhere, put the missing pump into the circle, or add a \
                    mass-flow tag to one of them";
        cx.error(&network.equipment[ring[0]].place, what, mend);
    }
}

/// Connected parts of the plant, machines on one shaft included, in which no
/// stream and no equipment has a tag: their balances would hold whatever
/// happens.
fn check_parts(
    network: &Network<'_>,
    kinds: &[Option<Kind>],
    tags: &[TagDraft<'_>],
    cx: &mut Context<'_>,
) {
    let count = network.equipment.len();
    let mut parts = Parts::new(count);
    for stream in &network.streams {
        if let (End::Joined(a, ..), End::Joined(b, ..)) = (stream.from, stream.to) {
            parts.join(a.0, b.0);
        }
    }
    for (i, kind) in kinds.iter().enumerate() {
        let machines = kind.iter().flat_map(coupled);
        parts.join_all(std::iter::once(i).chain(machines.map(|id| id.0)));
    }
    // A part is settled where a tag touches it, or where a fault hides whether
    // one does.
    let mut settled = vec![false; count];
    let ends = |stream: StreamId| {
        let stream = &network.streams[stream.0];
        [stream.from, stream.to]
            .into_iter()
            .filter_map(|end| match end {
                End::Joined(id, ..) => Some(id.0),
                End::Edge | End::Unclear => None,
            })
    };
    for quantity in tags.iter().filter_map(|t| t.touches) {
        let touched: Vec<usize> = match owner(quantity) {
            Owner::Stream(s) => ends(s).collect(),
            Owner::Streams(a, b) => ends(a).chain(ends(b)).collect(),
            Owner::Equipment(e) => vec![e.0],
            Owner::Atmosphere => Vec::new(),
        };
        for i in touched {
            settled[parts.of(i)] = true;
        }
    }
    for (i, stream) in network.streams.iter().enumerate() {
        if matches!(stream.from, End::Unclear) || matches!(stream.to, End::Unclear) {
            for i in ends(StreamId(i)) {
                settled[parts.of(i)] = true;
            }
        }
    }
    for (i, draft) in network.equipment.iter().enumerate() {
        let is_coupling = draft.row.is_some_and(|row| row.ports.is_empty());
        let is_alone = draft.joints.is_empty() && !is_coupling;
        let is_faulty = draft.row.is_none() || draft.unclear != [false; 2];
        if is_alone || is_faulty || (is_coupling && kinds[i].is_none()) {
            settled[parts.of(i)] = true;
        }
    }
    for part in parts.all() {
        if settled[part[0]] {
            continue;
        }
        let members: Vec<&str> = part.iter().map(|&i| network.equipment[i].name).collect();
        let what = match members[..] {
            [one] => format!("no tag touches the balance of `{one}`"),
            _ => format!("no tag touches the balances of {}", some(&members)),
        };
        let place = &network.equipment[part[0]].place;
        cx.error(
            place,
            what,
            "add a tag on one of the streams, or remove the equipment",
        );
    }
}

/// The machines that a generator, shaft or motor couples.
pub(super) fn coupled(kind: &Kind) -> Vec<EquipmentId> {
    match kind {
        Kind::Generator { driven_by } => driven_by.clone(),
        Kind::Shaft { drivers, driven } => drivers.iter().chain(driven).copied().collect(),
        Kind::Motor { drives } => vec![*drives],
        _ => Vec::new(),
    }
}

/// The first few of some names.
pub(super) fn some(names: &[&str]) -> String {
    const SHOWN: usize = 6;
    let shown = quoted(&names[..names.len().min(SHOWN)]);
    match names.len().checked_sub(SHOWN) {
        None | Some(0) => shown,
        Some(more) => format!("{shown} and {more} more"),
    }
}
