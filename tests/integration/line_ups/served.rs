//! Line-ups over HTTP: stored, listed, in series.

use super::{STATION, USUAL, usual_but};
use crate::harness::Service;
use serde_json::{Value, json};

fn body(name: &str, minute: u32, readings: &[(&str, f64)]) -> Value {
    let readings = readings
        .iter()
        .map(|(tag, value)| json!({"tag": tag, "value": value}));
    json!({
        "batch": name,
        "start": format!("2031-04-02T10:{minute:02}:00Z"),
        "end": format!("2031-04-02T10:{:02}:00Z", minute + 5),
        "readings": readings.collect::<Vec<_>>(),
    })
}

#[tokio::test]
async fn line_ups_are_stored_and_a_series_has_gaps_where_a_part_was_out() {
    let service = Service::start();
    service.put_plant_file("station", STATION).await;
    let second = usual_but(&[
        ("XS-A", 0.0),
        ("XS-B", 1.0),
        ("F-A", 0.1),
        ("F-B", 100.0),
        ("E-A", 0.0),
    ]);
    let still = usual_but(&[("XS-0", 0.0)]);
    let path = "/v1/plants/station/batches";
    let first = service.done(path, &body("first", 0, USUAL)).await;
    let second = service.done(path, &body("second", 5, &second)).await;
    let third = service.done(path, &body("third", 10, &still)).await;
    assert_eq!(first["line_up"]["name"], "without past, pump-b");
    assert_eq!(second["line_up"]["name"], "without past, pump-a");
    assert_eq!(third["verdict"], "not-running");
    assert_eq!(service.get_json(&format!("{path}/second")).await, second);

    let listed = service
        .get_json(&format!("{path}?verdict=not-running"))
        .await;
    let listed = listed["batches"].as_array().expect("a list");
    assert_eq!(listed.len(), 1);
    assert_eq!(listed[0]["batch"], "third");

    let series = "/v1/plants/station/series";
    let values = |answer: &Value| -> Vec<Value> {
        let values = answer["series"][0]["values"].as_array();
        values.expect("values").clone()
    };
    for (query, gaps) in [
        ("stream=a-out.mass_flow", [false, true, true]),
        ("stream=b-out.mass_flow", [true, false, true]),
        ("stream=draw.mass_flow", [false, false, true]),
        ("equipment=pump-b.work", [true, false, true]),
        ("tag=F-B", [true, false, true]),
    ] {
        let answer = service.get_json(&format!("{series}?{query}")).await;
        let found: Vec<bool> = values(&answer).iter().map(Value::is_null).collect();
        assert_eq!(found, gaps, "{query}: {answer}");
    }
    let answer = service
        .get_json(&format!("{series}?tag=F-B&field=measured"))
        .await;
    assert_eq!(values(&answer), [json!(0.3), json!(100.0), json!(0.3)]);
}
