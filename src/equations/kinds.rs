//! The relations of every kind of equipment, as a table.
//!
//! Each kind lists its sides (a mass balance each), its energy terms, and the
//! conditions that hold beside them; nothing else in the crate asks what kind a
//! piece of equipment is in order to balance it.

use super::layout::{Layout, OwnStates};
use super::relation::{Carried, Law, Relation, Role, Side};
use crate::plant::{Equipment, EquipmentId, Kind, Plant, Quantity, StreamId};

/// One side of a piece of equipment: what conserves mass by itself.
pub(super) struct Balanced {
    pub(super) name: String,
    pub(super) inlets: Vec<StreamId>,
    pub(super) outlets: Vec<StreamId>,
}

/// How a kind's energy is conserved.
enum EnergyBalance {
    /// Isenthalpic conditions stand in its place.
    Replaced,
    /// Over all sides, with these linear terms and this enthalpy of the holdup.
    Whole {
        linear: Vec<(usize, f64)>,
        /// Enthalpies that the holdup has the mean of.
        holdup_of: Vec<Carried>,
    },
    /// No streams: these terms sum to zero.
    Power(Vec<(usize, f64)>),
}

/// What a kind comes to.
struct Table {
    sides: Vec<Balanced>,
    energy: EnergyBalance,
    conditions: Vec<Condition>,
}

/// A condition beside the balances.
enum Condition {
    EqualPressure(StreamId, StreamId),
    EqualEnthalpy(StreamId, StreamId),
    Saturated(StreamId, Side),
}

/// The condition on a stream whose valve is closed.
pub const NORMALLY_CLOSED: &str = "normally closed";

/// Every relation of the plant, bounds last.
pub fn relations(plant: &Plant, layout: &Layout) -> Vec<Relation> {
    let mut relations = Vec::new();
    for (e, equipment) in plant.equipment.iter().enumerate() {
        relations.extend(of_equipment(EquipmentId(e), equipment, layout));
    }
    for (s, _) in (plant.streams.iter().enumerate()).filter(|(_, s)| s.normally_closed) {
        let law = Law::Linear(vec![(layout.m(StreamId(s)), 1.0)]);
        let role = Role::Condition(NORMALLY_CLOSED);
        relations.push(Relation::new(None, role, law, layout));
    }
    relations.extend(bounds(plant, layout));
    relations
}

/// The stream that leaves a vessel from below its water level: liquid, whatever a
/// thermometer says.
pub(super) fn liquid_outlet(kind: &Kind) -> Option<StreamId> {
    match kind {
        Kind::ClosedHeater { drain_out, .. } => Some(*drain_out),
        Kind::Condenser { condensate, .. } => Some(*condensate),
        Kind::OpenHeater { outlet, .. } => Some(*outlet),
        _ => None,
    }
}

/// The sides of a kind that conserve mass each.
pub(super) fn sides(kind: &Kind, layout: &Layout) -> Vec<Balanced> {
    table(kind, OwnStates::default(), layout).sides
}

fn of_equipment(id: EquipmentId, equipment: &Equipment, layout: &Layout) -> Vec<Relation> {
    let own = layout.own[id.0];
    let table = table(&equipment.kind, own, layout);
    let relation = |role, law| Relation::new(Some(id), role, law, layout);
    let mut relations = Vec::new();
    for (k, side) in table.sides.iter().enumerate() {
        let mut terms = signed(side, |s| layout.m(s));
        // The holdup belongs to the first side, the shell.
        if let (0, Some(holdup)) = (k, own.holdup) {
            terms.push((holdup, -1.0));
        }
        let role = Role::Mass {
            side: side.name.clone(),
        };
        relations.push(relation(role, Law::Linear(terms)));
    }
    match table.energy {
        EnergyBalance::Replaced => {}
        EnergyBalance::Whole { linear, holdup_of } => {
            let mut products = Vec::new();
            for side in &table.sides {
                for &s in &side.inlets {
                    products.push((layout.m(s), Carried::Stream(s), 1.0));
                }
                for &s in &side.outlets {
                    products.push((layout.m(s), Carried::Stream(s), -1.0));
                }
            }
            if let Some(state) = own.holdup {
                let share = 1.0 / holdup_of.len() as f64;
                products.extend(
                    holdup_of
                        .into_iter()
                        .map(|carried| (state, carried, -share)),
                );
            }
            relations.push(relation(Role::Energy, Law::Energy { products, linear }));
        }
        EnergyBalance::Power(terms) => {
            relations.push(relation(Role::Energy, Law::Linear(terms)));
        }
    }
    for condition in table.conditions {
        let (role, law) = match condition {
            Condition::EqualPressure(a, b) => (
                Role::Condition("equal pressure"),
                Law::Linear(vec![(layout.p(a), 1.0), (layout.p(b), -1.0)]),
            ),
            Condition::EqualEnthalpy(a, b) => (
                Role::Condition("equal enthalpy"),
                Law::Linear(vec![(layout.h(a), 1.0), (layout.h(b), -1.0)]),
            ),
            Condition::Saturated(stream, side) => (
                Role::Condition(match side {
                    Side::Liquid => "saturated liquid",
                    Side::Vapour => "dry saturated steam",
                }),
                Law::Saturated {
                    stream,
                    side,
                    sign: 1.0,
                },
            ),
        };
        relations.push(relation(role, law));
    }
    relations
}

fn table(kind: &Kind, own: OwnStates, layout: &Layout) -> Table {
    let lost = |state: Option<usize>| state.map(|j| (j, -1.0));
    let gained = |state: Option<usize>| state.map(|j| (j, 1.0));
    let whole = |terms: Vec<Option<(usize, f64)>>, holdup_of| EnergyBalance::Whole {
        linear: terms.into_iter().flatten().collect(),
        holdup_of,
    };
    match kind {
        Kind::Mixer { inlets, outlet } => Table {
            sides: vec![through("flow", inlets, &[*outlet])],
            energy: whole(vec![lost(own.loss)], Vec::new()),
            conditions: Vec::new(),
        },
        Kind::Splitter { inlet, outlets } => Table {
            sides: vec![through("flow", &[*inlet], outlets)],
            energy: EnergyBalance::Replaced,
            conditions: outlets
                .iter()
                .flat_map(|&s| {
                    [
                        Condition::EqualEnthalpy(*inlet, s),
                        Condition::EqualPressure(*inlet, s),
                    ]
                })
                .collect(),
        },
        Kind::Header {
            inlets,
            outlets,
            well_mixed,
        } => {
            let all: Vec<StreamId> = inlets.iter().chain(outlets).copied().collect();
            let mut conditions: Vec<Condition> = all[1..]
                .iter()
                .map(|&s| Condition::EqualPressure(all[0], s))
                .collect();
            if *well_mixed {
                let alike = outlets[1..].iter();
                conditions.extend(alike.map(|&s| Condition::EqualEnthalpy(outlets[0], s)));
            }
            Table {
                sides: vec![through("flow", inlets, outlets)],
                energy: whole(vec![lost(own.loss)], Vec::new()),
                conditions,
            }
        }
        Kind::Valve { inlet, outlet } => Table {
            sides: vec![through("flow", &[*inlet], &[*outlet])],
            energy: EnergyBalance::Replaced,
            conditions: vec![Condition::EqualEnthalpy(*inlet, *outlet)],
        },
        Kind::Pump { inlet, outlet } => Table {
            sides: vec![through("flow", &[*inlet], &[*outlet])],
            energy: whole(vec![gained(own.work)], Vec::new()),
            conditions: Vec::new(),
        },
        Kind::Turbine { inlets, outlets } => Table {
            sides: vec![through("flow", inlets, outlets)],
            energy: whole(vec![lost(own.work), lost(own.loss)], Vec::new()),
            conditions: Vec::new(),
        },
        Kind::ClosedHeater {
            steam,
            drains_in,
            drain_out,
            tube_in,
            tube_out,
            vent,
            drain_saturated,
        } => {
            let mut inlets = vec![*steam];
            inlets.extend(drains_in);
            let mut conditions = vec![Condition::EqualPressure(*steam, *drain_out)];
            if *drain_saturated {
                conditions.push(Condition::Saturated(*drain_out, Side::Liquid));
            }
            conditions.extend(vent_of(*vent, *steam));
            Table {
                sides: vec![
                    through("steam", &inlets, &with_vent(*drain_out, *vent)),
                    through("tube", &[*tube_in], &[*tube_out]),
                ],
                energy: whole(vec![lost(own.loss)], Vec::new()),
                conditions,
            }
        }
        Kind::OpenHeater {
            inlets,
            outlet,
            vent,
            outlet_saturated,
        } => Table {
            sides: vec![through("flow", inlets, &with_vent(*outlet, *vent))],
            energy: whole(vec![lost(own.loss)], vec![Carried::Stream(*outlet)]),
            conditions: vessel(*outlet, *outlet_saturated, *vent),
        },
        Kind::Condenser {
            steam,
            condensate,
            cooling,
            vent,
            condensate_saturated,
        } => {
            let mut sides = vec![through("steam", steam, &with_vent(*condensate, *vent))];
            if let Some((into, out)) = cooling {
                sides.push(through("cooling", &[*into], &[*out]));
            }
            Table {
                sides,
                energy: whole(
                    vec![lost(own.heat), lost(own.loss)],
                    vec![Carried::Stream(*condensate)],
                ),
                conditions: vessel(*condensate, *condensate_saturated, *vent),
            }
        }
        Kind::Exchanger { hot, cold } => {
            let mut sides = Vec::new();
            if let Some((into, out)) = hot {
                sides.push(through("hot", &[*into], &[*out]));
            }
            if let Some((into, out)) = cold {
                sides.push(through("cold", &[*into], &[*out]));
            }
            // One side alone: a hot side gives its heat away, a cold one takes it up.
            let heat = if hot.is_some() {
                lost(own.heat)
            } else {
                gained(own.heat)
            };
            Table {
                sides,
                energy: whole(vec![heat, lost(own.loss)], Vec::new()),
                conditions: Vec::new(),
            }
        }
        Kind::Boiler {
            water_in,
            water_out,
            reheats,
        } => {
            let mut sides = vec![through("water", water_in, water_out)];
            for (n, (inlets, outlet)) in reheats.iter().enumerate() {
                let name = format!("reheat-{}", n + 1);
                sides.push(through(&name, inlets, &[*outlet]));
            }
            Table {
                sides,
                energy: whole(
                    vec![gained(own.heat)],
                    water_out
                        .iter()
                        .map(|&s| Carried::SaturatedLiquid(s))
                        .collect(),
                ),
                conditions: Vec::new(),
            }
        }
        Kind::Generator { driven_by } => {
            let work = work_of(driven_by, layout);
            power(work, own.power, own.loss)
        }
        Kind::Shaft { drivers, driven } => {
            let mut terms = work_of(drivers, layout);
            terms.extend(work_of(driven, layout).into_iter().map(|(j, c)| (j, -c)));
            power(terms, None, own.loss)
        }
        Kind::Motor { drives } => {
            let mut terms: Vec<(usize, f64)> = gained(own.power).into_iter().collect();
            terms.extend(
                work_of(&[*drives], layout)
                    .into_iter()
                    .map(|(j, c)| (j, -c)),
            );
            power(terms, None, own.loss)
        }
    }
}

/// A balance of powers: `terms` less `delivered` less `loss`.
fn power(mut terms: Vec<(usize, f64)>, delivered: Option<usize>, loss: Option<usize>) -> Table {
    terms.extend(delivered.into_iter().chain(loss).map(|j| (j, -1.0)));
    Table {
        sides: Vec::new(),
        energy: EnergyBalance::Power(terms),
        conditions: Vec::new(),
    }
}

fn work_of(machines: &[EquipmentId], layout: &Layout) -> Vec<(usize, f64)> {
    let states = machines.iter().filter_map(|id| layout.own[id.0].work);
    states.map(|j| (j, 1.0)).collect()
}

/// A liquid outlet at its own pressure, and a vent at the same pressure.
fn vessel(outlet: StreamId, saturated: bool, vent: Option<StreamId>) -> Vec<Condition> {
    let mut conditions = Vec::new();
    if saturated {
        conditions.push(Condition::Saturated(outlet, Side::Liquid));
    }
    conditions.extend(vent_of(vent, outlet));
    conditions
}

/// A vent is dry saturated steam at the pressure of its vessel.
fn vent_of(vent: Option<StreamId>, vessel: StreamId) -> Vec<Condition> {
    vent.map_or_else(Vec::new, |vent| {
        vec![
            Condition::EqualPressure(vessel, vent),
            Condition::Saturated(vent, Side::Vapour),
        ]
    })
}

fn with_vent(outlet: StreamId, vent: Option<StreamId>) -> Vec<StreamId> {
    std::iter::once(outlet).chain(vent).collect()
}

fn through(name: &str, inlets: &[StreamId], outlets: &[StreamId]) -> Balanced {
    Balanced {
        name: name.to_owned(),
        inlets: inlets.to_vec(),
        outlets: outlets.to_vec(),
    }
}

fn signed(side: &Balanced, state: impl Fn(StreamId) -> usize) -> Vec<(usize, f64)> {
    let inlets = side.inlets.iter().map(|&s| (state(s), 1.0));
    let outlets = side.outlets.iter().map(|&s| (state(s), -1.0));
    inlets.chain(outlets).collect()
}

/// Flows that may not turn negative, quality within 0 and 1 where it is
/// measured, and the side of the saturation line of streams with a temperature.
fn bounds(plant: &Plant, layout: &Layout) -> Vec<Relation> {
    let mut bounds = Vec::new();
    let bound = |role, law| Relation::new(None, Role::Bound(role), law, layout);
    let observes = |wanted: &dyn Fn(&Quantity) -> bool| {
        plant.tags.iter().any(|tag| wanted(&tag.quantity))
            || plant.assumptions.iter().any(|a| wanted(&a.quantity))
    };
    for (s, stream) in plant.streams.iter().enumerate() {
        let s = StreamId(s);
        if stream.non_negative {
            let law = Law::Linear(vec![(layout.m(s), 1.0)]);
            bounds.push(bound("flow not negative", law));
        }
        if observes(&|q| *q == Quantity::Quality(s)) {
            for (role, side, sign) in [
                ("quality not below 0", Side::Liquid, 1.0),
                ("quality not above 1", Side::Vapour, -1.0),
            ] {
                let stream = s;
                bounds.push(bound(role, Law::Saturated { stream, side, sign }));
            }
        }
        if observes(&|q| matches!(*q, Quantity::Temperature(t) | Quantity::Subcooling(t) if t == s))
        {
            for side in [Side::Liquid, Side::Vapour] {
                let law = Law::Saturated {
                    stream: s,
                    side,
                    sign: 1.0,
                };
                bounds.push(Relation::new(None, Role::SideOfSaturation, law, layout));
            }
        }
    }
    bounds
}
