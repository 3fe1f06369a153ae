//! Line-ups: what is out of service leaves the equations, by status alone.

mod demo;
mod files;
mod findings;
mod property;
mod served;

use counterpoise::plant::{Batch, Format, Grade, Plant, Quality, Reading, read};
use time::macros::datetime;

/// A plant of a file without faults.
pub fn plant(text: &str) -> Plant {
    match read(text, Format::Toml) {
        Ok(file) => file.plant,
        Err(faults) => panic!("{faults}"),
    }
}

/// A batch of good readings.
pub fn batch(name: &str, readings: &[(&str, f64)]) -> Batch {
    let readings = readings.iter().map(|(tag, value)| Reading {
        tag: (*tag).to_owned(),
        value: Some(*value),
        quality: Quality {
            grade: Grade::Good,
            code: None,
        },
        averaged: None,
    });
    Batch {
        name: name.to_owned(),
        start: datetime!(2031-04-02 10:00 UTC),
        end: datetime!(2031-04-02 10:05 UTC),
        readings: readings.collect(),
        steadiness: None,
    }
}

/// Two pumps side by side, and a cooler with a way past it.
pub const STATION: &str = r#"
plant = "station"
running-when = { tag = "XS-0", is = 1 }
[streams]
draw   = { fluid = "water", to = "suction" }
a      = { fluid = "water", from = "suction", to = "pump-a" }
b      = { fluid = "water", from = "suction", to = "pump-b" }
a-out  = { fluid = "water", from = "pump-a", to = "delivery" }
b-out  = { fluid = "water", from = "pump-b", to = "delivery" }
main   = { fluid = "water", from = "delivery", to = "tee" }
cooled = { fluid = "water", from = "tee", to = "cooler.hot" }
cold   = { fluid = "water", from = "cooler.hot", to = "mixer" }
past   = { fluid = "water", from = "tee", to = "mixer", in-service-when = { tag = "F-P", above = "2 t/h" } }
out    = { fluid = "water", from = "mixer" }
[equipment]
suction  = { kind = "splitter" }
pump-a   = { kind = "pump", in-service-when = { tag = "XS-A", is = 1 } }
pump-b   = { kind = "pump", in-service-when = { tag = "XS-B", is = [1, 2] } }
motor-a  = { kind = "motor", drives = "pump-a" }
delivery = { kind = "header" }
tee      = { kind = "splitter" }
cooler   = { kind = "exchanger" }
mixer    = { kind = "mixer" }
[tags]
XS-0 = { measures = "status" }
XS-A = { measures = "status", normal = 1 }
XS-B = { measures = "status", normal = 0 }
F-1  = { measures = "mass-flow", of = "draw", unit = "t/h", range = [0, 200], uncertainty = { of-range = "1 %" } }
F-2  = { measures = "mass-flow", of = "out", unit = "t/h", range = [0, 200], uncertainty = { of-range = "1 %" } }
F-A  = { measures = "mass-flow", of = "a-out", unit = "t/h", range = [0, 200], uncertainty = { of-range = "1 %" } }
F-B  = { measures = "mass-flow", of = "b-out", unit = "t/h", range = [0, 200], uncertainty = { of-range = "1 %" } }
F-P  = { measures = "mass-flow", of = "past", unit = "t/h", range = [0, 50], uncertainty = { of-range = "1 %" } }
E-A  = { measures = "power", of = "motor-a", unit = "kW", range = [0, 100], uncertainty = { of-range = "1 %" } }
T-1  = { measures = "temperature", of = "draw", unit = "Cel", uncertainty = { absolute = "0.5 K" } }
T-2  = { measures = "temperature", of = "main", unit = "Cel", uncertainty = { absolute = "0.5 K" } }
T-3  = { measures = "temperature", of = "out", unit = "Cel", uncertainty = { absolute = "0.5 K" } }
P-1  = { measures = "pressure", of = "draw", unit = "bar", uncertainty = { absolute = "0.05 bar" } }
P-2  = { measures = "pressure", of = "main", unit = "bar", uncertainty = { absolute = "0.05 bar" } }
P-3A = { measures = "pressure", of = "out", unit = "bar", uncertainty = { absolute = "0.05 bar" } }
P-3B = { measures = "pressure", of = "out", unit = "bar", uncertainty = { absolute = "0.05 bar" } }
P-3C = { measures = "pressure", of = "out", unit = "bar", uncertainty = { absolute = "0.05 bar" } }
[assumptions]
loss-a = { value-of = "loss", of = "motor-a", value = "2 kW", uncertainty = { absolute = "1 kW" } }
cold-p = { value-of = "pressure", of = "cold", value = "9 bar", uncertainty = { absolute = "0.5 bar" }, in-service-when = { tag = "XS-A", is = 1 } }
"#;

/// What the station reads with pump A in service and nothing led past the cooler.
pub const USUAL: &[(&str, f64)] = &[
    ("XS-0", 1.0),
    ("XS-A", 1.0),
    ("XS-B", 0.0),
    ("F-1", 100.4),
    ("F-2", 99.8),
    ("F-A", 100.1),
    ("F-B", 0.3),
    ("F-P", 0.1),
    ("E-A", 38.0),
    ("T-1", 40.1),
    ("T-2", 40.2),
    ("T-3", 30.0),
    ("P-1", 1.01),
    ("P-2", 9.99),
    ("P-3A", 9.01),
    ("P-3B", 9.03),
    ("P-3C", 8.98),
];

/// The usual readings with some others in their place.
pub fn usual_but(changed: &[(&'static str, f64)]) -> Vec<(&'static str, f64)> {
    let value = |tag: &str| changed.iter().find(|(t, _)| *t == tag).map(|(_, v)| *v);
    let usual = USUAL.iter();
    usual
        .map(|(tag, v)| (*tag, value(tag).unwrap_or(*v)))
        .collect()
}
