//! What is taken, in which forms, and what is refused.

use super::{TAGS, csv, finished, lines, minute, period, report, rfc3339, send, taken};
use crate::harness::{Service, batch, contents, problem};
use counterpoise::store::ReadingsStore;
use reqwest::StatusCode;
use serde_json::{Value, json};
use std::io::Write;

fn as_json(line: &str) -> Value {
    let mut fields = line.split(',');
    let mut next = || fields.next().expect("a field");
    let (tag, time) = (next().to_owned(), next().to_owned());
    let value: f64 = next().parse().expect("a number");
    json!({"tag": tag, "time": time, "value": value})
}

#[tokio::test]
async fn every_form_is_taken_and_the_same_again_changes_nothing() {
    let service = Service::with_plant().await;
    let lines = lines(0..5, 0.0);
    let list: Vec<Value> = lines.iter().map(|line| as_json(line)).collect();
    let ndjson: Vec<String> = list.iter().map(Value::to_string).collect();
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    gzip.write_all(csv(&lines).as_bytes()).expect("written");
    let gzip = gzip.finish().expect("finished");
    let zstd = zstd::encode_all(csv(&lines).as_bytes(), 3).expect("encoded");
    let first = send(&service, "application/json", list[0].to_string()).await;
    let first: Value = first.json().await.expect("JSON");
    assert_eq!((&first["taken"], &first["known"]), (&json!(1), &json!(0)));
    let many = json!({ "readings": list }).to_string();
    let many = send(&service, "application/json", many).await;
    let many: Value = many.json().await.expect("JSON");
    assert_eq!((&many["taken"], &many["known"]), (&json!(44), &json!(1)));
    let client = &service.client;
    let post = || client.post(service.url("/v1/plants/mixer/readings"));
    let csv_type = ("content-type", "text/csv");
    let requests = [
        post()
            .header("content-type", "application/x-ndjson")
            .body(ndjson.join("\n")),
        post()
            .header(csv_type.0, "text/csv; charset=utf-8")
            .body(csv(&lines)),
        post()
            .header(csv_type.0, csv_type.1)
            .header("content-encoding", "gzip")
            .body(gzip),
        post()
            .header(csv_type.0, csv_type.1)
            .header("content-encoding", "zstd")
            .body(zstd),
    ];
    for request in requests {
        let answer = request.send().await.expect("an answer");
        assert_eq!(answer.status(), StatusCode::OK);
        let answer: Value = answer.json().await.expect("JSON");
        assert_eq!(
            (&answer["taken"], &answer["known"]),
            (&json!(0), &json!(45))
        );
    }
    report(&service, &period(0)).await;
    assert_eq!(finished(&service).await.len(), 1);
}

/// Order of time, order of tags, twice, in parts: one report.
#[tokio::test]
async fn a_report_does_not_depend_on_the_order_of_readings() {
    let lines = lines(0..5, 0.3);
    let first = Service::with_plant().await;
    first.clock.set(minute(5));
    taken(&first, &lines).await;
    first.clock.set(minute(7));
    let expected = report(&first, &period(0)).await;
    let second = Service::with_plant().await;
    second.clock.set(minute(5));
    let mut shuffled = lines.clone();
    shuffled.reverse();
    shuffled.sort_by_key(|line| line.len() % 3);
    for part in shuffled.chunks(7) {
        taken(&second, part).await;
    }
    taken(&second, &shuffled).await;
    second.clock.set(minute(7));
    assert_eq!(report(&second, &period(0)).await, expected);
}

#[tokio::test]
async fn two_posters_of_the_same_readings_are_one() {
    let service = Service::with_plant().await;
    let lines = lines(0..10, 0.0);
    let answers = futures::future::join_all((0..16).map(|_| taken(&service, &lines))).await;
    let sum = |key: &str| -> u64 {
        answers
            .iter()
            .map(|a| a[key].as_u64().expect("a number"))
            .sum()
    };
    assert_eq!(
        (sum("taken"), sum("known"), sum("refused_count")),
        (90, 15 * 90, 0)
    );
    for start in [0, 5] {
        let made = report(&service, &period(start)).await;
        assert_eq!(made["tags"]["F-1"]["averaged"]["samples"], 5);
    }
    assert_eq!(finished(&service).await.len(), 2);
}

#[tokio::test]
async fn what_cannot_be_taken_is_named_and_the_rest_is_taken() {
    let service = Service::with_plant().await;
    let time = rfc3339(minute(100));
    let sent = vec![
        format!("F-1,{time},100"),
        format!("X-9,{time},1"),
        format!("X-9,{},2", rfc3339(minute(101))),
        // Its period ended more than a day before noon.
        "F-1,2031-04-01T11:50:00Z,7".to_owned(),
    ];
    let answer = taken(&service, &sent).await;
    assert_eq!(answer["taken"], 1);
    assert_eq!(answer["ignored_tags"], json!(["X-9"]));
    assert_eq!(answer["ignored_count"], 2);
    assert_eq!(answer["refused_count"], 1);
    assert_eq!(answer["refused"][0]["tag"], "F-1");
    assert_eq!(answer["refused"][0]["time"], "2031-04-01T11:50:00Z");
    let reason = answer["refused"][0]["reason"].as_str().expect("a reason");
    assert!(reason.contains("24 h"), "{reason}");
    // Its end is exactly a day ago.
    let edge = taken(&service, &["F-1,2031-04-01T11:55:00Z,7".to_owned()]).await;
    assert_eq!(edge["taken"], 1);
    let other = taken(
        &service,
        &[format!("F-1,{time},101"), format!("F-2,{time},50")],
    )
    .await;
    assert_eq!(
        (&other["taken"], &other["refused_count"]),
        (&json!(1), &json!(1))
    );
    assert_eq!(other["refused"][0]["time"], time);
    let same = taken(&service, &[format!("F-1,{time},100")]).await;
    assert_eq!(same["known"], 1, "the earlier value stands");
}

#[tokio::test]
async fn a_body_with_faults_changes_nothing_and_all_of_them_are_told() {
    let service = Service::with_plant().await;
    let before = contents(&service.database).await;
    let body = json!({"readings": [
        {"tag": "F-1", "time": "2031-04-02T10:00:00Z", "value": 1},
        {"tag": "F-1", "time": "yesterday", "value": 1},
        {"tag": "F-1", "time": "2031-04-02T10:00:00Z", "value": "much"},
        {"tag": "F-1", "time": "2031-04-03T10:00:00Z", "value": 1},
    ]});
    let answer = send(&service, "application/json", body.to_string()).await;
    let told = problem(answer, StatusCode::UNPROCESSABLE_ENTITY).await;
    let places: Vec<&str> = (told["faults"].as_array().expect("faults").iter())
        .map(|fault| fault["path"].as_str().expect("a place"))
        .collect();
    assert_eq!(
        places,
        ["/readings/1/time", "/readings/2/value", "/readings/3/time"]
    );
    for (kind, body, status) in [
        (
            "application/json",
            "{\"readings\": [",
            StatusCode::BAD_REQUEST,
        ),
        (
            "application/x-ndjson",
            "{\"tag\": \"F-1\"}\n",
            StatusCode::UNPROCESSABLE_ENTITY,
        ),
        (
            "text/csv",
            "tag,time,value\nF-1,2031-04-02T10:00:00Z,NaN\n",
            StatusCode::UNPROCESSABLE_ENTITY,
        ),
        ("text/csv", "name,when\nF-1,now\n", StatusCode::BAD_REQUEST),
        ("text/plain", "F-1", StatusCode::UNSUPPORTED_MEDIA_TYPE),
    ] {
        let answer = send(&service, kind, body).await;
        problem(answer, status).await;
    }
    let nowhere = service
        .client
        .post(service.url("/v1/plants/nowhere/readings"));
    let nowhere = nowhere
        .header("content-type", "text/csv")
        .body(csv(&lines(0..1, 0.0)));
    problem(
        nowhere.send().await.expect("an answer"),
        StatusCode::NOT_FOUND,
    )
    .await;
    assert_eq!(contents(&service.database).await, before);
}

/// The source's own codes are kept as they came, with what else they say.
// The store that the test reads gives its connection back on another thread.
#[tokio::test(flavor = "multi_thread", worker_threads = 1)]
async fn opc_ua_codes_are_kept_raw() {
    let service = Service::with_plant().await;
    let time = rfc3339(minute(1));
    // Good with a limit bit, uncertain with a sub-code, bad with another.
    let codes = [0x0000_0100_u32, 0x4090_0000, 0x808B_0000];
    let sent: Vec<Value> = (TAGS.iter().zip(codes))
        .map(|((tag, value), code)| json!({"tag": tag, "time": time, "value": value, "quality": code}))
        .collect();
    let answer = send(
        &service,
        "application/json",
        json!({ "readings": sent }).to_string(),
    )
    .await;
    assert_eq!(answer.status(), StatusCode::OK);
    let stored = service
        .store
        .samples("mixer", minute(0), minute(5), time::Duration::ZERO);
    let stored = stored.await.expect("samples");
    let found: Vec<Option<u32>> = codes
        .iter()
        .zip(TAGS)
        .map(|(_, (tag, _))| {
            let of_tag = stored.iter().find(|samples| samples.tag == tag).expect(tag);
            assert_eq!(of_tag.samples.len(), 1);
            of_tag.samples[0].quality.code
        })
        .collect();
    assert_eq!(found, codes.map(Some));
}

#[tokio::test]
async fn a_name_that_a_client_has_taken_stays_the_clients() {
    let service = Service::with_plant().await;
    let own = batch("2031-04-02T10:00:00Z", 0, 150.0);
    let own: Value = service.post_batch(own).await.json().await.expect("JSON");
    taken(&service, &lines(0..10, 0.0)).await;
    // The period after it is made after it.
    report(&service, &period(5)).await;
    assert_eq!(report(&service, &period(0)).await, own);
    assert_eq!(finished(&service).await.len(), 2);
    let open = crate::harness::number(&service.database, "SELECT count(*) FROM open_periods").await;
    assert_eq!(open, 0);
}
