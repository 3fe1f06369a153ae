//! The estimator against an independent reference: a dense null-space solution
//! with forward IF97, written from the design alone (`tests/reference`).

use counterpoise::ingest;
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{self, Format};
use serde_json::Value;
use time::macros::datetime;

/// Agreement of reconciled values, relative.
const VALUES: f64 = 1e-5;
/// Agreement of temperatures, K.
const TEMPERATURES: f64 = 2e-3;
/// Agreement of uncertainties, relative.
const UNCERTAINTIES: f64 = 5e-3;

/// Collects differences under the path where they stand.
struct Differences(Vec<String>);

impl Differences {
    fn exact(&mut self, path: &str, ours: &Value, theirs: &Value) {
        if ours != theirs {
            self.0.push(format!("{path}: {ours}, reference {theirs}"));
        }
    }

    /// Numbers within `relative` of the reference or `absolute` of it; both or
    /// neither null.
    fn number(&mut self, path: &str, ours: &Value, theirs: &Value, relative: f64, absolute: f64) {
        let same = match (ours.as_f64(), theirs.as_f64()) {
            (Some(a), Some(b)) => (a - b).abs() <= (relative * b.abs()).max(absolute),
            (None, None) => true,
            _ => false,
        };
        if !same {
            self.0.push(format!("{path}: {ours}, reference {theirs}"));
        }
    }

    fn tags(&mut self, part: &str, ours: &Value, theirs: &Value) {
        for (name, theirs) in theirs[part].as_object().unwrap() {
            let ours = &ours[part][name];
            let path = |field: &str| format!("{part}.{name}.{field}");
            self.exact(&path("class"), &ours["class"], &theirs["class"]);
            let sized = theirs["uncertainty_reconciled"].as_f64().unwrap_or(0.0);
            let near = 1e-5 * sized;
            for field in ["reconciled", "adjustment"] {
                self.number(&path(field), &ours[field], &theirs[field], VALUES, near);
            }
            // A hundredth of the edge between hardly redundant and redundant is
            // all that a redundancy near zero has to be right to.
            for (field, near) in [("uncertainty_reconciled", 1e-7), ("redundancy", 1e-5)] {
                let (ours, theirs) = (&ours[field], &theirs[field]);
                self.number(&path(field), ours, theirs, UNCERTAINTIES, near);
            }
            // The reference has one for hardly redundant tags too, where ours has none.
            if theirs["class"] != "hardly-redundant" {
                let field = "standardised_adjustment";
                self.number(
                    &path(field),
                    &ours[field],
                    &theirs[field],
                    UNCERTAINTIES,
                    1e-4,
                );
            }
        }
    }

    fn quantity(&mut self, path: &str, ours: &Value, theirs: &Value, absolute: f64) {
        self.exact(&format!("{path}.class"), &ours["class"], &theirs["class"]);
        let path = |field: &str| format!("{path}.{field}");
        self.number(
            &path("value"),
            &ours["value"],
            &theirs["value"],
            VALUES,
            absolute,
        );
        let field = "uncertainty";
        self.number(
            &path(field),
            &ours[field],
            &theirs[field],
            UNCERTAINTIES,
            1e-9,
        );
    }

    fn equipment(&mut self, ours: &Value, theirs: &Value) {
        for (name, theirs) in theirs["equipment"].as_object().unwrap() {
            let ours = &ours["equipment"][name];
            for field in ["heat", "work", "power", "loss"] {
                if theirs[field].is_object() {
                    let path = format!("equipment.{name}.{field}");
                    self.quantity(&path, &ours[field], &theirs[field], 1e-3);
                }
            }
            let pairs = imbalances(&ours["imbalance"], &theirs["imbalance"]);
            for (side, ours, theirs) in pairs {
                for field in ["value", "uncertainty", "standardised"] {
                    let path = format!("equipment.{name}.imbalance.{side}.{field}");
                    self.number(&path, &ours[field], &theirs[field], UNCERTAINTIES, 1e-4);
                }
            }
        }
    }
}

/// Imbalances side by side; a piece of equipment of one side may call it what
/// it likes.
fn imbalances<'a>(ours: &'a Value, theirs: &'a Value) -> Vec<(String, &'a Value, &'a Value)> {
    let mut pairs = vec![("energy".to_owned(), &ours["energy"], &theirs["energy"])];
    let sides = |imbalance: &'a Value| -> Vec<(&'a String, &'a Value)> {
        imbalance["mass"]
            .as_object()
            .map_or_else(Vec::new, |sides| sides.iter().collect())
    };
    let (a, b) = (sides(ours), sides(theirs));
    if let ([(_, one)], [(_, other)]) = (&a[..], &b[..]) {
        pairs.push(("mass".to_owned(), one, other));
        return pairs;
    }
    for (side, theirs) in b {
        pairs.push((side.clone(), &ours["mass"][side], theirs));
    }
    pairs
}

fn compare(plant: &str, batches: &str, expected: &str) {
    let file = plant::read(plant, Format::Toml).unwrap();
    let compiled = Compiled::new(file.plant, 1);
    assert_eq!(batches.lines().count(), expected.lines().count());
    for (line, expected) in batches.lines().zip(expected.lines()) {
        let parsed = ingest::parse(line.as_bytes(), datetime!(2090-01-01 0:00 UTC)).unwrap();
        let ours = serde_json::to_value(reconcile(&compiled, &parsed.batch)).unwrap();
        let theirs: Value = serde_json::from_str(expected).unwrap();
        let mut differences = Differences(Vec::new());
        differences.exact("verdict", &ours["verdict"], &theirs["verdict"]);
        for (field, tolerance) in [
            ("statistic", 1e-6),
            ("critical_value", 1e-6),
            ("p_value", 1e-5),
        ] {
            let (a, b) = (&ours["global_test"][field], &theirs["global_test"][field]);
            differences.number(field, a, b, tolerance, 1e-9);
        }
        let field = "degrees_of_freedom";
        differences.exact(
            field,
            &ours["global_test"][field],
            &theirs["global_test"][field],
        );
        differences.tags("tags", &ours, &theirs);
        differences.tags("assumptions", &ours, &theirs);
        for (name, theirs) in theirs["streams"].as_object().unwrap() {
            for (field, absolute) in [
                ("mass_flow", 1e-7),
                ("pressure", 1e-7),
                ("temperature", TEMPERATURES),
                ("enthalpy", 1e-5),
            ] {
                let path = format!("streams.{name}.{field}");
                differences.quantity(
                    &path,
                    &ours["streams"][name][field],
                    &theirs[field],
                    absolute,
                );
            }
        }
        differences.equipment(&ours, &theirs);
        let found = differences.0;
        assert!(
            found.is_empty(),
            "{} {}:\n{}",
            ours["plant"],
            ours["batch"],
            found.join("\n")
        );
    }
}

#[test]
fn hazel_quay_agrees_with_the_reference() {
    compare(
        include_str!("../reference/hazel-quay.toml"),
        include_str!("../reference/hazel-quay.batches.ndjson"),
        include_str!("../reference/hazel-quay.expected.ndjson"),
    );
}

#[test]
fn ferrow_bridge_agrees_with_the_reference() {
    compare(
        include_str!("../reference/ferrow-bridge.toml"),
        include_str!("../reference/ferrow-bridge.batches.ndjson"),
        include_str!("../reference/ferrow-bridge.expected.ndjson"),
    );
}

#[test]
fn corrow_mill_agrees_with_the_reference() {
    compare(
        include_str!("../reference/corrow-mill.toml"),
        include_str!("../reference/corrow-mill.batches.ndjson"),
        include_str!("../reference/corrow-mill.expected.ndjson"),
    );
}

#[test]
fn alder_weir_agrees_with_the_reference() {
    compare(
        include_str!("../reference/alder-weir.toml"),
        include_str!("../reference/alder-weir.batches.ndjson"),
        include_str!("../reference/alder-weir.expected.ndjson"),
    );
}
