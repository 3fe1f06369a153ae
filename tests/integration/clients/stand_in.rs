//! A service that answers what it is told to, and keeps what it was sent.

use axum::body::Bytes;
use axum::extract::{OriginalUri, State};
use axum::http::{HeaderMap, Response};
use std::collections::VecDeque;
use std::io::Read;
use std::sync::{Arc, Mutex};
use std::time::Instant;

/// A request as it came.
#[derive(Clone, Debug)]
pub struct Came {
    pub path: String,
    pub headers: HeaderMap,
    pub body: Vec<u8>,
    pub at: Instant,
}

impl Came {
    /// The body, decompressed.
    pub fn text(&self) -> String {
        assert_eq!(self.headers["content-encoding"], "gzip");
        let mut text = String::new();
        flate2::read::GzDecoder::new(&*self.body)
            .read_to_string(&mut text)
            .expect("gzip");
        text
    }
}

#[derive(Default)]
struct Inner {
    came: Vec<Came>,
    answers: VecDeque<Answer>,
}

/// Status, `Retry-After`, body.
pub type Answer = (u16, Option<&'static str>, &'static str);

/// What everything that has no other answer gets.
const TAKEN: Answer = (
    200,
    None,
    r#"{"taken": 2, "known": 0, "refused": [], "refused_count": 0, "ignored_tags": []}"#,
);

/// See the module.
pub struct StandIn {
    pub url: String,
    inner: Arc<Mutex<Inner>>,
}

impl StandIn {
    /// One that gives these answers, one after another, and then takes all.
    pub async fn start(answers: &[Answer]) -> StandIn {
        let inner = Arc::new(Mutex::new(Inner {
            answers: answers.iter().copied().collect(),
            ..Inner::default()
        }));
        let shared = Arc::clone(&inner);
        let router = axum::Router::new().fallback(answer).with_state(shared);
        let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await;
        let listener = listener.expect("a free port");
        let address = listener.local_addr().expect("an address");
        tokio::spawn(async move { axum::serve(listener, router).await });
        StandIn {
            url: format!("http://{address}"),
            inner,
        }
    }

    pub fn came(&self) -> Vec<Came> {
        self.inner.lock().expect("what came").came.clone()
    }
}

async fn answer(
    State(inner): State<Arc<Mutex<Inner>>>,
    OriginalUri(uri): OriginalUri,
    headers: HeaderMap,
    body: Bytes,
) -> Response<String> {
    let mut inner = inner.lock().expect("what came");
    inner.came.push(Came {
        path: uri.path().to_owned(),
        headers,
        body: body.to_vec(),
        at: Instant::now(),
    });
    let (status, retry_after, text) = inner.answers.pop_front().unwrap_or(TAKEN);
    let mut response = Response::builder().status(status);
    if let Some(seconds) = retry_after {
        response = response.header("retry-after", seconds);
    }
    response.body(text.to_owned()).expect("a response")
}
