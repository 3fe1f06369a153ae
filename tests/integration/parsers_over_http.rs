//! Readers that only a request reaches, given anything: query parameters, cursors,
//! addresses, headers, and the bodies of acts. No answer is a fault of ours, and
//! every refusal is a problem document that names something.

use crate::alarms;
use crate::harness::Service;
use crate::parsers::{any_damages, damage};
use proptest::prelude::*;
use proptest::strategy::ValueTree;
use proptest::test_runner::TestRunner;
use reqwest::StatusCode;
use serde_json::{Value, json};

/// Requests of each kind.
const MANY: usize = 150;

/// Values of a strategy, the same in every run.
fn samples<S: Strategy>(strategy: S, count: usize) -> Vec<S::Value> {
    let mut runner = TestRunner::deterministic();
    let next = || strategy.new_tree(&mut runner).expect("a value").current();
    std::iter::repeat_with(next).take(count).collect()
}

/// An answer that is none of our faults, and says what is wrong where something is.
async fn is_told(what: &str, answer: reqwest::Response) -> StatusCode {
    let status = answer.status();
    assert!(!status.is_server_error(), "{what}: {status}");
    if status.is_client_error() {
        let body = answer.bytes().await.expect("a body");
        let problem: Value = serde_json::from_slice(&body)
            .unwrap_or_else(|_| panic!("{what}: {}", String::from_utf8_lossy(&body)));
        assert_eq!(problem["status"], status.as_u16(), "{what}");
        let faults = problem["faults"].as_array().map_or(0, Vec::len);
        let detail = problem["detail"].as_str().unwrap_or_default();
        assert!(faults > 0 || !detail.is_empty(), "{what}: {problem}");
    }
    status
}

fn encoded(text: &str) -> String {
    form_urlencoded::byte_serialize(text.as_bytes()).collect()
}

/// Text of any sort, and text that is nearly what is asked for.
fn any_value() -> impl Strategy<Value = String> {
    prop_oneof![
        "\\PC{0,20}",
        "[0-9.+:TZ -]{0,30}",
        "-?[0-9]{0,25}\\.-?[0-9]{0,25}",
        "(F-1|first|mix)(\\.[a-z_.]{0,20})?",
        Just("2031-04-02T10:00:00Z".to_owned()),
    ]
}

#[tokio::test]
async fn queries() {
    let service = alarms::service().await;
    alarms::raise(&service, 0).await;
    let lists = [
        ("/v1/plants", vec!["limit", "cursor"]),
        ("/v1/plants/mixer", vec!["revision"]),
        (
            "/v1/plants/mixer/batches",
            vec!["from", "to", "verdict", "limit", "cursor"],
        ),
        (
            "/v1/plants/mixer/series",
            vec![
                "tag",
                "stream",
                "equipment",
                "field",
                "from",
                "to",
                "format",
                "limit",
                "cursor",
            ],
        ),
        ("/v1/plants/mixer/by-hand", vec!["at"]),
        (
            "/v1/plants/mixer/accusations",
            vec!["open", "limit", "cursor"],
        ),
        ("/v1/plants/mixer/alarms", vec!["state", "after"]),
        (
            "/v1/plants/mixer/batches/m002/influences",
            vec!["of", "quantity"],
        ),
    ];
    let any = (
        any::<prop::sample::Index>(),
        any::<prop::sample::Index>(),
        any_value(),
        any_value(),
    );
    let mut refused = 0;
    for (list, name, one, two) in samples(any, 3 * MANY) {
        let (path, names) = list.get(&lists);
        let other = names[0];
        let name = name.get(names);
        let path = format!("{path}?{name}={}&{other}={}", encoded(&one), encoded(&two));
        let status = is_told(&path, service.get(&path).await).await;
        refused += usize::from(status == StatusCode::BAD_REQUEST);
    }
    assert!(refused > MANY, "{refused}");
}

/// Queries that are no encoded text at all, and addresses of any sort.
#[tokio::test]
async fn addresses() {
    let service = Service::with_plant().await;
    let raw = "[!$&'()*+,;=:@a-zA-Z0-9%._~?/-]{0,40}";
    for text in samples(raw, MANY) {
        for path in [
            format!("/v1/plants/{text}"),
            format!("/v1/plants/mixer/batches/{text}"),
            format!("/v1/plants/mixer/batches?{text}"),
            format!("/v1/plants/mixer/series?{text}"),
        ] {
            // A text with a broken escape is refused by the client already.
            let Ok(url) = reqwest::Url::parse(&service.url(&path)) else {
                continue;
            };
            let answer = service.client.get(url).send().await.expect("an answer");
            is_told(&path, answer).await;
        }
    }
}

#[tokio::test]
async fn headers() {
    let service = Service::with_plant().await;
    let names = [
        "if-match",
        "if-none-match",
        "prefer",
        "accept",
        "content-type",
        "content-encoding",
        "accept-encoding",
        "last-event-id",
        "x-request-id",
        "traceparent",
    ];
    let any = (any::<prop::sample::Index>(), "[ -~\u{e9}]{0,40}");
    for (name, value) in samples(any, 2 * MANY) {
        let name = name.get(&names);
        let Ok(value) = reqwest::header::HeaderValue::from_bytes(value.trim().as_bytes()) else {
            continue;
        };
        let what = format!("{name}: {value:?}");
        let put = service.client.put(service.url("/v1/plants/mixer"));
        let put = put.header("content-type", "application/toml");
        let put = put.header(*name, &value).body("x");
        is_told(&what, put.send().await.expect("an answer")).await;
        let get = service.client.get(service.url("/v1/plants/mixer"));
        let get = get.header(*name, &value);
        is_told(&what, get.send().await.expect("an answer")).await;
    }
}

/// Bodies of acts: bytes, and sound ones that have been damaged.
#[tokio::test]
async fn bodies_of_acts() {
    let service = alarms::service().await;
    let id = alarms::raise(&service, 0).await;
    let acts = [
        (
            alarms::act(id, "acknowledge"),
            json!({"by": "R. Moss", "note": "seen"}),
        ),
        (
            alarms::act(id, "shelve"),
            json!({"by": "R. Moss", "until": "2031-04-02T13:00:00Z"}),
        ),
        (
            "/v1/plants/mixer/by-hand".to_owned(),
            json!({"tag": "F-1", "action": "offset", "offset": -3.2, "by": "R. Moss",
                "reason": "Calibration", "from": "2031-04-02T10:00:00Z"}),
        ),
        (
            "/v1/plants/mixer/batches/m002/field-readings".to_owned(),
            json!({"by": "R. Moss", "at": "2031-04-02T11:00:00Z", "readings": [
                {"measures": "temperature", "of": "first", "value": 30.1, "unit": "Cel",
                 "uncertainty": {"absolute": "0.5 K"}}]}),
        ),
        (
            "/v1/plants/mixer/accusations/1/closing".to_owned(),
            json!({"outcome": "refuted", "found": "nothing", "by": "R. Moss",
                "at": "2031-04-02T11:00:00Z"}),
        ),
        (
            "/v1/plants/mixer/again".to_owned(),
            json!({"from": "2030-01-01T00:00:00Z", "to": "2030-01-02T00:00:00Z",
                "by": "R. Moss", "reason": "a try"}),
        ),
    ];
    let any = (
        any::<prop::sample::Index>(),
        any_damages(),
        prop::collection::vec(any::<u8>(), 0..60),
    );
    let mut refused = 0;
    for (act, damages, bytes) in samples(any, 2 * MANY) {
        let (path, sound) = act.get(&acts);
        for body in [damage(&sound.to_string(), &damages), bytes] {
            let what = format!("{path}: {}", String::from_utf8_lossy(&body));
            let post = service.client.post(service.url(path));
            let post = post.header("content-type", "application/json").body(body);
            let status = is_told(&what, post.send().await.expect("an answer")).await;
            refused += usize::from(status.is_client_error());
        }
    }
    assert!(refused > 2 * MANY, "{refused}");
}
