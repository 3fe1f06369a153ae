//! The webhook: every event signed and in order, again after a refusal, and after
//! a restart from where it was.

use super::{act, plant, raise, reported};
use crate::harness::{Service, Setup, delivered};
use axum::body::Bytes;
use axum::extract::State;
use axum::http::{HeaderMap, StatusCode};
use base64::Engine;
use base64::engine::general_purpose::STANDARD;
use counterpoise::server::Hook;
use hmac::{Hmac, KeyInit, Mac};
use serde_json::{Value, json};
use sha2::{Digest, Sha256};
use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicUsize, Ordering};
use std::time::Duration;
use tokio::sync::mpsc;

const SECRET: &[u8] = b"thirty-two bytes or more of them";

/// Somebody else's service.
struct Receiver {
    url: String,
    /// Requests that it still refuses.
    refusals: Arc<AtomicUsize>,
    /// What it was sent, and whether it took it.
    requests: mpsc::UnboundedReceiver<(HeaderMap, Bytes, bool)>,
}

#[derive(Clone)]
struct Inside {
    refusals: Arc<AtomicUsize>,
    tell: mpsc::UnboundedSender<(HeaderMap, Bytes, bool)>,
}

async fn take(State(inside): State<Inside>, headers: HeaderMap, body: Bytes) -> StatusCode {
    let less = |left: usize| left.checked_sub(1);
    let order = Ordering::SeqCst;
    let refused = inside.refusals.fetch_update(order, order, less).is_ok();
    // Where the test has ended nobody wants to know.
    let _ = inside.tell.send((headers, body, !refused));
    if refused {
        StatusCode::SERVICE_UNAVAILABLE
    } else {
        StatusCode::NO_CONTENT
    }
}

impl Receiver {
    async fn start() -> Receiver {
        let (tell, requests) = mpsc::unbounded_channel();
        let refusals = Arc::new(AtomicUsize::new(0));
        let inside = Inside {
            refusals: Arc::clone(&refusals),
            tell,
        };
        let router = axum::Router::new()
            .route("/in", axum::routing::post(take))
            .with_state(inside);
        let listener = tokio::net::TcpListener::bind("127.0.0.1:0")
            .await
            .expect("a port");
        let url = format!("http://{}/in", listener.local_addr().expect("an address"));
        tokio::spawn(async move { axum::serve(listener, router).await });
        Receiver {
            url,
            refusals,
            requests,
        }
    }

    /// The next request, after its signature has been checked.
    async fn next(&mut self) -> (Value, bool) {
        let wait = tokio::time::timeout(Duration::from_secs(30), self.requests.recv());
        let (headers, body, taken) = wait.await.expect("in time").expect("a request");
        let header = |name: &str| headers[name].to_str().expect("text").to_owned();
        let digest = format!("sha-256=:{}:", STANDARD.encode(Sha256::digest(&body)));
        assert_eq!(header("content-digest"), digest);
        let input = header("signature-input");
        let parameters = input.strip_prefix("counterpoise=").expect("our label");
        let base = format!(
            "\"@method\": POST\n\"@target-uri\": {}\n\"content-digest\": {digest}\n\
             \"content-type\": application/json\n\"@signature-params\": {parameters}",
            self.url
        );
        let mut mac = Hmac::<Sha256>::new_from_slice(SECRET).expect("a key");
        mac.update(base.as_bytes());
        let signature = STANDARD.encode(mac.finalize().into_bytes());
        assert_eq!(header("signature"), format!("counterpoise=:{signature}:"));
        (serde_json::from_slice(&body).expect("JSON"), taken)
    }

    async fn service(&self, database: &Path) -> Service {
        let mut secret = SECRET.to_vec();
        secret.push(b'\n');
        let mut hook = Hook::new(&self.url, &secret).expect("a hook");
        hook.schedule.first = Duration::from_millis(4);
        hook.schedule.longest = Duration::from_millis(20);
        let service = Service::with(Setup {
            database: Some(database.to_owned()),
            webhook: Some(hook),
            ..Setup::default()
        });
        service.put_plant_file("mixer", &plant()).await;
        service
    }
}

/// Asks until everything up to an event is settled.
async fn settled(service: &Service, event: i64) {
    let asking = async { while delivered(&service.database).await < Some(event) {} };
    tokio::time::timeout(Duration::from_secs(30), asking)
        .await
        .expect("settled in time");
}

#[tokio::test]
async fn events_arrive_signed_in_order_and_from_where_it_was() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("kept.sqlite");
    // What was before there was a webhook is not sent.
    let mut without = super::at(Some(&database)).await;
    let id = raise(&without, 0).await;
    without.stop().expect("an orderly end");

    let mut receiver = Receiver::start().await;
    let mut first = receiver.service(&database).await;
    settled(&first, 1).await;
    receiver.refusals.store(2, Ordering::SeqCst);
    first
        .done(&act(id, "acknowledge"), &json!({"by": "R. Moss"}))
        .await;
    first
        .done(
            &act(id, "shelve"),
            &json!({"by": "R. Moss", "until": "2031-04-02T13:00:00Z"}),
        )
        .await;
    let mut sent = Vec::new();
    for expected in [false, false, true, true] {
        let (event, taken) = receiver.next().await;
        assert_eq!(taken, expected, "{event}");
        sent.push((
            event["id"].as_i64().expect("a number"),
            event["kind"].clone(),
        ));
    }
    let kinds = ["acknowledged", "acknowledged", "acknowledged", "shelved"];
    assert_eq!(
        sent,
        [2, 2, 2, 3]
            .into_iter()
            .zip(kinds.map(Value::from))
            .collect::<Vec<_>>()
    );

    // The receiver is down when the service ends, and up again after it.
    settled(&first, 3).await;
    receiver.refusals.store(usize::MAX, Ordering::SeqCst);
    first
        .done(&act(id, "unshelve"), &json!({"by": "R. Moss"}))
        .await;
    let (event, taken) = receiver.next().await;
    assert_eq!((event["id"].as_i64(), taken), (Some(4), false));
    first.stop().expect("an orderly end");
    receiver.refusals.store(0, Ordering::SeqCst);
    let second = receiver.service(&database).await;
    let (event, is_taken) = loop {
        let (event, taken) = receiver.next().await;
        if taken {
            break (event, taken);
        }
    };
    assert_eq!((event["id"].as_i64(), is_taken), (Some(4), true));
    assert_eq!(event["alarm"]["state"], "active-acknowledged");
    for minute in 3..6 {
        reported(&second, minute, 0.0).await;
    }
    let (event, taken) = receiver.next().await;
    assert_eq!((event["id"].as_i64(), taken), (Some(5), true));
    assert_eq!(event["kind"], "returned");
}
