//! From a batch's readings to measured values with their sigma.

use super::averaged;
use crate::equations::Measured;
use crate::plant::{Action, Batch, ByHand, Grade, Plant, Quantity, Reading, Sigma};
use crate::report::{Averaged, ByHandReport};
use std::collections::HashMap;

/// What a batch says, tag by tag in the order of the plant file, assumptions
/// behind them.
#[derive(Clone)]
pub struct Readings {
    /// Value in internal units and its sigma; `None` where not used.
    pub measured: Vec<Option<Measured>>,
    /// Value as read, in the tag's unit.
    pub values: Vec<Option<f64>>,
    /// Sigma in the tag's unit, where there is a value that has one.
    pub sigmas: Vec<Option<Sigma>>,
    /// Why a tag is not used, or what was done to it.
    pub reasons: Vec<Option<String>>,
    /// What a tag's value was averaged from.
    pub averaged: Vec<Option<Averaged>>,
    /// Tags of the batch that the plant does not know.
    pub ignored: Vec<String>,
    /// What a person should see.
    pub remarks: Vec<String>,
    /// Decisions that hold for this batch.
    pub by_hand: Vec<ByHandReport>,
}

/// One tag's part.
struct Resolved {
    value: Option<f64>,
    sigma: Option<Sigma>,
    used: bool,
    reason: Option<String>,
    averaged: Option<Averaged>,
}

impl Readings {
    /// Resolves the readings of a batch, with the decisions by hand that cover
    /// it.
    pub fn new(plant: &Plant, batch: &Batch, by_hand: &[ByHand]) -> Self {
        let by_tag: HashMap<&str, &Reading> =
            batch.readings.iter().map(|r| (r.tag.as_str(), r)).collect();
        let mut readings = Readings::empty();
        for tag in &plant.tags {
            let resolved = match by_tag.get(tag.name.as_str()) {
                None => Resolved::unused(None, "no reading in the batch"),
                Some(reading) => Resolved::new(reading, plant.uncertain_factor, |value| {
                    tag.uncertainty.sigma(value)
                }),
            };
            let resolved = by_hand
                .iter()
                .filter(|decision| decision.tag == tag.name && decision.covers(batch))
                .fold(resolved, |resolved, decision| {
                    readings.by_hand.push(in_report(decision));
                    resolved.decided(decision)
                });
            if let (true, Quantity::MassFlow(_), Some(value)) =
                (resolved.used, tag.quantity, resolved.value)
                && value < 0.0
            {
                readings
                    .remarks
                    .push(format!("{} reads a negative flow; it was used", tag.name));
            }
            readings.push(resolved, &tag.unit);
        }
        for assumption in &plant.assumptions {
            let sigma = assumption.uncertainty.sigma(assumption.value);
            let resolved = Resolved {
                value: Some(assumption.value),
                sigma,
                used: sigma.is_some(),
                reason: None,
                averaged: None,
            };
            readings.push(resolved, &assumption.unit);
        }
        let mut ignored: Vec<String> = by_tag
            .keys()
            .filter(|name| plant.tags.iter().all(|tag| tag.name != **name))
            .filter(|name| plant.statuses.iter().all(|status| status.name != **name))
            .map(|name| (*name).to_owned())
            .collect();
        ignored.sort();
        readings.ignored = ignored;
        readings
            .remarks
            .extend(averaged::transition(batch.steadiness.as_ref()));
        readings
    }

    fn empty() -> Self {
        Readings {
            measured: Vec::new(),
            values: Vec::new(),
            sigmas: Vec::new(),
            reasons: Vec::new(),
            averaged: Vec::new(),
            ignored: Vec::new(),
            remarks: Vec::new(),
            by_hand: Vec::new(),
        }
    }

    fn push(&mut self, resolved: Resolved, unit: &crate::plant::Unit) {
        let Resolved {
            value,
            sigma,
            used,
            reason,
            averaged,
        } = resolved;
        let measured = match (used, value, sigma) {
            (true, Some(value), Some(sigma)) => {
                Sigma::new(unit.difference_to_internal(sigma.get())).map(|sigma| Measured {
                    value: unit.to_internal(value),
                    sigma,
                })
            }
            _ => None,
        };
        self.measured.push(measured);
        self.values.push(value);
        self.sigmas.push(sigma);
        self.reasons.push(reason);
        self.averaged.push(averaged);
    }
}

impl Resolved {
    fn unused(value: Option<f64>, reason: &str) -> Self {
        Resolved {
            value,
            sigma: None,
            used: false,
            reason: Some(reason.to_owned()),
            averaged: None,
        }
    }

    /// The same after a decision by hand.
    fn decided(self, decision: &ByHand) -> Self {
        let (reason, by) = (&decision.reason, &decision.by);
        match decision.action {
            Action::OutOfService => Resolved {
                used: false,
                reason: Some(format!("out of service by hand: {reason} ({by})")),
                ..self
            },
            Action::Offset(offset) => {
                let told = format!("{offset} added by hand: {reason} ({by})");
                let reason = self
                    .reason
                    .map_or_else(|| told.clone(), |earlier| format!("{earlier}; {told}"));
                Resolved {
                    value: self.value.map(|value| value + offset),
                    reason: Some(reason),
                    ..self
                }
            }
        }
    }

    fn new(
        reading: &Reading,
        uncertain_factor: f64,
        sigma_of: impl Fn(f64) -> Option<Sigma>,
    ) -> Self {
        Resolved {
            averaged: reading.averaged.as_ref().map(averaged::in_report),
            ..Resolved::weighed(reading, uncertain_factor, sigma_of)
        }
    }

    fn weighed(
        reading: &Reading,
        uncertain_factor: f64,
        sigma_of: impl Fn(f64) -> Option<Sigma>,
    ) -> Self {
        let made = reading.averaged.as_ref();
        let why_not = made.and_then(|made| made.unused.as_deref());
        let Some(value) = reading.value else {
            return Resolved::unused(None, why_not.unwrap_or("the reading has no value"));
        };
        let sigma = sigma_of(value);
        let is_bad = reading.quality.grade == Grade::Bad;
        if let Some(reason) = why_not.or(is_bad.then_some("bad quality")) {
            return Resolved {
                sigma,
                ..Resolved::unused(Some(value), reason)
            };
        }
        let Some(sigma) = sigma else {
            return Resolved::unused(
                Some(value),
                "its uncertainty comes out zero or infinite at this reading",
            );
        };
        let is_uncertain = reading.quality.grade == Grade::Uncertain;
        let own = match is_uncertain {
            true => sigma.get() * uncertain_factor,
            false => sigma.get(),
        };
        // The instrument's error and the scatter of the mean are independent.
        let scatter = made.and_then(|made| made.scatter).unwrap_or(0.0);
        let sigma = Sigma::new(own.hypot(scatter));
        if sigma.is_none() {
            return Resolved::unused(Some(value), "its scatter is beyond the range of a double");
        }
        Resolved {
            value: Some(value),
            sigma,
            used: true,
            reason: is_uncertain
                .then(|| format!("uncertain quality: sigma widened by {uncertain_factor}")),
            averaged: None,
        }
    }
}

/// A decision as reports tell it.
pub fn in_report(decision: &ByHand) -> ByHandReport {
    let (action, offset) = match decision.action {
        Action::OutOfService => ("out-of-service", None),
        Action::Offset(offset) => ("offset", Some(offset)),
    };
    ByHandReport {
        id: decision.id,
        tag: decision.tag.clone(),
        action: action.to_owned(),
        offset,
        reason: decision.reason.clone(),
        by: decision.by.clone(),
    }
}
