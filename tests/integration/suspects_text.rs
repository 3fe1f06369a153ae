//! Suspects as people read them: the commands on the demo plant, from outside.

use counterpoise::demo::DRIFTING_TAG;
use serde_json::Value;
use std::path::Path;
use std::process::{Command, Stdio};

const PLANT: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/fixtures/demo/plant.toml");
const BATCHES: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/fixtures/demo/batches.ndjson");

/// What a command prints, and its exit code.
fn run(arguments: &[&str]) -> (String, Option<i32>) {
    let mut command = Command::new(env!("CARGO_BIN_EXE_counterpoise"));
    let output = command
        .env_clear()
        .args(arguments)
        .stdin(Stdio::null())
        .output()
        .expect("a process");
    let text = String::from_utf8(output.stdout).expect("UTF-8");
    (text, output.status.code())
}

/// A batch of the demo's day in a file, with something added to readings.
fn batch(directory: &Path, line: usize, added: &[(&str, f64)]) -> String {
    let day = std::fs::read_to_string(BATCHES).expect("the demo's day");
    let mut batch: Value = serde_json::from_str(day.lines().nth(line).expect("a line")).unwrap();
    for reading in batch["readings"].as_array_mut().expect("readings") {
        if let Some((_, added)) = added.iter().find(|(tag, _)| reading["tag"] == *tag) {
            let value = reading["value"].as_f64().expect("a value") + added;
            reading["value"] = value.into();
        }
    }
    let path = directory.join("batch.json");
    std::fs::write(&path, batch.to_string()).expect("written");
    path.to_str().expect("UTF-8").to_owned()
}

#[test]
fn a_biased_thermometer_is_named_with_its_size_and_the_values_move() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = batch(directory.path(), 60, &[("TT-102B", 12.0)]);
    let (text, code) = run(&["reconcile", PLANT, &path]);
    assert_eq!(code, Some(0));
    let named = text.lines().find(|line| line.contains("TT-102B reads"));
    let named = named.unwrap_or_else(|| panic!("not named: {text}"));
    assert!(named.contains("K too high"), "{named}");
    let words: Vec<&str> = named.split_whitespace().collect();
    let at = words.iter().position(|word| *word == "reads").unwrap();
    let (size, uncertainty): (f64, f64) = (
        words[at + 1].parse().unwrap(),
        words[at + 3].parse().unwrap(),
    );
    // What was added, beside the noise of the readings: half as much again as the
    // stated uncertainty, three sigma, is beyond chance.
    assert!((size - 12.0).abs() < 1.5 * uncertainty, "{named}");
    assert!(text.contains("With all suspects out: "), "{text}");
    assert!(text.contains("with the suspects out "), "{text}");
    assert_eq!(text.matches("licensed engineers decide").count(), 1);
}

#[test]
fn a_sound_batch_names_nobody() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = batch(directory.path(), 60, &[]);
    let (text, _) = run(&["reconcile", PLANT, &path]);
    assert!(!text.contains("suspect"), "{text}");
}

#[test]
fn two_gauges_on_one_pipe_are_one_group_that_a_test_gauge_settles() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = batch(directory.path(), 60, &[("PT-357", 2.0)]);
    let (text, _) = run(&["reconcile", PLANT, &path]);
    assert!(
        text.contains("one of these, which the readings cannot tell apart:"),
        "{text}"
    );
    assert!(text.contains("PT-357 reads") && text.contains("PT-207 reads"));
    assert!(text.contains("with a test gauge"), "{text}");
}

#[test]
fn the_influences_of_a_flow_are_shares_of_its_variance() {
    let (text, code) = run(&["influences", PLANT, BATCHES, "live-steam", "mass-flow"]);
    assert_eq!(code, Some(0), "{text}");
    let shares: f64 = text
        .lines()
        .filter_map(|line| line.split_once(" %  ")?.0.split_whitespace().last())
        .map(|share| share.parse::<f64>().expect("a share"))
        .sum();
    assert!(shares > 80.0 && shares < 100.1, "{shares}: {text}");
    let (text, code) = run(&["influences", PLANT, BATCHES, "no-such-thing"]);
    assert_eq!((text.as_str(), code), ("", Some(3)));
}

#[test]
fn a_batch_is_found_by_its_name() {
    let named = |name| run(&["tell-apart", PLANT, BATCHES, "--batch", name]);
    let (text, code) = named("2026-03-17T12:00Z");
    assert_eq!(code, Some(0));
    assert!(text.contains("at batch 2026-03-17T12:00Z"), "{text}");
    assert_eq!(named("none").1, Some(3));
}

/// The table in the README is what the command prints.
#[test]
fn the_readme_tells_what_the_command_tells() {
    let (markdown, code) = run(&["tell-apart", PLANT, "--markdown"]);
    assert_eq!(code, Some(0));
    let readme = Path::new(env!("CARGO_MANIFEST_DIR")).join("README.md");
    let readme = std::fs::read_to_string(readme).expect("the README");
    assert!(
        readme.contains(&markdown),
        "the README does not hold the output of `counterpoise tell-apart fixtures/demo/plant.toml --markdown`:\n{markdown}"
    );
}

#[test]
fn the_demo_names_its_drifting_instrument() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("demo.sqlite");
    let database = database.to_str().expect("UTF-8");
    let (text, code) = run(&[
        "demo",
        "--exit",
        "--listen",
        "127.0.0.1:0",
        "--database",
        database,
    ]);
    assert_eq!(code, Some(0), "{text}");
    let most = format!("Suspected most: {DRIFTING_TAG} reads");
    let line = text.lines().find(|line| line.starts_with(&most));
    assert!(
        line.is_some_and(|line| line.ends_with("too much")),
        "{text}"
    );
}
