//! What may be wrong: a reading, or a law of the plant that does not hold.
//!
//! A hypothesis is an unknown b of one dimension. Where it holds, the reading
//! of an observation is off by b, or the relations read f(x) + b phi(x) = 0
//! instead of f(x) = 0:
//!
//! ```text
//! leak out of a side        mass of the side -1,  energy -h of what leaks
//! leak between two sides    mass of the one -1,   mass of the other +1
//! passing                   the closed stream's condition -1
//! unstated loss             energy -1
//! ```
//!
//! What leaks out carries the enthalpy of the side's inlet, or of its outlet
//! where it has several inlets. A leak between sides stays inside the balance of
//! energy. Leaks, passing valves and losses have a sign; a reading errs either way.

use super::kinds::{self, Balanced, NORMALLY_CLOSED};
use super::layout::{Layout, StateKind};
use super::relation::{Carried, Law, Relation, Role};
use super::system::System;
use crate::plant::{EquipmentId, Kind, Plant, StreamId};

/// A hypothesis.
#[derive(Clone, Debug, PartialEq)]
pub struct Hypothesis {
    /// What it blames.
    pub blame: Blame,
    /// Its size cannot be negative.
    pub one_sided: bool,
}

/// What a hypothesis blames. Relations by their place in [`System::relations`].
#[derive(Clone, Debug, PartialEq)]
pub enum Blame {
    /// An observation: a tag, or an assumption behind the tags.
    Observation(usize),
    /// Mass that leaves one side to the outside, kg/s.
    Leak {
        /// The equipment.
        of: EquipmentId,
        /// Name of the side.
        side: String,
        /// Mass balance of the side.
        mass: usize,
        /// Balance of energy, where the kind has one.
        energy: Option<usize>,
        /// The stream whose enthalpy leaks.
        carries: StreamId,
    },
    /// Mass that leaves one side for the other, kg/s.
    LeakBetween {
        /// The equipment.
        of: EquipmentId,
        /// Names of the side that loses and of the one that gains.
        sides: [String; 2],
        /// Their mass balances.
        mass: [usize; 2],
    },
    /// Mass flow of a stream that is normally closed, kg/s.
    Passing {
        /// The stream.
        stream: StreamId,
        /// Its condition.
        relation: usize,
    },
    /// Heat or power that a balance of energy loses, kW.
    Loss {
        /// The equipment.
        of: EquipmentId,
        /// Balance of energy.
        relation: usize,
    },
}

impl Hypothesis {
    /// phi: what one unit of b adds to each relation, at `x`; empty where a
    /// reading is blamed.
    pub fn rows(&self, layout: &Layout, x: &[f64]) -> Vec<(usize, f64)> {
        let terms = self.terms().into_iter();
        terms
            .map(|(relation, factor)| match factor {
                Factor::Number(c) => (relation, c),
                Factor::Enthalpy(s) => (relation, -x[layout.h(s)]),
            })
            .collect()
    }

    /// The enthalpy that must be known for the hypothesis to mean anything.
    pub fn carries(&self, layout: &Layout) -> Option<usize> {
        match self.blame {
            Blame::Leak {
                energy: Some(_),
                carries,
                ..
            } => Some(layout.h(carries)),
            Blame::Passing { stream, .. } => Some(layout.h(stream)),
            _ => None,
        }
    }

    /// The observation it blames, if it blames one.
    pub fn observation(&self) -> Option<usize> {
        match self.blame {
            Blame::Observation(i) => Some(i),
            _ => None,
        }
    }
}

/// Every hypothesis of a plant: observations first, in their order, then leaks
/// and losses equipment by equipment, then valves that may pass. A loss is
/// unstated only where the plant file states none: elsewhere it is the
/// assumption that departs.
pub fn hypotheses(plant: &Plant, system: &System) -> Vec<Hypothesis> {
    let two_sided = |blame| Hypothesis {
        blame,
        one_sided: false,
    };
    let one_sided = |blame| Hypothesis {
        blame,
        one_sided: true,
    };
    let mut all: Vec<Hypothesis> = (0..system.observations.len())
        .map(|i| two_sided(Blame::Observation(i)))
        .collect();
    for (e, equipment) in plant.equipment.iter().enumerate() {
        let of = EquipmentId(e);
        let sides = kinds::sides(&equipment.kind, &system.layout);
        let energy = place(system, of, |role| *role == Role::Energy);
        let mass = |side: &Balanced| {
            place(
                system,
                of,
                |role| matches!(role, Role::Mass { side: name } if *name == side.name),
            )
        };
        for side in &sides {
            if let (Some(mass), Some(carries)) = (mass(side), carries(side)) {
                let side = side.name.clone();
                all.push(one_sided(Blame::Leak {
                    of,
                    side,
                    mass,
                    energy,
                    carries,
                }));
            }
        }
        let shell_and_tubes = matches!(
            equipment.kind,
            Kind::ClosedHeater { .. } | Kind::Condenser { .. }
        );
        // Water stands at the higher pressure in the tubes of heaters and condensers.
        if let [first, second] = &sides[..]
            && let (Some(a), Some(b)) = (mass(first), mass(second))
            && (shell_and_tubes || matches!(equipment.kind, Kind::Exchanger { .. }))
        {
            let between = |from: &Balanced, into: &Balanced, mass| Blame::LeakBetween {
                of,
                sides: [from.name.clone(), into.name.clone()],
                mass,
            };
            all.push(if shell_and_tubes {
                one_sided(between(second, first, [b, a]))
            } else {
                two_sided(between(first, second, [a, b]))
            });
        }
        if let Some(relation) = energy
            && system.layout.own[e].loss.is_none()
        {
            all.push(one_sided(Blame::Loss { of, relation }));
        }
    }
    for (s, _) in (plant.streams.iter().enumerate()).filter(|(_, s)| s.normally_closed) {
        let stream = StreamId(s);
        let flow = [system.layout.m(stream)];
        let closed = system
            .relations
            .iter()
            .position(|r| r.role == Role::Condition(NORMALLY_CLOSED) && r.row == flow);
        if let Some(relation) = closed {
            all.push(one_sided(Blame::Passing { stream, relation }));
        }
    }
    all
}

impl System {
    /// The system in which these hypotheses hold, each with a state of its own
    /// behind the others; those that blame an observation change nothing here.
    /// Answers the states too, in the order of the hypotheses.
    pub fn with(&self, plant: &Plant, suspects: &[&Hypothesis]) -> (System, Vec<Option<usize>>) {
        let mut layout = self.layout.clone();
        let mut laws: Vec<Law> = self.relations.iter().map(|r| r.law.clone()).collect();
        let states = suspects.iter().map(|suspect| {
            let kind = match suspect.blame {
                Blame::Observation(_) => return None,
                Blame::Loss { .. } => StateKind::Energy,
                _ => StateKind::MassFlow,
            };
            let state = layout.add(kind);
            for (relation, factor) in suspect.terms() {
                match (&mut laws[relation], factor) {
                    (Law::Linear(terms), Factor::Number(c)) => terms.push((state, c)),
                    (Law::Energy { linear, .. }, Factor::Number(c)) => linear.push((state, c)),
                    (Law::Energy { products, .. }, Factor::Enthalpy(s)) => {
                        products.push((state, Carried::Stream(s), -1.0));
                    }
                    // No hypothesis names such a pair.
                    (Law::Linear(_), Factor::Enthalpy(_)) | (Law::Saturated { .. }, _) => {}
                }
            }
            Some(state)
        });
        let states = states.collect();
        let relations = self.relations.iter().zip(laws);
        let relations = relations
            .map(|(r, law)| Relation::new(r.of, r.role.clone(), law, &layout))
            .collect();
        (System::of(plant, layout, relations), states)
    }
}

/// What the unknown of a hypothesis is multiplied by in a relation.
enum Factor {
    Number(f64),
    /// Minus the enthalpy of a stream.
    Enthalpy(StreamId),
}

impl Hypothesis {
    /// The terms that it adds to relations.
    fn terms(&self) -> Vec<(usize, Factor)> {
        match self.blame {
            Blame::Observation(_) => Vec::new(),
            Blame::Leak {
                mass,
                energy,
                carries,
                ..
            } => {
                let carried = energy.map(|energy| (energy, Factor::Enthalpy(carries)));
                std::iter::once((mass, Factor::Number(-1.0)))
                    .chain(carried)
                    .collect()
            }
            Blame::LeakBetween {
                mass: [from, into], ..
            } => {
                vec![(from, Factor::Number(-1.0)), (into, Factor::Number(1.0))]
            }
            Blame::Passing { relation, .. } | Blame::Loss { relation, .. } => {
                vec![(relation, Factor::Number(-1.0))]
            }
        }
    }
}

fn carries(side: &Balanced) -> Option<StreamId> {
    match side.inlets[..] {
        [inlet] => Some(inlet),
        _ => side.outlets.first().copied(),
    }
}

fn place(system: &System, of: EquipmentId, role: impl Fn(&Role) -> bool) -> Option<usize> {
    let mut relations = system.relations.iter();
    relations.position(|r| r.of == Some(of) && role(&r.role))
}
