//! Days of results made of a real one.

use counterpoise::demo::{self, DAY_SEED, Day};
use counterpoise::ingest;
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{self, COVERAGE_FACTOR, Format};
use counterpoise::store::{Acceptance, Incoming, NewPlant, Precondition, SqliteStore, Store};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::StandardNormal;
use serde::Deserialize;
use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection, SqliteSynchronous};
use sqlx::{ConnectOptions, Connection};
use std::path::Path;
use std::sync::Arc;
use time::macros::datetime;
use time::{Duration, OffsetDateTime};

/// The plant's name.
pub const PLANT: &str = "gannet-holm-1";

/// The day that the demo plant's day is.
const FIRST: OffsetDateTime = datetime!(2026-03-17 00:00 UTC);

const DAY_NS: i64 = 86_400_000_000_000;

/// Most digits after the point that an instrument is taken to have.
const MOST_DIGITS: i32 = 5;

/// Midnight of a day after the first.
pub fn to_time(day: i64) -> OffsetDateTime {
    FIRST + Duration::days(day)
}

/// The last whole day where so many were made.
pub fn last_day(days: i64) -> i64 {
    days + 1
}

/// A real day.
pub struct Real {
    /// Batches.
    pub batches: usize,
}

/// Reconciles the demo plant's day and keeps it as the service would.
pub async fn real_day(store: &SqliteStore) -> Real {
    let file = plant::read(demo::plant_file(), Format::Toml).expect("the demo plant is accepted");
    let new = NewPlant {
        name: PLANT.to_owned(),
        title: "Made days".to_owned(),
        media_type: "application/toml".to_owned(),
        source: demo::plant_file().to_owned(),
        canonical: "{}".to_owned(),
        received: FIRST,
        precondition: Precondition::Any,
        deed: None,
    };
    store.put_plant(new).await.expect("put");
    let compiled = Compiled::new(file.plant, 1);
    let mut real = Real { batches: 0 };
    for batch in Day::new(compiled.plant(), DAY_SEED) {
        let batch = batch.expect("the demo day settles").0;
        let report = reconcile(&compiled, &batch);
        let incoming = Incoming {
            plant: PLANT.to_owned(),
            batch: batch.name.clone(),
            digest: [real.batches as u8; 32],
            start: batch.start,
            end: batch.end,
            received: batch.end,
            body: ingest::write(&batch),
        };
        let Ok(Acceptance::New(ticket)) = store.accept(incoming).await else {
            panic!("not accepted");
        };
        let kept = store.finish(ticket, Arc::new(report), None).await;
        assert!(kept.expect("kept").is_some());
        real.batches += 1;
    }
    real
}

#[derive(Clone, Copy, Deserialize, PartialEq)]
#[serde(rename_all = "kebab-case")]
enum Kind {
    Tag,
    Quantity,
    Imbalance,
}

#[derive(Deserialize)]
struct Channel {
    kind: Kind,
}

/// One real batch as it stands in the database.
struct Base {
    start: i64,
    end: i64,
    body: Vec<u8>,
    verdict: String,
    statistic: Option<f64>,
    degrees_of_freedom: Option<i64>,
    layout: i64,
    report: Vec<u8>,
    numbers: Vec<f64>,
}

/// Writes made days beside the store.
pub struct Maker {
    on: SqliteConnection,
    rng: ChaCha8Rng,
    base: Vec<Base>,
    /// Kinds of channels by layout.
    layouts: std::collections::HashMap<i64, Vec<Kind>>,
    /// Digits of the reading of each tag in turn, by layout.
    digits: std::collections::HashMap<i64, Vec<i32>>,
    newest: i64,
}

type Row = (
    i64,
    i64,
    Vec<u8>,
    String,
    Option<f64>,
    Option<i64>,
    i64,
    Vec<u8>,
    Vec<u8>,
);

impl Maker {
    /// Reads the real day.
    pub async fn new(path: &Path, real: &Real) -> Maker {
        let options = SqliteConnectOptions::new().filename(path);
        let options = options.synchronous(SqliteSynchronous::Off);
        let mut on = options.connect().await.expect("a connection");
        let rows: Vec<Row> = sqlx::query_as(
            "SELECT i.start_ns, i.end_ns, i.body, r.verdict, r.statistic, r.degrees_of_freedom,
                    r.layout_id, r.report, n.numbers
             FROM inbox i JOIN results r ON r.inbox_id = i.id JOIN hot_numbers n ON n.inbox_id = i.id
             ORDER BY i.start_ns",
        )
        .fetch_all(&mut on)
        .await
        .expect("rows");
        assert_eq!(rows.len(), real.batches);
        let base = rows.into_iter().map(|row| Base {
            start: row.0,
            end: row.1,
            body: row.2,
            verdict: row.3,
            statistic: row.4,
            degrees_of_freedom: row.5,
            layout: row.6,
            report: row.7,
            numbers: doubles(&row.8),
        });
        let base: Vec<Base> = base.collect();
        let rows: Vec<(i64, Vec<u8>)> = sqlx::query_as("SELECT id, channels FROM layouts")
            .fetch_all(&mut on)
            .await
            .expect("layouts");
        let mut layouts = std::collections::HashMap::new();
        let mut digits = std::collections::HashMap::new();
        for (id, frame) in rows {
            let json = zstd::decode_all(&frame[..]).expect("a frame");
            let channels: Vec<Channel> = serde_json::from_slice(&json).expect("channels");
            let kinds: Vec<Kind> = channels.iter().map(|channel| channel.kind).collect();
            let tags = kinds.iter().filter(|kind| **kind == Kind::Tag).count();
            let of_it: Vec<&Base> = base.iter().filter(|base| base.layout == id).collect();
            let all =
                (0..tags).map(|tag| digits_of(of_it.iter().map(|base| base.numbers[7 * tag])));
            digits.insert(id, all.collect());
            layouts.insert(id, kinds);
        }
        Maker {
            on,
            rng: ChaCha8Rng::seed_from_u64(7),
            base,
            layouts,
            digits,
            newest: 0,
        }
    }

    /// Long enough after the newest day for it to be over, and not the two that
    /// come next.
    pub fn now(&self) -> OffsetDateTime {
        to_time(self.newest + 1) + Duration::hours(2)
    }

    /// Makes a day, so many after the first.
    pub async fn day(&mut self, day: i64, whole: bool) {
        let mut transaction = self.on.begin().await.expect("a transaction");
        for base in &self.base {
            let kinds = &self.layouts[&base.layout];
            let numbers = made(
                &base.numbers,
                kinds,
                &self.digits[&base.layout],
                &mut self.rng,
            );
            let bytes: Vec<u8> = numbers.iter().flat_map(|n| n.to_le_bytes()).collect();
            let start = base.start + day * DAY_NS;
            let name = to_time(0) + Duration::nanoseconds(start - self.base[0].start);
            let name = name.format(&time::format_description::well_known::Rfc3339);
            let empty: &[u8] = &[];
            let (body, report) = if whole {
                (&base.body[..], &base.report[..])
            } else {
                (empty, empty)
            };
            let id: i64 = sqlx::query_scalar(
                "INSERT INTO inbox (plant_id, batch, revision, digest, start_ns, end_ns,
                                    received_ns, body, removed_ns)
                 VALUES (1, ?1, 1, ?2, ?3, ?4, ?4, ?5, ?6) RETURNING id",
            )
            .bind(name.expect("a name"))
            .bind(&self.rng.random::<[u8; 32]>()[..])
            .bind(start)
            .bind(base.end + day * DAY_NS)
            .bind(body)
            .bind((!whole).then_some(start))
            .fetch_one(&mut *transaction)
            .await
            .expect("a batch");
            sqlx::query("INSERT INTO results VALUES (?1, ?2, ?3, ?4, ?5, x'', ?6, 1)")
                .bind(id)
                .bind(&base.verdict)
                .bind(base.statistic)
                .bind(base.degrees_of_freedom)
                .bind(base.layout)
                .bind(report)
                .execute(&mut *transaction)
                .await
                .expect("a result");
            sqlx::query("INSERT INTO hot_numbers VALUES (?1, ?2)")
                .bind(id)
                .bind(bytes)
                .execute(&mut *transaction)
                .await
                .expect("numbers");
        }
        let number = (self.base[0].start + day * DAY_NS).div_euclid(DAY_NS);
        sqlx::query("INSERT INTO dirty_days VALUES (1, ?1, 1)")
            .bind(number)
            .execute(&mut *transaction)
            .await
            .expect("a day");
        transaction.commit().await.expect("committed");
        self.newest = self.newest.max(day);
    }

    /// Tells what takes how many bytes.
    pub async fn sizes(&mut self, when: &str) {
        let sum = async |on: &mut SqliteConnection, what: &'static str| -> i64 {
            let query = sqlx::query_scalar(what);
            query.fetch_one(on).await.expect("a sum")
        };
        let on = &mut self.on;
        let per_batch = self.base.iter().map(|base| {
            base.numbers
                .iter()
                .filter(|number| !number.is_nan())
                .count()
        });
        let per_batch = per_batch.sum::<usize>() as f64 / self.base.len() as f64;
        let batches = sum(on, "SELECT COUNT(*) FROM results").await;
        let hot = sum(on, "SELECT COUNT(*) FROM hot_numbers").await;
        let chunked = batches - hot;
        let hot_bytes = sum(
            on,
            "SELECT COALESCE(SUM(length(numbers)), 0) FROM hot_numbers",
        )
        .await;
        let chunks = sum(on, "SELECT COALESCE(SUM(length(numbers)), 0) FROM chunks").await;
        let means = sum(
            on,
            "SELECT COALESCE(SUM(length(daily) + length(hourly)), 0) FROM means",
        )
        .await;
        let days = sum(
            on,
            "SELECT COALESCE(SUM(length(batches) + length(verdicts)), 0) FROM days",
        );
        let days = days.await;
        let pages = sum(
            on,
            "SELECT page_count - freelist_count FROM pragma_page_count, pragma_freelist_count",
        )
        .await;
        println!(
            "{when}: {batches} batches of {per_batch:.0} values, {} MB in use",
            (pages * 16_384) >> 20
        );
        if hot > 0 {
            println!(
                "  {hot} hot: {:.2} bytes a value",
                hot_bytes as f64 / hot as f64 / per_batch
            );
        }
        if chunked > 0 {
            let each = |bytes: i64| bytes as f64 / chunked as f64 / per_batch;
            println!(
                "  {chunked} in chunks: {:.3} bytes a value, {:.3} more for names and times, {:.3} for means",
                each(chunks),
                each(days),
                each(means)
            );
        }
    }
}

fn doubles(bytes: &[u8]) -> Vec<f64> {
    let all = bytes.chunks_exact(8);
    all.map(|eight| f64::from_le_bytes(eight.try_into().expect("eight")))
        .collect()
}

/// Digits after the point that the readings of a tag have.
fn digits_of(values: impl Iterator<Item = f64> + Clone) -> i32 {
    let is_decimal = |digits: i32| {
        let factor = 10f64.powi(digits);
        let mut present = values.clone().filter(|value| !value.is_nan());
        present.all(|value| (value * factor).round() / factor == value)
    };
    (0..MOST_DIGITS)
        .find(|&digits| is_decimal(digits))
        .unwrap_or(17)
}

/// The numbers of another batch like one.
fn made(base: &[f64], kinds: &[Kind], digits: &[i32], rng: &mut ChaCha8Rng) -> Vec<f64> {
    let mut made = base.to_vec();
    let mut at = 0;
    let mut tag = 0;
    // What the pipeline's units leave of a sum: a few units in the last place.
    let last_place = |value: f64, rng: &mut ChaCha8Rng| {
        value * (1.0 + f64::from(rng.random_range(-2i8..=2)) * f64::EPSILON)
    };
    for kind in kinds {
        let mut normal = || -> f64 { rng.sample(StandardNormal) };
        match kind {
            Kind::Tag => {
                let numbers = &mut made[at..at + 7];
                let [measured, reconciled, _, uncertainty, _, redundancy, _] = numbers else {
                    unreachable!("seven");
                };
                let was = *measured;
                // A batch is measured anew; an assumption stays as it is.
                if digits[tag] < 17 && *redundancy > 0.0 {
                    let factor = 10f64.powi(digits[tag]);
                    let noisy = was + *uncertainty / COVERAGE_FACTOR * normal();
                    *measured = (noisy * factor).round() / factor;
                    *uncertainty *= 1.0 + 0.3 * (*measured - was) / was.abs().max(1.0);
                }
                let (m, u) = (*measured, *uncertainty);
                *redundancy *= 1.0 - 1e-3 * normal().abs();
                let r = *redundancy;
                let own = u / COVERAGE_FACTOR * (1.0 - r).max(0.0).sqrt();
                *reconciled += own * normal();
                let a = *reconciled - m;
                numbers[2] = last_place(a, rng);
                numbers[4] = last_place(u * (1.0 - r).max(0.0).sqrt(), rng);
                if !numbers[6].is_nan() {
                    numbers[6] = last_place(a / (u / COVERAGE_FACTOR) / r.sqrt(), rng);
                }
                at += 7;
                tag += 1;
            }
            Kind::Quantity => {
                made[at] += made[at + 1] / COVERAGE_FACTOR * normal();
                made[at + 1] *= 1.0 + 1e-3 * normal();
                at += 2;
            }
            Kind::Imbalance => {
                made[at] += made[at + 1] / COVERAGE_FACTOR * normal();
                made[at + 1] *= 1.0 + 1e-3 * normal();
                let standardised = made[at] / (made[at + 1] / COVERAGE_FACTOR);
                made[at + 2] = last_place(standardised, rng);
                at += 3;
            }
        }
    }
    made
}
