//! How fast samples become durable, by the shape in which they come: with
//! checks for what is there, periods opened, and one fsync a call.
//!
//!     cargo bench --bench samples
//!
//! Each line says samples a second over calls made one after another, and what
//! one call took in the middle and at the slowest.

use counterpoise::plant::{Grade, Quality, Sample};
use counterpoise::store::{
    NewPlant, NewSamples, NewTagSamples, Precondition, ReadingsStore, SqliteOptions, SqliteStore,
    Store,
};
use std::time::Instant;
use time::{Duration, OffsetDateTime};

const TAGS: i64 = 300;
const CALLS: i64 = 60;

fn sample(milliseconds: i64, value: f64) -> Sample {
    let start = OffsetDateTime::from_unix_timestamp(1_932_976_800).expect("a time");
    Sample {
        time: start + Duration::milliseconds(milliseconds),
        value: Some(value),
        quality: Quality {
            grade: Grade::Good,
            code: None,
        },
    }
}

/// A call: of so many tags so many samples each, ten seconds apart, from a place
/// in time on.
fn call(plant: &str, tags: i64, each: i64, from: i64) -> NewSamples {
    let tags = (0..tags).map(|tag| NewTagSamples {
        tag: format!("tag-{tag:03}"),
        holds: Duration::minutes(15),
        reaches_back: if tag % 2 == 0 {
            Duration::ZERO
        } else {
            Duration::minutes(15)
        },
        samples: (0..each)
            .map(|n| sample((from + n) * 10_000 + tag, (from + n) as f64 / 7.0))
            .collect(),
    });
    NewSamples {
        plant: plant.to_owned(),
        received: OffsetDateTime::UNIX_EPOCH,
        period: Duration::minutes(5),
        tags: tags.collect(),
        backfill: None,
    }
}

async fn measure(store: &SqliteStore, what: &str, calls: Vec<NewSamples>) {
    let count: usize = calls
        .iter()
        .flat_map(|call| call.tags.iter().map(|tag| tag.samples.len()))
        .sum();
    let mut took = Vec::new();
    let began = Instant::now();
    for call in calls {
        let one = Instant::now();
        store
            .add_samples(call)
            .await
            .expect("kept")
            .expect("a plant");
        took.push(one.elapsed());
    }
    let rate = count as f64 / began.elapsed().as_secs_f64();
    took.sort_unstable();
    println!(
        "{what:55} {:>9.0} samples/s   {:>7.2} ms a call, {:>7.2} ms the slowest",
        rate,
        took[took.len() / 2].as_secs_f64() * 1e3,
        took[took.len() - 1].as_secs_f64() * 1e3
    );
}

/// Reads periods as they are read to be made: thirty samples of each of 300
/// tags, with those before and after.
async fn read_periods(store: &SqliteStore) {
    let period = Duration::minutes(5);
    let mut took = Vec::new();
    for place in 1..60 {
        let from = sample(0, 0.0).time + period * place;
        let one = Instant::now();
        let tags = store
            .samples("wide", from, from + period, Duration::minutes(15))
            .await
            .expect("read");
        took.push(one.elapsed());
        let count: usize = tags.iter().map(|tag| tag.samples.len()).sum();
        assert!(count > 9000, "{count}");
    }
    took.sort_unstable();
    println!(
        "a period of 300 tags read: {:.2} ms, {:.2} ms the slowest",
        took[took.len() / 2].as_secs_f64() * 1e3,
        took[took.len() - 1].as_secs_f64() * 1e3
    );
}

#[tokio::main]
async fn main() {
    let directory = tempfile::tempdir().expect("a directory");
    let path = directory.path().join("bench.sqlite");
    let store = SqliteStore::open(SqliteOptions::new(&path)).await;
    let store = store.expect("a store");
    for name in ["wide", "long", "live"] {
        let new = NewPlant {
            name: name.to_owned(),
            title: name.to_owned(),
            media_type: "application/json".to_owned(),
            source: "{}".to_owned(),
            canonical: "{}".to_owned(),
            received: OffsetDateTime::UNIX_EPOCH,
            precondition: Precondition::Any,
            deed: None,
        };
        store.put_plant(new).await.expect("a plant");
    }
    let wide = || (0..CALLS).map(|n| call("wide", TAGS, 33, n * 33)).collect();
    measure(
        &store,
        "300 tags of 33 samples each, as time goes on",
        wide(),
    )
    .await;
    measure(&store, "the same once more: all are known", wide()).await;
    let long = (0..CALLS).map(|n| call("long", 1, 10_000, n * 10_000));
    measure(
        &store,
        "one tag of 10 000 samples, as time goes on",
        long.collect(),
    )
    .await;
    let live = (0..CALLS * 5).map(|n| call("live", TAGS, 1, n));
    measure(
        &store,
        "300 tags of one sample each, as time goes on",
        live.collect(),
    )
    .await;
    let singles = (0..CALLS * 5).map(|n| call("live", 1, 1, 1_000 + n));
    measure(&store, "one sample", singles.collect()).await;
    read_periods(&store).await;
    store.close().await.expect("closed");
    let bytes = std::fs::metadata(&path).expect("a file").len() as f64;
    let rows = CALLS * (TAGS * 33 + 10_000 + TAGS * 5 + 5);
    println!("{:.1} bytes a sample in the file", bytes / rows as f64);
}
