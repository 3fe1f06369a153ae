//! A service as a process under load, what it has acknowledged, and whether that
//! is still there after the process has died.

use crate::harness::{PLANT, batch};
use sqlx::{ConnectOptions, Connection};
use std::collections::{BTreeMap, BTreeSet};
use std::io::{BufRead, BufReader};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::sync::{LazyLock, Mutex, MutexGuard};
use std::time::{Duration, Instant};
use time::format_description::well_known::Rfc3339;
use time::macros::datetime;

/// Clients that post batches at once.
const CLIENTS: usize = 8;

/// Readings of one request.
const READINGS: usize = 20;

/// The program, told to serve from a database on a free port.
pub fn program(database: &Path) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_counterpoise"));
    command.env_clear();
    command.args(["serve", "--listen", "127.0.0.1:0", "--log-format", "json"]);
    command.arg("--database").arg(database);
    command
}

/// A service that runs in a process of its own; it is killed when it is dropped.
pub struct Process {
    child: Child,
    pub address: String,
}

impl Process {
    /// Starts it; `None` where it ended or was killed before it served.
    pub fn start(mut command: Command) -> Option<Process> {
        Process::begin(&mut command).serving()
    }

    /// Starts it without waiting until it serves.
    pub fn begin(command: &mut Command) -> Starting {
        let command = command.stdout(Stdio::null()).stderr(Stdio::piped());
        let mut child = command.spawn().expect("a process");
        let log = BufReader::new(child.stderr.take().expect("a log"));
        let (tell, told) = std::sync::mpsc::channel();
        // A pipe that nobody reads fills up, and a log that waits stops the rest.
        std::thread::spawn(move || {
            for line in log.lines().map_while(Result::ok) {
                let _ = tell.send(line);
            }
        });
        Starting { child, log: told }
    }

    pub fn id(&self) -> u32 {
        self.child.id()
    }

    /// SIGTERM; whether it ended in order.
    pub fn end(mut self) -> bool {
        signal(self.child.id(), "TERM");
        self.child.wait().expect("an end").success()
    }

    /// The exit code, where it has ended by itself within a while.
    pub fn ended(&mut self, within: Duration) -> Option<Option<i32>> {
        let deadline = Instant::now() + within;
        while Instant::now() < deadline {
            if let Some(status) = self.child.try_wait().expect("a process") {
                return Some(status.code());
            }
            std::thread::sleep(Duration::from_millis(2));
        }
        None
    }
}

impl Drop for Process {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

/// Sends a signal to a process of ours.
pub fn signal(id: u32, signal: &str) {
    let mut kill = Command::new("kill");
    let status = kill.args(["-s", signal, &id.to_string()]).status();
    assert!(status.expect("kill").success());
}

/// A process that does not serve yet.
pub struct Starting {
    child: Child,
    log: std::sync::mpsc::Receiver<String>,
}

impl Starting {
    /// Waits until it serves or is dead.
    pub fn serving(mut self) -> Option<Process> {
        let serving = self.log.iter().find(|line| line.contains("\"serving\""));
        let Some(line) = serving else {
            self.child.wait().expect("an end");
            return None;
        };
        let line: serde_json::Value = serde_json::from_str(&line).expect("JSON");
        Some(Process {
            child: self.child,
            address: line["address"].as_str().expect("an address").to_owned(),
        })
    }

    /// SIGKILL after a while; whether it did not serve yet.
    pub fn kill_after(mut self, a_while: Duration) -> bool {
        std::thread::sleep(a_while);
        self.child.kill().expect("killed");
        self.child.wait().expect("an end");
        !self.log.iter().any(|line| line.contains("\"serving\""))
    }
}

/// The name of a batch by its number.
pub fn name(number: usize) -> String {
    format!("b{number:06}")
}

/// A batch by its number, of its own minute, that no clock takes for one from
/// the future.
pub fn body(number: usize) -> String {
    let start = datetime!(2021-01-01 0:00 UTC) + Duration::from_secs(60 * number as u64);
    let end = start + Duration::from_secs(30);
    let text = |time: time::OffsetDateTime| time.format(&Rfc3339).expect("a time");
    batch(&name(number), 0, 150.0)
        .replace("2031-04-02T10:00:00Z", &text(start))
        .replace("2031-04-02T10:00:30Z", &text(end))
}

/// A reading by its number, half an hour ago or later; its value is its number.
fn reading(number: usize) -> serde_json::Value {
    static FIRST: LazyLock<time::OffsetDateTime> =
        LazyLock::new(|| time::OffsetDateTime::now_utc() - Duration::from_secs(1800));
    let time = *FIRST + Duration::from_millis(10 * number as u64);
    let time = time.format(&Rfc3339).expect("a time");
    serde_json::json!({"tag": "F-1", "time": time, "value": number})
}

/// What the clients know.
#[derive(Default)]
pub struct Ledger(Mutex<Known>);

#[derive(Default)]
struct Known {
    plant: bool,
    next: usize,
    /// Posted and not acknowledged: they may be there or not.
    open: Vec<usize>,
    /// Of those, what is to be posted again.
    again: Vec<usize>,
    acknowledged: BTreeSet<usize>,
    /// So many readings, from the first on.
    readings: usize,
}

impl Ledger {
    fn known(&self) -> MutexGuard<'_, Known> {
        self.0.lock().expect("a ledger")
    }

    /// Names of the batches that the service has acknowledged.
    pub fn acknowledged(&self) -> BTreeSet<String> {
        self.known()
            .acknowledged
            .iter()
            .copied()
            .map(name)
            .collect()
    }

    /// How many readings it has acknowledged.
    pub fn readings(&self) -> usize {
        self.known().readings
    }

    /// Has what had no answer posted again.
    fn begin_again(&self) {
        let mut known = self.known();
        known.again = std::mem::take(&mut known.open);
    }

    /// What is next to be posted: first what had no answer.
    pub fn take(&self) -> usize {
        let mut known = self.known();
        if let Some(number) = known.again.pop() {
            return number;
        }
        known.next += 1;
        known.next
    }

    /// Puts the plant, which must be there if that was ever acknowledged.
    async fn put_plant(&self, client: &reqwest::Client, base: &str) -> bool {
        let put = client.put(format!("{base}/v1/plants/mixer"));
        let put = put.header("content-type", "application/toml").body(PLANT);
        match put.send().await.map(|answer| answer.status().as_u16()) {
            Ok(201) => {
                assert!(!self.known().plant, "an acknowledged plant was lost");
                self.known().plant = true;
                true
            }
            Ok(200) => true,
            Ok(other) => panic!("{other}"),
            Err(_) => false,
        }
    }

    /// Several clients post batches until the service is gone or the time is up.
    /// What had no answer the time before is posted first, as a client would.
    pub async fn load(&self, address: &str, lasting: Duration) {
        let client = reqwest::Client::new();
        let base = format!("http://{address}");
        if !self.put_plant(&client, &base).await {
            return;
        }
        self.begin_again();
        let until = Instant::now() + lasting;
        let posting = (0..CLIENTS).map(|one| self.post(&client, &base, one, until));
        let posting = futures::future::join_all(posting);
        tokio::join!(posting, self.read_out(&client, &base, until));
    }

    async fn post(&self, client: &reqwest::Client, base: &str, one: usize, until: Instant) {
        while Instant::now() < until {
            let number = self.take();
            // Some wait for their reports.
            let later = !one.is_multiple_of(4);
            let sent = self.post_one(client, base, number, later);
            let patience = until + Duration::from_secs(1);
            let answer = tokio::time::timeout_at(patience.into(), sent).await;
            let Some(answer) = answer.ok().flatten() else {
                return;
            };
            match answer.status().as_u16() {
                200 | 202 | 429 | 503 => {}
                other => panic!("{}: {other}", name(number)),
            }
        }
    }

    /// One more client sends readings of one tag, a few at a time.
    async fn read_out(&self, client: &reqwest::Client, base: &str, until: Instant) {
        while Instant::now() < until {
            let first = self.known().readings;
            let readings: Vec<_> = (first..first + READINGS).map(reading).collect();
            let body = serde_json::json!({"readings": readings});
            let post = client.post(format!("{base}/v1/plants/mixer/readings"));
            let sent = post.json(&body).send();
            let patience = until + Duration::from_secs(1);
            let answer = tokio::time::timeout_at(patience.into(), sent).await;
            let Ok(Ok(answer)) = answer else {
                return;
            };
            match answer.status().as_u16() {
                // The same again where there was no answer before.
                200 => self.known().readings = first + READINGS,
                429 | 503 => tokio::time::sleep(Duration::from_millis(5)).await,
                other => panic!("readings: {other}"),
            }
        }
    }

    /// Posts a batch, and notes what came of it.
    pub async fn post_one(
        &self,
        client: &reqwest::Client,
        base: &str,
        number: usize,
        later: bool,
    ) -> Option<reqwest::Response> {
        // Open until there is an answer, also where nobody waits for it any more.
        self.known().open.push(number);
        let mut post = client.post(format!("{base}/v1/plants/mixer/batches"));
        post = post.header("content-type", "application/json");
        if later {
            post = post.header("prefer", "respond-async");
        }
        let answer = post.body(body(number)).send().await.ok()?;
        if answer.status().is_success() {
            let mut known = self.known();
            known.open.retain(|&one| one != number);
            known.acknowledged.insert(number);
        }
        Some(answer)
    }
}

/// What a database holds.
#[derive(Debug, Default)]
pub struct Found {
    /// What `PRAGMA integrity_check` says, and `foreign_key_check`.
    pub faults: Vec<String>,
    /// Names of accepted batches, and how often each is there.
    pub accepted: BTreeMap<String, usize>,
    /// Results per batch.
    pub finished: BTreeMap<String, usize>,
    /// Accepted and not finished.
    pub pending: i64,
    /// Chunks of whole days.
    pub chunks: i64,
    /// Values of readings, in the order of their times.
    pub readings: Vec<f64>,
}

impl Found {
    /// Acknowledged batches that are not there, and readings.
    pub fn lost(&self, ledger: &Ledger) -> Vec<String> {
        let acknowledged = ledger.acknowledged().into_iter();
        let batches = acknowledged.filter(|name| !self.accepted.contains_key(name));
        let readings = 0..ledger.readings();
        // Their values are their numbers, and each is there once.
        let readings = readings.filter(|&n| self.readings.get(n) != Some(&(n as f64)));
        batches
            .chain(readings.map(|n| format!("reading {n}")))
            .collect()
    }

    /// Whether every batch is there once, with one report.
    pub fn is_finished(&self) -> bool {
        self.pending == 0
            && self.accepted == self.finished
            && self.accepted.values().all(|&times| times == 1)
    }
}

/// Reads a database that nobody else uses. Opening it recovers what its log
/// holds, so a copy is given where that is for the service to do.
pub async fn look(database: &Path) -> Found {
    let mut found = Found::default();
    if !database.exists() {
        return found;
    }
    let options = sqlx::sqlite::SqliteConnectOptions::new().filename(database);
    let mut connection = options.connect().await.expect("a database");
    found.faults = sqlx::query_scalar("PRAGMA integrity_check")
        .fetch_all(&mut connection)
        .await
        .unwrap_or_else(|error| vec![error.to_string()]);
    found.faults.retain(|line| line != "ok");
    // A file that was cut off while it was made has not all of them.
    let tables = "SELECT count(*) FROM sqlite_schema
                  WHERE name IN ('inbox', 'pending', 'results', 'samples', 'chunks')";
    let tables: i64 = sqlx::query_scalar(tables)
        .fetch_one(&mut connection)
        .await
        .unwrap_or(0);
    if tables == 5 {
        let broken = sqlx::query("PRAGMA foreign_key_check")
            .fetch_all(&mut connection)
            .await;
        if !broken.is_ok_and(|rows| rows.is_empty()) {
            found.faults.push("foreign keys".to_owned());
        }
        let accepted = "SELECT batch FROM inbox";
        let finished = "SELECT batch FROM inbox JOIN results ON inbox_id = id";
        for (statement, into) in [
            (accepted, &mut found.accepted),
            (finished, &mut found.finished),
        ] {
            let names: Result<Vec<String>, _> = sqlx::query_scalar(statement)
                .fetch_all(&mut connection)
                .await;
            match names {
                Ok(names) => names
                    .into_iter()
                    .for_each(|name| *into.entry(name).or_default() += 1),
                Err(error) => found.faults.push(error.to_string()),
            }
        }
        let readings = "SELECT value FROM samples ORDER BY time_ns";
        found.readings = sqlx::query_scalar(readings)
            .fetch_all(&mut connection)
            .await
            .unwrap_or_default();
        found.chunks = sqlx::query_scalar("SELECT count(*) FROM chunks")
            .fetch_one(&mut connection)
            .await
            .unwrap_or(-1);
        found.pending = sqlx::query_scalar("SELECT count(*) FROM pending")
            .fetch_one(&mut connection)
            .await
            .unwrap_or(-1);
    }
    connection.close().await.expect("closed");
    found
}

/// Waits until every acknowledged batch has a report.
pub async fn all_reported(address: &str, ledger: &Ledger) {
    let client = reqwest::Client::new();
    let asking = async {
        for name in ledger.acknowledged() {
            let url = format!("http://{address}/v1/plants/mixer/batches/{name}");
            loop {
                let answer = client.get(&url).send().await.expect("an answer");
                match answer.status().as_u16() {
                    200 => break,
                    202 => tokio::time::sleep(Duration::from_millis(5)).await,
                    other => panic!("{name}: {other}"),
                }
            }
        }
    };
    tokio::time::timeout(Duration::from_secs(120), asking)
        .await
        .expect("every report in time");
}

/// How many cycles a trial runs: a few, or `COUNTERPOISE_STUDY`.
pub fn cycles(few: usize) -> usize {
    let study = std::env::var("COUNTERPOISE_STUDY").ok();
    study.and_then(|text| text.parse().ok()).unwrap_or(few)
}
