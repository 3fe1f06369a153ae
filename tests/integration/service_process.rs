//! The program as a process: its command line, its exit codes, its signals.

use crate::harness::{PLANT, batch};
use futures::StreamExt;
use std::io::{BufRead, BufReader, Lines, Write};
use std::path::Path;
use std::process::{Child, ChildStderr, Command, Output, Stdio};
use std::time::Duration;

pub fn program() -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_counterpoise"));
    command.env_clear();
    command
}

pub fn run(directory: &Path, arguments: &[&str], input: &str) -> Output {
    let mut child = program()
        .args(arguments)
        .current_dir(directory)
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("a process");
    // A program that has refused its arguments does not read its input.
    let _ = child
        .stdin
        .take()
        .expect("an input")
        .write_all(input.as_bytes());
    child.wait_with_output().expect("an end")
}

fn files() -> tempfile::TempDir {
    let directory = tempfile::tempdir().expect("a directory");
    let write = |name: &str, text: &str| {
        std::fs::write(directory.path().join(name), text).expect("written");
    };
    write("plant.toml", PLANT);
    write("faulty.toml", &PLANT.replace("\"t/h\"", "\"furlong\""));
    write("batch.json", &batch("b", 0, 150.0));
    write(
        "faulty.json",
        &batch("b", 0, 150.0).replace(": 150}", ": NaN}"),
    );
    write(
        "day.ndjson",
        &format!("{}\n\n{}\n", batch("b1", 0, 150.0), batch("b2", 1, 151.0)),
    );
    directory
}

pub fn text(bytes: &[u8]) -> String {
    String::from_utf8(bytes.to_vec()).expect("text")
}

#[test]
fn check_prints_an_assessment_or_every_fault() {
    let directory = files();
    let good = run(directory.path(), &["check", "plant.toml"], "");
    assert_eq!(good.status.code(), Some(0), "{}", text(&good.stderr));
    let shown = text(&good.stdout);
    assert!(
        shown.contains("F-3") && shown.contains("degrees of freedom"),
        "{shown}"
    );
    assert!(
        shown.contains("not for protection or safety functions"),
        "{shown}"
    );
    let json = run(
        directory.path(),
        &["check", "plant.toml", "--format", "json"],
        "",
    );
    let assessment: serde_json::Value = serde_json::from_slice(&json.stdout).expect("JSON");
    assert_eq!(assessment["plant"], "mixer");

    let faulty = run(directory.path(), &["check", "faulty.toml"], "");
    assert_eq!(faulty.status.code(), Some(1));
    let faults = text(&faulty.stderr);
    for line in [14, 15, 16] {
        assert!(faults.contains(&format!("faulty.toml:{line}:")), "{faults}");
    }
    let json = run(
        directory.path(),
        &["check", "faulty.toml", "--format", "json"],
        "",
    );
    let faults: serde_json::Value = serde_json::from_slice(&json.stdout).expect("JSON");
    assert_eq!(faults["faults"].as_array().expect("faults").len(), 3);
}

#[test]
fn reconcile_prints_the_report() {
    let directory = files();
    let json = run(
        directory.path(),
        &["reconcile", "plant.toml", "batch.json", "--format", "json"],
        "",
    );
    assert_eq!(json.status.code(), Some(0), "{}", text(&json.stderr));
    let report: serde_json::Value = serde_json::from_slice(&json.stdout).expect("JSON");
    assert_eq!(report["batch"], "b");
    let piped = run(
        directory.path(),
        &["reconcile", "plant.toml", "-", "--format", "json"],
        &batch("b", 0, 150.0),
    );
    assert_eq!(piped.stdout, json.stdout);
    let people = run(
        directory.path(),
        &["reconcile", "plant.toml", "batch.json"],
        "",
    );
    let shown = text(&people.stdout);
    assert!(
        shown.contains("Batch b of mixer") && shown.contains("F-3"),
        "{shown}"
    );
    assert!(
        shown.contains("not for protection or safety functions"),
        "{shown}"
    );
}

#[test]
fn reconcile_takes_a_stream() {
    let directory = files();
    for arguments in [
        &[
            "reconcile",
            "plant.toml",
            "day.ndjson",
            "--format",
            "ndjson",
        ][..],
        &["reconcile", "plant.toml", "day.ndjson", "--format", "json"],
    ] {
        let output = run(directory.path(), arguments, "");
        assert_eq!(output.status.code(), Some(0), "{}", text(&output.stderr));
        let names: Vec<String> = text(&output.stdout)
            .lines()
            .map(|line| serde_json::from_str::<serde_json::Value>(line).expect("JSON"))
            .map(|report| report["batch"].as_str().expect("a name").to_owned())
            .collect();
        assert_eq!(names, ["b1", "b2"]);
    }
    let faulty = format!("{{}}\n{}\n", batch("b", 0, 150.0));
    let output = run(
        directory.path(),
        &["reconcile", "plant.toml", "-", "--format", "ndjson"],
        &faulty,
    );
    assert_eq!(output.status.code(), Some(1));
    let lines: Vec<serde_json::Value> = text(&output.stdout)
        .lines()
        .map(|line| serde_json::from_str(line).expect("JSON"))
        .collect();
    assert_eq!(lines.len(), 2, "line n out is line n in");
    assert_eq!(lines[0]["type"], "urn:counterpoise:problem:unacceptable");
    assert_eq!(lines[0]["faults"][0]["line"], 1);
    assert_eq!(lines[1]["batch"], "b", "the good one is done");
    assert!(
        text(&output.stderr).contains("line 1"),
        "{}",
        text(&output.stderr)
    );
}

/// As with `| head`: who has seen enough is told of no fault.
#[test]
fn a_reader_that_goes_away_ends_it_quietly() {
    let directory = files();
    for arguments in [
        &["check", "plant.toml"][..],
        &["reconcile", "plant.toml", "day.ndjson"],
        &["openapi"],
    ] {
        let mut child = program()
            .args(arguments)
            .current_dir(directory.path())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .expect("a process");
        drop(child.stdout.take());
        let output = child.wait_with_output().expect("an end");
        assert_eq!(output.status.code(), Some(0), "{arguments:?}");
        assert_eq!(text(&output.stderr), "", "{arguments:?}");
    }
}

#[test]
fn faults_and_trouble_have_their_exit_codes() {
    let directory = files();
    for (arguments, code) in [
        (&["reconcile", "plant.toml", "faulty.json"][..], 1),
        (&["reconcile", "faulty.toml", "batch.json"], 1),
        (&["reconcile", "plant.toml"], 2),
        (&["weigh"], 2),
        (&["reconcile", "plant.toml", "nothing.json"], 3),
        (&["check", "batch.xml"], 3),
        (
            &[
                "serve",
                "--listen",
                "127.0.0.1:0",
                "--database",
                "no/such/directory/x.sqlite",
            ],
            3,
        ),
    ] {
        let output = run(directory.path(), arguments, "");
        assert_eq!(
            output.status.code(),
            Some(code),
            "{arguments:?}: {}",
            text(&output.stderr)
        );
        assert!(!output.stderr.is_empty(), "{arguments:?}");
        assert!(output.stdout.is_empty(), "{arguments:?}");
    }
}

/// A webhook that cannot work is a fault before the service serves, and nothing
/// of the secret is told.
#[test]
fn a_webhook_that_cannot_work_is_said() {
    let directory = files();
    let write = |name: &str, secret: &str| {
        std::fs::write(directory.path().join(name), secret).expect("written");
    };
    write("short", &format!("{}  \n", "s".repeat(31)));
    write("long", &"s".repeat(32));
    let (url, file) = ("--webhook-url", "--webhook-secret-file");
    let address = "http://alarms.example/in";
    for (options, code, said) in [
        (&[url, address][..], 2, file),
        (&[file, "long"], 2, url),
        (
            &[url, address, file, "short"],
            3,
            "the secret has 31 bytes: give 32 random ones or more",
        ),
        (
            &[url, address, file, "none"],
            3,
            "the webhook's secret none",
        ),
        (
            &[url, "ftp://alarms.example/in", file, "long"],
            3,
            "write http://",
        ),
        (&[url, "alarms", file, "long"], 3, "`alarms` is no address"),
    ] {
        let serve = ["serve", "--listen", "127.0.0.1:0"];
        let output = run(directory.path(), &[&serve[..], options].concat(), "");
        let told = text(&output.stderr);
        assert_eq!(output.status.code(), Some(code), "{options:?}: {told}");
        assert!(told.contains(said), "{options:?}: {told}");
        assert!(!told.contains("sss"), "{told}");
        assert!(!told.contains("serving"), "{told}");
    }
}

/// From the environment too, with white space around the secret.
#[test]
fn a_webhook_that_works_is_taken() {
    let directory = files();
    let secret = format!("{}\n", "s".repeat(32));
    std::fs::write(directory.path().join("secret"), secret).expect("written");
    let mut child = program()
        .args(["serve", "--listen", "127.0.0.1:0"])
        .env("COUNTERPOISE_WEBHOOK_URL", "http://127.0.0.1:9/in")
        .env("COUNTERPOISE_WEBHOOK_SECRET_FILE", "secret")
        .current_dir(directory.path())
        .stderr(Stdio::piped())
        .spawn()
        .expect("a process");
    let lines = BufReader::new(child.stderr.take().expect("a log")).lines();
    let mut lines = lines.map(|line| line.expect("text"));
    let serving = lines.find(|line| line.contains("serving") || line.contains("error"));
    child.kill().expect("killed");
    child.wait().expect("an end");
    let serving = serving.expect("a line");
    assert!(serving.contains("serving"), "{serving}");
}

#[test]
fn openapi_is_printed() {
    let output = run(Path::new("."), &["openapi"], "");
    let document: serde_json::Value = serde_json::from_slice(&output.stdout).expect("JSON");
    assert_eq!(document["openapi"], "3.1.0");
}

/// A service as a process, its log, and its address.
fn serve(directory: &Path) -> (Child, Lines<BufReader<ChildStderr>>, String) {
    let mut child = program()
        .args(["serve", "--listen", "127.0.0.1:0", "--log-format", "json"])
        .current_dir(directory)
        .stderr(Stdio::piped())
        .spawn()
        .expect("a process");
    let mut lines = BufReader::new(child.stderr.take().expect("a log")).lines();
    let serving = lines
        .by_ref()
        .map(|line| line.expect("text"))
        .find(|line| line.contains("\"serving\""));
    let line: serde_json::Value = serde_json::from_str(&serving.expect("a line")).expect("JSON");
    let address = line["address"].as_str().expect("an address").to_owned();
    (child, lines, address)
}

#[tokio::test]
async fn a_killed_service_has_lost_nothing_that_it_acknowledged() {
    let directory = tempfile::tempdir().expect("a directory");
    let start = || {
        let (child, log, address) = serve(directory.path());
        // A pipe that nobody reads fills up, and a log that waits stops the rest.
        std::thread::spawn(move || log.for_each(drop));
        (child, address)
    };
    let (mut child, mut address) = start();
    let client = reqwest::Client::new();
    let put = client.put(format!("http://{address}/v1/plants/mixer"));
    let put = put
        .header("content-type", "application/toml")
        .body(PLANT)
        .send()
        .await;
    assert_eq!(put.expect("an answer").status(), 201);
    let mut acknowledged = Vec::new();
    for round in 0..3 {
        let url = format!("http://{address}/v1/plants/mixer/batches");
        let mut posts: futures::stream::FuturesUnordered<_> = (0..40)
            .map(|n| {
                let name = format!("r{round}-{n}");
                let post = client.post(&url).header("content-type", "application/json");
                let post = post.header("prefer", "respond-async").body(past(&name, n));
                async move { (name, post.send().await) }
            })
            .collect();
        while let Some((name, answer)) = posts.next().await {
            if answer.is_ok_and(|answer| answer.status() == 202) {
                acknowledged.push(name);
            }
            if acknowledged.len() >= 20 * (round + 1) {
                break;
            }
        }
        // SIGKILL, in the middle of the others.
        child.kill().expect("killed");
        child.wait().expect("an end");
        drop(posts);
        (child, address) = start();
    }
    assert!(acknowledged.len() >= 60, "{}", acknowledged.len());
    for name in &acknowledged {
        let report = format!("http://{address}/v1/plants/mixer/batches/{name}");
        let asking = async {
            loop {
                match client
                    .get(&report)
                    .send()
                    .await
                    .expect("an answer")
                    .status()
                    .as_u16()
                {
                    200 => return,
                    202 => {}
                    other => panic!("{name}: {other}"),
                }
            }
        };
        tokio::time::timeout(Duration::from_secs(30), asking)
            .await
            .expect("a report in time");
    }
    child.kill().expect("killed");
    child.wait().expect("an end");
}

/// A batch that no clock takes for one from the future.
fn past(name: &str, minute: u32) -> String {
    batch(name, minute, 150.0).replace("2031-", "2021-")
}

#[test]
fn signals_end_it_in_order() {
    for signal in ["TERM", "INT"] {
        let directory = tempfile::tempdir().expect("a directory");
        let (mut child, lines, address) = serve(directory.path());
        assert!(address.starts_with("127.0.0.1:"));
        let killed = Command::new("kill")
            .args(["-s", signal, &child.id().to_string()])
            .status();
        assert!(killed.expect("kill").success());
        let rest: Vec<String> = lines.map(|line| line.expect("text")).collect();
        assert_eq!(child.wait().expect("an end").code(), Some(0), "{rest:?}");
        assert!(directory.path().join("counterpoise.sqlite").exists());
    }
}
