//! What is counted by plant: a hundred of them by name, in the order in which
//! they are met, and all others together.

use crate::report::{Report, Verdict};
use prometheus_client::metrics::counter::Counter;
use prometheus_client::metrics::family::Family;
use prometheus_client::metrics::gauge::Gauge;
use prometheus_client::registry::Registry;
use std::collections::HashSet;
use std::sync::atomic::AtomicU64;
use std::sync::{PoisonError, RwLock};
use time::OffsetDateTime;

/// Plants that have series of their own.
pub(in crate::http) const NAMED: usize = 100;

/// Where all others are counted; the name of a plant cannot hold a space.
const OTHER: &str = "other plants";

type Labels = [(&'static str, String); 1];
type Seconds = Gauge<f64, AtomicU64>;

/// See the module.
#[derive(Default)]
pub(super) struct Plants {
    named: RwLock<HashSet<String>>,
    batches: Family<[(&'static str, String); 2], Counter>,
    newest: Family<Labels, Seconds>,
    period: Family<Labels, Seconds>,
}

impl Plants {
    pub fn register(&self, registry: &mut Registry) {
        registry.register(
            "batches",
            "Batches that got their first report, by verdict",
            self.batches.clone(),
        );
        registry.register(
            "newest_period_end_seconds",
            "End of the newest period that has a report, since 1970",
            self.newest.clone(),
        );
        registry.register(
            "newest_period_seconds",
            "Length of the newest period that has a report",
            self.period.clone(),
        );
    }

    /// A batch has got its first report.
    pub fn finished(&self, report: &Report) {
        let verdict = verdict(report.verdict).to_owned();
        let plant = self.label(&report.plant);
        let labels = [("plant", plant.clone()), ("verdict", verdict)];
        self.batches.get_or_create(&labels).inc();
        if plant != OTHER {
            self.newest(plant, report.start, report.end);
        }
    }

    /// A plant has a report of a period.
    fn newest(&self, plant: String, start: OffsetDateTime, end: OffsetDateTime) {
        let labels = [("plant", plant)];
        let seconds = seconds(end);
        let newest = self.newest.get_or_create(&labels);
        if newest.get() <= seconds {
            newest.set(seconds);
            let length = (end - start).as_seconds_f64();
            self.period.get_or_create(&labels).set(length);
        }
    }

    /// The same, read from the store, unless the plant is known or there are
    /// too many.
    pub fn met(&self, plant: &str, start: OffsetDateTime, end: OffsetDateTime) {
        let plant = self.label(plant);
        if plant != OTHER {
            self.newest(plant, start, end);
        }
    }

    /// Whether nothing has been heard of a plant that may have series.
    pub fn is_unknown(&self, plant: &str) -> bool {
        let named = self.named.read().unwrap_or_else(PoisonError::into_inner);
        !named.contains(plant) && named.len() < NAMED
    }

    fn label(&self, plant: &str) -> String {
        let named = self.named.read().unwrap_or_else(PoisonError::into_inner);
        let (known, full) = (named.contains(plant), named.len() >= NAMED);
        drop(named);
        if !known && !full {
            let mut named = self.named.write().unwrap_or_else(PoisonError::into_inner);
            if named.len() < NAMED {
                named.insert(plant.to_owned());
                return plant.to_owned();
            }
            return OTHER.to_owned();
        }
        if known { plant } else { OTHER }.to_owned()
    }
}

fn verdict(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Consistent => "consistent",
        Verdict::Inconsistent => "inconsistent",
        Verdict::NotRedundant => "not-redundant",
        Verdict::NotConverged => "not-converged",
        Verdict::NotRunning => "not-running",
    }
}

/// Seconds since 1970.
pub(super) fn seconds(time: OffsetDateTime) -> f64 {
    time.unix_timestamp_nanos() as f64 / 1e9
}
