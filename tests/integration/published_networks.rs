//! Published reconciliation problems, and networks that a general-purpose
//! optimiser solved, through the solver's public face.
//!
//! Each file under `tests/data/published` names the publication (`source`) and
//! where the numbers in it come from (`value_origin`). The files under
//! `tests/data/networks` are invented (made by `benches/peers/generate.py`);
//! `ipopt.json` there holds the objectives of CasADi's IPOPT and the versions
//! that gave them (`benches/peers/compare.py --objectives`).

use std::path::{Path, PathBuf};

use counterpoise::solver::{Options, Problem, Status, Symbolic, solve};
use serde_json::Value;

#[path = "../../benches/peers/network.rs"]
mod network;

#[path = "published_networks/case.rs"]
mod case;

#[path = "published_networks/pai_fisher.rs"]
mod pai_fisher;

use case::{Case, Function, linear};
use network::Network;

fn data(path: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("tests/data")
        .join(path)
}

fn published(name: &str) -> Value {
    let path = data(&format!("published/{name}.json"));
    let text = std::fs::read_to_string(&path)
        .unwrap_or_else(|error| panic!("{}: {error}", path.display()));
    serde_json::from_str(&text).expect("JSON")
}

fn numbers(value: &Value) -> Vec<f64> {
    value
        .as_array()
        .expect("a list")
        .iter()
        .map(|v| v.as_f64().expect("a number"))
        .collect()
}

fn matrix(value: &Value) -> Vec<Vec<f64>> {
    value
        .as_array()
        .expect("a list")
        .iter()
        .map(numbers)
        .collect()
}

#[track_caller]
fn near(got: f64, expected: f64, tolerance: f64) {
    assert!(
        (got - expected).abs() <= tolerance,
        "got {got}, expected {expected} within {tolerance}"
    );
}

#[track_caller]
fn all_near(got: &[f64], expected: &[f64], relative: f64) {
    assert_eq!(got.len(), expected.len());
    for (got, expected) in got.iter().zip(expected) {
        near(*got, *expected, relative * expected.abs());
    }
}

fn all_read(values: &[f64], sigma: &[f64]) -> Vec<(usize, f64, f64)> {
    values
        .iter()
        .zip(sigma)
        .enumerate()
        .map(|(j, (&y, &sigma))| (j, y, sigma))
        .collect()
}

#[test]
fn exchanger_with_bypass_all_flows_read() {
    let case = published("lin-nj-bypass-all");
    let (problem, expected) = (&case["problem"], &case["expected"]);
    let readings = all_read(&numbers(&problem["measured"]), &numbers(&problem["sigma"]));
    let solved = Case::network(&matrix(&problem["incidence"]), &readings).solve(&[50.0; 6]);
    for (got, printed) in solved
        .outcome
        .x
        .iter()
        .zip(numbers(&expected["published"]["reconciled"]))
    {
        near(*got, printed, 0.005);
    }
    let computed = &expected["computed"];
    near(
        solved.outcome.objective,
        computed["J"].as_f64().expect("J"),
        1e-6,
    );
    assert_eq!(solved.classes.degrees_of_freedom, 4);
    for (j, variance) in numbers(&computed["reconciled_variance_diag"])
        .into_iter()
        .enumerate()
    {
        near(solved.covariances[j][j], variance, 1e-7);
    }
    near(
        solved.covariances[0][1],
        computed["cov_1_2"].as_f64().expect("a number"),
        1e-7,
    );
    near(
        solved.covariances[1][2],
        computed["cov_2_3"].as_f64().expect("a number"),
        1e-7,
    );
}

#[test]
fn level_network_of_differences_between_unread_heads() {
    let case = published("lin-level-net-unweighted");
    let problem = &case["problem"];
    let rows = matrix(&problem["design_rows"]);
    let readings = rows
        .iter()
        .zip(numbers(&problem["obs_vector"]))
        .map(|(row, y)| (linear(row, 0.0), y, 1.0))
        .collect();
    let solved = Case::new(3, Vec::new(), readings).solve(&[100.0; 3]);
    let published = &case["expected"]["published"];
    for (j, name) in ["A", "B", "C"].into_iter().enumerate() {
        near(
            solved.outcome.x[j],
            published[name].as_f64().expect("a level"),
            0.0006,
        );
    }
    assert_eq!(solved.classes.degrees_of_freedom, 4);
    let unit_weight = (solved.outcome.objective / 4.0).sqrt();
    near(unit_weight, published["S0"].as_f64().expect("S0"), 0.0006);
}

#[test]
fn two_product_formula() {
    let case = published("met-two-product");
    let problem = &case["problem"];
    let (feed, rich, tail) = (
        numbers(&problem["feed"]),
        numbers(&problem["concentrate"]),
        numbers(&problem["tailing"]),
    );
    let printed = numbers(&case["expected"]["published_C_percent"]);
    for i in 0..printed.len() {
        // Feed f = C c + (1 - C) t with C the fraction that becomes concentrate.
        let balance = linear(&[rich[i] - tail[i]], feed[i] - tail[i]);
        let solved = Case::new(1, vec![balance], Vec::new()).solve(&[0.5]);
        near(100.0 * solved.outcome.x[0], printed[i], 0.006);
        assert_eq!(solved.classes.degrees_of_freedom, 0);
        assert!(solved.classes.state_observable(0));
    }
}

#[test]
fn steam_metering_system_of_28_streams() {
    let case = published("net-serth-heenan");
    let (problem, expected) = (&case["problem"], &case["expected"]["computed"]);
    let balances: Vec<Vec<f64>> = matrix(&problem["nodes_signed_streams"])
        .iter()
        .map(|node| {
            let mut row = vec![0.0; 28];
            node.iter()
                .for_each(|signed| row[signed.abs() as usize - 1] = signed.signum());
            row
        })
        .collect();
    let measured = numbers(&problem["measured"]);
    let solved = Case::network(&balances, &all_read(&measured, &numbers(&problem["sigma"])))
        .solve(&measured);
    near(
        solved.outcome.objective,
        expected["J"].as_f64().expect("J"),
        1e-5,
    );
    assert_eq!(solved.classes.degrees_of_freedom, 11);
    assert!(solved.classes.redundant.iter().all(|&redundant| redundant));
    all_near(&solved.outcome.x, &numbers(&expected["reconciled"]), 1e-6);
    for (i, z) in numbers(&expected["measurement_z"]).into_iter().enumerate() {
        near(solved.standardised(i).abs(), z, 1e-5);
    }
}

#[test]
fn nonlinear_problem_with_three_unread_variables() {
    let case = published("nl-pai-fisher");
    let start = &case["problem"]["start"];
    let start: Vec<f64> = numbers(&start["x"])
        .into_iter()
        .chain(numbers(&start["u"]))
        .collect();
    let mut measured = numbers(&case["problem"]["measured"]);
    let expected = &case["expected"];
    for (fifth, answer) in [
        (None, &expected["computed"]),
        (Some(5.4), &expected["variant_x5_5p4"]),
    ] {
        measured[4] = fifth.unwrap_or(measured[4]);
        let observations = (0..5)
            .map(|j| {
                let unit: Vec<f64> = (0..8).map(|i| f64::from(i == j)).collect();
                (linear(&unit, 0.0), measured[j], 1.0)
            })
            .collect();
        let solved = Case::new(8, pai_fisher::relations(), observations).solve(&start);
        let reconciled: Vec<f64> = numbers(&answer["x"])
            .into_iter()
            .chain(numbers(&answer["u"]))
            .collect();
        all_near(&solved.outcome.x, &reconciled, 1e-6);
        near(
            solved.outcome.objective,
            answer["J"].as_f64().expect("J"),
            1e-6,
        );
        assert_eq!(solved.classes.degrees_of_freedom, 3);
        if fifth.is_none() {
            let printed = &expected["published"];
            let tolerances = [6e-5, 6e-5, 6e-5, 6e-5, 6e-5, 6e-4, 6e-5, 6e-5];
            let printed = numbers(&printed["x"])
                .into_iter()
                .chain(numbers(&printed["u"]));
            for ((got, printed), tolerance) in solved.outcome.x.iter().zip(printed).zip(tolerances)
            {
                near(*got, printed, tolerance);
            }
        }
    }
}

#[test]
fn binary_column_with_and_without_normalised_compositions() {
    let case = published("nl-bilinear-column");
    let problem = &case["problem"];
    let (measured, sigma) = (numbers(&problem["measured"]), numbers(&problem["sigma"]));
    // F1 x1j = F2 x2j + F3 x3j in the order F1 x11 x12 F2 x21 x22 F3 x31 x32.
    let component = |j: usize| -> (Function, Vec<usize>) {
        let function = move |v: &[f64]| {
            let mut gradient = vec![0.0; 9];
            let mut sum = 0.0;
            for (first, sign) in [(0, 1.0), (3, -1.0), (6, -1.0)] {
                sum += sign * v[first] * v[first + j];
                gradient[first] = sign * v[first + j];
                gradient[first + j] = sign * v[first];
            }
            (sum, gradient)
        };
        (Box::new(function), vec![0, j, 3, 3 + j, 6, 6 + j])
    };
    let whole = |first: usize| {
        let row: Vec<f64> = (0..9)
            .map(|i| f64::from(i == first || i == first + 1))
            .collect();
        linear(&row, 1.0)
    };
    let expected = &case["expected"];
    for (normalised, answer, freedom) in [
        (false, &expected["computed_a"], 2),
        (true, &expected["computed_b"], 5),
    ] {
        let mut relations = vec![component(1), component(2)];
        if normalised {
            relations.extend([whole(1), whole(4), whole(7)]);
        }
        let observations = (0..9)
            .map(|j| {
                let unit: Vec<f64> = (0..9).map(|i| f64::from(i == j)).collect();
                (linear(&unit, 0.0), measured[j], sigma[j])
            })
            .collect();
        let mut problem = Case::new(9, relations, observations);
        problem.state_scale = sigma.clone();
        let solved = problem.solve(&measured);
        all_near(&solved.outcome.x, &numbers(&answer["x"]), 1e-5);
        all_near(
            &[solved.outcome.objective],
            &[answer["J"].as_f64().expect("J")],
            1e-5,
        );
        assert_eq!(solved.classes.degrees_of_freedom, freedom);
    }
}

#[test]
fn observability_and_redundancy_of_partly_read_flows() {
    let case = published("obs-nj-classification");
    let problem = &case["problem"];
    let balances = matrix(&problem["incidence"]);
    for (set, name) in problem["sets"]
        .as_array()
        .expect("sets")
        .iter()
        .zip(["set1", "set2"])
    {
        let expected = &case["expected"]["computed"][name];
        let readings: Vec<(usize, f64, f64)> = set["measured"]
            .as_object()
            .expect("readings")
            .iter()
            .map(|(stream, value)| {
                (
                    stream.parse::<usize>().expect("a number") - 1,
                    value.as_f64().expect("a flow"),
                    1.0,
                )
            })
            .collect();
        let solved = Case::network(&balances, &readings).solve(&[50.0; 6]);
        let streams = |key: &str| -> Vec<usize> {
            numbers(&expected[key])
                .iter()
                .map(|&v| v as usize - 1)
                .collect()
        };
        let read: Vec<usize> = readings.iter().map(|&(j, _, _)| j).collect();
        let unread = |observable: bool| -> Vec<usize> {
            (0..6)
                .filter(|j| !read.contains(j) && solved.classes.state_observable(*j) == observable)
                .collect()
        };
        assert_eq!(unread(true), streams("observable"));
        assert_eq!(unread(false), streams("unobservable"));
        let of_class = |redundant: bool| -> Vec<usize> {
            (0..read.len())
                .filter(|&i| solved.classes.redundant[i] == redundant)
                .map(|i| read[i])
                .collect()
        };
        assert_eq!(of_class(true), streams("redundant"));
        assert_eq!(of_class(false), streams("nonredundant"));
        assert_eq!(
            solved.classes.degrees_of_freedom as f64,
            expected["dof"].as_f64().expect("dof")
        );
        let estimates = match name {
            "set1" => numbers(&case["expected"]["published_remembered"]["set1_estimates"]),
            _ => vec![
                case["expected"]["computed"]["set2_estimate_1_and_6"]
                    .as_f64()
                    .expect("an estimate"),
            ],
        };
        for (j, estimate) in estimates.into_iter().enumerate() {
            near(solved.outcome.x[j], estimate, 0.005);
        }
    }
}

#[test]
fn statistics_of_a_biased_flow() {
    let case = published("ged-nj-bypass-biased");
    let (problem, expected) = (&case["problem"], &case["expected"]);
    let readings = all_read(&numbers(&problem["measured"]), &numbers(&problem["sigma"]));
    let balances = matrix(&problem["incidence"]);
    let solved = Case::network(&balances, &readings).solve(&[50.0; 6]);
    let computed = &expected["computed"];
    near(
        solved.outcome.objective,
        expected["published_remembered"]["global_test"]
            .as_f64()
            .expect("a number"),
        0.0005,
    );
    all_near(&solved.outcome.x, &numbers(&computed["reconciled"]), 1e-8);
    for (i, z) in numbers(&computed["measurement_z"]).into_iter().enumerate() {
        near(solved.standardised(i).abs(), z, 1e-4);
    }
    for (i, ratio) in numbers(&computed["glr_measurement_T"])
        .into_iter()
        .enumerate()
    {
        near(solved.standardised(i).powi(2), ratio, 1e-4);
    }
    for (k, ratio) in numbers(&computed["glr_leak_T"]).into_iter().enumerate() {
        near(solved.leak_ratio[k], ratio, 1e-4);
    }
    let largest = (0..6).max_by(|&a, &b| {
        solved
            .standardised(a)
            .abs()
            .total_cmp(&solved.standardised(b).abs())
    });
    assert_eq!(largest, Some(1));
    let bias = solved.outcome.evaluation.r[1] / solved.redundancy[1];
    near(
        bias,
        computed["bias_estimate_2"].as_f64().expect("a bias"),
        1e-6,
    );
    let others: Vec<(usize, f64, f64)> = readings
        .iter()
        .copied()
        .filter(|&(j, _, _)| j != 1)
        .collect();
    let without = Case::network(&balances, &others).solve(&[50.0; 6]);
    near(
        without.outcome.objective,
        computed["J_after_deleting_2"].as_f64().expect("J"),
        1e-6,
    );
    let kept: Vec<f64> = [0, 2, 3, 4, 5]
        .iter()
        .map(|&j| without.outcome.x[j])
        .collect();
    all_near(
        &kept,
        &numbers(&computed["x_after_deleting_2_streams_13456"]),
        1e-8,
    );
}

#[test]
fn networks_reach_the_objective_of_a_general_purpose_optimiser_or_a_lower_one() {
    let text = std::fs::read_to_string(data("networks/ipopt.json")).expect("ipopt.json");
    let file: Value = serde_json::from_str(&text).expect("JSON");
    let objectives = file["objective"].as_object().expect("objectives");
    assert_eq!(objectives.len(), 12);
    for (name, objective) in objectives {
        let network = Network::read(&data(&format!("networks/{name}.json")));
        let symbolic = Symbolic::new(network.structure());
        let outcome = solve(&network, &symbolic, &network.start, &Options::default());
        assert_eq!(outcome.status, Status::Converged, "{name}");
        let peer = objective.as_f64().expect("a number");
        assert!(
            outcome.objective <= peer * (1.0 + 1e-6),
            "{name}: {} against {peer}",
            outcome.objective
        );
        assert!(outcome.worst_residual_scaled <= 1e-10);
    }
}
