//! Clients that go away, at every stage of a request: what was not sent whole
//! changes nothing, what was accepted is finished, and nobody's place stays taken.

use crate::harness::{Service, Setup, batch, contents};
use counterpoise::server::Limits;
use reqwest::StatusCode;
use serde_json::Value;
use std::time::Duration;
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::TcpStream;

/// A service where a permit that is not given back shows.
async fn narrow() -> Service {
    let limits = Limits {
        in_flight: 2,
        ..Limits::default()
    };
    let service = Service::with(Setup {
        limits,
        ..Setup::default()
    });
    service.put_plant().await;
    service
}

fn request(body: &str, content_type: &str, headers: &str) -> String {
    format!(
        "POST /v1/plants/mixer/batches HTTP/1.1\r\nhost: localhost\r\ncontent-type: {content_type}\r\n{headers}content-length: {}\r\n\r\n{body}",
        body.len()
    )
}

async fn send(service: &Service, bytes: &[u8]) -> TcpStream {
    let mut stream = TcpStream::connect(service.address)
        .await
        .expect("a connection");
    stream.write_all(bytes).await.expect("written");
    stream
}

/// Waits until nothing that was accepted is unfinished; names of what is there.
async fn settled(service: &Service) -> Vec<String> {
    let settling = async {
        loop {
            let rows = contents(&service.database).await;
            let of = |table: &str| {
                let rows = rows.iter().filter(move |row| row.starts_with(table));
                rows.cloned().collect::<Vec<_>>()
            };
            let accepted = of("inbox: ");
            if of("pending: ").is_empty() && of("results: ").len() == accepted.len() {
                return accepted;
            }
            tokio::time::sleep(Duration::from_millis(5)).await;
        }
    };
    let rows = tokio::time::timeout(Duration::from_secs(20), settling);
    let rows = rows.await.expect("everything accepted is finished");
    let name = |row: &String| row.split('\'').nth(1).expect("a name").to_owned();
    rows.iter().map(name).collect()
}

/// Nobody's permit is held any more: two at once are taken. A connection that was
/// just broken may still hold one for a moment.
async fn free(service: &Service, tag: &str) {
    let freeing = async {
        loop {
            let names = [format!("{tag}-one"), format!("{tag}-two")];
            let [one, two] = names.map(|name| service.post_batch(batch(&name, 0, 150.0)));
            let (one, two) = tokio::join!(one, two);
            if one.status() == StatusCode::OK && two.status() == StatusCode::OK {
                return;
            }
        }
    };
    let freed = tokio::time::timeout(Duration::from_secs(10), freeing).await;
    freed.expect("permits are held by clients that are gone");
}

/// The request breaks off after so many bytes, at 60 places from the first byte to
/// the last but one; with every second the connection is reset.
#[tokio::test]
async fn what_was_not_sent_whole_changes_nothing() {
    let service = narrow().await;
    let whole = request(&batch("half", 1, 150.0), "application/json", "");
    for n in 0..60 {
        let upto = (n * whole.len() / 60).max(1);
        let stream = send(&service, &whole.as_bytes()[..upto]).await;
        if n % 2 == 0 {
            stream.set_zero_linger().expect("no linger");
        }
        drop(stream);
    }
    free(&service, "after").await;
    let names = settled(&service).await;
    assert!(!names.iter().any(|name| name == "half"), "{names:?}");
}

/// The whole request is sent, and the client is gone before, while or after it is
/// accepted, reconciled and answered.
#[tokio::test]
async fn what_was_accepted_is_finished_whoever_is_gone() {
    let service = narrow().await;
    let mut sent = 0;
    for headers in ["", "prefer: respond-async\r\n"] {
        for wait in 0..30_u64 {
            let name = format!("gone{}-{wait}", headers.len());
            let body = batch(&name, 1, 150.0);
            let whole = request(&body, "application/json", headers);
            let stream = send(&service, whole.as_bytes()).await;
            tokio::time::sleep(Duration::from_micros(300 * wait)).await;
            stream.set_zero_linger().expect("no linger");
            drop(stream);
            sent += 1;
        }
    }
    free(&service, "after").await;
    let names = settled(&service).await;
    let gone = names.iter().filter(|name| name.starts_with("gone")).count();
    println!("{gone} of {sent} were accepted before their clients were gone");
    assert!(gone > 0);
    for name in names {
        let report: Value = service.report(&name).await;
        assert_eq!(report["verdict"], "consistent");
        // Posted again it is the same batch.
        let minute = u32::from(name.starts_with("gone"));
        let again = service.post_batch(batch(&name, minute, 150.0)).await;
        assert_eq!(again.status(), StatusCode::OK, "{name}");
        assert_eq!(again.json::<Value>().await.expect("JSON"), report);
    }
}

/// A stream whose client leaves after the first answers.
#[tokio::test]
async fn a_stream_that_nobody_reads_to_its_end() {
    let service = narrow().await;
    let lines: Vec<String> = (0..100)
        .map(|n| batch(&format!("l{n:03}"), n, 150.0))
        .collect();
    for headers in ["", "prefer: respond-async\r\n"] {
        let request = request(&lines.join("\n"), "application/x-ndjson", headers);
        let mut stream = send(&service, request.as_bytes()).await;
        let mut first = [0; 512];
        let read = stream.read(&mut first).await.expect("an answer");
        assert!(first[..read].starts_with(b"HTTP/1.1 20"));
        stream.set_zero_linger().expect("no linger");
        drop(stream);
    }
    free(&service, "after").await;
    let names = settled(&service).await;
    assert!(names.len() > 2, "{names:?}");
    let whole = lines.join("\n");
    let answer = service.post("application/x-ndjson", whole).await;
    let answers = answer.text().await.expect("text");
    assert_eq!(answers.lines().count(), 100);
    for line in answers.lines() {
        let report: Value = serde_json::from_str(line).expect("JSON");
        assert_eq!(report["verdict"], "consistent", "{line}");
    }
}
