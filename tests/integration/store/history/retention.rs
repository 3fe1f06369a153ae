//! What retention removes, and what it never does.

use super::super::readings::{added, at, sample, samples, tag};
use super::{
    DAY, assert_same, everything, finished, later, means_of, redone, result, series_of, tidied,
};
use super::{accepted, incoming, on_every_store, plant, sqlite};
use crate::harness::NOW;
use counterpoise::plant::Retention;
use counterpoise::report::Verdict;
use counterpoise::store::{
    Acceptance, AccusationRow, BatchQuery, Field, NewFieldReading, Resolution, SqliteOptions,
    SqliteStore, Store, Stored, Watched,
};
use sqlx::ConnectOptions;
use sqlx::sqlite::SqliteConnectOptions;
use std::sync::Arc;
use time::Duration;

/// Ten days with a batch every four hours.
async fn ten_days(store: &dyn Store) {
    store.put_plant(plant("p", "{}")).await.expect("put");
    for at in 0..60 {
        finished(store, &format!("b{at}"), at * 240, at).await;
    }
}

/// Reports of the days before the sixth go.
const KEPT: Option<Duration> = Some(Duration::days(25));

#[tokio::test]
async fn old_reports_go_and_names_verdicts_and_means_stay() {
    on_every_store(async |store| {
        ten_days(store).await;
        redone(store, "b1", 240, 9).await;
        let hourly = means_of(store, Resolution::Hourly, 1000).await;
        let daily = means_of(store, Resolution::Daily, 1000).await;
        let done = tidied(store, later(), KEPT).await;
        // From noon of the first day to the midnight after the fifth day.
        assert_eq!((done.batches, done.removed), (60, 3 + 4 * 6));
        let Some(Stored::Removed(gone)) = store.batch("p", "b1").await.expect("read") else {
            panic!("it is still there");
        };
        assert_eq!((gone.at, gone.verdict), (later(), Verdict::Consistent));
        assert_eq!(store.inbox("p", "b1").await.expect("read"), None);
        assert_eq!(store.version("p", "b1", 1).await.expect("read"), None);
        assert_eq!(store.version("p", "b1", 2).await.expect("read"), None);
        assert_eq!(store.versions("p", "b1").await.expect("read").len(), 2);
        let again = store.accept(incoming("p", "b1", 240, 1)).await.expect("ok");
        assert!(matches!(again, Acceptance::Known(_)), "{again:?}");
        let other = store.accept(incoming("p", "b1", 240, 2)).await.expect("ok");
        assert_eq!(other, Acceptance::Conflict);
        let list = BatchQuery {
            plant: "p".to_owned(),
            from: None,
            to: None,
            verdict: None,
            after: None,
            limit: 1000,
        };
        let list = store.batches(list).await.expect("a list").items;
        assert_eq!(list.len(), 60);
        assert!(list.iter().all(|line| line.verdict.is_some()));
        let kept = store.batch("p", "b59").await.expect("read");
        assert!(matches!(kept, Some(Stored::Done(_))));
        let series = store.series(series_of(Field::Measured, None, 1000)).await;
        let series = series.expect("a page");
        assert_eq!(series.rows.len(), 33, "what has no numbers is left out");
        assert_eq!(means_of(store, Resolution::Hourly, 1000).await, hourly);
        assert_eq!(means_of(store, Resolution::Daily, 1000).await, daily);
        assert_eq!(tidied(store, later(), KEPT).await.removed, 0);
    })
    .await;
}

#[tokio::test]
async fn old_samples_go_but_for_the_newest_of_a_tag_and_what_is_waited_for() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        let day = 86_400;
        let old: Vec<_> = (0..5000).map(|n| sample(n, n as f64)).collect();
        let slow = [sample(7, 1.0)];
        let new = [sample(20 * day, 2.0)];
        let both: Vec<_> = old.iter().chain(&new).cloned().collect();
        added(
            store,
            samples(vec![tag("F-1", 0, &both), tag("Z-1", 0, &slow)]),
        )
        .await;
        let held = |now| async move {
            let retention = Retention {
                samples: Some(Duration::days(10)),
                reports: None,
            };
            let mut removed = 0;
            loop {
                let turn = store.tidy(now, vec![("p".to_owned(), retention)]).await;
                let turn = turn.expect("tidied");
                removed += turn.removed;
                if !turn.more {
                    return removed;
                }
            }
        };
        let now = at(20 * day + 60);
        assert_eq!(held(now).await, 0, "open periods need them");
        let periods = store.open_periods("p", at(30 * day), 10_000).await;
        for period in periods.expect("read") {
            store.drop_period(period).await.expect("dropped");
        }
        assert_eq!(held(now).await, 5000);
        let left = store
            .samples("p", at(0), at(30 * day), Duration::days(1))
            .await;
        let left: Vec<_> = left
            .expect("read")
            .into_iter()
            .map(|t| (t.tag, t.samples))
            .collect();
        let expected = [
            ("F-1".to_owned(), new.to_vec()),
            ("Z-1".to_owned(), slow.to_vec()),
        ];
        assert_eq!(left, expected);
    })
    .await;
}

#[tokio::test]
async fn nothing_is_removed_unless_the_plant_says_so() {
    on_every_store(async |store| {
        ten_days(store).await;
        let before = everything(store).await;
        let done = tidied(store, NOW + Duration::days(40_000), None).await;
        assert_eq!(done.removed, 0);
        assert_same(&everything(store).await, &before);
    })
    .await;
}

#[tokio::test]
async fn what_is_not_settled_is_never_removed() {
    on_every_store(async |store| {
        ten_days(store).await;
        let unfinished = accepted(store, incoming("p", "unfinished", 7, 1)).await;
        let reading = NewFieldReading {
            json: "{}".to_owned(),
            by: "R. Moss".to_owned(),
            at: NOW,
            deed: None,
        };
        let kept = store.add_field_reading("p", "b2", reading).await;
        assert!(kept.expect("kept").is_some());
        let accusation = |open| Watched {
            watch: "{}".to_owned(),
            accusations: vec![AccusationRow {
                id: 1,
                open,
                json: r#"{"opened_batch": "b4", "last_batch": "b6"}"#.to_owned(),
            }],
            ..Watched::default()
        };
        let changed = store.change_watch("p", accusation(true)).await;
        assert!(changed.expect("kept").is_some());
        let done = tidied(store, later(), KEPT).await;
        assert_eq!(done.removed, 27 - 1 - 3);
        for name in ["b2", "b4", "b5", "b6"] {
            let stored = store.batch("p", name).await.expect("read");
            assert!(matches!(stored, Some(Stored::Done(_))), "{name}");
        }
        let left = store.unfinished(0, 10).await.expect("read");
        assert_eq!(left.len(), 1);
        // When nothing holds them any more they go, and what was late is seen.
        let report = Arc::new(result(&unfinished, 7, 70));
        let kept = store.finish(unfinished, report, None).await;
        assert!(kept.expect("kept").is_some());
        let changed = store.change_watch("p", accusation(false)).await;
        assert!(changed.expect("kept").is_some());
        let done = tidied(store, later(), KEPT).await;
        assert_eq!(done.removed, 3 + 1);
        let stored = store.batch("p", "b2").await.expect("read");
        assert!(
            matches!(stored, Some(Stored::Done(_))),
            "it has a field reading"
        );
    })
    .await;
}

#[tokio::test]
async fn what_comes_for_a_day_that_is_gone_is_kept_and_leaves_the_means() {
    on_every_store(async |store| {
        ten_days(store).await;
        tidied(store, later(), KEPT).await;
        let means = means_of(store, Resolution::Daily, 1000).await;
        finished(store, "late", DAY + 1, 33).await;
        for tidy in [false, true] {
            if tidy {
                assert_eq!(tidied(store, later(), None).await.batches, 1);
            }
            let page = store.series(series_of(Field::Measured, None, 1000)).await;
            let rows = page.expect("a page").rows;
            assert_eq!((rows.len(), &rows[0].batch[..]), (34, "late"));
            assert_eq!(means_of(store, Resolution::Daily, 1000).await, means);
        }
        assert_eq!(tidied(store, later(), KEPT).await.removed, 1);
        assert_eq!(means_of(store, Resolution::Daily, 1000).await, means);
    })
    .await;
}

fn noise(seed: u64) -> Vec<u8> {
    let mut state = seed;
    let bytes = (0..2500).flat_map(|_| {
        state = state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mixed = (state ^ (state >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        (mixed ^ (mixed >> 27)).to_le_bytes()
    });
    bytes.collect()
}

#[tokio::test]
async fn space_is_given_back() {
    let (directory, store) = sqlite().await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    for at in 0..400u32 {
        let ticket = accepted(
            &store,
            counterpoise::store::Incoming {
                // Nothing that compresses.
                body: noise(u64::from(at)),
                ..incoming("p", &format!("b{at}"), i64::from(at) * 20, 1)
            },
        )
        .await;
        let report = Arc::new(result(&ticket, i64::from(at) * 20, i64::from(at)));
        store.finish(ticket, report, None).await.expect("finished");
    }
    let done = tidied(&store, later(), Some(Duration::days(20))).await;
    assert_eq!(done.removed, 400);
    assert!(done.freed > 4 << 20, "{done:?}");
    store.close().await.expect("closed");
    let path = directory.path().join("test.sqlite");
    let size = std::fs::metadata(&path).expect("a file").len();
    assert!(size < 4 << 20, "{size} bytes are left");
    let mut connection = SqliteConnectOptions::new()
        .filename(&path)
        .connect()
        .await
        .expect("a database");
    let sound: String = sqlx::query_scalar("PRAGMA integrity_check")
        .fetch_one(&mut connection)
        .await
        .expect("an answer");
    assert_eq!(sound, "ok");
    drop(connection);
    let options = SqliteOptions::new(&path);
    let store = SqliteStore::open(options).await.expect("a store");
    let stored = store.batch("p", "b7").await.expect("read");
    assert!(matches!(stored, Some(Stored::Removed(_))));
    store.close().await.expect("closed");
    let held = counterpoise::store::verify(&path).await.expect("sound");
    assert_eq!((held.batches, held.unfinished), (400, 0));
}
