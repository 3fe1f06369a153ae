//! Small bodies that would cost a lot: compressed bombs of every kind, and JSON
//! that is nested a million deep. Each is refused, changes nothing, and takes no
//! more memory than the limits say.

use crate::harness::{PLANT, Service, batch, contents, problem};
use crate::under_load::{Process, program};
use reqwest::StatusCode;
use std::io::Write;

const BATCHES: &str = "/v1/plants/mixer/batches";

/// A message with its media type and its coding.
struct Sent {
    what: &'static str,
    method: reqwest::Method,
    path: &'static str,
    media_type: &'static str,
    coding: &'static str,
    body: Vec<u8>,
    status: StatusCode,
}

fn gzip(bytes: &[u8]) -> Vec<u8> {
    let mut encoder = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::best());
    encoder.write_all(bytes).expect("written");
    encoder.finish().expect("finished")
}

fn zstd(bytes: &[u8]) -> Vec<u8> {
    zstd::encode_all(bytes, 19).expect("encoded")
}

/// A frame that asks for a window of 2^31 bytes and says nothing of its size: its
/// header after RFC 8878, and an empty last block.
fn greedy_frame() -> Vec<u8> {
    let window = (31 - 10) << 3;
    vec![0x28, 0xb5, 0x2f, 0xfd, 0x00, window, 0x01, 0x00, 0x00]
}

/// A frame that promises a content of 2^62 bytes.
fn boastful_frame() -> Vec<u8> {
    let mut frame = vec![0x28, 0xb5, 0x2f, 0xfd, 0xc0, 13 << 3];
    frame.extend((1_u64 << 62).to_le_bytes());
    frame.extend([0x01, 0x00, 0x00]);
    frame
}

fn bombs() -> Vec<(&'static str, &'static str, Vec<u8>, StatusCode)> {
    let (large, bad) = (StatusCode::PAYLOAD_TOO_LARGE, StatusCode::BAD_REQUEST);
    let spaces = vec![b' '; 64 << 20];
    let members: Vec<u8> = gzip(&spaces[..1 << 20]).repeat(64);
    let frames: Vec<u8> = zstd(&spaces[..1 << 20]).repeat(64);
    vec![
        ("gzip", "gzip", gzip(&spaces), large),
        ("zstd", "zstd", zstd(&spaces), large),
        ("gzip of many members", "gzip", members, large),
        ("zstd of many frames", "zstd", frames, large),
        // Taken off once, as the header says, what comes out is no JSON.
        ("gzip in gzip", "gzip", gzip(&gzip(&spaces)), bad),
        ("zstd in zstd", "zstd", zstd(&zstd(&spaces)), bad),
        ("gzip in zstd", "zstd", zstd(&gzip(&spaces)), bad),
        (
            "two codings",
            "gzip, gzip",
            gzip(&gzip(&spaces)),
            StatusCode::UNSUPPORTED_MEDIA_TYPE,
        ),
        ("a window of 2 GiB", "zstd", greedy_frame(), bad),
        ("a promise of 4 EiB", "zstd", boastful_frame(), bad),
    ]
}

/// A million brackets, as every reader meets them.
fn deep() -> Vec<Sent> {
    const DEPTH: usize = 1_000_000;
    let json = "application/json";
    let (bad, faulty) = (StatusCode::BAD_REQUEST, StatusCode::UNPROCESSABLE_ENTITY);
    let open = "[".repeat(DEPTH);
    let closed = format!("{open}1{}", "]".repeat(DEPTH));
    let objects = "{\"\":".repeat(DEPTH);
    let inside = |key: &str| format!("{{\"{key}\": {closed}}}");
    let sent = |what, path, media_type, body: String, status| Sent {
        what,
        method: reqwest::Method::POST,
        path,
        media_type,
        coding: "identity",
        body: body.into_bytes(),
        status,
    };
    let file = |what, media_type, body| Sent {
        method: reqwest::Method::PUT,
        ..sent(what, "/v1/plants/mixer", media_type, body, faulty)
    };
    vec![
        sent("a batch", BATCHES, json, inside("batch"), bad),
        sent("readings", BATCHES, json, inside("readings"), bad),
        sent("an open batch", BATCHES, json, open.clone(), bad),
        sent("objects", BATCHES, json, objects.clone(), bad),
        sent(
            "an act",
            "/v1/plants/mixer/by-hand",
            json,
            inside("tag"),
            bad,
        ),
        sent(
            "an open act",
            "/v1/plants/mixer/by-hand",
            json,
            objects.clone(),
            bad,
        ),
        file("a plant file", json, inside("plant")),
        file("an open plant file", json, objects),
        file(
            "TOML",
            "application/toml",
            format!("{PLANT}\n[x]\ny = {closed}\n"),
        ),
        file("open TOML", "application/toml", format!("y = {open}")),
        file(
            "inline tables",
            "application/toml",
            format!("y = {}", "{a=".repeat(DEPTH)),
        ),
        file(
            "dotted keys",
            "application/toml",
            format!("{}a = 1", "a.".repeat(DEPTH)),
        ),
        file(
            "a deep header",
            "application/toml",
            format!("[{}a]", "a.".repeat(DEPTH)),
        ),
    ]
}

async fn is_refused(service: &Service, sent: Sent) {
    println!("{}", sent.what);
    let request = service.client.request(sent.method, service.url(sent.path));
    let request = request
        .header("content-type", sent.media_type)
        .header("content-encoding", sent.coding);
    let answer = request.body(sent.body).send().await.expect("an answer");
    problem(answer, sent.status).await;
}

#[tokio::test]
async fn a_million_deep() {
    let service = Service::with_plant().await;
    let before = contents(&service.database).await;
    for sent in deep() {
        is_refused(&service, sent).await;
    }
    assert_eq!(contents(&service.database).await, before);
    assert_eq!(
        service.post_batch(batch("b", 0, 150.0)).await.status(),
        StatusCode::OK
    );
}

#[tokio::test]
async fn bombs_of_every_kind() {
    // Made beforehand: a connection that is idle meanwhile would be closed.
    let bombs = bombs();
    let service = Service::with_plant().await;
    let before = contents(&service.database).await;
    for (what, coding, body, status) in bombs {
        let sent = |method, path, media_type| Sent {
            what,
            method,
            path,
            media_type,
            coding,
            body: body.clone(),
            status,
        };
        let post = reqwest::Method::POST;
        is_refused(&service, sent(post.clone(), BATCHES, "application/json")).await;
        let mut put = sent(reqwest::Method::PUT, "/v1/plants/mixer", "application/json");
        if what == "a promise of 4 EiB" {
            // What comes out is empty, and that is a plant file with a fault.
            put.status = StatusCode::UNPROCESSABLE_ENTITY;
        }
        is_refused(&service, put).await;
        // Lines of a stream are refused one by one, and one of none is empty.
        if !what.contains(" in ") && what != "a promise of 4 EiB" {
            is_refused(&service, sent(post, BATCHES, "application/x-ndjson")).await;
        }
    }
    assert_eq!(contents(&service.database).await, before);
}

#[cfg(target_os = "linux")]
/// Peak of the resident memory of a process, in MiB.
fn peak_memory(process: &Process) -> u64 {
    let status = std::fs::read_to_string(format!("/proc/{}/status", process.id()));
    let status = status.expect("the state of a process");
    let peak = status.lines().find_map(|line| line.strip_prefix("VmHWM:"));
    let kilobytes = peak.expect("a peak").trim().trim_end_matches(" kB");
    kilobytes.trim().parse::<u64>().expect("a number") / 1024
}

#[cfg(target_os = "linux")]
/// As many bombs at once as there are permits, over and over.
#[tokio::test]
async fn bombs_at_once_take_bounded_memory() {
    let bomb = zstd::encode_all(&vec![b' '; 256 << 20][..], 3).expect("encoded");
    let directory = tempfile::tempdir().expect("a directory");
    let service = Process::start(program(&directory.path().join("test.sqlite")));
    let service = service.expect("a service");
    let base = format!("http://{}", service.address);
    let client = reqwest::Client::new();
    let put = client.put(format!("{base}/v1/plants/mixer"));
    let put = put.header("content-type", "application/toml").body(PLANT);
    assert_eq!(
        put.send().await.expect("an answer").status(),
        StatusCode::CREATED
    );
    let before = peak_memory(&service);
    let mut refused = 0;
    for _ in 0..4 {
        let posts = (0..64).map(|_| {
            let post = client.post(format!("{base}{BATCHES}"));
            let post = post.header("content-type", "application/x-ndjson");
            post.header("content-encoding", "zstd")
                .body(bomb.clone())
                .send()
        });
        for answer in futures::future::join_all(posts).await {
            let status = answer.expect("an answer").status();
            let too_many = status == StatusCode::TOO_MANY_REQUESTS;
            assert!(
                too_many || status == StatusCode::PAYLOAD_TOO_LARGE,
                "{status}"
            );
            refused += usize::from(!too_many);
        }
    }
    let peak = peak_memory(&service);
    println!("{refused} bombs of 256 MiB: from {before} MiB to {peak} MiB");
    assert!(refused >= 64, "{refused}");
    // Each takes a stream's limit of 32 MiB, twice while its vector grows, and a
    // window of 8 MiB; the threads that decompress are as many as the permits.
    assert!(
        peak < before + 64 * (2 * 32 + 8),
        "{before} MiB to {peak} MiB"
    );
}
