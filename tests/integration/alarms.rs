//! Alarms over HTTP: one cause raises one alarm, people act on it, and it goes
//! when the cause has gone.

mod accusations;
mod stream;
mod webhook;

use crate::harness::{NOW, PLANT, Service, Setup, problem};
use futures::StreamExt;
use reqwest::{Response, StatusCode};
use serde_json::{Value, json};
use std::path::Path;
use std::time::Duration;

/// The mixer with a second meter on what leaves it, so that a faulty meter there
/// is told from the others.
pub fn plant() -> String {
    PLANT.replace(
        "[tags]\n",
        "[tags]\nF-4 = { measures = \"mass-flow\", of = \"both\", unit = \"t/h\", uncertainty = { of-reading = \"1 %\" } }\n",
    )
}

/// A service with that plant.
pub async fn service() -> Service {
    at(None).await
}

/// One with a database of the test's own.
pub async fn at(database: Option<&Path>) -> Service {
    let service = Service::with(Setup {
        database: database.map(Path::to_owned),
        ..Setup::default()
    });
    service.put_plant_file("mixer", &plant()).await;
    service
}

/// Readings that balance but for F-4, which is off by so much, in t/h.
pub fn batch(minute: u32, off: f64) -> String {
    let f4 = format!("{{\"tag\": \"F-4\", \"value\": {}}}, ", 150.0 + off);
    let batch = crate::harness::batch(&format!("m{minute:03}"), minute, 150.0);
    batch.replace("\"readings\": [", &format!("\"readings\": [{f4}"))
}

/// Posts a batch and gives its report.
pub async fn reported(service: &Service, minute: u32, off: f64) -> Value {
    let answer = service.post_batch(batch(minute, off)).await;
    assert_eq!(answer.status(), StatusCode::OK);
    answer.json().await.expect("JSON")
}

/// Raises the alarm of F-4 with batches from a minute on; gives its number.
pub async fn raise(service: &Service, minute: u32) -> u64 {
    for later in 0..3 {
        reported(service, minute + later, 8.0).await;
    }
    let alarms = alarms(service, "?state=active-unacknowledged").await;
    assert_eq!(alarms.len(), 1, "{alarms:?}");
    alarms[0]["id"].as_u64().expect("a number")
}

pub async fn alarms(service: &Service, query: &str) -> Vec<Value> {
    let path = format!("/v1/plants/mixer/alarms{query}");
    let list = service.get_json(&path).await;
    list["alarms"].as_array().expect("a list").clone()
}

pub fn act(id: u64, what: &str) -> String {
    format!("/v1/plants/mixer/alarms/{id}/{what}")
}

/// A client that listens.
pub struct Listener {
    body: futures::stream::BoxStream<'static, reqwest::Result<axum::body::Bytes>>,
    text: String,
}

/// What it hears.
#[derive(Clone, Debug, PartialEq)]
pub struct Heard {
    pub id: i64,
    pub kind: String,
    pub data: Value,
}

impl Listener {
    /// Listens to the events after a number, or from now on.
    pub async fn new(service: &Service, after: Option<i64>) -> Listener {
        let request = service
            .client
            .get(service.url("/v1/plants/mixer/alarms/events"))
            .header("accept-encoding", "gzip, zstd");
        let request = match after {
            Some(after) => request.header("last-event-id", after),
            None => request,
        };
        let answer = request.send().await.expect("an answer");
        assert_eq!(answer.status(), StatusCode::OK);
        assert_eq!(answer.headers()["content-type"], "text/event-stream");
        assert!(!answer.headers().contains_key("content-encoding"));
        let mut listener = Listener::of(answer);
        // The greeting shows that the server listens too.
        let greeting = listener.block().await.expect("a greeting");
        assert!(greeting.contains(": listening"), "{greeting}");
        listener
    }

    fn of(answer: Response) -> Listener {
        Listener {
            body: answer.bytes_stream().boxed(),
            text: String::new(),
        }
    }

    /// The next event; `None` where the stream has ended.
    pub async fn next(&mut self) -> Option<Heard> {
        loop {
            let block = self.block().await?;
            let field = |name: &str| {
                let start = format!("{name}: ");
                block.lines().find_map(|line| line.strip_prefix(&start))
            };
            if let Some(data) = field("data") {
                return Some(Heard {
                    id: field("id").expect("an id").parse().expect("a number"),
                    kind: field("event").expect("a kind").to_owned(),
                    data: serde_json::from_str(data).expect("JSON"),
                });
            }
        }
    }

    /// The text up to the next empty line.
    async fn block(&mut self) -> Option<String> {
        loop {
            if let Some((block, rest)) = self.text.split_once("\n\n") {
                let (block, rest) = (block.to_owned(), rest.to_owned());
                self.text = rest;
                return Some(block);
            }
            let wait = tokio::time::timeout(Duration::from_secs(30), self.body.next());
            let part = wait.await.expect("something in time")?.ok()?;
            self.text.push_str(&String::from_utf8_lossy(&part));
        }
    }
}

#[tokio::test]
async fn a_drifting_tag_raises_one_alarm() {
    let service = service().await;
    let mut listener = Listener::new(&service, None).await;
    let (mut suspected, mut touched, mut raised) = (0, 0, None);
    for minute in 0..10 {
        let report = reported(&service, minute, f64::from(minute)).await;
        let suspects = report["suspects"].as_array().expect("a list");
        suspected += usize::from(!suspects.is_empty());
        let critical = report["single_test"]["critical_value"].as_f64();
        let tags = report["tags"].as_object().expect("tags");
        let over = tags.iter().filter(|(name, tag)| {
            let adjustment = tag["standardised_adjustment"].as_f64();
            *name != "F-4" && adjustment.map(f64::abs) > critical
        });
        touched = touched.max(over.count());
        let alarms = alarms(&service, "").await;
        assert_eq!(alarms.len(), usize::from(suspected >= 3), "minute {minute}");
        if let ([alarm], None) = (alarms.as_slice(), &raised) {
            assert_eq!(alarm["key"], "suspect bias F-4");
            assert_eq!(alarm["state"], "active-unacknowledged");
            assert_eq!(alarm["priority"], "high");
            assert_eq!(alarm["last"]["batch"], format!("m{minute:03}"));
            raised = Some(alarm.clone());
        }
    }
    let raised = raised.expect("an alarm");
    assert!(
        touched > 0,
        "it touches no other tag: the test shows nothing"
    );
    // Nothing else was told of, for what comes next is what a person did.
    let heard = listener.next().await.expect("an event");
    assert_eq!(
        (heard.kind.as_str(), &heard.data["alarm"]),
        ("raised", &raised)
    );
    service
        .done(&act(1, "acknowledge"), &json!({"by": "R. Moss"}))
        .await;
    let next = listener.next().await.expect("an event");
    assert_eq!(next.kind, "acknowledged");
    let list = service.get_json("/v1/plants/mixer/alarms").await;
    assert_eq!(list["last_event"], next.id);
}

#[tokio::test]
async fn it_goes_only_when_it_is_below_the_dead_band() {
    let service = service().await;
    let id = raise(&service, 0).await;
    let report = service.report("m002").await;
    let slope = report["tags"]["F-4"]["standardised_adjustment"]
        .as_f64()
        .expect("a number")
        .abs()
        / 8.0;
    let critical = report["single_test"]["critical_value"]
        .as_f64()
        .expect("a number");
    let between = 0.9 * critical / slope;
    for minute in 3..9 {
        let report = reported(&service, minute, between).await;
        assert_eq!(report["suspects"], json!([]), "below the critical value");
        assert_eq!(alarms(&service, "").await[0]["standing"], true);
    }
    for minute in 9..12 {
        assert_eq!(alarms(&service, "").await[0]["standing"], true);
        reported(&service, minute, 0.0).await;
    }
    let returned = alarms(&service, "?state=returned-unacknowledged").await;
    assert_eq!(returned.len(), 1);
    service
        .done(
            &act(id, "acknowledge"),
            &json!({"by": "R. Moss", "note": "seen"}),
        )
        .await;
    let normal = alarms(&service, "?state=normal&state=shelved").await;
    assert_eq!(normal[0]["acknowledged"]["note"], "seen");
    assert_eq!(normal[0]["acknowledged"]["at"], "2031-04-02T12:00:00Z");
}

#[tokio::test]
async fn of_many_who_acknowledge_at_once_one_wins() {
    let service = service().await;
    let id = raise(&service, 0).await;
    let path = act(id, "acknowledge");
    let people = (0..16).map(|number| json!({"by": format!("person {number}")}));
    let people: Vec<Value> = people.collect();
    let acts = people.iter().map(|person| service.post_json(&path, person));
    let mut winners = Vec::new();
    for answer in futures::future::join_all(acts).await {
        if answer.status() == StatusCode::OK {
            let event: Value = answer.json().await.expect("JSON");
            winners.push(event["by"].clone());
            continue;
        }
        let told = problem(answer, StatusCode::CONFLICT).await;
        assert_eq!(told["type"], "urn:counterpoise:problem:refused");
        assert_eq!(told["state"], "active-acknowledged");
        assert_eq!(told["allowed"], json!(["shelve", "remove-from-service"]));
    }
    assert_eq!(winners.len(), 1);
    let alarm = &alarms(&service, "").await[0];
    assert_eq!(alarm["acknowledged"]["by"], winners[0]);
}

#[tokio::test]
async fn a_shelving_ends_by_itself_without_a_batch() {
    let service = service().await;
    let id = raise(&service, 0).await;
    let mut listener = Listener::new(&service, None).await;
    let until = "2031-04-02T15:00:00+02:00";
    let shelve = json!({"by": "R. Moss", "until": until, "note": "a fitter is on it"});
    let event = service.done(&act(id, "shelve"), &shelve).await;
    assert_eq!(event["alarm"]["state"], "shelved");
    assert_eq!(event["alarm"]["shelved"]["until"], "2031-04-02T13:00:00Z");
    assert_eq!(listener.next().await.expect("an event").kind, "shelved");
    // Nothing is told of it meanwhile.
    reported(&service, 3, 8.0).await;
    service.clock.set(NOW + Duration::from_secs(3600));
    let heard = listener.next().await.expect("an event");
    assert_eq!(heard.kind, "unshelved");
    assert_eq!(heard.data["at"], "2031-04-02T13:00:00Z");
    assert!(heard.data.get("by").is_none());
    assert_eq!(heard.data["alarm"]["state"], "active-unacknowledged");
    let answer = service
        .post_json(&act(id, "unshelve"), &json!({"by": "R. Moss"}))
        .await;
    let told = problem(answer, StatusCode::CONFLICT).await;
    assert_eq!(told["state"], "active-unacknowledged");
}

#[tokio::test]
async fn out_of_service_nothing_is_told_until_it_returns() {
    let service = service().await;
    let id = raise(&service, 0).await;
    let mut listener = Listener::new(&service, None).await;
    let removal = json!({"by": "R. Moss", "reason": "the line is drained"});
    let event = service
        .done(&act(id, "remove-from-service"), &removal)
        .await;
    assert_eq!(
        event["alarm"]["out_of_service"]["reason"],
        "the line is drained"
    );
    for minute in 3..6 {
        reported(&service, minute, 0.0).await;
    }
    let silent = alarms(&service, "?state=out-of-service").await;
    assert_eq!(silent[0]["standing"], false);
    service
        .done(&act(id, "return-to-service"), &json!({"by": "R. Moss"}))
        .await;
    assert_eq!(alarms(&service, "?state=normal").await.len(), 1);
    for kind in ["removed-from-service", "returned-to-service"] {
        assert_eq!(listener.next().await.expect("an event").kind, kind);
    }
}

#[tokio::test]
async fn batches_sent_together_are_looked_at_in_their_order() {
    let service = service().await;
    let mut listener = Listener::new(&service, None).await;
    let lines: Vec<String> = (0..40)
        .map(|minute| batch(minute, if minute % 20 < 10 { 8.0 } else { 0.0 }))
        .collect();
    let answer = service.post("application/x-ndjson", lines.join("\n")).await;
    assert_eq!(answer.text().await.expect("text").lines().count(), 40);
    let mut last = 0;
    for (kind, batch) in [
        ("raised", "m002"),
        ("returned", "m009"),
        ("raised", "m022"),
        ("returned", "m029"),
    ] {
        let heard = listener.next().await.expect("an event");
        assert!(heard.id > last);
        last = heard.id;
        assert_eq!(heard.kind, kind);
        assert_eq!(heard.data["alarm"]["last"]["batch"], batch);
    }
}
