//! What changes nothing: units, order, a tag split into two, a tag that nothing
//! checks, relations that others imply, what is reconciled already.
//!
//! The solver stops when a step is below 1e-7 of a state's scale, and Newton's
//! steps shrink fast, so that two ways to the same solution end much closer
//! than that; what takes the same steps ends within rounding.

use super::workbench::{
    Distance, FERROW_BRIDGE, batch, degrees_of_freedom, demo_truth, everyday, levelled, near_truth,
    read, references, run, statistic, without,
};
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{Batch, Quantity, Reading, StreamId, Tag, Unit};
use counterpoise::report::Class;
use rand::SeedableRng;
use rand::seq::SliceRandom;
use rand_chacha::ChaCha8Rng;

/// Values after the same steps, up to rounding.
const ROUNDING: f64 = 1e-9;
/// Values after another way to the same solution: the step that ends a solve.
const CONVERGENCE: f64 = 1e-7;
/// Uncertainties: a tenth of the accuracy that is promised for them. They come
/// from a matrix that is regularised, and see its rounding.
const SPREADS: f64 = 5e-4;

#[test]
fn the_same_batch_gives_the_same_bytes() {
    for (plant, mut batch) in everyday() {
        let compiled = Compiled::new(plant.clone(), 1);
        let text = |compiled: &Compiled, batch: &Batch| {
            serde_json::to_string(&reconcile(compiled, batch)).expect("JSON")
        };
        let first = text(&compiled, &batch);
        assert_eq!(first, text(&compiled, &batch), "a second time");
        batch.readings.shuffle(&mut ChaCha8Rng::seed_from_u64(2));
        assert_eq!(
            first,
            text(&Compiled::new(plant, 1), &batch),
            "compiled again, in another order"
        );
    }
}

#[test]
fn a_batch_is_not_changed_by_the_batch_before() {
    let (plant, truth) = demo_truth(0.7);
    let batch = near_truth(&plant, &truth, 1.0, 3);
    let fresh = reconcile(&Compiled::new(plant.clone(), 1), &batch);
    let used = Compiled::new(plant.clone(), 1);
    let (_, other) = demo_truth(0.95);
    let mut before = near_truth(&plant, &other, 1.0, 4);
    before.readings.truncate(60);
    let _ = reconcile(&used, &before);
    assert_eq!(fresh, reconcile(&used, &batch));
}

#[test]
fn the_order_of_the_plant_file_changes_nothing() {
    let (plant, truth) = demo_truth(0.8);
    let demo = near_truth(&plant, &truth, 1.0, 7);
    let other = references().remove(1).1.remove(0);
    for (file, batch) in [
        (counterpoise::demo::plant_file(), demo),
        (FERROW_BRIDGE, other),
    ] {
        let straight = run(&read(file), &batch);
        for seed in 0..3 {
            let shuffled = run(&read(&shuffled(file, seed)), &batch);
            let distance = Distance::between(&straight, &shuffled);
            distance.assert_below(
                ROUNDING,
                SPREADS,
                &format!("{} order {seed}", straight.plant),
            );
            assert_eq!(degrees_of_freedom(&straight), degrees_of_freedom(&shuffled));
        }
    }
}

/// A plant file with the lines of every section in another order; every entry
/// is one line.
fn shuffled(file: &str, seed: u64) -> String {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let mut text = String::new();
    let mut section: Vec<&str> = Vec::new();
    let mut in_section = false;
    for line in file.lines() {
        if line.starts_with('[') {
            section.shuffle(&mut rng);
            section
                .drain(..)
                .for_each(|entry| text += &format!("{entry}\n"));
            in_section = true;
        }
        if in_section && line.contains(" = {") {
            section.push(line);
        } else {
            text += &format!("{line}\n");
        }
    }
    section.shuffle(&mut rng);
    section
        .drain(..)
        .for_each(|entry| text += &format!("{entry}\n"));
    text
}

/// Readings in other units: factors without meaning, temperatures with an
/// offset of their own.
#[test]
fn the_units_of_tags_change_nothing() {
    for (plant, batch) in everyday() {
        let (mut other, mut converted) = (plant.clone(), batch.clone());
        for (n, tag) in other.tags.iter_mut().enumerate() {
            let factor = [0.37, 2.5, 0.453_592_37][n % 3];
            let shift = if matches!(tag.quantity, Quantity::Temperature(_)) {
                17.0
            } else {
                0.0
            };
            let old = tag.unit.clone();
            tag.unit = Unit {
                symbol: "other".to_owned(),
                factor: old.factor * factor,
                offset: old.offset - shift,
            };
            let convert = |value: f64| tag.unit.from_internal(old.to_internal(value));
            tag.uncertainty.constant /= factor;
            tag.uncertainty.differential /= factor * factor;
            tag.range = tag.range.map(|(low, high)| (convert(low), convert(high)));
            tag.normal = tag.normal.map(convert);
            for reading in converted.readings.iter_mut().filter(|r| r.tag == tag.name) {
                reading.value = reading.value.map(convert);
            }
        }
        let mut report = run(&other, &converted);
        // Back into the old units.
        for (tag, old) in other.tags.iter().zip(&plant.tags) {
            let entry = report.tags.get_mut(&tag.name).expect("every tag");
            let value = |v: f64| old.unit.from_internal(tag.unit.to_internal(v));
            let width = |v: f64| v * tag.unit.factor / old.unit.factor;
            entry.reconciled = entry.reconciled.map(value);
            for field in [
                &mut entry.adjustment,
                &mut entry.uncertainty_measured,
                &mut entry.uncertainty_reconciled,
                &mut entry.detectable,
            ] {
                *field = field.map(width);
            }
        }
        let distance = Distance::between(&run(&plant, &batch), &report);
        distance.assert_below(ROUNDING, SPREADS, &format!("{} {}", plant.name, batch.name));
    }
}

/// Every tag is replaced by two that read the same, with sigma times root two.
#[test]
fn a_tag_split_into_two_is_one_more_degree_of_freedom() {
    let (plant, truth) = demo_truth(0.8);
    let batch = near_truth(&plant, &truth, 1.0, 8);
    let whole = run(&plant, &batch);
    for name in ["FT-101", "PT-201", "TT-210", "ET-201", "TT-315"] {
        let (mut split, mut readings) = (plant.clone(), batch.clone());
        let tag = split
            .tags
            .iter_mut()
            .find(|tag| tag.name == name)
            .expect("a tag");
        tag.uncertainty.of_reading *= std::f64::consts::SQRT_2;
        tag.uncertainty.constant *= std::f64::consts::SQRT_2;
        tag.uncertainty.differential *= std::f64::consts::SQRT_2;
        let second = Tag {
            name: format!("{name}-B"),
            ..tag.clone()
        };
        let reading = batch
            .readings
            .iter()
            .find(|r| r.tag == name)
            .expect("a reading");
        readings.readings.push(Reading {
            tag: second.name.clone(),
            ..reading.clone()
        });
        split.tags.push(second);
        let mut report = run(&split, &readings);
        assert_eq!(
            degrees_of_freedom(&report),
            degrees_of_freedom(&whole) + 1,
            "{name}"
        );
        let (first, second) = (&report.tags[name], &report.tags[&format!("{name}-B")]);
        assert_eq!(first.reconciled, second.reconciled);
        assert!(
            (first.reconciled.expect("used") - whole.tags[name].reconciled.expect("used")).abs()
                < 1e-6
        );
        // Half of the weight each, the same variance left: R becomes (1 + R) / 2.
        let redundancy = whole.tags[name].redundancy.expect("used");
        let half = first.redundancy.expect("used");
        assert!(
            (half - (1.0 + redundancy) / 2.0).abs() < SPREADS,
            "{name}: {half}"
        );
        report.tags.shift_remove(name);
        let distance = Distance::between(&report, &whole);
        distance.assert_below(ROUNDING, SPREADS, name);
    }
}

#[test]
fn a_tag_that_nothing_checks_changes_nothing() {
    let (mut plant, truth) = demo_truth(0.8);
    let mut batch = near_truth(&plant, &truth, 1.0, 9);
    let before = run(&plant, &batch);
    assert_eq!(before.streams["gland-spill-low"].pressure.value, None);
    let like = plant
        .tags
        .iter()
        .find(|tag| tag.name == "PT-211")
        .expect("a tag")
        .clone();
    let stream = plant
        .streams
        .iter()
        .position(|s| s.name == "gland-spill-low")
        .expect("a stream");
    let quantity = Quantity::Pressure(
        StreamId(stream),
        counterpoise::plant::PressureReference::Absolute,
    );
    plant.tags.push(Tag {
        name: "PT-999".to_owned(),
        quantity,
        ..like
    });
    let reading = Reading {
        tag: "PT-999".to_owned(),
        value: Some(60.0),
        ..batch.readings[0].clone()
    };
    batch.readings.push(reading);
    let mut after = run(&plant, &batch);
    assert_eq!(after.tags["PT-999"].class, Class::NotRedundant);
    assert_eq!(
        after.tags["PT-999"].adjustment.map(|a| a.abs() < 1e-6),
        Some(true)
    );
    assert_eq!(after.tags["PT-999"].standardised_adjustment, None);
    assert_eq!(degrees_of_freedom(&after), degrees_of_freedom(&before));
    let pressure = after.streams["gland-spill-low"]
        .pressure
        .value
        .expect("now it is known");
    assert!((pressure - 0.06).abs() < 1e-6, "{pressure}");
    after.streams.shift_remove("gland-spill-low");
    let distance = Distance::between(&before, &after);
    distance.assert_below(CONVERGENCE, SPREADS, "PT-999");
}

const PIPES: &str = r#"
plant = "pipes"
title = "Pipes (invented)"

[streams]
first  = { fluid = "water", to = "header-1" }
second = { fluid = "water", to = "header-1" }
left   = { fluid = "water", from = "header-1", to = "header-2" }
right  = { fluid = "water", from = "header-1", to = "header-2" }
out    = { fluid = "water", from = "header-2" }

[equipment]
header-1 = { kind = "header" }
header-2 = { kind = "header" }

[tags]
F-1 = { measures = "mass-flow",   of = "first",  unit = "t/h", uncertainty = { of-reading = "1 %" } }
F-2 = { measures = "mass-flow",   of = "second", unit = "t/h", uncertainty = { of-reading = "1 %" } }
F-3 = { measures = "mass-flow",   of = "out",    unit = "t/h", uncertainty = { of-reading = "1 %" } }
P-1 = { measures = "pressure",    of = "first",  unit = "bar", uncertainty = { absolute = "0.1 bar" } }
P-3 = { measures = "pressure",    of = "out",    unit = "bar", uncertainty = { absolute = "0.1 bar" } }
T-1 = { measures = "temperature", of = "first",  unit = "Cel", uncertainty = { absolute = "1 K" } }
T-2 = { measures = "temperature", of = "second", unit = "Cel", uncertainty = { absolute = "1 K" } }
T-3 = { measures = "temperature", of = "out",    unit = "Cel", uncertainty = { absolute = "1 K" } }
"#;

/// Two pipes side by side: the equal pressures and enthalpies of the first
/// header's outlets are implied by those of the second's inlets.
#[test]
fn a_relation_that_others_imply_changes_nothing() {
    let readings = [
        ("F-1", 100.0),
        ("F-2", 52.0),
        ("F-3", 150.0),
        ("P-1", 8.0),
        ("P-3", 8.1),
        ("T-1", 220.0),
        ("T-2", 300.0),
        ("T-3", 247.0),
    ];
    let readings = batch(readings);
    let one = run(&read(&without(PIPES, &["right"])), &readings);
    let mut two = run(&read(PIPES), &readings);
    assert_eq!(degrees_of_freedom(&one), degrees_of_freedom(&two));
    for name in ["left", "right"] {
        assert_eq!(two.streams[name].mass_flow.value, None, "{name}");
        let enthalpy = (
            two.streams[name].enthalpy.value,
            one.streams["left"].enthalpy.value,
        );
        let (Some(a), Some(b)) = enthalpy else {
            panic!("{name}: {enthalpy:?}")
        };
        assert!((a / b - 1.0).abs() < CONVERGENCE, "{name}: {a}, not {b}");
    }
    two.streams.shift_remove("left");
    let distance = Distance::between(&one, &two);
    distance.assert_below(CONVERGENCE, SPREADS, "a pipe more");
    // A tee and a header in place of the pipes: the header repeats what the tee says.
    let loops = PIPES.replace(
        "header-1 = { kind = \"header\" }",
        "header-1 = { kind = \"splitter\" }",
    );
    let loops = without(&loops, &["second", "F-2", "T-2"]);
    let single = without(&loops, &["right"]).replace("\"splitter\"", "\"header\"");
    let (one, mut two) = (
        run(&read(&single), &readings),
        run(&read(&loops), &readings),
    );
    assert_eq!(degrees_of_freedom(&one), degrees_of_freedom(&two));
    two.streams.shift_remove("left");
    two.equipment.shift_remove("header-1");
    let distance = Distance::between(&one, &two);
    distance.assert_below(CONVERGENCE, SPREADS, "a tee and a header");
}

#[test]
fn what_is_reconciled_stays_as_it_is() {
    for (plant, batch) in everyday() {
        let first = run(&plant, &batch);
        let (again, level) = levelled(&plant, &batch);
        let second = run(&again, &level);
        assert!(
            statistic(&second) < 1e-9,
            "{} {}: {}",
            plant.name,
            batch.name,
            statistic(&second)
        );
        let mut largest = Distance::default();
        for (name, one) in &first.streams {
            let two = &second.streams[name];
            for (a, b) in [
                (&one.mass_flow, &two.mass_flow),
                (&one.pressure, &two.pressure),
                (&one.temperature, &two.temperature),
                (&one.enthalpy, &two.enthalpy),
            ] {
                largest.value(name, a.value, b.value, a.value.unwrap_or(1.0).abs());
            }
        }
        largest.assert_below(
            CONVERGENCE,
            SPREADS,
            &format!("{} {}", plant.name, batch.name),
        );
    }
}
