//! Samples, periods and backfills with the file in hand: restarts, refused
//! writes, a full queue.

use super::bodies::waiting;
use super::plant;
use super::readings::{added, at, closed, open, open_minutes, sample, samples, tag};
use super::{file, report};
use crate::harness::{NOW, contents};
use counterpoise::store::{
    Backfill, BackfillMark, Closed, Health, Hindrance, NewSamples, ReadingsStore, SqliteOptions,
    SqliteStore, Store, StoreError,
};
use std::sync::Arc;
use std::time::Duration;

fn mark(bytes: u64, refused: u64) -> BackfillMark {
    BackfillMark {
        name: "a year".to_owned(),
        bytes,
        lines: bytes / 10,
        refused,
        header: (bytes < 200).then(|| "tag,time,value".to_owned()),
    }
}

fn block(from: i64, mark: BackfillMark) -> NewSamples {
    let values: Vec<_> = (from..from + 50).map(|n| sample(n * 20, 1.0)).collect();
    NewSamples {
        backfill: Some(mark),
        received: NOW + time::Duration::minutes(from),
        ..samples(vec![tag("F-1", 0, &values)])
    }
}

async fn backfill(store: &dyn Store) -> Option<Backfill> {
    store.backfill("p", "a year").await.expect("read")
}

#[tokio::test]
async fn a_restart_goes_on_where_the_end_left_off() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("test.sqlite");
    let store = file::open(&path).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    let three = [sample(1, 1.0), sample(61, 1.0), sample(121, 1.0)];
    added(&store, samples(vec![tag("F-1", 0, &three)])).await;
    let periods = open(&store).await;
    let mut tickets = Vec::new();
    for period in &periods[..2] {
        match closed(&store, period, 1).await {
            Closed::New(ticket) => tickets.push(ticket),
            other => panic!("{other:?}"),
        }
    }
    let result = Arc::new(report(&tickets[0], 0, 1.0, "t/h"));
    let finished = store.finish(tickets[0].clone(), result, None).await;
    finished.expect("finished");
    for (second, digest) in [(2, 2), (62, 2)] {
        added(&store, samples(vec![tag("F-1", 0, &[sample(second, 2.0)])])).await;
        let period = open(&store).await.remove(0);
        let closed = closed(&store, &period, digest).await;
        assert!(matches!(closed, Closed::Changed(_)), "{closed:?}");
    }
    added(&store, block(100, mark(100, 3))).await;
    let left = (open(&store).await, backfill(&store).await);
    let expected = [(tickets[0].id, 2, true), (tickets[1].id, 2, false)];
    assert_eq!(waiting(&store).await, expected);
    store.close().await.expect("closed");

    let store = file::open(&path).await;
    assert_eq!((open(&store).await, backfill(&store).await), left);
    assert_eq!(waiting(&store).await, expected);
    let unfinished = store.unfinished(0, 10).await.expect("read");
    assert_eq!(unfinished[0].body, b"body 2 of minute 0");
    assert_eq!(unfinished[1].body, b"body 2 of minute 1");
    let after = store.unfinished(tickets[0].id, 10).await.expect("read");
    assert_eq!(after, unfinished[1..]);
    let one = store.unfinished(0, 1).await.expect("read");
    assert_eq!(one, unfinished[..1]);
    let known = added(&store, samples(vec![tag("F-1", 0, &three)])).await;
    assert_eq!((known.new, known.known), (0, 3));
    assert_eq!(open(&store).await, left.0);
    added(&store, samples(vec![tag("F-1", 0, &[sample(122, 1.0)])])).await;
    let newest = left.0.iter().map(|period| period.generation).max();
    let grown = open(&store).await[0].generation;
    assert!(Some(grown) > newest, "generations go on");
    store.close().await.expect("closed");
}

#[tokio::test]
async fn a_mark_goes_on_with_its_samples_and_never_back() {
    let directory = tempfile::tempdir().expect("a directory");
    let store = file::open(&directory.path().join("test.sqlite")).await;
    assert_eq!(
        store
            .begin_backfill("p", "a year", NOW, None)
            .await
            .expect("done"),
        None
    );
    store.put_plant(plant("p", "{}")).await.expect("put");
    let begun = store.begin_backfill("p", "a year", NOW, None).await;
    let expected = Backfill {
        mark: BackfillMark {
            header: None,
            ..mark(0, 0)
        },
        begun: NOW,
        touched: NOW,
        complete: false,
        new: 0,
        periods_open: 0,
    };
    assert_eq!(begun.expect("kept"), Some(expected.clone()));
    added(&store, block(0, mark(100, 3))).await;
    added(&store, block(40, mark(200, 5))).await;
    added(&store, block(0, mark(100, 3))).await;
    let only_mark = NewSamples {
        backfill: Some(mark(300, 9)),
        received: NOW + time::Duration::hours(2),
        ..samples(vec![])
    };
    assert_eq!(added(&store, only_mark).await, Default::default());
    let header = Some("tag,time,value".to_owned());
    let come = Backfill {
        mark: BackfillMark {
            header,
            ..mark(300, 9)
        },
        touched: NOW + time::Duration::hours(2),
        new: 90,
        periods_open: 30,
        ..expected.clone()
    };
    assert_eq!(backfill(&store).await, Some(come.clone()));
    let again = store.begin_backfill("p", "a year", at(9), None).await;
    assert_eq!(again.expect("done"), Some(come.clone()), "it is known");
    // A live sample makes its period a live one.
    added(&store, samples(vec![tag("F-1", 0, &[sample(1, 1.0)])])).await;
    store
        .drop_period(open(&store).await.remove(1))
        .await
        .expect("done");
    let end = NOW + time::Duration::hours(3);
    store.end_backfill("p", "a year", end).await.expect("kept");
    let ended = Backfill {
        complete: true,
        touched: end,
        periods_open: 28,
        ..come
    };
    assert_eq!(backfill(&store).await, Some(ended.clone()));
    for name in ["b", "c"] {
        let begun = store.begin_backfill("p", name, NOW, None).await;
        begun.expect("kept").expect("a plant");
    }
    let names = async |after, limit| -> Vec<String> {
        let list = store.backfills("p", after, limit).await.expect("read");
        list.into_iter()
            .map(|backfill| backfill.mark.name)
            .collect()
    };
    assert_eq!(names(None, 10).await, ["a year", "b", "c"]);
    assert_eq!(names(Some("a year"), 1).await, ["b"]);
    assert_eq!(store.backfill("q", "b").await.expect("read"), None);
    assert_eq!(store.backfill("p", "d").await.expect("read"), None);
    store.close().await.expect("closed");
}

/// A disk that is full in the middle of a call keeps nothing of it: no sample,
/// no period, no mark, no batch.
#[tokio::test]
async fn a_full_disk_leaves_nothing_half_done() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("test.sqlite");
    let store = file::open(&path).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    added(&store, block(0, mark(10, 0))).await;
    let period = open(&store).await.remove(0);
    let before = contents(&path).await;
    let full = Hindrance {
        max_pages: Some(1),
        ..Hindrance::default()
    };
    store.hinder(full).await.expect("hindered");
    let many: Vec<_> = (0..20_000).map(|n| sample(n, 2.0)).collect();
    let large = NewSamples {
        backfill: Some(mark(500, 1)),
        ..samples(vec![tag("F-2", 0, &many)])
    };
    let refused = store.add_samples(large.clone()).await.expect_err("full");
    assert!(
        matches!(&refused, StoreError::Unavailable(why) if why.contains("full")),
        "{refused:?}"
    );
    let mut batch = super::readings::batch_of(&period, 1);
    let mut seed = 1u32;
    batch.incoming.body = std::iter::repeat_with(|| {
        seed = seed.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
        seed.to_be_bytes()[0]
    })
    .take(200_000)
    .collect();
    let refused = store.close_period(batch.clone()).await.expect_err("full");
    assert!(matches!(refused, StoreError::Unavailable(_)), "{refused:?}");
    let starts = |rows: Vec<String>| -> Vec<String> {
        rows.into_iter()
            .filter(|row| !row.starts_with("starts"))
            .collect()
    };
    assert_eq!(starts(contents(&path).await), starts(before));

    store.hinder(Hindrance::default()).await.expect("freed");
    let mut health = store.health();
    let ready = health.wait_for(|health| *health == Health::Ready);
    let ready = tokio::time::timeout(Duration::from_secs(10), ready).await;
    assert_eq!(*ready.expect("in time").expect("a store"), Health::Ready);
    let closed = store.close_period(batch).await.expect("closed");
    assert!(matches!(closed, Closed::New(_)), "{closed:?}");
    assert_eq!(added(&store, large).await.new, 20_000);
    assert_eq!(
        backfill(&store).await.map(|backfill| backfill.mark.bytes),
        Some(500)
    );
    store.close().await.expect("closed");
}

#[tokio::test]
async fn a_full_queue_refuses_samples_and_lets_periods_close() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("test.sqlite");
    let store = file::open(&path).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    added(&store, samples(vec![tag("F-1", 0, &[sample(1, 1.0)])])).await;
    store.close().await.expect("closed");
    let full = SqliteOptions {
        queue: 0,
        ..SqliteOptions::new(&path)
    };
    let store = SqliteStore::open(full).await.expect("a store");
    let refused = store.add_samples(samples(vec![tag("F-1", 0, &[sample(2, 1.0)])]));
    let refused = refused.await;
    assert!(
        matches!(refused, Err(StoreError::Overloaded)),
        "{refused:?}"
    );
    let period = open(&store).await.remove(0);
    let closed = closed(&store, &period, 1).await;
    assert!(matches!(closed, Closed::New(_)), "{closed:?}");
    assert_eq!(open_minutes(&store).await, [0; 0]);
    store.close().await.expect("closed");
}

/// A batch that only a backfill brought says so until it is finished, unless a
/// live sample has its part in it.
#[tokio::test]
async fn a_batch_of_a_backfill_says_so() {
    let directory = tempfile::tempdir().expect("a directory");
    let store = file::open(&directory.path().join("test.sqlite")).await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    let backfilled = |second| NewSamples {
        backfill: Some(mark(10, 0)),
        ..samples(vec![tag("F-1", 0, &[sample(second, 1.0)])])
    };
    let live = |second| samples(vec![tag("F-1", 0, &[sample(second, 1.0)])]);
    let close = async |digest| {
        let period = open(&store).await.remove(0);
        closed(&store, &period, digest).await
    };
    let flags = async || -> Vec<bool> {
        let unfinished = store.unfinished(0, 10).await.expect("read").into_iter();
        unfinished.map(|one| one.backfill).collect()
    };
    added(&store, backfilled(1)).await;
    let Closed::New(ticket) = close(1).await else {
        panic!("not new");
    };
    assert_eq!(flags().await, [true]);
    added(&store, live(2)).await;
    close(2).await;
    assert_eq!(flags().await, [false]);
    added(&store, backfilled(3)).await;
    close(3).await;
    assert_eq!(flags().await, [false], "the live sample is in it still");
    let result = Arc::new(report(&ticket, 0, 1.0, "t/h"));
    let kept = store
        .finish(ticket.clone(), Arc::clone(&result), None)
        .await;
    assert_eq!(kept.expect("kept"), Some(vec![]));
    assert_eq!(flags().await, [false], "of an older body");
    let newest = counterpoise::store::Ticket { body: 3, ..ticket };
    let again = counterpoise::store::Again {
        at: NOW,
        by: "late readings".to_owned(),
        reason: "samples came".to_owned(),
        deed: None,
    };
    let made = store.finish_again(newest, result, again).await;
    assert_eq!(made.expect("kept"), Some(2));
    added(&store, backfilled(4)).await;
    close(4).await;
    assert_eq!(flags().await, [true]);
    let found = store
        .inbox("p", "minute 0")
        .await
        .expect("read")
        .expect("a batch");
    assert!(found.backfill && found.again && found.pending);
    store.close().await.expect("closed");
}
