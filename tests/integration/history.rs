//! Means, and what retention has removed, over HTTP.

use crate::harness::{NOW, Service, batch, problem};
use counterpoise::plant::Retention;
use counterpoise::store::HistoryStore;
use reqwest::StatusCode;
use time::Duration;

async fn with_batches() -> Service {
    let service = Service::with_plant().await;
    for (minute, flow) in [(0, 150.0), (30, 151.0), (61, 400.0)] {
        let posted = service
            .post_batch(batch(&format!("b{minute}"), minute, flow))
            .await;
        assert_eq!(posted.status(), StatusCode::OK);
    }
    service
}

const MEANS: &str = "/v1/plants/mixer/means";

#[tokio::test]
async fn means_are_answered_as_json_and_csv() {
    let service = with_batches().await;
    let hourly = format!("{MEANS}?resolution=hourly&tag=F-3&equipment=mix.imbalance.energy");
    let document = service.get_json(&hourly).await;
    assert_eq!(document["resolution"], "hourly");
    assert_eq!(document["rows"][0]["start"], "2031-04-02T10:00:00Z");
    let verdicts = &document["rows"][0]["verdicts"][0];
    assert_eq!(
        (&verdicts["verdict"], &verdicts["batches"]),
        (&"consistent".into(), &2.into())
    );
    assert_eq!(
        document["rows"][1]["verdicts"][0]["verdict"],
        "inconsistent"
    );
    let flow = &document["series"][0];
    assert_eq!(
        (&flow["name"], &flow["unit"]),
        (&"F-3".into(), &"t/h".into())
    );
    assert_eq!(flow["means"][0]["measured"], 150.5);
    assert_eq!(
        document["series"][1]["means"][1]["measured"],
        serde_json::Value::Null
    );
    let first = service.get(&format!("{hourly}&limit=1")).await;
    assert!(first.headers().contains_key("link"), "it goes on");
    let csv = service
        .get(&format!("{MEANS}?resolution=daily&tag=F-3&format=csv"))
        .await;
    let csv = csv.text().await.expect("text");
    let mut lines = csv.lines();
    let head = "start,consistent,inconsistent,not-redundant,not-converged,not-running,F-3 [t/h],\
                F-3 deviation [t/h],F-3 least [t/h],F-3 greatest [t/h],F-3 uncertainty [t/h],\
                F-3 measured [t/h],F-3 standardised,F-3 batches";
    assert_eq!(lines.next(), Some(head));
    let row = lines.next().expect("a row");
    assert!(row.starts_with("2031-04-02T00:00:00Z,2,1,0,0,0,"), "{row}");
    assert!(row.ends_with(",3"), "{row}");
}

#[tokio::test]
async fn what_cannot_be_asked_for_is_said() {
    let service = with_batches().await;
    for (query, status) in [
        ("tag=F-3", StatusCode::BAD_REQUEST),
        ("resolution=weekly&tag=F-3", StatusCode::BAD_REQUEST),
        ("resolution=daily", StatusCode::BAD_REQUEST),
        ("resolution=daily&tag=F-9", StatusCode::NOT_FOUND),
        (
            "resolution=daily&stream=first.colour",
            StatusCode::BAD_REQUEST,
        ),
    ] {
        problem(service.get(&format!("{MEANS}?{query}")).await, status).await;
    }
    let other = service
        .get("/v1/plants/none/means?resolution=daily&tag=F-3")
        .await;
    problem(other, StatusCode::NOT_FOUND).await;
}

#[tokio::test]
async fn a_removed_report_is_gone_and_known() {
    let service = with_batches().await;
    let daily = format!("{MEANS}?resolution=daily&tag=F-3");
    let means = service.get_json(&daily).await;
    let retention = Retention {
        samples: None,
        reports: Some(Duration::days(2)),
    };
    // The inconsistent one raises nothing: it takes three of them.
    loop {
        let now = NOW + Duration::days(5);
        let turn = service
            .store
            .tidy(now, vec![("mixer".to_owned(), retention)])
            .await;
        if !turn.expect("tidied").more {
            break;
        }
    }
    for path in ["", "/versions/1", "/influences?of=F-1"] {
        let gone = service
            .get(&format!("/v1/plants/mixer/batches/b0{path}"))
            .await;
        let gone = problem(gone, StatusCode::GONE).await;
        let detail = gone["detail"].as_str().expect("text");
        assert!(
            detail.contains("2031-04-07T12:00:00Z") && detail.contains("consistent"),
            "{detail}"
        );
    }
    let again = service.post_batch(batch("b0", 0, 150.0)).await;
    problem(again, StatusCode::GONE).await;
    let other = service.post_batch(batch("b0", 0, 150.5)).await;
    problem(other, StatusCode::CONFLICT).await;
    let list = service.get_json("/v1/plants/mixer/batches").await;
    assert_eq!(list["batches"].as_array().map(Vec::len), Some(3));
    assert_eq!(service.get_json(&daily).await, means);
}
