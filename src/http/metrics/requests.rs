//! Requests by method, route and class of status, and how long they took.
//!
//! The series are places of a table that is made when the service starts: a
//! request finds its own by a look-up in a map that never changes, and adds to
//! it without a lock. Addresses are no labels, and neither are methods that
//! nobody has heard of, so that no client can make the table grow.

use crate::meter::{Histogram, SECONDS};
use axum::http::Method;
use prometheus_client::collector::Collector;
use prometheus_client::encoding::{DescriptorEncoder, EncodeMetric};
use prometheus_client::metrics::MetricType;
use prometheus_client::metrics::counter::ConstCounter;
use std::collections::HashMap;
use std::sync::OnceLock;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

/// Methods that have series of their own (RFC 9110, section 9, and PATCH of RFC
/// 5789).
const METHODS: [&str; 9] = [
    "GET", "HEAD", "POST", "PUT", "DELETE", "CONNECT", "OPTIONS", "TRACE", "PATCH",
];

/// What is none of ours: a method, an address without a route.
const OTHER: &str = "other";

/// Classes of status codes.
const CLASSES: [&str; 5] = ["1xx", "2xx", "3xx", "4xx", "5xx"];

/// See the module.
#[derive(Debug)]
pub(in crate::http) struct Requests {
    /// Place of each route's template; the last one is [`OTHER`].
    places: HashMap<String, usize>,
    routes: Vec<String>,
    /// By route and, within it, by method.
    series: Box<[OnceLock<Series>]>,
}

#[derive(Debug)]
struct Series {
    classes: [AtomicU64; CLASSES.len()],
    time: Histogram,
}

impl Default for Series {
    fn default() -> Self {
        Series {
            classes: Default::default(),
            time: Histogram::new(SECONDS),
        }
    }
}

impl Requests {
    /// For these templates of routes.
    pub fn new(routes: impl IntoIterator<Item = String>) -> Self {
        let mut routes: Vec<String> = routes.into_iter().collect();
        routes.push(OTHER.to_owned());
        let places = routes.iter().cloned().zip(0..).collect();
        let series = (0..routes.len() * (METHODS.len() + 1)).map(|_| OnceLock::new());
        Requests {
            places,
            series: series.collect(),
            routes,
        }
    }

    /// Counts a request.
    pub fn answered(&self, route: Option<&str>, method: &Method, status: u16, time: Duration) {
        let other = self.routes.len() - 1;
        let route = route.and_then(|route| self.places.get(route));
        let route = route.copied().unwrap_or(other);
        let method = METHODS.iter().position(|known| *known == method.as_str());
        let method = method.unwrap_or(METHODS.len());
        let Some(series) = self.series.get(route * (METHODS.len() + 1) + method) else {
            return;
        };
        let series = series.get_or_init(Series::default);
        let class = usize::from(status / 100).saturating_sub(1);
        series.classes[class.min(CLASSES.len() - 1)].fetch_add(1, Ordering::Relaxed);
        series.time.took(time);
    }

    /// The series that there are, with their labels.
    fn existing(&self) -> impl Iterator<Item = ([(&str, &str); 2], &Series)> {
        let places = self.series.iter().enumerate();
        places.filter_map(|(place, series)| {
            let route = self.routes.get(place / (METHODS.len() + 1))?;
            let method = METHODS.get(place % (METHODS.len() + 1)).unwrap_or(&OTHER);
            Some(([("method", *method), ("route", route)], series.get()?))
        })
    }
}

impl Collector for Requests {
    fn encode(&self, mut encoder: DescriptorEncoder) -> Result<(), std::fmt::Error> {
        let mut counters = encoder.encode_descriptor(
            "http_requests",
            "Requests answered",
            None,
            MetricType::Counter,
        )?;
        for (labels, series) in self.existing() {
            for (class, count) in CLASSES.iter().zip(&series.classes) {
                let count = count.load(Ordering::Relaxed);
                if count > 0 {
                    let [method, route] = labels;
                    let labels = [method, route, ("status", *class)];
                    let counter = counters.encode_family(&labels)?;
                    ConstCounter::new(count).encode(counter)?;
                }
            }
        }
        let mut histograms = encoder.encode_descriptor(
            "http_request_seconds",
            "Time from the head of a request to the head of its answer",
            None,
            MetricType::Histogram,
        )?;
        for (labels, series) in self.existing() {
            series.time.encode(histograms.encode_family(&labels)?)?;
        }
        Ok(())
    }
}
