//! The demo's truth is held to the equations of the design, written here a
//! second time and straight from its table: the simulation works its states
//! out one after another and knows nothing of relations, the program's own
//! equations are not used.

pub mod relations;

use std::collections::{BTreeMap, BTreeSet};
use std::io::Read;
use std::path::{Path, PathBuf};

use counterpoise::demo::{
    self, Assumed, Conditions, DAY_SEED, DRIFTING_TAG, Day, FOULING_HEATER, LineUp, Truth,
};
use counterpoise::fluid;
use counterpoise::plant::{Batch, EquipmentId, Grade, Kind, Plant};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use relations::{Departures, closed, relations, relations_with};

/// Largest residual of a relation over the largest of its terms.
const TOLERANCE: f64 = 1e-9;

/// Relations, temperatures and assumptions of a truth; panics where one fails.
fn check(plant: &Plant, truth: &Truth) {
    check_with(plant, truth, &Departures::default());
}

/// The same of a plant that is not quite what its plant file says.
pub fn check_with(plant: &Plant, truth: &Truth, departures: &Departures) {
    let of_equipment = (0..plant.equipment.len())
        .flat_map(|number| relations_with(plant, truth, EquipmentId(number), departures));
    for relation in of_equipment.chain(closed(plant, truth, departures)) {
        let residual = relation.relative_residual();
        assert!(residual < TOLERANCE, "{}: {residual:e}", relation.name);
    }
    for (name, flow) in &truth.streams {
        let state = fluid::from_ph(flow.pressure, flow.enthalpy).expect("in range");
        assert!(
            (state.t - flow.temperature).abs() < 1e-6,
            "temperature of {name}"
        );
        let mut streams = plant.streams.iter();
        let stream = streams.find(|stream| stream.name == *name);
        let may_stand = stream.is_some_and(|stream| stream.normally_closed);
        assert!(flow.mass_flow > 0.0 || may_stand, "flow of {name}");
    }
    for assumption in &plant.assumptions {
        let drawn = truth
            .assumptions
            .iter()
            .find(|(name, _)| *name == assumption.name);
        let (_, drawn) = drawn.expect("every assumption is drawn");
        let real = truth.value(plant, assumption.quantity).expect("a value");
        let sigma = assumption
            .uncertainty
            .sigma(assumption.value)
            .expect("a sigma");
        let sigma = assumption.unit.difference_to_internal(sigma.get());
        assert!(
            (real - drawn).abs() < 1e-6 * sigma,
            "{}: drawn {drawn}, real {real}",
            assumption.name
        );
    }
}

fn plant() -> Plant {
    demo::lined_up(LineUp::default()).expect("the demo plant file has no faults")
}

fn day(plant: &Plant) -> Vec<(Batch, Truth)> {
    Day::new(plant, DAY_SEED)
        .collect::<Result<_, _>>()
        .expect("the day runs")
}

fn fixture(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("fixtures/demo")
        .join(name)
}

#[test]
fn the_plant_is_of_the_promised_size() {
    let plant = plant();
    assert!(plant.streams.len() >= 50, "{} streams", plant.streams.len());
    assert!(plant.tags.len() >= 80, "{} tags", plant.tags.len());
    let heaters = plant
        .equipment
        .iter()
        .filter(|e| e.name.starts_with("heater-") && matches!(e.kind, Kind::ClosedHeater { .. }))
        .count();
    assert!(heaters >= 6, "{heaters} closed feedwater heaters");
    let closed = plant.streams.iter().filter(|s| s.normally_closed);
    assert_eq!(closed.count(), 1, "the emergency drain of heater 6");
}

#[test]
fn every_relation_holds_in_the_truth_of_every_fixture_batch() {
    let plant = plant();
    let day = day(&plant);
    assert_eq!(day.len(), 288);
    for (_, truth) in &day {
        check(&plant, truth);
    }
}

#[test]
fn every_relation_holds_at_random_loads_and_draws() {
    let plant = plant();
    let mut rng = ChaCha8Rng::seed_from_u64(50);
    for _ in 0..50 {
        let at = Conditions {
            fouling: rng.random_range(0.0..8.0),
            ..Conditions::at_load(rng.random_range(0.5..1.0))
        };
        let assumed = Assumed::drawn(&plant, &mut rng);
        check(
            &plant,
            &demo::truth(&at, &assumed).expect("the balance settles"),
        );
    }
}

#[test]
fn every_relation_holds_in_the_other_line_ups() {
    let whole = demo::plant().expect("no faults");
    let mut rng = ChaCha8Rng::seed_from_u64(51);
    for (heater_7_bypassed, second_pump) in [(true, false), (false, true), (true, true)] {
        let line_up = LineUp {
            heater_7_bypassed,
            second_pump,
        };
        let plant = demo::lined_up(line_up).expect("no faults");
        for _ in 0..20 {
            let at = Conditions {
                line_up,
                ..Conditions::at_load(rng.random_range(0.5..1.0))
            };
            let assumed = Assumed::drawn(&whole, &mut rng);
            let truth = demo::truth(&at, &assumed).expect("the balance settles");
            check(&plant, &truth);
        }
    }
}

#[test]
fn a_broken_truth_is_noticed() {
    let plant = plant();
    let truth = demo::truth(&Conditions::at_load(0.9), &Assumed::stated(&plant)).expect("settles");
    for name in plant.streams.iter().map(|stream| &stream.name) {
        let mut broken = truth.clone();
        let flow = broken.streams.get_mut(name).expect("a stream");
        flow.mass_flow *= 1.0 + 1e-6;
        flow.enthalpy *= 1.0 - 1e-6;
        let worst = (0..plant.equipment.len())
            .flat_map(|n| relations(&plant, &broken, EquipmentId(n)))
            .map(|relation| relation.relative_residual())
            .fold(0.0, f64::max);
        assert!(worst > TOLERANCE, "{name} may leak unnoticed");
    }
}

#[test]
fn the_fixture_is_made_again_from_its_seed() {
    let directory = tempfile::tempdir().expect("a directory");
    demo::make_fixture(directory.path()).expect("the fixture is written");

    let made = std::fs::read_to_string(directory.path().join("batches.ndjson")).expect("made");
    let kept = std::fs::read_to_string(fixture("batches.ndjson")).expect("kept");
    for (made, kept) in made.lines().zip(kept.lines()) {
        assert_eq!(made, kept);
    }
    assert_eq!(made.len(), kept.len());

    // The truth is kept to twelve digits, the last of which may hang on the
    // processor's way to take a logarithm.
    let made = truth_lines(&directory.path().join("truth.ndjson.zst"));
    let kept = truth_lines(&fixture("truth.ndjson.zst"));
    assert_eq!(made.len(), kept.len());
    for (made, kept) in made.iter().zip(&kept) {
        assert_same(made, kept, "");
    }
}

fn truth_lines(path: &Path) -> Vec<serde_json::Value> {
    let file = std::fs::File::open(path).expect("the truth is there");
    let mut text = String::new();
    zstd::Decoder::new(file)
        .and_then(|mut decoder| decoder.read_to_string(&mut text))
        .expect("it decompresses");
    text.lines()
        .map(|line| serde_json::from_str(line).expect("JSON"))
        .collect()
}

fn assert_same(a: &serde_json::Value, b: &serde_json::Value, place: &str) {
    use serde_json::Value::{Number, Object};
    match (a, b) {
        (Object(a), Object(b)) => {
            let names = |object: &serde_json::Map<_, _>| {
                object.keys().cloned().collect::<BTreeSet<String>>()
            };
            assert_eq!(names(a), names(b), "fields of {place}");
            for (key, value) in a {
                assert_same(value, &b[key], &format!("{place}/{key}"));
            }
        }
        (Number(a), Number(b)) => {
            let (a, b) = (a.as_f64().expect("f64"), b.as_f64().expect("f64"));
            assert!(
                (a - b).abs() <= 1e-10 * a.abs().max(b.abs()),
                "{place}: {a} and {b}"
            );
        }
        _ => assert_eq!(a, b, "{place}"),
    }
}

/// (reading - truth) / sigma of every good reading, by tag.
fn deviations(plant: &Plant, day: &[(Batch, Truth)]) -> BTreeMap<String, Vec<f64>> {
    let mut pool: BTreeMap<String, Vec<f64>> = BTreeMap::new();
    for (batch, truth) in day {
        for (tag, reading) in plant.tags.iter().zip(&batch.readings) {
            assert_eq!(tag.name, reading.tag);
            let Some(value) = reading
                .value
                .filter(|_| reading.quality.grade == Grade::Good)
            else {
                continue;
            };
            let exact = tag
                .unit
                .from_internal(truth.value(plant, tag.quantity).expect("a value"));
            let sigma = tag.uncertainty.sigma(value).expect("a sigma").get();
            pool.entry(tag.name.clone())
                .or_default()
                .push((value - exact) / sigma);
        }
    }
    pool
}

#[test]
fn noise_has_the_stated_sigma() {
    let plant = plant();
    let mut pool = deviations(&plant, &day(&plant));
    let drifting = pool.remove(DRIFTING_TAG).expect("the drifting tag is read");
    assert_eq!(pool.len() + 1, plant.tags.len(), "every tag is read");

    let within = |deviations: &[f64], name: &str, errors: f64| {
        let n = deviations.len() as f64;
        let mean = deviations.iter().sum::<f64>() / n;
        let square = deviations.iter().map(|z| z * z).sum::<f64>();
        assert!(mean.abs() < errors / n.sqrt(), "{name}: mean {mean}");
        assert!(
            (square - n).abs() < errors * (2.0 * n).sqrt(),
            "{name}: {square} of {n}"
        );
    };
    // Among 88 tags chance alone makes one of 2.5 standard errors, and of 4.5 none.
    for (name, deviations) in &pool {
        within(deviations, name, 4.5);
    }
    let all: Vec<f64> = pool.into_values().flatten().collect();
    within(&all, "all tags", 3.5);

    let before_noon = &drifting[..120];
    within(before_noon, "the drifting tag before it drifts", 4.5);
    let last_hour = &drifting[276..];
    let bias = last_hour.iter().sum::<f64>() / last_hour.len() as f64;
    assert!(bias > 5.0, "drift of {bias} sigma in the last hour");
}

#[test]
fn the_heater_fouls_and_its_instruments_stay_right() {
    let plant = plant();
    let day = day(&plant);
    let difference = |truth: &Truth| {
        let shell = truth.streams["bleed-6"].pressure;
        fluid::saturation(shell).expect("in range").t - truth.streams["feed-6"].temperature
    };
    assert_eq!(FOULING_HEATER, "heater-6");
    // 06:00 and 24:00 pass at nearly the same load.
    let (morning, night) = (difference(&day[60].1), difference(&day[287].1));
    assert!(night - morning > 5.0, "from {morning} K to {night} K");
}

#[test]
fn normal_readings_are_those_of_a_clean_unit_at_95_per_cent() {
    let plant = plant();
    let truth = demo::truth(&Conditions::at_load(0.95), &Assumed::stated(&plant)).expect("settles");
    for tag in &plant.tags {
        let exact = tag
            .unit
            .from_internal(truth.value(&plant, tag.quantity).expect("a value"));
        let normal = tag
            .normal
            .expect("every demo tag states its normal reading");
        let sigma = tag.uncertainty.sigma(exact).expect("a sigma").get();
        assert!(
            (normal - exact).abs() < sigma,
            "{}: {normal}, really {exact}",
            tag.name
        );
    }
}
