//! Water and steam held to what others published or computed, and to its own derivatives.

mod derivatives;
mod grid;
mod range;
mod round_trips;
mod tables;

use counterpoise::fluid::{MAX_TEMPERATURE, saturation_t};
use rand::Rng;
use rand_chacha::ChaCha8Rng;

/// Fails unless the two agree to `tolerance`, relative to the expected value.
#[track_caller]
fn near(computed: f64, expected: f64, tolerance: f64, what: &str) {
    let error = (computed - expected).abs();
    assert!(
        error <= tolerance * expected.abs(),
        "{what}: {computed} is not {expected}"
    );
}

/// The temperature in K of the boundary between regions 2 and 3 (R7-97(2012), Eq. 6).
fn boundary_temperature(p: f64) -> f64 {
    0.572_544_598_627_46e3 + ((p - 0.139_188_397_788_70e2) / 0.101_929_700_393_26e-2).sqrt()
}

/// The region of IAPWS-IF97 that contains (p, T), told apart independently of the module.
fn region(p: f64, t: f64) -> u8 {
    if t > MAX_TEMPERATURE {
        5
    } else if t <= 623.15 {
        let saturated = saturation_t(t).expect("below 623.15 K there is a saturation line");
        if p >= saturated.p { 1 } else { 2 }
    } else if p <= 16.529_164_252_6 || t >= boundary_temperature(p) {
        2
    } else {
        3
    }
}

/// Whether (p, T) is so near to an edge where two regions' equations disagree that a state may come back on the
/// other side: up to 0.14 kJ/kg, thus a few hundredths of a kelvin.
fn at_an_edge(p: f64, t: f64) -> bool {
    let near = |edge: f64| (t - edge).abs() < 0.1;
    near(MAX_TEMPERATURE) || p > 16.5 && (near(623.15) || near(boundary_temperature(p)))
}

/// A random (p, T) up to 1073.15 K: over all pressures, evenly in p or in ln p; over region 3; over region 3's
/// liquid and vapour; around the critical point.
fn random_pt(random: &mut ChaCha8Rng) -> (f64, f64) {
    match random.random_range(0..5) {
        0 => (
            random.random_range(0.01..100.0),
            random.random_range(273.15..1073.15),
        ),
        1 => {
            let p = random.random_range(1e-3_f64.ln()..100_f64.ln()).exp();
            (p, random.random_range(273.15..1073.15))
        }
        2 => (
            random.random_range(16.53..100.0),
            random.random_range(623.15..863.15),
        ),
        3 => (
            random.random_range(16.53..22.06),
            random.random_range(623.15..655.0),
        ),
        _ => (
            random.random_range(21.9..22.3),
            random.random_range(646.0..648.0),
        ),
    }
}
