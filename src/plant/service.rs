//! Which parts of a plant are in service, once what hangs on what is out of
//! service has gone with it.
//!
//! Removal closes over ports until nothing changes:
//!
//! - equipment out of service takes every stream on its ports;
//! - a stream out of service takes the equipment that cannot be without it: a
//!   valve, a pump, a closed heater (steam, drain and tubes), an exchanger or a
//!   condenser (each side that it has), an open heater, mixer, splitter or
//!   condenser whose only stream of its kind it was;
//! - where a port takes several streams (turbine, header, mixer, splitter,
//!   deaerator, boiler, drains into a shell) it is one fewer, and the equipment
//!   goes when the last has gone; a vent just ends, and so does a reheater
//!   without inlet or outlet;
//! - a generator and a shaft are less the machines that have gone, and go with
//!   the last; a motor and its pump go together, as neither turns alone.
//!
//! A drain into a shell that is out of service is therefore shut off, and takes
//! the heater that it comes from unless a splitter leads it elsewhere: nothing is
//! drained into a vessel that is isolated.

use super::{Condition, EquipmentId, Kind, Plant, Signal, StreamId};

/// What is in service, member by member in the order of the plant.
#[derive(Clone, Debug, PartialEq, Eq, Hash)]
pub struct Service {
    /// Streams in service.
    pub streams: Vec<bool>,
    /// Equipment in service.
    pub equipment: Vec<bool>,
    /// Assumptions that hold by their own conditions.
    pub assumptions: Vec<bool>,
}

impl Service {
    /// Everything is in service.
    pub fn full(plant: &Plant) -> Self {
        Service {
            streams: vec![true; plant.streams.len()],
            equipment: vec![true; plant.equipment.len()],
            assumptions: vec![true; plant.assumptions.len()],
        }
    }

    /// What the conditions of a plant come to with these values of the signals,
    /// closed. Where a signal has none a part is in service, whose balances are
    /// right whatever flows; an assumption is left out, as it might be wrong.
    pub fn decided(plant: &Plant, value: impl Fn(Signal) -> Option<f64>) -> Self {
        let holds = |condition: &Option<Condition>, unknown: bool| {
            let condition = condition.as_ref();
            condition.is_none_or(|c| value(c.signal).map_or(unknown, |v| c.holds(v)))
        };
        let streams = plant.streams.iter();
        let equipment = plant.equipment.iter();
        let assumptions = plant.assumptions.iter();
        let service = Service {
            streams: streams.map(|s| holds(&s.in_service_when, true)).collect(),
            equipment: equipment.map(|e| holds(&e.in_service_when, true)).collect(),
            assumptions: assumptions
                .map(|a| holds(&a.in_service_when, false))
                .collect(),
        };
        service.closed(plant)
    }

    /// Whether everything is.
    pub fn is_full(&self) -> bool {
        let all = |members: &[bool]| members.iter().all(|&m| m);
        all(&self.streams) && all(&self.equipment) && all(&self.assumptions)
    }

    /// Bytes that no other service of the plant has.
    pub fn mark(&self) -> Vec<u8> {
        let all = [&self.streams, &self.equipment, &self.assumptions];
        all.into_iter()
            .flatten()
            .map(|&is_in| u8::from(is_in))
            .collect()
    }

    /// The same after everything has gone that hangs on what is out.
    #[must_use]
    pub fn closed(mut self, plant: &Plant) -> Self {
        while self.sweep(plant) {}
        self
    }

    fn sweep(&mut self, plant: &Plant) -> bool {
        let mut changed = false;
        for (e, equipment) in plant.equipment.iter().enumerate() {
            let works = self.equipment[e] && self.can_work(&equipment.kind);
            if works {
                continue;
            }
            changed |= std::mem::replace(&mut self.equipment[e], false);
            if let Kind::Motor { drives } = equipment.kind {
                changed |= std::mem::replace(&mut self.equipment[drives.0], false);
            }
        }
        for reheat in plant.equipment.iter().flat_map(|e| reheats(&e.kind)) {
            changed |= self.shut(reheat);
        }
        for (s, stream) in plant.streams.iter().enumerate() {
            let joins = [stream.from, stream.to].into_iter().flatten();
            if self.streams[s] && joins.into_iter().any(|e| !self.equipment[e.0]) {
                self.streams[s] = false;
                changed = true;
            }
        }
        changed
    }

    /// Shuts a reheater that has lost its outlet or its last inlet.
    fn shut(&mut self, (inlets, outlet): &(Vec<StreamId>, StreamId)) -> bool {
        let has_inlet = inlets.iter().any(|s| self.streams[s.0]);
        if has_inlet && self.streams[outlet.0] {
            return false;
        }
        let all = inlets.iter().chain(std::iter::once(outlet));
        all.fold(false, |changed, s| {
            changed | std::mem::replace(&mut self.streams[s.0], false)
        })
    }

    /// Whether what a kind cannot be without is there.
    fn can_work(&self, kind: &Kind) -> bool {
        let has = |s: &StreamId| self.streams[s.0];
        let some = |streams: &[StreamId]| streams.iter().any(has);
        let pair = |pair: &Option<(StreamId, StreamId)>| {
            pair.as_ref().is_none_or(|(a, b)| has(a) && has(b))
        };
        let turns = |machines: &[EquipmentId]| machines.iter().any(|e| self.equipment[e.0]);
        match kind {
            Kind::Mixer { inlets, outlet } => some(inlets) && has(outlet),
            Kind::Splitter { inlet, outlets } => has(inlet) && some(outlets),
            Kind::Header {
                inlets, outlets, ..
            }
            | Kind::Turbine { inlets, outlets } => some(inlets) && some(outlets),
            Kind::Valve { inlet, outlet } | Kind::Pump { inlet, outlet } => {
                has(inlet) && has(outlet)
            }
            Kind::ClosedHeater {
                steam,
                drain_out,
                tube_in,
                tube_out,
                ..
            } => [steam, drain_out, tube_in, tube_out].into_iter().all(has),
            Kind::OpenHeater { inlets, outlet, .. } => some(inlets) && has(outlet),
            Kind::Condenser {
                steam,
                condensate,
                cooling,
                ..
            } => some(steam) && has(condensate) && pair(cooling),
            Kind::Exchanger { hot, cold } => pair(hot) && pair(cold),
            Kind::Boiler {
                water_in,
                water_out,
                ..
            } => some(water_in) && some(water_out),
            Kind::Generator { driven_by } => turns(driven_by),
            Kind::Shaft { drivers, driven } => turns(drivers) && turns(driven),
            Kind::Motor { drives } => self.equipment[drives.0],
        }
    }
}

/// The reheaters of a kind.
fn reheats(kind: &Kind) -> &[(Vec<StreamId>, StreamId)] {
    match kind {
        Kind::Boiler { reheats, .. } => reheats,
        _ => &[],
    }
}
