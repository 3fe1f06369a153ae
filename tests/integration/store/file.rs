//! What can be seen only with the file in hand: restarts, refused writes, a full
//! queue, and the traces of what was changed.

use super::watch::{accusation, watched};
use super::{accepted, incoming, plant, report};
use counterpoise::store::{
    Health, Hindrance, SqliteOptions, SqliteStore, Store, StoreError, Stored, Watched,
};
use sqlx::ConnectOptions;
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection};
use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

fn options(path: &Path) -> SqliteOptions {
    SqliteOptions {
        retry: Duration::from_millis(20),
        ..SqliteOptions::new(path)
    }
}

pub async fn open(path: &Path) -> SqliteStore {
    SqliteStore::open(options(path)).await.expect("a store")
}

async fn beside(path: &Path) -> SqliteConnection {
    let options = SqliteConnectOptions::new().filename(path);
    options.connect().await.expect("a connection")
}

#[tokio::test]
async fn numbers_of_events_go_on_after_a_restart_and_never_come_twice() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("test.sqlite");
    let store = open(&path).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    let kept = store.change_watch("p", watched("before", &["one", "two"]));
    let before = kept.await.expect("kept").expect("a plant");
    store.close().await.expect("closed");

    // Nothing of ours deletes; a person with the file may.
    sqlx::query("DELETE FROM events")
        .execute(&mut beside(&path).await)
        .await
        .expect("deleted");
    let store = open(&path).await;
    assert_eq!(
        store.watch("p").await.expect("read").as_deref(),
        Some("before")
    );
    assert_eq!(store.events("p", 0, 10).await.expect("read"), []);
    let kept = store.change_watch("p", watched("after", &["three"]));
    let after = kept.await.expect("kept").expect("a plant");
    assert!(after[0] > before[1], "{before:?} {after:?}");
    store.close().await.expect("closed");
}

#[tokio::test]
async fn a_refused_write_keeps_neither_result_nor_look() {
    let directory = tempfile::tempdir().expect("a directory");
    let store = open(&directory.path().join("test.sqlite")).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    let ticket = accepted(&store, incoming("p", "b", 0, 1)).await;
    let read_only = Hindrance {
        read_only: true,
        ..Hindrance::default()
    };
    store.hinder(read_only).await.expect("hindered");
    let result = Arc::new(report(&ticket, 0, 1.0, "t/h"));
    let look = watched("a look", &["one"]);
    let finish = || store.finish(ticket.clone(), Arc::clone(&result), Some(look.clone()));
    let refused = finish().await.expect_err("a refusal");
    assert!(matches!(refused, StoreError::Unavailable(_)), "{refused:?}");
    store.hinder(Hindrance::default()).await.expect("freed");
    let mut health = store.health();
    let ready = health.wait_for(|health| *health == Health::Ready);
    let ready = tokio::time::timeout(Duration::from_secs(10), ready).await;
    assert_eq!(*ready.expect("in time").expect("a store"), Health::Ready);
    let pending = store.batch("p", "b").await.expect("read");
    assert_eq!(pending, Some(Stored::Pending(ticket.clone())));
    assert_eq!(store.watch("p").await.expect("read"), None);
    assert_eq!(store.events("p", 0, 10).await.expect("read"), []);

    let again = finish().await.expect("kept").expect("the first result");
    assert_eq!(again.len(), 1);
    assert_eq!(
        store.watch("p").await.expect("read").as_deref(),
        Some("a look")
    );
    store.close().await.expect("closed");
}

/// Where no batch finds a place any more, what was accepted is finished.
#[tokio::test]
async fn a_full_queue_refuses_batches_and_lets_results_in() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("test.sqlite");
    let store = open(&path).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    let ticket = accepted(&store, incoming("p", "b", 0, 1)).await;
    store.close().await.expect("closed");
    let full = SqliteOptions {
        queue: 0,
        ..options(&path)
    };
    let store = SqliteStore::open(full).await.expect("a store");
    let refused = store.accept(incoming("p", "c", 1, 1)).await;
    assert!(
        matches!(refused, Err(StoreError::Overloaded)),
        "{refused:?}"
    );
    let result = Arc::new(report(&ticket, 0, 1.0, "t/h"));
    let finished = store.finish(ticket, result, None).await;
    assert_eq!(finished.expect("finished"), Some(vec![]));
    store.close().await.expect("closed");
}

/// A place is taken while a batch waits for the writer, and given back.
#[tokio::test]
async fn a_place_in_the_queue_is_given_back() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("test.sqlite");
    let one = SqliteOptions {
        queue: 1,
        ..options(&path)
    };
    let store = SqliteStore::open(one).await.expect("a store");
    store.put_plant(plant("p", "{}")).await.expect("put");
    for minute in 0..3 {
        let name = format!("b{minute}");
        accepted(&store, incoming("p", &name, minute, 1)).await;
    }
    let mut other = beside(&path).await;
    sqlx::query("BEGIN IMMEDIATE")
        .execute(&mut other)
        .await
        .expect("locked");
    let waiting = store.change_watch("p", watched("{}", &[]));
    let refused = store.accept(incoming("p", "c", 9, 1)).await;
    assert!(
        matches!(refused, Err(StoreError::Overloaded)),
        "{refused:?}"
    );
    sqlx::query("ROLLBACK")
        .execute(&mut other)
        .await
        .expect("free");
    assert_eq!(waiting.await.expect("kept"), Some(vec![]));
    accepted(&store, incoming("p", "c", 9, 1)).await;
    store.close().await.expect("closed");
}

#[tokio::test]
async fn a_closing_that_is_changed_leaves_a_trace() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("test.sqlite");
    let store = open(&path).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    for (open, json) in [
        (true, "raised"),
        (true, "standing"),
        (false, "refuted"),
        (false, "refuted"),
        (false, "confirmed"),
        (true, "opened again"),
    ] {
        let look = Watched {
            accusations: vec![accusation(1, open, json)],
            ..watched("{}", &[])
        };
        store.change_watch("p", look).await.expect("kept");
    }
    let present = store.accusation("p", 1).await.expect("read");
    assert_eq!(present, Some(accusation(1, true, "opened again")));
    store.close().await.expect("closed");
    let former: Vec<(i64, String)> =
        sqlx::query_as("SELECT accusation_id, accusation FROM former_closings ORDER BY id")
            .fetch_all(&mut beside(&path).await)
            .await
            .expect("rows");
    let expected = ["refuted", "confirmed"].map(|json| (1, json.to_owned()));
    assert_eq!(former, expected);
}

#[tokio::test]
async fn an_end_that_is_changed_leaves_a_trace() {
    use crate::harness::NOW;
    use counterpoise::plant::Action;
    use counterpoise::store::{Ended, NewByHand};

    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("test.sqlite");
    let store = open(&path).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    let new = NewByHand {
        tag: "F-1".to_owned(),
        action: Action::OutOfService,
        from: NOW,
        until: None,
        reason: "a reason".to_owned(),
        by: "R. Engineer".to_owned(),
        entered: NOW,
        deed: None,
    };
    let row = store.add_by_hand("p", new).await.expect("kept");
    let id = row.expect("a plant").decision.id;
    for by in ["first", "second"] {
        let ended = Ended {
            by: by.to_owned(),
            at: NOW,
            deed: None,
        };
        store.end_by_hand("p", id, NOW, ended).await.expect("kept");
    }
    store.close().await.expect("closed");
    let mut beside = beside(&path).await;
    let ends: Vec<String> = sqlx::query_scalar("SELECT who FROM by_hand_ends ORDER BY id")
        .fetch_all(&mut beside)
        .await
        .expect("rows");
    assert_eq!(ends, ["first", "second"]);
    let until: Option<i64> = sqlx::query_scalar("SELECT until_ns FROM by_hand")
        .fetch_one(&mut beside)
        .await
        .expect("a row");
    assert_eq!(until, None, "as it was entered");
}
