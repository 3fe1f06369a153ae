//! W3C Trace Context through the whole of a request: in the log of what goes on
//! after it was answered, and in what is sent on.

use crate::alarms::{act, plant, raise};
use crate::clients::stand_in::StandIn;
use crate::harness::{PLANT, Service, Setup, batch};
use crate::service_process::program;
use counterpoise::server::Hook;
use serde_json::{Value, json};
use std::io::{BufRead, BufReader};
use std::process::{Child, Stdio};
use std::time::Duration;

const TRACE: &str = "4bf92f3577b34da6a3ce929d0e0e4736";
const PARENT: &str = "00f067aa0ba902b7";

fn traceparent() -> String {
    format!("00-{TRACE}-{PARENT}-01")
}

#[tokio::test]
async fn the_webhook_carries_the_trace_on() {
    let receiver = StandIn::start(&[]).await;
    let url = format!("{}/in", receiver.url);
    let hook = Hook::new(&url, b"thirty-two bytes or more of them").expect("a hook");
    let service = Service::with(Setup {
        webhook: Some(hook),
        ..Setup::default()
    });
    service.put_plant_file("mixer", &plant()).await;
    let alarm = raise(&service, 0).await;
    let request = service.client.post(service.url(&act(alarm, "acknowledge")));
    let request = request
        .header("traceparent", traceparent())
        .header("tracestate", "rojo=1")
        .json(&json!({"by": "R. Moss"}));
    let answer = request.send().await.expect("an answer");
    assert!(answer.status().is_success());
    assert!(!answer.headers().contains_key("traceparent"));
    assert!(!answer.headers().contains_key("traceresponse"));
    let both = async {
        while receiver.came().len() < 2 {
            tokio::task::yield_now().await;
        }
    };
    let both = tokio::time::timeout(Duration::from_secs(30), both).await;
    both.expect("raised and acknowledged are sent");
    let came = receiver.came();
    let sent = |n: usize| -> Vec<String> {
        let header = came[n].headers["traceparent"].to_str().expect("text");
        header.split('-').map(str::to_owned).collect()
    };
    // What came without a trace has one that began here.
    let (raised, acknowledged) = (sent(0), sent(1));
    assert_eq!((raised[0].as_str(), raised[3].as_str()), ("00", "00"));
    assert_ne!(raised[1], TRACE);
    assert!(!came[0].headers.contains_key("tracestate"));
    assert_eq!(acknowledged[1], TRACE);
    assert_ne!(acknowledged[2], PARENT, "our span is the parent");
    assert_eq!(acknowledged[3], "01");
    assert_eq!(came[1].headers["tracestate"], "rojo=1");
}

/// Two batches are sent without waiting for their reports: whatever the engine and
/// the store do afterwards is logged with the trace of the batch that it is for.
#[tokio::test]
async fn what_is_done_after_the_answer_is_logged_with_the_trace() {
    let directory = tempfile::tempdir().expect("a directory");
    let child = program()
        .args(["serve", "--listen", "127.0.0.1:0", "--log-format", "json"])
        .args(["--log", "counterpoise=debug"])
        .current_dir(directory.path())
        .stderr(Stdio::piped())
        .spawn()
        .expect("a process");
    let mut child = Killed(child);
    let mut lines = BufReader::new(child.0.stderr.take().expect("a log")).lines();
    let mut next = move || -> Value {
        let line = lines.next().expect("a line").expect("text");
        serde_json::from_str(&line).expect("JSON")
    };
    let address = loop {
        let line = next();
        if line["message"] == "serving" {
            break line["address"].as_str().expect("an address").to_owned();
        }
    };
    let client = reqwest::Client::new();
    let url = |path: &str| format!("http://{address}/v1/plants/mixer{path}");
    let put = client
        .put(url(""))
        .header("content-type", "application/toml");
    let put = put.body(PLANT).send().await.expect("an answer");
    assert!(put.status().is_success());
    for (n, trace) in [TRACE.to_owned(), TRACE.replace('4', "5")]
        .iter()
        .enumerate()
    {
        let name = format!("b{n}");
        let post = client
            .post(url("/batches"))
            .header("content-type", "application/json")
            .header("prefer", "respond-async")
            .header("traceparent", format!("00-{trace}-{PARENT}-01"));
        let minute = u32::try_from(n).expect("small");
        // The process has the clock of the machine.
        let past = batch(&name, minute, 150.0).replace("2031", "2021");
        let answer = post.body(past).send().await;
        assert_eq!(answer.expect("an answer").status().as_u16(), 202);
        // Of the engine and, before it, of the store.
        let mut seen: Vec<String> = Vec::new();
        let has = |seen: &[String], what: &str| seen.iter().any(|message| message == what);
        while !(has(&seen, "reconciled") && has(&seen, "answered")) {
            let line = next();
            if line["span"]["trace_id"] == **trace {
                seen.push(line["message"].as_str().expect("text").to_owned());
            }
        }
        let kept = seen.iter().filter(|message| *message == "kept").count();
        assert_eq!(kept, 2, "accepted and finished: {seen:?}");
    }
}

/// A process that does not outlive its test.
struct Killed(Child);

impl Drop for Killed {
    fn drop(&mut self) {
        // It may have ended by itself.
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
}
