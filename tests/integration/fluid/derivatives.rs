//! The derivatives by p and h against differences of the functions themselves, by five points, so that the
//! differences' own error is far below the tolerance.

use counterpoise::fluid::{Branch, Phase, State, from_ph, from_pt, from_px, saturation};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::{at_an_edge, random_pt, region};

/// Where the five points lie, in steps, with their weights.
type Stencil = [(f64, f64); 5];

const CENTRED: Stencil = [
    (-2.0, 1.0 / 12.0),
    (-1.0, -8.0 / 12.0),
    (0.0, 0.0),
    (1.0, 8.0 / 12.0),
    (2.0, -1.0 / 12.0),
];

/// On one side only: for states at an edge.
const ONE_SIDED: Stencil = [
    (0.0, -25.0 / 12.0),
    (1.0, 4.0),
    (2.0, -3.0),
    (3.0, 4.0 / 3.0),
    (4.0, -1.0 / 4.0),
];

/// The three functions of (p, h).
fn functions(state: &State) -> [f64; 3] {
    [state.t, state.v, state.s]
}

fn same_equation(a: &State, b: &State) -> bool {
    a.phase == b.phase && (a.phase == Phase::Wet || region(a.p, a.t) == region(b.p, b.t))
}

/// Differences of T, v and s by a step `(dp, dh)`; `None` if a point lies in another phase or region.
fn differences(state: &State, (dp, dh): (f64, f64), stencil: Stencil) -> Option<[f64; 3]> {
    let mut sum = [0.0; 3];
    for (place, weight) in stencil {
        let there = from_ph(state.p + place * dp, state.h + place * dh).ok()?;
        if !same_equation(&there, state) {
            return None;
        }
        for (sum, value) in sum.iter_mut().zip(functions(&there)) {
            *sum += weight * value;
        }
    }
    Some(sum.map(|sum| sum / (dp + dh)))
}

/// Holds both rows of derivatives to differences; false if the points leave the state's phase or region.
///
/// The tolerance is relative to the derivative, plus what rounding of the functions leaves in a difference.
#[track_caller]
fn hold(state: &State, dp: f64, dh: f64, stencil: Stencil, tolerance: f64) -> bool {
    let by_p = differences(state, (dp, 0.0), stencil);
    let by_h = differences(state, (0.0, dh), stencil);
    let (Some(by_p), Some(by_h)) = (by_p, by_h) else {
        return false;
    };
    let rounding = functions(state).map(|y| 1e-12 * y.abs());
    let exact = [
        [state.t_p, state.v_p, state.s_p],
        [state.t_h, state.v_h, state.s_h],
    ];
    for (exact, numeric, step) in [(exact[0], by_p, dp), (exact[1], by_h, dh)] {
        for k in 0..3 {
            let error = (exact[k] - numeric[k]).abs();
            let allowed = tolerance * exact[k].abs() + rounding[k] / step.abs();
            assert!(
                error <= allowed,
                "{} by {step} of {state:?}: {} is not {}",
                k,
                exact[k],
                numeric[k]
            );
        }
    }
    true
}

#[test]
fn one_phase() {
    let mut random = ChaCha8Rng::seed_from_u64(7);
    let mut held = [0; 6];
    for k in 0..12_000 {
        let (mut p, mut t) = random_pt(&mut random);
        if k % 6 == 0 {
            (p, t) = (0.5 * p, random.random_range(1074.0..2270.0));
        }
        let critical = (p - 22.0).abs() < 1.0 && (t - 647.0).abs() < 5.0;
        if at_an_edge(p, t) || critical {
            continue;
        }
        let state = from_pt(p, t).expect("inside the range");
        // Water hardly yields to pressure: a longer step keeps its response above rounding.
        let dp = if region(p, t) == 1 {
            (0.02 * p).min(0.1)
        } else {
            1e-4 * p
        };
        if hold(&state, dp, 0.05, CENTRED, 1e-7) {
            held[usize::from(region(p, t))] += 1;
        }
    }
    assert!(
        held[1] > 500 && held[2] > 500 && held[3] > 500 && held[5] > 500,
        "{held:?}"
    );
}

#[test]
fn wet() {
    let mut random = ChaCha8Rng::seed_from_u64(8);
    let mut held = 0;
    for _ in 0..4000 {
        let p = random.random_range(7e-4_f64.ln()..21.9_f64.ln()).exp();
        let state = from_px(p, random.random_range(0.01..0.99)).expect("below critical");
        let step = if p > 21.0 { 1e-5 } else { 1e-4 };
        held += i32::from(hold(&state, step * p, 0.05, CENTRED, 1e-7));
    }
    assert!(held > 3500, "only {held} held");
}

#[test]
fn at_the_saturation_line_from_both_sides() {
    for p in [0.001, 0.01, 0.1, 1.0, 3.0, 10.0, 16.0, 17.0, 19.0, 21.0] {
        let line = saturation(p).expect("below critical");
        // Stepping away from the line in p: up where the branch's enthalpy then runs away from the state.
        let away = |branch: &Branch, outwards: f64| (outwards * -branch.h_p).signum() * 1e-4 * p;
        for (branch, outwards, phase) in [
            (&line.liquid, -1.0, Phase::Liquid),
            (&line.vapour, 1.0, Phase::Vapour),
        ] {
            for side in [1.0, -1.0] {
                let state =
                    from_ph(p, branch.h + outwards * side * 1e-7).expect("inside the range");
                assert_eq!(state.phase == phase, side > 0.0);
                let dp = away(branch, outwards) * side;
                let held = hold(&state, dp, outwards * side * 0.05, ONE_SIDED, 1e-6);
                assert!(held, "{:?} at {p} MPa", state.phase);
            }
        }
    }
}

#[test]
fn near_the_critical_point() {
    let mut random = ChaCha8Rng::seed_from_u64(9);
    let mut held = 0;
    for _ in 0..2000 {
        let p = random.random_range(22.0645..22.4);
        let state = from_ph(p, random.random_range(1950.0..2250.0)).expect("inside the range");
        held += i32::from(hold(&state, 1e-5, 0.02, CENTRED, 1e-6));
    }
    assert!(held > 1900, "only {held} held");
    // The point itself: cp has no bound, the derivatives by p and h have.
    let state = from_pt(22.064, 647.096).expect("inside the range");
    assert!(
        state.t_p > 3.0 && state.t_p < 4.0 && state.t_h.abs() < 1e-5,
        "{state:?}"
    );
}

#[test]
fn along_the_saturation_line() {
    for p in [7e-4, 0.01, 0.2, 3.0, 12.0, 16.4, 16.8, 18.0, 20.0, 21.5] {
        let line = saturation(p).expect("below critical");
        let dp = 2e-4 * p;
        let mut sum = [0.0; 7];
        for (place, weight) in CENTRED {
            let there = saturation(p + place * dp).expect("below critical");
            let (l, g) = (there.liquid, there.vapour);
            for (sum, value) in sum.iter_mut().zip([there.t, l.h, l.s, l.v, g.h, g.s, g.v]) {
                *sum += weight * value / dp;
            }
        }
        let (l, g) = (line.liquid, line.vapour);
        for (exact, numeric) in [line.t_p, l.h_p, l.s_p, l.v_p, g.h_p, g.s_p, g.v_p]
            .into_iter()
            .zip(sum)
        {
            assert!(
                (exact - numeric).abs() < 1e-6 * exact.abs(),
                "at {p} MPa: {exact} is not {numeric}"
            );
        }
    }
}
