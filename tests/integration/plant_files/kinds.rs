//! Every kind of equipment, with the ports and keys that the good file lacks.

use counterpoise::plant::{
    Barometer, EquipmentId, Format, Kind, PressureReference, Quantity, StreamId, read,
};

/// Every kind, port and key that the good file does not have.
const OTHERS: &str = r#"
plant = "others"
[streams]
a = { fluid = "water", to = "mix" }
b = { fluid = "water", to = "mix.in" }
c = { fluid = "water", from = "mix", to = "head.in" }
d = { fluid = "water", from = "head", to = "valve" }
e = { fluid = "water", from = "valve.out", to = "part" }
f = { fluid = "water", from = "part", to = "cooler.hot" }
g = { fluid = "water", from = "part.out", to = "heater.drain" }
h = { fluid = "water", from = "cooler.hot" }
i = { fluid = "water", from = "head", to = "heater.steam" }
j = { fluid = "water", from = "heater.drain", to = "pump" }
k = { fluid = "water", from = "heater.vent", to = "condenser.steam" }
l = { fluid = "water", to = "heater.tube" }
m = { fluid = "water", from = "heater.tube", to = "boiler.reheat-1" }
n = { fluid = "water", from = "boiler.reheat-1", to = "boiler.reheat-2" }
o = { fluid = "water", from = "boiler.reheat-2" }
p = { fluid = "water", from = "pump", to = "boiler.water" }
q = { fluid = "water", from = "boiler.water", to = "turbine" }
r = { fluid = "water", from = "turbine", to = "condenser.steam" }
s = { fluid = "water", from = "condenser.condensate" }
t = { fluid = "water", from = "condenser.vent" }
[equipment]
mix = { kind = "mixer" }
head = { kind = "header", well-mixed = false }
valve = { kind = "valve", description = "trim worn" }
part = { kind = "splitter" }
cooler = { kind = "exchanger" }
heater = { kind = "closed-heater" }
pump = { kind = "pump" }
condenser = { kind = "condenser" }
boiler = { kind = "boiler" }
turbine = { kind = "turbine" }
shaft = { kind = "shaft", drivers = ["turbine"], driven = ["pump"] }
[tags]
F = { measures = "mass-flow", of = "a", unit = "kg/s", uncertainty = { absolute = "1 kg/s" } }
X = { measures = "quality", of = "r", unit = "%", uncertainty = { absolute = "1 %" } }
W = { measures = "power", of = "pump", unit = "kW", uncertainty = { absolute = "1 kW" } }
[assumptions]
drop = { value-of = "pressure-drop", of = "cooler", value = "1 bar", uncertainty = { absolute = "1 bar" } }
reheat = { value-of = "pressure-drop", of = "boiler.reheat-2", value = "1 bar", uncertainty = { absolute = "1 bar" } }
cascade = { value-of = "pressure-drop", of = "heater.drain", between = ["g", "j"], value = "1 bar", uncertainty = { absolute = "1 bar" } }
cold = { value-of = "subcooling", of = "condenser", value = "2 K", uncertainty = { absolute = "1 K" } }
pump = { value-of = "isentropic-efficiency", of = "pump", value = "75 %", uncertainty = { absolute = "5 %" } }
shaft = { value-of = "loss", of = "shaft", value = "5 kW", uncertainty = { absolute = "5 kW" } }
h = { value-of = "enthalpy", of = "l", value = "420 kJ/kg", uncertainty = { absolute = "5 kJ/kg" } }
p = { value-of = "pressure", of = "l", value = "12 bar", uncertainty = { of-value = "5 %" } }
"#;

#[test]
fn every_kind_is_read() {
    let plant = read(OTHERS, Format::Toml).unwrap().plant;
    let id = |name: &str| StreamId(plant.streams.iter().position(|s| s.name == name).unwrap());
    let ids = |names: &str| names.split(' ').map(id).collect::<Vec<_>>();
    let machine =
        |name: &str| EquipmentId(plant.equipment.iter().position(|e| e.name == name).unwrap());
    let kinds: Vec<&Kind> = plant.equipment.iter().map(|e| &e.kind).collect();
    assert_eq!(
        *kinds[0],
        Kind::Mixer {
            inlets: ids("a b"),
            outlet: id("c")
        }
    );
    assert_eq!(
        *kinds[1],
        Kind::Header {
            inlets: ids("c"),
            outlets: ids("d i"),
            well_mixed: false
        }
    );
    assert_eq!(
        *kinds[2],
        Kind::Valve {
            inlet: id("d"),
            outlet: id("e")
        }
    );
    assert_eq!(
        *kinds[3],
        Kind::Splitter {
            inlet: id("e"),
            outlets: ids("f g")
        }
    );
    assert_eq!(
        *kinds[4],
        Kind::Exchanger {
            hot: Some((id("f"), id("h"))),
            cold: None
        }
    );
    assert_eq!(
        *kinds[5],
        Kind::ClosedHeater {
            steam: id("i"),
            drains_in: ids("g"),
            drain_out: id("j"),
            tube_in: id("l"),
            tube_out: id("m"),
            vent: Some(id("k")),
            drain_saturated: false,
        }
    );
    assert_eq!(
        *kinds[6],
        Kind::Pump {
            inlet: id("j"),
            outlet: id("p")
        }
    );
    assert_eq!(
        *kinds[7],
        Kind::Condenser {
            steam: ids("k r"),
            condensate: id("s"),
            cooling: None,
            vent: Some(id("t")),
            condensate_saturated: false,
        }
    );
    assert_eq!(
        *kinds[8],
        Kind::Boiler {
            water_in: ids("p"),
            water_out: ids("q"),
            reheats: vec![(ids("m"), id("n")), (ids("n"), id("o"))],
        }
    );
    assert_eq!(
        *kinds[9],
        Kind::Turbine {
            inlets: ids("q"),
            outlets: ids("r")
        }
    );
    assert_eq!(
        *kinds[10],
        Kind::Shaft {
            drivers: vec![machine("turbine")],
            driven: vec![machine("pump")]
        }
    );
    let quantities: Vec<Quantity> = plant.assumptions.iter().map(|a| a.quantity).collect();
    assert_eq!(
        quantities,
        [
            Quantity::PressureDrop(id("f"), id("h")),
            Quantity::PressureDrop(id("n"), id("o")),
            Quantity::PressureDrop(id("g"), id("j")),
            Quantity::Subcooling(id("s")),
            Quantity::IsentropicEfficiency {
                of: machine("pump"),
                inlet: id("j"),
                outlet: id("p")
            },
            Quantity::Loss(machine("shaft")),
            Quantity::Enthalpy(id("l")),
            Quantity::Pressure(id("l"), PressureReference::Absolute),
        ]
    );
    assert_eq!(plant.tags[2].quantity, Quantity::Power(machine("pump")));
    assert_eq!(plant.barometer, Barometer::Absent);
    assert_eq!(plant.title, "others");
}
