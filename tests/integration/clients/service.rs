//! The clients against the service itself: what they send is kept as it was read,
//! status codes too.

use super::{client, lines, python, run};
use crate::harness::{PLANT, Service};
use crate::service_process::text;
use counterpoise::store::ReadingsStore;
use serde_json::{Value, json};
use std::path::Path;
use std::process::Command;
use time::Duration;
use time::macros::datetime;

const BAD: u32 = 0x8000_0000;

async fn service() -> Service {
    let service = Service::start();
    let file = PLANT.replacen("\n\n", "\n\n[averaging]\nperiod = \"1 min\"\n\n", 1);
    service.put_plant_file("mixer", &file).await;
    service
}

/// Samples of F-1 in the minute before noon: second, value, code.
async fn kept(service: &Service) -> Vec<(u8, Option<f64>, Option<u32>)> {
    let from = datetime!(2031-04-02 11:59 UTC);
    let minute = Duration::minutes(1);
    let tags = service
        .store
        .samples("mixer", from, from + minute, Duration::ZERO)
        .await
        .expect("samples");
    let of = tags.iter().find(|tag| tag.tag == "F-1").expect("F-1");
    let samples = of.samples.iter();
    samples
        .map(|one| (one.time.second(), one.value, one.quality.code))
        .collect()
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_poster_s_readings_are_kept_as_they_are() {
    let service = service().await;
    let spool = tempfile::tempdir().expect("a directory");
    let readings = lines(0..4).replace("T10:00", "T11:59");
    for _ in 0..2 {
        let mut command = python(spool.path(), &service.base, &["--lines", "3"]);
        command.args(["--plant", "mixer"]);
        let ended = run(command, readings.clone()).await;
        assert_eq!(text(&ended.stderr), "");
        assert!(ended.status.success());
    }
    let code = |second: u8| (second % 2 == 1).then_some(BAD);
    let expected: Vec<_> = (0..4).map(|s| (s, Some(100.0), code(s))).collect();
    assert_eq!(kept(&service).await, expected, "twice sent, once kept");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_curl_script_s_readings_are_kept_as_they_are() {
    let service = service().await;
    let directory = tempfile::tempdir().expect("a directory");
    let file = directory.path().join("r.csv");
    let csv = "tag,time,value,quality\nF-1,2031-04-02T11:59:07Z,100.5,0x80000000\n\
               F-1,2031-04-02T11:59:08Z,101,good\n";
    std::fs::write(&file, csv).expect("written");
    let mut command = Command::new("sh");
    command.arg(client("post.sh"));
    command.args([&service.base, "mixer"]).arg(&file);
    let ended = run(command, String::new()).await;
    assert!(ended.status.success(), "{}", text(&ended.stderr));
    let answer: Value = serde_json::from_slice(&ended.stdout).expect("the answer");
    assert_eq!(answer["taken"], 2, "{answer}");
    let expected = [(7, Some(100.5), Some(BAD)), (8, Some(101.0), None)];
    assert_eq!(kept(&service).await, expected);
}

/// Runs the script of the configuration's processor on metrics of the OPC UA
/// input, with a stand-in for the agent's `Metric`: Starlark of this kind is
/// Python too, but for the names of types.
async fn processed(script: &str, metrics: &Value) -> Value {
    let program = r#"
import json, sys
class Metric:
    def __init__(self, name):
        self.name, self.tags, self.fields, self.time = name, {}, {}, 0
script, metrics = json.loads(sys.stdin.read())
names = {float: "float", int: "int", str: "string", bool: "bool"}
scope = {"Metric": Metric, "type": lambda value: names[type(value)]}
exec(script, scope)
made = []
for one in metrics:
    metric = Metric("opcua")
    metric.fields, metric.time = one["fields"], one["time"]
    made += [vars(reading) for reading in scope["apply"](metric)]
print(json.dumps(made))
"#;
    let mut command = Command::new("python3");
    command.args(["-c", program]);
    let ended = run(command, json!([script, metrics]).to_string()).await;
    assert!(ended.status.success(), "{}", text(&ended.stderr));
    serde_json::from_slice(&ended.stdout).expect("JSON")
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn what_the_forwarder_s_configuration_makes_is_kept_as_it_is() {
    let file = Path::new(env!("CARGO_MANIFEST_DIR")).join("deploy/clients/telegraf.conf");
    let file = std::fs::read_to_string(file).expect("the configuration");
    let configuration: toml::Value = toml::from_str(&file).expect("TOML");
    let script = configuration["processors"]["starlark"][0]["source"].as_str();
    let output = &configuration["outputs"]["http"][0];
    let second = |s: u64| (1_932_897_540 + s) * 1_000_000_000;
    let metrics = json!([
        {"fields": {"F-1": 100.5, "Quality": "OK (0x0)"}, "time": second(7)},
        {"fields": {"F-1": 101, "Quality": "Bad (0x80000000)"}, "time": second(8)},
    ]);
    let readings = processed(script.expect("a script"), &metrics).await;
    // What the template below makes of them; whoever changes it changes this.
    let template = "{{ range $reading := . }}{\"tag\":{{ $reading.Tag \"tag\" | toJson }},\
        \"time\":\"{{ $reading.Time.UTC.Format \"2006-01-02T15:04:05.999999999Z07:00\" }}\",\
        \"value\":{{ $reading.Field \"value\" | toJson }},\
        \"quality\":{{ $reading.Field \"quality\" | toJson }}}\n{{ end }}";
    assert_eq!(output["batch_template"].as_str(), Some(template));
    let mut body = String::new();
    for reading in readings.as_array().expect("a list") {
        let (tags, fields) = (&reading["tags"], &reading["fields"]);
        let nanoseconds = reading["time"].as_u64().expect("a time");
        let second = nanoseconds / 1_000_000_000 - second(0) / 1_000_000_000;
        body += &format!(
            "{{\"tag\":{},\"time\":\"2031-04-02T11:59:{second:02}Z\",\"value\":{},\"quality\":{}}}\n",
            tags["tag"], fields["value"], fields["quality"]
        );
    }
    let service = service().await;
    let path = output["url"].as_str().expect("an address");
    let path = path
        .strip_prefix("http://127.0.0.1:8080")
        .expect("the usual port");
    let path = path.replace("gannet-holm", "mixer");
    let kind = output["headers"]["Content-Type"].as_str().expect("a type");
    let request = service.client.post(service.url(&path));
    let answer = request.header("content-type", kind).body(body).send().await;
    let answer: Value = answer.expect("an answer").json().await.expect("JSON");
    assert_eq!(answer["taken"], 2, "{answer}");
    let expected = [(7, Some(100.5), Some(0)), (8, Some(101.0), Some(BAD))];
    assert_eq!(kept(&service).await, expected);
}
