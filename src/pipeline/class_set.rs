//! What holds for every batch with the same tags in use, phases, zero flows
//! and active bounds: rank, degrees of freedom, classes, and the critical value
//! of the single tests.

use super::attempt::Found;
use super::compiled::Compiled;
use super::hypotheses::testable;
use super::solution::{Shift, Solution};
use crate::diagnosis::{Critical, Method, critical_value};
use crate::equations::{Hypothesis, System};
use crate::plant::StreamId;
use crate::report::SingleTest;
use crate::solver::{Classes, Covariance, Problem, classify};
use nalgebra::DMatrix;
use sha2::{Digest, Sha256};
use std::sync::Arc;

/// A flow below this part of the largest is zero: its stream's enthalpy drops
/// out of every energy balance.
const ZERO_FLOW: f64 = 1e-7;

/// Which statistics a critical value is the largest of: values that an earlier
/// edition kept are not held against this one's.
const EDITION: u32 = 2;

/// Enthalpy this close to the saturation line is on it, kJ/kg.
const ON_THE_LINE: f64 = 1e-5;

/// What tells one class set from another.
#[derive(Clone, Debug, PartialEq, Eq, Hash)]
pub struct ClassKey(Vec<u8>);

impl ClassKey {
    /// The key of a solution.
    pub fn new(compiled: &Compiled, found: &Found) -> Self {
        let system = compiled.system();
        let x = &found.outcome.x;
        let streams = || (0..system.layout.streams()).map(StreamId);
        let largest = streams().map(|s| x[system.layout.m(s)].abs());
        let zero = ZERO_FLOW * largest.fold(0.0, f64::max);
        let mut key = Vec::new();
        key.extend(found.case.measured().iter().map(|m| u8::from(m.is_some())));
        key.extend(found.outcome.active_bounds.iter().map(|&a| u8::from(a)));
        for s in streams() {
            key.push(side(system, s, x));
            key.push(u8::from(x[system.layout.m(s)].abs() <= zero));
        }
        ClassKey(key)
    }

    /// A short name of the key: the edition of the tests and the first 16
    /// hexadecimal digits of its SHA-256. Two line-ups may have the same key (one
    /// pump in the place of another), so the line-up's mark is in the name.
    pub fn name(&self, mark: &[u8]) -> String {
        let digest = match mark {
            [] => Sha256::digest(&self.0),
            _ => {
                let parts = [b"line-up ", mark, &self.0[..]];
                Sha256::digest(parts.concat())
            }
        };
        let digits: String = (digest.iter().take(8))
            .map(|byte| format!("{byte:02x}"))
            .collect();
        format!("{EDITION}-{digits}")
    }
}

/// A number for the side of the saturation line; on the line, where rounding
/// puts a stream on either, one for the line itself.
fn side(system: &System, s: StreamId, x: &[f64]) -> u8 {
    let h = x[system.layout.h(s)];
    match system.saturation(s, x) {
        None => 0,
        Some(at) if on_the_line(h, at.liquid.h) || on_the_line(h, at.vapour.h) => 1,
        Some(at) if h < at.liquid.h => 2,
        Some(at) if h < at.vapour.h => 3,
        Some(_) => 4,
    }
}

fn on_the_line(h: f64, line: f64) -> bool {
    (h - line).abs() < ON_THE_LINE
}

/// Classes and critical value of one class set.
pub struct ClassSet {
    /// Rank, degrees of freedom, observability and redundancy.
    pub classes: Arc<Classes>,
    /// Critical value; `None` where nothing is tested.
    pub single_test: Option<SingleTest>,
}

/// The class set of a solution; worked out where it is met for the first time.
///
/// Rank and classes are the same all over a class set, and so is an
/// unobservable direction that is one state. A direction of several states
/// turns with the solution, so it is worked out at each.
pub fn of(compiled: &Compiled, found: &Found) -> Arc<ClassSet> {
    let key = ClassKey::new(compiled, found);
    let name = key.name(compiled.mark());
    let known = compiled.class_set(key, || made_at(compiled, found, &name));
    if turns(&known.classes) {
        return Arc::new(ClassSet {
            classes: Arc::new(classes(found)),
            single_test: known.single_test.clone(),
        });
    }
    known
}

/// The classes of a solution with suspects in, and the test of the batch without
/// them, which they are held against.
pub fn with_test(compiled: &Compiled, found: &Found, test: &SingleTest) -> ClassSet {
    let key = ClassKey::new(compiled, found);
    let known = compiled.classes(key, || classes(found));
    let classes = if turns(&known) {
        Arc::new(classes(found))
    } else {
        known
    };
    ClassSet {
        classes,
        single_test: Some(test.clone()),
    }
}

fn turns(classes: &Classes) -> bool {
    let mut directions = classes.unobservable_basis().iter();
    directions.any(|direction| direction.len() > 1)
}

/// The class set of a solution that is no batch: nothing is remembered of it, so
/// that no batch's report depends on who asked for an assessment before.
pub fn apart(compiled: &Compiled, found: &Found) -> ClassSet {
    let name = ClassKey::new(compiled, found).name(compiled.mark());
    made_at(compiled, found, &name)
}

fn made_at(compiled: &Compiled, found: &Found, name: &str) -> ClassSet {
    let untested = ClassSet {
        classes: Arc::new(classes(found)),
        single_test: None,
    };
    let single_test = single_test(compiled, found, &untested, name);
    ClassSet {
        single_test,
        ..untested
    }
}

/// Variances at a solution.
pub fn covariance<'a>(
    compiled: &'a Compiled,
    found: &'a Found,
    classes: &'a Classes,
) -> Covariance<'a> {
    Covariance::new(
        compiled.symbolic(),
        found.case.structure(),
        &found.outcome.evaluation,
        found.case.state_scale(),
        found.case.relation_scale(),
        classes,
    )
}

/// Classes at a solution, by rank.
fn classes(found: &Found) -> Classes {
    classify(
        &found.case.system().structure,
        &found.outcome.evaluation,
        found.case.state_scale(),
        found.case.relation_scale(),
        &found.outcome.active_bounds,
        &found.case.used(),
    )
}

/// The critical value of the largest statistic of all hypotheses at a solution,
/// by simulation.
fn single_test(
    compiled: &Compiled,
    found: &Found,
    untested: &ClassSet,
    class_set: &str,
) -> Option<SingleTest> {
    if let Some(known) = compiled.recalled(class_set) {
        return Some(known);
    }
    let solution = Solution::new(compiled, found, untested);
    let structure = &found.case.system().structure;
    let used: Vec<usize> = (0..structure.observations.len())
        .filter(|&i| found.case.measured()[i].is_some() && solution.is_redundant(i))
        .collect();
    let tested: Vec<&Hypothesis> = (compiled.hypotheses().iter())
        .filter(|hypothesis| testable(&solution, hypothesis).is_ok())
        .collect();
    let shifts: Vec<Shift> = tested.iter().map(|h| solution.shift(h)).collect();
    let mut redundancy = DMatrix::zeros(used.len(), used.len());
    let mut rows = DMatrix::zeros(tested.len(), used.len());
    let mut error = vec![0.0; structure.observations.len()];
    for (column, &i) in used.iter().enumerate() {
        error[i] = 1.0;
        let response = solution.covariance().column(&[], &[], &error);
        error[i] = 0.0;
        for (row, &other) in used.iter().enumerate() {
            redundancy[(row, column)] = response.residuals[other];
        }
        for (row, shift) in shifts.iter().enumerate() {
            rows[(row, column)] = shift.numerator(&response.residuals, &response.multipliers);
        }
    }
    let one_sided: Vec<bool> = tested.iter().map(|h| h.one_sided).collect();
    let confidence = compiled.plant().confidence;
    let critical = critical_value(&redundancy, &rows, &one_sided, confidence)?;
    Some(in_report(critical, class_set))
}

fn in_report(critical: Critical, class_set: &str) -> SingleTest {
    SingleTest {
        critical_value: critical.value,
        method: match critical.method {
            Method::Simulated => "simulated",
            Method::Sidak => "sidak",
        }
        .to_owned(),
        statistics: critical.statistics,
        class_set: class_set.to_owned(),
        group_distance: critical.group_distance,
    }
}
