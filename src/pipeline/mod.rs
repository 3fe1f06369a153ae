//! From a plant and a batch to a report: the one place that knows the order of
//! the stages.
//!
//! line-up -> readings -> start -> solve -> sides of saturation -> classes -> variances ->
//! tests -> report. Pure: no clock, no I/O, one thread, a fixed order of
//! operations. What depends on the plant alone is compiled once, and what
//! depends on the set of phases, zero flows and active bounds is kept by that
//! set ([`Compiled`]).

mod assess;
mod attempt;
mod averaged;
mod checks;
mod class_set;
mod compiled;
mod equipment;
mod findings;
mod hypotheses;
mod influence;
mod line_up;
mod phases;
mod readings;
mod refine;
mod robust;
mod same_quantity;
mod search;
mod solution;
mod streams;
mod suspects;
mod tags;
mod tell_apart;
mod trial;

pub use assess::assess;
pub use compiled::Compiled;
pub use influence::{NoInfluences, influences};
pub use suspects::suppose;
pub use tell_apart::tell_apart;

use crate::diagnosis::{chi_square_quantile, chi_square_tail};
use crate::plant::{Batch, ByHand};
use crate::report::{Finding, GlobalTest, Report, Verdict};
use indexmap::IndexMap;
use line_up::Situation;
use readings::Readings;
use solution::Solution;

/// Reconciles one batch.
pub fn reconcile(compiled: &Compiled, batch: &Batch) -> Report {
    reconcile_with(compiled, batch, &[])
}

/// Reconciles one batch with what was decided by hand about its tags.
pub fn reconcile_with(compiled: &Compiled, batch: &Batch, by_hand: &[ByHand]) -> Report {
    let situation = Situation::new(compiled, batch, by_hand);
    let mut report = if situation.standstill().is_some() {
        let mut report = empty_report(compiled, batch, &situation.readings);
        report.tags = tags::tags(compiled, &situation.readings, None);
        report.assumptions = tags::assumptions(compiled, &situation.readings, None);
        report
    } else {
        balanced(situation.compiled(), batch, &situation.readings)
    };
    situation.complete(&mut report);
    report
}

/// What stands out in a batch before any balance is made; part of its report.
pub fn findings(compiled: &Compiled, batch: &Batch, by_hand: &[ByHand]) -> Vec<Finding> {
    findings::findings(&Situation::new(compiled, batch, by_hand))
}

/// The report of the plant as it is lined up.
fn balanced(compiled: &Compiled, batch: &Batch, readings: &Readings) -> Report {
    let mut report = empty_report(compiled, batch, readings);
    let found = match attempt::attempt(compiled, &readings.measured) {
        Ok(found) => found,
        Err(reason) => {
            report.reason = Some(reason);
            report.tags = tags::tags(compiled, readings, None);
            report.assumptions = tags::assumptions(compiled, readings, None);
            return report;
        }
    };
    let class_set = class_set::of(compiled, &found);
    let solution = Solution::new(compiled, &found, &class_set);
    let global = global_test(&solution, compiled.plant().confidence);
    report.verdict = verdict(&global);
    report.global_test = Some(global);
    report.single_test = solution.single_test();
    report.tags = tags::tags(compiled, readings, Some(&solution));
    report.assumptions = tags::assumptions(compiled, readings, Some(&solution));
    report.streams = streams::streams(compiled, &solution);
    report.equipment = equipment::equipment(compiled, &solution);
    report.remarks.extend(solution.remarks(compiled));
    let critical = report.single_test.as_ref().map(|test| test.critical_value);
    let judged = hypotheses::judged(compiled, &solution);
    report.limits = hypotheses::limits(compiled, &judged, critical);
    suspects::name(compiled, readings, &found, &solution, &judged, &mut report);
    report
}

fn empty_report(compiled: &Compiled, batch: &Batch, readings: &Readings) -> Report {
    Report {
        plant: compiled.plant().name.clone(),
        revision: compiled.revision(),
        batch: batch.name.clone(),
        start: batch.start,
        end: batch.end,
        verdict: Verdict::NotConverged,
        reason: None,
        global_test: None,
        single_test: None,
        tags: IndexMap::new(),
        assumptions: IndexMap::new(),
        streams: IndexMap::new(),
        equipment: IndexMap::new(),
        suspects: Vec::new(),
        suspects_remarks: Vec::new(),
        after_suspects: None,
        limits: Vec::new(),
        by_hand: readings.by_hand.clone(),
        line_up: None,
        findings: Vec::new(),
        steadiness: batch.steadiness.as_ref().map(averaged::steadiness),
        ignored_tags: readings.ignored.clone(),
        remarks: readings.remarks.clone(),
    }
}

fn global_test(solution: &Solution, confidence: f64) -> GlobalTest {
    let statistic = solution.objective();
    let degrees_of_freedom = solution.degrees_of_freedom();
    GlobalTest {
        statistic,
        degrees_of_freedom,
        critical_value: chi_square_quantile(confidence, degrees_of_freedom),
        p_value: chi_square_tail(statistic, degrees_of_freedom),
        confidence,
    }
}

fn verdict(test: &GlobalTest) -> Verdict {
    match test.critical_value {
        None => Verdict::NotRedundant,
        Some(critical) if test.statistic > critical => Verdict::Inconsistent,
        Some(_) => Verdict::Consistent,
    }
}
