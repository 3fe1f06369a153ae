//! Accusations: opened with the alarm, closed by a person, and counted.

use super::{raise, reported, service};
use crate::harness::{Service, problem};
use reqwest::StatusCode;
use serde_json::{Value, json};

async fn accusations(service: &Service, query: &str) -> Vec<Value> {
    let path = format!("/v1/plants/mixer/accusations{query}");
    let list = service.get_json(&path).await;
    list["accusations"].as_array().expect("a list").clone()
}

fn closing() -> Value {
    json!({
        "outcome": "confirmed",
        "cause": {"cause": "bias", "of": "F-4"},
        "found": "reads 7.5 t/h high",
        "as_found": {"size": 7.5, "uncertainty": 0.5, "unit": "t/h"},
        "at": "2031-04-02T11:30:00Z",
        "by": "R. Moss",
    })
}

const CLOSING: &str = "/v1/plants/mixer/accusations/1/closing";

#[tokio::test]
async fn one_is_opened_closed_and_counted() {
    let service = service().await;
    let record = "/v1/plants/mixer/accusations/record";
    assert_eq!(service.get_json(record).await["open"], 0);
    let alarm = raise(&service, 0).await;
    reported(&service, 3, 8.0).await;
    let open = accusations(&service, "?open=true").await;
    assert_eq!(open.len(), 1);
    assert_eq!(open[0]["alarm"], alarm);
    assert_eq!(open[0]["opened_batch"], "m002");
    assert_eq!(open[0]["last_batch"], "m003");
    assert_eq!(open[0]["batches"], 4);
    assert_eq!(open[0]["members"][0]["of"], "F-4");
    assert_eq!(accusations(&service, "?open=false").await, [] as [Value; 0]);
    assert_eq!(service.get_json(record).await["open"], 1);

    let closed = service.done(CLOSING, &closing()).await;
    assert_eq!(closed["closing"]["entered"], "2031-04-02T12:00:00Z");
    assert_eq!(
        accusations(&service, "?open=false").await,
        std::slice::from_ref(&closed)
    );
    assert_eq!(accusations(&service, "?open=true").await, [] as [Value; 0]);
    let record = service.get_json(record).await;
    assert_eq!(record["open"], 0);
    assert_eq!(record["all"]["confirmed"], 1);
    assert_eq!(record["all"]["hit_rate"]["rate"], 1.0);
    assert_eq!(record["by_cause"][0]["cause"], "bias");
    let stated = closed["newest"][0]["size"].as_f64().expect("a size");
    let sigma = closed["newest"][0]["uncertainty"].as_f64().expect("one") / 1.959964;
    let error = record["all"]["size_error"]["mean"].as_f64().expect("one");
    assert!((error - (stated - 7.5) / sigma).abs() < 1e-5, "{error}");

    // It stays closed although the suspect goes on.
    reported(&service, 4, 8.0).await;
    assert_eq!(accusations(&service, "").await, [closed]);
    let again = service.post_json(CLOSING, &closing()).await;
    let told = problem(again, StatusCode::CONFLICT).await;
    assert!(told["detail"].as_str().expect("text").contains("R. Moss"));
}

#[tokio::test]
async fn a_closing_that_does_not_fit_changes_nothing() {
    let service = service().await;
    raise(&service, 0).await;
    let before = accusations(&service, "").await;
    let changed = |change: &dyn Fn(&mut Value)| {
        let mut body = closing();
        change(&mut body);
        body
    };
    for (body, path) in [
        (changed(&|b| b["cause"]["of"] = json!("T-1")), "/cause"),
        (changed(&|b| b["outcome"] = json!("refuted")), "/cause"),
        (
            changed(&|b| b["as_found"]["unit"] = json!("kg/s")),
            "/as_found/unit",
        ),
    ] {
        let answer = service.post_json(CLOSING, &body).await;
        let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
        assert_eq!(told["faults"][0]["path"], path, "{told}");
    }
    assert_eq!(accusations(&service, "").await, before);
    let other = "/v1/plants/mixer/accusations/2/closing";
    problem(
        service.post_json(other, &closing()).await,
        StatusCode::NOT_FOUND,
    )
    .await;
}

#[tokio::test]
async fn the_list_goes_on_by_its_link() {
    let service = service().await;
    // A new accusation each time that it comes back.
    for round in 0..3 {
        let minute = 10 * round;
        raise_after(&service, minute).await;
    }
    let mut next = Some("/v1/plants/mixer/accusations?limit=2".to_owned());
    let mut ids = Vec::new();
    while let Some(path) = next {
        let answer = service.get(&path).await;
        let link = answer
            .headers()
            .get("link")
            .map(|link| link.to_str().expect("text").to_owned());
        next = link.map(|link| link[1..].split_once('>').expect("a link").0.to_owned());
        let list: Value = answer.json().await.expect("JSON");
        for accusation in list["accusations"].as_array().expect("a list") {
            ids.push(accusation["id"].as_u64().expect("a number"));
        }
    }
    assert_eq!(ids, [1, 2, 3]);
}

/// Raises the alarm, closes its accusation and lets it return.
async fn raise_after(service: &Service, minute: u32) {
    let id = raise(service, minute).await;
    let open = accusations(service, "?open=true").await;
    let path = format!("/v1/plants/mixer/accusations/{}/closing", open[0]["id"]);
    service.done(&path, &closing()).await;
    for later in 3..6 {
        reported(service, minute + later, 0.0).await;
    }
    service
        .done(&super::act(id, "acknowledge"), &json!({"by": "R. Moss"}))
        .await;
}
