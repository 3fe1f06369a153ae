//! A million batches in a store: how large, and how fast what is asked for.
//!
//! One day of the demo plant is reconciled and kept through the store like any
//! other; the bytes a stored value takes are measured on it. Then days upon days
//! are made of it: each reading with new noise of its own stated sigma, rounded
//! as the instrument rounds; each uncertainty and redundancy as it would follow;
//! reconciled values with noise of their own uncertainty. They are written as
//! results are, and chunked by the store's own background work. Reports and
//! bodies are there for the newest 100 days, as after a retention of so long;
//! the chunks of all days stay, though a retention would take those as well.
//!
//! `cargo bench --bench history`; `COUNTERPOISE_BATCHES` sets how many, a
//! million unless set. Takes 8 GB in the system's temporary folder.

mod made;

use counterpoise::store::{
    BatchQuery, Field, HistoryStore, MeansQuery, Resolution, Selector, SeriesQuery, SqliteOptions,
    SqliteStore, Store, Stored,
};
use made::{Maker, PLANT, last_day, real_day, to_time};
use std::path::Path;
use std::time::{Duration, Instant};

/// Days that are written before they are chunked.
const SLICE: i64 = 30;

/// Days of which reports are kept.
const REPORTS: i64 = 100;

#[tokio::main]
async fn main() {
    let batches: i64 = std::env::var("COUNTERPOISE_BATCHES")
        .map_or(1_000_000, |text| text.parse().expect("a number of batches"));
    let directory = tempfile::tempdir().expect("a folder");
    let path = directory.path().join("history.sqlite");
    let store = SqliteStore::open(SqliteOptions::new(&path)).await;
    let store = store.expect("a store");
    let made = real_day(&store).await;
    println!("a day of the demo plant: {} batches", made.batches);
    let mut maker = Maker::new(&path, &made).await;
    maker.sizes("hot").await;
    let (took, steps) = tidy(&store, maker.now()).await;
    println!("chunked in {took:?}, the longest call {steps:?}");
    maker.sizes("chunked").await;

    let days = (batches + 287) / 288;
    println!("\n{days} days of 288 batches made of it");
    let began = Instant::now();
    let [mut written, mut tidied, mut longest] = [Duration::ZERO; 3];
    for first in (1..days).step_by(SLICE as usize) {
        let slice = Instant::now();
        for day in first..(first + SLICE).min(days) {
            maker.day(day, day >= days - REPORTS).await;
        }
        written += slice.elapsed();
        let (took, steps) = tidy(&store, maker.now()).await;
        tidied += took;
        longest = steps.max(longest);
        if first / SLICE % 10 == 0 {
            let size = std::fs::metadata(&path).map_or(0, |file| file.len());
            println!("  day {first}: {:?}, {} MB", began.elapsed(), size >> 20);
        }
    }
    println!("written in {written:?}, chunked in {tidied:?}, the longest call {longest:?}");
    // The newest two days are hot, as in service.
    maker.day(days, true).await;
    maker.day(days + 1, true).await;
    maker.sizes("all").await;
    ask(&store, days + 1).await;
    store.close().await.expect("closed");
    reopen(&path).await;
}

async fn tidy(store: &SqliteStore, now: time::OffsetDateTime) -> (Duration, Duration) {
    let began = Instant::now();
    let mut longest = Duration::ZERO;
    loop {
        let call = Instant::now();
        let done = store.tidy(now, Vec::new()).await.expect("tidied");
        longest = longest.max(call.elapsed());
        if !done.more {
            return (began.elapsed(), longest);
        }
    }
}

/// What an opening costs: it looks over the whole file.
async fn reopen(path: &Path) {
    let began = Instant::now();
    let store = SqliteStore::open(SqliteOptions::new(path)).await;
    let store = store.expect("a store");
    println!("opened again in {:?}", began.elapsed());
    store.close().await.expect("closed");
}

/// The median and the worst of twenty.
async fn timed(what: &str, mut ask: impl AsyncFnMut() -> usize) {
    let mut times = Vec::new();
    let mut count = 0;
    for _ in 0..20 {
        let began = Instant::now();
        count = ask().await;
        times.push(began.elapsed());
    }
    times.sort();
    println!(
        "{what:<44} {count:>6}   p50 {:>10.2?}   worst {:>10.2?}",
        times[10], times[19]
    );
}

async fn ask(store: &SqliteStore, last: i64) {
    println!();
    let plant = || PLANT.to_owned();
    let from = |days: i64| Some(to_time(last_day(last) - days));
    for days in [1, 7, 90] {
        for tags in [1, 10] {
            let names = ["FT-101", "TT-102A", "PT-102B", "FT-401", "TT-414"];
            let more = ["TT-501A", "PT-107A", "TT-107B", "FT-102", "PT-101"];
            let names = names.iter().chain(&more).take(tags);
            let query = SeriesQuery {
                plant: plant(),
                selectors: names
                    .map(|name| Selector::Tag((*name).to_owned()))
                    .collect(),
                field: Field::Reconciled,
                from: from(days),
                to: None,
                after: None,
                limit: 50_000,
            };
            timed(
                &format!("series of {tags} tags over {days} days, rows"),
                async || {
                    let page = store.series(query.clone()).await.expect("a page");
                    assert_eq!(page.columns.len(), tags);
                    page.rows.len()
                },
            )
            .await;
        }
    }
    let list = |limit| BatchQuery {
        plant: plant(),
        from: None,
        to: None,
        verdict: None,
        after: None,
        limit,
    };
    timed("newest report, tags", async || {
        let newest = store
            .batches(list(1))
            .await
            .expect("a list")
            .items
            .remove(0);
        match store.batch(PLANT, &newest.batch).await.expect("read") {
            Some(Stored::Done(report)) => report.tags.len(),
            other => panic!("{other:?}"),
        }
    })
    .await;
    for limit in [100, 1000] {
        timed(&format!("list of the newest {limit} batches"), async || {
            store
                .batches(list(limit))
                .await
                .expect("a list")
                .items
                .len()
        })
        .await;
    }
    for (days, resolution, what) in [
        (90, Resolution::Hourly, "hourly means of 90 days"),
        (365, Resolution::Daily, "daily means of a year"),
        (100_000, Resolution::Daily, "daily means of all"),
    ] {
        let query = MeansQuery {
            plant: plant(),
            selectors: vec![Selector::Tag("FT-101".to_owned())],
            resolution,
            from: Some(to_time((last_day(last) - days).max(0))),
            to: None,
            limit: 20_000,
            after: None,
        };
        timed(&format!("{what}, rows"), async || {
            store.means(query.clone()).await.expect("a page").rows.len()
        })
        .await;
    }
}
