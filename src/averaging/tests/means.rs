//! Means by hand, and laws that hold for any samples.

use super::*;
use crate::plant::AveragingMethod;
use proptest::prelude::*;

fn with(method: AveragingMethod) -> TagAveraging {
    TagAveraging { method, ..usual() }
}

fn value(method: AveragingMethod, pairs: &[(f64, f64)]) -> Option<f64> {
    average(with(method), &samples(pairs)).value
}

#[test]
fn a_value_holds_until_the_next_or_goes_to_it_in_a_line() {
    // Half of 10, a quarter each of 20 and 40.
    let pairs = [(-20.0, 10.0), (150.0, 20.0), (225.0, 40.0), (300.0, 99.0)];
    assert_eq!(value(AveragingMethod::Stepped, &pairs), Some(20.0));
    // A ramp through the period has the mean of its middle.
    let ramp = [(-100.0, 0.0), (400.0, 100.0)];
    assert_eq!(value(AveragingMethod::Linear, &ramp), Some(50.0));
    // Without a value after it the last one holds.
    let open = [(0.0, 10.0), (150.0, 20.0)];
    assert_eq!(value(AveragingMethod::Linear, &open), Some(17.5));
    assert_eq!(value(AveragingMethod::Last, &pairs), Some(40.0));
    assert_eq!(value(AveragingMethod::Sum, &pairs), Some(60.0));
}

#[test]
fn the_end_of_a_period_belongs_to_the_next() {
    let pairs = [(0.0, 1.0), (300.0, 5.0)];
    for (method, expected) in [
        (AveragingMethod::Stepped, 1.0),
        (AveragingMethod::Last, 1.0),
        (AveragingMethod::Sum, 1.0),
        (AveragingMethod::Linear, 3.0),
    ] {
        assert_eq!(value(method, &pairs), Some(expected), "{method:?}");
    }
    let made = made(usual(), &samples(&pairs));
    assert_eq!((made.taken, made.used, made.covered), (1, 1, 1.0));
}

#[test]
fn a_value_holds_no_longer_than_it_may() {
    let settings = TagAveraging {
        stale_after: Duration::seconds(60),
        ..usual()
    };
    let list = samples(&[(0.0, 1.0), (30.0, 2.0), (200.0, 3.0)]);
    let stepped = average(settings.clone(), &list);
    let made = stepped.averaged.unwrap();
    // 30 s of 1, 60 s of 2, 60 s of 3.
    assert!((stepped.value.unwrap() - 330.0 / 150.0).abs() < 1e-12);
    assert!((made.covered - 0.5).abs() < 1e-12);
    assert_eq!(made.flags, [(Flag::Stale, 2)]);
    assert_eq!(made.unused, None);
    // No line over a gap that long.
    let linear = TagAveraging {
        method: AveragingMethod::Linear,
        ..settings.clone()
    };
    let line = average(linear, &list).value.unwrap();
    assert!((line - (45.0 + 120.0 + 180.0) / 150.0).abs() < 1e-12);
    let last = TagAveraging {
        method: AveragingMethod::Last,
        ..settings
    };
    assert_eq!(
        average(last, &list).averaged.unwrap().unused.unwrap(),
        "no good sample (1 stale)"
    );
}

#[test]
fn a_sum_is_whole_or_unused() {
    let mut list = samples(&[(10.0, 1.0), (20.0, 2.0)]);
    list.push(graded(30.0, 7.0, Grade::Bad, None));
    let reading = average(with(AveragingMethod::Sum), &list);
    assert_eq!(reading.value, Some(3.0));
    let reason = reading.averaged.unwrap().unused.unwrap();
    assert_eq!(reason, "a part of the sum is missing (1 bad)");
}

#[test]
fn unequal_weights_widen_the_scatter() {
    // The same values; in the second one of them weighs more than half.
    let values = [10.0, 11.0, 9.0, 10.5, 9.5];
    let even = made(usual(), &every(60.0, &values)).scatter.unwrap();
    let uneven: Vec<Sample> = values
        .iter()
        .enumerate()
        .map(|(i, &value)| sample(30.0 * i as f64, value))
        .collect();
    let uneven = made(usual(), &uneven).scatter.unwrap();
    let weights = [30.0_f64, 30.0, 30.0, 30.0, 180.0];
    let squares: f64 = weights.iter().map(|weight| weight * weight).sum();
    let factor = 5.0 * squares / 300.0_f64.powi(2);
    assert!((uneven / even - factor.sqrt()).abs() < 1e-12);
}

fn any_samples() -> impl Strategy<Value = Vec<Sample>> {
    let one = (-400.0..700.0_f64, -1e3..1e3_f64, 0..6_u32);
    prop::collection::vec(one, 1..60).prop_map(|list| {
        let mut list: Vec<Sample> = list
            .into_iter()
            .map(|(at, value, kind)| match kind {
                0 => graded(at, value, Grade::Bad, Some(0x8000_0000)),
                1 => graded(at, value, Grade::Uncertain, Some(0x4000_0000)),
                2 => Sample {
                    value: None,
                    ..graded(at, value, Grade::Bad, None)
                },
                _ => sample(at, value.round()),
            })
            .collect();
        list.sort_by_key(|sample| sample.time);
        list
    })
}

fn any_settings() -> impl Strategy<Value = TagAveraging> {
    use AveragingMethod::{Last, Linear, Stepped, Sum};
    let method = prop::sample::select(vec![Stepped, Linear, Last, Sum]);
    let stuck = prop::option::of(1_i64..400);
    let spikes = prop::option::of((1_usize..8, 1.0..6.0_f64));
    (method, 1_i64..900, stuck, spikes).prop_map(|(method, stale, stuck, spikes)| TagAveraging {
        method,
        stale_after: Duration::seconds(stale),
        stuck_after: stuck.map(Duration::seconds),
        spikes,
        ..usual()
    })
}

proptest! {
    /// A mean lies between the values that it uses, parts of a whole are parts,
    /// and what has no value is bad and unused.
    #[test]
    fn laws(settings in any_settings(), list in any_samples()) {
        let reading = average(settings.clone(), &list);
        let made = reading.averaged.clone().unwrap();
        prop_assert!((0.0..=1.0).contains(&made.covered));
        prop_assert!(made.scatter.is_none_or(|scatter| scatter.is_finite() && scatter >= 0.0));
        let flagged: u32 = made.flags.iter()
            .filter(|(flag, _)| !matches!(flag, Flag::Stale | Flag::Uncertain))
            .map(|(_, count)| count).sum();
        prop_assert!(flagged <= made.taken);
        match reading.value {
            None => {
                prop_assert_eq!(reading.quality.grade, Grade::Bad);
                prop_assert!(made.unused.is_some());
            }
            Some(value) if settings.method != AveragingMethod::Sum => {
                let used = list.iter().filter(|s| s.quality.grade != Grade::Bad).filter_map(|s| s.value);
                let (low, high) = used.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), v| (low.min(v), high.max(v)));
                prop_assert!(low - 1e-9 <= value && value <= high + 1e-9, "{} of {} to {}", value, low, high);
            }
            Some(_) => {}
        }
    }

    /// The order in which samples are handed over does not matter.
    #[test]
    fn order_does_not_matter(settings in any_settings(), list in any_samples()) {
        let mut turned = list.clone();
        turned.reverse();
        let distinct = list.windows(2).all(|pair| pair[0].time < pair[1].time);
        prop_assume!(distinct);
        prop_assert_eq!(average(settings.clone(), &list), average(settings, &turned));
    }
}
