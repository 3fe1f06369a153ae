//! Streams of events resume without loss or repetition, and end with the
//! service.

use super::{Listener, act, alarms, at, raise, reported, service};
use crate::harness::{NOW, Service, Setup, event_ids, problem};
use counterpoise::server::Limits;
use reqwest::StatusCode;
use serde_json::json;
use std::time::Duration;

#[tokio::test]
async fn it_resumes_across_a_restart() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("kept.sqlite");
    let mut first = at(Some(&database)).await;
    let mut listener = Listener::new(&first, None).await;
    let id = raise(&first, 0).await;
    let mut heard = vec![listener.next().await.expect("raised")];
    // Two that the client has not read when the service ends.
    first
        .done(&act(id, "acknowledge"), &json!({"by": "R. Moss"}))
        .await;
    first
        .done(
            &act(id, "shelve"),
            &json!({"by": "R. Moss", "until": "2031-04-02T13:00:00Z"}),
        )
        .await;
    let before = alarms(&first, "").await;
    // A client that listens does not keep it from ending.
    first.stop().expect("an orderly end");
    while listener.next().await.is_some() {}

    let second = Service::with(Setup {
        database: Some(database),
        ..Setup::default()
    });
    assert_eq!(alarms(&second, "").await, before);
    let mut listener = Listener::new(&second, Some(heard[0].id)).await;
    for _ in 0..2 {
        heard.push(listener.next().await.expect("what was missed"));
    }
    // The shelving of the time before ends all the same.
    second.clock.set(NOW + Duration::from_secs(7200));
    heard.push(listener.next().await.expect("an end"));
    for minute in 3..6 {
        reported(&second, minute, 0.0).await;
    }
    heard.push(listener.next().await.expect("a return"));
    let kinds: Vec<&str> = heard.iter().map(|event| event.kind.as_str()).collect();
    let expected = ["raised", "acknowledged", "shelved", "unshelved", "returned"];
    assert_eq!(kinds, expected);
    let numbers = event_ids(&second.database, "mixer").await;
    assert_eq!(
        heard.iter().map(|event| event.id).collect::<Vec<_>>(),
        numbers
    );
    for event in &heard {
        assert_eq!(event.data["id"], event.id);
        assert_eq!(event.data["alarm"]["plant"], "mixer");
    }
}

/// A client may come back at any place, whatever happens meanwhile.
#[tokio::test]
async fn nothing_falls_between_what_was_and_what_comes() {
    let service = service().await;
    let id = raise(&service, 0).await;
    let rounds = 30;
    let acting = async {
        for _ in 0..rounds {
            let removal = json!({"by": "R. Moss", "reason": "a test"});
            service
                .done(&act(id, "remove-from-service"), &removal)
                .await;
            service
                .done(&act(id, "return-to-service"), &json!({"by": "R. Moss"}))
                .await;
        }
    };
    let listening = async {
        let mut heard = Vec::new();
        while heard.len() < 1 + 2 * rounds {
            // Each time only a few, then it comes back.
            let last = heard.last().copied().unwrap_or(0);
            let mut listener = Listener::new(&service, Some(last)).await;
            for _ in 0..(1 + 2 * rounds - heard.len()).min(7) {
                heard.push(listener.next().await.expect("an event").id);
            }
        }
        heard
    };
    let ((), heard) = tokio::join!(acting, listening);
    let numbers = event_ids(&service.database, "mixer").await;
    assert_eq!(heard, numbers);
}

#[tokio::test]
async fn other_plants_are_not_heard() {
    let service = service().await;
    let file = super::plant().replace("\"mixer\"", "\"other\"");
    let file = file.replace("kind = \"other\"", "kind = \"mixer\"");
    service.put_plant_file("other", &file).await;
    let mut listener = Listener::new(&service, Some(0)).await;
    for minute in 0..3 {
        let request = service.client.post(service.url("/v1/plants/other/batches"));
        let request = request.header("content-type", "application/json");
        let answer = request.body(super::batch(minute, 8.0)).send().await;
        assert_eq!(answer.expect("an answer").status(), StatusCode::OK);
    }
    let others = event_ids(&service.database, "other").await;
    assert_eq!(others.len(), 1);
    raise(&service, 10).await;
    let heard = listener.next().await.expect("an event");
    assert_eq!(heard.data["alarm"]["plant"], "mixer");
    assert!(heard.id > others[0]);
}

#[tokio::test]
async fn wrong_places_and_too_many_clients_are_refused() {
    let limits = Limits {
        listeners: 2,
        ..Limits::default()
    };
    let service = Service::with(Setup {
        limits,
        ..Setup::default()
    });
    service.put_plant().await;
    let path = "/v1/plants/mixer/alarms/events";
    for wrong in ["x", "-1", "1.5", ""] {
        let request = service.client.get(service.url(path));
        let answer = request.header("last-event-id", wrong).send().await;
        let told = problem(answer.expect("an answer"), StatusCode::BAD_REQUEST).await;
        assert_eq!(told["faults"][0]["path"], "Last-Event-ID", "{wrong}");
    }
    let answer = service.get(&format!("{path}?after=x&since=2")).await;
    let told = problem(answer, StatusCode::BAD_REQUEST).await;
    assert_eq!(told["faults"].as_array().map(Vec::len), Some(2));
    let nowhere = service.get("/v1/plants/nowhere/alarms/events").await;
    problem(nowhere, StatusCode::NOT_FOUND).await;

    let first = Listener::new(&service, None).await;
    let _second = Listener::new(&service, None).await;
    problem(service.get(path).await, StatusCode::TOO_MANY_REQUESTS).await;
    // A client that goes makes room.
    drop(first);
    let room = async { while service.get(path).await.status() != StatusCode::OK {} };
    tokio::time::timeout(Duration::from_secs(30), room)
        .await
        .expect("room in time");
}
