//! Clients that are slow, break off, or are too many at once.

use crate::harness::{Service, Setup, batch, contents, problem};
use crate::malformed::{impatient, service};
use counterpoise::server::Limits;
use reqwest::StatusCode;
use serde_json::Value;
use std::time::Duration;
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::TcpStream;

/// Sends bytes and reads until the server closes.
async fn raw(service: &Service, bytes: &str) -> String {
    let mut stream = TcpStream::connect(service.address)
        .await
        .expect("a connection");
    stream.write_all(bytes.as_bytes()).await.expect("written");
    let mut answer = String::new();
    let reading = stream.read_to_string(&mut answer);
    tokio::time::timeout(Duration::from_secs(10), reading)
        .await
        .expect("a close")
        .expect("text");
    answer
}

fn is_timeout(answer: &str) {
    assert!(answer.starts_with("HTTP/1.1 408 "), "{answer}");
    let (head, body) = answer.split_once("\r\n\r\n").expect("a body");
    assert!(
        head.contains("content-type: application/problem+json"),
        "{head}"
    );
    let problem: Value = serde_json::from_str(body).expect("JSON");
    assert_eq!(problem["status"], 408);
    assert!(
        head.contains(problem["instance"].as_str().expect("an id")),
        "{head}"
    );
}

const HEAD: &str = "POST /v1/plants/mixer/batches HTTP/1.1\r\nhost: localhost\r\ncontent-type: application/json\r\n";

const CONTINUE: &[u8] = b"HTTP/1.1 100 Continue\r\n\r\n";

#[tokio::test]
async fn slow_headers() {
    let service = impatient().await;
    let before = contents(&service.database).await;
    is_timeout(&raw(&service, HEAD).await);
    is_timeout(&raw(&service, "POST /v1/pl").await);
    assert_eq!(contents(&service.database).await, before);
}

#[tokio::test]
async fn slow_body() {
    let service = impatient().await;
    let before = contents(&service.database).await;
    is_timeout(
        &raw(
            &service,
            &format!("{HEAD}content-length: 500\r\n\r\n{{\"batch\": "),
        )
        .await,
    );
    assert_eq!(contents(&service.database).await, before);
}

#[tokio::test]
async fn dripping_body() {
    let service = impatient().await;
    let before = contents(&service.database).await;
    let drops = futures::stream::unfold((), |()| async {
        tokio::time::sleep(Duration::from_millis(50)).await;
        Some((Ok::<_, std::io::Error>(" "), ()))
    });
    let answer = service
        .post("application/json", reqwest::Body::wrap_stream(drops))
        .await;
    problem(answer, StatusCode::REQUEST_TIMEOUT).await;
    assert_eq!(contents(&service.database).await, before);
}

#[tokio::test]
async fn a_connection_that_breaks_off() {
    let service = service().await;
    let before = contents(&service.database).await;
    let whole = batch("bad", 1, 150.0);
    let mut stream = TcpStream::connect(service.address)
        .await
        .expect("a connection");
    let request = format!(
        "{HEAD}content-length: {}\r\n\r\n{}",
        whole.len(),
        &whole[..40]
    );
    stream.write_all(request.as_bytes()).await.expect("written");
    stream.shutdown().await.expect("half closed");
    let mut answer = String::new();
    // Whether anybody still reads an answer is the network's affair.
    let _ = stream.read_to_string(&mut answer).await;
    assert!(
        answer.is_empty() || answer.starts_with("HTTP/1.1 400 "),
        "{answer}"
    );
    assert_eq!(contents(&service.database).await, before);
}

#[tokio::test]
async fn too_many_at_once() {
    let limits = Limits {
        in_flight: 1,
        ..Limits::default()
    };
    let service = Service::with(Setup {
        limits,
        ..Setup::default()
    });
    service.put_plant().await;
    // A request that has its permit and is waited for.
    let mut stream = TcpStream::connect(service.address)
        .await
        .expect("a connection");
    let body = batch("slow", 0, 150.0);
    let head = format!(
        "{HEAD}expect: 100-continue\r\ncontent-length: {}\r\n\r\n",
        body.len()
    );
    stream.write_all(head.as_bytes()).await.expect("written");
    let mut asked = [0; CONTINUE.len()];
    stream
        .read_exact(&mut asked)
        .await
        .expect("asked to continue");
    assert_eq!(&asked, CONTINUE);
    let answer = service.post_batch(batch("second", 1, 150.0)).await;
    assert_eq!(answer.headers()["retry-after"], "1");
    problem(answer, StatusCode::TOO_MANY_REQUESTS).await;
    stream.write_all(body.as_bytes()).await.expect("written");
    let mut answer = [0; 64];
    let length = stream.read(&mut answer).await.expect("an answer");
    let text = String::from_utf8_lossy(&answer[..length]);
    assert!(text.starts_with("HTTP/1.1 200 "), "{text}");
    assert_eq!(
        service.post_batch(batch("second", 1, 150.0)).await.status(),
        StatusCode::OK
    );
}

/// One byte of the head at a time is no excuse.
#[tokio::test]
async fn dripping_headers() {
    let service = impatient().await;
    let before = contents(&service.database).await;
    let stream = TcpStream::connect(service.address)
        .await
        .expect("a connection");
    let (mut reader, mut writer) = stream.into_split();
    let drips = tokio::spawn(async move {
        for byte in HEAD.bytes().cycle() {
            if writer.write_all(&[byte]).await.is_err() {
                return;
            }
            tokio::time::sleep(Duration::from_millis(20)).await;
        }
    });
    let mut answer = Vec::new();
    let reading = reader.read_to_end(&mut answer);
    // A reset after the answer is as good a close.
    let _ = tokio::time::timeout(Duration::from_secs(10), reading)
        .await
        .expect("a close");
    is_timeout(&String::from_utf8(answer).expect("text"));
    drips.abort();
    assert_eq!(contents(&service.database).await, before);
}

/// As many slow clients as there may be connections hold up the others no longer
/// than one of them may take.
#[tokio::test]
async fn slow_clients_at_every_connection() {
    let limits = Limits {
        read_timeout: Duration::from_millis(300),
        connections: 16,
        ..Limits::default()
    };
    let service = Service::with(Setup {
        limits,
        ..Setup::default()
    });
    service.put_plant().await;
    let mut slow = Vec::new();
    for n in 0..32 {
        let mut stream = TcpStream::connect(service.address)
            .await
            .expect("a connection");
        let half = if n % 2 == 0 { &HEAD[..20] } else { HEAD };
        stream.write_all(half.as_bytes()).await.expect("written");
        slow.push(stream);
    }
    // A client that has no connection yet.
    let client = reqwest::Client::new();
    let post = client.post(service.url("/v1/plants/mixer/batches"));
    let post = post.header("content-type", "application/json");
    let sent = post.body(batch("patient", 0, 150.0)).send();
    let answer = tokio::time::timeout(Duration::from_secs(10), sent).await;
    let answer = answer.expect("the others are cut").expect("an answer");
    assert_eq!(answer.status(), StatusCode::OK);
}
