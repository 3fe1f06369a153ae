//! Warnings about pressures: which follow from one another, which nothing
//! determines, and which nothing else depends on.
//!
//! Energy balances hold enthalpies, not pressures: a pressure matters where a
//! temperature, a quality, a subcooling or an efficiency is observed beside it,
//! or where a stream is held on the saturation line.

use super::parts::Parts;
use super::reader::Context;
use super::warnings::{Places, View};
use crate::plant::{Barometer, Kind, Plant, PressureReference, Quantity, StreamId};

/// Streams whose pressures follow from one another.
fn pressure_groups(view: &View<'_>) -> Parts {
    let mut groups = Parts::new(view.plant.streams.len());
    for equipment in &view.plant.equipment {
        let equal: Vec<StreamId> = match &equipment.kind {
            Kind::Splitter { inlet, outlets } => {
                std::iter::once(inlet).chain(outlets).copied().collect()
            }
            Kind::Header {
                inlets, outlets, ..
            } => inlets.iter().chain(outlets).copied().collect(),
            Kind::ClosedHeater {
                steam,
                drain_out,
                vent,
                ..
            } => [*steam, *drain_out].into_iter().chain(*vent).collect(),
            Kind::OpenHeater { outlet, vent, .. } => {
                std::iter::once(*outlet).chain(*vent).collect()
            }
            Kind::Condenser {
                condensate, vent, ..
            } => std::iter::once(*condensate).chain(*vent).collect(),
            _ => Vec::new(),
        };
        groups.join_all(equal.into_iter().map(|s| s.0));
    }
    for quantity in &view.observed {
        match quantity {
            Quantity::PressureDrop(a, b) => groups.join(a.0, b.0),
            // An efficiency ties two pressures together, given the enthalpies.
            Quantity::IsentropicEfficiency { inlet, outlet, .. } => {
                groups.join(inlet.0, outlet.0);
            }
            _ => {}
        }
    }
    groups
}

/// Streams that the model holds on the saturation line.
fn saturated(plant: &Plant) -> Vec<StreamId> {
    let mut out = Vec::new();
    for equipment in &plant.equipment {
        match &equipment.kind {
            Kind::ClosedHeater {
                drain_out,
                vent,
                drain_saturated,
                ..
            } => {
                out.extend(drain_saturated.then_some(*drain_out));
                out.extend(*vent);
            }
            Kind::OpenHeater {
                outlet,
                vent,
                outlet_saturated,
                ..
            } => {
                out.extend(outlet_saturated.then_some(*outlet));
                out.extend(*vent);
            }
            Kind::Condenser {
                condensate,
                vent,
                condensate_saturated,
                ..
            } => {
                out.extend(condensate_saturated.then_some(*condensate));
                out.extend(*vent);
            }
            _ => {}
        }
    }
    out
}

/// What is known of a group of pressures.
#[derive(Clone, Copy, Default)]
struct Group {
    /// Pressures observed in it.
    observations: usize,
    /// A temperature fixes the saturation pressure of one of its streams.
    has_boiling_point: bool,
    /// Something other than a pressure depends on the pressure.
    is_used: bool,
}

/// Temperature tags without a pressure to go with them, pressure tags that
/// nothing else depends on.
pub(super) fn check(view: &View<'_>, places: &Places<'_>, cx: &mut Context<'_>) {
    let mut groups = pressure_groups(view);
    let mut known = vec![Group::default(); view.plant.streams.len()];
    for quantity in &view.observed {
        match *quantity {
            Quantity::Pressure(s, _) => known[groups.of(s.0)].observations += 1,
            Quantity::Temperature(s) => known[groups.of(s.0)].is_used = true,
            Quantity::Quality(s) | Quantity::Subcooling(s) => {
                let group = &mut known[groups.of(s.0)];
                group.is_used = true;
                group.has_boiling_point |= view.has_temperature[s.0];
            }
            Quantity::IsentropicEfficiency { inlet, .. } => {
                known[groups.of(inlet.0)].is_used = true;
            }
            _ => {}
        }
    }
    for stream in saturated(view.plant) {
        let group = &mut known[groups.of(stream.0)];
        group.is_used = true;
        group.has_boiling_point |= view.has_temperature[stream.0];
    }
    for (tag, place) in view.plant.tags.iter().zip(&places.tags) {
        match tag.quantity {
            Quantity::Temperature(s) => {
                let group = known[groups.of(s.0)];
                if group.observations == 0 && !group.has_boiling_point {
                    let name = view.stream_name(s);
                    let what = format!(
                        "nothing determines the pressure of `{name}`: its temperature alone says \
                         nothing of its enthalpy, and many batches will not converge"
                    );
                    let mend = format!(
                        "add a pressure tag or an assumed pressure of `{name}`, or a pressure drop from where one is measured"
                    );
                    cx.findings.warning(place, what, mend);
                }
            }
            Quantity::Pressure(s, _) => {
                let group = known[groups.of(s.0)];
                if group.observations == 1 && !group.is_used {
                    let name = view.stream_name(s);
                    let what = format!(
                        "nothing checks `{}`: no other observation depends on the pressure of `{name}`",
                        tag.name
                    );
                    let mend =
                        format!("add a second pressure tag, or a temperature tag, on `{name}`");
                    cx.findings.warning(place, what, mend);
                }
            }
            _ => {}
        }
    }
}

/// A barometer tag beside no other use of the atmospheric pressure.
pub(super) fn barometer(plant: &Plant, places: &Places<'_>, cx: &mut Context<'_>) {
    if plant.barometer != Barometer::Unknown {
        return;
    }
    let tags = plant.tags.iter().map(|t| t.quantity);
    let assumptions = plant.assumptions.iter().map(|a| a.quantity);
    let uses = tags.chain(assumptions).filter(|q| {
        !matches!(q, Quantity::Pressure(_, PressureReference::Absolute))
            && matches!(q, Quantity::Pressure(..) | Quantity::Barometer)
    });
    if uses.count() > 1 {
        return;
    }
    for (tag, place) in plant.tags.iter().zip(&places.tags) {
        if tag.quantity == Quantity::Barometer {
            let what = format!(
                "nothing checks `{}`: no gauge pressure refers to it",
                tag.name
            );
            cx.findings
                .warning(place, what, "remove it, or leave it for tags to come");
        }
    }
}
