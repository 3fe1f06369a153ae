//! What stands: lengths of queues, sizes, health, the clock. Looked at when the
//! metrics are asked for.

use super::plants::{NAMED, seconds};
use crate::http::App;
use crate::meter::Histogram;
use crate::store::{BatchQuery, Health, Meters, Room, Store, StoreError};
use prometheus_client::collector::Collector;
use prometheus_client::encoding::{DescriptorEncoder, EncodeMetric};
use prometheus_client::metrics::counter::ConstCounter;
use prometheus_client::metrics::gauge::{ConstGauge, Gauge};
use prometheus_client::registry::Registry;
use std::sync::Arc;
use std::sync::atomic::AtomicU64;

type Number = Gauge<f64, AtomicU64>;

/// Gauges that are set before they are read. Two who ask at once may set the
/// same gauge one after the other: each then reads what the later one saw.
pub(super) struct Standing {
    ready: Number,
    permits: [Number; 2],
    listeners: [Number; 2],
    workers: [Number; 2],
    underway: Number,
    file: Number,
    free: Number,
    log: Number,
    disk: Number,
    pending: Number,
    open: Number,
    memory: Number,
    clock: Number,
}

impl Standing {
    pub fn register(registry: &mut Registry, store: &dyn Store) -> Self {
        registry.register_collector(Box::new(OfStore(store.meters())));
        let mut gauge = |name: &str, help: &str| {
            let gauge = Number::default();
            registry.register(name, help, gauge.clone());
            gauge
        };
        Standing {
            ready: gauge("store_ready", "1 where the database takes writes, else 0"),
            permits: [
                gauge("permits_in_use", "Requests with a body in work"),
                gauge(
                    "permits",
                    "Requests with a body that may be in work at once",
                ),
            ],
            listeners: [
                gauge("listeners", "Clients that listen to events"),
                gauge("listeners_allowed", "Clients that may listen to events"),
            ],
            workers: [
                gauge("workers_busy", "Batches being reconciled"),
                gauge("workers", "Batches that may be reconciled at once"),
            ],
            underway: gauge(
                "batches_underway",
                "Batches that are being worked on or wait in memory",
            ),
            file: gauge("store_file_bytes", "Size of the database"),
            free: gauge("store_free_bytes", "Of the database, free for new content"),
            log: gauge(
                "store_log_bytes",
                "Size of the log that is not written back",
            ),
            disk: gauge("store_disk_free_bytes", "Left on the database's disk"),
            pending: gauge("batches_pending", "Accepted batches without a report"),
            open: gauge("periods_open", "Periods whose batch has to be made"),
            memory: gauge("resident_memory_bytes", "Memory of the process"),
            clock: gauge("clock_seconds", "The service's clock, since 1970"),
        }
    }
}

/// What the store counts by itself.
#[derive(Debug)]
struct OfStore(Arc<Meters>);

impl Collector for OfStore {
    fn encode(&self, mut encoder: DescriptorEncoder) -> Result<(), std::fmt::Error> {
        let mut histogram = |name, help, values: &Histogram| {
            let kind = EncodeMetric::metric_type(values);
            values.encode(encoder.encode_descriptor(name, help, None, kind)?)
        };
        let time = "Time of a transaction until it is on disk";
        histogram("store_commit_seconds", time, &self.0.commit_time)?;
        let jobs = "Jobs in a transaction";
        histogram("store_commit_jobs", jobs, &self.0.commit_jobs)?;
        let failures = ConstCounter::new(self.0.failures());
        let kind = EncodeMetric::metric_type(&failures);
        let help = "Transactions that failed";
        failures.encode(encoder.encode_descriptor("store_failures", help, None, kind)?)?;
        let queued = ConstGauge::new(i64::try_from(self.0.queued()).unwrap_or(i64::MAX));
        let kind = EncodeMetric::metric_type(&queued);
        let help = "Jobs that wait for the database";
        queued.encode(encoder.encode_descriptor("store_queue", help, None, kind)?)
    }
}

/// Sets every gauge. What the store does not tell now keeps what it showed.
pub(super) async fn look(app: &App) {
    let standing = &app.metrics.standing;
    let (health, permits) = (app.store.health(), app.limits.in_flight);
    standing
        .ready
        .set(f64::from(*health.borrow() == Health::Ready));
    let in_use = |pair: &[Number; 2], all: usize, left: usize| {
        pair[0].set(all.saturating_sub(left) as f64);
        pair[1].set(all as f64);
    };
    in_use(&standing.permits, permits, app.permits.available_permits());
    let listeners = app.listeners.available_permits();
    in_use(&standing.listeners, app.limits.listeners, listeners);
    let (left, underway) = app.engine.load();
    in_use(&standing.workers, app.limits.workers.max(1), left);
    standing.underway.set(underway as f64);
    standing.clock.set(seconds(app.clock.now()));
    if let Some(bytes) = resident() {
        standing.memory.set(bytes as f64);
    }
    match app.store.room().await {
        Ok(room) => standing.room(room),
        Err(error) => tracing::debug!(%error, "the store does not tell its size"),
    }
    if let Err(error) = meet(app).await {
        tracing::debug!(%error, "the store does not tell its plants");
    }
}

impl Standing {
    fn room(&self, room: Room) {
        self.file.set(room.bytes as f64);
        self.free.set(room.free as f64);
        self.log.set(room.log as f64);
        self.pending.set(room.pending as f64);
        self.open.set(room.open_periods as f64);
        if let Some(left) = room.disk_free {
            self.disk.set(left as f64);
        }
    }
}

/// Looks up the newest period of plants that nothing has been heard of since
/// the start.
async fn meet(app: &App) -> Result<(), StoreError> {
    for plant in app.store.plants(None, NAMED).await? {
        if !app.metrics.plants.is_unknown(&plant.name) {
            continue;
        }
        let newest = BatchQuery {
            plant: plant.name.clone(),
            from: None,
            to: None,
            verdict: None,
            after: None,
            limit: 1,
        };
        let page = app.store.batches(newest).await?;
        let newest = page.items.first();
        if let Some(batch) = newest.filter(|batch| batch.verdict.is_some()) {
            app.metrics.plants.met(&plant.name, batch.start, batch.end);
        }
    }
    Ok(())
}

/// Resident memory of this process in bytes, where the system tells (Linux,
/// proc(5): `VmRSS`).
fn resident() -> Option<u64> {
    let status = std::fs::read_to_string("/proc/self/status").ok()?;
    let line = status
        .lines()
        .find_map(|line| line.strip_prefix("VmRSS:"))?;
    let kilobytes: u64 = line.trim().strip_suffix("kB")?.trim().parse().ok()?;
    Some(kilobytes * 1024)
}
