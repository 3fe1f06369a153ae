//! What the plant file calls each kind, and what its kind has.

use super::Kind;

impl Kind {
    /// Name in the plant file.
    pub fn name(&self) -> &'static str {
        match self {
            Kind::Mixer { .. } => "mixer",
            Kind::Splitter { .. } => "splitter",
            Kind::Header { .. } => "header",
            Kind::Valve { .. } => "valve",
            Kind::Pump { .. } => "pump",
            Kind::Turbine { .. } => "turbine",
            Kind::ClosedHeater { .. } => "closed-heater",
            Kind::OpenHeater { .. } => "open-heater",
            Kind::Condenser { .. } => "condenser",
            Kind::Exchanger { .. } => "exchanger",
            Kind::Boiler { .. } => "boiler",
            Kind::Generator { .. } => "generator",
            Kind::Shaft { .. } => "shaft",
            Kind::Motor { .. } => "motor",
        }
    }

    /// Whether it has a loss: zero unless the plant file states one.
    pub fn has_loss(&self) -> bool {
        !matches!(
            self,
            Kind::Splitter { .. } | Kind::Valve { .. } | Kind::Pump { .. } | Kind::Boiler { .. }
        )
    }

    /// Whether it has a holdup, whose change is zero unless the plant file
    /// states one.
    pub fn has_holdup(&self) -> bool {
        matches!(
            self,
            Kind::OpenHeater { .. } | Kind::Condenser { .. } | Kind::Boiler { .. }
        )
    }
}
