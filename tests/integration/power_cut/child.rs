//! A service of the test's own in a process of its own: this test binary once
//! more, which serves where it is told to by its environment.
//!
//! The program has no setting that would make a commit not wait for the disk, and
//! must not have one. This service can be made so, to show what the trial finds then.

use counterpoise::http::Limits;
use counterpoise::server::{Options, Server, SystemClock, SystemEntropy};
use counterpoise::store::{SqliteOptions, SqliteStore, Synchronous};
use std::path::Path;
use std::process::Command;
use std::sync::Arc;
use std::time::Duration;

const DATABASE: &str = "COUNTERPOISE_TRIAL_DATABASE";
const NORMAL: &str = "COUNTERPOISE_TRIAL_NORMAL";

/// A command that serves from a database on a free port, as the program does.
pub fn command(database: &Path, synchronous: Synchronous) -> Command {
    let mut command = Command::new(std::env::current_exe().expect("this program"));
    command.env_clear();
    command.args(["--exact", "power_cut::child::serves_until_it_dies"]);
    command.args(["--ignored", "--nocapture"]);
    command.env(DATABASE, database);
    if synchronous == Synchronous::Normal {
        command.env(NORMAL, "1");
    }
    command
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
#[ignore = "no test: the process that the trial of power cuts starts"]
async fn serves_until_it_dies() {
    let Some(database) = std::env::var_os(DATABASE) else {
        return;
    };
    let mut store = SqliteOptions::new(database);
    if std::env::var_os(NORMAL).is_some() {
        store.synchronous = Synchronous::Normal;
    }
    let store = SqliteStore::open(store).await.expect("a store");
    let options = Options {
        listen: "127.0.0.1:0".parse().expect("an address"),
        limits: Limits::default(),
        grace: Duration::from_secs(30),
        tick: Duration::from_secs(1),
        webhook: None,
        tls: None,
    };
    let server = Server::start(
        options,
        Arc::new(store),
        Arc::new(SystemClock),
        Arc::new(SystemEntropy),
    );
    let server = server.await.expect("a server");
    eprintln!(
        "{}",
        serde_json::json!({"message": "serving", "address": server.address().to_string()})
    );
    server.ended().await.expect("an orderly end");
}
