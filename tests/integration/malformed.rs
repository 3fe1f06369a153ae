//! Whatever is malformed gets its problem document and changes nothing.

use crate::harness::{Service, Setup, batch, contents, problem};
use counterpoise::server::Limits;
use reqwest::StatusCode;
use serde_json::Value;
use std::time::Duration;

/// A server with a plant, a batch, and small limits.
pub async fn service() -> Service {
    with_patience(Duration::from_secs(10)).await
}

/// One that gives a client little time: only for clients that are slow, or a
/// busy machine makes others fail.
pub async fn impatient() -> Service {
    with_patience(Duration::from_millis(300)).await
}

async fn with_patience(read_timeout: Duration) -> Service {
    let limits = Limits {
        read_timeout,
        document: 64 << 10,
        stream: 256 << 10,
        ..Limits::default()
    };
    let service = Service::with(Setup {
        limits,
        ..Setup::default()
    });
    service.put_plant().await;
    assert_eq!(
        service.post_batch(batch("good", 0, 150.0)).await.status(),
        StatusCode::OK
    );
    service
}

/// Posts a body that must be refused.
async fn refused(content_type: &str, body: impl Into<reqwest::Body>, status: StatusCode) -> Value {
    let service = service().await;
    let before = contents(&service.database).await;
    let answer = service.post(content_type, body).await;
    let problem = problem(answer, status).await;
    assert_eq!(contents(&service.database).await, before);
    problem
}

async fn named(from: &str, to: &str, status: StatusCode, path: &str, what: &str) {
    let good = batch("bad", 1, 150.0);
    assert!(good.contains(from), "{from}");
    let problem = refused("application/json", good.replacen(from, to, 1), status).await;
    let faults = problem["faults"].as_array().expect("faults");
    assert_eq!(faults.len(), 1, "{faults:?}");
    assert_eq!(faults[0]["path"], path);
    assert!(
        faults[0]["what"].as_str().expect("text").contains(what),
        "{faults:?}"
    );
    assert!(!faults[0]["mend"].as_str().expect("text").is_empty());
    assert_eq!(faults[0]["line"], 1);
    assert!(faults[0]["column"].as_u64().expect("a column") > 0);
}

const F3: &str = "/readings/2/value";

#[tokio::test]
async fn not_a_number() {
    named(": 150}", ": NaN}", StatusCode::BAD_REQUEST, F3, "NaN").await;
}

#[tokio::test]
async fn infinity() {
    named(
        ": 150}",
        ": -Infinity}",
        StatusCode::BAD_REQUEST,
        F3,
        "-Infinity",
    )
    .await;
}

#[tokio::test]
async fn beyond_a_double() {
    named(
        ": 150}",
        ": 1e400}",
        StatusCode::UNPROCESSABLE_ENTITY,
        F3,
        "1e400",
    )
    .await;
}

#[tokio::test]
async fn duplicate_tag() {
    named(
        "F-3",
        "F-1",
        StatusCode::UNPROCESSABLE_ENTITY,
        "/readings/2/tag",
        "F-1",
    )
    .await;
}

#[tokio::test]
async fn future_time() {
    named(
        "-02T10:01:30",
        "-03T10:01:30",
        StatusCode::UNPROCESSABLE_ENTITY,
        "/end",
        "future",
    )
    .await;
}

#[tokio::test]
async fn unknown_field() {
    named(
        "\"batch\"",
        "\"colour\": 1, \"batch\"",
        StatusCode::UNPROCESSABLE_ENTITY,
        "/colour",
        "colour",
    )
    .await;
}

#[tokio::test]
async fn unknown_field_of_a_reading() {
    let (from, to) = ("\"tag\": \"F-3\"", "\"tag\": \"F-3\", \"unit\": \"t/h\"");
    named(
        from,
        to,
        StatusCode::UNPROCESSABLE_ENTITY,
        "/readings/2/unit",
        "unit",
    )
    .await;
}

#[tokio::test]
async fn duplicate_key() {
    let (from, to) = ("\"batch\"", "\"batch\": \"x\", \"batch\"");
    named(
        from,
        to,
        StatusCode::UNPROCESSABLE_ENTITY,
        "/batch",
        "twice",
    )
    .await;
}

#[tokio::test]
async fn a_number_in_quotes() {
    named(
        ": 150}",
        ": \"150\"}",
        StatusCode::UNPROCESSABLE_ENTITY,
        F3,
        "string",
    )
    .await;
}

#[tokio::test]
async fn every_fault_at_once() {
    let body = batch("bad", 1, 150.0)
        .replace(": 150}", ": NaN}")
        .replace("\"value\": 50}", "\"value\": 1e400}")
        .replace("F-1", "")
        .replace("T-3", "T-2");
    let problem = refused("application/json", body, StatusCode::BAD_REQUEST).await;
    let faults = problem["faults"].as_array().expect("faults");
    let mut paths: Vec<&str> = faults
        .iter()
        .filter_map(|fault| fault["path"].as_str())
        .collect();
    paths.sort_unstable();
    assert_eq!(
        paths,
        [
            "/readings/0/tag",
            "/readings/1/value",
            F3,
            "/readings/8/tag"
        ]
    );
}

#[tokio::test]
async fn truncated() {
    let body = batch("bad", 1, 150.0);
    let half = body[..body.len() / 2].to_owned();
    refused("application/json", half, StatusCode::BAD_REQUEST).await;
    refused("application/json", "", StatusCode::BAD_REQUEST).await;
}

#[tokio::test]
async fn not_utf8() {
    let body = b"{\"batch\": \"\xff\xfe\"}".to_vec();
    refused("application/json", body, StatusCode::BAD_REQUEST).await;
}

#[tokio::test]
async fn deeply_nested() {
    let body = format!(
        "{{\"batch\": {}1{}}}",
        "[".repeat(20_000),
        "]".repeat(20_000)
    );
    let problem = refused("application/json", body, StatusCode::BAD_REQUEST).await;
    assert!(
        problem["faults"][0]["what"]
            .as_str()
            .expect("text")
            .contains("nested")
    );
}

#[tokio::test]
async fn oversized() {
    let service = service().await;
    let answer = service.post("application/json", " ".repeat(65 << 10)).await;
    assert_eq!(
        answer.headers()["connection"],
        "close",
        "the body stands in the way"
    );
    let padded = |length| format!("{}{}", batch("bad", 1, 150.0), " ".repeat(length));
    refused(
        "application/json",
        padded(64 << 10),
        StatusCode::PAYLOAD_TOO_LARGE,
    )
    .await;
    refused(
        "application/x-ndjson",
        padded(256 << 10),
        StatusCode::PAYLOAD_TOO_LARGE,
    )
    .await;
}

#[tokio::test]
async fn oversized_without_a_length() {
    let chunks = (0..64).map(|_| Ok::<_, std::io::Error>(vec![b' '; 4 << 10]));
    let body = reqwest::Body::wrap_stream(futures::stream::iter(chunks));
    refused("application/json", body, StatusCode::PAYLOAD_TOO_LARGE).await;
}

#[tokio::test]
async fn oversized_line() {
    let service = service().await;
    let line = format!("{{\"batch\": \"{}\"}}", "x".repeat(64 << 10));
    let answer = service.post("application/x-ndjson", line).await;
    let line: Value = serde_json::from_str(&answer.text().await.expect("text")).expect("JSON");
    assert_eq!(line["status"], 413);
}

#[tokio::test]
async fn wrong_content_type() {
    for content_type in ["text/plain", "application/xml", "application/toml"] {
        refused(
            content_type,
            batch("bad", 1, 150.0),
            StatusCode::UNSUPPORTED_MEDIA_TYPE,
        )
        .await;
    }
}

async fn compressed(coding: &str, body: Vec<u8>, status: StatusCode) {
    let service = service().await;
    let before = contents(&service.database).await;
    let request = service.client.post(service.url("/v1/plants/mixer/batches"));
    let request = request
        .header("content-type", "application/json")
        .header("content-encoding", coding);
    let answer = request.body(body).send().await.expect("an answer");
    problem(answer, status).await;
    assert_eq!(contents(&service.database).await, before);
}

#[tokio::test]
async fn bombs() {
    let spaces = vec![b' '; 64 << 20];
    let zstd = zstd::encode_all(&spaces[..], 19).expect("encoded");
    assert!(zstd.len() < 10_000, "{}", zstd.len());
    compressed("zstd", zstd, StatusCode::PAYLOAD_TOO_LARGE).await;
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::best());
    std::io::Write::write_all(&mut gzip, &spaces[..16 << 20]).expect("written");
    let gzip = gzip.finish().expect("finished");
    assert!(gzip.len() < 64 << 10, "{}", gzip.len());
    compressed("gzip", gzip, StatusCode::PAYLOAD_TOO_LARGE).await;
}

#[tokio::test]
async fn a_window_that_would_take_all_memory() {
    use zstd::stream::raw::CParameter;
    let mut encoder = zstd::Encoder::new(Vec::new(), 3).expect("an encoder");
    encoder
        .set_parameter(CParameter::WindowLog(27))
        .expect("a window");
    encoder.include_contentsize(false).expect("no size");
    std::io::Write::write_all(&mut encoder, batch("bad", 1, 150.0).as_bytes()).expect("written");
    compressed(
        "zstd",
        encoder.finish().expect("finished"),
        StatusCode::BAD_REQUEST,
    )
    .await;
}

#[tokio::test]
async fn broken_or_unknown_compression() {
    compressed("gzip", b"no gzip".to_vec(), StatusCode::BAD_REQUEST).await;
    compressed("zstd", b"no zstd".to_vec(), StatusCode::BAD_REQUEST).await;
    let whole = zstd::encode_all(batch("bad", 1, 150.0).as_bytes(), 3).expect("encoded");
    compressed(
        "zstd",
        whole[..whole.len() / 2].to_vec(),
        StatusCode::BAD_REQUEST,
    )
    .await;
    compressed("br", whole, StatusCode::UNSUPPORTED_MEDIA_TYPE).await;
}

#[tokio::test]
async fn plant_files_have_limits_too() {
    let service = service().await;
    let before = contents(&service.database).await;
    let put = |content_type: &'static str, body: String| {
        let request = service.client.put(service.url("/v1/plants/mixer"));
        request
            .header("content-type", content_type)
            .body(body)
            .send()
    };
    let deep = format!("{{\"plant\": {}}}", "[".repeat(20_000));
    for (content_type, body, status) in [
        (
            "text/plain",
            "x".to_owned(),
            StatusCode::UNSUPPORTED_MEDIA_TYPE,
        ),
        (
            "application/toml",
            "x".repeat(65 << 10),
            StatusCode::PAYLOAD_TOO_LARGE,
        ),
        (
            "application/toml",
            "plant = ".to_owned(),
            StatusCode::UNPROCESSABLE_ENTITY,
        ),
        (
            "application/json",
            "{\"plant\": ".to_owned(),
            StatusCode::UNPROCESSABLE_ENTITY,
        ),
        ("application/json", deep, StatusCode::UNPROCESSABLE_ENTITY),
    ] {
        problem(put(content_type, body).await.expect("an answer"), status).await;
    }
    assert_eq!(contents(&service.database).await, before);
}
