//! The service against its own OpenAPI document, by schemathesis: requests made
//! from the document, sound and unsound, and every answer held to it.
//!
//! The tool is a Python package. The first run makes an environment for it under
//! the target folder, which needs a network once; what is installed is pinned with
//! hashes in `tests/schemathesis/requirements.txt`. The settings, with a reason
//! beside each exception, are in `tests/schemathesis/schemathesis.toml`.

use crate::alarms;
use crate::harness::NOW;
use counterpoise::access::{Actor, Deed, DeedKind, Scope, Token};
use counterpoise::demo;
use counterpoise::store::{AccessStore, NewToken};
use serde_json::json;
use std::path::{Path, PathBuf};
use std::process::Command;

/// Examples per operation and phase; `COUNTERPOISE_STUDY` sets another number.
const EXAMPLES: usize = 5;

fn settings() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/schemathesis")
}

fn runs(command: &mut Command) -> Result<String, String> {
    let output = command
        .output()
        .map_err(|error| format!("{command:?}: {error}"))?;
    let told = String::from_utf8_lossy(&output.stdout).into_owned();
    let complaint = String::from_utf8_lossy(&output.stderr);
    if output.status.success() {
        Ok(told)
    } else {
        Err(format!("{command:?}:\n{told}\n{complaint}"))
    }
}

/// The tool, installed where it is not yet, or in another version than is pinned.
fn tool() -> Result<PathBuf, String> {
    let room = Path::new(env!("CARGO_TARGET_TMPDIR")).join("schemathesis");
    let tool = room.join("bin/schemathesis");
    let pinned = std::fs::read_to_string(settings().join("requirements.txt"));
    let pinned = pinned.expect("the requirements");
    let installed = room.join("installed.txt");
    if std::fs::read_to_string(&installed).is_ok_and(|text| text == pinned) {
        return Ok(tool);
    }
    let _ = std::fs::remove_dir_all(&room);
    runs(Command::new("python3").args(["-m", "venv"]).arg(&room))?;
    let mut install = Command::new(room.join("bin/python3"));
    install.args(["-m", "pip", "install", "--quiet", "--require-hashes"]);
    install.args(["--disable-pip-version-check", "--requirement"]);
    runs(install.arg(settings().join("requirements.txt")))?;
    std::fs::write(&installed, pinned).expect("written");
    Ok(tool)
}

#[tokio::test]
async fn the_service_does_what_its_document_says() {
    let tool = tokio::task::spawn_blocking(tool).await.expect("no panic");
    let tool = tool.unwrap_or_else(|error| {
        panic!("schemathesis cannot be installed (Python 3.11 and, once, a network):\n{error}")
    });
    // Two plants, batches, an alarm with its accusation, a decision by hand.
    let service = alarms::service().await;
    let id = alarms::raise(&service, 0).await;
    assert_eq!(id, 1, "the settings name it");
    let decision = json!({"tag": "F-1", "action": "out-of-service", "by": "R. Moss",
        "reason": "Calibration", "from": "2031-04-02T10:00:00Z"});
    let decided = service.done("/v1/plants/mixer/by-hand", &decision).await;
    assert_eq!(decided["id"], 1, "the settings name it");
    service
        .put_plant_file("gannet-holm", demo::plant_file())
        .await;
    let day = include_str!("../../fixtures/demo/batches.ndjson").lines();
    let few = day.take(3).collect::<Vec<_>>().join("\n");
    let post = service
        .client
        .post(service.url("/v1/plants/gannet-holm/batches"));
    let post = post
        .header("content-type", "application/x-ndjson")
        .body(few);
    assert!(post.send().await.expect("an answer").status().is_success());

    // From the first token on, nobody is let in without one.
    let token = Token::random().expect("random bits");
    let kept = service.store.add_token(everything(&token), made()).await;
    assert!(kept.expect("kept").is_some());
    let bearer = format!("Bearer {}", token.reveal());

    let examples = std::env::var("COUNTERPOISE_STUDY").unwrap_or(EXAMPLES.to_string());
    let mut command = Command::new(tool);
    // It leaves its notes where it runs.
    command.current_dir(env!("CARGO_TARGET_TMPDIR"));
    command.arg("--config-file");
    command.arg(settings().join("schemathesis.toml"));
    command.args(["run", &service.url("/openapi.json"), "--checks", "all"]);
    command.args([
        "--phases",
        "examples,coverage,fuzzing",
        "--max-examples",
        &examples,
    ]);
    command.args(["--header", &format!("Authorization: {bearer}")]);
    command
        .env("SCHEMATHESIS_HOOKS", "hooks")
        .env("PYTHONPATH", settings());
    command
        .env("PYTHONDONTWRITEBYTECODE", "1")
        .env("NO_COLOR", "1");
    let run = tokio::task::spawn_blocking(move || runs(&mut command));
    match run.await.expect("no panic") {
        Ok(told) => println!("{told}"),
        Err(failures) => panic!("{failures}"),
    }
    // Whatever was sent, it still works.
    assert_eq!(service.get("/readyz").await.status(), 200);
    let get = service
        .client
        .get(service.url("/v1/plants/mixer/batches/m002"));
    let answer = get.header("authorization", bearer).send().await;
    assert_eq!(answer.expect("an answer").status(), 200);
}

/// A token that may do everything everywhere.
fn everything(token: &Token) -> NewToken {
    NewToken {
        name: "everything".to_owned(),
        digest: token.digest(),
        scopes: Scope::ALL.into_iter().collect(),
        plants: None,
        expires: None,
        rate: None,
    }
}

fn made() -> Deed {
    Deed {
        actor: Actor::CommandLine,
        at: NOW,
        kind: DeedKind::TokenMade,
        plant: None,
        what: json!({"token": "everything"}),
    }
}
