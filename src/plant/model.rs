//! The types of a plant that has passed every check.

use super::{
    AlarmSettings, AveragingSettings, Condition, Portable, Retention, Status, TagAveraging,
    Uncertainty, Unit,
};

/// A stream, by its place in [`Plant::streams`].
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct StreamId(pub usize);

/// A piece of equipment, by its place in [`Plant::equipment`].
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct EquipmentId(pub usize);

/// One accepted plant file.
#[derive(Clone, Debug, PartialEq)]
pub struct Plant {
    /// Identifier of the plant, as in its HTTP path.
    pub name: String,
    /// Title for people.
    pub title: String,
    /// How gauge and vacuum pressures refer to absolute ones.
    pub barometer: Barometer,
    /// Factor on the sigma of a reading of quality `uncertain`.
    pub uncertain_factor: f64,
    /// Confidence of the statistical tests, 0 to 1.
    pub confidence: f64,
    /// Where several suspects are named, or do not explain everything, the search
    /// is made from a robust solution too, and the better one kept.
    pub robust_start: bool,
    /// Streams in the order of the file.
    pub streams: Vec<Stream>,
    /// Equipment in the order of the file.
    pub equipment: Vec<Equipment>,
    /// Tags in the order of the file.
    pub tags: Vec<Tag>,
    /// Assumptions in the order of the file; an uncertain barometer is one of
    /// them, named `barometer`.
    pub assumptions: Vec<Assumption>,
    /// When alarms rise and return, and how urgent they are.
    pub alarms: AlarmSettings,
    /// Uncertainties of portable instruments.
    pub portable: Portable,
    /// Tags that read a state, in the order of the file.
    pub statuses: Vec<Status>,
    /// The plant runs when this holds; `None`: always.
    pub running_when: Option<Condition>,
    /// How samples become batches.
    pub averaging: AveragingSettings,
    /// How long what is stored is kept.
    pub retention: Retention,
}

/// What is known of the atmospheric pressure at the instruments.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Barometer {
    /// Nothing, and nothing needs it.
    Absent,
    /// An exact value, MPa.
    Exact(f64),
    /// One unknown that a tag or the assumption `barometer` observes.
    Unknown,
}

/// What flows in one pipe.
#[derive(Clone, Debug, PartialEq)]
pub struct Stream {
    /// Name in the plant file.
    pub name: String,
    /// Equipment that it leaves; `None` where it enters the plant.
    pub from: Option<EquipmentId>,
    /// Equipment that it enters; `None` where it leaves the plant.
    pub to: Option<EquipmentId>,
    /// The flow may not turn negative.
    pub non_negative: bool,
    /// Its valve is closed: nothing flows unless the valve passes.
    pub normally_closed: bool,
    /// It is in service when this holds; `None`: always.
    pub in_service_when: Option<Condition>,
}

/// A machine or vessel.
#[derive(Clone, Debug, PartialEq)]
pub struct Equipment {
    /// Name in the plant file.
    pub name: String,
    /// What it is, with the streams on its ports.
    pub kind: Kind,
    /// It is in service when this holds; `None`: always.
    pub in_service_when: Option<Condition>,
}

/// Every kind of equipment, with its ports. Streams stand in file order; a
/// list that the design calls "many" has at least one member unless it says
/// otherwise.
#[derive(Clone, Debug, PartialEq)]
pub enum Kind {
    /// Streams join.
    Mixer {
        /// Inlets.
        inlets: Vec<StreamId>,
        /// The joined stream.
        outlet: StreamId,
    },
    /// One stream parts into several of the same state.
    Splitter {
        /// Inlet.
        inlet: StreamId,
        /// Outlets.
        outlets: Vec<StreamId>,
    },
    /// A header: one pressure.
    Header {
        /// Inlets.
        inlets: Vec<StreamId>,
        /// Outlets.
        outlets: Vec<StreamId>,
        /// All outlets have one enthalpy.
        well_mixed: bool,
    },
    /// A throttle.
    Valve {
        /// Inlet.
        inlet: StreamId,
        /// Outlet.
        outlet: StreamId,
    },
    /// A pump.
    Pump {
        /// Suction.
        inlet: StreamId,
        /// Discharge.
        outlet: StreamId,
    },
    /// A turbine or one cylinder of it.
    Turbine {
        /// Admissions.
        inlets: Vec<StreamId>,
        /// Bleeds, leak-offs, exhaust.
        outlets: Vec<StreamId>,
    },
    /// A surface feedwater heater.
    ClosedHeater {
        /// Heating steam.
        steam: StreamId,
        /// Drains of other heaters that enter the shell; may be empty.
        drains_in: Vec<StreamId>,
        /// Drain outlet.
        drain_out: StreamId,
        /// Feedwater in.
        tube_in: StreamId,
        /// Feedwater out.
        tube_out: StreamId,
        /// Vent.
        vent: Option<StreamId>,
        /// The drain leaves as saturated liquid.
        drain_saturated: bool,
    },
    /// A deaerator or other contact heater.
    OpenHeater {
        /// Inlets.
        inlets: Vec<StreamId>,
        /// Outlet.
        outlet: StreamId,
        /// Vent.
        vent: Option<StreamId>,
        /// The outlet is saturated liquid.
        outlet_saturated: bool,
    },
    /// A condenser.
    Condenser {
        /// Steam and everything else that enters the shell.
        steam: Vec<StreamId>,
        /// Condensate.
        condensate: StreamId,
        /// Cooling water in and out, where it is part of the plant.
        cooling: Option<(StreamId, StreamId)>,
        /// Vent.
        vent: Option<StreamId>,
        /// The condensate is saturated liquid.
        condensate_saturated: bool,
    },
    /// A surface heat exchanger without change of pressure relation.
    Exchanger {
        /// Hot side in and out.
        hot: Option<(StreamId, StreamId)>,
        /// Cold side in and out; at least one side is there.
        cold: Option<(StreamId, StreamId)>,
    },
    /// A steam generator.
    Boiler {
        /// Feedwater and spray.
        water_in: Vec<StreamId>,
        /// Live steam and blowdown.
        water_out: Vec<StreamId>,
        /// Reheaters in order of their number: (inlets, outlet).
        reheats: Vec<(Vec<StreamId>, StreamId)>,
    },
    /// An electrical generator.
    Generator {
        /// Turbines on its shaft.
        driven_by: Vec<EquipmentId>,
    },
    /// A shaft between turbines and pumps.
    Shaft {
        /// Turbines.
        drivers: Vec<EquipmentId>,
        /// Pumps.
        driven: Vec<EquipmentId>,
    },
    /// An electric motor.
    Motor {
        /// The pump.
        drives: EquipmentId,
    },
}

/// What a pressure tag measures against.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum PressureReference {
    /// Absolute.
    Absolute,
    /// Above the atmosphere.
    Gauge,
    /// Below the atmosphere.
    Vacuum,
}

/// What a tag measures or an assumption states.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Quantity {
    /// Mass flow of a stream, kg/s.
    MassFlow(StreamId),
    /// Pressure of a stream, MPa.
    Pressure(StreamId, PressureReference),
    /// Temperature of a stream, K.
    Temperature(StreamId),
    /// Quality (dryness) of a stream, 1.
    Quality(StreamId),
    /// Specific enthalpy of a stream, kJ/kg.
    Enthalpy(StreamId),
    /// Saturation temperature minus temperature of a liquid stream, K.
    Subcooling(StreamId),
    /// Pressure of the first minus pressure of the second stream, MPa.
    PressureDrop(StreamId, StreamId),
    /// Isentropic efficiency of an expansion (turbine) or compression (pump)
    /// between two streams of a piece of equipment, 1.
    IsentropicEfficiency {
        /// Turbine or pump.
        of: EquipmentId,
        /// From this state.
        inlet: StreamId,
        /// To this state.
        outlet: StreamId,
    },
    /// Power: shaft work of a turbine or pump, electrical power of a generator
    /// or motor, kW.
    Power(EquipmentId),
    /// Heat loss of a piece of equipment with streams, kW.
    HeatLoss(EquipmentId),
    /// Loss of a generator, shaft or motor, kW.
    Loss(EquipmentId),
    /// Rate of change of the holdup, kg/s.
    HoldupChange(EquipmentId),
    /// Atmospheric pressure, MPa.
    Barometer,
}

/// One instrument.
#[derive(Clone, Debug, PartialEq)]
pub struct Tag {
    /// Name as the historian knows it.
    pub name: String,
    /// What it measures.
    pub quantity: Quantity,
    /// Unit of its readings.
    pub unit: Unit,
    /// Lower and upper end of its range, in its unit.
    pub range: Option<(f64, f64)>,
    /// Uncertainty of its readings.
    pub uncertainty: Uncertainty,
    /// Reading at normal operation, in its unit: for the assessment, and for
    /// where a solve starts when the tag is missing.
    pub normal: Option<f64>,
    /// How its samples become readings; `None`: as the plant's tags usually are.
    pub averaging: Option<TagAveraging>,
}

/// A value with an uncertainty that comes from design data.
#[derive(Clone, Debug, PartialEq)]
pub struct Assumption {
    /// Name in the plant file.
    pub name: String,
    /// What it states.
    pub quantity: Quantity,
    /// Unit of the value.
    pub unit: Unit,
    /// The value, in its unit.
    pub value: f64,
    /// Uncertainty of the value.
    pub uncertainty: Uncertainty,
    /// It holds when this does; `None`: always.
    pub in_service_when: Option<Condition>,
}
