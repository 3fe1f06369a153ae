//! What happens to a service when it ends, and when its disk misbehaves.

use crate::alarms::{self, Listener};
use crate::harness::{NOW, PLANT, Service, Setup, batch, contents, problem};
use crate::store::{accepted, incoming};
use counterpoise::store::{Health, Hindrance, Incoming, SqliteOptions, SqliteStore, Store};
use reqwest::StatusCode;
use serde_json::json;
use sqlx::{ConnectOptions, Connection};
use std::path::Path;
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
            .filter(|row| {
                let changes = ["layouts", "watches", "dirty_days"];
                !changes.iter().any(|table| row.starts_with(table))
            })
            .all(|row| after.contains(row)),
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

/// Runs a statement beside the service.
pub async fn beside(database: &Path, statement: &'static str) {
    let options = sqlx::sqlite::SqliteConnectOptions::new().filename(database);
    let mut other = options.connect().await.expect("a connection");
    // More than one statement at a time.
    sqlx::raw_sql(statement)
        .execute(&mut other)
        .await
        .expect("done");
    other.close().await.expect("closed");
}

/// Posts a batch of the alarms' plant that is accepted, reconciled and looked at,
/// but whose result is refused by the disk, and frees the disk by a statement. A
/// hindrance of the store would refuse the batch itself, before anybody looks at
/// it.
async fn lost(service: &Service, minute: u32, free: &'static str) {
    let before = stored_watch(service).await;
    let hinder = "CREATE TRIGGER hindrance BEFORE INSERT ON results
                  BEGIN SELECT RAISE(ABORT, 'hindered'); END";
    beside(&service.database, hinder).await;
    let answer = service.post_batch(alarms::batch(minute, 8.0)).await;
    assert!(answer.status().is_server_error(), "{}", answer.status());
    assert_eq!(alarms::alarms(service, "").await.len(), 0);
    assert_eq!(stored_watch(service).await, before);
    let name = format!("m{minute:03}");
    let rows = contents(&service.database).await;
    assert!(rows.iter().any(|row| row.contains(&name)), "not accepted");
    beside(&service.database, free).await;
    let mut health = service.store.health();
    let recovering = health.wait_for(|health| *health == Health::Ready);
    tokio::time::timeout(Duration::from_secs(10), recovering)
        .await
        .expect("in time")
        .expect("a store");
}

/// The watch as it is on disk; the only plant there is.
async fn stored_watch(service: &Service) -> serde_json::Value {
    let options = sqlx::sqlite::SqliteConnectOptions::new().filename(&service.database);
    let mut other = options.connect().await.expect("a connection");
    let frame: Vec<u8> = sqlx::query_scalar("SELECT watch FROM watches")
        .fetch_one(&mut other)
        .await
        .expect("a watch");
    other.close().await.expect("closed");
    let json = zstd::decode_all(&frame[..]).expect("a frame");
    serde_json::from_slice(&json).expect("JSON")
}

/// What was counted for a batch whose result is lost is not built upon.
#[tokio::test]
async fn a_lost_result_is_not_counted() {
    let service = alarms::service().await;
    let mut listener = Listener::new(&service, None).await;
    alarms::reported(&service, 0, 8.0).await;
    assert_eq!(stored_watch(&service).await["candidates"][0]["over"], 1);
    // Lost for good: the service would finish it as soon as it can.
    let free = "BEGIN IMMEDIATE; DELETE FROM pending; DROP TRIGGER hindrance; COMMIT";
    lost(&service, 1, free).await;
    // Whatever had begun to finish it has failed by then.
    tokio::time::sleep(Duration::from_millis(500)).await;
    alarms::reported(&service, 2, 8.0).await;
    assert_eq!(stored_watch(&service).await["candidates"][0]["over"], 2);
    assert_eq!(alarms::alarms(&service, "").await.len(), 0);
    alarms::reported(&service, 3, 8.0).await;
    let alarm = &alarms::alarms(&service, "").await[0];
    assert_eq!(
        (&alarm["batches"], &alarm["raises"]),
        (&json!(3), &json!(1))
    );
    let heard = listener.next().await.expect("an event");
    assert_eq!(
        (heard.kind.as_str(), &heard.data["alarm"]),
        ("raised", alarm)
    );
}

/// Nor is an alarm raised in memory alone: it rises with the batch when the
/// service has finished that, once.
#[tokio::test]
async fn a_lost_alarm_rises_when_its_batch_is_finished() {
    let service = alarms::service().await;
    let mut listener = Listener::new(&service, None).await;
    for minute in 0..2 {
        alarms::reported(&service, minute, 8.0).await;
    }
    lost(&service, 2, "DROP TRIGGER hindrance").await;
    service.report("m002").await;
    alarms::reported(&service, 2, 8.0).await;
    let alarm = &alarms::alarms(&service, "").await[0];
    assert_eq!(alarm["last"]["batch"], "m002");
    assert_eq!(
        (&alarm["batches"], &alarm["accusation"]),
        (&json!(3), &json!(1))
    );
    assert_eq!(listener.next().await.expect("an event").kind, "raised");
    let act = json!({"by": "R. Moss"});
    service.done(&alarms::act(1, "acknowledge"), &act).await;
    let next = listener.next().await.expect("an event");
    assert_eq!(next.kind, "acknowledged", "nothing is told twice");
}

/// A plant whose watch cannot be read does not hold up the shelvings of others.
#[tokio::test]
async fn an_unreadable_watch_is_the_trouble_of_its_own_plant() {
    let directory = tempfile::tempdir().expect("a directory");
    let database = directory.path().join("test.sqlite");
    let until = NOW + Duration::from_secs(3600);
    {
        let mut service = alarms::at(Some(&database)).await;
        let id = alarms::raise(&service, 0).await;
        let shelve = json!({"by": "R. Moss", "until": "2031-04-02T13:00:00Z"});
        service.done(&alarms::act(id, "shelve"), &shelve).await;
        // Plants are gone through in no order: one of many is likely to be first.
        for n in 0..8 {
            let name = format!("other-{n}");
            let file = PLANT.replace("plant = \"mixer\"", &format!("plant = \"{name}\""));
            service.put_plant_file(&name, &file).await;
        }
        service.stop().expect("an orderly end");
    }
    beside(
        &database,
        "INSERT INTO watches (plant_id, watch)
         SELECT id, x'28b52ffd' FROM plants WHERE name LIKE 'other-%'",
    )
    .await;
    let service = alarms::at(Some(&database)).await;
    let answer = service.get("/v1/plants/other-0/alarms").await;
    problem(answer, StatusCode::INTERNAL_SERVER_ERROR).await;
    let mut listener = Listener::new(&service, None).await;
    service.clock.set(until);
    assert_eq!(listener.next().await.expect("an event").kind, "unshelved");
}
