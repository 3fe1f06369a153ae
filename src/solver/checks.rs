//! What must hold of any right estimator, whatever the problem: identities
//! between statistics, and changes of a problem that may change nothing.

use super::testing::{Polynomial, Random, Reading, Sample, random_network};
use super::{
    Classes, Covariance, Options, Outcome, Problem, Reason, Status, Symbolic, classify, solve,
};

/// A solved sample with everything known about it.
struct Solved {
    outcome: Outcome,
    classes: Classes,
    redundancy: Vec<f64>,
    state_variance: Vec<f64>,
    multiplier_variance: Vec<f64>,
}

impl Solved {
    fn new(sample: &Sample) -> Self {
        let outcome = sample.solve(&vec![5.0; sample.structure().states]);
        assert_eq!(outcome.status, Status::Converged);
        let (states, relations) = (sample.state_scale(), sample.relation_scale());
        let structure = sample.structure();
        let classes = classify(
            structure,
            &outcome.evaluation,
            states,
            relations,
            &outcome.active_bounds,
            &sample.used(),
        );
        let symbolic = Symbolic::new(structure);
        let covariance = Covariance::new(
            &symbolic,
            structure,
            &outcome.evaluation,
            states,
            relations,
            &classes,
        );
        Solved {
            redundancy: (0..sample.readings.len())
                .map(|i| covariance.redundancy(i))
                .collect(),
            state_variance: (0..structure.states)
                .map(|j| covariance.state_variance(j))
                .collect(),
            multiplier_variance: (0..sample.relations.len())
                .map(|k| covariance.multiplier_variance(k))
                .collect(),
            outcome,
            classes,
        }
    }

    /// Adjustment over its own sigma.
    fn standardised(&self, i: usize) -> f64 {
        self.outcome.evaluation.r[i] / self.redundancy[i].sqrt()
    }
}

fn close(a: f64, b: f64, tolerance: f64) -> bool {
    (a - b).abs() <= tolerance * (1.0 + a.abs().max(b.abs()))
}

/// A linear network with plausible readings and state scales.
fn network(seed: u64) -> Sample {
    let mut random = Random(seed);
    let mut sample = random_network(&mut random, 7, 16, 0.7);
    sample.state_scale.fill(1.0);
    sample
}

fn single(state: usize, value: f64, sigma: f64) -> Reading {
    Reading {
        of: Polynomial::linear(&[(state, 1.0)]),
        value,
        sigma,
        used: true,
    }
}

/// Flows 0 = 1 + 2, all read: one degree of freedom.
fn splitter(values: [f64; 3], sigmas: [f64; 3]) -> Sample {
    let readings = (0..3).map(|j| single(j, values[j], sigmas[j])).collect();
    Sample::new(
        3,
        vec![Polynomial::linear(&[(0, 1.0), (1, -1.0), (2, -1.0)])],
        readings,
        Vec::new(),
    )
}

#[test]
fn redundancies_sum_to_the_degrees_of_freedom() {
    for seed in 0..60 {
        let solved = Solved::new(&network(seed));
        let sum: f64 = solved.redundancy.iter().sum();
        assert!(
            close(sum, solved.classes.degrees_of_freedom as f64, 1e-5),
            "{sum}"
        );
    }
}

#[test]
fn at_one_degree_of_freedom_all_standardised_adjustments_agree() {
    let solved = Solved::new(&splitter([10.0, 6.0, 5.0], [0.5, 0.2, 0.9]));
    assert_eq!(solved.classes.degrees_of_freedom, 1);
    for i in 0..3 {
        assert!(close(
            solved.standardised(i).powi(2),
            solved.outcome.objective,
            1e-7
        ));
    }
    let standardised = solved.outcome.multipliers[0].powi(2) / solved.multiplier_variance[0];
    assert!(close(standardised, solved.outcome.objective, 1e-7));
}

#[test]
fn exact_readings_give_zero_and_a_bias_gives_redundancy_times_its_square() {
    for bias in [0.0, 3.0] {
        let exact = splitter([10.0, 6.0 + bias, 4.0], [0.5, 0.2, 0.9]);
        let solved = Solved::new(&exact);
        let expected = solved.redundancy[1] * (bias / 0.2_f64).powi(2);
        assert!(close(solved.outcome.objective, expected, 1e-9));
    }
}

#[test]
fn deleting_a_reading_is_predicted_by_adjustment_over_redundancy() {
    for seed in 0..30 {
        let mut sample = network(100 + seed);
        let before = Solved::new(&sample);
        let Some(i) = (0..sample.readings.len()).find(|&i| before.redundancy[i] > 0.05) else {
            continue;
        };
        sample.readings[i].used = false;
        let after = Solved::new(&sample);
        let reading = &sample.readings[i];
        let predicted =
            reading.value - before.outcome.evaluation.r[i] * reading.sigma / before.redundancy[i];
        assert!(close(reading.of.value(&after.outcome.x), predicted, 1e-4));
        let drop = before.outcome.objective - after.outcome.objective;
        assert!(close(drop, before.standardised(i).powi(2), 1e-4));
    }
}

#[test]
fn multipliers_are_the_slope_of_the_objective() {
    for seed in 0..30 {
        let mut sample = network(200 + seed);
        let before = Solved::new(&sample);
        for k in 0..sample.relations.len() {
            if before.classes.dependent_relations[k] {
                continue;
            }
            let mut objective = [0.0; 2];
            for (side, value) in [1e-3, -1e-3].into_iter().zip(&mut objective) {
                sample.offsets[k] = side;
                *value = Solved::new(&sample).outcome.objective;
                sample.offsets[k] = 0.0;
            }
            // L = 1/2 sum r^2 + l (f - e): half the slope of the sum by e is -l.
            let slope = 0.5 * (objective[0] - objective[1]) / 2e-3;
            assert!(
                close(slope, -before.outcome.multipliers[k], 1e-5),
                "{slope} {}",
                before.outcome.multipliers[k]
            );
        }
    }
}

#[test]
fn a_reading_split_in_two_of_root_two_sigma_adds_one_degree_of_freedom_only() {
    for seed in 0..30 {
        let mut sample = network(300 + seed);
        let before = Solved::new(&sample);
        let mut readings = sample.readings.clone();
        readings[0].sigma *= 2.0_f64.sqrt();
        readings.push(readings[0].clone());
        sample = Sample::new(16, sample.relations, readings, Vec::new());
        let after = Solved::new(&sample);
        let more = usize::from(sample.readings[0].used);
        assert_eq!(
            after.classes.degrees_of_freedom,
            before.classes.degrees_of_freedom + more
        );
        same_answer(&before, &after);
    }
}

/// Same states where they are observable, same objective, same variances.
fn same_answer(a: &Solved, b: &Solved) {
    assert!(close(a.outcome.objective, b.outcome.objective, 1e-8));
    for j in 0..a.outcome.x.len() {
        assert_eq!(a.classes.state_observable(j), b.classes.state_observable(j));
        if a.classes.state_observable(j) {
            assert!(close(a.outcome.x[j], b.outcome.x[j], 1e-6));
            assert!(close(a.state_variance[j], b.state_variance[j], 1e-4));
        }
    }
}

#[test]
fn duplicated_relations_and_sums_of_relations_change_nothing() {
    for seed in 0..30 {
        let sample = network(400 + seed);
        let before = Solved::new(&sample);
        let mut relations = sample.relations.clone();
        relations.push(relations[0].clone());
        relations.push(Polynomial(
            relations
                .iter()
                .take(4)
                .flat_map(|relation| relation.0.clone())
                .collect(),
        ));
        let after = Solved::new(&Sample::new(
            16,
            relations,
            sample.readings.clone(),
            Vec::new(),
        ));
        assert_eq!(
            before.classes.degrees_of_freedom,
            after.classes.degrees_of_freedom
        );
        assert_eq!(before.classes.redundant, after.classes.redundant);
        same_answer(&before, &after);
    }
}

#[test]
fn order_changes_nothing() {
    for seed in 0..30 {
        let sample = network(500 + seed);
        let before = Solved::new(&sample);
        let mut relations = sample.relations.clone();
        relations.reverse();
        let mut readings = sample.readings.clone();
        readings.reverse();
        same_answer(
            &before,
            &Solved::new(&Sample::new(16, relations, readings, Vec::new())),
        );
    }
}

#[test]
fn a_reading_that_nothing_checks_changes_nothing() {
    for seed in 0..60 {
        let sample = network(600 + seed);
        let before = Solved::new(&sample);
        let Some(j) = (0..16).find(|&j| !before.classes.state_observable(j)) else {
            continue;
        };
        let mut readings = sample.readings.clone();
        readings.push(single(j, 123.0, 1.0));
        let after = Solved::new(&Sample::new(
            16,
            sample.relations.clone(),
            readings,
            Vec::new(),
        ));
        assert_eq!(after.classes.redundant.last(), Some(&false));
        assert_eq!(
            before.classes.degrees_of_freedom,
            after.classes.degrees_of_freedom
        );
        assert!(close(
            before.outcome.objective,
            after.outcome.objective,
            1e-8
        ));
        assert!(close(after.outcome.x[j], 123.0, 1e-6));
    }
}

#[test]
fn the_statistic_has_the_mean_and_variance_of_chi_square() {
    let mut sample = network(701);
    let truth = Solved::new(&sample);
    let dof = truth.classes.degrees_of_freedom as f64;
    assert!(dof >= 4.0);
    let mut random = Random(9);
    let symbolic = Symbolic::new(sample.structure());
    let statistics: Vec<f64> = (0..4000)
        .map(|_| {
            for reading in &mut sample.readings {
                reading.value =
                    reading.of.value(&truth.outcome.x) + reading.sigma * random.normal();
            }
            solve(&sample, &symbolic, &truth.outcome.x, &Options::default()).objective
        })
        .collect();
    let count = statistics.len() as f64;
    let mean = statistics.iter().sum::<f64>() / count;
    let variance = statistics.iter().map(|s| (s - mean).powi(2)).sum::<f64>() / (count - 1.0);
    // Four standard errors: of the mean, and of the variance of a chi-square sample.
    assert!(
        (mean - dof).abs() < 4.0 * (2.0 * dof / count).sqrt(),
        "{mean} {dof}"
    );
    let fourth = 12.0 * dof * (dof + 4.0);
    assert!(
        (variance - 2.0 * dof).abs() < 4.0 * ((fourth - 4.0 * dof * dof) / count).sqrt(),
        "{variance}"
    );
}

#[test]
fn the_same_input_gives_the_same_bits() {
    let sample = network(800);
    let (a, b) = (Solved::new(&sample), Solved::new(&sample));
    assert_eq!(a.outcome.x, b.outcome.x);
    assert_eq!(a.redundancy, b.redundancy);
    assert_eq!(a.outcome.multipliers, b.outcome.multipliers);
}

/// Flows 0 = 1 + 2 where the readings want flow 2 below zero; relation 1 is flow 2 >= 0.
fn with_bound(second: f64) -> Sample {
    let relations = vec![
        Polynomial::linear(&[(0, 1.0), (1, -1.0), (2, -1.0)]),
        Polynomial::linear(&[(2, 1.0)]),
    ];
    Sample::new(
        3,
        relations,
        vec![single(0, 10.0, 1.0), single(1, second, 1.0)],
        vec![1],
    )
}

#[test]
fn a_violated_bound_becomes_an_equation_and_adds_a_degree_of_freedom() {
    let solved = Solved::new(&with_bound(12.0));
    assert_eq!(solved.outcome.active_bounds, [true]);
    assert!(close(solved.outcome.x[0], 11.0, 1e-9) && solved.outcome.x[2].abs() < 1e-9);
    assert!(solved.outcome.multipliers[1] < 0.0);
    assert_eq!(solved.classes.degrees_of_freedom, 1);
}

#[test]
fn a_bound_that_holds_stays_out_of_use() {
    let solved = Solved::new(&with_bound(8.0));
    assert_eq!(solved.outcome.active_bounds, [false]);
    assert!(close(solved.outcome.x[2], 2.0, 1e-9));
    assert_eq!(
        (
            solved.classes.degrees_of_freedom,
            solved.outcome.multipliers[1]
        ),
        (0, 0.0)
    );
}

#[test]
fn a_bound_that_another_bound_makes_needless_is_let_go() {
    // Three flows out of a known one, each wanted below zero but the last: the sum pins them.
    let mut relations = vec![Polynomial::linear(&[
        (0, 1.0),
        (1, -1.0),
        (2, -1.0),
        (3, -1.0),
    ])];
    relations.extend((1..4).map(|j| Polynomial::linear(&[(j, 1.0)])));
    let readings = vec![
        single(0, 1.0, 0.001),
        single(1, -2.0, 1.0),
        single(2, -1.0, 1.0),
        single(3, 0.4, 1.0),
    ];
    let solved = Solved::new(&Sample::new(4, relations, readings, vec![1, 2, 3]));
    // Without bounds each flow out is raised by 1.2: -0.8, 0.2, 1.6.
    assert_eq!(solved.outcome.active_bounds, [true, true, false]);
    assert!(close(solved.outcome.x[3], 1.0, 1e-5));
}

#[test]
fn a_start_outside_the_domain_is_a_status() {
    let mut sample = splitter([10.0, 6.0, 4.0], [1.0; 3]);
    sample.lowest[2] = 6.0;
    let outcome = sample.solve(&[5.0; 3]);
    assert_eq!(
        outcome.status,
        Status::NotConverged(Reason::OutsideDomain { state: 2 })
    );
}

#[test]
fn steps_out_of_the_domain_are_shortened() {
    // x^2 = y with y read as 4, from a start close to the edge x > 0.
    let relation = Polynomial(vec![(1.0, vec![0, 0]), (-1.0, vec![1])]);
    let mut sample = Sample::new(2, vec![relation], vec![single(1, 4.0, 0.1)], Vec::new());
    sample.lowest[0] = 1e-3;
    let outcome = sample.solve(&[0.01, 4.0]);
    assert_eq!(outcome.status, Status::Converged);
    assert!(close(outcome.x[0], 2.0, 1e-8));
}

#[test]
fn relations_that_contradict_each_other_do_not_converge() {
    let mut sample = splitter([10.0, 6.0, 4.0], [1.0; 3]);
    sample.relations.push(sample.relations[0].clone());
    let mut sample = Sample::new(3, sample.relations, sample.readings, Vec::new());
    sample.offsets[1] = 1.0;
    let outcome = sample.solve(&[5.0; 3]);
    assert!(matches!(outcome.status, Status::NotConverged(_)));
    assert!(outcome.worst_relation.is_some() && outcome.worst_residual_scaled > 0.1);
}

#[test]
fn a_hold_does_not_move_the_answer() {
    let sample = network(900);
    let symbolic = Symbolic::new(sample.structure());
    let free = solve(&sample, &symbolic, &[5.0; 16], &Options::default());
    let hold = Some(super::Hold {
        weights: vec![10.0; 16],
        steps: 3,
    });
    let held = solve(
        &sample,
        &symbolic,
        &[5.0; 16],
        &Options {
            hold,
            ..Options::default()
        },
    );
    assert_eq!(held.status, Status::Converged);
    assert!(close(free.objective, held.objective, 1e-9));
}
