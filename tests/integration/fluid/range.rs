//! Outside the range there is an error that says so, never a number and never a panic.

use counterpoise::fluid::{
    CRITICAL_PRESSURE, MAX_PRESSURE, MAX_SATURATION_PRESSURE, MIN_PRESSURE,
    MIN_SATURATION_PRESSURE, OutOfRange, Quantity, State, enthalpy_range, from_hs, from_ph,
    from_ps, from_pt, from_px, saturation, saturation_t,
};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

fn refused<T: std::fmt::Debug>(result: Result<T, OutOfRange>, quantity: Quantity) {
    assert_eq!(result.expect_err("outside the range").quantity, quantity);
}

#[test]
fn values_outside_are_refused_by_name() {
    for p in [
        0.0,
        -1.0,
        1e-7,
        100.1,
        f64::NAN,
        f64::INFINITY,
        f64::NEG_INFINITY,
    ] {
        refused(from_ph(p, 1000.0), Quantity::Pressure);
        refused(from_pt(p, 400.0), Quantity::Pressure);
        refused(from_ps(p, 3.0), Quantity::Pressure);
        refused(from_px(p, 0.5), Quantity::Pressure);
        refused(saturation(p), Quantity::Pressure);
        refused(enthalpy_range(p), Quantity::Pressure);
    }
    for y in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY, -50.0, 1e5] {
        refused(from_ph(1.0, y), Quantity::Enthalpy);
        refused(from_pt(1.0, y), Quantity::Temperature);
        refused(from_ps(1.0, y), Quantity::Entropy);
        refused(from_px(1.0, y), Quantity::Quality);
        refused(from_hs(y, 3.0), Quantity::Enthalpy);
        refused(from_hs(1000.0, y), Quantity::Entropy);
        refused(saturation_t(y), Quantity::Temperature);
    }
    refused(from_pt(50.1, 1073.2), Quantity::Temperature);
    refused(from_pt(1.0, 273.14), Quantity::Temperature);
    refused(from_px(1.0, -1e-9), Quantity::Quality);
    refused(from_px(1.0, 1.0 + 1e-9), Quantity::Quality);
    refused(saturation(CRITICAL_PRESSURE), Quantity::Pressure);
    refused(saturation(6.11e-4), Quantity::Pressure);
    refused(saturation_t(647.096), Quantity::Temperature);
}

#[test]
fn errors_tell_value_and_range() {
    let message = |result: Result<State, OutOfRange>| result.expect_err("outside").to_string();
    assert_eq!(
        message(from_pt(60.0, 1200.0)),
        "temperature 1200 K is outside the range of the water and steam properties, \
         273.15 K to 1073.15 K at pressure 60 MPa"
    );
    assert_eq!(
        message(from_ph(f64::NAN, 1.0)),
        "pressure NaN MPa is outside the range of the water and steam properties, 0.000001 MPa to 100 MPa"
    );
    assert_eq!(
        message(from_px(1.0, 1.5)),
        "quality 1.5 is outside the range of the water and steam properties, 0 to 1"
    );
}

#[test]
fn limits_themselves_are_inside() {
    for p in [
        MIN_PRESSURE,
        1e-4,
        MIN_SATURATION_PRESSURE,
        0.1,
        16.53,
        CRITICAL_PRESSURE,
        50.0,
        50.1,
        MAX_PRESSURE,
    ] {
        let (least, greatest) = enthalpy_range(p).expect("inside the range");
        let top = if p <= 50.0 { 2273.15 } else { 1073.15 };
        for (h, t) in [(least, 273.15), (greatest, top)] {
            let state = from_ph(p, h).expect("the limit itself");
            assert!((state.t - t).abs() < 1e-6, "{} K at {p} MPa", state.t);
            assert!((from_pt(p, t).expect("the limit itself").h - h).abs() < 1e-9);
            assert!(
                (from_hs(h, state.s).expect("the limit itself").p / p - 1.0).abs() < 1e-5,
                "at {p} MPa"
            );
        }
        refused(from_ph(p, least - 1e-6), Quantity::Enthalpy);
        refused(from_ph(p, greatest + 1e-6), Quantity::Enthalpy);
    }
    for p in [MIN_SATURATION_PRESSURE, MAX_SATURATION_PRESSURE] {
        let line = saturation(p).expect("the limit itself");
        assert!(line.vapour.h > line.liquid.h && line.vapour.h_p.is_finite());
        assert!(
            (saturation_t(line.t.max(273.15))
                .expect("the limit itself")
                .p
                / p
                - 1.0)
                .abs()
                < 1e-9
        );
    }
}

/// Any pair of numbers gives either an error or a state made of numbers.
#[test]
fn no_pair_gives_a_state_without_numbers() {
    let mut random = ChaCha8Rng::seed_from_u64(10);
    let mut accepted = 0;
    for k in 0..60_000 {
        let number = |random: &mut ChaCha8Rng, scale: f64| match random.random_range(0..8) {
            0 => f64::from_bits(random.random()),
            1 => scale * random.random_range(-0.1..2.0_f64),
            2 => (scale.ln() * random.random_range(-3.0..1.0_f64)).exp(),
            _ => scale * random.random_range(0.0..1.0_f64),
        };
        let (p, h, s) = (
            number(&mut random, 100.0),
            number(&mut random, 5000.0),
            number(&mut random, 12.0),
        );
        let (t, x) = (number(&mut random, 2000.0), number(&mut random, 1.0));
        let state = match k % 5 {
            0 => from_ph(p, h),
            1 => from_pt(p, t),
            2 => from_ps(p, s),
            3 => from_px(p, x),
            _ => from_hs(h, s),
        };
        let Ok(s) = state else { continue };
        accepted += 1;
        let values = [
            s.p, s.h, s.t, s.v, s.s, s.t_p, s.t_h, s.v_p, s.v_h, s.s_p, s.s_h,
        ];
        assert!(values.iter().all(|y| y.is_finite()), "{s:?}");
        assert!(
            s.p > 0.0 && s.v > 0.0 && s.t > 273.0 && s.cp.is_none_or(|cp| cp > 0.0),
            "{s:?}"
        );
        assert!(s.v_p < 0.0 && s.s_p < 0.0 && s.s_h > 0.0, "{s:?}");
        // Cold water contracts as it warms.
        assert!(s.v_h > 0.0 || s.t < 277.2, "{s:?}");
    }
    assert!(accepted > 15_000, "only {accepted} pairs inside the range");
}
