//! The sending loop: against a receiver that is made up, with time that does not
//! pass by itself, and against a real one.

use super::*;
use crate::alarms::{Alarm, AlarmKind, Event, EventKind, Figures, Key as AlarmKey, State, Tally};
use axum::Router;
use axum::body::Bytes;
use axum::extract::State as Shared;
use axum::http::{HeaderMap, Method, Response};
use axum::routing::any;
use std::collections::VecDeque;
use std::sync::{Arc, Mutex};
use std::time::Duration;
use time::OffsetDateTime;
use time::macros::datetime;
use tokio::time::Instant;

const START: OffsetDateTime = datetime!(2031-04-02 10:00 UTC);
const SECRET: [u8; 32] = [7; 32];

fn notice(id: i64) -> Notice {
    let figures = Figures {
        batch: "b3".to_owned(),
        end: START,
        value: Some(3.1),
        uncertainty: Some(0.4),
        unit: "t/h".to_owned(),
        statistic: 6.0,
        critical_value: 4.0,
    };
    let alarm = Alarm {
        id: 7,
        plant: "tarn-mill".to_owned(),
        key: AlarmKey::adjustment("FT-101"),
        kind: AlarmKind::Adjustment,
        title: "adjustment of FT-101".to_owned(),
        priority: serde_json::from_str("\"low\"").unwrap(),
        state: State::ActiveUnacknowledged,
        standing: true,
        members: Vec::new(),
        since: START,
        raised: START,
        returned: None,
        acknowledged: None,
        shelved: None,
        out_of_service: None,
        last: figures,
        batches: 3,
        raises: 1,
        accusation: None,
        tally: Tally::default(),
    };
    Notice {
        id,
        event: Event {
            kind: EventKind::Raised,
            alarm,
            at: START,
            by: None,
            note: None,
        },
        trace: Vec::new(),
    }
}

/// A receiver that is made up: answers in turn, then 204 for ever.
#[derive(Clone)]
struct Receiver {
    started: Instant,
    answers: Arc<Mutex<VecDeque<Result<Answer, String>>>>,
    /// Seconds since the start, the event's number, and the request.
    seen: Arc<Mutex<Vec<(f64, i64, Signed)>>>,
}

impl Receiver {
    fn new(answers: impl IntoIterator<Item = Result<Answer, String>>) -> Self {
        Receiver {
            started: Instant::now(),
            answers: Arc::new(Mutex::new(answers.into_iter().collect())),
            seen: Arc::default(),
        }
    }

    /// When which event came.
    fn times(&self) -> Vec<(f64, i64)> {
        let seen = self.seen.lock().unwrap();
        seen.iter().map(|(time, id, _)| (*time, *id)).collect()
    }
}

impl Post for Receiver {
    async fn post(&self, request: Signed) -> Result<Answer, String> {
        let body: serde_json::Value = serde_json::from_slice(&request.body).unwrap();
        let seen = self.started.elapsed().as_secs_f64();
        let id = body["id"].as_i64().unwrap();
        // Timers are no finer than a millisecond.
        let seen = (seen * 100.0).round() / 100.0;
        self.seen.lock().unwrap().push((seen, id, request));
        let next = self.answers.lock().unwrap().pop_front();
        next.unwrap_or_else(|| answer(204))
    }
}

fn answer(status: u16) -> Result<Answer, String> {
    Ok(Answer {
        status,
        retry_after: None,
    })
}

fn later(status: u16, retry_after: &str) -> Result<Answer, String> {
    Ok(Answer {
        status,
        retry_after: Some(retry_after.to_owned()),
    })
}

/// Sends these events to the end, and says what was settled.
async fn send<P: Post>(post: P, address: &str, schedule: Schedule, ids: &[i64]) -> Vec<Settled> {
    let (handle, waiting) = queue(2);
    let mut settled = Vec::new();
    let started = Instant::now();
    let sender = Sender {
        target: Target::new(address).unwrap(),
        key: Key::new("hook-1", &SECRET).unwrap(),
        schedule,
        post,
        clock: || START + started.elapsed(),
        jitter: || 1.0,
        settled: |end| settled.push(end),
    };
    let put = async {
        // By value: the sender ends when nobody can put anything more.
        let handle = handle;
        for id in ids {
            handle.put(notice(*id)).await.unwrap();
        }
    };
    tokio::join!(sender.run(waiting), put);
    settled
}

fn delivered(id: i64) -> Settled {
    Settled {
        id,
        outcome: Outcome::Delivered,
    }
}

const ADDRESS: &str = "http://alarms.example/in";

#[tokio::test(start_paused = true)]
async fn events_wait_for_the_one_before() {
    let receiver = Receiver::new([
        Err("connection refused".to_owned()),
        answer(503),
        answer(200),
        answer(429),
    ]);
    let settled = send(
        receiver.clone(),
        ADDRESS,
        Schedule::default(),
        &[3, 4, 5, 9],
    )
    .await;
    assert_eq!(settled, [3, 4, 5, 9].map(delivered));
    // 2 s and 4 s after failures; the next event starts anew.
    assert_eq!(
        receiver.times(),
        [
            (0.0, 3),
            (2.0, 3),
            (6.0, 3),
            (6.0, 4),
            (8.0, 4),
            (8.0, 5),
            (8.0, 9)
        ]
    );
    // Signed anew each time, with the time of the attempt.
    let seen = receiver.seen.lock().unwrap();
    let created = |signed: &Signed| {
        let input = signed.signature_input.split_once(";created=").unwrap().1;
        input.split_once(';').unwrap().0.parse::<i64>().unwrap()
    };
    assert_eq!(created(&seen[0].2), START.unix_timestamp());
    assert_eq!(created(&seen[2].2), START.unix_timestamp() + 6);
    assert_eq!(seen[0].2.body, seen[2].2.body);
    assert_ne!(seen[0].2.signature, seen[2].2.signature);
}

#[tokio::test(start_paused = true)]
async fn the_wait_grows_to_five_minutes_and_no_further() {
    let receiver = Receiver::new((0..11).map(|_| answer(500)));
    let settled = send(receiver.clone(), ADDRESS, Schedule::default(), &[1]).await;
    assert_eq!(settled, [delivered(1)]);
    let times: Vec<f64> = receiver.times().iter().map(|(time, _)| *time).collect();
    let waits: Vec<f64> = times.windows(2).map(|w| (w[1] - w[0]).round()).collect();
    let expected = [2, 4, 8, 16, 32, 64, 128, 256, 300, 300, 300];
    assert_eq!(waits, expected.map(f64::from));
}

#[tokio::test(start_paused = true)]
async fn retry_after_is_kept_where_it_is_longer() {
    let receiver = Receiver::new([
        later(503, "90"),
        later(429, "1"),
        later(503, "Wed, 02 Apr 2031 10:03:34 GMT"),
    ]);
    send(receiver.clone(), ADDRESS, Schedule::default(), &[1]).await;
    // 90 s; then 4 s of our own; then until 10:03:34, two minutes on.
    assert_eq!(
        receiver.times(),
        [(0.0, 1), (90.0, 1), (94.0, 1), (214.0, 1)]
    );
}

#[tokio::test(start_paused = true)]
async fn what_is_refused_is_given_up_and_the_next_goes_on() {
    let receiver = Receiver::new([answer(410), answer(308), answer(204)]);
    let settled = send(receiver.clone(), ADDRESS, Schedule::default(), &[1, 2, 3]).await;
    let given_up = |id, status| Settled {
        id,
        outcome: Outcome::GivenUp(status),
    };
    assert_eq!(settled, [given_up(1, 410), given_up(2, 308), delivered(3)]);
    assert_eq!(receiver.times(), [(0.0, 1), (0.0, 2), (0.0, 3)]);
}

#[tokio::test]
async fn the_queue_is_bounded_and_says_when_nobody_sends() {
    let (handle, waiting) = queue(2);
    assert_eq!(handle.offer(notice(1)), Ok(()));
    assert_eq!(handle.offer(notice(2)), Ok(()));
    assert_eq!(handle.offer(notice(3)), Err(Full));
    drop(waiting);
    assert_eq!(handle.put(notice(3)).await, Err(Stopped));
}

type Requests = Arc<Mutex<Vec<(Method, HeaderMap, Bytes)>>>;

/// A real receiver that is not ready for the first request.
async fn receive() -> (String, Requests) {
    let requests = Requests::default();
    let router = Router::new()
        .fallback(any(
            |Shared(requests): Shared<Requests>,
             method: Method,
             headers: HeaderMap,
             body: Bytes| async move {
                let mut requests = requests.lock().unwrap();
                requests.push((method, headers, body));
                let status = if requests.len() == 1 { 503 } else { 202 };
                let answer = Response::builder().status(status);
                answer.body(axum::body::Body::empty()).unwrap()
            },
        ))
        .with_state(requests.clone());
    let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
    let address = format!(
        "http://{}/in?plant=tarn-mill",
        listener.local_addr().unwrap()
    );
    tokio::spawn(async move { axum::serve(listener, router).await });
    (address, requests)
}

fn client(address: &str) -> Http {
    Http::new(&Target::new(address).unwrap(), None).unwrap()
}

/// In real time, which a paused clock would run ahead of.
#[tokio::test]
async fn a_real_receiver_can_check_what_it_gets() {
    let (address, requests) = receive().await;
    let schedule = Schedule {
        first: Duration::from_millis(20),
        longest: Duration::from_millis(40),
    };
    let settled = send(client(&address), &address, schedule, &[41, 42]).await;
    assert_eq!(settled, [delivered(41), delivered(42)]);
    let requests = requests.lock().unwrap();
    assert_eq!(requests.len(), 3);
    let numbers = requests.iter().map(|(method, headers, body)| {
        assert_eq!(method, Method::POST);
        let header = |name: &str| headers[name].to_str().unwrap();
        assert_eq!(header("content-type"), "application/json");
        assert_eq!(header("content-digest"), content_digest(body));
        // As a receiver does: with the parameters as they came.
        let input = header("signature-input");
        let parameters = input.split_once(')').unwrap().1;
        let base = signature_base(
            &[
                ("@method", "POST"),
                ("@target-uri", &address),
                ("content-digest", header("content-digest")),
                ("content-type", header("content-type")),
            ],
            parameters,
        );
        let params = base.rsplit_once("\"@signature-params\": ").unwrap().1;
        assert_eq!(format!("counterpoise={params}"), input);
        use base64::Engine;
        use hmac::{KeyInit, Mac};
        let mut mac = hmac::Hmac::<sha2::Sha256>::new_from_slice(&SECRET).unwrap();
        mac.update(base.as_bytes());
        let signature = header("signature");
        let signature = signature.strip_prefix("counterpoise=:").unwrap();
        let signature = signature.strip_suffix(':').unwrap();
        let engine = base64::engine::general_purpose::STANDARD;
        mac.verify_slice(&engine.decode(signature).unwrap())
            .unwrap();
        let notice: Notice = serde_json::from_slice(body).unwrap();
        assert_eq!(notice.event, super::tests::notice(0).event);
        notice.id
    });
    assert_eq!(numbers.collect::<Vec<_>>(), [41, 41, 42]);
}

#[tokio::test]
async fn a_receiver_that_is_not_there_is_no_panic() {
    // A port that was free a moment ago.
    let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
    let address = format!("http://{}/secret", listener.local_addr().unwrap());
    drop(listener);
    let target = Target::new(&address).unwrap();
    let key = Key::new("hook-1", &SECRET).unwrap();
    let signed = sign(&target, &key, b"{}", START);
    let reason = client(&address).post(signed).await.unwrap_err();
    assert!(!reason.is_empty() && !reason.contains("secret"), "{reason}");
}
