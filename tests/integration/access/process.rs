//! Tokens and the program: made, listed and revoked beside a running service,
//! and never in its log.

use crate::harness::{PLANT, batch};
use reqwest::{Client, StatusCode};
use std::io::{BufRead, BufReader};
use std::path::Path;
use std::process::{Child, Command, Output, Stdio};
use std::sync::{Arc, Mutex, mpsc};
use std::time::{Duration, Instant};

fn program(directory: &Path, arguments: &[&str]) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_counterpoise"));
    command
        .env_clear()
        .current_dir(directory)
        .args(arguments)
        .stdin(Stdio::null())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped());
    command
}

fn run(directory: &Path, arguments: &[&str]) -> Output {
    program(directory, arguments).output().expect("an end")
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8(bytes.to_vec()).expect("text")
}

/// Makes a token; gives what was printed.
fn made(directory: &Path, name: &str, more: &[&str]) -> String {
    let make = ["token", "make", "--name", name];
    let output = run(directory, &[&make, more].concat());
    assert_eq!(output.status.code(), Some(0), "{}", text(&output.stderr));
    assert!(!text(&output.stderr).contains("cpt_"));
    let token = text(&output.stdout);
    assert_eq!(token.lines().count(), 1, "it can be piped into a file");
    assert!(
        token.starts_with("cpt_") && token.len() == 4 + 43 + 1,
        "{token}"
    );
    token.trim_end().to_owned()
}

fn revoke(directory: &Path, name: &str) {
    let output = run(directory, &["token", "revoke", "--name", name]);
    assert_eq!(output.status.code(), Some(0), "{}", text(&output.stderr));
}

/// A running service and its whole log.
pub struct Running {
    child: Child,
    pub address: String,
    log: Arc<Mutex<String>>,
    reader: std::thread::JoinHandle<()>,
}

impl Running {
    pub fn start(directory: &Path, options: &[&str]) -> Running {
        let serve = ["serve", "--listen", "127.0.0.1:0", "--log-format", "json"];
        let mut command = program(directory, &[&serve, options].concat());
        let mut child = command.stdout(Stdio::null()).spawn().expect("a process");
        let lines = BufReader::new(child.stderr.take().expect("a log")).lines();
        let (tell, told) = mpsc::channel();
        let log = Arc::new(Mutex::new(String::new()));
        let whole = Arc::clone(&log);
        let reader = std::thread::spawn(move || {
            for line in lines {
                let line = line.expect("text");
                if line.contains("\"serving\"") {
                    let line: serde_json::Value = serde_json::from_str(&line).expect("JSON");
                    // Nobody waits for a second one.
                    let _ = tell.send(line["address"].as_str().expect("an address").to_owned());
                }
                whole.lock().expect("the log").push_str(&(line + "\n"));
            }
        });
        let address = told.recv_timeout(Duration::from_secs(60)).expect("serving");
        Running {
            child,
            address,
            log,
            reader,
        }
    }

    pub fn signal(&self, name: &str) {
        let id = self.child.id().to_string();
        let killed = Command::new("kill").args(["-s", name, &id]).status();
        assert!(killed.expect("kill").success());
    }

    /// What it has logged so far.
    pub fn log(&self) -> String {
        self.log.lock().expect("the log").clone()
    }

    /// Ends it in order and gives its log.
    pub fn end(mut self) -> String {
        self.signal("TERM");
        let code = self.child.wait().expect("an end").code();
        self.reader.join().expect("no panic");
        let log = self.log.lock().expect("the log").clone();
        assert_eq!(code, Some(0), "{log}");
        log
    }
}

/// Asks until the answer has a status; gives how long that took.
async fn until(client: &Client, url: &str, token: Option<&str>, status: StatusCode) -> Duration {
    let begun = Instant::now();
    loop {
        let request = client.get(url);
        let request = match token {
            Some(token) => request.bearer_auth(token),
            None => request,
        };
        let answer = request.send().await.expect("an answer");
        if answer.status() == status {
            return begun.elapsed();
        }
        assert!(
            begun.elapsed() < Duration::from_secs(20),
            "{}",
            answer.status()
        );
    }
}

#[tokio::test]
async fn a_running_service_follows_the_command_line_and_logs_no_token() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path();
    let service = Running::start(path, &["--log", "trace"]);
    let url = |rest: &str| format!("http://{}{rest}", service.address);
    let client = Client::new();
    let plants = url("/v1/plants");
    let without = client.get(&plants).send().await.expect("an answer");
    assert_eq!(without.status(), StatusCode::OK, "there is no token yet");

    let all = made(path, "all", &["--scopes", "send,read,operate,administer"]);
    // What is known may be a second old; the rest is for a busy machine.
    let bearable = Duration::from_secs(3);
    let closed = until(&client, &plants, None, StatusCode::UNAUTHORIZED).await;
    assert!(closed < bearable, "closed after {closed:?}");
    let short = made(
        path,
        "short",
        &[
            "--scopes",
            "read",
            "--plants",
            "mixer",
            "--expires",
            "90d",
            "--rate",
            "5000",
        ],
    );
    let opened = until(&client, &plants, Some(&short), StatusCode::OK).await;
    assert!(opened < bearable, "opened after {opened:?}");
    let put = client.put(url("/v1/plants/mixer")).bearer_auth(&all);
    let put = put.header("content-type", "application/toml").body(PLANT);
    assert_eq!(
        put.send().await.expect("an answer").status(),
        StatusCode::CREATED
    );
    let post = client
        .post(url("/v1/plants/mixer/batches"))
        .bearer_auth(&all);
    let post = post.header("content-type", "application/json");
    let post = post.body(batch("b", 0, 150.0).replace("2031-", "2021-"));
    assert_eq!(
        post.send().await.expect("an answer").status(),
        StatusCode::OK
    );
    // In places where a token does not belong, whole and in error.
    for request in [
        client.get(url(&format!("/v1/plants/{all}"))),
        client.get(url(&format!("/v1/plants?token={all}"))),
        client.get(&plants).header("x-request-id", &all),
        client
            .get(&plants)
            .header("authorization", format!("Basic {all}")),
        client.get(&plants).header("traceparent", &all),
    ] {
        request.bearer_auth(&all).send().await.expect("an answer");
    }
    revoke(path, "short");
    let refused = until(&client, &plants, Some(&short), StatusCode::UNAUTHORIZED).await;
    assert!(refused < bearable, "refused after {refused:?}");
    println!("closed after {closed:?}, let in after {opened:?}, refused after {refused:?}");

    let listed = text(&run(path, &["token", "list"]).stdout);
    assert!(
        listed.contains("short") && listed.contains("revoked"),
        "{listed}"
    );
    assert!(
        listed.contains("all") && listed.contains("in force"),
        "{listed}"
    );
    let log = service.end();
    assert!(log.contains("open: there are no tokens"), "{log}");
    assert!(log.contains("\"answered\"") && log.contains("cpt_..."));
    for token in [&all, &short] {
        let bits = token.trim_start_matches("cpt_");
        for shown in [&log, &listed] {
            assert!(!shown.contains(bits), "a token is shown");
            assert!(!shown.contains(&bits[..20]), "half a token is shown");
        }
    }
}

#[test]
fn without_a_token_it_listens_to_this_machine_alone() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path();
    let serve = ["serve", "--listen", "0.0.0.0:0"];
    let refused = run(path, &serve);
    assert_eq!(refused.status.code(), Some(3));
    let said = text(&refused.stderr);
    assert!(
        said.contains("counterpoise token make") && said.contains("127.0.0.1"),
        "{said}"
    );
    made(path, "first", &["--scopes", "administer"]);
    let mut child = program(path, &serve).spawn().expect("a process");
    let lines = BufReader::new(child.stderr.take().expect("a log")).lines();
    let serving = lines
        .map(|line| line.expect("text"))
        .find(|line| line.contains("serving"));
    child.kill().expect("killed");
    child.wait().expect("an end");
    assert!(serving.is_some(), "it serves with a token");
}

#[test]
fn faults_of_the_command_line_are_said() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path();
    let make = |more: &[&'static str]| [&["token", "make", "--name", "n"], more].concat();
    assert_eq!(run(path, &["token", "list"]).status.code(), Some(3));
    let revoke = ["token", "revoke", "--name", "n"];
    assert_eq!(run(path, &revoke).status.code(), Some(3));
    assert!(
        !path.join("counterpoise.sqlite").exists(),
        "nothing was made"
    );
    for (arguments, code, said) in [
        (
            make(&["--scopes", "read,everything"]),
            2,
            "send, read, operate, administer",
        ),
        (make(&[]), 2, "--scopes"),
        (
            make(&["--scopes", "read", "--rate", "0"]),
            2,
            "requests a second",
        ),
        (make(&["--scopes", "read", "--expires", "soon"]), 2, "90d"),
        (make(&["--scopes", "read", "--plants", ""]), 2, "1 to 128"),
        (
            make(&["--scopes", "read", "--expires", "2020-01-01T00:00:00Z"]),
            3,
            "ahead",
        ),
        (make(&["--scopes", "read"]), 0, "cannot be shown again"),
        (make(&["--scopes", "read"]), 3, "another name"),
        (revoke.to_vec(), 0, ""),
        (revoke.to_vec(), 3, "in force"),
        (make(&["--scopes", "send"]), 0, ""),
    ] {
        let output = run(path, &arguments);
        let error = text(&output.stderr);
        assert_eq!(output.status.code(), Some(code), "{arguments:?}: {error}");
        assert!(error.contains(said), "{arguments:?}: {error}");
        assert_eq!(output.stdout.is_empty(), code != 0, "{arguments:?}");
    }
}
