//! What works and will disappoint, as far as structure alone shows it.
//!
//! What takes the rank of the equations to decide (most tags that nothing can
//! check) is left to the assessment: a warning here is never a guess.

use super::assumptions::AssumptionDraft;
use super::network::Network;
use super::parts::Parts;
use super::pressures;
use super::reader::Context;
use super::structure::{Owner, coupled, owner, some};
use super::tree::Place;
use crate::plant::{Kind, Plant, Quantity, StreamId};

/// Where the members of a plant stand in the file.
pub(super) struct Places<'a> {
    pub streams: Vec<&'a Place>,
    pub tags: Vec<&'a Place>,
}

/// Warnings that need no whole plant: generators without a stated loss.
pub(super) fn losses(
    network: &Network<'_>,
    assumptions: &[AssumptionDraft<'_>],
    cx: &mut Context<'_>,
) {
    // A faulty assumption may be the one that states the loss.
    let may_be = |a: &AssumptionDraft<'_>| matches!(a.touches, None | Some(Quantity::Loss(_)));
    if assumptions
        .iter()
        .any(|a| a.assumption.is_none() && may_be(a))
    {
        return;
    }
    let mut is_stated = vec![false; network.equipment.len()];
    for assumption in assumptions {
        if let Some(Quantity::Loss(e)) = assumption.touches {
            is_stated[e.0] = true;
        }
    }
    for (draft, is_stated) in network.equipment.iter().zip(is_stated) {
        if draft.row.is_some_and(|row| row.name == "generator") && !is_stated {
            let name = draft.name;
            let what = format!(
                "the generator `{name}` has no stated loss: with none at all, the efficiency of \
                 the last turbine section comes out wrong"
            );
            let mend = format!(
                "add to [assumptions] {name}-loss = {{ value-of = \"loss\", of = \"{name}\", \
                 value = \"...\", uncertainty = ... }}; 1 to 1.5 % of the power is common"
            );
            cx.findings.warning(&draft.place, what, mend);
        }
    }
}

/// Warnings about a plant without errors.
pub(super) fn structural(plant: &Plant, places: &Places<'_>, cx: &mut Context<'_>) {
    let view = View::new(plant);
    pressures::check(&view, places, cx);
    pressures::barometer(plant, places, cx);
    wet_streams(&view, places, cx);
    closed_streams(&view, places, cx);
    untouched_sides(&view, places, cx);
}

/// A plant and all that is observed in it.
pub(super) struct View<'p> {
    pub plant: &'p Plant,
    pub observed: Vec<Quantity>,
    /// By stream.
    pub has_temperature: Vec<bool>,
    /// By equipment.
    pub has_power: Vec<bool>,
}

impl<'p> View<'p> {
    fn new(plant: &'p Plant) -> Self {
        let tags = plant.tags.iter().map(|t| t.quantity);
        let assumptions = plant.assumptions.iter().map(|a| a.quantity);
        let observed: Vec<Quantity> = tags.chain(assumptions).collect();
        let mut has_temperature = vec![false; plant.streams.len()];
        let mut has_power = vec![false; plant.equipment.len()];
        for quantity in &observed {
            match quantity {
                Quantity::Temperature(s) => has_temperature[s.0] = true,
                Quantity::Power(e) => has_power[e.0] = true,
                _ => {}
            }
        }
        View {
            plant,
            observed,
            has_temperature,
            has_power,
        }
    }

    pub fn stream_name(&self, id: StreamId) -> &'p str {
        &self.plant.streams[id.0].name
    }
}

/// Turbine exhausts into condensers are wet: pressure and temperature leave
/// their enthalpy open, so that it takes an energy balance or an assumption.
fn wet_streams(view: &View<'_>, places: &Places<'_>, cx: &mut Context<'_>) {
    let plant = view.plant;
    let mut coupling = vec![None; plant.equipment.len()];
    for (i, equipment) in plant.equipment.iter().enumerate() {
        for machine in coupled(&equipment.kind) {
            coupling[machine.0] = Some(i);
        }
    }
    let mut is_stated = vec![false; plant.streams.len()];
    for quantity in &view.observed {
        match quantity {
            Quantity::Quality(s) | Quantity::Enthalpy(s) => is_stated[s.0] = true,
            Quantity::IsentropicEfficiency { inlet, outlet, .. } => {
                is_stated[inlet.0] = true;
                is_stated[outlet.0] = true;
            }
            _ => {}
        }
    }
    for (i, stream) in plant.streams.iter().enumerate() {
        let (Some(from), Some(to)) = (stream.from, stream.to) else {
            continue;
        };
        let Kind::Turbine { .. } = plant.equipment[from.0].kind else {
            continue;
        };
        let Kind::Condenser { cooling, .. } = &plant.equipment[to.0].kind else {
            continue;
        };
        let has_work =
            view.has_power[from.0] || coupling[from.0].is_some_and(|e: usize| view.has_power[e]);
        let has_heat =
            cooling.is_some_and(|(a, b)| view.has_temperature[a.0] && view.has_temperature[b.0]);
        if !(is_stated[i] || has_work || has_heat) {
            let name = &stream.name;
            let what = format!(
                "nothing determines the enthalpy of `{name}`, which is wet: neither the work of \
                 the turbine nor the heat of the condenser is observed"
            );
            let mend = format!(
                "add the generator's power, the cooling water's temperatures, or an \
                 isentropic-efficiency with between = [..., \"{name}\"]"
            );
            cx.findings.warning(places.streams[i], what, mend);
        }
    }
}

/// Streams that are normally closed and whose enthalpy only balances of energy
/// could tell: without a flow these say nothing of it, and a leak that carries
/// an unknown enthalpy hardly shows.
fn closed_streams(view: &View<'_>, places: &Places<'_>, cx: &mut Context<'_>) {
    let plant = view.plant;
    let mut alike = Parts::new(plant.streams.len());
    let mut is_told: Vec<bool> = plant.streams.iter().map(|s| !s.normally_closed).collect();
    for equipment in &plant.equipment {
        match &equipment.kind {
            Kind::Splitter { inlet, outlets } => {
                outlets.iter().for_each(|s| alike.join(inlet.0, s.0));
            }
            Kind::Valve { inlet, outlet } => alike.join(inlet.0, outlet.0),
            Kind::Header {
                outlets,
                well_mixed: true,
                ..
            } => alike.join_all(outlets.iter().map(|s| s.0)),
            kind => saturated(kind).for_each(|s| is_told[s.0] = true),
        }
    }
    for quantity in &view.observed {
        match *quantity {
            Quantity::Temperature(s)
            | Quantity::Quality(s)
            | Quantity::Enthalpy(s)
            | Quantity::Subcooling(s) => is_told[s.0] = true,
            Quantity::IsentropicEfficiency { inlet, outlet, .. } => {
                is_told[inlet.0] = true;
                is_told[outlet.0] = true;
            }
            _ => {}
        }
    }
    for part in alike.all() {
        if part.iter().any(|&s| is_told[s]) {
            continue;
        }
        let name = &plant.streams[part[0]].name;
        let what = format!(
            "nothing determines the enthalpy of `{name}`, which is normally closed: without a \
             flow no balance tells it, and what passes may go unseen"
        );
        let mend = format!(
            "take `{name}` off a splitter, or add a temperature or an assumed enthalpy on it"
        );
        cx.findings.warning(places.streams[part[0]], what, mend);
    }
}

/// Outlets that are on the saturation line by their kind.
fn saturated(kind: &Kind) -> impl Iterator<Item = StreamId> {
    let (liquid, vent) = match *kind {
        Kind::ClosedHeater {
            drain_out,
            drain_saturated,
            vent,
            ..
        } => (drain_saturated.then_some(drain_out), vent),
        Kind::OpenHeater {
            outlet,
            outlet_saturated,
            vent,
            ..
        } => (outlet_saturated.then_some(outlet), vent),
        Kind::Condenser {
            condensate,
            condensate_saturated,
            vent,
            ..
        } => (condensate_saturated.then_some(condensate), vent),
        _ => (None, None),
    };
    liquid.into_iter().chain(vent)
}

/// Streams joined by mass balances, none of which has a tag, beside a plant
/// that has some.
fn untouched_sides(view: &View<'_>, places: &Places<'_>, cx: &mut Context<'_>) {
    let streams = view.plant.streams.len();
    let mut sides = Parts::new(streams);
    for equipment in &view.plant.equipment {
        for side in mass_balances(&equipment.kind) {
            sides.join_all(side.into_iter().map(|s| s.0));
        }
    }
    let mut is_touched = vec![false; streams];
    for quantity in &view.observed {
        match owner(*quantity) {
            Owner::Stream(s) => is_touched[sides.of(s.0)] = true,
            Owner::Streams(a, b) => {
                is_touched[sides.of(a.0)] = true;
                is_touched[sides.of(b.0)] = true;
            }
            _ => {}
        }
    }
    for side in sides.all() {
        if is_touched[side[0]] {
            continue;
        }
        let names = side.iter().map(|&i| view.plant.streams[i].name.as_str());
        let members: Vec<&str> = names.collect();
        let what = format!("no tag or assumption is on any of {}", some(&members));
        let mend = "add one, or leave these streams out of the plant";
        cx.findings.warning(places.streams[side[0]], what, mend);
    }
}

/// The streams of each mass balance of a kind.
fn mass_balances(kind: &Kind) -> Vec<Vec<StreamId>> {
    let all = |inlets: &[StreamId], outlets: &[StreamId]| [inlets, outlets].concat();
    let pair = |(a, b): (StreamId, StreamId)| vec![a, b];
    match kind {
        Kind::Mixer { inlets, outlet } => vec![all(inlets, &[*outlet])],
        Kind::Splitter { inlet, outlets } => vec![all(&[*inlet], outlets)],
        Kind::Header {
            inlets, outlets, ..
        }
        | Kind::Turbine { inlets, outlets } => {
            vec![all(inlets, outlets)]
        }
        Kind::Valve { inlet, outlet } | Kind::Pump { inlet, outlet } => {
            vec![vec![*inlet, *outlet]]
        }
        Kind::ClosedHeater {
            steam,
            drains_in,
            drain_out,
            tube_in,
            tube_out,
            vent,
            ..
        } => {
            let mut shell = all(drains_in, &[*steam, *drain_out]);
            shell.extend(*vent);
            vec![shell, vec![*tube_in, *tube_out]]
        }
        Kind::OpenHeater {
            inlets,
            outlet,
            vent,
            ..
        } => {
            let mut side = all(inlets, &[*outlet]);
            side.extend(*vent);
            vec![side]
        }
        Kind::Condenser {
            steam,
            condensate,
            cooling,
            vent,
            ..
        } => {
            let mut shell = all(steam, &[*condensate]);
            shell.extend(*vent);
            std::iter::once(shell).chain(cooling.map(pair)).collect()
        }
        Kind::Exchanger { hot, cold } => hot.iter().chain(cold).map(|p| pair(*p)).collect(),
        Kind::Boiler {
            water_in,
            water_out,
            reheats,
        } => {
            let water = std::iter::once(all(water_in, water_out));
            let reheats = reheats
                .iter()
                .map(|(inlets, outlet)| all(inlets, &[*outlet]));
            water.chain(reheats).collect()
        }
        Kind::Generator { .. } | Kind::Shaft { .. } | Kind::Motor { .. } => Vec::new(),
    }
}

#[cfg(test)]
mod tests {
    use crate::plant::{Format, read};

    /// What is warned of a heater with a second drain of its own.
    fn warnings(dump: &str, more: &str) -> Vec<String> {
        let text = format!(
            r#"
plant = "heater"
[streams]
steam = {{ fluid = "water", to = "heater.steam" }}
drain = {{ fluid = "water", from = "heater.drain", to = "tee" }}
low   = {{ fluid = "water", from = "tee" }}
cold  = {{ fluid = "water", to = "mixer" }}
hot   = {{ fluid = "water", to = "mixer" }}
water = {{ fluid = "water", from = "mixer", to = "heater.tube" }}
warm  = {{ fluid = "water", from = "heater.tube" }}
{dump}
[equipment]
heater = {{ kind = "closed-heater" }}
tee    = {{ kind = "splitter" }}
mixer  = {{ kind = "mixer" }}
[tags]
F-1 = {{ measures = "mass-flow", of = "warm", unit = "t/h", uncertainty = {{ of-reading = "1 %" }} }}
F-2 = {{ measures = "mass-flow", of = "drain", unit = "t/h", uncertainty = {{ of-reading = "1 %" }} }}
{more}
"#
        );
        let file = read(&text, Format::Toml).unwrap_or_else(|faults| panic!("{faults}"));
        let warnings = file.warnings.iter().map(|warning| warning.to_string());
        warnings.filter(|w| w.contains("normally closed")).collect()
    }

    #[test]
    fn a_closed_stream_whose_enthalpy_nothing_tells_is_warned_of() {
        let from_outside = r#"bypass = { fluid = "water", to = "mixer", normally-closed = true }"#;
        let found = warnings(from_outside, "");
        assert_eq!(found.len(), 1, "{found:?}");
        assert!(found[0].contains("`bypass`"), "{found:?}");

        let temperature = r#"T-1 = { measures = "temperature", of = "bypass", unit = "Cel", uncertainty = { absolute = "1 K" } }"#;
        assert!(warnings(from_outside, temperature).is_empty());
        let off_a_tee = r#"dump = { fluid = "water", from = "tee", normally-closed = true }"#;
        assert!(warnings(off_a_tee, "").is_empty());
        let open = from_outside.replace(", normally-closed = true", "");
        assert!(warnings(&open, "").is_empty());
    }
}
