//! Convergence where it is hard: flashing valves, saturated water with a
//! thermometer, missing tags, failed instruments. All plants are invented.

use counterpoise::demo::{self, Assumed, Conditions};
use counterpoise::fluid;
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{self, Batch, Format, Grade, Plant, Quality, Reading};
use counterpoise::report::{Phase, Report, Verdict};
use rand::seq::index::sample;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::StandardNormal;
use time::macros::datetime;

/// Liquid that flashes in a valve, with a thermometer on either side.
const FLASH: &str = r#"
plant = "flash"
[streams]
a = { fluid = "water", to = "v" }
b = { fluid = "water", from = "v" }
[equipment]
v = { kind = "valve" }
[tags]
P1 = { measures = "pressure", of = "a", unit = "bar", uncertainty = { absolute = "0.1 bar" } }
T1 = { measures = "temperature", of = "a", unit = "Cel", uncertainty = { absolute = "1 K" } }
F1 = { measures = "mass-flow", of = "b", unit = "kg/s", uncertainty = { absolute = "1 kg/s" } }
P2 = { measures = "pressure", of = "b", unit = "bar", uncertainty = { absolute = "0.1 bar" } }
T2 = { measures = "temperature", of = "b", unit = "Cel", uncertainty = { absolute = "1 K" } }
"#;

/// A heater whose drain flashes in a valve.
const DRAIN: &str = r#"
plant = "drain"
[streams]
st = { fluid = "water", to = "h.steam" }
dr = { fluid = "water", from = "h.drain", to = "v" }
dv = { fluid = "water", from = "v" }
f1 = { fluid = "water", to = "h.tube" }
f2 = { fluid = "water", from = "h.tube" }
[equipment]
h = { kind = "closed-heater", drain-outlet = "saturated" }
v = { kind = "valve" }
[tags]
PT1 = { measures = "pressure", of = "st", unit = "bar", uncertainty = { absolute = "0.1 bar" } }
TT1 = { measures = "temperature", of = "st", unit = "Cel", uncertainty = { absolute = "2 K" } }
FT1 = { measures = "mass-flow", of = "f1", unit = "kg/s", uncertainty = { of-reading = "1 %" } }
FT2 = { measures = "mass-flow", of = "st", unit = "kg/s", uncertainty = { of-reading = "2 %" } }
TT2 = { measures = "temperature", of = "f1", unit = "Cel", uncertainty = { absolute = "1 K" } }
TT3 = { measures = "temperature", of = "f2", unit = "Cel", uncertainty = { absolute = "1 K" } }
PT2 = { measures = "pressure", of = "f2", unit = "bar", uncertainty = { absolute = "1 bar" } }
PT3 = { measures = "pressure", of = "dv", unit = "bar", uncertainty = { absolute = "0.1 bar" } }
TT4 = { measures = "temperature", of = "dv", unit = "Cel", uncertainty = { absolute = "1 K" } }
TT5 = { measures = "temperature", of = "dr", unit = "Cel", uncertainty = { absolute = "1 K" } }
[assumptions]
dp = { value-of = "pressure-drop", of = "h.tube", value = "1 bar", uncertainty = { absolute = "0.5 bar" } }
"#;

fn compiled(text: &str) -> Compiled {
    Compiled::new(plant::read(text, Format::Toml).unwrap().plant, 1)
}

fn batch(readings: Vec<Reading>) -> Batch {
    Batch {
        name: "b".to_owned(),
        start: datetime!(2026-03-17 0:00 UTC),
        end: datetime!(2026-03-17 0:05 UTC),
        readings,
        steadiness: None,
    }
}

fn reading(tag: &str, value: f64) -> Reading {
    let quality = Quality {
        grade: Grade::Good,
        code: None,
    };
    Reading {
        tag: tag.to_owned(),
        value: Some(value),
        quality,
        averaged: None,
    }
}

/// True values in the tags' units, read with noise of the stated sigma.
fn noisy(plant: &Plant, truth: &[(&str, f64)], random: &mut ChaCha8Rng) -> Batch {
    let read = |&(tag, value): &(&str, f64)| {
        let stated = plant.tags.iter().find(|t| t.name == tag).unwrap();
        let sigma = stated.uncertainty.sigma(value).unwrap().get();
        let z: f64 = random.sample(StandardNormal);
        reading(tag, value + sigma * z)
    };
    batch(truth.iter().map(read).collect())
}

fn celsius(t: f64) -> f64 {
    t + 273.15
}

/// Share of batches above the critical value, every one of them converged and
/// none absurd.
fn rejected(reports: &[Report], degrees_of_freedom: usize) -> f64 {
    let mut above = 0;
    for report in reports {
        let test = report
            .global_test
            .unwrap_or_else(|| panic!("{:?}", report.reason));
        assert_eq!(test.degrees_of_freedom, degrees_of_freedom);
        assert!(
            test.p_value.unwrap() > 1e-6,
            "{}",
            serde_json::to_string(&report).unwrap()
        );
        above += usize::from(report.verdict == Verdict::Inconsistent);
    }
    above as f64 / reports.len() as f64
}

#[test]
fn liquid_that_flashes_in_a_valve_is_found() {
    let compiled = compiled(FLASH);
    for (n, t) in [170.0, 178.0].into_iter().enumerate() {
        let mut random = ChaCha8Rng::seed_from_u64(n as u64);
        let truth = [
            ("P1", 10.0),
            ("T1", t),
            ("F1", 20.0),
            ("P2", 1.0),
            ("T2", 99.606),
        ];
        let reports: Vec<Report> = (0..400)
            .map(|_| reconcile(&compiled, &noisy(compiled.plant(), &truth, &mut random)))
            .collect();
        let share = rejected(&reports, 1);
        println!("flash from {t} Cel: {:.1} % rejected", 100.0 * share);
        assert!(share < 0.09, "{share}");
        // A pressure that reads three sigma low can make superheated steam fit
        // better than the flash it is: the lower objective is kept.
        let flashed = |report: &&Report| {
            let b = report.streams["b"].phase;
            matches!(b, Some(Phase::Wet | Phase::Open))
        };
        let right = reports.iter().filter(flashed).count();
        println!(
            "flash from {t} Cel: {right} of {} in the right phase",
            reports.len()
        );
        assert!(right >= 396, "{right}");
    }
}

/// At the saturation line itself the water of 179.88 Cel may be liquid or just
/// flashing, and nothing tells how much: every batch must converge all the same.
#[test]
fn saturated_water_ahead_of_a_valve_converges() {
    let compiled = compiled(FLASH);
    let mut random = ChaCha8Rng::seed_from_u64(3);
    let truth = [
        ("P1", 10.0),
        ("T1", 179.88),
        ("F1", 20.0),
        ("P2", 1.0),
        ("T2", 99.606),
    ];
    for _ in 0..400 {
        let report = reconcile(&compiled, &noisy(compiled.plant(), &truth, &mut random));
        assert_ne!(report.verdict, Verdict::NotConverged, "{:?}", report.reason);
        let p_value = report.global_test.unwrap().p_value.unwrap();
        assert!(
            p_value > 1e-6,
            "{}",
            serde_json::to_string(&report).unwrap()
        );
    }
}

#[test]
fn the_drain_of_a_heater_that_flashes_in_a_valve_is_found() {
    let compiled = compiled(DRAIN);
    let mut random = ChaCha8Rng::seed_from_u64(5);
    let steam = fluid::from_pt(0.5, celsius(200.0)).unwrap();
    let drain = fluid::saturation(0.5).unwrap();
    let flashed = fluid::saturation(0.1).unwrap();
    let mut reports = Vec::new();
    for _ in 0..300 {
        let z: f64 = random.sample(StandardNormal);
        let drop = 1.0 + 0.5 / 1.959_964 * z;
        let cold = fluid::from_pt(2.0 + 0.1 * drop, celsius(120.0)).unwrap();
        let warm = fluid::from_pt(2.0, celsius(140.0)).unwrap();
        let steam_flow = 100.0 * (warm.h - cold.h) / (steam.h - drain.liquid.h);
        let truth = [
            ("PT1", 5.0),
            ("TT1", 200.0),
            ("FT1", 100.0),
            ("FT2", steam_flow),
            ("TT2", 120.0),
            ("TT3", 140.0),
            ("PT2", 20.0),
            ("PT3", 1.0),
            ("TT4", flashed.t - 273.15),
            ("TT5", drain.t - 273.15),
        ];
        reports.push(reconcile(
            &compiled,
            &noisy(compiled.plant(), &truth, &mut random),
        ));
    }
    let share = rejected(&reports, 3);
    println!("flashing drain: {:.1} % rejected", 100.0 * share);
    assert!((0.02..0.09).contains(&share), "{share}");
    for report in &reports {
        assert_eq!(report.streams["dv"].phase, Some(Phase::Wet));
    }
}

/// A thermometer that has failed makes the batch inconsistent, and not
/// unsolved.
#[test]
fn a_failed_thermometer_is_inconsistent_and_not_unsolved() {
    let compiled = compiled(FLASH);
    let at = |t1: f64, t2: f64| {
        let readings = [
            ("P1", 10.0),
            ("T1", t1),
            ("F1", 20.0),
            ("P2", 1.0),
            ("T2", t2),
        ];
        let readings = readings.map(|(tag, value)| reading(tag, value));
        reconcile(&compiled, &batch(readings.to_vec()))
    };
    for (t1, t2) in [(300.0, 99.0), (170.0, 140.0), (60.0, 99.0)] {
        let report = at(t1, t2);
        assert_eq!(
            report.verdict,
            Verdict::Inconsistent,
            "{t1} {t2} {:?}",
            report.reason
        );
    }
}

/// Readings of the demo plant at a load, assumptions drawn.
fn demo_batch(plant: &Plant, random: &mut ChaCha8Rng) -> Vec<Reading> {
    let load = random.random_range(0.55..1.0);
    let assumed = Assumed::drawn(plant, random);
    let truth = demo::truth(&Conditions::at_load(load), &assumed).unwrap();
    demo::readings(plant, &truth, random, |_| None).unwrap()
}

#[test]
fn the_demo_plant_does_without_any_one_tag() {
    let compiled = Compiled::new(demo::plant().unwrap(), 1);
    let mut random = ChaCha8Rng::seed_from_u64(17);
    let mut unsolved = Vec::new();
    for missing in 0..compiled.plant().tags.len() {
        let mut readings = demo_batch(compiled.plant(), &mut random);
        let tag = readings.remove(missing).tag;
        let report = reconcile(&compiled, &batch(readings));
        match report.global_test {
            None => unsolved.push((tag, report.reason)),
            Some(test) => assert!(test.p_value.unwrap() > 1e-6, "{tag}: {}", test.statistic),
        }
    }
    assert!(unsolved.is_empty(), "{unsolved:?}");
}

/// Ten tags missing at once leave little to start from. A known limit: about one
/// batch in six is then unsolved and one in ten ends in a false minimum. What
/// this holds is that a false minimum never passes for consistent, and that
/// both stay as rare as they are.
#[test]
fn without_many_tags_nothing_wrong_is_called_consistent() {
    let compiled = Compiled::new(demo::plant().unwrap(), 1);
    let mut random = ChaCha8Rng::seed_from_u64(19);
    let (mut solved, mut unsolved, mut false_minima) = (0, 0, 0);
    for _ in 0..60 {
        let mut readings = demo_batch(compiled.plant(), &mut random);
        let mut missing = sample(&mut random, readings.len(), 10).into_vec();
        missing.sort_unstable_by(|a, b| b.cmp(a));
        for tag in missing {
            readings.remove(tag);
        }
        let report = reconcile(&compiled, &batch(readings));
        match report.global_test.and_then(|test| test.p_value) {
            None => {
                assert!(report.reason.is_some() && report.streams.is_empty());
                unsolved += 1;
            }
            Some(p_value) if p_value < 1e-6 => {
                assert_eq!(report.verdict, Verdict::Inconsistent);
                false_minima += 1;
            }
            Some(_) => solved += 1,
        }
    }
    println!("ten tags missing: {solved} solved, {unsolved} unsolved, {false_minima} false minima");
    assert!(
        unsolved <= 10 && false_minima <= 6,
        "{unsolved} {false_minima}"
    );
}
