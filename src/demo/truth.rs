//! What the simulated plant really does, and what a perfect instrument would read.

use std::collections::BTreeMap;

use serde::Serialize;

use super::{Assumed, Error, LineUp};
use crate::fluid::{self, State};
use crate::plant::{EquipmentId, Plant, PressureReference, Quantity, StreamId};

/// The true state of the plant in one batch: of what is in service.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Truth {
    /// Every stream in service, by name.
    pub streams: BTreeMap<String, Flow>,
    /// Equipment with states of its own, by name.
    pub equipment: BTreeMap<String, Machine>,
    /// Atmospheric pressure, MPa.
    pub barometer: f64,
    /// True values of the assumptions.
    pub assumptions: Assumed,
    /// What is in line.
    #[serde(skip)]
    pub line_up: LineUp,
}

/// The true state of a stream.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Flow {
    /// Mass flow, kg/s.
    pub mass_flow: f64,
    /// Absolute pressure, MPa.
    pub pressure: f64,
    /// Specific enthalpy, kJ/kg.
    pub enthalpy: f64,
    /// Temperature, K.
    pub temperature: f64,
}

/// The true own states of a piece of equipment, where its kind has them.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize)]
pub struct Machine {
    /// Heat into the fluid (boiler, one-sided exchanger), kW.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub heat: Option<f64>,
    /// Shaft work: of a turbine out of it, of a pump into the fluid, kW.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub work: Option<f64>,
    /// Electrical power, kW.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub power: Option<f64>,
    /// Heat or mechanical loss, kW.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub loss: Option<f64>,
    /// Holdup change, kg/s of outlet liquid.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub holdup_change: Option<f64>,
}

impl Truth {
    /// The true state of a stream.
    ///
    /// # Errors
    /// [`Error::NoStream`] where the simulation does not know the stream.
    pub fn stream(&self, plant: &Plant, id: StreamId) -> Result<Flow, Error> {
        let name = &plant.streams[id.0].name;
        self.streams
            .get(name)
            .copied()
            .ok_or_else(|| Error::NoStream(name.clone()))
    }

    /// The true own states of a piece of equipment; all `None` where it has none.
    pub fn machine(&self, plant: &Plant, id: EquipmentId) -> Machine {
        self.equipment
            .get(&plant.equipment[id.0].name)
            .copied()
            .unwrap_or_default()
    }

    /// Whether an instrument looks at something that is in service.
    pub(super) fn is_in_service(&self, plant: &Plant, quantity: Quantity) -> bool {
        let has = |id: StreamId| self.streams.contains_key(&plant.streams[id.0].name);
        match quantity {
            Quantity::MassFlow(id)
            | Quantity::Pressure(id, _)
            | Quantity::Temperature(id)
            | Quantity::Quality(id) => has(id),
            Quantity::Power(id) => self.equipment.contains_key(&plant.equipment[id.0].name),
            _ => true,
        }
    }

    /// What an instrument shows on something that stands still: no flow, no power,
    /// the pressure of the atmosphere and the warmth of the hall.
    pub(super) fn at_rest(&self, quantity: Quantity) -> f64 {
        const HALL: f64 = 298.15;
        match quantity {
            Quantity::Pressure(_, PressureReference::Absolute) => self.barometer,
            Quantity::Temperature(_) => HALL,
            _ => 0.0,
        }
    }

    /// The true value of a quantity in its internal unit, a gauge or vacuum
    /// pressure as its instrument would show it.
    ///
    /// # Errors
    /// [`Error::NoStream`], or [`Error::OutOfRange`] from the properties.
    pub fn value(&self, plant: &Plant, quantity: Quantity) -> Result<f64, Error> {
        let stream = |id| self.stream(plant, id);
        let state = |id| -> Result<State, Error> {
            let flow = self.stream(plant, id)?;
            Ok(fluid::from_ph(flow.pressure, flow.enthalpy)?)
        };
        Ok(match quantity {
            Quantity::MassFlow(id) => stream(id)?.mass_flow,
            Quantity::Pressure(id, reference) => {
                let pressure = stream(id)?.pressure;
                match reference {
                    PressureReference::Absolute => pressure,
                    PressureReference::Gauge => pressure - self.barometer,
                    PressureReference::Vacuum => self.barometer - pressure,
                }
            }
            Quantity::Temperature(id) => stream(id)?.temperature,
            Quantity::Quality(id) => state(id)?.x.unwrap_or(f64::NAN),
            Quantity::Enthalpy(id) => stream(id)?.enthalpy,
            Quantity::Subcooling(id) => {
                let flow = stream(id)?;
                fluid::saturation(flow.pressure)?.t - flow.temperature
            }
            Quantity::PressureDrop(from, to) => stream(from)?.pressure - stream(to)?.pressure,
            Quantity::IsentropicEfficiency { inlet, outlet, .. } => {
                isentropic_efficiency(state(inlet)?, state(outlet)?)?
            }
            Quantity::Power(id) => {
                let machine = self.machine(plant, id);
                machine.power.or(machine.work).unwrap_or(0.0)
            }
            Quantity::HeatLoss(id) | Quantity::Loss(id) => {
                self.machine(plant, id).loss.unwrap_or(0.0)
            }
            Quantity::HoldupChange(id) => self.machine(plant, id).holdup_change.unwrap_or(0.0),
            Quantity::Barometer => self.barometer,
        })
    }
}

/// Isentropic efficiency between two states, 1: of an expansion where the
/// pressure falls, of a compression where it rises.
fn isentropic_efficiency(inlet: State, outlet: State) -> Result<f64, Error> {
    let ideal = fluid::from_ps(outlet.p, inlet.s)?.h - inlet.h;
    let real = outlet.h - inlet.h;
    Ok(if outlet.p < inlet.p {
        real / ideal
    } else {
        ideal / real
    })
}
