//! Readings in: single values become batches when their period is over.

mod accepting;
mod held;
mod late;
mod taking;

use crate::harness::{NOW, Service, Setup, problem};
use reqwest::{Response, StatusCode};
use serde_json::Value;
use std::path::Path;
use std::time::Duration;
use time::OffsetDateTime;
use time::format_description::well_known::Rfc3339;

/// Tags of the plant with what they read when all is well.
pub const TAGS: [(&str, f64); 9] = [
    ("F-1", 100.0),
    ("F-2", 50.0),
    ("F-3", 150.0),
    ("P-1", 5.0),
    ("P-2", 5.0),
    ("P-3", 5.0),
    ("T-1", 30.0),
    ("T-2", 60.0),
    ("T-3", 40.02),
];

/// So many minutes after ten o'clock.
pub fn minute(after: u32) -> OffsetDateTime {
    NOW - time::Duration::hours(2) + time::Duration::minutes(after.into())
}

pub fn rfc3339(time: OffsetDateTime) -> String {
    time.format(&Rfc3339).expect("a time")
}

/// The name of the batch of a period.
pub fn period(start: u32) -> String {
    rfc3339(minute(start)).replace(':', "%3A")
}

/// A line for each tag and minute, in order of time, `more` added to F-3.
pub fn lines(minutes: std::ops::Range<u32>, more: f64) -> Vec<String> {
    let of_minute = |at| {
        TAGS.map(|(tag, value)| {
            let value = if tag == "F-3" { value + more } else { value };
            // Something has to move, or a signal would seem stuck.
            let value = value + f64::from(at % 3) / 1000.0;
            format!("{tag},{},{value}", rfc3339(minute(at)))
        })
    };
    minutes.flat_map(of_minute).collect()
}

pub fn csv(lines: &[String]) -> String {
    format!("tag,time,value\n{}\n", lines.join("\n"))
}

pub async fn send(service: &Service, kind: &str, body: impl Into<reqwest::Body>) -> Response {
    let request = service
        .client
        .post(service.url("/v1/plants/mixer/readings"));
    let request = request.header("content-type", kind).body(body);
    request.send().await.expect("an answer")
}

/// Sends readings that have to be taken.
pub async fn taken(service: &Service, lines: &[String]) -> Value {
    let answer = send(service, "text/csv", csv(lines)).await;
    let status = answer.status();
    let text = answer.text().await.expect("text");
    assert_eq!(status, StatusCode::OK, "{text}");
    serde_json::from_str(&text).expect("JSON")
}

/// Asks until it is so.
pub async fn until<T>(what: &str, mut look: impl AsyncFnMut() -> Option<T>) -> T {
    let asking = async {
        loop {
            if let Some(found) = look().await {
                return found;
            }
            // Asking takes time from what is asked for.
            tokio::time::sleep(Duration::from_millis(10)).await;
        }
    };
    let found = tokio::time::timeout(Duration::from_secs(60), asking).await;
    found.unwrap_or_else(|_| panic!("{what}: not in time"))
}

/// The report of a period, as soon as there is one.
pub async fn report(service: &Service, name: &str) -> Value {
    let path = format!("/v1/plants/mixer/batches/{name}");
    until(name, async || {
        let answer = service.get(&path).await;
        match answer.status() {
            StatusCode::OK => Some(answer.json().await.expect("JSON")),
            StatusCode::ACCEPTED | StatusCode::NOT_FOUND => None,
            other => panic!("{path}: {other}"),
        }
    })
    .await
}

/// What a report says of the readings, without what hangs on which batch of the
/// class set was the first: its critical value.
pub fn values(report: &Value) -> Vec<Value> {
    let tags = report["tags"].as_object().expect("tags").iter();
    let tags = tags.map(|(name, tag)| {
        let tag = [
            "measured",
            "reconciled",
            "uncertainty_reconciled",
            "averaged",
        ]
        .map(|key| &tag[key]);
        serde_json::json!([name, tag])
    });
    let head = [
        "batch",
        "start",
        "end",
        "verdict",
        "global_test",
        "steadiness",
    ];
    tags.chain(head.map(|key| report[key].clone())).collect()
}

/// The versions of a period's report, as soon as there are so many.
pub async fn versions(service: &Service, name: &str, number: usize) -> Vec<Value> {
    let path = format!("/v1/plants/mixer/batches/{name}/versions");
    until(name, async || {
        let list = service.get_json(&path).await;
        let versions = list["versions"].as_array().expect("a list").clone();
        (versions.len() >= number).then_some(versions)
    })
    .await
}

/// Names of the finished batches, the earliest first, and with what they are.
pub async fn finished(service: &Service) -> Vec<String> {
    let list = service
        .get_json("/v1/plants/mixer/batches?limit=1000")
        .await;
    let batches = list["batches"].as_array().expect("a list");
    let done = batches.iter().filter(|batch| !batch["verdict"].is_null());
    let names = done.map(|batch| batch["batch"].as_str().expect("a name").to_owned());
    let mut names: Vec<String> = names.collect();
    names.reverse();
    names
}

pub fn on(database: &Path) -> Setup {
    Setup {
        database: Some(database.to_owned()),
        ..Setup::default()
    }
}

#[tokio::test]
async fn a_period_that_is_over_becomes_a_batch() {
    let service = Service::with_plant().await;
    service.clock.set(minute(5));
    let answer = taken(&service, &lines(0..5, 0.5)).await;
    assert_eq!(answer["taken"], 45);
    assert_eq!(answer["refused_count"], 0);
    let path = format!("/v1/plants/mixer/batches/{}", period(0));
    problem(service.get(&path).await, StatusCode::NOT_FOUND).await;
    // Its end and two minutes of waiting.
    service.clock.set(minute(7));
    let made = report(&service, &period(0)).await;
    assert_eq!(made["batch"], "2031-04-02T10:00:00Z");
    assert_eq!(made["start"], "2031-04-02T10:00:00Z");
    assert_eq!(made["end"], "2031-04-02T10:05:00Z");
    assert_eq!(made["verdict"], "consistent");
    assert_eq!(made["tags"]["F-3"]["averaged"]["samples"], 5);
    let measured = made["tags"]["F-3"]["measured"].as_f64().expect("a mean");
    assert!((measured - 150.5008).abs() < 1e-9, "{measured}");
    assert_eq!(finished(&service).await, ["2031-04-02T10:00:00Z"]);
}

#[tokio::test]
async fn what_came_before_a_restart_is_made_after_it() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let mut service = Service::with(on(&database));
    service.put_plant().await;
    service.clock.set(minute(22));
    taken(&service, &lines(0..20, 0.0)).await;
    // Some may be made, one may be in work, the others wait.
    service.stop().expect("an orderly end");
    let service = Service::with(on(&database));
    for start in [0, 5, 10, 15] {
        report(&service, &period(start)).await;
        let versions = versions(&service, &period(start), 1).await;
        assert_eq!(versions.len(), 1, "made once");
    }
    assert_eq!(finished(&service).await.len(), 4);
}

#[tokio::test]
async fn an_orderly_end_finishes_the_period_in_work() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let mut service = Service::with(on(&database));
    service.put_plant().await;
    taken(&service, &lines(0..100, 0.0)).await;
    until("the first", async || {
        (!finished(&service).await.is_empty()).then_some(())
    })
    .await;
    service.stop().expect("an orderly end");
    let count = |sql: &'static str| crate::harness::number(&database, sql);
    assert_eq!(
        count("SELECT count(*) FROM pending").await,
        0,
        "finished before the end"
    );
    let made = count("SELECT count(*) FROM results").await;
    let open = count("SELECT count(*) FROM open_periods").await;
    assert_eq!(made + open, 20, "none lost, none twice");
}

/// Whatever the clock shows meanwhile, the same batches come of the same
/// readings in the end.
#[tokio::test]
async fn a_clock_that_jumps_neither_doubles_nor_loses_a_period() {
    let steady = Service::with_plant().await;
    taken(&steady, &lines(0..60, 0.0)).await;
    let jumping = Service::with_plant().await;
    for (part, jump) in [0, 60, 0, -60, 60, 0].into_iter().enumerate() {
        let part = u32::try_from(part).expect("small") * 10;
        let now = minute(part + 10) + time::Duration::minutes(jump.max(0));
        jumping.clock.set(now);
        taken(&jumping, &lines(part..part + 10, 0.0)).await;
        // It goes back after readings were taken, too.
        jumping
            .clock
            .set(now + time::Duration::minutes(jump.min(0)));
    }
    jumping.clock.set(NOW);
    let all = async |service: &Service| {
        until("all periods", async || {
            let names = finished(service).await;
            (names.len() == 12).then_some(names)
        })
        .await
    };
    let names = all(&steady).await;
    assert_eq!(all(&jumping).await, names);
    for name in names {
        let name = name.replace(':', "%3A");
        let path = format!("/v1/plants/mixer/batches/{name}");
        let expected = values(&steady.get_json(&path).await);
        // A period that was made too early is made again from what came later.
        until(&name, async || {
            (values(&jumping.get_json(&path).await) == expected).then_some(())
        })
        .await;
    }
}
