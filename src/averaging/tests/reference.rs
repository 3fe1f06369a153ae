//! Against a published table, and against NumPy and SciPy
//! (`tests/data/make_averaging.py`).

use super::super::{spikes, steady};
use super::*;
use crate::plant::AveragingMethod;
use serde_json::Value;

fn file(text: &str) -> Value {
    serde_json::from_str(text).unwrap()
}

fn numbers(value: &Value) -> Vec<f64> {
    let list = value.as_array().unwrap().iter();
    list.map(|number| number.as_f64().unwrap()).collect()
}

/// Probabilities of the printed critical values are the printed levels, to the
/// two digits that are printed; 1e-3 against the exact ones.
#[test]
fn the_published_critical_values() {
    let file = file(include_str!(
        "../../../tests/data/published/ssd-von-neumann.json"
    ));
    let levels = numbers(&file["problem"]["levels"]);
    let mut compared = 0;
    for (kind, tolerance) in [("published", 0.01), ("computed_exact", 1e-3)] {
        for (count, row) in file["expected"][kind].as_object().unwrap() {
            let count: usize = count.parse().unwrap();
            for (level, critical) in levels.iter().zip(numbers(row)) {
                let below = steady::probability(count, critical - tolerance);
                let above = steady::probability(count, critical + tolerance);
                assert!(
                    below < *level && *level < above,
                    "{kind} {count} {level}: {below} {above}"
                );
                compared += 1;
            }
        }
    }
    assert_eq!(compared, 24);
}

#[test]
fn tails_by_another_quadrature() {
    let file = file(include_str!("../../../tests/data/averaging.json"));
    for tail in file["tails"].as_array().unwrap() {
        let count = tail["count"].as_u64().unwrap() as usize;
        let ratio = tail["ratio"].as_f64().unwrap();
        let expected = tail["probability"].as_f64().unwrap();
        let found = steady::probability(count, ratio);
        assert!(
            (found - expected).abs() < 1e-7,
            "{count} {ratio}: {found} {expected}"
        );
    }
}

#[test]
fn means_spikes_and_ratios_by_numpy_and_scipy() {
    let file = file(include_str!("../../../tests/data/averaging.json"));
    let mut spikes_seen = 0;
    for case in file["cases"].as_array().unwrap() {
        let name = case["name"].as_str().unwrap();
        let values = numbers(&case["values"]);
        let times = numbers(&case["times"]);
        let list: Vec<Sample> = times
            .iter()
            .zip(&values)
            .map(|(&at, &value)| sample(at, value))
            .collect();
        for (method, key) in [
            (AveragingMethod::Stepped, "stepped"),
            (AveragingMethod::Linear, "linear"),
        ] {
            let settings = TagAveraging {
                method,
                spikes: None,
                ..usual()
            };
            let mut plant = plant();
            plant.tags[0].range = None;
            plant.averaging.usual = settings;
            let map = HashMap::from([("A", list.as_slice())]);
            let batch = batch(
                &plant,
                START,
                START + Duration::seconds_f64(LENGTH),
                "b",
                &map,
            );
            let (found, expected) = (
                batch.readings[0].value.unwrap(),
                case[key].as_f64().unwrap(),
            );
            assert!(
                (found / expected - 1.0).abs() < 1e-11,
                "{name} {key}: {found} {expected}"
            );
        }
        let ratio = steady::ratio(&values).unwrap();
        assert!(
            (ratio / case["ratio"].as_f64().unwrap() - 1.0).abs() < 1e-10,
            "{name}"
        );
        let expected: Vec<usize> = numbers(&case["spikes"])
            .iter()
            .map(|&i| i as usize)
            .collect();
        assert_eq!(spikes::find(&values, 5, 4.0, 0.0), expected, "{name}");
        spikes_seen += expected.len();
    }
    assert_eq!(spikes_seen, 5);
}
