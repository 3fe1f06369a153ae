//! Faults of what is said about the network: units, ranges, uncertainties, the
//! barometer, assumptions; and every warning.

use counterpoise::plant::{Barometer, Format, Quantity, StreamId, read};

use super::GOOD;
use super::cases::{case, check};

#[test]
fn units_that_do_not_fit() {
    check(
        r#"
- unit = "t/h"
+ unit = "bar"
! /tags/FT-201/unit | "bar" | `bar` is a unit of pressure, not a unit of mass flow | `kg/s`, `t/h`

- unit = "bar", reference
+ unit = "barg", reference
! /tags/PT-201/unit | "barg" | `barg` is no UCUM unit | write `bar`, with reference = "gauge"

- unit = "t/h"
+ unit = "Nm3/h"
! /tags/FT-201/unit | "Nm3/h" | a volume flow, which is not available yet | mass flow

- unit = "K"
+ unit = "C"
! /tags/TT-204/unit | "C" | `C` is | write `Cel`

- value = "25 kW"
+ value = "25 kJ/kg"
! /assumptions/heater-6-loss/value | "25 kJ/kg" | not a unit of power | `kW`

- value = "25 kW"
+ value = "25"
! /assumptions/heater-6-loss/value | "25" | has no unit | 25 kW

- value = "25 kW"
+ value = 25
! /assumptions/heater-6-loss/value | 25 | a number without a unit | "25 kW"

- absolute = "1.5 K"
+ absolute = "1,5 K"
! /tags/TT-201/uncertainty/absolute | "1,5 K" | comma | decimal point

- absolute = "1.5 K"
+ absolute = "1.5 bar"
! /tags/TT-201/uncertainty/absolute | "1.5 bar" | not a unit of temperature difference | `K`"#,
    );
}

#[test]
fn ranges_and_uncertainties() {
    check(
        r#"
- range = [0, 400]
+ range = [400, 0]
! /tags/FT-201/range | [400, 0] | negative span | [0, 400]

- range = [0, 400]
+ range = [0, 0]
! /tags/FT-201/range | [0, 0] | no span | upper end

- range = [0, 400]
+ range = [0]
! /tags/FT-201/range | [0] | a range has two ends | [0, 400]

- range = [0, 400]
+ range = [0, 1e400]
! /tags/FT-201/range/1 | 1e400 | beyond 1.8e308 | finite

- normal = 350
+ normal = nan
! /tags/FT-201/normal | nan | not a number | finite

- unit = "kPa"
+ unit = "kPa", range = [-5, 300]
! /tags/PT-203/range | [-5, 300] | an absolute pressure cannot be -5 | gauge

- range = [0, 400], 
! /tags/FT-201/uncertainty/of-range | of-range | the tag has no `range` | range = [0, 400]

- unit = "bar", uncertainty = { of-reading = "0.5 %" } }
+ unit = "bar" }
! /tags/PT-202 | PT-202 | `uncertainty` is missing | 95 %

- of-reading = "1 %", of-range = "0.2 %"
+ of-reading = "0 %"
! /tags/FT-201/uncertainty | { | the uncertainty is zero | absolute

- absolute = "1.5 K"
+ absolute = "-1.5 K"
! /tags/TT-201/uncertainty/absolute | "-1.5 K" | cannot be negative | sign

- absolute = "1.5 K"
+ of-reading = "1 %"
! /tags/TT-201/uncertainty/of-reading | of-reading | its zero is arbitrary | absolute

- of-reading = "1 %"
+ of-reading = 0.01
! /tags/FT-201/uncertainty/of-reading | 0.01 | without a unit | %

- of-range = "0.25 %"
+ of-differential-span = "0.25 %"
! /tags/PT-201/uncertainty/of-differential-span | of-diff | square-root extraction only | of-range

- value = "0 kg/s", uncertainty = { absolute = "1 t/h" }
+ value = "0 kg/s", uncertainty = { of-value = "10 %" }
! /assumptions/holdup/uncertainty | { | comes out zero | absolute

# A share of a reading in kelvin is fine: its zero is the real one.
- unit = "K", uncertainty = { absolute = "0.2 K" }
+ unit = "K", uncertainty = { of-reading = "0.1 %" }"#,
    );
}

#[test]
fn one_fault_does_not_hide_others() {
    check(
        r#"
# The unit is faulty, and so is the uncertainty whatever the unit.
- unit = "Cel", uncertainty = { absolute = "1.5 K" }
+ unit = "bar", uncertainty = {}
! /tags/TT-201/unit | "bar" | not a unit of temperature | `Cel`
! /tags/TT-201/uncertainty | {} | the uncertainty is zero | absolute

- range = [0, 400], uncertainty = { of-reading = "1 %", of-range = "0.2 %" }
+ range = [400, 0], uncertainty = { of-range = "0 %" }
! /tags/FT-201/range | [400, 0] | negative span | [0, 400]
! /tags/FT-201/uncertainty | { | the uncertainty is zero | absolute

- value = "25 kW", uncertainty = { absolute = "40 kW" }
+ value = "25 bar", uncertainty = {}
! /assumptions/heater-6-loss/value | "25 bar" | not a unit of power | `kW`
! /assumptions/heater-6-loss/uncertainty | {} | the uncertainty is zero | absolute

# A term that is not zero is no fault because the unit is one.
- unit = "t/h", range = [0, 400]
+ unit = "bar", range = [0, 400]
! /tags/FT-201/unit | "bar" | not a unit of mass flow | `kg/s`

# Nobody knows what is measured, and the rest is looked at all the same.
- measures = "mass-flow", of = "live-steam", unit = "t/h", range = [0, 400], uncertainty = { of-reading = "1 %", of-range = "0.2 %" }, normal = 350
+ measures = "mass-flw", of = "live-steem", unit = "furlong", range = [400, 0], uncertainty = { absolute = 3 }, normal = "x"
! /tags/FT-201/measures | "mass-flw" | there is no quantity | did you mean `mass-flow`
! /tags/FT-201/of | "live-steem" | no stream or equipment | did you mean `live-steam`
! /tags/FT-201/unit | "furlong" | nothing that a tag measures | kg/s
! /tags/FT-201/range | [400, 0] | negative span | [0, 400]
! /tags/FT-201/uncertainty/absolute | 3 | without a unit | string
! /tags/FT-201/normal | "x" | a number is needed | 350

- measures = "mass-flow", of = "live-steam", unit = "t/h", range = [0, 400], uncertainty = { of-reading = "1 %", of-range = "0.2 %" }, normal = 350
+ measures = "mass-flw", of = "live-steam", unit = "t/h", range = [0, 400], uncertainty = { of-differential-span = "1 %", absolute = "1 t/h" }
! /tags/FT-201/measures | "mass-flw" | there is no quantity | did you mean `mass-flow`

- measures = "mass-flow", of = "live-steam", unit = "t/h", range = [0, 400], uncertainty = { of-reading = "1 %", of-range = "0.2 %" }, normal = 350
+ measures = "mass-flw", of = "live-steam"
! /tags/FT-201 | FT-201 | `unit` is missing | kg/s
! /tags/FT-201 | FT-201 | `uncertainty` is missing | 95 %
! /tags/FT-201/measures | "mass-flw" | there is no quantity | did you mean `mass-flow`

- value-of = "heat-loss", of = "heater-6", value = "25 kW", uncertainty = { absolute = "40 kW" }
+ value-of = "heat-los", of = "heater-6", value = 25, uncertainty = {}
! /assumptions/heater-6-loss/value-of | "heat-los" | there is no quantity | did you mean `heat-loss`
! /assumptions/heater-6-loss/value | 25 | without a unit | string
! /assumptions/heater-6-loss/uncertainty | {} | the uncertainty is zero | absolute"#,
    );
}

#[test]
fn a_tag_and_an_assumption_have_two_names() {
    check(
        r#"
- holdup = {
+ FT-202 = {
! /assumptions/FT-202 | FT-202 | `FT-202` is a tag already | another name

- PT-203 = {
+ barometer = {
! /tags/barometer | barometer | the plant's barometer makes | another name"#,
    );
}

#[test]
fn percent_come_out_as_the_nearest_double() {
    for (text, value) in [
        ("95 %", 0.95),
        ("99 %", 0.99),
        ("97.5 %", 0.975),
        ("0.95 1", 0.95),
    ] {
        let file = format!("confidence = \"{text}\"\n{GOOD}");
        let plant = read(&file, Format::Toml).unwrap().plant;
        assert_eq!(plant.confidence.to_bits(), f64::to_bits(value), "{text}");
    }
}

#[test]
fn barometers() {
    check(
        r#"
- barometer = { value = "1008 mbar", uncertainty = { absolute = "1 mbar" } }
! /tags/PT-201/reference | "gauge" | no barometer | barometer = {
! /tags/PT-204/reference | "vacuum" | no barometer | barometer = {

- , uncertainty = { absolute = "1 mbar" }
? /barometer | barometer | taken as exact | uncertainty

- value = "1008 mbar", uncertainty = { absolute = "1 mbar" }
+ tag = "PT-202"
! /barometer/tag | "PT-202" | pressure of `hot-reheat`, not of the atmosphere | of = "barometer"

- value = "1008 mbar", uncertainty = { absolute = "1 mbar" }
+ tag = "TT-201"
! /barometer/tag | "TT-201" | measures temperature, not pressure | pressure

- value = "1008 mbar", uncertainty = { absolute = "1 mbar" }
+ tag = "PT-2011"
! /barometer/tag | "PT-2011" | there is no tag | did you mean `PT-201`

- value = "1008 mbar"
+ value = "1008 bar"
! /barometer/value | "1008 bar" | no atmosphere | mbar

- of = "cw-in", unit = "kPa"
+ unit = "kPa"
! /tags/PT-203 | PT-203 | `of` is missing | name of a stream"#,
    );
    let text = case(
        r#"- value = "1008 mbar", uncertainty = { absolute = "1 mbar" }
+ tag = "PT-1"
- [tags]
+ [tags]
+ PT-1 = { measures = "pressure", unit = "mbar", uncertainty = { absolute = "1 mbar" } }"#,
    )
    .text;
    let file = read(&text, Format::Toml).unwrap();
    assert_eq!(file.warnings, []);
    assert_eq!(file.plant.barometer, Barometer::Unknown);
    assert_eq!(file.plant.tags[0].quantity, Quantity::Barometer);
    let mut assumptions = file.plant.assumptions.iter();
    assert!(assumptions.all(|a| a.quantity != Quantity::Barometer));
}

#[test]
fn assumptions() {
    check(
        r#"
- of = "heater-6", value
+ of = "generator", value
! /assumptions/heater-6-loss/of | "generator" | a generator has no heat-loss | "loss"

- of = "generator", value
+ of = "turbine-lp", value
! /assumptions/gen-loss/of | "turbine-lp" | a turbine has no loss | heat-loss

- of = "condenser.cooling", value
+ of = "condenser", value
! /assumptions/cw-drop/of | "condenser" | several sides | `condenser.cooling`

- of = "condenser.cooling", value
+ of = "heater-6.steam", value
! /assumptions/cw-drop/of | "heater-6.steam" | have one pressure | remove

- between = ["bleed-3", "exhaust"], 
! /assumptions/lp-last/of | "turbine-lp" | several inlets or outlets | between

- between = ["bleed-3", "exhaust"]
+ between = ["bleed-6", "exhaust"]
! /assumptions/lp-last/between/0 | "bleed-6" | does not join `turbine-lp` | enters

- between = ["bleed-3", "exhaust"]
+ between = ["exhaust", "hot-reheat"]
! /assumptions/lp-last/between/1 | "hot-reheat" | does not leave `turbine-lp` | leaves

- value = "85 %"
+ value = "850 %"
! /assumptions/lp-last/value | "850 %" | no isentropic-efficiency | 100 %

- of = "deaerator", value
+ of = "heater-6", value
! /assumptions/holdup/of | "heater-6" | has no holdup-change | `open-heater`

- value-of = "holdup-change", of = "deaerator", value = "0 kg/s", uncertainty = { absolute = "1 t/h" }
+ value-of = "subcooling", of = "heater-6", value = "4 K", uncertainty = { absolute = "1 K" }
! /assumptions/holdup/of | "heater-6" | saturated already by `drain-outlet` | remove"#,
    );
    // Without `drain-outlet` it is the subcooling of the drain, a difference:
    // the unit has no offset, and a share of the value is a length of scale.
    let text = case(
        r#"- value-of = "holdup-change", of = "deaerator", value = "0 kg/s", uncertainty = { absolute = "1 t/h" }
+ value-of = "subcooling", of = "heater-6", value = "4 Cel", uncertainty = { of-value = "25 %" }
- , drain-outlet = "saturated""#,
    )
    .text;
    let plant = read(&text, Format::Toml).unwrap().plant;
    let subcooling = &plant.assumptions[4];
    assert_eq!(subcooling.quantity, Quantity::Subcooling(StreamId(4)));
    assert_eq!(subcooling.unit.to_internal(subcooling.value), 4.0);
    assert_eq!(subcooling.uncertainty.half_width(4.0), 1.0);
}

#[test]
fn warnings() {
    check(
        r#"
- gen-loss = { value-of = "loss", of = "generator", value = "1.2 MW", uncertainty = { of-value = "20 %" } }
? /equipment/generator | generator | no stated loss | 1 to 1.5 %

- PT-202 = { measures = "pressure", of = "hot-reheat", unit = "bar", uncertainty = { of-reading = "0.5 %" } }
? /tags/TT-202 | TT-202 | nothing determines the pressure of `hot-reheat` | pressure tag

- TT-202 = { measures = "temperature", of = "hot-reheat", unit = "[degF]", uncertainty = { absolute = "1.5 Cel" } }
? /tags/PT-202 | PT-202 | nothing checks `PT-202` | temperature tag

# Neither work nor heat, and the efficiency is replaced by a temperature.
- lp-last = { value-of = "isentropic-efficiency", of = "turbine-lp", between = ["bleed-3", "exhaust"], value = "85 %", uncertainty = { absolute = "4 %" } }
+ lp-last = { value-of = "temperature", of = "exhaust", value = "35 Cel", uncertainty = { absolute = "4 K" } }
- of = "cw-out", unit = "K"
+ of = "cw-in", unit = "K"
- of = "generator", unit = "MW"
+ of = "motor-f", unit = "MW"
? /streams/exhaust | exhaust | nothing determines the enthalpy of `exhaust` | isentropic-efficiency

- "TT.203" = { measures = "temperature", of = "cw-in"
+ "TT.203" = { measures = "temperature", of = "live-steam"
- of = "cw-out", unit = "K"
+ of = "live-steam", unit = "K"
- of = "cw-in", unit = "kPa"
+ of = "live-steam", unit = "kPa"
- cw-drop = { value-of = "pressure-drop", of = "condenser.cooling", value = "0.4 bar", uncertainty = { absolute = "0.1 bar" } }
? /streams/cw-in | cw-in | no tag or assumption is on any of `cw-in`, `cw-out` | leave these"#,
    );
}
