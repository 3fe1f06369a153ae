//! The plant that is left when something is out of service.
//!
//! What is out of service leaves with its tags and assumptions. A splitter or
//! header that has lost a stream and is left with one in and one out is a length
//! of pipe: nothing is mixed or parted there, so the two streams are one, under
//! the name of the first of them in the file, and the equipment has no balance of
//! its own. (A header whose heat loss is stated stays, and so does a mixer, whose
//! pressures may differ.) Streams, equipment, tags and assumptions keep their
//! order, so that the plant left over is what a plant file without the parts
//! would have described.

use super::{
    Assumption, Equipment, EquipmentId, Kind, Plant, Quantity, Service, Stream, StreamId, Tag,
};

/// A plant with parts out of service.
#[derive(Clone, Debug, PartialEq)]
pub struct Reduced {
    /// The plant that is left; it has no conditions.
    pub plant: Plant,
    /// Where the members of the whole plant are in it.
    pub places: Places,
}

/// Where the members of a plant are in what is left of it.
#[derive(Clone, Debug, PartialEq)]
pub struct Places {
    /// What each stream is in it; `None`: out of service.
    pub streams: Vec<Option<StreamId>>,
    /// What each piece of equipment is in it; `None`: out of service, or pipe.
    pub equipment: Vec<Option<EquipmentId>>,
    /// What each tag is in it; `None`: out of service.
    pub tags: Vec<Option<usize>>,
    /// What each assumption is in it, likewise.
    pub assumptions: Vec<Option<usize>>,
    /// Equipment in service that is a length of pipe.
    pub pipes: Vec<EquipmentId>,
}

impl Reduced {
    /// Reduces a plant to what is in service; `service` is closed
    /// ([`Service::closed`]).
    pub fn new(plant: &Plant, service: &Service) -> Self {
        let joined = Joined::new(plant, service);
        let maps = Maps::new(plant, service, &joined);
        let equipment = plant.equipment.iter().zip(&maps.equipment);
        let equipment = equipment.filter(|(_, kept)| kept.is_some());
        let (tags, kept_tags) = maps.members(&plant.tags, &vec![true; plant.tags.len()], |tag| {
            let quantity = maps.quantity(tag.quantity)?;
            Some(Tag {
                quantity,
                ..tag.clone()
            })
        });
        let (assumptions, kept_assumptions) =
            maps.members(&plant.assumptions, &service.assumptions, |assumption| {
                let quantity = maps.quantity(assumption.quantity)?;
                Some(Assumption {
                    quantity,
                    in_service_when: None,
                    ..assumption.clone()
                })
            });
        let reduced = Plant {
            streams: maps.streams_of(plant, &joined),
            equipment: equipment
                .map(|(item, _)| Equipment {
                    name: item.name.clone(),
                    kind: maps.kind(&item.kind),
                    in_service_when: None,
                })
                .collect(),
            tags: kept_tags,
            assumptions: kept_assumptions,
            statuses: Vec::new(),
            running_when: None,
            ..plant.clone()
        };
        Reduced {
            plant: reduced,
            places: Places {
                streams: maps.streams,
                equipment: maps.equipment,
                tags,
                assumptions,
                pipes: joined.pipes,
            },
        }
    }
}

/// Streams in service that are one.
struct Joined {
    /// The first stream of the file that each is one with.
    first: Vec<usize>,
    /// Ends of the whole, by its first stream.
    ends: Vec<(Option<EquipmentId>, Option<EquipmentId>)>,
    pipes: Vec<EquipmentId>,
}

impl Joined {
    fn new(plant: &Plant, service: &Service) -> Self {
        let mut joined = Joined {
            first: (0..plant.streams.len()).collect(),
            ends: plant.streams.iter().map(|s| (s.from, s.to)).collect(),
            pipes: Vec::new(),
        };
        for (e, equipment) in plant.equipment.iter().enumerate() {
            let id = EquipmentId(e);
            let loses_heat = |a: &Assumption| a.quantity == Quantity::HeatLoss(id);
            if service.equipment[e] && !plant.assumptions.iter().any(loses_heat) {
                joined.shorten(id, &equipment.kind, service);
            }
        }
        joined
    }

    /// Makes a pipe of a splitter or header that a stream passes straight.
    fn shorten(&mut self, id: EquipmentId, kind: &Kind, service: &Service) {
        let (inlets, outlets) = match kind {
            Kind::Splitter { inlet, outlets } => (std::slice::from_ref(inlet), &outlets[..]),
            Kind::Header {
                inlets, outlets, ..
            } => (&inlets[..], &outlets[..]),
            _ => return,
        };
        let left = |streams: &[StreamId]| -> Vec<usize> {
            let streams = streams.iter().filter(|s| service.streams[s.0]);
            streams.map(|s| s.0).collect()
        };
        let ([inlet], [outlet]) = (&left(inlets)[..], &left(outlets)[..]) else {
            return;
        };
        if inlets.len() + outlets.len() == 2 {
            return;
        }
        let (a, b) = (self.first[*inlet], self.first[*outlet]);
        let (from, to) = (self.ends[a].0, self.ends[b].1);
        // A ring that closes on one piece of equipment, or a pipe that joins
        // nothing, would be no stream.
        if a == b || from == to {
            return;
        }
        let (first, other) = (a.min(b), a.max(b));
        for member in &mut self.first {
            if *member == other {
                *member = first;
            }
        }
        self.ends[first] = (from, to);
        self.pipes.push(id);
    }
}

/// Where members of the whole plant are in the reduced one.
struct Maps {
    streams: Vec<Option<StreamId>>,
    equipment: Vec<Option<EquipmentId>>,
}

impl Maps {
    fn new(plant: &Plant, service: &Service, joined: &Joined) -> Self {
        let mut count = 0..;
        let mut place = vec![None; plant.streams.len()];
        for s in (0..plant.streams.len()).filter(|&s| service.streams[s]) {
            if joined.first[s] == s {
                place[s] = count.next().map(StreamId);
            }
        }
        let streams = (0..plant.streams.len())
            .map(|s| place[joined.first[s]].filter(|_| service.streams[s]))
            .collect();
        let mut count = 0..;
        let equipment = (0..plant.equipment.len())
            .map(|e| {
                let stays = service.equipment[e] && !joined.pipes.contains(&EquipmentId(e));
                stays.then(|| count.next().map(EquipmentId)).flatten()
            })
            .collect();
        Maps { streams, equipment }
    }

    fn streams_of(&self, plant: &Plant, joined: &Joined) -> Vec<Stream> {
        let whole = |s: usize| {
            let members = (0..plant.streams.len())
                .filter(move |&m| joined.first[m] == s && self.streams[m].is_some());
            members.map(|m| &plant.streams[m])
        };
        let of = |end: Option<EquipmentId>| end.and_then(|e| self.equipment[e.0]);
        (0..plant.streams.len())
            .filter(|&s| joined.first[s] == s && self.streams[s].is_some())
            .map(|s| Stream {
                name: plant.streams[s].name.clone(),
                from: of(joined.ends[s].0),
                to: of(joined.ends[s].1),
                non_negative: whole(s).any(|m| m.non_negative),
                normally_closed: whole(s).any(|m| m.normally_closed),
                in_service_when: None,
            })
            .collect()
    }

    /// Members that stay, and where each is among them.
    fn members<T>(
        &self,
        all: &[T],
        in_service: &[bool],
        reduced: impl Fn(&T) -> Option<T>,
    ) -> (Vec<Option<usize>>, Vec<T>) {
        let mut kept = Vec::new();
        let places = all.iter().zip(in_service).map(|(member, &is_in)| {
            let member = reduced(member).filter(|_| is_in)?;
            kept.push(member);
            Some(kept.len() - 1)
        });
        (places.collect(), kept)
    }

    fn stream(&self, s: StreamId) -> Option<StreamId> {
        self.streams[s.0]
    }

    /// A quantity in the reduced plant; `None` where what has it is gone.
    fn quantity(&self, quantity: Quantity) -> Option<Quantity> {
        let stream = |s: StreamId| self.stream(s);
        let equipment = |e: EquipmentId| self.equipment[e.0];
        // Between two streams that have become one there is no difference.
        let two = |a: StreamId, b: StreamId| {
            let (a, b) = (stream(a)?, stream(b)?);
            (a != b).then_some((a, b))
        };
        Some(match quantity {
            Quantity::MassFlow(s) => Quantity::MassFlow(stream(s)?),
            Quantity::Pressure(s, reference) => Quantity::Pressure(stream(s)?, reference),
            Quantity::Temperature(s) => Quantity::Temperature(stream(s)?),
            Quantity::Quality(s) => Quantity::Quality(stream(s)?),
            Quantity::Enthalpy(s) => Quantity::Enthalpy(stream(s)?),
            Quantity::Subcooling(s) => Quantity::Subcooling(stream(s)?),
            Quantity::PressureDrop(a, b) => {
                let (a, b) = two(a, b)?;
                Quantity::PressureDrop(a, b)
            }
            Quantity::IsentropicEfficiency { of, inlet, outlet } => {
                let (inlet, outlet) = two(inlet, outlet)?;
                Quantity::IsentropicEfficiency {
                    of: equipment(of)?,
                    inlet,
                    outlet,
                }
            }
            Quantity::Power(e) => Quantity::Power(equipment(e)?),
            Quantity::HeatLoss(e) => Quantity::HeatLoss(equipment(e)?),
            Quantity::Loss(e) => Quantity::Loss(equipment(e)?),
            Quantity::HoldupChange(e) => Quantity::HoldupChange(equipment(e)?),
            Quantity::Barometer => Quantity::Barometer,
        })
    }

    /// A kind in the reduced plant. What it cannot be without is there, as the
    /// equipment would have gone otherwise.
    fn kind(&self, kind: &Kind) -> Kind {
        let one = |s: &StreamId| self.stream(*s).unwrap_or(*s);
        let many = |streams: &[StreamId]| -> Vec<StreamId> {
            let mut left: Vec<StreamId> = streams.iter().filter_map(|s| self.stream(*s)).collect();
            // A stream that has become one with an earlier one stands in its place.
            left.sort();
            left
        };
        let vent = |vent: &Option<StreamId>| vent.and_then(|s| self.stream(s));
        let pair =
            |pair: &Option<(StreamId, StreamId)>| pair.as_ref().map(|(a, b)| (one(a), one(b)));
        let machines = |machines: &[EquipmentId]| -> Vec<EquipmentId> {
            let machines = machines.iter();
            machines.filter_map(|e| self.equipment[e.0]).collect()
        };
        match kind {
            Kind::Mixer { inlets, outlet } => Kind::Mixer {
                inlets: many(inlets),
                outlet: one(outlet),
            },
            Kind::Splitter { inlet, outlets } => Kind::Splitter {
                inlet: one(inlet),
                outlets: many(outlets),
            },
            Kind::Header {
                inlets,
                outlets,
                well_mixed,
            } => Kind::Header {
                inlets: many(inlets),
                outlets: many(outlets),
                well_mixed: *well_mixed,
            },
            Kind::Valve { inlet, outlet } => Kind::Valve {
                inlet: one(inlet),
                outlet: one(outlet),
            },
            Kind::Pump { inlet, outlet } => Kind::Pump {
                inlet: one(inlet),
                outlet: one(outlet),
            },
            Kind::Turbine { inlets, outlets } => Kind::Turbine {
                inlets: many(inlets),
                outlets: many(outlets),
            },
            Kind::ClosedHeater {
                steam,
                drains_in,
                drain_out,
                tube_in,
                tube_out,
                vent: vented,
                drain_saturated,
            } => Kind::ClosedHeater {
                steam: one(steam),
                drains_in: many(drains_in),
                drain_out: one(drain_out),
                tube_in: one(tube_in),
                tube_out: one(tube_out),
                vent: vent(vented),
                drain_saturated: *drain_saturated,
            },
            Kind::OpenHeater {
                inlets,
                outlet,
                vent: vented,
                outlet_saturated,
            } => Kind::OpenHeater {
                inlets: many(inlets),
                outlet: one(outlet),
                vent: vent(vented),
                outlet_saturated: *outlet_saturated,
            },
            Kind::Condenser {
                steam,
                condensate,
                cooling,
                vent: vented,
                condensate_saturated,
            } => Kind::Condenser {
                steam: many(steam),
                condensate: one(condensate),
                cooling: pair(cooling),
                vent: vent(vented),
                condensate_saturated: *condensate_saturated,
            },
            Kind::Exchanger { hot, cold } => Kind::Exchanger {
                hot: pair(hot),
                cold: pair(cold),
            },
            Kind::Boiler {
                water_in,
                water_out,
                reheats,
            } => Kind::Boiler {
                water_in: many(water_in),
                water_out: many(water_out),
                reheats: reheats
                    .iter()
                    .filter_map(|(inlets, outlet)| {
                        let inlets = many(inlets);
                        let outlet = self.stream(*outlet)?;
                        (!inlets.is_empty()).then_some((inlets, outlet))
                    })
                    .collect(),
            },
            Kind::Generator { driven_by } => Kind::Generator {
                driven_by: machines(driven_by),
            },
            Kind::Shaft { drivers, driven } => Kind::Shaft {
                drivers: machines(drivers),
                driven: machines(driven),
            },
            Kind::Motor { drives } => Kind::Motor {
                drives: self.equipment[drives.0].unwrap_or(*drives),
            },
        }
    }
}
