//! What is promised of the scatter, the spikes and the test, by simulation.

use super::*;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::StandardNormal;

fn rng(seed: u64) -> ChaCha8Rng {
    ChaCha8Rng::seed_from_u64(seed)
}

/// Noise of variance one whose value depends on the last one by `phi`, about 100.
fn noise(rng: &mut ChaCha8Rng, count: usize, phi: f64) -> Vec<f64> {
    let mut last: f64 = rng.sample(StandardNormal);
    let mut values = vec![100.0 + last];
    for _ in 1..count {
        let new: f64 = rng.sample(StandardNormal);
        last = phi * last + (1.0 - phi * phi).sqrt() * new;
        values.push(100.0 + last);
    }
    values
}

/// No filter, and a tag of which nothing is harmless.
fn bare(significance: f64) -> TagAveraging {
    TagAveraging {
        spikes: None,
        steady_significance: significance,
        steady_within: 0.0,
        ..usual()
    }
}

fn spread(values: &[f64]) -> Vec<Sample> {
    every(LENGTH / values.len() as f64, values)
}

/// The part of runs in which the mean is off by less than twice its scatter.
fn covered(count: usize, phi: f64, runs: u64) -> f64 {
    let within = (0..runs).filter(|&run| {
        let values = noise(&mut rng(1000 + run), count, phi);
        let reading = average(bare(0.001), &spread(&values));
        let scatter = reading.averaged.unwrap().scatter.unwrap();
        (reading.value.unwrap() - 100.0).abs() < 1.96 * scatter
    });
    within.count() as f64 / runs as f64
}

/// With 4000 runs the standard error of a coverage of 0.95 is 0.0035.
#[test]
fn the_scatter_covers_the_error_of_the_mean() {
    let mut told = Vec::new();
    for (count, phi, least) in [
        (5, 0.0, 0.94),
        (15, 0.0, 0.94),
        (30, 0.0, 0.94),
        (60, 0.0, 0.94),
        (300, 0.0, 0.94),
        (30, 0.5, 0.90),
        (60, 0.5, 0.93),
        (60, 0.8, 0.92),
        (60, 0.9, 0.92),
        (300, 0.8, 0.94),
        (300, 0.95, 0.94),
    ] {
        let part = covered(count, phi, 4000);
        told.push(format!("n {count}, phi {phi}: {part:.3}"));
        assert!(part > least, "{told:#?}");
        // Nor is it wider than it has to be without end.
        assert!(part < 0.99, "{told:#?}");
    }
    println!("within 1.96 u: {told:#?}");
}

/// The same of s / root n, which is why it is not used.
#[test]
fn the_plain_standard_error_would_not_cover_it() {
    let runs = 2000;
    let within = (0..runs).filter(|&run| {
        let values = noise(&mut rng(1000 + run), 60, 0.8);
        let mean = values.iter().sum::<f64>() / 60.0;
        let squares: f64 = values.iter().map(|value| (value - mean).powi(2)).sum();
        (mean - 100.0).abs() < 1.96 * (squares / 59.0 / 60.0).sqrt()
    });
    let part = within.count() as f64 / runs as f64;
    assert!(part < 0.6, "{part}");
}

fn unsteady(runs: u64, significance: f64, list: impl Fn(u64) -> Vec<Sample>) -> f64 {
    let found = (0..runs).filter(|&run| made(bare(significance), &list(run)).steady == Some(false));
    found.count() as f64 / runs as f64
}

/// Independent noise is called unsteady as often as is said: within four
/// standard errors of it.
#[test]
fn the_test_has_its_level() {
    let runs = 8000;
    for count in [5, 12, 100] {
        for level in [0.05, 0.01] {
            let part = unsteady(runs, level, |run| spread(&noise(&mut rng(run), count, 0.0)));
            let error = (level * (1.0 - level) / runs as f64).sqrt();
            println!("n {count}, level {level}: {part:.4}");
            assert!(
                (part - level).abs() < 4.0 * error,
                "n {count}: {part} of {level}"
            );
        }
    }
}

/// Samples at random instants, and exceptions of a dead band about the last one
/// stored: never more often than is said.
#[test]
fn uneven_samples_are_not_called_unsteady() {
    let (runs, level) = (5000, 0.01);
    let scattered = unsteady(runs, level, |run| {
        let mut rng = rng(run);
        let mut times: Vec<f64> = (0..60).map(|_| rng.random_range(0.0..LENGTH)).collect();
        times.sort_by(f64::total_cmp);
        let values = noise(&mut rng, 60, 0.0);
        times
            .iter()
            .zip(values)
            .map(|(&at, value)| sample(at, value))
            .collect()
    });
    let exceptions = unsteady(runs, level, |run| {
        let scans = spread(&noise(&mut rng(run), 300, 0.0));
        let mut stored: Vec<Sample> = Vec::new();
        for scan in scans {
            let last = stored.last().and_then(|last| last.value);
            if last.is_none_or(|last| scan.value.is_some_and(|new| (new - last).abs() > 2.0)) {
                stored.push(scan);
            }
        }
        stored
    });
    println!("scattered {scattered:.4}, exceptions {exceptions:.4}");
    assert!(
        scattered < 0.014 && exceptions < 0.014,
        "{scattered} {exceptions}"
    );
}

/// Ramps over the whole period of so many standard deviations of the noise.
#[test]
fn a_slow_trend_is_found() {
    let power = |count: usize, change: f64| {
        unsteady(1000, 0.001, |run| {
            let mut values = noise(&mut rng(run), count, 0.0);
            for (i, value) in values.iter_mut().enumerate() {
                *value += change * i as f64 / count as f64;
            }
            spread(&values)
        })
    };
    for (count, change, least) in [
        (30, 6.0, 0.9),
        (60, 4.0, 0.85),
        (300, 2.0, 0.9),
        (300, 1.0, 0.15),
    ] {
        let part = power(count, change);
        println!("n {count}, ramp of {change} sigma: {part:.3}");
        assert!(part > least, "n {count}, ramp of {change}: {part}");
    }
}

/// Noise that is correlated over much less than the period.
#[test]
fn correlated_noise_is_called_unsteady_more_often() {
    let runs = 4000;
    let part = |phi: f64| unsteady(runs, 0.001, |run| spread(&noise(&mut rng(run), 300, phi)));
    let (some, much) = (part(0.5), part(0.9));
    println!("phi 0.5: {some:.4}, phi 0.9: {much:.4}");
    assert!(some < 0.01, "{some}");
}

/// Of white noise hardly anything is taken for a spike, and the mean of noise
/// with spikes stays where it was.
#[test]
fn spikes_of_noise_are_few_and_true_ones_found() {
    let (mut wrong, mut total, mut found) = (0, 0, 0);
    let (neighbours, deviations) = usual().spikes.unwrap();
    let find = |values: &[f64]| super::super::spikes::find(values, neighbours, deviations, 0.0);
    let runs = 2000;
    for run in 0..runs {
        let mut values = noise(&mut rng(run), 60, 0.0);
        wrong += find(&values).len();
        total += values.len();
        let at = rng(run).random_range(1..59);
        values[at] += 10.0;
        found += usize::from(find(&values).contains(&at));
    }
    let (wrong, found) = (wrong as f64 / total as f64, found as f64 / runs as f64);
    println!("noise taken for spikes {wrong:.5}, spikes of 10 sigma found {found:.3}");
    assert!(wrong < 0.01 && found > 0.95, "{wrong} {found}");
}
