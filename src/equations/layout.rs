//! Where each state of a plant stands in the solver's vector.
//!
//! Per stream mass flow (kg/s), pressure (MPa) and specific enthalpy (kJ/kg);
//! then, per piece of equipment, what its kind has of shaft work, heat, loss,
//! electrical power (kW) and holdup change (kg/s); last the atmospheric
//! pressure (MPa) where it is uncertain. A loss or holdup change that nothing
//! states is zero and no state.

use crate::plant::{Barometer, Kind, Plant, Quantity, StreamId};

/// States that a piece of equipment has of its own.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct OwnStates {
    /// Shaft work, kW.
    pub work: Option<usize>,
    /// Heat, kW.
    pub heat: Option<usize>,
    /// Heat loss, or loss of a generator, shaft or motor, kW.
    pub loss: Option<usize>,
    /// Electrical power, kW.
    pub power: Option<usize>,
    /// Holdup change, kg/s.
    pub holdup: Option<usize>,
}

/// What a state is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum StateKind {
    /// Mass flow.
    MassFlow,
    /// Pressure of a stream or of the atmosphere.
    Pressure,
    /// Specific enthalpy.
    Enthalpy,
    /// Work, heat, loss or power.
    Energy,
    /// Holdup change.
    Holdup,
}

/// The places of all states.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Layout {
    streams: usize,
    /// Own states per piece of equipment.
    pub own: Vec<OwnStates>,
    /// Atmospheric pressure.
    pub barometer: Option<usize>,
    kinds: Vec<StateKind>,
}

impl Layout {
    /// Lays out the states of a plant.
    pub fn new(plant: &Plant) -> Self {
        let mut kinds = Vec::new();
        for _ in &plant.streams {
            kinds.extend([
                StateKind::MassFlow,
                StateKind::Pressure,
                StateKind::Enthalpy,
            ]);
        }
        let stated = |wanted: &dyn Fn(&Quantity) -> bool| {
            plant.tags.iter().any(|tag| wanted(&tag.quantity))
                || plant.assumptions.iter().any(|a| wanted(&a.quantity))
        };
        let mut add = |kind| {
            kinds.push(kind);
            Some(kinds.len() - 1)
        };
        let mut own = Vec::new();
        for (e, equipment) in plant.equipment.iter().enumerate() {
            let mut states = OwnStates::default();
            match &equipment.kind {
                Kind::Pump { .. } | Kind::Turbine { .. } => {
                    states.work = add(StateKind::Energy);
                }
                Kind::Boiler { .. } | Kind::Condenser { cooling: None, .. } => {
                    states.heat = add(StateKind::Energy);
                }
                Kind::Exchanger { hot, cold } if hot.is_none() || cold.is_none() => {
                    states.heat = add(StateKind::Energy);
                }
                Kind::Generator { .. } | Kind::Motor { .. } => {
                    states.power = add(StateKind::Energy);
                }
                _ => {}
            }
            if stated(&|q| matches!(q, Quantity::HeatLoss(id) | Quantity::Loss(id) if id.0 == e)) {
                states.loss = add(StateKind::Energy);
            }
            if stated(&|q| matches!(q, Quantity::HoldupChange(id) if id.0 == e)) {
                states.holdup = add(StateKind::Holdup);
            }
            own.push(states);
        }
        let barometer = match plant.barometer {
            Barometer::Unknown => add(StateKind::Pressure),
            Barometer::Absent | Barometer::Exact(_) => None,
        };
        Layout {
            streams: plant.streams.len(),
            own,
            barometer,
            kinds,
        }
    }

    /// Adds a state behind the others.
    pub(super) fn add(&mut self, kind: StateKind) -> usize {
        self.kinds.push(kind);
        self.kinds.len() - 1
    }

    /// Number of states.
    pub fn len(&self) -> usize {
        self.kinds.len()
    }

    /// True for a plant without streams and equipment.
    pub fn is_empty(&self) -> bool {
        self.kinds.is_empty()
    }

    /// Number of streams.
    pub fn streams(&self) -> usize {
        self.streams
    }

    /// What state `j` is.
    pub fn kind(&self, j: usize) -> StateKind {
        self.kinds[j]
    }

    /// Mass flow of a stream.
    pub fn m(&self, stream: StreamId) -> usize {
        3 * stream.0
    }

    /// Pressure of a stream.
    pub fn p(&self, stream: StreamId) -> usize {
        3 * stream.0 + 1
    }

    /// Specific enthalpy of a stream.
    pub fn h(&self, stream: StreamId) -> usize {
        3 * stream.0 + 2
    }

    /// The stream that state `j` belongs to, if any.
    pub fn stream_of(&self, j: usize) -> Option<StreamId> {
        (j < 3 * self.streams).then_some(StreamId(j / 3))
    }
}
