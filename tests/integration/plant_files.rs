//! Plant files: what is accepted, what is refused, and how it is explained.

mod alarms;
mod averaging;
mod cases;
mod kinds;
mod network;
mod retention;
mod values;

use proptest::prelude::*;

use counterpoise::plant::{
    Barometer, Fault, Faults, Format, Kind, PressureReference, Quantity, Severity, StreamId,
    canonical_json, read, render,
};

/// A unit that works, without a warning.
const GOOD: &str = r#"plant = "tarn-mill"
title = "Tarn Mill steam plant"
barometer = { value = "1008 mbar", uncertainty = { absolute = "1 mbar" } }

[streams]
live-steam  = { fluid = "water", from = "boiler.water", to = "turbine-hp" }
cold-reheat = { fluid = "water", from = "turbine-hp", to = "boiler.reheat-1" }
hot-reheat  = { fluid = "water", from = "boiler.reheat-1", to = "turbine-lp" }
bleed-6     = { fluid = "water", from = "turbine-hp", to = "heater-6.steam" }
drain-6     = { fluid = "water", from = "heater-6.drain", to = "deaerator" }
bleed-3     = { fluid = "water", from = "turbine-lp", to = "deaerator" }
exhaust     = { fluid = "water", from = "turbine-lp", to = "condenser.steam", non-negative = true }
cw-in       = { fluid = "water", to = "condenser.cooling" }
cw-out      = { fluid = "water", from = "condenser.cooling" }
condensate  = { fluid = "water", from = "condenser.condensate", to = "pump-c" }
feed-c      = { fluid = "water", from = "pump-c", to = "deaerator.in" }
feed-1      = { fluid = "water", from = "deaerator", to = "pump-f" }
feed-2      = { fluid = "water", from = "pump-f", to = "heater-6.tube" }
feed-3      = { fluid = "water", from = "heater-6.tube", to = "boiler.water" }

[equipment]
boiler      = { kind = "boiler" }
turbine-hp  = { kind = "turbine" }
turbine-lp  = { kind = "turbine" }
heater-6    = { kind = "closed-heater", drain-outlet = "saturated" }
deaerator   = { kind = "open-heater", outlet = "saturated" }
condenser   = { kind = "condenser", condensate = "saturated" }
pump-c      = { kind = "pump" }
pump-f      = { kind = "pump" }
generator   = { kind = "generator", driven-by = ["turbine-hp", "turbine-lp"] }
motor-f     = { kind = "motor", drives = "pump-f" }

[tags]
FT-201 = { measures = "mass-flow", of = "live-steam", unit = "t/h", range = [0, 400], uncertainty = { of-reading = "1 %", of-range = "0.2 %" }, normal = 350 }
FT-202 = { measures = "mass-flow", of = "feed-2", unit = "klb/h", range = [0, 800], uncertainty = { of-differential-span = "0.5 %" } }
PT-201 = { measures = "pressure", of = "live-steam", unit = "bar", reference = "gauge", range = [0, 200], uncertainty = { of-range = "0.25 %" } }
TT-201 = { measures = "temperature", of = "live-steam", unit = "Cel", uncertainty = { absolute = "1.5 K" } }
TT-202 = { measures = "temperature", of = "hot-reheat", unit = "[degF]", uncertainty = { absolute = "1.5 Cel" } }
PT-202 = { measures = "pressure", of = "hot-reheat", unit = "bar", uncertainty = { of-reading = "0.5 %" } }
"TT.203" = { measures = "temperature", of = "cw-in", unit = "Cel", uncertainty = { absolute = "0.2 K" } }
TT-204 = { measures = "temperature", of = "cw-out", unit = "K", uncertainty = { absolute = "0.2 K" } }
PT-203 = { measures = "pressure", of = "cw-in", unit = "kPa", uncertainty = { absolute = "0.1 bar" } }
PT-204 = { measures = "pressure", of = "exhaust", unit = "mbar", reference = "vacuum", uncertainty = { absolute = "0.1 kPa" } }
ET-501 = { measures = "power", of = "generator", unit = "MW", uncertainty = { of-reading = "0.5 %" } }

[assumptions]
heater-6-loss = { value-of = "heat-loss", of = "heater-6", value = "25 kW", uncertainty = { absolute = "40 kW" } }
cw-drop = { value-of = "pressure-drop", of = "condenser.cooling", value = "0.4 bar", uncertainty = { absolute = "0.1 bar" } }
lp-last = { value-of = "isentropic-efficiency", of = "turbine-lp", between = ["bleed-3", "exhaust"], value = "85 %", uncertainty = { absolute = "4 %" } }
gen-loss = { value-of = "loss", of = "generator", value = "1.2 MW", uncertainty = { of-value = "20 %" } }
holdup = { value-of = "holdup-change", of = "deaerator", value = "0 kg/s", uncertainty = { absolute = "1 t/h" } }
"#;

fn findings(text: &str, format: Format) -> Vec<Fault> {
    match read(text, format) {
        Ok(file) => file.warnings,
        Err(Faults(faults)) => faults,
    }
}

fn listing(faults: &[Fault], text: &str) -> String {
    let rendered = faults.iter().map(|f| render(f, text, "plant.toml"));
    rendered.collect::<Vec<_>>().join("\n")
}

#[test]
fn a_good_file_is_read() {
    let file = read(GOOD, Format::Toml).unwrap();
    assert_eq!(file.warnings, []);
    let plant = file.plant;
    assert_eq!(
        (plant.name.as_str(), plant.title.as_str()),
        ("tarn-mill", "Tarn Mill steam plant")
    );
    assert_eq!((plant.uncertain_factor, plant.confidence), (2.0, 0.95));
    assert_eq!(plant.streams.len(), 14);
    assert_eq!(plant.streams[6].name, "exhaust");
    assert!(plant.streams[6].non_negative && !plant.streams[5].non_negative);
    assert_eq!(plant.streams[7].from, None);
    let id = |name: &str| StreamId(plant.streams.iter().position(|s| s.name == name).unwrap());
    let kind = |name: &str| {
        &plant
            .equipment
            .iter()
            .find(|e| e.name == name)
            .unwrap()
            .kind
    };
    assert_eq!(
        *kind("heater-6"),
        Kind::ClosedHeater {
            steam: id("bleed-6"),
            drains_in: vec![],
            drain_out: id("drain-6"),
            tube_in: id("feed-2"),
            tube_out: id("feed-3"),
            vent: None,
            drain_saturated: true,
        }
    );
    assert_eq!(
        *kind("boiler"),
        Kind::Boiler {
            water_in: vec![id("feed-3")],
            water_out: vec![id("live-steam")],
            reheats: vec![(vec![id("cold-reheat")], id("hot-reheat"))],
        }
    );
    assert_eq!(
        *kind("deaerator"),
        Kind::OpenHeater {
            inlets: vec![id("drain-6"), id("bleed-3"), id("feed-c")],
            outlet: id("feed-1"),
            vent: None,
            outlet_saturated: true,
        }
    );
    let tag = |name: &str| plant.tags.iter().find(|t| t.name == name).unwrap();
    assert_eq!(
        tag("PT-204").quantity,
        Quantity::Pressure(id("exhaust"), PressureReference::Vacuum)
    );
    assert_eq!(tag("FT-201").range, Some((0.0, 400.0)));
    assert_eq!(tag("FT-201").normal, Some(350.0));
    // 1 % of 300 and 0.2 % of 400.
    assert!((tag("FT-201").uncertainty.half_width(300.0) - f64::hypot(3.0, 0.8)).abs() < 1e-12);
    // 0.5 e span^2 / reading, e = 0.5 % of a span of 800.
    assert!((tag("FT-202").uncertainty.half_width(400.0) - 4.0).abs() < 1e-12);
    // 1.5 Cel as a difference is 2.7 degrees Fahrenheit.
    assert!((tag("TT-202").uncertainty.constant - 2.7).abs() < 1e-12);
    assert_eq!(plant.barometer, Barometer::Unknown);
    let barometer = plant.assumptions.last().unwrap();
    assert_eq!(
        (barometer.name.as_str(), barometer.quantity),
        ("barometer", Quantity::Barometer)
    );
    assert_eq!(
        (barometer.value, barometer.unit.symbol.as_str()),
        (1008.0, "mbar")
    );
    assert_eq!(
        plant.assumptions[1].quantity,
        Quantity::PressureDrop(id("cw-in"), id("cw-out"))
    );
    assert_eq!(plant.assumptions[3].uncertainty.of_reading, 0.2);
}

#[test]
fn toml_and_json_of_one_plant_are_equal() {
    let structure = canonical_json(GOOD, Format::Toml).unwrap();
    // Sorted keys: the order of the members is that of the names.
    for json in [
        structure.to_string(),
        serde_json::to_string_pretty(&structure).unwrap(),
    ] {
        assert_eq!(canonical_json(&json, Format::Json).unwrap(), structure);
        let from_json = read(&json, Format::Json).unwrap();
        assert_eq!(from_json.warnings, []);
        let plant = read(GOOD, Format::Toml).unwrap().plant;
        let by_name = |p: &counterpoise::plant::Plant| {
            let mut tags: Vec<_> = p
                .tags
                .iter()
                .map(|t| (t.name.clone(), t.unit.clone(), t.range, t.uncertainty))
                .collect();
            tags.sort_by(|a, b| a.0.cmp(&b.0));
            let mut equipment: Vec<_> = p
                .equipment
                .iter()
                .map(|e| (e.name.clone(), e.kind.name()))
                .collect();
            equipment.sort();
            let mut streams: Vec<_> = p
                .streams
                .iter()
                .map(|s| {
                    let name = |e: Option<counterpoise::plant::EquipmentId>| {
                        e.map(|e| p.equipment[e.0].name.clone())
                    };
                    (s.name.clone(), name(s.from), name(s.to), s.non_negative)
                })
                .collect();
            streams.sort();
            (tags, equipment, streams)
        };
        assert_eq!(by_name(&from_json.plant), by_name(&plant));
    }
    // In the same order of members the plants are equal in every field.
    let ordered = r#"{"plant": "p", "streams": {"a": {"fluid": "water", "to": "v"}, "b": {"fluid": "water", "from": "v"}},
        "equipment": {"v": {"kind": "valve"}},
        "tags": {"F": {"measures": "mass-flow", "of": "a", "unit": "t/h", "range": [0, 1e2], "uncertainty": {"of-range": "1 %"}}}}"#;
    let same = "plant = 'p'\nstreams.a = { fluid = 'water', to = 'v' }\nstreams.b = { fluid = 'water', from = 'v' }\n\
        [equipment.v]\nkind = 'valve'\n[tags.F]\nmeasures = 'mass-flow'\nof = 'a'\nunit = 't/h'\nrange = [0.0, 100]\n\
        uncertainty.of-range = '1 %'\n";
    assert_eq!(
        read(ordered, Format::Json).unwrap().plant,
        read(same, Format::Toml).unwrap().plant
    );
    let text = |file, format| canonical_json(file, format).unwrap().to_string();
    assert_eq!(text(ordered, Format::Json), text(same, Format::Toml));
}

#[test]
fn syntax_errors_have_line_and_column() {
    for (text, format, place, what) in [
        (
            "plant = \"p\"\nstreams = {",
            Format::Toml,
            (2, 12),
            "not TOML",
        ),
        ("a = [1, 2", Format::Toml, (1, 10), "not TOML"),
        (
            "{\"plant\": \"p\",\n \"x\": }",
            Format::Json,
            (2, 7),
            "expected a value, found `}`",
        ),
        (
            "{\"plant\": \"p\"",
            Format::Json,
            (1, 14),
            "found the end of the file",
        ),
        ("{\"a\": 01}", Format::Json, (1, 8), "`,` or `}`"),
        (
            "{\"a\": [1,]}",
            Format::Json,
            (1, 10),
            "expected a value, found `]`",
        ),
        ("{\"a\": \"\\ud800\"}", Format::Json, (1, 14), "surrogate"),
        ("", Format::Json, (1, 1), "expected a value"),
        ("{} {}", Format::Json, (1, 4), "expected the end"),
    ] {
        let found = read(text, format).unwrap_err().0;
        assert_eq!(found.len(), 1, "{text}: {found:?}");
        assert_eq!(
            (found[0].line, found[0].column),
            (Some(place.0), Some(place.1)),
            "{text}: {found:?}"
        );
        assert!(found[0].what.contains(what), "{text}: {found:?}");
    }
    assert_eq!(read("[]", Format::Json).unwrap_err().0.len(), 1);
    assert_eq!(
        read("7", Format::Json).unwrap_err().0[0].what,
        "a table is needed here, this is a number"
    );
}

#[test]
fn json_duplicates_are_found() {
    let json = canonical_json(GOOD, Format::Toml).unwrap().to_string();
    let twice = json.replace("\"FT-202\":", "\"FT-201\":");
    assert_ne!(json, twice);
    let found = findings(&twice, Format::Json);
    assert_eq!(found.len(), 1, "{found:?}");
    assert_eq!(found[0].path, "/tags/FT-201");
    assert_eq!(found[0].column, twice.rfind("\"FT-201\":").map(|i| i + 1));
}

#[test]
fn deep_nesting_is_a_fault() {
    for (open, close) in [("[", "]"), ("{\"a\":", "}")] {
        let n = 1_000_000;
        let text = format!("{}1{}", open.repeat(n), close.repeat(n));
        let found = read(&text, Format::Json).unwrap_err().0;
        assert_eq!(found.len(), 1);
        assert!(
            found[0].what.contains("nested deeper than 64"),
            "{}",
            found[0].what
        );
    }
    let n = 100_000;
    for text in [
        format!("a{} = 1", ".a".repeat(n)),
        format!("[a{}]", ".a".repeat(n)),
        format!("a = {}1{}", "[".repeat(n), "]".repeat(n)),
    ] {
        assert_eq!(read(&text, Format::Toml).unwrap_err().0.len(), 1);
    }
}

#[test]
fn ten_faults_are_reported_at_once() {
    let text = cases::case(
        r#"- title =
+ titel =
- bleed-6     = { fluid = "water", from = "turbine-hp"
+ bleed-6     = { fluid = "water", from = "turbine-hq"
- to = "pump-c"
+ to = "pump-c.suction"
- drain-outlet = "saturated"
+ drain-outlet = "boiling"
- unit = "t/h"
+ unit = "barg"
- of = "feed-2"
+ of = "feeed-2"
- range = [0, 200]
+ range = [200, 0]
- TT-201 = {
+ TT.201 = {
- PT-202 =
+ FT-201 =
- value = "85 %"
+ value = "85 bar""#,
    )
    .text;
    let found = findings(&text, Format::Toml);
    let paths: Vec<&str> = found.iter().map(|f| f.path.as_str()).collect();
    assert_eq!(
        paths,
        [
            "/titel",
            "/streams/bleed-6/from",
            "/streams/condensate/to",
            "/equipment/heater-6/drain-outlet",
            "/tags/FT-201/unit",
            "/tags/FT-202/of",
            "/tags/PT-201/range",
            "/tags/TT/201",
            "/tags/FT-201",
            "/assumptions/lp-last/value",
        ],
        "{}",
        listing(&found, &text)
    );
    insta::with_settings!({ prepend_module_to_snapshot => false }, {
        insta::assert_snapshot!("plant_files_ten_faults", listing(&found, &text));
    });
}

#[test]
fn one_mistake_is_one_fault() {
    // Each word of the good file left out, or misspelt, must not make a crowd.
    let words: Vec<&str> = vec!["heater-6", "turbine-lp", "deaerator", "condenser"];
    for word in words {
        // The definition alone is renamed: every reference is a fault, and
        // nothing else is.
        let definition = GOOD
            .lines()
            .find(|l| l.starts_with(word) && l.contains("kind"))
            .unwrap();
        let renamed = definition.replacen(word, &format!("{word}x"), 1);
        let text = GOOD.replace(definition, &renamed);
        let found = findings(&text, Format::Toml);
        let all_references = found
            .iter()
            .all(|f| f.what == format!("there is no equipment `{word}`"));
        assert!(all_references, "{}", listing(&found, &text));
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(300))]

    /// Whatever is cut out of, doubled in or written into a plant file, reading
    /// it ends with an answer, and every fault lies in the file.
    #[test]
    fn damaged_files_are_answered(
        start in 0..GOOD.len(),
        length in 0..200usize,
        written in prop_oneof![
            Just(String::new()),
            "[\\[\\]{}\",.=\n \\\\u0-9a-z%-]{0,12}",
            (0..GOOD.len(), 0..300usize).prop_map(|(a, n)| GOOD[a..(a + n).min(GOOD.len())].to_owned()),
        ],
    ) {
        let json = canonical_json(GOOD, Format::Toml).unwrap().to_string();
        for (good, format) in [(GOOD, Format::Toml), (json.as_str(), Format::Json)] {
            let start = start.min(good.len());
            let end = (start + length).min(good.len());
            let text = format!("{}{written}{}", &good[..start], &good[end..]);
            if let Err(Faults(found)) = read(&text, format) {
                prop_assert!(found.iter().any(|f| f.severity == Severity::Error));
                for fault in &found {
                    let line = text.lines().nth(fault.line.unwrap() - 1).unwrap_or_default();
                    prop_assert!(fault.column.unwrap() <= line.chars().count() + 1);
                    prop_assert!(!fault.what.is_empty() && !fault.mend.is_empty());
                }
                let lines: Vec<_> = found.iter().map(|f| (f.line, f.column)).collect();
                prop_assert!(lines.is_sorted());
            }
        }
    }
}
