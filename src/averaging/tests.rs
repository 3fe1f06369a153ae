//! Means, flags and verdicts of samples made for the purpose.

mod flags;
mod means;
mod plant;
mod reference;
mod simulation;

use super::*;
use crate::plant::{Averaged, Flag, Format, Grade, Quality, Reading, Sample, TagAveraging, read};
use time::macros::datetime;

const START: OffsetDateTime = datetime!(2026-03-17 10:00 UTC);
const LENGTH: f64 = 300.0;

const FILE: &str = r#"
plant = "brook"
title = "Two tags and a pump"

[streams]
in  = { fluid = "water", to = "pump" }
out = { fluid = "water", from = "pump" }

[equipment]
pump = { kind = "pump" }

[tags]
A = { measures = "mass-flow", of = "in", unit = "t/h", range = [0, 400], uncertainty = { absolute = "2 t/h" } }
B = { measures = "mass-flow", of = "out", unit = "t/h", uncertainty = { absolute = "2 t/h" } }
"#;

fn plant() -> Plant {
    read(FILE, Format::Toml).unwrap().plant
}

fn usual() -> TagAveraging {
    TagAveraging::default()
}

const GOOD: Quality = Quality {
    grade: Grade::Good,
    code: None,
};

fn sample(at: f64, value: f64) -> Sample {
    Sample {
        time: START + Duration::seconds_f64(at),
        value: Some(value),
        quality: GOOD,
    }
}

fn graded(at: f64, value: f64, grade: Grade, code: Option<u32>) -> Sample {
    Sample {
        quality: Quality { grade, code },
        ..sample(at, value)
    }
}

fn samples(pairs: &[(f64, f64)]) -> Vec<Sample> {
    pairs.iter().map(|&(at, value)| sample(at, value)).collect()
}

/// Values every so many seconds from the start of the period on.
fn every(seconds: f64, values: &[f64]) -> Vec<Sample> {
    let each = values.iter().enumerate();
    each.map(|(i, &value)| sample(i as f64 * seconds, value))
        .collect()
}

/// The reading of tag A.
fn average(settings: TagAveraging, list: &[Sample]) -> Reading {
    let mut plant = plant();
    plant.averaging.usual = settings;
    let lists = HashMap::from([("A", list)]);
    let end = START + Duration::seconds_f64(LENGTH);
    let mut batch = batch(&plant, START, end, "b", &lists);
    assert_eq!(batch.readings.len(), 1);
    batch.readings.remove(0)
}

fn made(settings: TagAveraging, list: &[Sample]) -> Averaged {
    average(settings, list).averaged.unwrap()
}
