//! `/metrics`: in the OpenMetrics format, with few labels whatever is asked for,
//! and moving with what happens.

mod open_metrics;

use crate::harness::{PLANT, Service, Setup, batch};
use counterpoise::server::Limits;
use counterpoise::store::Hindrance;
use open_metrics::Metrics;
use reqwest::{Method, StatusCode};
use std::collections::BTreeSet;

pub async fn measured(service: &Service) -> Metrics {
    let answer = service.get("/metrics").await;
    assert_eq!(answer.status(), StatusCode::OK);
    let kind = answer.headers()["content-type"].to_str().expect("text");
    assert!(kind.starts_with("application/openmetrics-text; version=1.0.0"));
    let text = answer.text().await.expect("text");
    let metrics = open_metrics::read(&text).unwrap_or_else(|error| panic!("{error}\n{text}"));
    let strange = metrics.0.keys().find(|n| !n.starts_with("counterpoise_"));
    assert_eq!(strange, None);
    metrics
}

/// Names that may stand in a rule or on a page: of samples, as they are scraped.
pub fn names(metrics: &Metrics) -> BTreeSet<String> {
    let families = metrics.0.iter();
    let names = families.flat_map(|(name, family)| {
        let suffixes: &[&str] = match family.kind.as_str() {
            "counter" => &["_total"],
            "info" => &["_info"],
            "histogram" => &["_bucket", "_sum", "_count"],
            _ => &[""],
        };
        suffixes.iter().map(move |suffix| format!("{name}{suffix}"))
    });
    names.collect()
}

#[tokio::test]
async fn what_happens_is_counted() {
    let service = Service::with_plant().await;
    let before = measured(&service).await;
    assert_eq!(before.value("counterpoise_store_ready"), 1.0);
    assert!(before.value("counterpoise_resident_memory_bytes") > 1e6);
    assert!(before.value("counterpoise_store_file_bytes") > 1e4);
    assert!(before.value("counterpoise_store_disk_free_bytes") > 0.0);
    assert_eq!(before.value("counterpoise_clock_seconds"), 1_932_897_600.0);
    for (n, flow) in [150.0, 150.1, 190.0].into_iter().enumerate() {
        let n = u32::try_from(n).expect("small");
        let answer = service.post_batch(batch(&format!("b{n}"), n, flow)).await;
        assert_eq!(answer.status(), StatusCode::OK);
    }
    let again = service.post_batch(batch("b0", 0, 150.0)).await;
    assert_eq!(again.status(), StatusCode::OK);
    let after = measured(&service).await;
    let rise =
        |name: &str, labels: &[(&str, &str)]| after.sum(name, labels) - before.sum(name, labels);
    let mixer = ("plant", "mixer");
    let total = "counterpoise_batches_total";
    assert_eq!(rise(total, &[mixer, ("verdict", "consistent")]), 2.0);
    assert_eq!(rise(total, &[mixer, ("verdict", "inconsistent")]), 1.0);
    let converged = [("outcome", "converged")];
    assert_eq!(rise("counterpoise_solves_total", &converged), 3.0);
    assert_eq!(rise("counterpoise_reconcile_seconds_count", &[]), 3.0);
    assert!(rise("counterpoise_suspects_total", &[]) >= 1.0);
    let route = ("route", "/v1/plants/{plant}/batches");
    let posts = [route, ("method", "POST"), ("status", "2xx")];
    assert_eq!(rise("counterpoise_http_requests_total", &posts), 4.0);
    let posts = &posts[..2];
    assert_eq!(rise("counterpoise_http_request_seconds_count", posts), 4.0);
    // Each batch was accepted and finished, in transactions of one or more.
    assert!(rise("counterpoise_store_commit_seconds_count", &[]) >= 2.0);
    assert!(rise("counterpoise_store_commit_jobs_sum", &[]) >= 6.0);
    assert_eq!(after.value("counterpoise_batches_pending"), 0.0);
    assert_eq!(after.value("counterpoise_batches_underway"), 0.0);
    assert_eq!(after.value("counterpoise_store_queue"), 0.0);
    let newest = after.sum("counterpoise_newest_period_end_seconds", &[mixer]);
    assert_eq!(newest, 1_932_897_600.0 - 7200.0 + 150.0);
    let length = after.sum("counterpoise_newest_period_seconds", &[mixer]);
    assert_eq!(length, 30.0);
}

#[tokio::test]
async fn labels_stay_few_whatever_is_asked_for() {
    let service = Service::with_plant().await;
    measured(&service).await;
    let before = measured(&service).await;
    let client = &service.client;
    for hundred in 0..100 {
        let asks = (0..100).map(|n| {
            let path = match n % 3 {
                0 => format!("/v1/plants/p{hundred}-{n}"),
                1 => format!("/v1/plants/mixer/batches/{hundred}-{n}"),
                _ => format!("/{hundred}/{n}?x={n}"),
            };
            client.get(service.url(&path)).send()
        });
        for answer in futures::future::join_all(asks).await {
            assert_eq!(answer.expect("an answer").status(), StatusCode::NOT_FOUND);
        }
    }
    for n in 0..50 {
        let method = Method::from_bytes(format!("M{n}").as_bytes()).expect("a method");
        let answer = client.request(method, service.url("/livez")).send().await;
        answer.expect("an answer");
    }
    let after = measured(&service).await;
    let size = |metrics: &Metrics| -> usize { metrics.0.values().map(|f| f.samples.len()).sum() };
    // One more counter and one more histogram of 18 lines for each of: a plant,
    // a report, no route, and a method that is none.
    let more = size(&after) - size(&before);
    assert!(more <= 4 * 19, "{more} more series");
    let requests = "counterpoise_http_requests_total";
    let other = [("route", "other"), ("method", "GET"), ("status", "4xx")];
    assert_eq!(after.sum(requests, &other), 3300.0);
    let strange = [("route", "/livez"), ("method", "other")];
    assert_eq!(after.sum(requests, &strange), 50.0);
    assert_eq!(after.sum(requests, &[("status", "4xx")]), 10_050.0);
}

#[tokio::test]
async fn plants_beyond_the_hundredth_are_counted_together() {
    let service = Service::start();
    for n in 0..103 {
        let name = format!("mixer-{n}");
        let file = PLANT.replace("plant = \"mixer\"", &format!("plant = \"{name}\""));
        service.put_plant_file(&name, &file).await;
        let path = format!("/v1/plants/{name}/batches");
        let request = service.client.post(service.url(&path));
        let request = request.header("content-type", "application/json");
        let answer = request.body(batch("b", 0, 150.0)).send().await;
        assert_eq!(answer.expect("an answer").status(), StatusCode::OK);
    }
    let metrics = measured(&service).await;
    let total = "counterpoise_batches_total";
    assert_eq!(metrics.samples(total, &[]).count(), 101);
    assert_eq!(metrics.sum(total, &[("plant", "other plants")]), 3.0);
    assert_eq!(metrics.sum(total, &[]), 103.0);
    let newest = "counterpoise_newest_period_end_seconds";
    assert_eq!(metrics.samples(newest, &[]).count(), 100);
}

#[tokio::test]
async fn the_newest_period_is_known_after_a_restart() {
    let directory = tempfile::tempdir().expect("a directory");
    let setup = || Setup {
        database: Some(directory.path().join("test.sqlite")),
        ..Setup::default()
    };
    let mut service = Service::with(setup());
    service.put_plant().await;
    service.post_batch(batch("b", 5, 150.0)).await;
    let newest = "counterpoise_newest_period_end_seconds";
    let before = measured(&service).await.value(newest);
    service.stop().expect("ended in order");
    let service = Service::with(setup());
    assert_eq!(measured(&service).await.value(newest), before);
}

#[tokio::test]
async fn overload_and_a_failing_disk_show() {
    let limits = Limits {
        listeners: 1,
        ..Limits::default()
    };
    let service = Service::with(Setup {
        limits,
        ..Setup::default()
    });
    service.put_plant().await;
    let events = "/v1/plants/mixer/alarms/events";
    let listening = service.get(events).await;
    assert_eq!(listening.status(), StatusCode::OK);
    let refused = service.get(events).await;
    assert_eq!(refused.status(), StatusCode::TOO_MANY_REQUESTS);
    let metrics = measured(&service).await;
    assert_eq!(metrics.value("counterpoise_overload_refusals_total"), 1.0);
    assert_eq!(metrics.value("counterpoise_listeners"), 1.0);
    assert_eq!(metrics.value("counterpoise_listeners_allowed"), 1.0);
    drop(listening);

    let hindrance = Hindrance {
        read_only: true,
        ..Hindrance::default()
    };
    service.store.hinder(hindrance).await.expect("hindered");
    let answer = service.post_batch(batch("b", 0, 150.0)).await;
    assert_eq!(answer.status(), StatusCode::SERVICE_UNAVAILABLE);
    let metrics = measured(&service).await;
    assert_eq!(metrics.value("counterpoise_store_ready"), 0.0);
    assert!(metrics.value("counterpoise_store_failures_total") >= 1.0);
    service
        .store
        .hinder(Hindrance::default())
        .await
        .expect("freed");
}
