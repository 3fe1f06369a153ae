//! The program in a process of its own, so that its memory can be told apart.

use sqlx::ConnectOptions;
use std::io::{BufRead, BufReader};
use std::net::SocketAddr;
use std::path::PathBuf;
use std::process::{Child, Command, Stdio};

/// A running service with a plant; killed when it is dropped.
pub struct Program {
    child: Child,
    pub address: SocketAddr,
    database: PathBuf,
    _directory: tempfile::TempDir,
}

impl Program {
    pub async fn start(arguments: &[&str], plant: &str) -> Program {
        let directory = tempfile::tempdir_in(env!("CARGO_TARGET_TMPDIR")).expect("a directory");
        let database = directory.path().join("test.sqlite");
        let mut child = Command::new(env!("CARGO_BIN_EXE_counterpoise"))
            .env_clear()
            .args(["serve", "--listen", "127.0.0.1:0", "--log-format", "json"])
            .arg("--database")
            .arg(&database)
            .args(arguments)
            .stderr(Stdio::piped())
            .spawn()
            .expect("a process");
        let mut log = BufReader::new(child.stderr.take().expect("a log")).lines();
        let serving = log.find_map(|line| line.ok().filter(|line| line.contains("\"serving\"")));
        std::thread::spawn(move || log.for_each(drop));
        let line: serde_json::Value =
            serde_json::from_str(&serving.expect("it serves")).expect("JSON");
        let address = line["address"].as_str().expect("an address");
        let address: SocketAddr = address.parse().expect("an address");
        put(address, plant).await;
        Program {
            child,
            address,
            database,
            _directory: directory,
        }
    }

    /// Peak of its resident memory, in MiB.
    pub fn peak_memory(&self) -> u64 {
        let status = format!("/proc/{}/status", self.child.id());
        let status = std::fs::read_to_string(status).unwrap_or_default();
        let peak = status.lines().find_map(|line| line.strip_prefix("VmHWM:"));
        let number = peak.and_then(|peak| peak.split_whitespace().next());
        number
            .and_then(|number| number.parse::<u64>().ok())
            .unwrap_or(0)
            / 1024
    }

    /// Bytes of its database with the log.
    pub fn database_bytes(&self) -> u64 {
        let log = self.database.with_extension("sqlite-wal");
        let length = |path: &PathBuf| std::fs::metadata(path).map_or(0, |file| file.len());
        length(&self.database) + length(&log)
    }

    /// Batches that are finished.
    pub async fn finished(&self) -> i64 {
        let count = sqlx::query_scalar("SELECT count(*) FROM results");
        let mut connection = self.beside().await;
        count.fetch_one(&mut connection).await.expect("a number")
    }

    /// How many reports have which verdict.
    pub async fn verdicts(&self) -> String {
        let counts = "SELECT verdict || ' ' || count(*) FROM results GROUP BY verdict";
        let mut connection = self.beside().await;
        let counts = sqlx::query_scalar(counts).fetch_all(&mut connection);
        let counts: Vec<String> = counts.await.expect("counts");
        counts.join(", ")
    }

    async fn beside(&self) -> sqlx::SqliteConnection {
        let options = sqlx::sqlite::SqliteConnectOptions::new().filename(&self.database);
        options.connect().await.expect("a database")
    }
}

async fn put(address: SocketAddr, plant: &str) {
    let media_type = if plant.starts_with('{') {
        "application/json"
    } else {
        "application/toml"
    };
    let put = reqwest::Client::new().put(format!("http://{address}/v1/plants/string"));
    let put = put
        .header("content-type", media_type)
        .body(plant.to_owned());
    let answer = put.send().await.expect("an answer");
    let status = answer.status();
    assert!(
        status.is_success(),
        "{}",
        answer.text().await.unwrap_or_default()
    );
}

impl Drop for Program {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}
