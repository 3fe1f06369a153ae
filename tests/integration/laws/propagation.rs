//! Uncertainties are those of noise that is carried through: every observation
//! in turn is moved a little, the batch is solved again, and the squares of what
//! each quantity does add up to its variance. This needs no factor, no inverse
//! and no rank, and so checks all three.

use super::workbench::{demo_truth, levelled, near_truth, references, run, run_like};
use counterpoise::plant::{Batch, COVERAGE_FACTOR, Plant};
use counterpoise::report::{Class, Report};

/// Half-widths agree to this, relative: the accuracy promised for uncertainties.
const AGREEMENT: f64 = 5e-3;
/// Size of a move, in sigma.
const MOVE: f64 = 0.02;

/// Every quantity that has an uncertainty of its own: name, value, half-width.
fn quantities(report: &Report) -> Vec<(String, f64, f64)> {
    let mut all = Vec::new();
    for (name, s) in &report.streams {
        let parts = [
            ("mass flow", &s.mass_flow),
            ("pressure", &s.pressure),
            ("temperature", &s.temperature),
            ("enthalpy", &s.enthalpy),
        ];
        all.extend(parts.map(|(what, q)| (format!("{name} {what}"), q.value, q.uncertainty)));
    }
    for (name, e) in &report.equipment {
        for (what, q) in [
            ("heat", &e.heat),
            ("work", &e.work),
            ("power", &e.power),
            ("loss", &e.loss),
            ("holdup change", &e.holdup_change),
        ] {
            if let Some(q) = q {
                all.push((format!("{name} {what}"), q.value, q.uncertainty));
            }
        }
    }
    for (name, tag) in report.tags.iter().chain(&report.assumptions) {
        all.push((
            format!("tag {name}"),
            tag.reconciled,
            tag.uncertainty_reconciled,
        ));
    }
    // What is unobservable has no value, and what is exact no uncertainty.
    all.into_iter()
        .filter_map(|(name, value, width)| Some((name, value?, width.filter(|w| *w > 0.0)?)))
        .collect()
}

/// The report with the observation `name` moved, in its own unit.
fn moved(base: &Report, plant: &Plant, batch: &Batch, name: &str, by: f64) -> Report {
    let (mut plant, mut batch) = (plant.clone(), batch.clone());
    for assumption in plant.assumptions.iter_mut().filter(|a| a.name == name) {
        assumption.value += by;
    }
    for reading in batch.readings.iter_mut().filter(|r| r.tag == name) {
        reading.value = reading.value.map(|value| value + by);
    }
    run_like(base, &plant, &batch)
}

fn assert_propagated(plant: &Plant, batch: &Batch) {
    let base = run(plant, batch);
    let stated = quantities(&base);
    let mut variances = vec![0.0; stated.len()];
    for (name, tag) in base.tags.iter().chain(&base.assumptions) {
        if tag.class == Class::Unused {
            continue;
        }
        let step = MOVE * tag.uncertainty_measured.expect("in use") / COVERAGE_FACTOR;
        let (up, down) = (
            quantities(&moved(&base, plant, batch, name, step)),
            quantities(&moved(&base, plant, batch, name, -step)),
        );
        assert_eq!(
            (up.len(), down.len()),
            (stated.len(), stated.len()),
            "{name}"
        );
        for (variance, (up, down)) in variances.iter_mut().zip(up.iter().zip(&down)) {
            *variance += ((up.1 - down.1) / (2.0 * MOVE)).powi(2);
        }
    }
    let mut wrong = Vec::new();
    let mut worst: f64 = 0.0;
    for ((name, _, width), variance) in stated.iter().zip(variances) {
        let propagated = COVERAGE_FACTOR * variance.sqrt();
        let difference = width / propagated - 1.0;
        worst = worst.max(difference.abs());
        if difference.is_nan() || difference.abs() >= AGREEMENT {
            wrong.push(format!("{name}: {width}, propagated {propagated}"));
        }
    }
    println!(
        "{} {}: {} uncertainties agree to {worst:e}",
        plant.name,
        batch.name,
        stated.len()
    );
    assert!(wrong.is_empty(), "{}:\n{}", plant.name, wrong.join("\n"));
}

#[test]
fn uncertainties_of_the_demo_are_propagated_noise() {
    let (plant, truth) = demo_truth(0.85);
    assert_propagated(&plant, &near_truth(&plant, &truth, 0.0, 0));
}

/// At reconciled values: there the second order has no part.
#[test]
fn uncertainties_of_the_reference_plants_are_propagated_noise() {
    for (plant, batches) in references() {
        let (plant, batch) = levelled(&plant, &batches[0]);
        assert_propagated(&plant, &batch);
    }
}
