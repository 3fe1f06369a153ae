//! Readings taken in the field for one batch make a suspect's group smaller.

use crate::harness::{Service, contents, problem};
use counterpoise::demo;
use reqwest::StatusCode;
use serde_json::{Value, json};
use std::collections::BTreeSet;

const BATCHES: &str = include_str!("../../fixtures/demo/batches.ndjson");

/// Sigma of both thermometers, 2 K at 95 %.
const SIGMA: f64 = 2.0 / 1.959964;

struct Demo {
    service: Service,
    batch: String,
    /// What the good thermometer of the live steam reads, Cel.
    good: f64,
    report: Value,
}

/// A batch of the demo plant in which TT-102B reads 8 sigma more than TT-102A.
async fn biased() -> Demo {
    let service = Service::start();
    let plant = demo::plant().expect("the demo plant").name;
    service.put_plant_file(&plant, demo::plant_file()).await;
    // The clock of the tests is years ahead of the fixture.
    let line = BATCHES.lines().next().expect("a batch");
    let mut batch: Value = serde_json::from_str(line).expect("JSON");
    let readings = batch["readings"].as_array_mut().expect("a list");
    let good = readings.iter().find(|r| r["tag"] == "TT-102A");
    let good = good.and_then(|r| r["value"].as_f64()).expect("a reading");
    for reading in readings {
        if reading["tag"] == "TT-102B" {
            reading["value"] = json!(good + 8.0 * SIGMA);
        }
    }
    let name = batch["batch"].as_str().expect("a name").replace(':', "%3A");
    let report = service
        .done(&format!("/v1/plants/{plant}/batches"), &batch)
        .await;
    Demo {
        batch: format!("/v1/plants/{plant}/batches/{name}"),
        service,
        good,
        report,
    }
}

/// The members of the group that one of the thermometers is in.
fn group(report: &Value) -> BTreeSet<String> {
    let suspects = report["suspects"].as_array().expect("a list").iter();
    let groups = suspects.map(|suspect| -> BTreeSet<String> {
        let members = suspect["group"].as_array().expect("a group").iter();
        members
            .map(|m| {
                format!(
                    "{} {}",
                    m["cause"].as_str().expect("a cause"),
                    m["of"].as_str().expect("a name")
                )
            })
            .collect()
    });
    groups
        .into_iter()
        .find(|group| group.contains("bias TT-102B"))
        .unwrap_or_default()
}

fn entry(value: f64) -> Value {
    json!({
        "by": "R. Moss",
        "at": "2026-03-17T01:00:00Z",
        "readings": [{
            "measures": "temperature", "of": "live-steam", "value": value, "unit": "Cel",
            "uncertainty": {"absolute": "1 K"},
        }],
    })
}

#[tokio::test]
async fn a_portable_thermometer_tells_two_thermometers_apart() {
    let demo = biased().await;
    let both = group(&demo.report);
    println!("before: {both:?}");
    assert!(both.contains("bias TT-102A"), "{both:?}");
    let path = format!("{}/field-readings", demo.batch);
    let report = demo.service.done(&path, &entry(demo.good)).await;
    let less = group(&report);
    println!("after: {less:?}");
    assert!(
        less.is_subset(&both) && less.len() < both.len(),
        "{less:?} of {both:?}"
    );
    assert!(less.contains("bias TT-102B") && !less.contains("bias TT-102A"));
    let tag = &report["tags"]["field-1"];
    assert_eq!(
        (&tag["measured"], &tag["unit"]),
        (&json!(demo.good), &json!("Cel"))
    );
    assert_eq!(tag["uncertainty_measured"], 1.0);
    // The tags of the plant file stand as before, in their order.
    let names = |report: &Value| -> Vec<String> {
        report["tags"]
            .as_object()
            .expect("tags")
            .keys()
            .cloned()
            .collect()
    };
    let mut expected = names(&demo.report);
    expected.push("field-1".to_owned());
    assert_eq!(names(&report), expected);

    let version = demo
        .service
        .get_json(&format!("{}/versions/1", demo.batch))
        .await;
    assert_eq!(version, demo.report);
    let list = demo
        .service
        .get_json(&format!("{}/versions", demo.batch))
        .await;
    assert_eq!(list["versions"][1]["reason"], "field reading");
    let listed = demo.service.get_json(&path).await;
    assert_eq!(
        listed["entries"][0]["readings"],
        entry(demo.good)["readings"]
    );
    assert_eq!(listed["entries"][0]["at"], "2026-03-17T01:00:00Z");

    // Entered twice, it counts once.
    let before = contents(&demo.service.database).await;
    assert_eq!(demo.service.done(&path, &entry(demo.good)).await, report);
    assert_eq!(contents(&demo.service.database).await, before);

    // It is used whenever the batch is reconciled again, and told of.
    let why = json!({"by": "R. Moss", "reason": "once more"});
    let again = demo
        .service
        .done(&format!("{}/again", demo.batch), &why)
        .await;
    assert_eq!(again, report);
    let influences = format!(
        "{}/influences?of=live-steam&quantity=temperature",
        demo.batch
    );
    let influences = demo.service.get_json(&influences).await;
    let readings = influences["readings"].as_array().expect("a list");
    assert!(readings.iter().any(|reading| reading["tag"] == "field-1"));

    // A second one is the next tag.
    let report = demo.service.done(&path, &entry(demo.good + 0.2)).await;
    assert_eq!(report["tags"]["field-2"]["measured"], demo.good + 0.2);
    assert_eq!(report["tags"]["field-1"], {
        let mut tag = report["tags"]["field-1"].clone();
        tag["measured"] = json!(demo.good);
        tag
    });
}

#[tokio::test]
async fn every_fault_of_a_reading_is_told_at_its_place() {
    let demo = biased().await;
    let before = contents(&demo.service.database).await;
    let path = format!("{}/field-readings", demo.batch);
    let mut body = entry(demo.good);
    let good = body["readings"][0].clone();
    let changed = |key: &str, value: Value| {
        let mut reading = good.clone();
        reading[key] = value;
        reading
    };
    body["readings"] = json!([
        good,
        changed("of", json!("dead-steam")),
        changed("unit", json!("t/h")),
        changed("uncertainty", json!({"absolute": "1 bar"})),
        changed("measures", json!("colour")),
    ]);
    let answer = demo.service.post_json(&path, &body).await;
    let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
    let faults = told["faults"].as_array().expect("faults").iter();
    let places: Vec<&str> = faults
        .map(|f| f["path"].as_str().expect("a place"))
        .collect();
    let expected = [
        "/readings/1/of",
        "/readings/2/unit",
        "/readings/3/uncertainty/absolute",
        "/readings/4/measures",
    ];
    assert_eq!(places, expected, "{told}");
    assert_eq!(contents(&demo.service.database).await, before);

    // Counted in this body, whatever was entered before.
    demo.service.done(&path, &entry(demo.good)).await;
    let answer = demo.service.post_json(&path, &body).await;
    let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
    assert_eq!(told["faults"][0]["path"], "/readings/1/of");
    assert_eq!(told["faults"].as_array().map(Vec::len), Some(4));
}
