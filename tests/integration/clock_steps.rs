//! A clock that steps, back and forth: nothing that was accepted is lost,
//! refused for ever or done twice.

use crate::alarms;
use crate::harness::{NOW, Service, Setup, batch, contents, problem};
use crate::store::{accepted, incoming};
use counterpoise::store::{Incoming, SqliteOptions, SqliteStore, Store};
use reqwest::StatusCode;
use serde_json::{Value, json};
use std::time::Duration;
use time::OffsetDateTime;

const YEAR: Duration = Duration::from_secs(365 * 86_400);

#[tokio::test]
async fn batches_are_taken_and_listed_over_every_step() {
    let service = Service::with_plant().await;
    let steps: [(&str, OffsetDateTime); 5] = [
        ("now", NOW),
        ("years-ahead", NOW + 40 * YEAR),
        ("an-hour-back", NOW - Duration::from_secs(3600)),
        ("a-moment-ahead", NOW + Duration::from_nanos(1)),
        ("now-again", NOW),
    ];
    let mut reports = Vec::new();
    for (n, (name, now)) in (0..).zip(steps) {
        service.clock.set(now);
        let answer = service.post_batch(batch(name, n, 150.0)).await;
        assert_eq!(answer.status(), StatusCode::OK, "{name}");
        reports.push((name, n, answer.json::<Value>().await.expect("JSON")));
    }
    let list = service.get_json("/v1/plants/mixer/batches").await;
    let listed: Vec<&str> = list["batches"]
        .as_array()
        .expect("a list")
        .iter()
        .map(|item| item["batch"].as_str().expect("a name"))
        .collect();
    let by_period: Vec<&str> = reports.iter().rev().map(|(name, ..)| *name).collect();
    assert_eq!(listed, by_period, "the periods count, not when they came");
    for (name, n, report) in &reports {
        let again = service.post_batch(batch(name, *n, 150.0)).await;
        assert_eq!(again.json::<Value>().await.expect("JSON"), *report);
    }
}

/// A clock that has gone back makes a period one of the future: that is said,
/// changes nothing, and is over when the clock is right again.
#[tokio::test]
async fn a_step_back_refuses_what_is_to_come_and_keeps_what_was_accepted() {
    let service = Service::with_plant().await;
    let known = service.post_batch(batch("known", 0, 150.0)).await;
    let known: Value = known.json().await.expect("JSON");
    service.clock.set(NOW - 10 * YEAR);
    let before = contents(&service.database).await;
    let answer = service.post_batch(batch("new", 1, 150.0)).await;
    let refusal = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
    let what = refusal["faults"][0]["what"].as_str().expect("text");
    assert!(what.contains("future"), "{refusal}");
    assert_eq!(contents(&service.database).await, before);
    assert_eq!(service.report("known").await, known);
    service.clock.set(NOW);
    for (name, minute) in [("known", 0), ("new", 1)] {
        let answer = service.post_batch(batch(name, minute, 150.0)).await;
        assert_eq!(answer.status(), StatusCode::OK);
    }
}

/// What a service accepted by a clock that ran a year ahead is finished by one
/// that shows the right time.
#[tokio::test]
async fn what_was_accepted_in_the_future_is_finished() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let setup = || Setup {
        database: Some(database.clone()),
        ..Setup::default()
    };
    let mut service = Service::with(setup());
    service.put_plant().await;
    service.stop().expect("an orderly end");
    let store = SqliteStore::open(SqliteOptions::new(&database))
        .await
        .expect("a store");
    let body = batch("ahead", 0, 150.0).replace("2031-", "2032-");
    let ahead = Incoming {
        body: body.into_bytes(),
        received: NOW + 2 * YEAR,
        ..incoming("mixer", "ahead", 0, 1)
    };
    accepted(&store, ahead).await;
    store.close().await.expect("closed");
    let service = Service::with(setup());
    assert_eq!(
        service.report("ahead").await["start"],
        "2032-04-02T10:00:00Z"
    );
}

/// A shelving ends once, when the clock first shows its time, and does not come
/// back when the clock does.
#[tokio::test]
async fn a_shelving_is_over_once() {
    let service = alarms::service().await;
    let id = alarms::raise(&service, 0).await;
    let mut listener = alarms::Listener::new(&service, None).await;
    let shelve = json!({"by": "R. Moss", "until": "2031-04-02T13:00:00Z"});
    service.done(&alarms::act(id, "shelve"), &shelve).await;
    assert_eq!(listener.next().await.expect("an event").kind, "shelved");
    service.clock.set(NOW - YEAR);
    let steps = [NOW + YEAR, NOW - YEAR, NOW + 2 * YEAR];
    service.clock.set(steps[0]);
    assert_eq!(listener.next().await.expect("an event").kind, "unshelved");
    for step in &steps[1..] {
        service.clock.set(*step);
    }
    service.clock.set(NOW);
    let act = json!({"by": "R. Moss"});
    service.done(&alarms::act(id, "acknowledge"), &act).await;
    let next = listener.next().await.expect("an event");
    assert_eq!(next.kind, "acknowledged", "nothing is told twice");
}
