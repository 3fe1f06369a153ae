//! Both sides of the saturation line: a temperature 1 K above it, and steam of
//! 2 % moisture whose temperature says nothing, told apart by what a heater
//! makes of them.

use super::workbench::{HEATER, batch, read, run, statistic};
use counterpoise::fluid;
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{Assumption, Batch, Plant, Quantity, StreamId, Uncertainty, Unit};
use counterpoise::report::Phase;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

const SEEDS: u64 = 200;

/// Readings of the heater with steam of this enthalpy at 2 bar, with noise.
fn noisy(plant: &Plant, enthalpy: f64, seed: u64) -> Batch {
    let steam = fluid::from_ph(0.2, enthalpy).expect("steam");
    let drain = fluid::saturation(0.2).expect("saturation");
    let cold = fluid::from_pt(1.5, 273.15 + 60.0).expect("water");
    let (flow, feed) = (10.0, 110.0);
    let warm =
        fluid::from_ph(1.4, cold.h + flow * (steam.h - drain.liquid.h) / feed).expect("water");
    let exact = [
        ("F-STEAM", 3.6 * flow),
        ("P-STEAM", 2.0),
        ("T-STEAM", steam.t - 273.15),
        ("F-DRAIN", 3.6 * flow),
        ("T-DRAIN", drain.t - 273.15),
        ("F-COLD", 3.6 * feed),
        ("P-COLD", 15.0),
        ("T-COLD", 60.0),
        ("F-WARM", 3.6 * feed),
        ("P-WARM", 14.0),
        ("T-WARM", warm.t - 273.15),
    ];
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    batch(exact.map(|(name, value)| {
        let tag = plant
            .tags
            .iter()
            .find(|tag| tag.name == name)
            .expect("a tag");
        let z: f64 = StandardNormal.sample(&mut rng);
        (
            name,
            value + z * tag.uncertainty.sigma(value).expect("a sigma").get(),
        )
    }))
}

/// How often the steam came out as `right`, as open, and as anything else.
fn count(enthalpy: f64, right: Phase) -> [u64; 3] {
    let plant = read(HEATER);
    let compiled = Compiled::new(plant.clone(), 1);
    let mut counts = [0; 3];
    for seed in 0..SEEDS {
        let report = reconcile(&compiled, &noisy(&plant, enthalpy, seed));
        let phase = report.streams["steam"].phase.expect("observable");
        counts[if phase == right {
            0
        } else if phase == Phase::Open {
            1
        } else {
            2
        }] += 1;
        let said = report
            .remarks
            .iter()
            .any(|r| r.contains("steam: the readings fit both sides"));
        assert_eq!(said, phase == Phase::Open, "{:?}", report.remarks);
    }
    counts
}

/// A side is named only where the other fits significantly worse, at 95 %: a
/// wrong one in at most 5 of 100 cases, plus four standard errors of the count.
const MOST_WRONG: u64 = 22;

#[test]
fn steam_one_kelvin_above_saturation_is_vapour_or_open() {
    let line = fluid::saturation(0.2).expect("saturation");
    let steam = fluid::from_pt(0.2, line.t + 1.0).expect("steam");
    let [right, open, wrong] = count(steam.h, Phase::Vapour);
    println!("1 K above saturation: {right} vapour, {open} open, {wrong} wet");
    assert!(right > 0 && wrong <= MOST_WRONG, "{right}, {open}, {wrong}");
}

#[test]
fn steam_of_two_per_cent_moisture_is_wet_or_open() {
    let steam = fluid::from_px(0.2, 0.98).expect("steam");
    let [right, open, wrong] = count(steam.h, Phase::Wet);
    println!("x = 0.98: {right} wet, {open} open, {wrong} vapour");
    assert!(
        right > SEEDS / 2 && wrong <= MOST_WRONG,
        "{right}, {open}, {wrong}"
    );
}

/// The lowest objective over both sides, found by holding the enthalpy at every
/// place in turn, is the objective that the report stands at.
#[test]
fn no_enthalpy_fits_better_than_the_one_reported() {
    let plant = read(HEATER);
    for (seed, enthalpy) in
        (0..12).flat_map(|seed| [2650.0, 2700.0, 2709.0, 2725.0].map(|h| (seed, h)))
    {
        let readings = noisy(&plant, enthalpy, seed);
        let report = run(&plant, &readings);
        let found = report.streams["steam"].enthalpy.value.expect("observable");
        for step in -30..=30 {
            let held = found + 4.0 * f64::from(step);
            let mut there = plant.clone();
            there.assumptions.push(Assumption {
                name: "held".to_owned(),
                quantity: Quantity::Enthalpy(StreamId(0)),
                unit: Unit {
                    symbol: "kJ/kg".to_owned(),
                    factor: 1.0,
                    offset: 0.0,
                },
                value: held,
                in_service_when: None,
                uncertainty: Uncertainty {
                    constant: 1e-3,
                    ..Uncertainty::default()
                },
            });
            let other = statistic(&run(&there, &readings));
            let lowest = statistic(&report);
            assert!(
                other > lowest - 1e-6 * lowest.max(1.0),
                "seed {seed}, {enthalpy}: {other} at {held}, {lowest} at {found}"
            );
        }
    }
}
