//! History as a long stream: settled block by block, resumed after a cut, made
//! into batches after the live ones.

mod cut;
mod past;

use crate::harness::{NOW, Service, batch, number, problem};
use crate::readings::{TAGS, csv, finished, on, rfc3339, until, versions};
use reqwest::{Response, StatusCode};
use serde_json::{Value, json};
use std::io::Write;
use time::{Duration, OffsetDateTime};

/// Long before the horizon.
fn start() -> OffsetDateTime {
    NOW - Duration::days(90)
}

/// A line for each tag and minute of so many hours of history, in order of tags
/// as historians export them; `more` is added to F-3.
fn history(hours: u32, more: f64) -> Vec<String> {
    let of_tag = |(tag, value): (&'static str, f64)| {
        let value = if tag == "F-3" { value + more } else { value };
        (0..hours * 60).map(move |at| {
            let time = start() + Duration::minutes(at.into());
            format!(
                "{tag},{},{}",
                rfc3339(time),
                value + f64::from(at % 3) / 1000.0
            )
        })
    };
    TAGS.into_iter().flat_map(of_tag).collect()
}

fn path(name: &str) -> String {
    format!("/v1/plants/mixer/backfills/{name}")
}

async fn fill(service: &Service, target: &str, body: impl Into<reqwest::Body>) -> Response {
    let request = service.client.post(service.url(&path(target)));
    let request = request.header("content-type", "text/csv").body(body);
    request.send().await.expect("an answer")
}

async fn filled(service: &Service, target: &str, body: String) -> Value {
    let answer = fill(service, target, body).await;
    let status = answer.status();
    let text = answer.text().await.expect("text");
    assert_eq!(status, StatusCode::OK, "{text}");
    serde_json::from_str(&text).expect("JSON")
}

async fn all_made(service: &Service, name: &str) {
    until("all periods", async || {
        let progress = service.get_json(&path(name)).await;
        (progress["periods_open"] == 0).then_some(())
    })
    .await;
}

/// Sorted by tag and far off balance: every period is made once all the same,
/// and no alarm rises.
#[tokio::test]
async fn history_becomes_batches_without_alarms() {
    let service = Service::with_plant().await;
    let whole = csv(&history(6, 40.0));
    let answer = filled(&service, "spring?complete=true", whole.clone()).await;
    assert_eq!(answer["backfill"], "spring");
    assert_eq!(answer["complete"], true);
    assert_eq!(answer["bytes"], whole.len());
    assert_eq!(answer["lines"], whole.lines().count());
    assert_eq!(answer["new"], 6 * 60 * 9);
    assert_eq!(answer["readings"]["taken"], 6 * 60 * 9);
    assert_eq!(answer["refused"], 0);
    all_made(&service, "spring").await;
    until("72 reports", async || {
        (finished(&service).await.len() == 72).then_some(())
    })
    .await;
    for name in finished(&service).await.iter().step_by(10) {
        let name = name.replace(':', "%3A");
        assert_eq!(versions(&service, &name, 1).await.len(), 1, "{name}");
        let report = service
            .get_json(&format!("/v1/plants/mixer/batches/{name}"))
            .await;
        assert_eq!(report["verdict"], "inconsistent");
    }
    let alarms = service.get_json("/v1/plants/mixer/alarms").await;
    assert_eq!(alarms["alarms"], json!([]));
    let list = service.get_json("/v1/plants/mixer/backfills").await;
    assert_eq!(list["backfills"][0]["backfill"], "spring");
    // Live ones raise one: the test would see it.
    for n in 0..20 {
        let live = batch(&format!("live{n}"), n, 190.0);
        assert_eq!(service.post_batch(live).await.status(), StatusCode::OK);
    }
    let alarms = service.get_json("/v1/plants/mixer/alarms").await;
    assert_ne!(alarms["alarms"], json!([]));
}

#[tokio::test]
async fn parts_go_on_where_the_last_ended() {
    let service = Service::with_plant().await;
    let whole = csv(&history(2, 0.0));
    // Cut anywhere, in the middle of a line: what is no whole line waits.
    let first = &whole[..whole.len() / 3];
    let answer = filled(&service, "parts", first.to_owned()).await;
    let settled = answer["bytes"].as_u64().expect("a number");
    let settled = usize::try_from(settled).expect("small");
    assert_eq!(settled, first.rfind('\n').expect("a line") + 1);
    assert_eq!(answer["complete"], false);
    for wrong in ["parts", "parts?from=1", "parts?from=999999999"] {
        let answer = fill(&service, wrong, whole.clone()).await;
        assert_eq!(answer.headers()["settled-bytes"], settled.to_string());
        let told = problem(answer, StatusCode::CONFLICT).await;
        let detail = told["detail"].as_str().expect("text").to_owned();
        assert!(detail.contains(&format!("from={settled}")), "{detail}");
    }
    // Nothing is made while more may come.
    assert_eq!(finished(&service).await, Vec::<String>::new());
    let rest = whole[settled..].to_owned();
    let answer = filled(
        &service,
        &format!("parts?from={settled}&complete=true"),
        rest,
    )
    .await;
    assert_eq!(answer["bytes"], whole.len());
    assert_eq!(answer["lines"], whole.lines().count());
    assert_eq!(answer["new"], 2 * 60 * 9);
    let after = fill(&service, &format!("parts?from={}", whole.len()), "").await;
    problem(after, StatusCode::CONFLICT).await;
    all_made(&service, "parts").await;
    let samples = number(&service.database, "SELECT count(*) FROM samples").await;
    assert_eq!(samples, 2 * 60 * 9);
}

#[tokio::test]
async fn compressed_streams_are_taken() {
    let service = Service::with_plant().await;
    let whole = csv(&history(24, 0.0));
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    gzip.write_all(whole.as_bytes()).expect("written");
    let gzip = gzip.finish().expect("finished");
    let zstd = zstd::encode_all(whole.as_bytes(), 3).expect("encoded");
    for (coding, body, new) in [("gzip", gzip, 24 * 60 * 9), ("zstd", zstd, 0)] {
        let request = service.client.post(service.url(&path(coding)));
        let request = request.header("content-type", "text/csv");
        let request = request.header("content-encoding", coding);
        let answer = request.body(body).send().await.expect("an answer");
        assert_eq!(answer.status(), StatusCode::OK);
        let answer: Value = answer.json().await.expect("JSON");
        assert_eq!(answer["bytes"], whole.len());
        assert_eq!(answer["new"], new);
        assert_eq!(answer["readings"]["known"], 24 * 60 * 9 - new);
    }
}

#[tokio::test]
async fn lines_with_faults_are_refused_one_by_one() {
    let service = Service::with_plant().await;
    let time = rfc3339(start());
    let body = format!(
        "time,tag,value,quality\n{time},F-1,1,good\n{time},F-2,many,good\nno line\n\
         {time},X-1,4,good\n{time},F-1,2,good\n{time},F-3,3,0x80AB0000\n"
    );
    let answer = filled(&service, "faulty?complete=true", body).await;
    assert_eq!(answer["faulty"], 2);
    let lines: Vec<u64> = (answer["faults"].as_array().expect("faults").iter())
        .map(|fault| fault["line"].as_u64().expect("a line"))
        .collect();
    assert!(lines.iter().all(|line| [3, 4].contains(line)), "{lines:?}");
    assert_eq!(answer["readings"]["taken"], 2);
    assert_eq!(answer["readings"]["ignored_tags"], json!(["X-1"]));
    assert_eq!(answer["readings"]["refused"][0]["tag"], "F-1");
    assert_eq!(answer["refused"], 3, "two lines and another value");
    assert_eq!(answer["lines"], 7);
}

#[tokio::test]
async fn what_is_no_content_at_all_stops() {
    let service = Service::with_plant().await;
    let garbage = "\u{1}\u{2}\n".repeat(200_000);
    for (name, body) in [("a", garbage), ("b", "name,when\nF-1,now\n".to_owned())] {
        let answer = fill(&service, name, body).await;
        assert!(answer.status().is_client_error(), "{}", answer.status());
        let status = answer.status();
        problem(answer, status).await;
        let progress = service.get_json(&path(name)).await;
        assert_eq!(
            (&progress["bytes"], &progress["new"]),
            (&json!(0), &json!(0))
        );
    }
    let wrong = service.client.post(service.url(&path("c")));
    let wrong = wrong.header("content-type", "application/json").body("{}");
    let wrong = wrong.send().await.expect("an answer");
    problem(wrong, StatusCode::UNSUPPORTED_MEDIA_TYPE).await;
    problem(service.get(&path("c")).await, StatusCode::NOT_FOUND).await;
}

/// With hundreds of periods to be made a live batch is answered after a few of
/// them, counted by what has been made when the answer is there.
#[tokio::test]
async fn live_batches_go_before_a_backfill() {
    let service = Service::with_plant().await;
    filled(&service, "year?complete=true", csv(&history(40, 0.0))).await;
    let open = async || {
        let progress = service.get_json(&path("year")).await;
        progress["periods_open"].as_i64().expect("a number")
    };
    let mut waited = Vec::new();
    for n in 0..5 {
        let before = open().await;
        let live = service
            .post_batch(batch(&format!("live{n}"), n, 150.0))
            .await;
        assert_eq!(live.status(), StatusCode::OK);
        waited.push(before - open().await);
    }
    assert!(open().await > 300, "they are not made yet");
    assert!(waited.iter().all(|&periods| periods <= 4), "{waited:?}");
    assert_eq!(service.get_json(&path("year")).await["complete"], true);
}

#[tokio::test]
async fn a_backfill_is_made_to_its_end_after_a_restart() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let mut service = Service::with(on(&database));
    service.put_plant().await;
    filled(&service, "b?complete=true", csv(&history(10, 40.0))).await;
    until("some", async || {
        (finished(&service).await.len() > 3).then_some(())
    })
    .await;
    service.stop().expect("an orderly end");
    assert!(number(&database, "SELECT count(*) FROM open_periods").await > 10);
    let service = Service::with(on(&database));
    all_made(&service, "b").await;
    until("120", async || {
        (finished(&service).await.len() == 120).then_some(())
    })
    .await;
    assert_eq!(
        number(&database, "SELECT count(*) FROM former_results").await,
        0,
        "none twice"
    );
    let alarms = service.get_json("/v1/plants/mixer/alarms").await;
    assert_eq!(alarms["alarms"], json!([]));
}
