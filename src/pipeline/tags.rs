//! Tags and assumptions in the report.

use super::compiled::Compiled;
use super::readings::Readings;
use super::solution::Solution;
use crate::diagnosis::{HARDLY_REDUNDANT, detectable};
use crate::plant::{COVERAGE_FACTOR, Unit};
use crate::report::{Class, TagReport};
use indexmap::IndexMap;

/// Every tag of the plant file. Without a solution nothing is reconciled.
pub fn tags(
    compiled: &Compiled,
    readings: &Readings,
    solution: Option<&Solution>,
) -> IndexMap<String, TagReport> {
    let tags = compiled.plant().tags.iter().enumerate();
    tags.map(|(i, tag)| (tag.name.clone(), entry(i, &tag.unit, readings, solution)))
        .collect()
}

/// Every assumption of the plant file.
pub fn assumptions(
    compiled: &Compiled,
    readings: &Readings,
    solution: Option<&Solution>,
) -> IndexMap<String, TagReport> {
    let first = compiled.plant().tags.len();
    let assumptions = compiled.plant().assumptions.iter().enumerate();
    assumptions
        .map(|(i, a)| {
            (
                a.name.clone(),
                entry(first + i, &a.unit, readings, solution),
            )
        })
        .collect()
}

fn entry(i: usize, unit: &Unit, readings: &Readings, solution: Option<&Solution>) -> TagReport {
    let sigma = readings.sigmas[i];
    let mut report = TagReport {
        measured: readings.values[i],
        reconciled: None,
        adjustment: None,
        unit: unit.symbol.clone(),
        uncertainty_measured: sigma.map(|sigma| COVERAGE_FACTOR * sigma.get()),
        uncertainty_reconciled: None,
        redundancy: None,
        standardised_adjustment: None,
        detectable: None,
        class: Class::Unused,
        reason: readings.reasons[i].clone(),
        averaged: readings.averaged[i].clone(),
    };
    let Some(solution) = solution else {
        if readings.measured[i].is_some() {
            report.reason = Some("the batch did not converge".to_owned());
        }
        return report;
    };
    let used = readings.measured[i].is_some();
    match (used, readings.values[i], sigma) {
        (true, Some(value), Some(sigma)) => {
            let sigma = sigma.get();
            let adjustment = solution.adjustment(i);
            let redundancy = solution.redundancy(i);
            report.reconciled = Some(value + sigma * adjustment);
            report.adjustment = Some(sigma * adjustment);
            report.redundancy = Some(redundancy);
            report.uncertainty_reconciled =
                Some(COVERAGE_FACTOR * sigma * (1.0 - redundancy).max(0.0).sqrt());
            report.class = class(solution.is_redundant(i), redundancy);
            if report.class == Class::Redundant {
                report.standardised_adjustment = Some(adjustment / redundancy.sqrt());
                let critical = solution.single_test().map(|test| test.critical_value);
                report.detectable = critical.map(|c| detectable(c, sigma / redundancy.sqrt()));
            }
        }
        _ => {
            if let Some((value, sigma)) = solution.predict(i) {
                report.reconciled = Some(unit.from_internal(value));
                report.uncertainty_reconciled =
                    Some(COVERAGE_FACTOR * unit.difference_from_internal(sigma));
            }
        }
    }
    report
}

/// The class of an observation in use.
pub fn class(redundant: bool, redundancy: f64) -> Class {
    if !redundant {
        Class::NotRedundant
    } else if redundancy < HARDLY_REDUNDANT {
        Class::HardlyRedundant
    } else {
        Class::Redundant
    }
}
