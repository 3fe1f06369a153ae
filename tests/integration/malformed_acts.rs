//! What people send: whatever is malformed gets its problem document with every
//! fault, and changes nothing.

use crate::alarms::{raise, service};
use crate::harness::{Service, contents, problem};
use reqwest::StatusCode;
use serde_json::{Value, json};

/// Every address that takes a body, with one that it would take.
fn addresses() -> Vec<(&'static str, Value)> {
    let by = json!({"by": "R. Moss"});
    let why = json!({"by": "R. Moss", "reason": "a test"});
    let with = |base: &Value, more: Value| {
        let mut body = base.clone();
        for (key, value) in more.as_object().expect("an object") {
            body[key] = value.clone();
        }
        body
    };
    let later = "2031-04-02T13:00:00Z";
    let earlier = "2031-04-02T10:00:00Z";
    vec![
        ("alarms/1/acknowledge", by.clone()),
        ("alarms/1/shelve", with(&by, json!({"until": later}))),
        ("alarms/1/unshelve", by.clone()),
        ("alarms/1/remove-from-service", why.clone()),
        ("alarms/1/return-to-service", by.clone()),
        (
            "accusations/1/closing",
            with(
                &by,
                json!({"outcome": "unknown", "found": "nothing", "at": earlier}),
            ),
        ),
        (
            "by-hand",
            with(
                &why,
                json!({"tag": "F-4", "action": "out-of-service", "from": earlier}),
            ),
        ),
        ("by-hand/1/end", by.clone()),
        ("batches/m001/again", why.clone()),
        ("again", with(&why, json!({"from": earlier, "to": later}))),
        (
            "batches/m001/field-readings",
            with(
                &by,
                json!({"at": earlier, "readings": [{
                    "measures": "temperature", "of": "both", "value": 40, "unit": "Cel",
                    "uncertainty": {"absolute": "1 K"},
                }]}),
            ),
        ),
    ]
}

/// A service with something of everything.
async fn full() -> Service {
    let service = service().await;
    raise(&service, 0).await;
    let decision = json!({
        "tag": "F-3", "action": "offset", "offset": 1, "from": "2031-04-03T00:00:00Z",
        "reason": "a test", "by": "R. Moss",
    });
    service.done("/v1/plants/mixer/by-hand", &decision).await;
    service
}

async fn post(
    service: &Service,
    path: &str,
    content_type: &str,
    body: String,
) -> reqwest::Response {
    let request = service.client.post(service.url(path));
    let request = request.header("content-type", content_type).body(body);
    request.send().await.expect("an answer")
}

fn places(problem: &Value) -> Vec<&str> {
    let faults = problem["faults"].as_array().expect("faults").iter();
    faults
        .map(|f| f["path"].as_str().expect("a place"))
        .collect()
}

#[tokio::test]
async fn malformed_bodies_change_nothing() {
    let service = full().await;
    let before = contents(&service.database).await;
    assert!(before.iter().any(|row| row.starts_with("watches")));
    assert!(before.iter().any(|row| row.starts_with("by_hand")));
    for (path, good) in addresses() {
        let path = format!("/v1/plants/mixer/{path}");
        for text in ["", "{", "{\"by\": NaN}", "{\"by\": 1e400}", "\u{0}"] {
            let answer = post(&service, &path, "application/json", text.to_owned()).await;
            let told = problem(answer, StatusCode::BAD_REQUEST).await;
            assert_eq!(told["faults"][0]["line"], 1, "{path}");
        }
        for text in ["[]", "7", "null"] {
            let answer = post(&service, &path, "application/json", text.to_owned()).await;
            problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
        }
        let answer = post(&service, &path, "text/plain", good.to_string()).await;
        problem(answer, StatusCode::UNSUPPORTED_MEDIA_TYPE).await;

        // Nothing that has to be there, something that has not.
        let answer = service.post_json(&path, &json!({"colour": "red"})).await;
        let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
        let members = good.as_object().expect("an object").keys();
        let mut expected: Vec<String> = members.map(|key| format!("/{key}")).collect();
        expected.push("/colour".to_owned());
        expected.sort();
        let mut found = places(&told);
        found.sort_unstable();
        assert_eq!(found, expected, "{path}");

        // Every member once of a wrong kind.
        for key in good.as_object().expect("an object").keys() {
            let place = format!("/{key}");
            for wrong in [json!({"x": 1}), json!(" "), json!([[]])] {
                let mut body = good.clone();
                body[key] = wrong;
                let answer = service.post_json(&path, &body).await;
                let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
                assert!(
                    places(&told).iter().all(|p| p.starts_with(&place)),
                    "{path}: {told}"
                );
            }
        }
        let twice = good.to_string().replacen('{', "{\"by\": \"A. Fell\", ", 1);
        let answer = post(&service, &path, "application/json", twice).await;
        let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
        assert_eq!(places(&told), ["/by"]);

        let answer = service
            .post_json(&format!("{path}?colour=red"), &good)
            .await;
        problem(answer, StatusCode::BAD_REQUEST).await;
        let elsewhere = path.replace("/mixer/", "/nowhere/");
        problem(
            service.post_json(&elsewhere, &good).await,
            StatusCode::NOT_FOUND,
        )
        .await;
        let nothing = path.replace("/1/", "/77/").replace("/m001/", "/none/");
        if nothing != path {
            problem(
                service.post_json(&nothing, &good).await,
                StatusCode::NOT_FOUND,
            )
            .await;
            let odd = path.replace("/1/", "/x/").replace("/m001/", "/%FF/");
            let answer = service.post_json(&odd, &good).await;
            assert!(answer.status().is_client_error(), "{odd}");
        }
    }
    assert_eq!(contents(&service.database).await, before);
}

#[tokio::test]
async fn what_does_not_make_sense_is_told_at_its_place() {
    let service = full().await;
    let before = contents(&service.database).await;
    for (path, change, expected) in [
        (
            "alarms/1/shelve",
            json!({"until": "2031-04-02T12:00:00Z"}),
            vec!["/until"],
        ),
        (
            "alarms/1/shelve",
            json!({"until": "9999-12-31T00:00:00Z"}),
            vec!["/until"],
        ),
        (
            "accusations/1/closing",
            json!({"at": "2031-04-02T12:11:00Z"}),
            vec!["/at"],
        ),
        (
            "accusations/1/closing",
            json!({"outcome": "guilty", "cause": {"cause": "theft"}}),
            vec!["/outcome", "/cause/cause", "/cause/of"],
        ),
        (
            "accusations/1/closing",
            json!({"as_found": {"size": 1, "uncertainty": -1, "unit": "t/h", "x": 1}}),
            vec!["/as_found/uncertainty", "/as_found/x"],
        ),
        (
            "by-hand",
            json!({"tag": "F-9", "offset": 3}),
            vec!["/tag", "/offset"],
        ),
        ("by-hand", json!({"action": "offset"}), vec!["/offset"]),
        (
            "by-hand",
            json!({"action": "offset", "offset": "3"}),
            vec!["/offset"],
        ),
        ("by-hand", json!({"action": "ignore"}), vec!["/action"]),
        (
            "by-hand",
            json!({"until": "2031-04-02T10:00:00Z"}),
            vec!["/until"],
        ),
        (
            "by-hand/1/end",
            json!({"until": "2031-04-02T10:00:00Z"}),
            vec!["/until"],
        ),
        (
            "batches/m001/again",
            json!({"revision": 0}),
            vec!["/revision"],
        ),
        (
            "batches/m001/again",
            json!({"revision": -1.5}),
            vec!["/revision"],
        ),
        ("again", json!({"to": "2031-04-02T10:00:00Z"}), vec!["/to"]),
        (
            "batches/m001/field-readings",
            json!({"readings": []}),
            vec!["/readings"],
        ),
        (
            "batches/m001/field-readings",
            json!({"at": "2031-04-03T12:00:00Z", "readings": [{}, 7]}),
            vec![
                "/at",
                "/readings/0/measures",
                "/readings/0/of",
                "/readings/0/value",
                "/readings/0/unit",
                "/readings/0/uncertainty",
                "/readings/1",
            ],
        ),
        (
            "alarms/1/acknowledge",
            json!({"by": "x".repeat(129), "note": "y".repeat(2001)}),
            vec!["/note", "/by"],
        ),
    ] {
        let (_, mut body) = addresses()
            .into_iter()
            .find(|(address, _)| *address == path)
            .expect("an address");
        for (key, value) in change.as_object().expect("an object") {
            body[key] = value.clone();
        }
        let answer = service
            .post_json(&format!("/v1/plants/mixer/{path}"), &body)
            .await;
        let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
        assert_eq!(places(&told), expected, "{path} {change}");
    }
    for (path, place) in [
        ("alarms?state=loud&colour=red", vec!["?state", "?colour"]),
        (
            "accusations?open=perhaps&limit=0&cursor=x",
            vec!["?open", "?limit", "?cursor"],
        ),
        ("accusations/record?x=1", vec!["?x"]),
        ("by-hand?at=noon", vec!["?at"]),
        ("batches/m001/versions?x=1", vec!["?x"]),
        ("batches/m001/field-readings?x=1", vec!["?x"]),
    ] {
        let answer = service.get(&format!("/v1/plants/mixer/{path}")).await;
        let told = problem(answer, StatusCode::BAD_REQUEST).await;
        assert_eq!(places(&told), place, "{path}");
    }
    for path in ["alarms", "accusations", "accusations/record", "by-hand"] {
        let answer = service.get(&format!("/v1/plants/nowhere/{path}")).await;
        problem(answer, StatusCode::NOT_FOUND).await;
    }
    assert_eq!(contents(&service.database).await, before);
}
