//! Plants, batches and comparisons that the laws are tested with.

use counterpoise::demo::{self, Assumed, Conditions, LineUp, Truth};
use counterpoise::ingest;
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{self, Batch, Format, Grade, Plant, Quality, Reading};
use counterpoise::report::{Class, Imbalance, QuantityReport, Report, TagReport};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use time::macros::datetime;

/// A heater with every stream measured: 4 degrees of freedom.
pub const HEATER: &str = r#"
plant = "small-heater"
title = "One heater (invented)"

[streams]
steam = { fluid = "water", to = "heater.steam" }
drain = { fluid = "water", from = "heater.drain" }
cold  = { fluid = "water", to = "heater.tube" }
warm  = { fluid = "water", from = "heater.tube" }

[equipment]
heater = { kind = "closed-heater", drain-outlet = "saturated" }

[tags]
F-STEAM = { measures = "mass-flow",   of = "steam", unit = "t/h", uncertainty = { of-reading = "1 %" } }
P-STEAM = { measures = "pressure",    of = "steam", unit = "bar", range = [0, 4], uncertainty = { of-range = "0.25 %" } }
T-STEAM = { measures = "temperature", of = "steam", unit = "Cel", uncertainty = { absolute = "1 K" } }
F-DRAIN = { measures = "mass-flow",   of = "drain", unit = "t/h", uncertainty = { of-reading = "1 %" } }
T-DRAIN = { measures = "temperature", of = "drain", unit = "Cel", uncertainty = { absolute = "1 K" } }
F-COLD  = { measures = "mass-flow",   of = "cold",  unit = "t/h", uncertainty = { of-reading = "0.5 %" } }
P-COLD  = { measures = "pressure",    of = "cold",  unit = "bar", uncertainty = { absolute = "0.2 bar" } }
T-COLD  = { measures = "temperature", of = "cold",  unit = "Cel", uncertainty = { absolute = "0.3 K" } }
F-WARM  = { measures = "mass-flow",   of = "warm",  unit = "t/h", uncertainty = { of-reading = "0.5 %" } }
P-WARM  = { measures = "pressure",    of = "warm",  unit = "bar", uncertainty = { absolute = "0.2 bar" } }
T-WARM  = { measures = "temperature", of = "warm",  unit = "Cel", uncertainty = { absolute = "0.3 K" } }
"#;

/// A reference plant: reheat, three heaters, an uncertain barometer.
pub const FERROW_BRIDGE: &str = include_str!("../../reference/ferrow-bridge.toml");

/// Parses a plant file that has no faults.
pub fn read(file: &str) -> Plant {
    match plant::read(file, Format::Toml) {
        Ok(file) => file.plant,
        Err(faults) => panic!("{faults}"),
    }
}

/// The plant file without the lines that begin with one of `names`.
pub fn without(file: &str, names: &[&str]) -> String {
    let kept = file.lines().filter(|line| {
        let name = line.split(['=', ' ']).next().unwrap_or_default();
        !names.contains(&name)
    });
    kept.collect::<Vec<_>>().join("\n")
}

/// A batch of good readings.
pub fn batch<N: Into<String>>(readings: impl IntoIterator<Item = (N, f64)>) -> Batch {
    let good = Quality {
        grade: Grade::Good,
        code: None,
    };
    let readings = readings.into_iter().map(|(tag, value)| Reading {
        tag: tag.into(),
        value: Some(value),
        quality: good,
        averaged: None,
    });
    Batch {
        name: "a batch".to_owned(),
        start: datetime!(2026-03-18 00:00 UTC),
        end: datetime!(2026-03-18 00:05 UTC),
        readings: readings.collect(),
        steadiness: None,
    }
}

/// The reading of a tag in a batch.
pub fn reading<'a>(batch: &'a mut Batch, tag: &str) -> &'a mut Reading {
    let found = batch.readings.iter_mut().find(|r| r.tag == tag);
    found.unwrap_or_else(|| panic!("no reading of {tag}"))
}

pub fn run(plant: &Plant, batch: &Batch) -> Report {
    let report = reconcile(&Compiled::new(plant.clone(), 1), batch);
    assert!(
        report.global_test.is_some(),
        "{}: {:?}",
        plant.name,
        report.reason
    );
    report
}

/// The same for a plant of the same structure as that of `known`, whose critical
/// value then needs no second simulation.
pub fn run_like(known: &Report, plant: &Plant, batch: &Batch) -> Report {
    let compiled = Compiled::new(plant.clone(), 1);
    compiled.recall(known.single_test.clone());
    let report = reconcile(&compiled, batch);
    assert!(
        report.global_test.is_some(),
        "{}: {:?}",
        plant.name,
        report.reason
    );
    report
}

pub fn statistic(report: &Report) -> f64 {
    report.global_test.expect("converged").statistic
}

pub fn degrees_of_freedom(report: &Report) -> usize {
    report.global_test.expect("converged").degrees_of_freedom
}

/// The demonstration plant with every assumption at its stated value, and its truth.
pub fn demo_truth(load: f64) -> (Plant, Truth) {
    let plant = demo::lined_up(LineUp::default()).expect("no faults");
    let truth = demo::truth(&Conditions::at_load(load), &Assumed::stated(&plant)).expect("settles");
    (plant, truth)
}

/// What perfect instruments read, plus `scale` sigma times a normal number,
/// unrounded.
pub fn near_truth(plant: &Plant, truth: &Truth, scale: f64, seed: u64) -> Batch {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    batch(plant.tags.iter().map(|tag| {
        let exact = tag
            .unit
            .from_internal(truth.value(plant, tag.quantity).expect("a value"));
        let sigma = tag.uncertainty.sigma(exact).expect("a sigma").get();
        let z: f64 = StandardNormal.sample(&mut rng);
        (tag.name.clone(), exact + scale * sigma * z)
    }))
}

/// The plants of the independent reference with all their batches.
pub fn references() -> Vec<(Plant, Vec<Batch>)> {
    let files = [
        (
            include_str!("../../reference/hazel-quay.toml"),
            include_str!("../../reference/hazel-quay.batches.ndjson"),
        ),
        (
            FERROW_BRIDGE,
            include_str!("../../reference/ferrow-bridge.batches.ndjson"),
        ),
        (
            include_str!("../../reference/corrow-mill.toml"),
            include_str!("../../reference/corrow-mill.batches.ndjson"),
        ),
    ];
    let now = datetime!(2090-01-01 0:00 UTC);
    let parse = |line: &str| ingest::parse(line.as_bytes(), now).expect("a batch").batch;
    files
        .map(|(plant, batches)| (read(plant), batches.lines().map(parse).collect()))
        .into()
}

/// The demonstration plant with noise and drawn assumptions, and every batch
/// of the reference plants.
pub fn everyday() -> Vec<(Plant, Batch)> {
    let plant = demo::lined_up(LineUp::default()).expect("no faults");
    let assumed = Assumed::drawn(&plant, &mut ChaCha8Rng::seed_from_u64(5));
    let truth = demo::truth(&Conditions::at_load(0.8), &assumed).expect("settles");
    let noisy = near_truth(&plant, &truth, 1.0, 6);
    let mut all = vec![(plant, noisy)];
    for (plant, batches) in references() {
        all.extend(batches.into_iter().map(|batch| (plant.clone(), batch)));
    }
    all
}

/// The plant and batch with reconciled values in the place of readings and of
/// assumed values: exact, and at a solution.
pub fn levelled(plant: &Plant, batch: &Batch) -> (Plant, Batch) {
    let report = run(plant, batch);
    let (mut plant, mut batch) = (plant.clone(), batch.clone());
    for assumption in &mut plant.assumptions {
        assumption.value = report.assumptions[&assumption.name]
            .reconciled
            .expect("in use");
    }
    for reading in &mut batch.readings {
        if let Some(tag) = report.tags.get(&reading.tag)
            && tag.class != Class::Unused
        {
            reading.value = tag.reconciled;
        }
    }
    (plant, batch)
}

/// The largest distances between two reports, and where they are.
#[derive(Debug, Default)]
pub struct Distance {
    /// Of estimates, relative to their size, or to their uncertainty where that
    /// is larger.
    pub values: (f64, String),
    /// Of uncertainties, relative; of redundancies; of imbalances, which are
    /// quotients with a variance, in their uncertainty.
    pub spreads: (f64, String),
}

impl Distance {
    /// What both reports name is compared. Classes, phases and what is null
    /// have to be the same.
    pub fn between(a: &Report, b: &Report) -> Distance {
        let mut distance = Distance::default();
        let (one, other) = (statistic(a), statistic(b));
        distance.value("statistic", Some(one), Some(other), one.abs().max(1.0));
        for (part, a, b) in [
            ("tag", &a.tags, &b.tags),
            ("assumption", &a.assumptions, &b.assumptions),
        ] {
            for (name, a) in a {
                if let Some(b) = b.get(name) {
                    distance.tag(&format!("{part} {name}"), a, b);
                }
            }
        }
        for (name, a) in &a.streams {
            let Some(b) = b.streams.get(name) else {
                continue;
            };
            assert_eq!(a.phase, b.phase, "phase of {name}");
            distance.quantity(
                &format!("{name} mass flow"),
                Some(&a.mass_flow),
                Some(&b.mass_flow),
            );
            distance.quantity(
                &format!("{name} pressure"),
                Some(&a.pressure),
                Some(&b.pressure),
            );
            distance.quantity(
                &format!("{name} temperature"),
                Some(&a.temperature),
                Some(&b.temperature),
            );
            distance.quantity(
                &format!("{name} enthalpy"),
                Some(&a.enthalpy),
                Some(&b.enthalpy),
            );
        }
        for (name, a) in &a.equipment {
            let Some(b) = b.equipment.get(name) else {
                continue;
            };
            distance.quantity(&format!("{name} heat"), a.heat.as_ref(), b.heat.as_ref());
            distance.quantity(&format!("{name} work"), a.work.as_ref(), b.work.as_ref());
            distance.quantity(&format!("{name} power"), a.power.as_ref(), b.power.as_ref());
            distance.quantity(&format!("{name} loss"), a.loss.as_ref(), b.loss.as_ref());
            let (ours, theirs) = (&a.imbalance, &b.imbalance);
            if let (Some(ours), Some(theirs)) = (&ours.energy, &theirs.energy) {
                distance.imbalance(&format!("{name} energy"), ours, theirs);
            }
            for (side, ours) in &ours.mass {
                distance.imbalance(&format!("{name} {side}"), ours, &theirs.mass[side]);
            }
        }
        distance
    }

    /// Panics where values or spreads differ by more.
    pub fn assert_below(&self, values: f64, spreads: f64, what: &str) {
        println!("{what}: {self:?}");
        assert!(
            self.values.0 < values && self.spreads.0 < spreads,
            "{what}: {self:?}"
        );
    }

    /// Adds an estimate.
    pub fn value(&mut self, at: &str, a: Option<f64>, b: Option<f64>, scale: f64) {
        enlarge(&mut self.values, at, a, b, scale);
    }

    /// Adds an uncertainty or redundancy.
    pub fn spread(&mut self, at: &str, a: Option<f64>, b: Option<f64>, scale: f64) {
        enlarge(&mut self.spreads, at, a, b, scale);
    }

    fn tag(&mut self, at: &str, a: &TagReport, b: &TagReport) {
        assert_eq!(a.class, b.class, "class of {at}");
        assert_eq!(a.reason, b.reason, "reason of {at}");
        let spread = a
            .uncertainty_measured
            .or(a.uncertainty_reconciled)
            .unwrap_or(1.0);
        let scale = spread.max(a.reconciled.unwrap_or(0.0).abs());
        self.value(
            &format!("{at} reconciled"),
            a.reconciled,
            b.reconciled,
            scale,
        );
        self.value(
            &format!("{at} adjustment"),
            a.adjustment,
            b.adjustment,
            scale,
        );
        self.spread(
            &format!("{at} uncertainty"),
            a.uncertainty_reconciled,
            b.uncertainty_reconciled,
            spread,
        );
        self.spread(&format!("{at} redundancy"), a.redundancy, b.redundancy, 1.0);
    }

    fn quantity(&mut self, at: &str, a: Option<&QuantityReport>, b: Option<&QuantityReport>) {
        let (Some(a), Some(b)) = (a, b) else {
            assert_eq!(a, b, "{at}");
            return;
        };
        assert_eq!(a.class, b.class, "class of {at}");
        let (value, spread) = (a.value.unwrap_or(0.0).abs(), a.uncertainty.unwrap_or(0.0));
        self.value(at, a.value, b.value, value.max(spread));
        self.spread(at, a.uncertainty, b.uncertainty, spread);
    }

    fn imbalance(&mut self, at: &str, a: &Imbalance, b: &Imbalance) {
        let spread = a.uncertainty.unwrap_or(1.0);
        // An estimate that is a quotient with a variance below the line.
        self.spread(
            &format!("{at} imbalance"),
            a.value,
            b.value,
            spread.max(a.value.unwrap_or(0.0).abs()),
        );
        self.spread(
            &format!("{at} imbalance"),
            a.uncertainty,
            b.uncertainty,
            spread,
        );
    }
}

fn enlarge(largest: &mut (f64, String), at: &str, a: Option<f64>, b: Option<f64>, scale: f64) {
    let (Some(a), Some(b)) = (a, b) else {
        assert_eq!(a.is_some(), b.is_some(), "{at}: {a:?} and {b:?}");
        return;
    };
    let size = if a == b { 0.0 } else { (a - b).abs() / scale };
    if size > largest.0 || size.is_nan() {
        *largest = (size, format!("{at}: {a} and {b}"));
    }
}
