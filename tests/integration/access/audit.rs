//! The audit log: an entry for every change, in the transaction of the change.

use super::{Made, client, make, send};
use crate::alarms;
use crate::harness::{NOW, Service, contents, problem};
use crate::store_faults::beside;
use counterpoise::access::Scope;
use counterpoise::store::Hindrance;
use reqwest::StatusCode;
use serde_json::{Value, json};
use sqlx::{ConnectOptions, Connection};
use time::Duration;
use time::format_description::well_known::Rfc3339;

async fn entries(service: &Service, query: &str) -> Vec<Value> {
    let log = service.get_json(&format!("/v1/audit{query}")).await;
    log["entries"].as_array().expect("a list").clone()
}

/// A service with the plant of the alarms, asked with a token.
async fn with_token() -> Service {
    let mut service = alarms::service().await;
    let made = Made {
        scopes: &Scope::ALL,
        ..Made::default()
    };
    service.client = client(&make(&service.store, "desk", made).await);
    service
}

#[tokio::test]
async fn every_kind_of_change_is_noted() {
    let service = with_token().await;
    let id = alarms::raise(&service, 0).await;
    let by = json!({"by": "R. Moss"});
    let later = (NOW + Duration::hours(1)).format(&Rfc3339).expect("text");
    let shelve = json!({"by": "R. Moss", "until": later});
    let remove = json!({"by": "R. Moss", "reason": "drained"});
    for (act, body) in [
        ("acknowledge", &by),
        ("shelve", &shelve),
        ("unshelve", &by),
        ("remove-from-service", &remove),
        ("return-to-service", &by),
    ] {
        service.done(&alarms::act(id, act), body).await;
    }
    let plant = |path: &str| format!("/v1/plants/mixer/{path}");
    let closing = json!({"outcome": "confirmed", "cause": {"cause": "bias", "of": "F-4"},
        "found": "reads high", "at": "2031-04-02T11:00:00Z", "by": "R. Moss"});
    service
        .done(&plant("accusations/1/closing"), &closing)
        .await;
    let decision = json!({"tag": "F-4", "action": "offset", "offset": -8.0, "by": "R. Moss",
        "from": "2031-04-02T10:00:00Z", "reason": "as found"});
    service.done(&plant("by-hand"), &decision).await;
    service.done(&plant("by-hand/1/end"), &by).await;
    let readings = json!({"by": "R. Moss", "at": "2031-04-02T10:01:00Z", "readings": [
        {"measures": "mass-flow", "of": "both", "value": 150.0, "unit": "t/h",
         "uncertainty": {"of-reading": "1 %"}}]});
    service
        .done(&plant("batches/m000/field-readings"), &readings)
        .await;
    let again = json!({"by": "R. Moss", "reason": "corrected"});
    service.done(&plant("batches/m001/again"), &again).await;
    let period = json!({"by": "R. Moss", "reason": "the lot", "from": "2031-04-02T10:00:00Z",
        "to": "2031-04-02T10:01:30Z"});
    let lines = service.post_json(&plant("again"), &period).await;
    assert_eq!(lines.text().await.expect("lines").lines().count(), 2);

    let mut log = entries(&service, "").await;
    log.reverse();
    let told = log.iter().map(|entry| {
        let kind = entry["kind"].as_str().expect("a kind");
        let what = &entry["what"];
        let which = ["act", "outcome", "tag", "batch", "token"];
        let which = which.iter().find_map(|key| what[*key].as_str());
        format!("{kind} {}", which.unwrap_or_default())
    });
    let expected = [
        "plant-put ",
        "token-made of a test",
        "alarm-acted acknowledge",
        "alarm-acted shelve",
        "alarm-acted unshelve",
        "alarm-acted remove-from-service",
        "alarm-acted return-to-service",
        "accusation-closed confirmed",
        "by-hand-entered F-4",
        "by-hand-ended ",
        "field-reading-entered m000",
        "reconciled-again m000",
        "reconciled-again m001",
        "reconciled-again m001",
        "reconciled-again m000",
    ];
    assert_eq!(told.collect::<Vec<_>>(), expected);
    assert_eq!(log[0]["actor"], json!({"by": "local"}));
    assert_eq!(log[0]["what"]["revision"], 1);
    assert_eq!(log[1]["actor"], json!({"by": "command-line"}));
    for entry in &log[2..] {
        let desk = json!({"by": "token", "id": 1, "name": "desk"});
        assert_eq!(entry["actor"], desk);
        assert_eq!(entry["plant"], "mixer");
        assert_eq!(entry["at"], "2031-04-02T12:00:00Z");
    }
    assert_eq!(log[3]["what"]["until"], later.as_str());
    assert_eq!(log[5]["what"]["reason"], "drained");
    assert_eq!(log[8]["what"]["id"], 1);
    assert_eq!(log[14]["what"]["version"], 3);

    assert_eq!(
        entries(&service, "?plant=mixer").await.len(),
        expected.len() - 1
    );
    let first = send(service.client.get(service.url("/v1/audit?limit=4"))).await;
    let link = first.headers()["link"].to_str().expect("text").to_owned();
    let next = link[1..].split('>').next().expect("a target");
    let second = service.get_json(next).await;
    assert_eq!(second["entries"][0]["id"], log[10]["id"], "newest first");
    let nowhere = service.get("/v1/audit?plant=nowhere").await;
    problem(nowhere, StatusCode::NOT_FOUND).await;
}

#[tokio::test]
async fn what_changes_nothing_is_not_noted() {
    let service = with_token().await;
    let id = alarms::raise(&service, 0).await;
    let before = entries(&service, "").await;
    service.put_plant_file("mixer", &alarms::plant()).await;
    for (act, body, status) in [
        ("unshelve", json!({"by": "R. Moss"}), StatusCode::CONFLICT),
        ("acknowledge", json!({}), StatusCode::UNPROCESSABLE_ENTITY),
    ] {
        let refused = service.post_json(&alarms::act(id, act), &body).await;
        problem(refused, status).await;
    }
    assert_eq!(entries(&service, "").await, before);
}

/// Tables but for the one that counts starts: a writer that is opened again adds
/// to that.
async fn held(service: &Service) -> Vec<String> {
    contents(&service.database).await
}

#[tokio::test]
async fn a_change_and_its_entry_are_kept_both_or_neither() {
    let service = with_token().await;
    let id = alarms::raise(&service, 0).await;
    let acknowledge = json!({"by": "R. Moss"});
    let decision = json!({"tag": "F-4", "action": "out-of-service", "by": "R. Moss",
        "from": "2031-04-02T10:00:00Z", "reason": "as found"});
    let again = json!({"by": "R. Moss", "reason": "corrected"});
    let acts = [
        (alarms::act(id, "acknowledge"), &acknowledge),
        ("/v1/plants/mixer/by-hand".to_owned(), &decision),
        ("/v1/plants/mixer/batches/m000/again".to_owned(), &again),
    ];
    let before = held(&service).await;
    let put = async || {
        let file = alarms::plant().replace("Two streams", "The streams");
        let put = service.client.put(service.url("/v1/plants/mixer"));
        send(put.header("content-type", "application/toml").body(file)).await
    };
    // The change cannot be written.
    let read_only = Hindrance {
        read_only: true,
        ..Hindrance::default()
    };
    service.store.hinder(read_only).await.expect("hindered");
    for (path, body) in &acts {
        let refused = service.post_json(path, body).await;
        problem(refused, StatusCode::SERVICE_UNAVAILABLE).await;
    }
    problem(put().await, StatusCode::SERVICE_UNAVAILABLE).await;
    assert_eq!(held(&service).await, before);
    service
        .store
        .hinder(Hindrance::default())
        .await
        .expect("freed");
    // The entry cannot be written.
    beside(
        &service.database,
        "CREATE TRIGGER no_deeds BEFORE INSERT ON deeds BEGIN SELECT RAISE(ABORT, 'no'); END",
    )
    .await;
    for (path, body) in &acts {
        let refused = service.post_json(path, body).await;
        problem(refused, StatusCode::INTERNAL_SERVER_ERROR).await;
    }
    problem(put().await, StatusCode::INTERNAL_SERVER_ERROR).await;
    assert_eq!(held(&service).await, before);
    beside(&service.database, "DROP TRIGGER no_deeds").await;
    for (path, body) in &acts {
        service.done(path, body).await;
    }
    assert_eq!(put().await.status(), StatusCode::CREATED);
    let noted = entries(&service, "").await.len();
    assert_eq!(noted, 2 + acts.len() + 1);
}

#[tokio::test]
async fn an_entry_is_never_changed() {
    let service = with_token().await;
    let options = sqlx::sqlite::SqliteConnectOptions::new().filename(&service.database);
    let mut other = options.connect().await.expect("a connection");
    for statement in [
        "UPDATE deeds SET what = '{}'",
        "DELETE FROM deeds",
        "DELETE FROM tokens",
    ] {
        let refused = sqlx::query(statement).execute(&mut other).await;
        let refused = refused.expect_err("a refusal").to_string();
        assert!(
            refused.contains("never deleted") || refused.contains("only added to"),
            "{refused}"
        );
    }
    other.close().await.expect("closed");
    assert_eq!(entries(&service, "").await.len(), 2);
}
