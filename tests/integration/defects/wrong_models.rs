//! Plants that are not what their plant file says.
//!
//! Each departure is one that real plant files have: a vent that nobody drew, a
//! leak-off that was led elsewhere, drains that are colder than saturation, an
//! impulse line full of water that the transmitter was not corrected for.

use counterpoise::demo::{Fault, Truth};
use counterpoise::fluid;
use counterpoise::plant::{PressureReference, Quantity};

use super::disturb::{Carries, Defect, Disturber, equipment, stream};

/// Standard gravity, m/s2 (ISO 80000-3).
const GRAVITY: f64 = 9.80665;
/// Of the impulse line, which stands in the turbine hall: K and MPa.
const AMBIENT: (f64, f64) = (293.15, 0.101_325);

/// A way in which plant file and plant differ.
#[derive(Clone, Debug, PartialEq)]
pub struct WrongModel {
    pub name: &'static str,
    pub defects: Vec<Defect>,
    /// Tags whose transmitter stands below its tap by this many metres of water.
    pub water_legs: Vec<(&'static str, f64)>,
}

/// Every wrong model by itself.
pub fn wrong_models(disturber: &Disturber) -> Vec<WrongModel> {
    let plant = disturber.plant();
    let (equipment, stream) = (|name| equipment(plant, name), |name| stream(plant, name));
    let only = |name, defects| WrongModel {
        name,
        defects,
        water_legs: Vec::new(),
    };
    let vent = Defect::Line {
        from: (equipment("heater-7"), "steam"),
        into: (equipment("deaerator"), "flow"),
        size: 0.15,
        carries: Carries::DrySteam(stream("bleed-7")),
    };
    // To the outside it would be a leak like any other, which has a hypothesis.
    let leak_off = Defect::Line {
        from: (equipment("turbine-hp"), "flow"),
        into: (equipment("gland-header"), "flow"),
        size: 0.4,
        carries: Carries::Stream(stream("chest-steam")),
    };
    let subcooled = ["drain-2", "gland-drain"].map(|name| Defect::Subcooled {
        stream: stream(name),
        kelvin: 2.0,
    });
    vec![
        only("omitted vent of heater 7", vec![vent]),
        only("unknown leak-off of the HP turbine", vec![leak_off]),
        only("drains 2 K subcooled", subcooled.into()),
        WrongModel {
            name: "3 m water leg at PT-453",
            defects: Vec::new(),
            water_legs: vec![("PT-453", 3.0)],
        },
    ]
}

/// All of them in one plant.
pub fn all_together(models: &[WrongModel]) -> WrongModel {
    WrongModel {
        name: "all together",
        defects: models.iter().flat_map(|m| m.defects.clone()).collect(),
        water_legs: models.iter().flat_map(|m| m.water_legs.clone()).collect(),
    }
}

impl WrongModel {
    /// What the plant really does, from what it would do if it were as its plant
    /// file says, and what is wrong with its tags.
    pub fn apply(&self, disturber: &Disturber, truth: &Truth) -> (Truth, Vec<(String, Fault)>) {
        let truth = if self.defects.is_empty() {
            truth.clone()
        } else {
            disturber.disturbed(truth, &self.defects)
        };
        let faults = self.water_legs.iter().map(|&(tag, metres)| {
            let bias = water_leg(disturber, &truth, tag, metres);
            (tag.to_owned(), Fault::Bias(bias))
        });
        let faults = faults.collect();
        (truth, faults)
    }
}

/// The bias of a pressure tag under a column of water, rho g h, in its sigmas.
fn water_leg(disturber: &Disturber, truth: &Truth, name: &str, metres: f64) -> f64 {
    let plant = disturber.plant();
    let tag = plant.tags.iter().find(|tag| tag.name == name);
    let tag = tag.expect("a tag of the demo plant");
    let Quantity::Pressure(_, reference) = tag.quantity else {
        panic!("{name} measures no pressure");
    };
    let sign = match reference {
        PressureReference::Absolute | PressureReference::Gauge => 1.0,
        PressureReference::Vacuum => -1.0,
    };
    let exact = truth.value(plant, tag.quantity).expect("a value");
    let sigma = tag.uncertainty.sigma(tag.unit.from_internal(exact));
    sign * tag.unit.difference_from_internal(pressure_of(metres)) / sigma.expect("a sigma").get()
}

/// Pressure of a column of cold water, MPa.
pub fn pressure_of(metres: f64) -> f64 {
    let (temperature, pressure) = AMBIENT;
    let water = fluid::from_pt(pressure, temperature).expect("in range");
    GRAVITY * metres / water.v / 1e6
}
