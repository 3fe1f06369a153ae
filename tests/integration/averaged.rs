//! From samples by way of a batch's body to a report: scatter widens, flags are
//! told, what is too poor is left out, and a plant in transition is marked.

use counterpoise::averaging;
use counterpoise::demo;
use counterpoise::ingest;
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{Batch, COVERAGE_FACTOR, Grade, Quality, Sample};
use counterpoise::report::{Class, Report, Verdict};
use serde_json::{Value, json};
use std::collections::HashMap;
use std::process::{Command, Stdio};
use time::{Duration, OffsetDateTime};

const PLANT: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/fixtures/demo/plant.toml");
const BATCHES: &str = include_str!("../../fixtures/demo/batches.ndjson");

/// A quiet batch of the demo's day.
fn body() -> Value {
    serde_json::from_str(BATCHES.lines().nth(60).expect("a line")).unwrap()
}

fn parsed(body: &Value) -> Batch {
    let now = OffsetDateTime::now_utc();
    ingest::parse(body.to_string().as_bytes(), now)
        .expect("a batch")
        .batch
}

fn compiled() -> Compiled {
    Compiled::new(demo::plant().expect("no faults"), 1)
}

fn reading<'b>(body: &'b mut Value, tag: &str) -> &'b mut Value {
    let readings = body["readings"].as_array_mut().expect("readings");
    readings
        .iter_mut()
        .find(|reading| reading["tag"] == tag)
        .expect("the tag")
}

#[test]
fn scatter_widens_and_flags_are_told() {
    let compiled = compiled();
    let mut body = body();
    let plain = reconcile(&compiled, &parsed(&body));
    let own = plain.tags["TT-102B"].uncertainty_measured.unwrap();
    reading(&mut body, "TT-102B")["averaged"] = json!({
        "samples": 60, "used": 58, "covered": 1.0, "scatter": own / COVERAGE_FACTOR,
        "steady": false, "flags": {"spike": 2},
    });
    let report = reconcile(&compiled, &parsed(&body));
    let tag = &report.tags["TT-102B"];
    // One sigma of scatter beside one of the tag's own.
    assert!((tag.uncertainty_measured.unwrap() / own - 2.0_f64.sqrt()).abs() < 1e-12);
    let made = tag.averaged.as_ref().unwrap();
    assert!((made.scatter.unwrap() / own - 1.0).abs() < 1e-12);
    assert_eq!(
        (made.samples, made.used, made.steady),
        (60, 58, Some(false))
    );
    assert_eq!(made.flags["spike"], 2);
    assert_eq!((tag.class, report.steadiness), (Class::Redundant, None));
    assert_eq!(plain.tags["TT-102B"].averaged, None);
}

#[test]
fn what_is_too_poor_is_left_out_with_its_reason() {
    let mut body = body();
    reading(&mut body, "TT-102B")["averaged"] = json!({
        "samples": 60, "used": 10, "covered": 0.2, "flags": {"bad": 50},
        "unused": "good samples cover 20 % of the period, 50 % are needed (50 bad)",
    });
    let report = reconcile(&compiled(), &parsed(&body));
    let tag = &report.tags["TT-102B"];
    assert_eq!(tag.class, Class::Unused);
    assert!(
        tag.reason
            .as_ref()
            .unwrap()
            .starts_with("good samples cover 20 %")
    );
    assert!(tag.measured.is_some() && tag.reconciled.is_some());
    assert_eq!(tag.averaged.as_ref().unwrap().flags["bad"], 50);
    assert_eq!(report.verdict, Verdict::Consistent);
}

#[test]
fn a_plant_in_transition_is_reconciled_and_marked() {
    let mut body = body();
    body["steadiness"] = json!({"steady": false, "judged": 40, "unsteady": ["FT-102", "TT-201"]});
    let report = reconcile(&compiled(), &parsed(&body));
    assert_eq!(report.verdict, Verdict::Consistent);
    let steadiness = report.steadiness.as_ref().unwrap();
    assert_eq!((steadiness.steady, steadiness.judged), (false, 40));
    let remark =
        "the plant was in transition: 2 of 40 tags judged were not steady (FT-102, TT-201)";
    assert!(
        report.remarks.iter().any(|told| told == remark),
        "{:?}",
        report.remarks
    );
    // What is stored is read back.
    let stored: Report = serde_json::from_str(&serde_json::to_string(&report).unwrap()).unwrap();
    assert_eq!(stored, report);
}

#[test]
fn the_command_line_says_so() {
    let directory = tempfile::tempdir().expect("a directory");
    let told = |change: &dyn Fn(&mut Value)| {
        let mut body = body();
        change(&mut body);
        let path = directory.path().join("batch.json");
        std::fs::write(&path, body.to_string()).expect("written");
        let mut command = Command::new(env!("CARGO_BIN_EXE_counterpoise"));
        let command = command.env_clear().args(["reconcile", PLANT]).arg(&path);
        let output = command.stdin(Stdio::null()).output().expect("a process");
        assert_eq!(output.status.code(), Some(0));
        String::from_utf8(output.stdout).expect("UTF-8")
    };
    let text = told(&|body| {
        body["steadiness"] = json!({"steady": false, "judged": 40, "unsteady": ["FT-102"]});
        reading(body, "TT-102B")["averaged"] = json!({
            "samples": 60, "used": 57, "covered": 1, "steady": false, "flags": {"bad": 1, "spike": 2},
        });
    });
    assert!(
        text.contains("Note: the plant was in transition: 1 of 40"),
        "{text}"
    );
    assert!(
        text.contains("not steady, 1 bad, 2 spike among 60 samples"),
        "{text}"
    );
    let text = told(&|body| {
        body["steadiness"] = json!({"steady": true, "judged": 40});
    });
    assert!(text.contains("steady, by 40 tags judged"), "{text}");
}

/// The batch's own values as samples every ten seconds, with a little noise, a
/// spike in one and a hole in another.
#[test]
fn samples_become_a_batch_and_the_batch_a_report() {
    let compiled = compiled();
    let plant = compiled.plant();
    let given = parsed(&body());
    let noise = [0.1, -0.3, 0.2, 0.4, -0.4, 0.0, -0.2, 0.3, -0.1];
    let lists: Vec<(String, Vec<Sample>)> = given
        .readings
        .iter()
        .filter_map(|reading| {
            let value = reading.value?;
            let tag = plant.tags.iter().find(|tag| tag.name == reading.tag)?;
            let sigma = tag.uncertainty.sigma(value)?.get();
            let sample = |k: i32| Sample {
                time: given.start + Duration::seconds(10 * i64::from(k)),
                value: Some(value + sigma * noise[(7 * k + 9) as usize % 9]),
                quality: Quality {
                    grade: Grade::Good,
                    code: Some(0),
                },
            };
            Some((reading.tag.clone(), (-1..30).map(sample).collect()))
        })
        .collect();
    let mut map: HashMap<&str, &[Sample]> = lists
        .iter()
        .map(|(tag, list)| (tag.as_str(), list.as_slice()))
        .collect();
    let mut spiked = map["TT-102B"].to_vec();
    spiked[12].value = spiked[12].value.map(|value| value + 60.0);
    let mut holed = map["FT-102"].to_vec();
    for sample in &mut holed[5..25] {
        sample.quality.grade = Grade::Bad;
        sample.quality.code = Some(0x8000_0000);
    }
    map.insert("TT-102B", &spiked);
    map.insert("FT-102", &holed);
    let made = averaging::batch(plant, given.start, given.end, "p", &map);
    let read = ingest::parse(&ingest::write(&made), OffsetDateTime::now_utc()).expect("a batch");
    assert_eq!(read.batch, made);
    let report = reconcile(&compiled, &read.batch);
    assert_eq!(report.verdict, Verdict::Consistent);
    let steadiness = report.steadiness.as_ref().unwrap();
    assert!(
        steadiness.steady && steadiness.judged as usize == map.len() - 1,
        "{steadiness:?}"
    );
    assert_eq!(
        report.tags["TT-102B"].averaged.as_ref().unwrap().flags["spike"],
        1
    );
    assert_eq!(report.tags["FT-102"].class, Class::Unused);
    let reason = report.tags["FT-102"].reason.as_ref().unwrap();
    assert!(reason.contains("(20 bad)"), "{reason}");
}
