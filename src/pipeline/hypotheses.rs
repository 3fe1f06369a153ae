//! Hypotheses in words and units, which of them a solution can test, and the
//! smallest size of each that would be found.

use super::compiled::Compiled;
use super::solution::Solution;
use crate::diagnosis::{Evidence, HARDLY_REDUNDANT, detectable};
use crate::equations::{Blame, Hypothesis};
use crate::plant::Unit;
use crate::report::{self, Cause, Limit};

/// Variance of a hypothesis of several relations below this part of what its
/// relations have alone is rounding: they cancel, and nothing of it shows.
const CANCELS: f64 = 1e-9;

/// Why a hypothesis cannot be tested.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Unseen {
    /// The reading is not in use.
    Unused,
    /// Nothing checks the reading.
    NotRedundant,
    /// No error of believable size would show.
    Hardly,
    /// Nothing checks the balances.
    Unchecked,
    /// What flows has an enthalpy that nothing determines.
    UnknownEnthalpy,
}

impl Unseen {
    /// For people.
    pub fn in_words(self) -> &'static str {
        match self {
            Unseen::Unused => "not in use",
            Unseen::NotRedundant => "nothing checks it",
            Unseen::Hardly => "checked so weakly that no error of believable size would show",
            Unseen::Unchecked => "nothing checks its balances",
            Unseen::UnknownEnthalpy => "nothing determines the enthalpy of what would flow",
        }
    }
}

/// What a solution says of a hypothesis, or why nothing of it would show.
pub type Judged = Result<Evidence, Unseen>;

/// Redundancy down to which a tag may join a suspect's group. A gross error moves
/// the solution that redundancy is taken at: a tag that is weakly redundant
/// without it can come out hardly redundant with it.
const WEAKLY_REDUNDANT: f64 = 0.1 * HARDLY_REDUNDANT;

/// What a solution says of a hypothesis, in internal units.
///
/// # Errors
/// Why nothing of it would show.
pub fn testable(solution: &Solution, hypothesis: &Hypothesis) -> Judged {
    evidence(solution, hypothesis, HARDLY_REDUNDANT)
}

/// The same of a hypothesis that need not stand out by itself.
///
/// # Errors
/// Why nothing of it would show.
pub fn arguable(solution: &Solution, hypothesis: &Hypothesis) -> Judged {
    evidence(solution, hypothesis, WEAKLY_REDUNDANT)
}

fn evidence(solution: &Solution, hypothesis: &Hypothesis, least: f64) -> Judged {
    if let Some(i) = hypothesis.observation() {
        if solution.measured(i).is_none() {
            return Err(Unseen::Unused);
        }
        if !solution.is_redundant(i) {
            return Err(Unseen::NotRedundant);
        }
        if solution.redundancy(i) < least {
            return Err(Unseen::Hardly);
        }
        return solution.evidence(hypothesis).ok_or(Unseen::NotRedundant);
    }
    let rows = hypothesis.rows(solution.layout(), solution.x());
    if solution.is_unchecked(&rows) {
        return Err(Unseen::Unchecked);
    }
    if let Some(h) = hypothesis.carries(solution.layout())
        && !solution.is_observable(&[(h, 1.0)])
        && solution.checks_energy_of(h)
    {
        return Err(Unseen::UnknownEnthalpy);
    }
    let evidence = solution.evidence(hypothesis).ok_or(Unseen::Unchecked)?;
    let alone = |&(k, phi): &(usize, f64)| {
        let miss = solution.miss(k);
        miss.map_or(0.0, |miss| (phi / miss.sigma).powi(2))
    };
    let alone: f64 = rows.iter().map(alone).sum();
    if evidence.sigma.powi(-2) < CANCELS * alone {
        return Err(Unseen::Unchecked);
    }
    // Of believable size is what is no more than flows there. Through a closed
    // valve nothing does.
    let (k, phi) = rows[0];
    let flows = !matches!(hypothesis.blame, Blame::Passing { .. });
    if flows && evidence.sigma * phi.abs() > solution.relation_scale(k) {
        return Err(Unseen::Hardly);
    }
    Ok(evidence)
}

/// A hypothesis in the words of the report.
pub fn named(compiled: &Compiled, hypothesis: &Hypothesis) -> report::Hypothesis {
    let plant = compiled.plant();
    let equipment = |of: crate::plant::EquipmentId| plant.equipment[of.0].name.clone();
    let (cause, of, side) = match &hypothesis.blame {
        Blame::Observation(i) => match plant.tags.get(*i) {
            Some(tag) => (Cause::Bias, tag.name.clone(), None),
            None => {
                let assumption = &plant.assumptions[i - plant.tags.len()];
                (Cause::Departure, assumption.name.clone(), None)
            }
        },
        Blame::Leak { of, side, .. } => (Cause::Leak, equipment(*of), Some(side.clone())),
        Blame::LeakBetween { of, sides, .. } => {
            let side = format!("{} into {}", sides[0], sides[1]);
            (Cause::LeakBetween, equipment(*of), Some(side))
        }
        Blame::Passing { stream, .. } => {
            (Cause::Passing, plant.streams[stream.0].name.clone(), None)
        }
        Blame::Loss { of, .. } => (Cause::HeatLoss, equipment(*of), None),
    };
    report::Hypothesis { cause, of, side }
}

/// The unit of a hypothesis' size, and the factor from the internal one.
pub fn unit(compiled: &Compiled, hypothesis: &Hypothesis) -> (String, f64) {
    let plant = compiled.plant();
    let of_unit = |unit: &Unit| (unit.symbol.clone(), unit.difference_from_internal(1.0));
    match hypothesis.blame {
        Blame::Observation(i) => match plant.tags.get(i) {
            Some(tag) => of_unit(&tag.unit),
            None => of_unit(&plant.assumptions[i - plant.tags.len()].unit),
        },
        Blame::Loss { .. } => ("kW".to_owned(), 1.0),
        _ => ("kg/s".to_owned(), 1.0),
    }
}

/// What a solution says of every hypothesis, in their order.
pub fn judged(compiled: &Compiled, solution: &Solution) -> Vec<Judged> {
    let hypotheses = compiled.hypotheses().iter();
    hypotheses.map(|h| testable(solution, h)).collect()
}

/// What would be found of every hypothesis, and what would go unseen: the
/// unseen first, otherwise in the order of the hypotheses.
pub fn limits(compiled: &Compiled, judged: &[Judged], critical: Option<f64>) -> Vec<Limit> {
    let hypotheses = compiled.hypotheses().iter().zip(judged);
    let limits = hypotheses.map(|(hypothesis, judged)| {
        let (unit, factor) = unit(compiled, hypothesis);
        let mut limit = Limit {
            hypothesis: named(compiled, hypothesis),
            detectable: None,
            standardised: None,
            unit,
            reason: None,
        };
        match (*judged, critical) {
            (Ok(evidence), Some(c)) => {
                limit.detectable = Some(factor * detectable(c, evidence.sigma));
                limit.standardised = Some(evidence.standardised);
            }
            (Ok(_), None) => limit.reason = Some(Unseen::NotRedundant.in_words().to_owned()),
            (Err(unseen), _) => limit.reason = Some(unseen.in_words().to_owned()),
        }
        limit
    });
    let mut limits: Vec<Limit> = limits.collect();
    limits.sort_by_key(|limit| limit.detectable.is_some());
    limits
}
