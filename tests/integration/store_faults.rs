//! What happens to a service when it ends, and when its disk misbehaves.

use crate::harness::{PLANT, Service, Setup, batch, contents, problem};
use crate::store::{accepted, incoming};
use counterpoise::store::{Health, Hindrance, Incoming, SqliteOptions, SqliteStore, Store};
use reqwest::StatusCode;
use sqlx::{ConnectOptions, Connection};
use std::time::Duration;

#[tokio::test]
async fn what_was_accepted_is_finished_after_a_restart() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let body = batch("left", 0, 150.0);
    {
        let mut service = Service::with(Setup {
            database: Some(database.clone()),
            ..Setup::default()
        });
        service.put_plant().await;
        service.stop().expect("an orderly end");
    }
    let store = SqliteStore::open(SqliteOptions::new(&database))
        .await
        .expect("a store");
    let left = Incoming {
        body: body.clone().into_bytes(),
        ..incoming("mixer", "left", 0, 1)
    };
    accepted(&store, left).await;
    store.close().await.expect("closed");

    let setup = || Setup {
        database: Some(database.clone()),
        ..Setup::default()
    };
    let service = Service::with(setup());
    let finished = service.report("left").await;
    drop(service);
    let fresh = Service::with_plant().await;
    let direct: serde_json::Value = fresh.post_batch(body).await.json().await.expect("JSON");
    assert_eq!(finished, direct, "the same as at arrival");
    let again = Service::with(setup());
    assert_eq!(again.report("left").await, finished);
}

/// Hinders the disk, looks at what the service says, and frees it.
async fn hindered(hindrance: Hindrance, reason: &str) {
    let service = Service::with_plant().await;
    assert_eq!(
        service.post_batch(batch("before", 0, 150.0)).await.status(),
        StatusCode::OK
    );
    let before = contents(&service.database).await;
    service.store.hinder(hindrance).await.expect("hindered");
    let mut refused = 0;
    for n in 0..200 {
        let answer = service.post_batch(batch(&format!("h{n}"), n, 150.0)).await;
        if answer.status() == StatusCode::OK {
            continue;
        }
        assert_eq!(answer.headers()["retry-after"], "1");
        let problem = problem(answer, StatusCode::SERVICE_UNAVAILABLE).await;
        assert!(
            problem["detail"].as_str().expect("text").contains(reason),
            "{problem}"
        );
        refused = n;
        break;
    }
    problem(
        service.get("/readyz").await,
        StatusCode::SERVICE_UNAVAILABLE,
    )
    .await;
    let name = format!("h{refused}");
    let path = format!("/v1/plants/mixer/batches/{name}");
    let acknowledged = service.get(&path).await.status();
    let after = contents(&service.database).await;
    assert!(
        before
            .iter()
            .all(|row| row.starts_with("layouts") || after.contains(row)),
        "a row is gone"
    );
    if acknowledged == StatusCode::NOT_FOUND {
        assert!(!after.iter().any(|row| row.contains(&name)));
    }
    service
        .store
        .hinder(Hindrance::default())
        .await
        .expect("freed");
    let mut health = service.store.health();
    let recovering = health.wait_for(|health| *health == Health::Ready);
    tokio::time::timeout(Duration::from_secs(10), recovering)
        .await
        .expect("in time")
        .expect("a store");
    let answer = service.post_batch(batch(&name, refused, 150.0)).await;
    assert_eq!(answer.status(), StatusCode::OK, "without a restart");
    assert_eq!(service.get_json("/readyz").await["status"], "ready");
}

#[tokio::test]
async fn a_full_disk_is_said_and_recovered_from() {
    hindered(
        Hindrance {
            max_pages: Some(1),
            ..Hindrance::default()
        },
        "full",
    )
    .await;
}

#[tokio::test]
async fn a_read_only_file_is_said_and_recovered_from() {
    hindered(
        Hindrance {
            read_only: true,
            ..Hindrance::default()
        },
        "read-only",
    )
    .await;
}

#[tokio::test]
async fn a_locked_file_is_said_and_recovered_from() {
    let lock_timeout = Duration::from_millis(50);
    let service = Service::with(Setup {
        lock_timeout,
        ..Setup::default()
    });
    service.put_plant().await;
    let options = sqlx::sqlite::SqliteConnectOptions::new().filename(&service.database);
    let mut other = options.connect().await.expect("a connection");
    sqlx::query("BEGIN IMMEDIATE")
        .execute(&mut other)
        .await
        .expect("locked");
    let before = contents(&service.database).await;
    let answer = service.post_batch(batch("b", 0, 150.0)).await;
    let problem = problem(answer, StatusCode::SERVICE_UNAVAILABLE).await;
    assert!(
        problem["detail"].as_str().expect("text").contains("locked"),
        "{problem}"
    );
    assert_eq!(contents(&service.database).await, before);
    sqlx::query("ROLLBACK")
        .execute(&mut other)
        .await
        .expect("free");
    other.close().await.expect("closed");
    let answer = service.post_batch(batch("b", 0, 150.0)).await;
    assert_eq!(answer.status(), StatusCode::OK, "without a restart");
}

#[tokio::test]
async fn an_orderly_end_leaves_everything_in_the_main_file() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let mut service = Service::with(Setup {
        database: Some(database.clone()),
        ..Setup::default()
    });
    service.put_plant().await;
    service.post_batch(batch("b", 0, 150.0)).await;
    service.stop().expect("an orderly end");
    let log = directory.path().join("test.sqlite-wal");
    assert!(!log.exists() || std::fs::metadata(&log).expect("a file").len() == 0);
    let copy = directory.path().join("copy.sqlite");
    std::fs::copy(&database, &copy).expect("copied");
    let rows = contents(&copy).await;
    assert!(
        rows.iter().any(|row| row.starts_with("results")),
        "{rows:?}"
    );
    assert!(PLANT.contains("mixer") && rows.iter().any(|row| row.contains("mixer")));
}
