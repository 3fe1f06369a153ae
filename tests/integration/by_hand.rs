//! Decisions by hand, batches reconciled again with them, and what a report
//! hangs on.

use crate::alarms::{alarms, batch, raise, reported, service};
use crate::harness::{Service, problem};
use reqwest::StatusCode;
use serde_json::{Value, json};

const BY_HAND: &str = "/v1/plants/mixer/by-hand";

fn at(minute: u32) -> String {
    format!("2031-04-02T{:02}:{:02}:00Z", 10 + minute / 60, minute % 60)
}

fn decision(change: Value) -> Value {
    let mut body = json!({
        "tag": "F-4", "action": "out-of-service", "from": at(2),
        "reason": "sent to be calibrated", "by": "R. Moss",
    });
    for (key, value) in change.as_object().expect("an object") {
        body[key] = value.clone();
    }
    body
}

async fn versions(service: &Service, batch: &str) -> Vec<Value> {
    let path = format!("/v1/plants/mixer/batches/{batch}/versions");
    let list = service.get_json(&path).await;
    list["versions"].as_array().expect("a list").clone()
}

fn is_out(report: &Value) -> bool {
    report["tags"]["F-4"]["class"] == "unused"
}

#[tokio::test]
async fn a_tag_is_out_of_service_from_a_time_until_a_time() {
    let service = service().await;
    let body = decision(json!({"until": at(4)}));
    let made = service.post_json(BY_HAND, &body).await;
    assert_eq!(made.status(), StatusCode::CREATED);
    let made: Value = made.json().await.expect("JSON");
    assert_eq!(made["entered"], "2031-04-02T12:00:00Z");
    for (minute, out) in [(1, false), (2, true), (3, true), (4, false), (5, false)] {
        let report = reported(&service, minute, 8.0).await;
        assert_eq!(is_out(&report), out, "minute {minute}");
        assert_eq!(report["verdict"] == "consistent", out);
        if out {
            let by_hand = &report["by_hand"][0];
            assert_eq!(by_hand["id"], made["id"]);
            assert_eq!(by_hand["tag"], "F-4");
            assert_eq!(by_hand["action"], "out-of-service");
            assert_eq!(by_hand["by"], "R. Moss");
            assert_eq!(report["tags"]["F-4"]["measured"], 158.0);
        } else {
            assert!(report.get("by_hand").is_none());
        }
    }
    let list = service.get_json(&format!("{BY_HAND}?at={}", at(3))).await;
    assert_eq!(list["decisions"], json!([made]));
    let list = service.get_json(&format!("{BY_HAND}?at={}", at(4))).await;
    assert_eq!(list["decisions"], json!([]));
    assert_eq!(service.get_json(BY_HAND).await["decisions"], json!([made]));
}

#[tokio::test]
async fn an_offset_is_added_until_it_is_ended() {
    let service = service().await;
    assert_eq!(reported(&service, 1, 8.0).await["verdict"], "inconsistent");
    let body = decision(json!({"action": "offset", "offset": -8}));
    let made = service.done(BY_HAND, &body).await;
    assert_eq!(
        (&made["offset"], &made["unit"]),
        (&json!(-8.0), &json!("t/h"))
    );
    let report = reported(&service, 2, 8.0).await;
    assert_eq!(report["tags"]["F-4"]["measured"], 150.0);
    assert_eq!(report["by_hand"][0]["offset"], -8.0);
    assert_eq!(report["verdict"], "consistent");

    let end = format!("{BY_HAND}/{}/end", made["id"]);
    let ended = service
        .done(&end, &json!({"by": "A. Fell", "until": at(4)}))
        .await;
    assert_eq!(ended["until"], at(4));
    assert_eq!(
        ended["ended"],
        json!({"by": "A. Fell", "at": "2031-04-02T12:00:00Z"})
    );
    assert_eq!(reported(&service, 3, 8.0).await["verdict"], "consistent");
    assert_eq!(reported(&service, 4, 8.0).await["verdict"], "inconsistent");
    // Without a time what is over stays over; with one it may go on.
    let ended = service.done(&end, &json!({"by": "A. Fell"})).await;
    assert_eq!(ended["until"], at(4));
    let until = json!({"by": "A. Fell", "until": at(6)});
    assert_eq!(service.done(&end, &until).await["until"], at(6));
    assert_eq!(reported(&service, 5, 8.0).await["verdict"], "consistent");
    assert_eq!(service.report("m004").await["verdict"], "inconsistent");
    let none = service
        .post_json(&format!("{BY_HAND}/99/end"), &json!({"by": "A. Fell"}))
        .await;
    problem(none, StatusCode::NOT_FOUND).await;
    // A decision of another plant is none of this one's.
    service
        .put_plant_file(
            "other",
            &crate::alarms::plant().replace("plant = \"mixer\"", "plant = \"other\""),
        )
        .await;
    let path = format!("/v1/plants/other/by-hand/{}/end", made["id"]);
    let other = service.post_json(&path, &json!({"by": "A. Fell"})).await;
    problem(other, StatusCode::NOT_FOUND).await;
}

#[tokio::test]
async fn a_past_batch_is_reconciled_again_and_its_old_report_stays() {
    let service = service().await;
    raise(&service, 0).await;
    let before = service.report("m001").await;
    let watched = alarms(&service, "").await;
    service
        .done(BY_HAND, &decision(json!({"from": at(0)})))
        .await;

    let path = "/v1/plants/mixer/batches/m001/again";
    let why = json!({"by": "R. Moss", "reason": "F-4 was off"});
    let answer = service.post_json(path, &why).await;
    assert_eq!(answer.headers()["report-version"], "2");
    let after: Value = answer.json().await.expect("JSON");
    assert!(is_out(&after) && !is_out(&before));
    assert_eq!(after["verdict"], "consistent");
    assert_eq!(service.report("m001").await, after);
    for (number, report) in [(1, &before), (2, &after)] {
        let path = format!("/v1/plants/mixer/batches/m001/versions/{number}");
        assert_eq!(service.get_json(&path).await, *report);
    }
    let list = versions(&service, "m001").await;
    assert_eq!(list.len(), 2);
    assert_eq!(
        (&list[0]["version"], &list[0]["verdict"]),
        (&json!(1), &json!("inconsistent"))
    );
    assert!(list[0].get("by").is_none());
    assert_eq!(list[1]["by"], "R. Moss");
    assert_eq!(list[1]["reason"], "F-4 was off");
    assert_eq!(list[1]["at"], "2031-04-02T12:00:00Z");
    assert_eq!(alarms(&service, "").await, watched, "no alarm has changed");

    // The same body again is the same batch, with its present report.
    assert_eq!(reported(&service, 1, 8.0).await, after);
    for (path, status) in [
        (
            "/v1/plants/mixer/batches/m001/versions/3",
            StatusCode::NOT_FOUND,
        ),
        (
            "/v1/plants/mixer/batches/m001/versions/x",
            StatusCode::NOT_FOUND,
        ),
        (
            "/v1/plants/mixer/batches/none/versions",
            StatusCode::NOT_FOUND,
        ),
        (
            "/v1/plants/nowhere/batches/m001/versions",
            StatusCode::NOT_FOUND,
        ),
    ] {
        problem(service.get(path).await, status).await;
    }
}

#[tokio::test]
async fn a_batch_is_reconciled_again_under_another_revision() {
    let service = service().await;
    let before = reported(&service, 1, 0.0).await;
    let file = crate::alarms::plant();
    let better = file.replace(
        "F-4 = { measures = \"mass-flow\", of = \"both\", unit = \"t/h\", uncertainty = { of-reading = \"1 %\" } }",
        "F-4 = { measures = \"mass-flow\", of = \"both\", unit = \"t/h\", uncertainty = { of-reading = \"0.1 %\" } }",
    );
    service.put_plant_file("mixer", &better).await;
    let path = "/v1/plants/mixer/batches/m001/again";
    let why =
        |revision: u32| json!({"by": "R. Moss", "reason": "a better meter", "revision": revision});
    let uncertainty = |report: &Value| report["tags"]["F-4"]["uncertainty_measured"].as_f64();
    let after = service.done(path, &why(2)).await;
    assert_eq!(
        (&before["revision"], &after["revision"]),
        (&json!(1), &json!(2))
    );
    assert!(uncertainty(&after) < uncertainty(&before));
    let own = service
        .done(path, &json!({"by": "R. Moss", "reason": "back"}))
        .await;
    assert_eq!(own["revision"], 1);
    assert_eq!(own["tags"], before["tags"]);
    problem(
        service.post_json(path, &why(9)).await,
        StatusCode::NOT_FOUND,
    )
    .await;
    assert_eq!(versions(&service, "m001").await.len(), 3);
}

#[tokio::test]
async fn a_period_is_reconciled_again() {
    let service = service().await;
    let lines: Vec<String> = (0..110).map(|minute| batch(minute, 8.0)).collect();
    let answer = service.post("application/x-ndjson", lines.join("\n")).await;
    assert_eq!(answer.text().await.expect("text").lines().count(), 110);
    let watched = alarms(&service, "").await;
    service
        .done(BY_HAND, &decision(json!({"from": at(50)})))
        .await;
    let body = json!({"from": at(1), "to": at(106), "by": "R. Moss", "reason": "F-4 was off"});
    let answer = service.post_json("/v1/plants/mixer/again", &body).await;
    assert_eq!(answer.status(), StatusCode::OK);
    assert_eq!(answer.headers()["content-type"], "application/x-ndjson");
    let text = answer.text().await.expect("text");
    let lines: Vec<Value> = text
        .lines()
        .map(|line| serde_json::from_str(line).expect("JSON"))
        .collect();
    // More than one page, the latest first.
    assert_eq!(lines.len(), 105);
    for (line, minute) in lines.iter().zip((1..106).rev()) {
        assert_eq!(line["batch"], format!("m{minute:03}"));
        assert_eq!(line["version"], 2);
        assert_eq!(line["verdict"] == "consistent", minute >= 50, "{line}");
    }
    assert!(is_out(&service.report("m060").await));
    assert!(!is_out(&service.report("m049").await));
    assert!(!is_out(&service.report("m106").await), "outside the period");
    assert_eq!(versions(&service, "m106").await.len(), 1);
    assert_eq!(alarms(&service, "").await, watched);
}

#[tokio::test]
async fn a_value_hangs_on_readings() {
    let service = service().await;
    service
        .done(BY_HAND, &decision(json!({"from": at(2)})))
        .await;
    reported(&service, 1, 0.0).await;
    reported(&service, 2, 0.0).await;
    let path = |minute: u32, query: &str| {
        format!("/v1/plants/mixer/batches/m{minute:03}/influences?{query}")
    };
    let names = |influences: &Value| -> Vec<String> {
        let readings = influences["readings"].as_array().expect("a list").iter();
        readings
            .map(|r| r["tag"].as_str().expect("a name").to_owned())
            .collect()
    };
    let first = service
        .get_json(&path(1, "of=both&quantity=mass_flow"))
        .await;
    assert_eq!(first["unit"], "kg/s");
    let flow = service.report("m001").await["streams"]["both"]["mass_flow"].clone();
    for key in ["value", "uncertainty"] {
        let (there, here) = (flow[key].as_f64(), first[key].as_f64());
        let (there, here) = (there.expect("one"), here.expect("one"));
        assert!(
            (there - here).abs() < 1e-9 * there,
            "{key}: {there}, {here}"
        );
    }
    let shares = first["readings"].as_array().expect("a list").iter();
    let sum: f64 = shares.map(|r| r["share"].as_f64().expect("a share")).sum();
    assert!((0.999..1.000_001).contains(&sum), "{sum}");
    assert!(names(&first).contains(&"F-4".to_owned()));
    // Out of service by hand, it has no part.
    let second = service
        .get_json(&path(2, "of=both&quantity=mass_flow"))
        .await;
    assert!(!names(&second).contains(&"F-4".to_owned()));
    assert!(names(&second).contains(&"F-3".to_owned()));
    assert_eq!(service.get_json(&path(1, "of=F-4")).await["unit"], "t/h");
    for (path, status) in [
        (path(1, ""), StatusCode::BAD_REQUEST),
        (
            path(1, "of=both&of=first&colour=red"),
            StatusCode::BAD_REQUEST,
        ),
        (path(1, "of=nothing"), StatusCode::NOT_FOUND),
        (path(1, "of=both&quantity=colour"), StatusCode::NOT_FOUND),
        (path(9, "of=F-4"), StatusCode::NOT_FOUND),
    ] {
        problem(service.get(&path).await, status).await;
    }
}
