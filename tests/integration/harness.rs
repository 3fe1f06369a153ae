//! A real server on a free port, with a database file of its own, a clock that
//! stands still unless a test moves it, and random bytes that count.

use counterpoise::http::{Clock, Entropy};
use counterpoise::server::{Hook, Limits, Options, Server, ServerError, Tls};
use counterpoise::store::{SqliteOptions, SqliteStore, Store};
use reqwest::{Client, Response, StatusCode};
use serde_json::Value;
use sqlx::{AssertSqlSafe, ConnectOptions};
use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Arc, Mutex, mpsc};
use std::thread::JoinHandle;
use std::time::Duration;
use tempfile::TempDir;
use time::OffsetDateTime;
use time::macros::datetime;
use tokio_util::sync::CancellationToken;

/// Two cold streams that are mixed, everything measured.
pub const PLANT: &str = r#"
plant = "mixer"
title = "Two streams and a mixer"

[streams]
first  = { fluid = "water", to = "mix" }
second = { fluid = "water", to = "mix" }
both   = { fluid = "water", from = "mix" }

[equipment]
mix = { kind = "mixer" }

[tags]
F-1 = { measures = "mass-flow", of = "first",  unit = "t/h", uncertainty = { of-reading = "1 %" } }
F-2 = { measures = "mass-flow", of = "second", unit = "t/h", uncertainty = { of-reading = "1 %" } }
F-3 = { measures = "mass-flow", of = "both",   unit = "t/h", uncertainty = { of-reading = "1 %" } }
P-1 = { measures = "pressure", of = "first",  unit = "bar", uncertainty = { absolute = "0.1 bar" } }
P-2 = { measures = "pressure", of = "second", unit = "bar", uncertainty = { absolute = "0.1 bar" } }
P-3 = { measures = "pressure", of = "both",   unit = "bar", uncertainty = { absolute = "0.1 bar" } }
T-1 = { measures = "temperature", of = "first",  unit = "Cel", uncertainty = { absolute = "1 K" } }
T-2 = { measures = "temperature", of = "second", unit = "Cel", uncertainty = { absolute = "1 K" } }
T-3 = { measures = "temperature", of = "both",   unit = "Cel", uncertainty = { absolute = "1 K" } }
"#;

/// What the server's clock shows.
pub const NOW: OffsetDateTime = datetime!(2031-04-02 12:00 UTC);

/// A batch of the plant; `minute` after ten o'clock is its start, `flow` the
/// reading of F-3.
pub fn batch(name: &str, minute: u32, flow: f64) -> String {
    let (hour, minute) = (10 + minute / 60, minute % 60);
    format!(
        r#"{{"batch": "{name}", "start": "2031-04-02T{hour:02}:{minute:02}:00Z", "end": "2031-04-02T{hour:02}:{minute:02}:30Z", "readings": [{{"tag": "F-1", "value": 100}}, {{"tag": "F-2", "value": 50}}, {{"tag": "F-3", "value": {flow}}}, {{"tag": "P-1", "value": 5}}, {{"tag": "P-2", "value": 5}}, {{"tag": "P-3", "value": 5}}, {{"tag": "T-1", "value": 30}}, {{"tag": "T-2", "value": 60}}, {{"tag": "T-3", "value": 40.02}}]}}"#
    )
}

/// Shows what it is set to.
pub struct StoppedClock(Mutex<OffsetDateTime>);

impl Default for StoppedClock {
    fn default() -> Self {
        StoppedClock(Mutex::new(NOW))
    }
}

impl StoppedClock {
    pub fn set(&self, now: OffsetDateTime) {
        *self.0.lock().expect("the clock") = now;
    }
}

impl Clock for StoppedClock {
    fn now(&self) -> OffsetDateTime {
        *self.0.lock().expect("the clock")
    }
}

#[derive(Default)]
struct Counter(AtomicU64);

impl Entropy for Counter {
    fn ten_bytes(&self) -> [u8; 10] {
        let mut bytes = [0; 10];
        bytes[2..].copy_from_slice(&self.0.fetch_add(1, Ordering::Relaxed).to_be_bytes());
        bytes
    }
}

/// How a server is to be.
pub struct Setup {
    pub limits: Limits,
    pub database: Option<PathBuf>,
    pub lock_timeout: Duration,
    pub webhook: Option<Hook>,
    pub tls: Option<Tls>,
}

impl Default for Setup {
    fn default() -> Self {
        Setup {
            limits: Limits::default(),
            database: None,
            lock_timeout: Duration::from_secs(5),
            webhook: None,
            tls: None,
        }
    }
}

/// A running server; dropping it ends it in order.
pub struct Service {
    pub address: SocketAddr,
    pub base: String,
    pub client: Client,
    pub store: Arc<SqliteStore>,
    pub clock: Arc<StoppedClock>,
    pub database: PathBuf,
    stop: CancellationToken,
    thread: Option<JoinHandle<Result<(), ServerError>>>,
    _directory: TempDir,
}

impl Service {
    /// An empty one.
    pub fn start() -> Service {
        Service::with(Setup::default())
    }

    /// One with the plant.
    pub async fn with_plant() -> Service {
        let service = Service::start();
        service.put_plant().await;
        service
    }

    pub fn with(setup: Setup) -> Service {
        let directory = tempfile::tempdir().expect("a directory");
        let database = setup
            .database
            .unwrap_or_else(|| directory.path().join("test.sqlite"));
        let store_options = SqliteOptions {
            lock_timeout: setup.lock_timeout,
            retry: Duration::from_millis(20),
            ..SqliteOptions::new(&database)
        };
        let options = Options {
            listen: "127.0.0.1:0".parse().expect("an address"),
            limits: Limits {
                // Whatever a test does to the tokens is seen by its next request.
                token_freshness: Duration::ZERO,
                ..setup.limits
            },
            grace: Duration::from_secs(20),
            tick: Duration::from_millis(20),
            webhook: setup.webhook,
            tls: setup.tls,
        };
        let clock = Arc::new(StoppedClock::default());
        let shown = Arc::clone(&clock);
        let (tell, told) = mpsc::channel();
        let thread = std::thread::spawn(move || {
            let runtime = tokio::runtime::Builder::new_multi_thread()
                .worker_threads(2)
                .enable_all()
                .build()
                .expect("a runtime");
            runtime.block_on(async move {
                let store = Arc::new(SqliteStore::open(store_options).await.expect("a store"));
                let shared: Arc<dyn Store> = store.clone();
                let entropy = Arc::new(Counter::default());
                let server = Server::start(options, shared, shown, entropy)
                    .await
                    .expect("a server");
                tell.send((server.address(), server.stopper(), store))
                    .expect("a test");
                server.ended().await
            })
        });
        let (address, stop, store) = told.recv().expect("a server");
        Service {
            address,
            base: format!("http://{address}"),
            client: Client::new(),
            store,
            clock,
            database,
            stop,
            thread: Some(thread),
            _directory: directory,
        }
    }

    /// Ends it and tells how it ended.
    pub fn stop(&mut self) -> Result<(), ServerError> {
        self.stop.cancel();
        self.thread
            .take()
            .map_or(Ok(()), |thread| thread.join().expect("no panic"))
    }

    pub fn url(&self, path: &str) -> String {
        format!("{}{path}", self.base)
    }

    pub async fn get(&self, path: &str) -> Response {
        self.client
            .get(self.url(path))
            .send()
            .await
            .expect("an answer")
    }

    pub async fn get_json(&self, path: &str) -> Value {
        let response = self.get(path).await;
        assert!(
            response.status().is_success(),
            "{path}: {}",
            response.status()
        );
        response.json().await.expect("JSON")
    }

    pub async fn put_plant(&self) {
        self.put_plant_file("mixer", PLANT).await;
    }

    pub async fn put_plant_file(&self, name: &str, file: &str) {
        let request = self.client.put(self.url(&format!("/v1/plants/{name}")));
        let request = request
            .header("content-type", "application/toml")
            .body(file.to_owned());
        let response = request.send().await.expect("an answer");
        let status = response.status();
        assert!(
            status.is_success(),
            "{status}: {}",
            response.text().await.unwrap_or_default()
        );
    }

    pub async fn post(&self, content_type: &str, body: impl Into<reqwest::Body>) -> Response {
        let request = self.client.post(self.url("/v1/plants/mixer/batches"));
        request
            .header("content-type", content_type)
            .body(body)
            .send()
            .await
            .expect("an answer")
    }

    /// Posts JSON somewhere.
    pub async fn post_json(&self, path: &str, body: &Value) -> Response {
        let request = self.client.post(self.url(path)).json(body);
        request.send().await.expect("an answer")
    }

    /// The same where it has to be done.
    pub async fn done(&self, path: &str, body: &Value) -> Value {
        let response = self.post_json(path, body).await;
        let status = response.status();
        let text = response.text().await.expect("text");
        assert!(status.is_success(), "{path}: {status}: {text}");
        serde_json::from_str(&text).expect("JSON")
    }

    pub async fn post_batch(&self, body: String) -> Response {
        self.post("application/json", body).await
    }

    /// Asks until a report is there.
    pub async fn report(&self, batch: &str) -> Value {
        let path = format!("/v1/plants/mixer/batches/{batch}");
        let asking = async {
            loop {
                let response = self.get(&path).await;
                match response.status() {
                    StatusCode::OK => return response.json().await.expect("JSON"),
                    StatusCode::ACCEPTED => {}
                    other => panic!("{path}: {other}"),
                }
            }
        };
        tokio::time::timeout(Duration::from_secs(30), asking)
            .await
            .expect("a report in time")
    }
}

impl Drop for Service {
    fn drop(&mut self) {
        let ended = self.stop();
        if !std::thread::panicking() {
            ended.expect("an orderly end");
        }
    }
}

/// The problem document of a response, after what every one has to hold to.
pub async fn problem(response: Response, status: StatusCode) -> Value {
    assert_eq!(response.status(), status, "{:?}", response.text().await);
    let header = |name: &str| {
        let value = response.headers().get(name);
        value
            .and_then(|value| value.to_str().ok())
            .unwrap_or_default()
            .to_owned()
    };
    assert_eq!(header("content-type"), "application/problem+json");
    let id = header("x-request-id");
    let problem: Value = response.json().await.expect("JSON");
    assert_eq!(problem["status"], status.as_u16());
    assert_eq!(problem["instance"], id);
    assert!(!id.is_empty());
    let kind = problem["type"].as_str().expect("a type");
    assert!(kind.starts_with("urn:counterpoise:problem:"), "{kind}");
    for text in ["title", "detail"] {
        assert!(!problem[text].as_str().expect("text").is_empty(), "{text}");
    }
    problem
}

/// Numbers of the events of a plant that a database holds.
///
/// Read beside the service: a reader of its store that a test has used goes back
/// to the pool by the test's own runtime, which stands still while the service
/// is ended.
pub async fn event_ids(database: &Path, plant: &str) -> Vec<i64> {
    let plant = format!("\"plant\":\"{plant}\"");
    let rows = contents(database).await.into_iter();
    let events = rows.filter(|row| row.starts_with("events: ") && row.contains(&plant));
    let mut ids: Vec<i64> = events.map(|row| first_number(&row)).collect();
    ids.sort_unstable();
    ids
}

/// Up to which event the webhook's receiver has been served.
pub async fn delivered(database: &Path) -> Option<i64> {
    let rows = contents(database).await;
    let row = rows.iter().find(|row| row.starts_with("delivered: "))?;
    Some(row.split(',').nth(1)?.parse().expect("a number"))
}

fn first_number(row: &str) -> i64 {
    let numbers = row.split_once(": ").expect("a table").1;
    let number = numbers.split(',').next().expect("a number");
    number.parse().expect("a number")
}

/// The one number that a database answers.
pub async fn number(database: &Path, statement: &str) -> i64 {
    let options = sqlx::sqlite::SqliteConnectOptions::new().filename(database);
    let mut connection = options.connect().await.expect("the database");
    sqlx::query_scalar(AssertSqlSafe(statement.to_owned()))
        .fetch_one(&mut connection)
        .await
        .expect("a number")
}

/// Everything that a database holds, row by row.
pub async fn contents(database: &Path) -> Vec<String> {
    let options = sqlx::sqlite::SqliteConnectOptions::new().filename(database);
    let mut connection = options.connect().await.expect("the database");
    let mut rows = Vec::new();
    for table in [
        "plants",
        "revisions",
        "inbox",
        "pending",
        "layouts",
        "results",
        "former_results",
        "reconciled_again",
        "watches",
        "events",
        "accusations",
        "former_closings",
        "by_hand",
        "by_hand_ends",
        "field_readings",
        "delivered",
        "sample_tags",
        "samples",
        "open_periods",
        "generations",
        "made_periods",
        "inbox_bodies",
        "pending_again",
        "backfills",
        "replays",
        "replayed",
        "tokens",
        "deeds",
    ] {
        let columns: Vec<String> = sqlx::query_scalar("SELECT name FROM pragma_table_info(?1)")
            .bind(table)
            .fetch_all(&mut connection)
            .await
            .expect("columns");
        assert!(!columns.is_empty(), "{table}");
        let quoted: Vec<String> = columns
            .iter()
            .map(|column| format!("quote({column})"))
            .collect();
        let statement = format!("SELECT {} FROM {table} ORDER BY 1", quoted.join("||','||"));
        let found: Vec<String> = sqlx::query_scalar(AssertSqlSafe(statement))
            .fetch_all(&mut connection)
            .await
            .expect("rows");
        rows.extend(found.into_iter().map(|row| format!("{table}: {row}")));
    }
    rows
}
