//! Time of one water or steam state with all its derivatives, by region and by pair of properties.
//!
//! `cargo bench --bench fluid`. Inputs are spread over each region, so that no branch predictor learns one state.

use std::hint::black_box;

use counterpoise::fluid::{State, from_hs, from_ph, from_ps, from_pt, from_px, saturation};
use divan::Bencher;
use divan::counter::ItemsCount;

/// States of a batch per timed call: enough to hide the clock, few enough to stay in the first cache.
const STATES: usize = 256;

/// Where the states lie: a range of pressures in MPa and of temperatures in K, or of qualities.
#[derive(Clone, Copy, Debug)]
enum Field {
    Liquid,
    Superheated,
    ReheatedLowPressure,
    WetExhaust,
    WetDrum,
    Supercritical,
    NearCritical,
    Region5,
}

const FIELDS: [Field; 8] = [
    Field::Liquid,
    Field::Superheated,
    Field::ReheatedLowPressure,
    Field::WetExhaust,
    Field::WetDrum,
    Field::Supercritical,
    Field::NearCritical,
    Field::Region5,
];

impl Field {
    fn states(self) -> Vec<State> {
        let pair = |p: (f64, f64), y: (f64, f64), state: fn(f64, f64) -> State| {
            (0..STATES)
                .map(|k| {
                    // Two irrational strides cover the rectangle evenly, the same in every run.
                    let along = |range: (f64, f64), stride: f64| {
                        range.0 + (range.1 - range.0) * (k as f64 * stride).fract()
                    };
                    state(along(p, 0.618_033_988_75), along(y, 0.414_213_562_37))
                })
                .collect()
        };
        let by_t = |p, t| from_pt(p, t).expect("inside the range");
        let by_x = |p, x| from_px(p, x).expect("inside the range");
        match self {
            Self::Liquid => pair((1.0, 30.0), (300.0, 500.0), by_t),
            Self::Superheated => pair((3.0, 25.0), (700.0, 900.0), by_t),
            Self::ReheatedLowPressure => pair((0.01, 3.0), (520.0, 850.0), by_t),
            Self::WetExhaust => pair((0.003, 1.0), (0.8, 1.0), by_x),
            Self::WetDrum => pair((17.0, 21.0), (0.0, 1.0), by_x),
            Self::Supercritical => pair((24.0, 32.0), (640.0, 670.0), by_t),
            Self::NearCritical => pair((22.0, 22.2), (646.9, 647.5), by_t),
            Self::Region5 => pair((0.1, 10.0), (1100.0, 2000.0), by_t),
        }
    }
}

fn main() {
    divan::main();
}

fn each(bencher: Bencher, field: Field, solve: impl Fn(&State) -> State + Sync) {
    let states = field.states();
    bencher.counter(ItemsCount::new(STATES)).bench(|| {
        for state in &states {
            black_box(solve(black_box(state)));
        }
    });
}

#[divan::bench(args = FIELDS)]
fn ph(bencher: Bencher, field: Field) {
    each(bencher, field, |s| {
        from_ph(s.p, s.h).expect("inside the range")
    });
}

#[divan::bench(args = [Field::Liquid, Field::Superheated, Field::Supercritical, Field::NearCritical])]
fn pt(bencher: Bencher, field: Field) {
    each(bencher, field, |s| {
        from_pt(s.p, s.t).expect("inside the range")
    });
}

#[divan::bench(args = FIELDS)]
fn ps(bencher: Bencher, field: Field) {
    each(bencher, field, |s| {
        from_ps(s.p, s.s).expect("inside the range")
    });
}

#[divan::bench(args = FIELDS)]
fn hs(bencher: Bencher, field: Field) {
    each(bencher, field, |s| {
        from_hs(s.h, s.s).expect("inside the range")
    });
}

#[divan::bench(args = [Field::WetExhaust, Field::WetDrum])]
fn saturated(bencher: Bencher, field: Field) {
    let states = field.states();
    bencher.counter(ItemsCount::new(STATES)).bench(|| {
        for state in &states {
            black_box(saturation(black_box(state.p)).expect("inside the range"));
        }
    });
}
