//! Samples that are not to be trusted, and those that only look like it.

use super::*;

/// A quiet signal with small, repeating steps.
fn quiet() -> Vec<f64> {
    let pattern = [0.0, 0.3, -0.2, 0.1, -0.3, 0.2, -0.1];
    (0..60).map(|i| 100.0 + pattern[i % 7]).collect()
}

fn flags(values: &[f64]) -> Vec<(Flag, u32)> {
    made(usual(), &every(5.0, values)).flags
}

#[test]
fn a_spike_is_found_and_left_out() {
    let mut values = quiet();
    values[20] = 160.0;
    values[40] = 30.0;
    let reading = average(usual(), &every(5.0, &values));
    let made = reading.averaged.unwrap();
    assert_eq!(made.flags, [(Flag::Spike, 2)]);
    assert!((reading.value.unwrap() - 100.0).abs() < 0.1);
    // The value before it holds through it.
    assert_eq!((made.taken, made.used, made.covered), (60, 58, 1.0));
}

#[test]
fn a_step_is_no_spike() {
    for at in 1..60 {
        let mut values = quiet();
        for value in &mut values[at..] {
            *value += 50.0;
        }
        assert_eq!(flags(&values), [], "a step at {at}");
    }
    // Nor on a signal without any noise.
    for at in 1..60 {
        let values: Vec<f64> = (0..60)
            .map(|i| if i < at { 100.0 } else { 150.0 })
            .collect();
        assert_eq!(flags(&values), [], "a bare step at {at}");
    }
}

#[test]
fn a_change_of_the_last_digit_is_no_spike() {
    // Where the deviation is zero and the digit is coarser than the tag's own
    // uncertainty (1 t/h, standard).
    let mut values = vec![100.0; 60];
    for at in [7, 9, 23, 24, 31, 33, 51] {
        values[at] = 103.0;
    }
    assert_eq!(
        made(usual(), &every(5.0, &values)).flags,
        [(Flag::Spike, 1)]
    );
    // One alone on a signal that stands still is finer than the uncertainty.
    let mut values = vec![100.0; 60];
    values[30] = 100.9;
    assert_eq!(flags(&values), []);
    values[30] = 140.0;
    assert_eq!(flags(&values), [(Flag::Spike, 1)]);
}

#[test]
fn a_signal_beyond_its_range_is_not_used() {
    // The range is 0 to 400; zero may read a little less.
    let slightly = [-4.9, 0.2, -0.3, 412.4];
    let beyond = [-5.1, 412.6];
    for value in slightly {
        assert_eq!(made(usual(), &every(60.0, &[value])).flags, [], "{value}");
    }
    for value in beyond {
        let reading = average(usual(), &every(60.0, &[value]));
        assert_eq!((reading.value, reading.quality.grade), (None, Grade::Bad));
        let made = reading.averaged.unwrap();
        assert_eq!(made.flags, [(Flag::OutOfRange, 1)]);
        assert_eq!(made.unused.unwrap(), "no good sample (1 out of range)");
    }
}

#[test]
fn a_signal_that_has_samples_and_does_not_move_is_stuck() {
    let settings = TagAveraging {
        stuck_after: Some(Duration::minutes(20)),
        ..usual()
    };
    let times = |from: i32| (from..20).map(|i| f64::from(i) * 15.0);
    let still: Vec<Sample> = times(-70).map(|at| sample(at, 100.0)).collect();
    let reading = average(settings.clone(), &still);
    let made_of = reading.averaged.unwrap();
    assert_eq!(made_of.flags, [(Flag::Stuck, 20)]);
    assert_eq!(made_of.unused.unwrap(), "no good sample (20 stuck)");
    // It moved in time, or it has not been still for so long, or few samples say so.
    let mut moved = still.clone();
    moved[40].value = Some(100.1);
    let short: Vec<Sample> = times(-40).map(|at| sample(at, 100.0)).collect();
    let exceptions = samples(&[(-1100.0, 100.0), (-100.0, 100.0)]);
    for list in [moved, short, exceptions] {
        assert_eq!(made(settings.clone(), &list).unused, None);
    }
    assert_eq!(
        made(usual(), &still).unused,
        None,
        "never, unless it is set"
    );
    let mut plant = plant();
    assert_eq!(lookback(&plant), Duration::ZERO);
    plant.averaging.usual = settings;
    assert_eq!(lookback(&plant), Duration::minutes(20));
    assert_eq!(holds(&plant, "A"), Some(Duration::minutes(20)));
    assert_eq!(holds(&plant, "C"), None);
}

#[test]
fn too_few_good_samples_leave_a_tag_unused() {
    let mut list = every(30.0, &[100.0; 10]);
    for sample in &mut list[..6] {
        sample.quality.grade = Grade::Bad;
    }
    let made_of = made(usual(), &list);
    assert_eq!(
        made_of.unused.unwrap(),
        "good samples cover 40 % of the period, 50 % are needed (6 bad)"
    );
    assert_eq!((made_of.scatter, made_of.steady), (None, None));
    list[5].quality.grade = Grade::Good;
    assert_eq!(made(usual(), &list).unused, None);
}

#[test]
fn what_a_bad_sample_ends_is_not_covered() {
    let mut list = samples(&[(0.0, 10.0), (100.0, 0.0), (200.0, 20.0)]);
    list[1] = graded(100.0, 0.0, Grade::Bad, None);
    let reading = average(usual(), &list);
    assert_eq!(reading.value, Some(15.0));
    assert!((reading.averaged.unwrap().covered - 2.0 / 3.0).abs() < 1e-12);
}

#[test]
fn the_quality_of_a_reading_is_that_of_what_it_uses() {
    const SUBNORMAL: u32 = 0x4095_0000;
    let mixed = |uncertain: usize| {
        let mut list = every(30.0, &[100.0; 10]);
        for (i, sample) in list.iter_mut().enumerate() {
            sample.quality = match i < uncertain {
                true => Quality {
                    grade: Grade::Uncertain,
                    code: Some(SUBNORMAL + i as u32),
                },
                false => Quality {
                    grade: Grade::Good,
                    code: Some(i as u32),
                },
            };
        }
        let reading = average(usual(), &list);
        (reading.quality, reading.averaged.unwrap().flags)
    };
    let (quality, flags) = mixed(2);
    assert_eq!(
        quality,
        Quality {
            grade: Grade::Good,
            code: Some(9)
        }
    );
    assert_eq!(flags, [(Flag::Uncertain, 2)]);
    let (quality, flags) = mixed(3);
    assert_eq!(
        quality,
        Quality {
            grade: Grade::Uncertain,
            code: Some(SUBNORMAL + 2)
        }
    );
    assert_eq!(flags, [(Flag::Uncertain, 3)]);
    let bad = [graded(10.0, 1.0, Grade::Bad, Some(0x808B_0000))];
    let reading = average(usual(), &bad);
    assert_eq!(
        reading.quality,
        Quality {
            grade: Grade::Bad,
            code: Some(0x808B_0000)
        }
    );
}
