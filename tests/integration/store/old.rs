//! Databases of older versions open, and what they hold can be read and built
//! upon.

use super::watch::watched;
use super::{accepted, incoming, report};
use crate::harness::NOW;
use counterpoise::report::Verdict;
use counterpoise::store::{
    Again, Field, HistoryStore, Selector, SeriesQuery, SqliteOptions, SqliteStore, Store, Stored,
};
use sha2::{Digest, Sha256};
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection};
use sqlx::{ConnectOptions, Connection};
use std::path::Path;
use std::sync::Arc;

/// Migrations that have been merged, with their SHA-256: none may ever change,
/// or no database that has it opens any more. One joins the list when it is merged.
const MERGED: &[(&str, &str)] = &[(
    include_str!("../../../migrations/0001_start.sql"),
    "05b17a62ebf34d3bd93a28d3ae7a65ff320db048ae14440afba16047a6b1a2a1",
)];

/// A report as version 1 wrote it: without suspects, limits, decisions by hand
/// and the distance within which suspects are not told apart.
const REPORT: &str = r#"{
    "plant": "p", "revision": 1, "batch": "old",
    "start": "2031-04-02T10:00:00Z", "end": "2031-04-02T10:01:00Z",
    "verdict": "inconsistent",
    "global_test": {"statistic": 8.25, "degrees_of_freedom": 2, "critical_value": 5.991, "p_value": 0.016, "confidence": 0.95},
    "single_test": {"critical_value": 2.9, "method": "simulated", "statistics": 3, "class_set": "all"},
    "tags": {"F-1": {"measured": 100.0, "reconciled": 99.5, "adjustment": -0.5, "unit": "t/h",
        "uncertainty_measured": 1.0, "uncertainty_reconciled": 0.7, "redundancy": 0.5,
        "standardised_adjustment": -1.4, "detectable": 5.3, "class": "redundant"}},
    "assumptions": {}, "streams": {}, "equipment": {}, "ignored_tags": [], "remarks": ["an old remark"]}"#;

const CHANNELS: &str = r#"[{"name":"F-1","unit":"t/h","kind":"tag"}]"#;

const NUMBERS: [f64; 7] = [100.0, 99.5, -0.5, 1.0, 0.7, 0.5, -1.4];

fn frame(text: &str) -> Vec<u8> {
    zstd::encode_all(text.as_bytes(), 1).expect("a frame")
}

/// A database of version 1 with a plant, a finished batch and one that is not.
async fn version_1(path: &Path) {
    let options = SqliteConnectOptions::new().filename(path);
    let options = options.create_if_missing(true).foreign_keys(true);
    let mut connection = options.connect().await.expect("a database");
    let migrations = sqlx::migrate!("./migrations");
    migrations
        .run_to(1, &mut connection)
        .await
        .expect("migrated");
    let applied = count(&mut connection, "_sqlx_migrations").await;
    assert_eq!(applied, 1, "version 1 and no other");
    sqlx::raw_sql(
        "INSERT INTO plants (id, name) VALUES (1, 'p');
         INSERT INTO revisions VALUES (1, 1, 'Old', x'00', 'application/json', '{}', '{}', 1);",
    )
    .execute(&mut connection)
    .await
    .expect("a plant");
    for (id, batch) in [(1, "old"), (2, "left")] {
        sqlx::query(
            "INSERT INTO inbox (id, plant_id, batch, revision, digest, start_ns, end_ns, received_ns, body)
             VALUES (?1, 1, ?2, 1, ?3, 1932976800000000000, 1932976860000000000, 3, ?4)",
        )
        .bind(id)
        .bind(batch)
        .bind(&[1u8; 32][..])
        .bind(frame(&format!("body of {batch}")))
        .execute(&mut connection)
        .await
        .expect("a batch");
    }
    sqlx::raw_sql("INSERT INTO pending (inbox_id) VALUES (2)")
        .execute(&mut connection)
        .await
        .expect("pending");
    sqlx::query("INSERT INTO layouts (id, digest, channels) VALUES (1, ?1, ?2)")
        .bind(&Sha256::digest(CHANNELS)[..])
        .bind(frame(CHANNELS))
        .execute(&mut connection)
        .await
        .expect("a layout");
    let numbers: Vec<u8> = NUMBERS.iter().flat_map(|n| n.to_le_bytes()).collect();
    sqlx::query("INSERT INTO results VALUES (1, 'inconsistent', 8.25, 2, 1, ?1, ?2)")
        .bind(numbers)
        .bind(frame(REPORT))
        .execute(&mut connection)
        .await
        .expect("a result");
    sqlx::query("INSERT INTO critical_values VALUES (1, 1, 'all', ?1)")
        .bind(r#"{"critical_value":2.9,"method":"simulated","statistics":3,"class_set":"all"}"#)
        .execute(&mut connection)
        .await
        .expect("a critical value");
    connection.close().await.expect("closed");
}

async fn count(connection: &mut SqliteConnection, table: &str) -> i64 {
    let statement = sqlx::AssertSqlSafe(format!("SELECT COUNT(*) FROM {table}"));
    sqlx::query_scalar(statement)
        .fetch_one(connection)
        .await
        .expect("a count")
}

#[test]
fn merged_migrations_are_as_they_were() {
    for (text, digest) in MERGED {
        let hexadecimal: String = Sha256::digest(text)
            .iter()
            .map(|byte| format!("{byte:02x}"))
            .collect();
        assert_eq!(hexadecimal, *digest, "{}", &text[..60]);
    }
}

#[tokio::test]
async fn a_database_of_version_1_opens_and_is_readable() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("old.sqlite");
    version_1(&path).await;
    for opened in ["first", "second"] {
        let store = SqliteStore::open(SqliteOptions::new(&path)).await;
        let store = store.expect(opened);
        let Some(Stored::Done(report)) = store.batch("p", "old").await.expect("read") else {
            panic!("no report");
        };
        assert_eq!(report.verdict, Verdict::Inconsistent);
        assert_eq!(report.tags["F-1"].reconciled, Some(99.5));
        assert_eq!(report.remarks, ["an old remark"]);
        assert!(report.suspects.is_empty() && report.limits.is_empty());
        assert!(report.after_suspects.is_none() && report.by_hand.is_empty());
        assert_eq!(
            report.single_test.map(|test| test.group_distance),
            Some(0.0)
        );
        let kept = store.critical_values("p", 1).await.expect("read");
        assert_eq!(kept.len(), 1);
        assert_eq!((kept[0].critical_value, kept[0].group_distance), (2.9, 0.0));
        let left = store.unfinished(0, 10).await.expect("read");
        assert_eq!(left.len(), 1);
        assert_eq!(
            (left[0].ticket.id, &left[0].body[..]),
            (2, &b"body of left"[..])
        );
        let versions = store.versions("p", "old").await.expect("read");
        assert_eq!(versions.len(), 1);
        assert_eq!((versions[0].version, &versions[0].again), (1, &None));
        assert_eq!(store.watch("p").await.expect("read"), None);
        assert_eq!(store.events("p", 0, 10).await.expect("read"), []);
        store.close().await.expect("closed");
    }
}

#[tokio::test]
async fn a_database_of_version_1_goes_on() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("old.sqlite");
    version_1(&path).await;
    let store = SqliteStore::open(SqliteOptions::new(&path)).await;
    let store = store.expect("a store");
    let old = store.inbox("p", "old").await.expect("read");
    let old = old.expect("a batch");
    assert_eq!(old.body, b"body of old");
    let again = Again {
        at: NOW,
        by: "R. Engineer".to_owned(),
        reason: "suspects are looked for now".to_owned(),
        deed: None,
    };
    let new = Arc::new(report(&old.ticket, 0, 4.5, "t/h"));
    let made = store.finish_again(old.ticket, Arc::clone(&new), again);
    assert_eq!(made.await.expect("kept"), Some(2));
    let former = store.version("p", "old", 1).await.expect("read");
    let former = former.expect("the old report");
    assert_eq!(former.tags["F-1"].reconciled, Some(99.5));
    let present = store.version("p", "old", 2).await.expect("read");
    assert_eq!(present.as_ref(), Some(&*new));

    let ticket = accepted(&store, incoming("p", "new", 0, 1)).await;
    assert_eq!(ticket.id, 3);
    let result = Arc::new(report(&ticket, 0, 5.5, "t/h"));
    let ids = store.finish(ticket, result, Some(watched("{}", &["one"])));
    assert_eq!(ids.await.expect("kept").map(|ids| ids.len()), Some(1));
    let series = SeriesQuery {
        plant: "p".to_owned(),
        selectors: vec![Selector::Tag("F-1".to_owned())],
        field: Field::Measured,
        from: None,
        to: None,
        after: None,
        limit: 10,
    };
    let page = store.series(series).await.expect("a page");
    let mut values = page.columns[0].values.clone();
    values.sort_by(|a, b| a.partial_cmp(b).expect("numbers"));
    assert_eq!(values, [Some(4.5), Some(5.5)]);
    store.close().await.expect("closed");
}

#[tokio::test]
async fn a_database_of_version_1_is_chunked() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("old.sqlite");
    version_1(&path).await;
    let store = SqliteStore::open(SqliteOptions::new(&path)).await;
    let store = store.expect("a store");
    let series = SeriesQuery {
        plant: "p".to_owned(),
        selectors: vec![Selector::Tag("F-1".to_owned())],
        field: Field::Standardised,
        from: None,
        to: None,
        after: None,
        limit: 10,
    };
    let before = store.series(series.clone()).await.expect("a page");
    assert_eq!(before.columns[0].values, [Some(-1.4)]);
    let mut batches = 0;
    loop {
        let turn = store.tidy(NOW + time::Duration::days(3), Vec::new()).await;
        let turn = turn.expect("tidied");
        batches += turn.batches;
        if !turn.more {
            break;
        }
    }
    assert_eq!(batches, 1, "the other is not finished");
    assert_eq!(store.series(series).await.expect("a page"), before);
    store.close().await.expect("closed");
    let options = SqliteConnectOptions::new().filename(&path);
    let mut connection = options.connect().await.expect("a database");
    let left: i64 = sqlx::query_scalar("SELECT SUM(length(numbers)) FROM results")
        .fetch_one(&mut connection)
        .await
        .expect("a sum");
    assert_eq!((left, count(&mut connection, "hot_numbers").await), (0, 0));
    assert_eq!(count(&mut connection, "chunks").await, 1);
}
