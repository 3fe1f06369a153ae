//! The record of accusations: how often they were right, and how well sized.
//!
//! The hit rate is confirmed / (confirmed + refuted), with the interval of Wilson
//! (1927): the p for which |k/n - p| = z sqrt(p (1 - p) / n), z = 1.959964, which
//! keeps its coverage at small n and never leaves 0 to 1.

use super::accusation::{Accusation, Closing, Outcome};
use crate::plant::COVERAGE_FACTOR;
use crate::report::Cause;
use serde::{Deserialize, Serialize};
use std::collections::BTreeMap;
use utoipa::ToSchema;

/// What accusations came to.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Record {
    /// Accusations that nobody has closed.
    pub open: usize,
    /// Of all kinds together.
    pub all: Score,
    /// By the kind of the cause that was found, or else of the member that was
    /// likeliest when it was raised; kinds of which some are closed.
    pub by_cause: Vec<CauseScore>,
}

/// What accusations of one kind came to.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct CauseScore {
    /// Kind.
    pub cause: Cause,
    /// Figures.
    #[serde(flatten)]
    pub score: Score,
}

/// Figures of closed accusations.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct Score {
    /// How many are closed.
    pub closed: usize,
    /// How many of them as confirmed.
    pub confirmed: usize,
    /// As refuted.
    pub refuted: usize,
    /// As unknown.
    pub unknown: usize,
    /// Confirmed over confirmed and refuted; null where there are none.
    pub hit_rate: Option<HitRate>,
    /// Mean number of members of the groups when raised; null where nothing is
    /// closed.
    pub mean_group_size: Option<f64>,
    /// How far stated sizes were from what was found; null where no size was.
    pub size_error: Option<SizeError>,
}

/// A rate with its 95 % interval.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct HitRate {
    /// Rate, 0 to 1.
    pub rate: f64,
    /// Lower end.
    pub low: f64,
    /// Upper end.
    pub high: f64,
}

/// Stated size minus size as found, of confirmed accusations with both.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, ToSchema)]
pub struct SizeError {
    /// How many.
    pub n: usize,
    /// Mean of the difference over the stated standard uncertainty (half of the
    /// stated interval over 1.959964).
    pub mean: f64,
    /// Root mean square of the same: near 1 where the stated uncertainty is
    /// true and what was found is exact.
    pub rms: f64,
    /// Mean size of the difference over the size as found; null where every size
    /// as found is zero.
    pub mean_relative: Option<f64>,
}

/// What accusations came to.
pub fn record(accusations: &[Accusation]) -> Record {
    let closed = accusations.iter().filter_map(|accusation| {
        let closing = accusation.closing.as_ref()?;
        Some((accusation, closing))
    });
    let closed: Vec<_> = closed.collect();
    let mut by_cause: BTreeMap<Cause, Vec<_>> = BTreeMap::new();
    for pair in &closed {
        if let Some(cause) = cause_of(pair.0, pair.1) {
            by_cause.entry(cause).or_default().push(*pair);
        }
    }
    let by_cause = by_cause.into_iter().map(|(cause, pairs)| CauseScore {
        cause,
        score: score(&pairs),
    });
    Record {
        open: accusations.len() - closed.len(),
        all: score(&closed),
        by_cause: by_cause.collect(),
    }
}

fn cause_of(accusation: &Accusation, closing: &Closing) -> Option<Cause> {
    match &closing.cause {
        Some(found) => Some(found.cause),
        None => Some(accusation.members.first()?.hypothesis.cause),
    }
}

fn score(closed: &[(&Accusation, &Closing)]) -> Score {
    let count = |outcome| {
        let closings = closed.iter().map(|(_, closing)| closing.outcome);
        closings.filter(|o| *o == outcome).count()
    };
    let confirmed = count(Outcome::Confirmed);
    let refuted = count(Outcome::Refuted);
    let members: usize = closed.iter().map(|(a, _)| a.members.len()).sum();
    Score {
        closed: closed.len(),
        confirmed,
        refuted,
        unknown: count(Outcome::Unknown),
        hit_rate: hit_rate(confirmed, confirmed + refuted),
        mean_group_size: (!closed.is_empty()).then(|| members as f64 / closed.len() as f64),
        size_error: size_error(closed),
    }
}

fn hit_rate(hits: usize, of: usize) -> Option<HitRate> {
    if of == 0 {
        return None;
    }
    let (n, z2) = (of as f64, COVERAGE_FACTOR * COVERAGE_FACTOR);
    let rate = hits as f64 / n;
    let middle = rate + z2 / (2.0 * n);
    let half = COVERAGE_FACTOR * (rate * (1.0 - rate) / n + z2 / (4.0 * n * n)).sqrt();
    let scale = 1.0 + z2 / n;
    Some(HitRate {
        rate,
        // Exactly 0 and 1 at the ends, where rounding would leave them.
        low: if hits == 0 {
            0.0
        } else {
            (middle - half) / scale
        },
        high: if hits == of {
            1.0
        } else {
            (middle + half) / scale
        },
    })
}

fn size_error(closed: &[(&Accusation, &Closing)]) -> Option<SizeError> {
    let (mut errors, mut relative) = (Vec::new(), Vec::new());
    for (accusation, closing) in closed {
        let confirmed = (closing.outcome == Outcome::Confirmed).then_some(*closing);
        let found = confirmed.and_then(|closing| closing.as_found.as_ref());
        let (Some(found), Some(stated)) = (found, accusation.subject(closing)) else {
            continue;
        };
        if stated.uncertainty <= 0.0 || stated.unit != found.unit {
            continue;
        }
        let difference = stated.size - found.size;
        errors.push(difference / (stated.uncertainty / COVERAGE_FACTOR));
        if found.size != 0.0 {
            relative.push((difference / found.size).abs());
        }
    }
    let squares: Vec<f64> = errors.iter().map(|e| e * e).collect();
    Some(SizeError {
        n: errors.len(),
        mean: mean(&errors)?,
        rms: mean(&squares)?.sqrt(),
        mean_relative: mean(&relative),
    })
}

fn mean(values: &[f64]) -> Option<f64> {
    let n = values.len();
    (n > 0).then(|| values.iter().sum::<f64>() / n as f64)
}

#[cfg(test)]
mod tests {
    use super::hit_rate;
    use crate::plant::COVERAGE_FACTOR;

    /// The ends solve Wilson's equation.
    #[test]
    fn interval() {
        for (hits, of) in [(1, 1), (0, 10), (8, 10), (1, 40), (97, 100)] {
            let rate = hit_rate(hits, of).unwrap();
            assert_eq!(rate.rate, hits as f64 / of as f64);
            assert!(0.0 <= rate.low && rate.low <= rate.rate);
            assert!(rate.rate <= rate.high && rate.high <= 1.0);
            for p in [rate.low, rate.high] {
                let far = (rate.rate - p).powi(2);
                let variance = p * (1.0 - p) / of as f64;
                let error = far - COVERAGE_FACTOR * COVERAGE_FACTOR * variance;
                assert!(error.abs() < 1e-15, "{hits} of {of}: {p}, {error}");
            }
        }
        // 8 of 10: 0.490 to 0.943, as commonly tabulated (from memory).
        let rate = hit_rate(8, 10).unwrap();
        assert!((rate.low - 0.490).abs() < 5e-4 && (rate.high - 0.943).abs() < 5e-4);
        assert_eq!(hit_rate(0, 0), None);
    }
}
