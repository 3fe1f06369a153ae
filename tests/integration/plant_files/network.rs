//! Faults of the network: names, keys, ports, couplings, circles.

use counterpoise::plant::Format;

use super::cases::check;
use super::{GOOD, findings};

#[test]
fn names_that_do_not_exist() {
    check(
        r#"
- bleed-6     = { fluid = "water", from = "turbine-hp"
+ bleed-6     = { fluid = "water", from = "turbin-hp"
! /streams/bleed-6/from | "turbin-hp" | no equipment `turbin-hp` | did you mean `turbine-hp`

- heater-6.steam
+ heater-6.stem
! /streams/bleed-6/to | "heater-6.stem" | no port `stem` | did you mean `steam`

- of = "feed-2"
+ of = "feed-9"
! /tags/FT-202/of | "feed-9" | no stream `feed-9` | did you mean `feed-

- of = "feed-2"
+ of = "heater-6.tube"
! /tags/FT-202/of | "heater-6.tube" | is equipment | `feed-2`, `feed-3`

- measures = "power"
+ measures = "powr"
! /tags/ET-501/measures | "powr" | no quantity `powr` | did you mean `power`

- measures = "power"
+ measures = "level"
! /tags/ET-501/measures | "level" | not available yet | `mass-flow`

- of = "generator", unit
+ of = "boiler", unit
! /tags/ET-501/of | "boiler" | a boiler has no power | `generator`

- kind = "boiler"
+ kind = "boilr"
! /equipment/boiler/kind | "boilr" | no kind `boilr` | did you mean `boiler`

- kind = "boiler"
+ kind = "compressor"
! /equipment/boiler/kind | "compressor" | not available yet | the kinds are

- cw-in       = { fluid = "water"
+ cw-in       = { fluid = "air"
! /streams/cw-in/fluid | "air" | `air` is not available yet | water

- value-of = "heat-loss"
+ value-of = "heatloss"
! /assumptions/heater-6-loss/value-of | "heatloss" | no quantity | did you mean `heat-loss`

- drives = "pump-f"
+ drives = "pump-x"
! /equipment/motor-f/drives | "pump-x" | no equipment `pump-x` | did you mean `pump-

- reference = "gauge"
+ reference = "guage"
! /tags/PT-201/reference | "guage" | no reference `guage` | did you mean `gauge`"#,
    );
}

#[test]
fn unknown_keys() {
    check(
        r#"
- title =
+ titel =
! /titel | titel | `titel` is no key of a plant file | did you mean `title`

- normal = 350
+ norml = 350
! /tags/FT-201/norml | norml | no key of a tag | did you mean `normal`

- of-differential-span
+ of-diferential-span
! /tags/FT-202/uncertainty/of-diferential-span | of-dif | no key of the uncertainty | `of-differential-span`

- kind = "boiler"
+ kind = "boiler", drain-outlet = "saturated"
! /equipment/boiler/drain-outlet | drain-outlet | no key of kind `boiler` | `closed-heater`

- , outlet = "saturated"
+ , outlet = "boiling"
! /equipment/deaerator/outlet | "boiling" | cannot be `boiling` | saturated

- unit = "kPa"
+ unit = "kPa", range = "0 to 5"
! /tags/PT-203/range | "0 to 5" | an array is needed here, this is a string | [0, 400]

- unit = "[degF]"
+ unit = "[degF]", reference = "absolute"
! /tags/TT-202/reference | reference | only a pressure has | remove"#,
    );
}

#[test]
fn ports() {
    check(
        r#"
- bleed-3     = { fluid = "water", from = "turbine-lp", to = "deaerator" }
+ bleed-3     = { fluid = "water", from = "turbine-lp", to = "heater-6.steam" }
! /streams/bleed-3 | bleed-3 | `steam` of the closed-heater `heater-6` takes one stream in; `bleed-3` joins it beside `bleed-6` | mixer

- bleed-6     = { fluid = "water", from = "turbine-hp", to = "heater-6.steam" }
! /equipment/heater-6 | heater-6 | no stream into `steam` | to = "heater-6.steam"

- feed-2      = { fluid = "water", from = "pump-f", to
+ feed-2      = { fluid = "water", to
! /equipment/pump-f | pump-f | the pump `pump-f` has no outlet | from = "pump-f"

- to = "pump-c"
+ description = "to nowhere"
! /equipment/pump-c | pump-c | the pump `pump-c` has no inlet | to = "pump-c"

- from = "heater-6.drain"
+ from = "heater-6.steam"
! /streams/drain-6/from | "heater-6.steam" | is an inlet: nothing leaves by it | heater-6.drain

- from = "condenser.condensate"
+ from = "condenser"
! /streams/condensate/from | "condenser" | several ports | "condenser.condensate" or "condenser.cooling"

- cw-out      = { fluid = "water", from = "condenser.cooling" }
- of = "cw-out"
+ of = "condensate"
- of = "condenser.cooling", value
+ of = "condenser", between = ["exhaust", "condensate"], value
! /equipment/condenser | condenser | no stream out of `cooling` | from = "condenser.cooling"

- from = "turbine-hp", to = "heater-6.steam"
+ from = "generator", to = "heater-6.steam"
! /streams/bleed-6/from | "generator" | no stream can join the generator | `driven-by`

- pump-f      = { kind = "pump" }
+ pump-f      = { kind = "pump" }
+ stray       = { kind = "pump" }
! /equipment/stray | stray | no stream joins the pump `stray` | to = "stray"

- [equipment]
+ stray = { fluid = "water" }
+ [equipment]
! /streams/stray | stray | joins nothing | `from` or `to`

- from = "boiler.reheat-1", to = "turbine-lp"
+ from = "boiler.water", to = "turbine-lp"
! /equipment/boiler | boiler | no stream out of `reheat-1` | boiler.reheat-1

- to = "boiler.reheat-1"
+ to = "boiler.reheat-2"
- from = "boiler.reheat-1"
+ from = "boiler.reheat-2"
! /equipment/boiler | boiler | a reheat-2 but no reheat-1 | without gaps"#,
    );
}

#[test]
fn couplings_and_circles() {
    check(
        r#"
- motor-f     = { kind = "motor", drives = "pump-f" }
+ motor-f     = { kind = "motor", drives = "pump-f" }
+ shaft = { kind = "shaft", drivers = ["turbine-lp"], driven = ["pump-c"] }
! /equipment/shaft/drivers/0 | "turbine-lp" | coupled to `generator` already | once only

- motor-f     = { kind = "motor", drives = "pump-f" }
+ motor-f     = { kind = "motor", drives = "pump-f" }
+ motor-x     = { kind = "motor", drives = "pump-f" }
! /equipment/motor-x/drives | "pump-f" | coupled to `motor-f` already | once only

- drives = "pump-f"
+ drives = "turbine-lp"
! /equipment/motor-f/drives | "turbine-lp" | is a turbine, not a pump | name a pump

- driven-by = ["turbine-hp", "turbine-lp"]
+ driven-by = []
! /equipment/generator/driven-by | [ | is empty | turbine

- , drives = "pump-f"
! /equipment/motor-f | motor-f | `drives` is missing | drives =

# The pump takes in what it gave out.
- from = "pump-c", to = "deaerator.in"
+ from = "deaerator", to = "deaerator.in"
- feed-1      = { fluid = "water", from = "deaerator"
+ feed-1      = { fluid = "water", from = "pump-c"
! /streams/feed-c/to | "deaerator.in" | goes in a circle, from `deaerator` to `deaerator` | remove it

# A pressure tag does not tell how much goes round.
- [equipment]
+ a = { fluid = "water", from = "mix", to = "part" }
+ b = { fluid = "water", from = "part", to = "mix" }
+ [equipment]
+ mix = { kind = "mixer" }
+ part = { kind = "splitter" }
- [tags]
+ [tags]
+ PT-9 = { measures = "pressure", of = "a", unit = "bar", uncertainty = { absolute = "1 bar" } }
! /equipment/mix | mix | `a`, `b` go round in a circle | pump

# Nothing stands between this valve and the rest of the plant.
- [equipment]
+ x-1 = { fluid = "water", to = "x-valve" }
+ x-2 = { fluid = "water", from = "x-valve" }
+ [equipment]
+ x-valve = { kind = "valve" }
! /equipment/x-valve | x-valve | no tag touches the balance of `x-valve` | add a tag"#,
    );
}

#[test]
fn names_and_duplicates() {
    check(
        r#"
- TT-201 = {
+ TT.201 = {
! /tags/TT/201 | 201 | `TT.201` without quotes is a table `TT` | "TT.201"

- TT-201 = {
+ FT-201 = {
! /tags/FT-201 | FT-201 | `FT-201` is there twice | rename

- TT-201 = {
+ FT-201.A = {
!  | FT-201 | reaches into `FT-201` | quotes

- feed-c      = {
+ feed-1      = {
! /streams/feed-1 | feed-1 | `feed-1` is there twice | rename

# Tables may stand below headings of their own, once.
- [equipment]
+ [streams.x-1]
+ fluid = "water"
+ to = "x-valve"
+ [streams.x-2]
+ fluid = "water"
+ from = "x-valve"
+ [streams.x-2]
+ fluid = "water"
+ from = "x-pump"
+ to = "x-valve"
+ [equipment]
+ x-valve = { kind = "valve" }
+ x-pump = { kind = "pump" }
- [tags]
+ [tags.x]
+ measures = "mass-flow"
+ of = "x-1"
+ unit = "t/h"
+ uncertainty.absolute = "1 t/h"
+ [tags]
! /streams/x-2 | x-2 | `x-2` is there twice | rename

- feed-c      = {
+ "feed.c" = {
! /streams/feed.c | "feed.c" | `.` in the name `feed.c` | `-`

- plant = "tarn-mill"
+ plant = "tarn mill"
! /plant | "tarn mill" | part of its address | title

- plant = "tarn-mill"
!  | title | `plant` is missing | tarn-mill

- ET-501 = {
+ "ET/501" = {
! /tags/ET~1501 | "ET/501" | `/` in the name | `-`"#,
    );
    let long = GOOD.replace("ET-501", &"x".repeat(129));
    let found = findings(&long, Format::Toml);
    assert_eq!(found.len(), 1);
    assert!(found[0].what.contains("129 characters"));
}
