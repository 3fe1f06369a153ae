//! A histogram that many threads add to without a lock.
//!
//! Bucket i counts the values in (b_(i-1), b_i], the last one those beyond every
//! bound; the number of all is the sum of the buckets, so that the two cannot
//! disagree however a reader and writers interleave. It is written as OpenMetrics
//! wants it, which adds the buckets up.

use prometheus_client::encoding::{EncodeMetric, MetricEncoder, NoLabelSet};
use prometheus_client::metrics::{MetricType, TypedMetric};
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

/// Bounds for times in seconds, from half a millisecond to half a minute.
pub const SECONDS: &[f64] = &[
    0.0005, 0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0, 30.0,
];

/// Bounds for how many there are of something, from 1 to 256.
pub const COUNTS: &[f64] = &[1.0, 2.0, 4.0, 8.0, 16.0, 32.0, 64.0, 128.0, 256.0];

/// Counts values by size.
#[derive(Debug)]
pub struct Histogram {
    bounds: &'static [f64],
    /// One more than there are bounds.
    buckets: Box<[AtomicU64]>,
    /// Bits of the sum of all values.
    sum: AtomicU64,
}

impl Histogram {
    /// An empty one; bounds increase.
    pub fn new(bounds: &'static [f64]) -> Self {
        Histogram {
            bounds,
            buckets: (0..=bounds.len()).map(|_| AtomicU64::new(0)).collect(),
            sum: AtomicU64::new(0.0_f64.to_bits()),
        }
    }

    /// Counts a value.
    pub fn observe(&self, value: f64) {
        let bucket = self.bounds.partition_point(|bound| *bound < value);
        self.buckets[bucket].fetch_add(1, Ordering::Relaxed);
        let add = |sum: u64| Some((f64::from_bits(sum) + value).to_bits());
        // The closure always gives a new value, so that this cannot fail.
        let _ = self
            .sum
            .fetch_update(Ordering::Relaxed, Ordering::Relaxed, add);
    }

    /// Counts a time in seconds.
    pub fn took(&self, time: Duration) {
        self.observe(time.as_secs_f64());
    }

    /// How many values were counted.
    pub fn count(&self) -> u64 {
        self.buckets.iter().map(|b| b.load(Ordering::Relaxed)).sum()
    }
}

impl EncodeMetric for Histogram {
    fn encode(&self, mut encoder: MetricEncoder) -> Result<(), std::fmt::Error> {
        // What stands for infinity in the library that writes it.
        let bounds = self.bounds.iter().copied().chain([f64::MAX]);
        let counts = self.buckets.iter().map(|b| b.load(Ordering::Relaxed));
        let buckets: Vec<(f64, u64)> = bounds.zip(counts).collect();
        let count = buckets.iter().map(|(_, count)| count).sum();
        let sum = f64::from_bits(self.sum.load(Ordering::Relaxed));
        encoder.encode_histogram::<NoLabelSet>(sum, count, &buckets, None)
    }

    fn metric_type(&self) -> MetricType {
        MetricType::Histogram
    }
}

impl TypedMetric for Histogram {
    const TYPE: MetricType = MetricType::Histogram;
}

#[cfg(test)]
mod tests {
    use super::*;
    use prometheus_client::registry::Registry;
    use std::sync::Arc;

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

    #[test]
    fn values_on_a_bound_belong_below_it_and_none_is_lost() {
        let histogram = Arc::new(Histogram::new(&[1.0, 2.0]));
        for value in [0.5, 1.0, 1.5, 2.0, 2.5, f64::INFINITY] {
            histogram.observe(value);
        }
        let threads: Vec<_> = (0..4)
            .map(|_| {
                let histogram = Arc::clone(&histogram);
                std::thread::spawn(move || (0..1000).for_each(|_| histogram.observe(1.0)))
            })
            .collect();
        for thread in threads {
            thread.join().unwrap();
        }
        assert_eq!(histogram.count(), 4006);
        let mut registry = Registry::default();
        registry.register("h", "A histogram", Shared(histogram));
        let mut text = String::new();
        prometheus_client::encoding::text::encode(&mut text, &registry).unwrap();
        for line in [
            "h_bucket{le=\"1.0\"} 4002",
            "h_bucket{le=\"2.0\"} 4004",
            "h_bucket{le=\"+Inf\"} 4006",
            "h_count 4006",
        ] {
            assert!(text.contains(line), "{line}: {text}");
        }
    }
}
