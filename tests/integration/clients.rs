//! The clients of `deploy/clients`, run as they are. A program that they need and
//! that is missing fails these tests: a client that nobody has run is none.

mod service;
pub mod stand_in;

use crate::service_process::text;
use serde_json::{Value, json};
use stand_in::StandIn;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Output, Stdio};
use std::time::Duration;

fn client(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("deploy/clients")
        .join(name)
}

fn started(mut command: Command) -> Child {
    let program = command.get_program().to_owned();
    command
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .unwrap_or_else(|error| panic!("these tests need {program:?}: {error}"))
}

/// Runs a program with this input, beside the servers of the test.
async fn run(command: Command, input: String) -> Output {
    let work = tokio::task::spawn_blocking(move || {
        let mut child = started(command);
        let mut into = child.stdin.take().expect("an input");
        into.write_all(input.as_bytes()).expect("written");
        drop(into);
        child.wait_with_output().expect("an end")
    });
    work.await.expect("no panic")
}

fn python(spool: &Path, url: &str, more: &[&str]) -> Command {
    let mut command = Command::new("python3");
    command.arg(client("post_readings.py"));
    command.args(["--url", url, "--plant", "gannet holm", "--spool"]);
    command.arg(spool).args(more);
    command
}

/// Readings, one a line, of the second given.
fn lines(seconds: std::ops::Range<u32>) -> String {
    let line = |s: u32| {
        // A code that a signed number of 32 bits cannot hold.
        let quality = if s.is_multiple_of(2) {
            json!("good")
        } else {
            json!(0x8000_0000_u32)
        };
        let time = format!("2031-04-02T10:00:{s:02}Z");
        json!({"tag": "F-1", "time": time, "value": 100, "quality": quality}).to_string() + "\n"
    };
    seconds.map(line).collect()
}

fn blocks(spool: &Path) -> Vec<String> {
    let entries = std::fs::read_dir(spool).expect("a spool");
    let names = entries.map(|entry| entry.expect("a file").file_name());
    let names = names.map(|name| name.into_string().expect("text"));
    let mut names: Vec<String> = names.filter(|name| name.ends_with(".gz")).collect();
    names.sort();
    names
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_poster_repeats_the_same_bytes_until_they_are_taken() {
    let spool = tempfile::tempdir().expect("a directory");
    let token = spool.path().join("token");
    std::fs::write(&token, "cpt_abc\n").expect("written");
    let refusal = r#"{"title": "The content has faults"}"#;
    let service = StandIn::start(&[
        (429, Some("1"), "{}"),
        (500, None, "{}"),
        (
            200,
            None,
            r#"{"refused": [{"tag": "F-9", "time": "t", "reason": "no such tag"}]}"#,
        ),
        (422, None, refusal),
    ])
    .await;
    let token = token.to_str().expect("text");
    let more = ["--lines", "2", "--token-file", token];
    let ended = run(python(spool.path(), &service.url, &more), lines(0..6)).await;
    let told = text(&ended.stderr);
    assert!(ended.status.success(), "{told}");
    let came = service.came();
    let bodies: Vec<String> = came.iter().map(|one| one.text()).collect();
    let expected = [
        lines(0..2),
        lines(0..2),
        lines(0..2),
        lines(2..4),
        lines(4..6),
    ];
    assert_eq!(bodies, expected);
    assert!(came[0].body == came[1].body && came[1].body == came[2].body);
    assert!(
        came[1].at - came[0].at >= Duration::from_secs(1),
        "Retry-After"
    );
    for one in &came {
        assert_eq!(one.path, "/v1/plants/gannet%20holm/readings");
        assert_eq!(one.headers["content-type"], "application/x-ndjson");
        assert_eq!(one.headers["authorization"], "Bearer cpt_abc");
    }
    assert!(told.contains("not taken: F-9 at t: no such tag"), "{told}");
    assert!(blocks(spool.path()).is_empty());
    let refused = spool.path().join("refused");
    assert_eq!(blocks(&refused).len(), 1);
    let answer = refused.join(format!("{}.answer", blocks(&refused)[0]));
    assert_eq!(std::fs::read_to_string(answer).expect("an answer"), refusal);
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn what_a_killed_poster_leaves_is_sent_by_the_next() {
    let spool = tempfile::tempdir().expect("a directory");
    // A port that nobody listens on.
    let nobody = {
        let listener = std::net::TcpListener::bind("127.0.0.1:0").expect("a port");
        format!("http://{}", listener.local_addr().expect("an address"))
    };
    let mut child = started(python(spool.path(), &nobody, &["--lines", "2"]));
    let mut into = child.stdin.take().expect("an input");
    into.write_all(lines(0..4).as_bytes()).expect("written");
    into.flush().expect("flushed");
    let kept = async {
        while blocks(spool.path()).len() < 2 {
            tokio::task::yield_now().await;
        }
    };
    let kept = tokio::time::timeout(Duration::from_secs(20), kept).await;
    kept.expect("both blocks are on disk though nobody takes them");
    child.kill().expect("killed");
    child.wait().expect("an end");
    drop(into);

    let service = StandIn::start(&[]).await;
    let ended = run(python(spool.path(), &service.url, &[]), lines(4..5)).await;
    assert!(ended.status.success(), "{}", text(&ended.stderr));
    let came: Vec<String> = service.came().iter().map(|one| one.text()).collect();
    assert_eq!(came, [lines(0..2), lines(2..4), lines(4..5)]);
    assert!(blocks(spool.path()).is_empty());
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_curl_script_has_patience_and_says_what_was_refused() {
    let directory = tempfile::tempdir().expect("a directory");
    let file = directory.path().join("r.csv");
    let csv = "tag,time,value,quality\nF-1,2031-04-02T10:00:00Z,100,0x80000000\n";
    std::fs::write(&file, csv).expect("written");
    let token = directory.path().join("token");
    std::fs::write(&token, "cpt_abc\n").expect("written");
    let script = |url: &str| {
        let mut command = Command::new("sh");
        command.arg(client("post.sh")).args([url, "gannet-holm"]);
        command.arg(&file).env("TOKEN_FILE", &token);
        command
    };
    let curl = Command::new("curl").arg("--version").output();
    assert!(curl.is_ok(), "these tests need curl");
    let service = StandIn::start(&[(429, Some("1"), "{}"), (503, Some("1"), "{}")]).await;
    let ended = run(script(&service.url), String::new()).await;
    assert_eq!(ended.status.code(), Some(0), "{}", text(&ended.stderr));
    let answer: Value = serde_json::from_slice(&ended.stdout).expect("the answer");
    assert_eq!(answer["taken"], 2);
    let came = service.came();
    assert_eq!(came.len(), 3);
    for one in &came {
        assert_eq!(one.text(), csv);
        assert_eq!(one.headers["content-type"], "text/csv");
        assert_eq!(one.headers["authorization"], "Bearer cpt_abc");
        assert_eq!(one.path, "/v1/plants/gannet-holm/readings");
    }
    let service = StandIn::start(&[(422, None, "{\"title\": \"faults\"}")]).await;
    let ended = run(script(&service.url), String::new()).await;
    assert_eq!(ended.status.code(), Some(1));
    assert!(
        text(&ended.stdout).contains("faults"),
        "the reason is shown"
    );
    assert_eq!(service.came().len(), 1, "what is refused is not repeated");
}
