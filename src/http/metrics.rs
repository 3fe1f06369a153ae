//! Metrics in the OpenMetrics text format (1.0), at `/metrics`.
//!
//! Every name begins with `counterpoise_`, and every label has few values:
//! routes by their template, methods that are known, classes of status codes,
//! verdicts, and the first hundred plants. Nothing is global: each service has
//! a registry of its own. What moves is counted where it happens; what stands
//! (lengths of queues, sizes, the clock) is looked at when it is asked for.

mod plants;
mod requests;
mod standing;

use super::App;
use super::access::Who;
use super::error::{Kind, Problem};
use crate::meter::{Histogram, SECONDS};
use crate::report::{Report, Verdict};
use crate::store::Store;
use axum::extract::State;
use axum::http::header;
use axum::response::IntoResponse;
use plants::Plants;
use prometheus_client::encoding::{EncodeMetric, MetricEncoder};
use prometheus_client::metrics::MetricType;
use prometheus_client::metrics::counter::Counter;
use prometheus_client::metrics::family::Family;
use prometheus_client::metrics::info::Info;
use prometheus_client::registry::Registry;
use requests::Requests;
use standing::Standing;
use std::sync::Arc;
use std::time::Instant;

/// The media type of OpenMetrics, version 1.0.
const OPENMETRICS: &str = "application/openmetrics-text; version=1.0.0; charset=utf-8";

type Words = [(&'static str, &'static str); 1];

/// Everything that is counted.
pub(super) struct Metrics {
    registry: Registry,
    /// Requests.
    pub requests: Arc<Requests>,
    /// Requests refused because there was too much to do.
    pub overloads: Counter,
    plants: Plants,
    reconciling: Arc<Histogram>,
    solves: Family<Words, Counter>,
    suspects: Counter,
    samples: Family<Words, Counter>,
    periods: Family<Words, Counter>,
    /// Events settled by the webhook.
    pub settled: Family<Words, Counter>,
    /// Attempts of the webhook that did not settle an event.
    pub attempts_failed: Counter,
    standing: Standing,
}

/// What became of a period of samples.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Fate {
    /// A batch.
    Made,
    /// A batch made again from late readings.
    Again,
    /// Nothing: no sample in it was usable.
    Dropped,
    /// Nothing: a client has sent a batch of its name.
    NameTaken,
}

impl Fate {
    fn name(self) -> &'static str {
        match self {
            Fate::Made => "made",
            Fate::Again => "again",
            Fate::Dropped => "dropped",
            Fate::NameTaken => "name-taken",
        }
    }
}

/// Something counted that others hold too.
#[derive(Debug)]
struct Shared(Arc<Histogram>);

impl EncodeMetric for Shared {
    fn encode(&self, encoder: MetricEncoder) -> Result<(), std::fmt::Error> {
        self.0.encode(encoder)
    }

    fn metric_type(&self) -> MetricType {
        MetricType::Histogram
    }
}

impl Metrics {
    /// For a service with these routes.
    pub fn new(store: &dyn Store, routes: impl IntoIterator<Item = String>) -> Self {
        let mut registry = Registry::with_prefix("counterpoise");
        let requests = Arc::new(Requests::new(routes));
        registry.register_collector(Box::new(Arc::clone(&requests)));
        let metrics = Metrics {
            requests,
            overloads: Counter::default(),
            plants: Plants::default(),
            reconciling: Arc::new(Histogram::new(SECONDS)),
            solves: Family::default(),
            suspects: Counter::default(),
            samples: Family::default(),
            periods: Family::default(),
            settled: Family::default(),
            attempts_failed: Counter::default(),
            standing: Standing::register(&mut registry, store),
            registry: Registry::default(),
        };
        metrics.register(&mut registry);
        Metrics {
            registry,
            ..metrics
        }
    }

    fn register(&self, registry: &mut Registry) {
        self.plants.register(registry);
        let version = [("version", env!("CARGO_PKG_VERSION"))];
        registry.register("build", "What is running", Info::new(version));
        registry.register(
            "overload_refusals",
            "Requests answered with 429 because there was too much to do",
            self.overloads.clone(),
        );
        registry.register(
            "reconcile_seconds",
            "Time of reconciling a batch, without waiting for a worker",
            Shared(Arc::clone(&self.reconciling)),
        );
        registry.register(
            "solves",
            "Batches reconciled, also again, by outcome",
            self.solves.clone(),
        );
        registry.register(
            "suspects",
            "Suspects named in reports",
            self.suspects.clone(),
        );
        registry.register(
            "samples",
            "Samples received, by what became of them",
            self.samples.clone(),
        );
        registry.register(
            "periods",
            "Periods of samples, by what became of them",
            self.periods.clone(),
        );
        registry.register(
            "webhook_events",
            "Events settled by the webhook, by outcome",
            self.settled.clone(),
        );
        registry.register(
            "webhook_failed_attempts",
            "Attempts of the webhook that did not settle an event",
            self.attempts_failed.clone(),
        );
        // There from the start, so that a rate can be taken of the first.
        for outcome in ["converged", "not-converged", "not-running"] {
            self.solves.get_or_create(&[("outcome", outcome)]).inc_by(0);
        }
        for outcome in ["delivered", "given-up"] {
            self.settled
                .get_or_create(&[("outcome", outcome)])
                .inc_by(0);
        }
        self.samples(0, 0, 0);
        for fate in [Fate::Made, Fate::Again, Fate::Dropped, Fate::NameTaken] {
            self.periods
                .get_or_create(&[("fate", fate.name())])
                .inc_by(0);
        }
    }

    /// Reconciles, and counts what came of it.
    pub fn reconciled(&self, reconcile: impl FnOnce() -> Report) -> Report {
        let started = Instant::now();
        let report = reconcile();
        self.reconciling.took(started.elapsed());
        let outcome = match report.verdict {
            Verdict::NotConverged => "not-converged",
            Verdict::NotRunning => "not-running",
            Verdict::Consistent | Verdict::Inconsistent | Verdict::NotRedundant => "converged",
        };
        self.solves.get_or_create(&[("outcome", outcome)]).inc();
        let suspects = u64::try_from(report.suspects.len()).unwrap_or(0);
        self.suspects.inc_by(suspects);
        report
    }

    /// A batch has got its first report, and it is on disk.
    pub fn finished(&self, report: &Report) {
        self.plants.finished(report);
    }

    /// A period of samples has come to its end.
    pub fn period(&self, fate: Fate) {
        self.periods.get_or_create(&[("fate", fate.name())]).inc();
    }

    /// Samples have come: so many were new, known already, and refused.
    pub fn samples(&self, taken: u64, known: u64, refused: u64) {
        let fates = [("taken", taken), ("known", known), ("refused", refused)];
        for (fate, count) in fates {
            self.samples.get_or_create(&[("fate", fate)]).inc_by(count);
        }
    }
}

/// Measure the service.
///
/// The OpenMetrics text format: what a scraper of Prometheus reads.
#[utoipa::path(
    get, path = "/metrics", operation_id = "metrics", tag = "operation",
    responses(
        (status = 200, description = "Counters, gauges and histograms", body = String, content_type = "application/openmetrics-text"),
        (status = 403, description = "The token reaches some plants only, and this tells of all", body = Problem, content_type = "application/problem+json"),
        (status = "default", description = "Any problem", body = Problem, content_type = "application/problem+json"),
    )
)]
pub(super) async fn get(State(app): State<App>, who: Who) -> Result<impl IntoResponse, Problem> {
    if who.plants().is_some() {
        let detail = "this tells of every plant: a token that is bound to some does not read it";
        return Err(Problem::new(Kind::Forbidden, detail));
    }
    standing::look(&app).await;
    let mut text = String::new();
    prometheus_client::encoding::text::encode(&mut text, &app.metrics.registry)
        .map_err(|error| Problem::new(Kind::Internal, error.to_string()))?;
    Ok(([(header::CONTENT_TYPE, OPENMETRICS)], text))
}
