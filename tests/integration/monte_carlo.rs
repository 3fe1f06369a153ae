//! The estimator's statistics over many batches of the demonstration plant.
//!
//! Each batch has its own load and fouling, its own true values of the
//! assumptions and its own noise, all drawn from what the plant file states; a
//! right estimator then gives p-values that are uniform, a statistic with mean
//! dof and variance 2 dof, and 95 % intervals that hold the truth in 95 of 100
//! cases. Bounds on sample figures are four standard errors (of the variance
//! too, whose standard error has the fourth moment of chi-square in it) unless
//! a range is promised. The fixture day is held to what was built into it.

use std::collections::BTreeMap;

use counterpoise::demo::{self, Assumed, Conditions, DAY_SEED, DRIFTING_TAG, Day, LineUp, Truth};
use counterpoise::fluid;
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{Batch, COVERAGE_FACTOR, EquipmentId, Plant, Quantity, StreamId};
use counterpoise::report::{Phase, QuantityReport, Report, Verdict};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use time::macros::datetime;

const SEED: u64 = 41;
const BATCHES: u64 = 2000;
const THREADS: u64 = 2;
/// Distance from the saturation line within which an interval is not normal, in sigma.
const NEAR_SATURATION: f64 = 3.0;
/// First of the late batches of the fixture day: the last two hours, where the
/// drift has come to 6 sigma.
const LATE: usize = 264;
/// Specific enthalpy this close to the line, in kJ/kg, is a stream held at it.
const AT_SATURATION: f64 = 1e-3;

/// What one batch adds to the tally.
#[derive(Default)]
pub struct Tally {
    pub not_converged: Vec<String>,
    pub wrong_phases: Vec<String>,
    pub open_phases: usize,
    pub degrees_of_freedom: Vec<usize>,
    pub statistics: Vec<f64>,
    pub p_values: Vec<f64>,
    /// Batches in which a suspect is named.
    pub accused: usize,
    /// Squared errors of flows in sigma of the reading: measured, reconciled.
    pub flows: BTreeMap<String, [f64; 2]>,
    /// Intervals that hold the truth, intervals, and the sum of squared errors
    /// in sigma, by quantity.
    pub intervals: BTreeMap<String, [f64; 3]>,
    pub near_saturation: BTreeMap<String, usize>,
}

impl Tally {
    pub fn add(&mut self, plant: &Plant, truth: &Truth, report: &Report) {
        let Some(test) = report.global_test else {
            let reason = report.reason.clone().unwrap_or_default();
            self.not_converged
                .push(format!("{}: {reason}", report.batch));
            return;
        };
        self.degrees_of_freedom.push(test.degrees_of_freedom);
        self.statistics.push(test.statistic);
        self.p_values.push(test.p_value.expect("redundant"));
        self.accused += usize::from(!report.suspects.is_empty());
        for s in 0..plant.streams.len() {
            self.stream(plant, truth, report, StreamId(s));
        }
        for e in 0..plant.equipment.len() {
            self.equipment(plant, truth, report, EquipmentId(e));
        }
        for tag in &plant.tags {
            let entry = &report.tags[&tag.name];
            if let (Quantity::MassFlow(_), Some(measured), Some(reconciled)) =
                (tag.quantity, entry.measured, entry.reconciled)
            {
                let exact = truth.value(plant, tag.quantity).expect("a value");
                let exact = tag.unit.from_internal(exact);
                let sigma = entry.uncertainty_measured.expect("in use") / COVERAGE_FACTOR;
                let sums = self.flows.entry(tag.name.clone()).or_default();
                for (sum, value) in sums.iter_mut().zip([measured, reconciled]) {
                    *sum += ((value - exact) / sigma).powi(2);
                }
            }
        }
    }

    fn stream(&mut self, plant: &Plant, truth: &Truth, report: &Report, id: StreamId) {
        let name = &plant.streams[id.0].name;
        let entry = &report.streams[name];
        let flow = truth.stream(plant, id).expect("a known stream");
        let line = fluid::saturation(flow.pressure).ok();
        let distance = line.map(|l| {
            (flow.enthalpy - l.liquid.h)
                .abs()
                .min((flow.enthalpy - l.vapour.h).abs())
        });
        match entry.phase {
            None => {}
            Some(Phase::Open) => self.open_phases += 1,
            Some(phase) => {
                let right = true_phase(flow.pressure, flow.enthalpy);
                if phase != right {
                    self.wrong_phases.push(format!(
                        "{} {name}: {phase:?}, really {right:?}",
                        report.batch
                    ));
                }
            }
        }
        let held = distance.is_some_and(|d| d < AT_SATURATION);
        let sigma = entry.enthalpy.uncertainty.unwrap_or(0.0) / COVERAGE_FACTOR;
        if !held && distance.is_some_and(|d| d < NEAR_SATURATION * sigma) {
            *self.near_saturation.entry(name.clone()).or_default() += 1;
            return;
        }
        for (what, quantity, exact) in [
            ("mass flow", &entry.mass_flow, flow.mass_flow),
            ("pressure", &entry.pressure, flow.pressure * 10.0),
            ("temperature", &entry.temperature, flow.temperature - 273.15),
            ("enthalpy", &entry.enthalpy, flow.enthalpy),
        ] {
            self.interval(format!("{name} {what}"), quantity, exact);
        }
    }

    fn equipment(&mut self, plant: &Plant, truth: &Truth, report: &Report, id: EquipmentId) {
        let name = &plant.equipment[id.0].name;
        let entry = &report.equipment[name];
        let machine = truth.machine(plant, id);
        for (what, quantity, exact) in [
            ("heat", &entry.heat, machine.heat),
            ("work", &entry.work, machine.work),
            ("power", &entry.power, machine.power),
            ("loss", &entry.loss, machine.loss),
            ("holdup change", &entry.holdup_change, machine.holdup_change),
        ] {
            if let (Some(quantity), Some(exact)) = (quantity, exact) {
                self.interval(format!("{name} {what}"), quantity, exact);
            }
        }
    }

    /// Counts an interval; what is exact by the plant file has none.
    fn interval(&mut self, what: String, quantity: &QuantityReport, exact: f64) {
        if let (Some(value), Some(half_width)) = (quantity.value, quantity.uncertainty)
            && half_width > 0.0
        {
            let error = (value - exact) / half_width;
            let sums = self.intervals.entry(what).or_default();
            sums[0] += f64::from(u8::from(error.abs() <= 1.0));
            sums[1] += 1.0;
            sums[2] += (error * COVERAGE_FACTOR).powi(2);
        }
    }

    pub fn merge(&mut self, other: Tally) {
        self.not_converged.extend(other.not_converged);
        self.wrong_phases.extend(other.wrong_phases);
        self.open_phases += other.open_phases;
        self.accused += other.accused;
        self.degrees_of_freedom.extend(other.degrees_of_freedom);
        self.statistics.extend(other.statistics);
        self.p_values.extend(other.p_values);
        for (name, sums) in other.flows {
            let own = self.flows.entry(name).or_default();
            own.iter_mut().zip(sums).for_each(|(a, b)| *a += b);
        }
        for (name, sums) in other.intervals {
            let own = self.intervals.entry(name).or_default();
            own.iter_mut().zip(sums).for_each(|(a, b)| *a += b);
        }
        for (name, count) in other.near_saturation {
            *self.near_saturation.entry(name).or_default() += count;
        }
    }
}

/// Phase as a report calls it: what stands on the line is liquid or vapour.
fn true_phase(p: f64, h: f64) -> Phase {
    if let Ok(line) = fluid::saturation(p) {
        return if h < line.liquid.h + AT_SATURATION {
            Phase::Liquid
        } else if h > line.vapour.h - AT_SATURATION {
            Phase::Vapour
        } else {
            Phase::Wet
        };
    }
    match fluid::from_ph(p, h).expect("in range").phase {
        fluid::Phase::Liquid => Phase::Liquid,
        fluid::Phase::Wet => Phase::Wet,
        fluid::Phase::Vapour => Phase::Vapour,
        fluid::Phase::Supercritical => Phase::Supercritical,
    }
}

/// One batch of its own: load, fouling, assumptions and noise from its number.
fn batch(plant: &Plant, number: u64) -> (Batch, Truth) {
    let mut rng = ChaCha8Rng::seed_from_u64(SEED);
    rng.set_stream(number);
    let conditions = Conditions {
        fouling: rng.random_range(0.0..3.0),
        ..Conditions::at_load(rng.random_range(0.55..1.0))
    };
    let assumed = Assumed::drawn(plant, &mut rng);
    let truth = demo::truth(&conditions, &assumed).expect("settles");
    let readings =
        demo::readings(plant, &truth, &mut rng, |_| None).expect("every stream is known");
    let batch = Batch {
        name: format!("batch {number}"),
        start: datetime!(2026-03-18 00:00 UTC),
        end: datetime!(2026-03-18 00:05 UTC),
        readings,
        steadiness: None,
    };
    (batch, truth)
}

fn tally(compiled: &Compiled) -> Tally {
    let part = |first: u64| {
        let mut tally = Tally::default();
        for number in (first..BATCHES).step_by(THREADS as usize) {
            let (batch, truth) = batch(compiled.plant(), number);
            let report = reconcile(compiled, &batch);
            tally.add(compiled.plant(), &truth, &report);
        }
        tally
    };
    std::thread::scope(|scope| {
        let parts: Vec<_> = (0..THREADS)
            .map(|first| scope.spawn(move || part(first)))
            .collect();
        let mut whole = Tally::default();
        for part in parts {
            whole.merge(part.join().expect("no panic"));
        }
        whole
    })
}

/// P-value of Kolmogorov and Smirnov's test that a sample is uniform on 0 to 1,
/// by the asymptotic series 2 sum (-1)^(j-1) exp(-2 j^2 lambda^2) with
/// Stephens' (1970) lambda for finite samples.
fn kolmogorov_smirnov(sample: &[f64]) -> (f64, f64) {
    let mut sorted = sample.to_vec();
    sorted.sort_by(f64::total_cmp);
    let n = sorted.len() as f64;
    let distance = sorted.iter().enumerate().fold(0.0, |largest: f64, (i, p)| {
        largest.max((i + 1) as f64 / n - p).max(p - i as f64 / n)
    });
    let lambda = (n.sqrt() + 0.12 + 0.11 / n.sqrt()) * distance;
    let term = |j: i32| {
        f64::from(if j % 2 == 1 { 2 } else { -2 })
            * (-2.0 * f64::from(j * j) * lambda * lambda).exp()
    };
    (distance, (1..=100).map(term).sum::<f64>().clamp(0.0, 1.0))
}

#[test]
fn two_thousand_batches_have_the_statistics_that_are_promised() {
    let compiled = Compiled::new(demo::lined_up(LineUp::default()).expect("no faults"), 1);
    let tally = tally(&compiled);
    assert!(
        tally.not_converged.is_empty(),
        "{}",
        tally.not_converged.join("\n")
    );
    println!(
        "open phases: {}; near saturation: {:?}",
        tally.open_phases, tally.near_saturation
    );
    check_statistic(&tally);
    check_flows(&tally);
    check_intervals(&tally);
    let wrong = &tally.wrong_phases;
    assert!(
        wrong.is_empty(),
        "{} wrong phases:\n{}",
        wrong.len(),
        wrong.join("\n")
    );
}

fn check_statistic(tally: &Tally) {
    let n = tally.statistics.len() as f64;
    let dof = tally.degrees_of_freedom[0];
    assert!(
        tally.degrees_of_freedom.iter().all(|&d| d == dof),
        "one class set, one number"
    );
    let dof = dof as f64;
    let mean = tally.statistics.iter().sum::<f64>() / n;
    let variance = tally
        .statistics
        .iter()
        .map(|s| (s - mean).powi(2))
        .sum::<f64>()
        / (n - 1.0);
    // Variance of a sample variance: (mu4 - sigma^4) / n, with chi-square's
    // fourth central moment mu4 = 12 dof (dof + 4).
    let error_of_mean = (2.0 * dof / n).sqrt();
    let error_of_variance = ((12.0 * dof * (dof + 4.0) - 4.0 * dof * dof) / n).sqrt();
    let (distance, p) = kolmogorov_smirnov(&tally.p_values);
    let rejected = tally.p_values.iter().filter(|p| **p < 0.05).count() as f64 / n;
    println!("{n} batches, {dof} degrees of freedom");
    println!(
        "statistic: mean {mean:.3} +- {error_of_mean:.3}, variance {variance:.2} (2 dof = {}) +- {error_of_variance:.2}",
        2.0 * dof
    );
    println!(
        "p-values: KS distance {distance:.4}, p {p:.4}; {:.2} % below 0.05",
        100.0 * rejected
    );
    // At 95 % confidence one batch in twenty; the range allows for the sample
    // and for the critical value, which 10 000 draws give.
    let accused = tally.accused as f64 / n;
    println!("a suspect is named in {:.2} % of batches", 100.0 * accused);
    assert!((0.039..=0.061).contains(&accused), "{accused}");
    assert!((mean - dof).abs() < 4.0 * error_of_mean, "mean {mean}");
    assert!(
        (variance - 2.0 * dof).abs() < 4.0 * error_of_variance,
        "variance {variance}"
    );
    assert!(p > 0.001, "KS p {p}");
}

fn check_flows(tally: &Tally) {
    let n = tally.statistics.len() as f64;
    for (name, [measured, reconciled]) in &tally.flows {
        println!(
            "{name}: rms error {:.3} sigma measured, {:.3} reconciled",
            (measured / n).sqrt(),
            (reconciled / n).sqrt()
        );
        assert!(reconciled < measured, "{name}");
    }
    let sum = |part: usize| tally.flows.values().map(|sums| sums[part]).sum::<f64>();
    let rms = |part: usize| (sum(part) / n / tally.flows.len() as f64).sqrt();
    println!(
        "all flows: rms error {:.3} sigma measured, {:.3} reconciled",
        rms(0),
        rms(1)
    );
}

fn check_intervals(tally: &Tally) {
    let mut outside = Vec::new();
    let (mut low, mut high) = (("", 1.0), ("", 0.0));
    for (name, [held, all, squares]) in &tally.intervals {
        let coverage = held / all;
        if coverage < low.1 {
            low = (name, coverage);
        }
        if coverage > high.1 {
            high = (name, coverage);
        }
        if !(0.93..=0.97).contains(&coverage) {
            outside.push(format!(
                "{name}: {:.2} % of {all}, rms error {:.3} sigma",
                100.0 * coverage,
                (squares / all).sqrt()
            ));
        }
    }
    let sum = |part: usize| tally.intervals.values().map(|sums| sums[part]).sum::<f64>();
    let pooled = sum(0) / sum(1);
    println!(
        "95 % intervals of {} quantities: pooled {:.3} %",
        tally.intervals.len(),
        100.0 * pooled
    );
    println!(
        "least {} {:.2} %, most {} {:.2} %",
        low.0,
        100.0 * low.1,
        high.0,
        100.0 * high.1
    );
    println!("outside 93 to 97 %: {outside:#?}");
    assert!((0.94..=0.96).contains(&pooled), "pooled coverage {pooled}");
    assert!(outside.is_empty(), "{}", outside.join("\n"));
}

#[test]
fn the_fixture_day_converges_and_shows_its_drifting_meter() {
    let plant = demo::lined_up(LineUp::default()).expect("no faults");
    let compiled = Compiled::new(plant.clone(), 1);
    let mut verdicts: BTreeMap<String, usize> = BTreeMap::new();
    let mut leaders = Vec::new();
    let mut sums: BTreeMap<String, f64> = BTreeMap::new();
    for (number, item) in Day::new(&plant, DAY_SEED).enumerate() {
        let (batch, _) = item.expect("the day runs");
        let report = reconcile(&compiled, &batch);
        assert_ne!(
            report.verdict,
            Verdict::NotConverged,
            "{}: {:?}",
            report.batch,
            report.reason
        );
        // The drift begins at ten o'clock.
        let part = if number <= 120 {
            "before the drift"
        } else {
            "during the drift"
        };
        *verdicts
            .entry(format!("{part}: {:?}", report.verdict))
            .or_default() += 1;
        if number < LATE {
            continue;
        }
        let standardised = report
            .tags
            .iter()
            .filter_map(|(name, tag)| Some((name, tag.standardised_adjustment?.abs())));
        let worst = standardised
            .clone()
            .max_by(|a, b| a.1.total_cmp(&b.1))
            .expect("tested tags");
        leaders.push(worst.0.clone());
        for (name, size) in standardised {
            *sums.entry(name.clone()).or_default() += size;
        }
    }
    println!("verdicts: {verdicts:#?}");
    let mut sums: Vec<(String, f64)> = sums.into_iter().collect();
    sums.sort_by(|a, b| b.1.total_cmp(&a.1));
    let count = leaders.len();
    assert_eq!(count, 24);
    for (name, sum) in &sums[..4] {
        let leads = leaders.iter().filter(|leader| *leader == name).count();
        println!(
            "{name}: standardised adjustment {:.2} on average, the largest in {leads} of {count}",
            sum / count as f64
        );
    }
    // A flow that is hardly checked moves with the one that drifts, and noise
    // can put it first in a batch; over the hours it does not.
    assert_eq!(sums[0].0, DRIFTING_TAG);
    let leads = leaders
        .iter()
        .filter(|leader| *leader == DRIFTING_TAG)
        .count();
    assert!(2 * leads > count, "{leaders:?}");
}
