//! Batches in, reports and series out.

use crate::harness::{PLANT, Service, batch, contents, problem};
use crate::service::next_link;
use reqwest::StatusCode;
use serde_json::Value;
use std::io::Write;

#[tokio::test]
async fn a_batch_is_answered_with_its_report() {
    let service = Service::with_plant().await;
    let answer = service
        .post_batch(batch("2031-04-02T10:00Z", 0, 150.5))
        .await;
    assert_eq!(answer.status(), StatusCode::OK);
    let location = answer.headers()["content-location"]
        .to_str()
        .expect("text")
        .to_owned();
    let report = answer.text().await.expect("text");
    let parsed: Value = serde_json::from_str(&report).expect("JSON");
    assert_eq!(parsed["plant"], "mixer");
    assert_eq!(parsed["revision"], 1);
    assert_eq!(parsed["batch"], "2031-04-02T10:00Z");
    assert_eq!(parsed["start"], "2031-04-02T10:00:00Z");
    assert_eq!(parsed["tags"].as_object().expect("tags").len(), 9);
    assert_eq!(location, "/v1/plants/mixer/batches/2031-04-02T10%3A00Z");
    let again = service.get(&location).await.text().await.expect("text");
    assert_eq!(again, report, "kept bit for bit");
}

#[tokio::test]
async fn the_same_batch_is_answered_as_before_and_another_refused() {
    let service = Service::with_plant().await;
    let first = service
        .post_batch(batch("b", 0, 150.0))
        .await
        .text()
        .await
        .expect("text");
    let changed_plant = PLANT.replace("absolute = \"1 K\"", "absolute = \"2 K\"");
    let request = service.client.put(service.url("/v1/plants/mixer"));
    let put = request
        .header("content-type", "application/toml")
        .body(changed_plant);
    assert_eq!(
        put.send().await.expect("an answer").status(),
        StatusCode::CREATED
    );

    let spelled_otherwise = batch("b", 0, 150.0)
        .replace("150", "1.5e2")
        .replace("00:00Z", "00:00+00:00");
    let again = service.post_batch(spelled_otherwise).await;
    assert_eq!(again.status(), StatusCode::OK);
    assert_eq!(
        again.text().await.expect("text"),
        first,
        "with the revision that made it"
    );
    let other = service.post_batch(batch("b", 0, 150.1)).await;
    problem(other, StatusCode::CONFLICT).await;
    let list = service.get_json("/v1/plants/mixer/batches").await;
    assert_eq!(list["batches"].as_array().expect("a list").len(), 1);
}

#[tokio::test]
async fn sixty_four_clients_with_one_batch() {
    let service = Service::with_plant().await;
    let posts = (0..64).map(|_| {
        let client = reqwest::Client::new();
        let request = client.post(service.url("/v1/plants/mixer/batches"));
        let request = request
            .header("content-type", "application/json")
            .body(batch("one", 0, 150.0));
        async move {
            request
                .send()
                .await
                .expect("an answer")
                .text()
                .await
                .expect("text")
        }
    });
    let answers = futures::future::join_all(posts).await;
    for answer in &answers {
        assert_eq!(answer, &answers[0]);
    }
    assert!(answers[0].contains("\"batch\":\"one\""), "{}", answers[0]);
    let list = service.get_json("/v1/plants/mixer/batches").await;
    assert_eq!(list["batches"].as_array().expect("a list").len(), 1);
}

/// Two posters of one name with two contents, each from 32 clients at once: one
/// content stands, and everybody is told the same.
#[tokio::test]
async fn two_contents_of_one_name_at_once() {
    for round in 0..5 {
        let service = Service::with_plant().await;
        let flow = |n: u32| if n.is_multiple_of(2) { 150.0 } else { 151.0 };
        let posts = (0..64).map(|n| service.post_batch(batch("same", round, flow(n))));
        let answers = futures::future::join_all(posts).await;
        let mut taken = [0, 0];
        for (n, answer) in answers.into_iter().enumerate() {
            match answer.status() {
                StatusCode::OK => taken[n % 2] += 1,
                StatusCode::CONFLICT => {}
                other => panic!("{other}"),
            }
        }
        taken.sort_unstable();
        assert_eq!(taken, [0, 32]);
        let rows = contents(&service.database).await;
        let results = rows.iter().filter(|row| row.starts_with("results: "));
        assert_eq!(results.count(), 1);
    }
}

#[tokio::test]
async fn a_stream_is_answered_line_by_line_in_order() {
    let service = Service::with_plant().await;
    let mut lines: Vec<String> = (0..100)
        .map(|n| batch(&format!("b{n}"), n, 150.0))
        .collect();
    lines.insert(10, "{\"batch\": 1}".to_owned());
    lines.insert(20, String::new());
    lines.insert(30, batch("b0", 0, 99.0));
    let answer = service.post("application/x-ndjson", lines.join("\n")).await;
    assert_eq!(answer.status(), StatusCode::OK);
    assert_eq!(answer.headers()["content-type"], "application/x-ndjson");
    let text = answer.text().await.expect("text");
    let answers: Vec<Value> = text
        .lines()
        .map(|line| serde_json::from_str(line).expect("JSON"))
        .collect();
    assert_eq!(answers.len(), 102);
    assert_eq!(answers[10]["status"], 422);
    assert_eq!(answers[10]["faults"][0]["line"], 11);
    assert_eq!(answers[29]["status"], 409);
    assert!(
        answers[29]["detail"]
            .as_str()
            .expect("text")
            .starts_with("line 31")
    );
    let named = answers.iter().filter_map(|answer| answer["batch"].as_str());
    let expected: Vec<String> = (0..100).map(|n| format!("b{n}")).collect();
    assert_eq!(named.collect::<Vec<_>>(), expected);
}

#[tokio::test]
async fn whoever_prefers_not_to_wait_is_told_where() {
    let service = Service::with_plant().await;
    let request = service.client.post(service.url("/v1/plants/mixer/batches"));
    let request = request
        .header("content-type", "application/json")
        .header("prefer", "respond-async");
    let answer = request
        .body(batch("later/1", 0, 150.0))
        .send()
        .await
        .expect("an answer");
    assert_eq!(answer.status(), StatusCode::ACCEPTED);
    assert_eq!(answer.headers()["preference-applied"], "respond-async");
    let location = answer.headers()["location"]
        .to_str()
        .expect("text")
        .to_owned();
    assert_eq!(location, "/v1/plants/mixer/batches/later%2F1");
    assert_eq!(service.report("later%2F1").await["batch"], "later/1");

    let request = service.client.post(service.url("/v1/plants/mixer/batches"));
    let request = request
        .header("content-type", "application/x-ndjson")
        .header("prefer", "respond-async");
    let lines = format!("{}\n{}", batch("l2", 1, 150.0), batch("l3", 2, 150.0));
    let answer = request.body(lines).send().await.expect("an answer");
    assert_eq!(answer.status(), StatusCode::ACCEPTED);
    assert_eq!(answer.text().await.expect("text").lines().count(), 2);
    assert_eq!(service.report("l3").await["batch"], "l3");
}

#[tokio::test]
async fn compressed_batches_are_taken() {
    let service = Service::with_plant().await;
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    gzip.write_all(batch("g", 0, 150.0).as_bytes())
        .expect("written");
    let gzip = gzip.finish().expect("finished");
    let zstd = zstd::encode_all(batch("z", 1, 150.0).as_bytes(), 3).expect("encoded");
    for (coding, body, name) in [("gzip", gzip, "g"), ("zstd", zstd, "z")] {
        let request = service.client.post(service.url("/v1/plants/mixer/batches"));
        let request = request.header("content-type", "application/json");
        let answer = request
            .header("content-encoding", coding)
            .body(body)
            .send()
            .await;
        let report: Value = answer.expect("an answer").json().await.expect("JSON");
        assert_eq!(report["batch"], name);
    }
}

async fn fifty(service: &Service) {
    let lines: Vec<String> = (0..50)
        .map(|n| batch(&format!("b{n:02}"), n, 150.0 + f64::from(n) / 10.0))
        .collect();
    let answer = service.post("application/x-ndjson", lines.join("\n")).await;
    assert_eq!(answer.text().await.expect("text").lines().count(), 50);
}

#[tokio::test]
async fn a_list_has_the_latest_first_and_goes_on_by_its_link() {
    let service = Service::with_plant().await;
    fifty(&service).await;
    let mut next = Some(
        "/v1/plants/mixer/batches?limit=7&from=2031-04-02T10:05:00Z&to=2031-04-02T12:40:00%2B02:00"
            .to_owned(),
    );
    let mut names = Vec::new();
    while let Some(path) = next {
        let answer = service.get(&path).await;
        next = next_link(&answer);
        let list: Value = answer.json().await.expect("JSON");
        for item in list["batches"].as_array().expect("a list") {
            names.push(item["batch"].as_str().expect("a name").to_owned());
            assert!(item["verdict"].is_string(), "{item}");
            assert_eq!(item["revision"], 1);
        }
    }
    let expected: Vec<String> = (5..40).rev().map(|n| format!("b{n:02}")).collect();
    assert_eq!(names, expected);
    let verdict = service.report("b00").await["verdict"]
        .as_str()
        .expect("a verdict")
        .to_owned();
    let mut same_or_not = 0;
    for verdict in [
        "consistent",
        "inconsistent",
        "not-redundant",
        "not-converged",
    ] {
        let path = format!("/v1/plants/mixer/batches?verdict={verdict}");
        let list = service.get_json(&path).await;
        same_or_not += list["batches"].as_array().expect("a list").len();
    }
    assert_eq!(same_or_not, 50, "b00 is {verdict}");
}

#[tokio::test]
async fn a_series_of_no_quantity_is_refused() {
    let service = Service::with_plant().await;
    service.post_batch(batch("b", 0, 150.0)).await;
    for query in [
        "stream=both",
        "stream=both.colour",
        "stream=both.heat",
        "stream=both.mass_flow.x",
        "equipment=mix",
        "equipment=mix.pressure",
        "equipment=mix.imbalance.mass.",
    ] {
        let path = format!("/v1/plants/mixer/series?{query}");
        let answer = problem(service.get(&path).await, StatusCode::BAD_REQUEST).await;
        let fault = &answer["faults"][0];
        let (owner, quantity) = match query.split_once('=') {
            Some(("stream", _)) => ("?stream", "mass_flow, pressure, temperature, enthalpy"),
            _ => ("?equipment", "imbalance.mass.SIDE"),
        };
        assert_eq!(fault["path"], owner, "{query}");
        assert!(fault["mend"].as_str().expect("text").contains(quantity));
    }
    for query in ["stream=mix.pressure", "equipment=both.heat"] {
        let path = format!("/v1/plants/mixer/series?{query}");
        problem(service.get(&path).await, StatusCode::NOT_FOUND).await;
    }
    service
        .get_json("/v1/plants/mixer/series?equipment=mix.imbalance.energy")
        .await;
}

#[tokio::test]
async fn series_are_what_the_reports_say() {
    let service = Service::with_plant().await;
    fifty(&service).await;
    let path = "/v1/plants/mixer/series?tag=F-3&tag=T-1&stream=both.mass_flow&field=";
    for (field, of_tag) in [
        ("measured", "measured"),
        ("reconciled", "reconciled"),
        ("adjustment", "adjustment"),
        ("uncertainty", "uncertainty_reconciled"),
        ("uncertainty-measured", "uncertainty_measured"),
        ("redundancy", "redundancy"),
        ("standardised", "standardised_adjustment"),
    ] {
        let series = service.get_json(&format!("{path}{field}")).await;
        assert_eq!(series["batches"].as_array().expect("a list").len(), 50);
        assert_eq!(series["series"].as_array().expect("a list").len(), 3);
        for place in [0, 17, 49] {
            let name = series["batches"][place]["batch"].as_str().expect("a name");
            assert_eq!(name, format!("b{place:02}"), "the earliest first");
            let report = service.report(name).await;
            for (column, tag) in ["F-3", "T-1"].into_iter().enumerate() {
                let shown = &series["series"][column];
                assert_eq!(shown["name"], tag);
                assert_eq!(
                    shown["values"][place], report["tags"][tag][of_tag],
                    "{field} of {tag}"
                );
            }
            if field == "reconciled" {
                let flow = &report["streams"]["both"]["mass_flow"]["value"];
                assert_eq!(series["series"][2]["values"][place], *flow);
            }
        }
    }
    let measured = service.get_json(&format!("{path}measured")).await;
    assert_eq!(measured["series"][0]["values"][17], 151.7);
    assert_eq!(measured["series"][0]["unit"], "t/h");
}

#[tokio::test]
async fn series_come_as_csv_too_and_in_parts() {
    let service = Service::with_plant().await;
    fifty(&service).await;
    let mut next =
        Some("/v1/plants/mixer/series?tag=F-3&field=measured&format=csv&limit=20".to_owned());
    let mut rows = Vec::new();
    while let Some(path) = next {
        let answer = service.get(&path).await;
        assert!(
            answer.headers()["content-type"]
                .to_str()
                .expect("text")
                .starts_with("text/csv")
        );
        next = next_link(&answer);
        let text = answer.text().await.expect("text");
        let mut reader = csv::Reader::from_reader(text.as_bytes());
        assert_eq!(
            reader.headers().expect("heads"),
            vec!["batch", "start", "end", "verdict", "F-3 [t/h]"]
        );
        rows.extend(
            reader
                .into_records()
                .map(|record| record.expect("a record")),
        );
    }
    assert_eq!(rows.len(), 50);
    assert_eq!(&rows[49][0], "b49");
    assert_eq!(&rows[49][1], "2031-04-02T10:49:00Z");
    assert_eq!(&rows[49][4], "154.9");
    let accept = service
        .client
        .get(service.url("/v1/plants/mixer/series?tag=F-3"));
    let csv = accept
        .header("accept", "text/csv")
        .send()
        .await
        .expect("an answer");
    assert!(
        csv.headers()["content-type"]
            .to_str()
            .expect("text")
            .starts_with("text/csv")
    );
}

#[tokio::test]
async fn wrong_queries_are_named() {
    let service = Service::with_plant().await;
    for (path, place) in [
        ("batches?colour=red", "?colour"),
        ("batches?limit=0", "?limit"),
        ("batches?from=yesterday", "?from"),
        ("batches?verdict=fine", "?verdict"),
        ("batches?cursor=x", "?cursor"),
        ("batches?limit=1&limit=2", "?limit"),
        ("series?tag=F-3&field=colour", "?field"),
        ("series?tag=F-3&format=xml", "?format"),
    ] {
        let answer = service.get(&format!("/v1/plants/mixer/{path}")).await;
        let problem = problem(answer, StatusCode::BAD_REQUEST).await;
        assert_eq!(problem["faults"][0]["path"], place, "{path}");
    }
    problem(
        service.get("/v1/plants/mixer/series").await,
        StatusCode::BAD_REQUEST,
    )
    .await;
    problem(
        service.get("/v1/plants/mixer/series?tag=X-9").await,
        StatusCode::NOT_FOUND,
    )
    .await;
    problem(
        service.get("/v1/plants/nowhere/batches").await,
        StatusCode::NOT_FOUND,
    )
    .await;
}
