//! Clients of a backfill that break off, stop sending, or come twice.

use super::{fill, history, path};
use crate::harness::{Service, number, problem};
use crate::malformed::impatient;
use crate::readings::{csv, on, until};
use reqwest::StatusCode;
use serde_json::Value;
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::TcpStream;

/// Opens a stream and sends the beginning of a body whose end never comes.
async fn begin(service: &Service, name: &str, body: &str) -> TcpStream {
    let stream = TcpStream::connect(service.address).await;
    let mut stream = stream.expect("a connection");
    let head = format!(
        "POST {} HTTP/1.1\r\nhost: localhost\r\ncontent-type: text/csv\r\n\
         content-length: {}\r\n\r\n",
        path(name),
        body.len() * 2
    );
    stream.write_all(head.as_bytes()).await.expect("written");
    stream.write_all(body.as_bytes()).await.expect("written");
    stream
}

async fn idle(service: &Service, name: &str) -> Value {
    until("an end", async || {
        let answer = service.get(&path(name)).await;
        if answer.status() != StatusCode::OK {
            return None;
        }
        let progress: Value = answer.json().await.expect("JSON");
        (progress["coming_in"] == false).then_some(progress)
    })
    .await
}

fn settled(progress: &Value) -> usize {
    let bytes = progress["bytes"].as_u64().expect("a number");
    usize::try_from(bytes).expect("small")
}

/// Cut again and again, at any byte: in the end every sample is there once.
#[tokio::test]
async fn a_cut_connection_goes_on_where_it_was() {
    let service = Service::with_plant().await;
    let whole = csv(&history(30, 0.0));
    let mut from = 0;
    for cut in 1..6 {
        let name = format!("cut?from={from}");
        let stream = begin(&service, &name, &whole[from..whole.len() * cut / 6 + 7]).await;
        until("it comes in", async || {
            let answer = service.get(&path("cut")).await;
            (answer.status() == StatusCode::OK).then_some(())
        })
        .await;
        drop(stream);
        let now = settled(&idle(&service, "cut").await);
        assert!(now >= from, "nothing settled is lost");
        assert!(
            now == 0 || whole.as_bytes()[now - 1] == b'\n',
            "whole lines"
        );
        from = now;
    }
    assert!(from > 0, "something was settled before the cuts");
    let answer = fill(
        &service,
        &format!("cut?from={from}&complete=true"),
        whole[from..].to_owned(),
    )
    .await;
    let answer: Value = answer.json().await.expect("JSON");
    assert_eq!(answer["bytes"], whole.len());
    assert_eq!(answer["lines"], whole.lines().count());
    assert_eq!(answer["new"], 30 * 60 * 9);
    assert_eq!(answer["readings"]["known"], 0, "nothing twice");
}

/// Each piece may take the read timeout; the whole may take longer.
#[tokio::test]
async fn a_client_that_stalls_is_cut_and_what_came_is_settled() {
    let service = impatient().await;
    let part = csv(&history(1, 0.0));
    let mut stream = begin(&service, "stalled", &part).await;
    let mut answer = String::new();
    stream.read_to_string(&mut answer).await.expect("a close");
    assert!(answer.starts_with("HTTP/1.1 408 "), "{answer}");
    assert!(answer.contains(&format!("from={}", part.len())), "{answer}");
    assert_eq!(settled(&idle(&service, "stalled").await), part.len());
}

#[tokio::test]
async fn content_comes_in_once_at_a_time() {
    let service = Service::with_plant().await;
    let part = csv(&history(1, 0.0));
    let stream = begin(&service, "two", &part).await;
    until("it comes in", async || {
        let answer = service.get(&path("two")).await;
        (answer.status() == StatusCode::OK).then_some(())
    })
    .await;
    let second = fill(&service, "two", part.clone()).await;
    problem(second, StatusCode::CONFLICT).await;
    drop(stream);
    idle(&service, "two").await;
}

/// An orderly end does not wait for a year to come in.
#[tokio::test]
async fn an_orderly_end_cuts_a_backfill_and_keeps_what_came() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let mut service = Service::with(on(&database));
    service.put_plant().await;
    let part = csv(&history(20, 0.0));
    let mut stream = begin(&service, "long", &part).await;
    until("a block", async || {
        let answer = service.get(&path("long")).await;
        let progress: Value = answer.json().await.ok()?;
        (progress["bytes"].as_u64()? > 0).then_some(())
    })
    .await;
    let ending = tokio::task::spawn_blocking(move || service.stop());
    let mut answer = String::new();
    stream.read_to_string(&mut answer).await.expect("a close");
    ending.await.expect("no panic").expect("an orderly end");
    assert!(answer.starts_with("HTTP/1.1 503 "), "{answer}");
    assert!(number(&database, "SELECT count(*) FROM samples").await > 1000);
}

/// A kilobyte that becomes gigabytes is read in bounded memory and stopped at
/// its first block.
#[tokio::test]
async fn a_bomb_does_not_go_off() {
    let service = Service::with_plant().await;
    let bomb =
        zstd::encode_all(std::io::Read::take(std::io::repeat(b'0'), 1 << 30), 3).expect("encoded");
    assert!(bomb.len() < 200_000, "{}", bomb.len());
    let request = service
        .client
        .post(service.url(&path("bomb?complete=true")));
    let request = request.header("content-type", "text/csv");
    let request = request.header("content-encoding", "zstd").body(bomb);
    let answer = request.send().await.expect("an answer");
    assert!(answer.status().is_client_error(), "{}", answer.status());
    let progress = service.get_json(&path("bomb")).await;
    assert_eq!(settled(&progress), 0);
}
