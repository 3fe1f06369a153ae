//! What becomes of results with time: chunks, means, retention.

mod retention;

use super::{accepted, incoming, on_every_store, plant, report, sqlite};
use crate::harness::NOW;
use counterpoise::plant::Retention;
use counterpoise::report::{Report, Verdict};
use counterpoise::store::{
    Again, Cursor, Field, Hindrance, HistoryStore, MeansPage, MeansQuery, Resolution, Selector,
    SeriesPage, SeriesQuery, SqliteOptions, SqliteStore, Store, Tidied,
};
use std::sync::Arc;
use time::{Duration, OffsetDateTime};

/// Minutes of a day.
const DAY: i64 = 24 * 60;

const FIELDS: [Field; 7] = [
    Field::Measured,
    Field::Reconciled,
    Field::Adjustment,
    Field::UncertaintyMeasured,
    Field::Uncertainty,
    Field::Redundancy,
    Field::Standardised,
];

/// Long after every batch of these tests.
fn later() -> OffsetDateTime {
    NOW + Duration::days(30)
}

/// A report with numbers that are no short decimals, and holes.
fn result(ticket: &counterpoise::store::Ticket, minute: i64, seed: i64) -> Report {
    let noise = (seed * 7919 % 1009) as f64 / 1009.0;
    let unit = if seed % 5 == 4 { "kg/s" } else { "t/h" };
    let mut report = report(ticket, minute, 100.0 + noise, unit);
    if seed % 7 == 3 {
        // As where a batch did not converge.
        report.verdict = Verdict::NotConverged;
        for tag in report.tags.values_mut() {
            tag.reconciled = None;
            tag.adjustment = None;
        }
    }
    if seed % 11 == 6 {
        let tag = report.tags.get_mut("F-1").expect("the tag");
        tag.adjustment = Some(-0.0);
        tag.standardised_adjustment = Some(f64::MIN_POSITIVE / 8.0);
    }
    report
}

/// Accepts and finishes a batch that starts at a minute.
async fn finished(store: &dyn Store, name: &str, minute: i64, seed: i64) {
    let ticket = accepted(store, incoming("p", name, minute, 1)).await;
    let report = Arc::new(result(&ticket, minute, seed));
    let kept = store.finish(ticket, report, None).await.expect("finished");
    assert!(kept.is_some());
}

async fn redone(store: &dyn Store, name: &str, minute: i64, seed: i64) {
    let inbox = store.inbox("p", name).await.expect("read");
    let ticket = inbox.expect("a batch").ticket;
    let report = Arc::new(result(&ticket, minute, seed));
    let again = Again {
        at: NOW,
        by: "R. Moss".to_owned(),
        reason: "a better reading".to_owned(),
        deed: None,
    };
    let version = store.finish_again(ticket, report, again).await;
    assert!(version.expect("kept").is_some());
}

/// Three days of batches, from noon to noon, every twenty minutes.
async fn three_days(store: &dyn Store) {
    store.put_plant(plant("p", "{}")).await.expect("put");
    for at in 0..216 {
        finished(store, &format!("b{at}"), at * 20, at).await;
    }
}

fn series_of(field: Field, after: Option<Cursor>, limit: usize) -> SeriesQuery {
    SeriesQuery {
        plant: "p".to_owned(),
        selectors: vec![
            Selector::Tag("F-1".to_owned()),
            Selector::Quantity("first.mass_flow".to_owned()),
            Selector::Quantity("first.temperature".to_owned()),
            Selector::Tag("F-2".to_owned()),
        ],
        field,
        from: None,
        to: None,
        after,
        limit,
    }
}

/// Every page of some series, of every field.
async fn all_series(store: &dyn Store) -> Vec<SeriesPage> {
    let mut pages = Vec::new();
    for field in FIELDS {
        for limit in [10_000, 50, 7] {
            let mut after = None;
            loop {
                let page = store.series(series_of(field, after, limit)).await;
                let page = page.expect("a page");
                after = page.next;
                pages.push(page);
                if after.is_none() {
                    break;
                }
            }
        }
        let part = SeriesQuery {
            from: Some(NOW + Duration::minutes(DAY / 2 + 30)),
            to: Some(NOW + Duration::minutes(2 * DAY)),
            ..series_of(field, None, 1000)
        };
        pages.push(store.series(part).await.expect("a page"));
    }
    pages
}

async fn means_of(store: &dyn Store, resolution: Resolution, limit: usize) -> Vec<MeansPage> {
    let mut pages = Vec::new();
    let mut after = None;
    loop {
        let series = series_of(Field::Reconciled, None, 1);
        let query = MeansQuery {
            plant: "p".to_owned(),
            selectors: series.selectors,
            resolution,
            from: None,
            to: Some(NOW + Duration::days(9)),
            limit,
            after,
        };
        let page = store.means(query).await.expect("a page");
        after = page.next;
        pages.push(page);
        if after.is_none() {
            return pages;
        }
    }
}

/// All that can be asked for, in a form in which no two numbers look alike that
/// are not the same bits.
async fn everything(store: &dyn Store) -> String {
    let series = all_series(store).await;
    let mut means = Vec::new();
    for resolution in [Resolution::Hourly, Resolution::Daily] {
        for limit in [1000, 2] {
            means.push(means_of(store, resolution, limit).await);
        }
    }
    format!("{series:?} {means:?}")
}

/// Of texts too long to be shown: where they part.
fn assert_same(found: &str, expected: &str) {
    let pairs = found.bytes().zip(expected.bytes());
    let same = pairs.take_while(|(a, b)| a == b).count();
    let around = |text: &str| {
        let bytes = &text.as_bytes()[same.saturating_sub(200)..(same + 200).min(text.len())];
        String::from_utf8_lossy(bytes).into_owned()
    };
    let is_same = found == expected;
    assert!(
        is_same,
        "found\n{}\nexpected\n{}",
        around(found),
        around(expected)
    );
}

/// Tidies until there is nothing left to do.
async fn tidied(store: &dyn Store, now: OffsetDateTime, reports: Option<Duration>) -> Tidied {
    let retention = Retention {
        samples: None,
        reports,
    };
    let mut all = Tidied::default();
    for _ in 0..10_000 {
        let turn = store.tidy(now, vec![("p".to_owned(), retention)]).await;
        let turn = turn.expect("tidied");
        all.batches += turn.batches;
        all.removed += turn.removed;
        all.freed += turn.freed;
        if !turn.more {
            return all;
        }
    }
    panic!("there is no end to it");
}

#[tokio::test]
async fn what_is_asked_for_is_the_same_before_and_after() {
    on_every_store(async |store| {
        three_days(store).await;
        let before = everything(store).await;
        assert!(before.contains("-0.0") && before.contains("NotConverged"));
        assert_eq!(tidied(store, later(), None).await.batches, 216);
        assert_same(&everything(store).await, &before);
        assert_eq!(tidied(store, later(), None).await, Tidied::default());
    })
    .await;
}

#[tokio::test]
async fn a_day_that_is_not_over_stays_as_it_is() {
    on_every_store(async |store| {
        three_days(store).await;
        let before = everything(store).await;
        // NOW is at noon: the second midnight is past by half an hour, not by one.
        let now = NOW + Duration::minutes(DAY + DAY / 2 + 30);
        assert_eq!(tidied(store, now, None).await.batches, 36);
        let now = now + Duration::minutes(30);
        assert_eq!(tidied(store, now, None).await.batches, 72);
        assert_same(&everything(store).await, &before);
    })
    .await;
}

#[tokio::test]
async fn what_comes_late_or_again_is_seen_at_once_and_after() {
    on_every_store(async |store| {
        three_days(store).await;
        tidied(store, later(), None).await;
        let first = everything(store).await;
        redone(store, "b40", 800, 41).await;
        finished(store, "late", 805, 57).await;
        finished(store, "early", -3 * DAY, 58).await;
        let seen = everything(store).await;
        assert_ne!(seen, first);
        assert!(seen.contains("\"late\"") && seen.contains("\"early\""));
        assert_eq!(tidied(store, later(), None).await.batches, 73 + 1);
        assert_same(&everything(store).await, &seen);
        // Once more on the other side, with batches that are in chunks alone.
        redone(store, "b41", 820, 40).await;
        redone(store, "b40", 800, 42).await;
        let seen = everything(store).await;
        tidied(store, later(), None).await;
        assert_same(&everything(store).await, &seen);
        let versions = store.versions("p", "b40").await.expect("read");
        assert_eq!(versions.len(), 3, "versions are what they were");
        let former = store.version("p", "b40", 1).await.expect("read");
        assert!(former.is_some());
    })
    .await;
}

#[tokio::test]
async fn what_comes_while_its_day_is_chunked_is_not_lost() {
    on_every_store(async |store| {
        three_days(store).await;
        for seed in 0..60 {
            // The result joins the queue anywhere among the steps of the day.
            let later_result = async {
                for _ in 0..seed {
                    tokio::task::yield_now().await;
                }
                redone(store, "b40", 800, 100 + seed * 7).await;
            };
            let (turn, ()) = futures::join!(store.tidy(later(), Vec::new()), later_result);
            turn.expect("tidied");
            let query = SeriesQuery {
                selectors: vec![Selector::Quantity("first.mass_flow".to_owned())],
                from: Some(NOW + Duration::minutes(800)),
                ..series_of(Field::Reconciled, None, 1)
            };
            let page = store.series(query).await.expect("a page");
            let expected = 100.0 + ((100 + seed * 7) * 7919 % 1009) as f64 / 1009.0;
            assert_eq!(
                page.columns[0].values,
                [Some(expected)],
                "after {seed} turns"
            );
        }
        let seen = everything(store).await;
        tidied(store, later(), None).await;
        assert_same(&everything(store).await, &seen);
    })
    .await;
}

#[tokio::test]
async fn means_are_of_the_batches_that_have_values() {
    on_every_store(async |store| {
        store.put_plant(plant("p", "{}")).await.expect("put");
        // Seed 3 does not converge, seed 4 comes in another unit.
        for seed in 0..5 {
            finished(store, &format!("b{seed}"), seed, seed).await;
        }
        for tidy in [false, true] {
            if tidy {
                tidied(store, later(), None).await;
            }
            let pages = means_of(store, Resolution::Daily, 10).await;
            let page = &pages[0];
            let units: Vec<_> = page.columns.iter().map(|c| c.unit.as_deref()).collect();
            let expected = [Some("kg/s"), Some("t/h"), Some("kg/s"), Some("Cel"), None];
            assert_eq!(units, expected);
            assert_eq!(page.rows.len(), 1);
            let row = &page.rows[0];
            assert_eq!(row.start, NOW.replace_time(time::Time::MIDNIGHT));
            let counts = [(Verdict::Consistent, 4), (Verdict::NotConverged, 1)];
            assert_eq!(row.verdicts, counts);
            let mean = row.means[1].expect("a mean");
            assert_eq!(mean.batches, 3);
            let values = [0, 7919, 2 * 7919].map(|n| 100.1 + f64::from(n % 1009) / 1009.0);
            let average = values.iter().sum::<f64>() / 3.0;
            assert!((mean.mean - average).abs() < 1e-5, "{mean:?} {average}");
            assert!(mean.least < mean.mean && mean.mean < mean.greatest);
            assert_eq!(row.means[0].expect("a mean").batches, 1);
            assert_eq!(row.means[3], None, "no temperature has a value");
        }
    })
    .await;
}

#[tokio::test]
async fn a_full_disk_at_any_place_loses_nothing() {
    let (_directory, store) = sqlite().await;
    store.put_plant(plant("p", "{}")).await.expect("put");
    for at in 0..216 {
        let ticket = accepted(&store, incoming("p", &format!("b{at}"), at * 20, 1)).await;
        let mut report = result(&ticket, at * 20, at);
        for tag in 2..60 {
            let more = result(&ticket, at * 20, at + 1000 * tag)
                .tags
                .swap_remove("F-1");
            report
                .tags
                .insert(format!("F-{tag}"), more.expect("the tag"));
        }
        store
            .finish(ticket, Arc::new(report), None)
            .await
            .expect("finished");
    }
    let before = everything(&store).await;
    let (mut failed, mut done) = (0, 0);
    for more in 0..400 {
        // Fewer pages than there are mean that there can be no more.
        let hindrance = Hindrance {
            max_pages: Some(1 + more * 15),
            ..Hindrance::default()
        };
        store.hinder(hindrance).await.expect("hindered");
        match store.tidy(later(), Vec::new()).await {
            Err(_) => failed += 1,
            Ok(turn) => done += turn.batches,
        }
        store.hinder(Hindrance::default()).await.expect("freed");
        if more % 10 == 0 {
            assert_same(&everything(&store).await, &before);
        }
        if done == 216 {
            break;
        }
    }
    assert!(failed > 3, "the disk was hardly ever full: {failed}");
    tidied(&store, later(), None).await;
    assert_same(&everything(&store).await, &before);
    store.close().await.expect("closed");
}

#[tokio::test]
async fn an_end_in_the_middle_loses_nothing() {
    let (directory, store) = sqlite().await;
    three_days(&store).await;
    let before = everything(&store).await;
    let mut store = store;
    for microseconds in (0..60).map(|n| n * 700) {
        let limit = std::time::Duration::from_micros(microseconds);
        let _ = tokio::time::timeout(limit, store.tidy(later(), Vec::new())).await;
        store.close().await.expect("closed");
        let options = SqliteOptions::new(directory.path().join("test.sqlite"));
        store = SqliteStore::open(options).await.expect("a store");
    }
    tidied(&store, later(), None).await;
    assert_same(&everything(&store).await, &before);
    store.close().await.expect("closed");
}
