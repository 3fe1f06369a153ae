//! There and back: a state asked for by another pair is the same state.

use counterpoise::fluid::{
    MAX_SATURATION_PRESSURE, MIN_SATURATION_PRESSURE, Phase, from_hs, from_ph, from_ps, from_pt,
    from_px, saturation,
};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::{at_an_edge, random_pt, region};

#[test]
fn temperature_comes_back_over_regions_1_to_3() {
    let mut random = ChaCha8Rng::seed_from_u64(1997);
    let mut seen = [0; 6];
    let mut worst = 0.0_f64;
    while seen.iter().sum::<i32>() < 20_000 {
        let (p, t) = random_pt(&mut random);
        if at_an_edge(p, t) {
            continue;
        }
        seen[usize::from(region(p, t))] += 1;
        let state = from_pt(p, t).expect("inside the range");
        let by_h = from_ph(p, state.h).expect("inside the range");
        let by_s = from_ps(p, state.s).expect("inside the range");
        let by_hs = from_hs(state.h, state.s).expect("inside the range");
        assert_eq!(by_h.phase, state.phase, "at {p} MPa, {t} K");
        for back in [by_h, by_s, by_hs] {
            worst = worst.max((back.t - t).abs());
            assert!(
                (back.t - t).abs() < 1e-6,
                "{} K is not {t} K at {p} MPa",
                back.t
            );
        }
    }
    assert!(
        seen[1] > 2000 && seen[2] > 2000 && seen[3] > 2000,
        "{seen:?}"
    );
    assert!(worst < 1e-8, "{worst} K");
}

#[test]
fn region_5_comes_back() {
    let mut random = ChaCha8Rng::seed_from_u64(5);
    for _ in 0..2000 {
        let p = random.random_range(1e-3_f64.ln()..50_f64.ln()).exp();
        let t = random.random_range(1073.3..2273.15);
        let state = from_pt(p, t).expect("inside the range");
        for back in [
            from_ph(p, state.h),
            from_ps(p, state.s),
            from_hs(state.h, state.s),
        ] {
            let back = back.expect("inside the range");
            assert!(
                (back.t - t).abs() < 1e-8,
                "{} K is not {t} K at {p} MPa",
                back.t
            );
        }
    }
}

#[test]
fn wet_steam_comes_back() {
    let mut random = ChaCha8Rng::seed_from_u64(4);
    for _ in 0..5000 {
        let p = random
            .random_range(MIN_SATURATION_PRESSURE.ln()..MAX_SATURATION_PRESSURE.ln())
            .exp();
        let x = random.random_range(0.0..1.0);
        let state = from_px(p, x).expect("below critical");
        for back in [
            from_ph(p, state.h),
            from_ps(p, state.s),
            from_hs(state.h, state.s),
        ] {
            let back = back.expect("inside the range");
            assert_eq!(back.phase, Phase::Wet, "at {p} MPa, {x}");
            assert!((back.x.expect("wet") - x).abs() < 1e-6, "at {p} MPa, {x}");
            assert!((back.t - state.t).abs() < 1e-6, "at {p} MPa, {x}");
        }
    }
}

#[test]
fn quality_spans_the_line() {
    for p in [0.005, 0.5, 5.0, 16.5, 16.6, 20.0, 22.0] {
        let line = saturation(p).expect("below critical");
        for (x, side) in [(0.0, line.liquid), (1.0, line.vapour)] {
            let state = from_px(p, x).expect("below critical");
            assert_eq!(
                (state.x, state.cp, state.phase),
                (Some(x), None, Phase::Wet)
            );
            assert_eq!((state.h, state.s, state.v), (side.h, side.s, side.v));
            assert_eq!(state.t, line.t);
        }
        let liquid = from_ph(p, line.liquid.h - 1e-6).expect("inside the range");
        let vapour = from_ph(p, line.vapour.h + 1e-6).expect("inside the range");
        assert_eq!((liquid.phase, vapour.phase), (Phase::Liquid, Phase::Vapour));
        assert!(liquid.x.is_none() && liquid.cp.is_some());
        assert!((liquid.t - line.t).abs() < 1e-6 && (vapour.t - line.t).abs() < 1e-6);
        assert!((liquid.v / line.liquid.v - 1.0).abs() < 1e-6);
        assert!((vapour.v / line.vapour.v - 1.0).abs() < 1e-6);
    }
}

/// Along isobars the enthalpy rises with the temperature, and the temperature never falls as the enthalpy
/// rises, but for the formulation's own jumps at the edges of its regions.
#[test]
fn temperature_and_enthalpy_rise_together() {
    for p in [
        0.002, 0.1, 1.0, 10.0, 16.5, 17.0, 20.0, 22.0, 22.064, 22.1, 25.0, 40.0, 60.0, 99.0,
    ] {
        let mut enthalpy = f64::MIN;
        for k in 0..=1600 {
            let h = from_pt(p, 273.15 + 0.5 * f64::from(k))
                .expect("inside the range")
                .h;
            assert!(h > enthalpy, "at {p} MPa: {h} kJ/kg after {enthalpy} kJ/kg");
            enthalpy = h;
        }
        let (mut temperature, mut entropy) = (f64::MIN, f64::MIN);
        for k in 0..=7200 {
            let state = from_ph(p, 100.0 + 0.5 * f64::from(k)).expect("inside the range");
            assert!(
                state.t > temperature - 0.02,
                "at {p} MPa, {} kJ/kg",
                state.h
            );
            assert!(state.s > entropy, "at {p} MPa, {} kJ/kg", state.h);
            (temperature, entropy) = (state.t, state.s);
        }
    }
}
