//! What a plant's tags can and cannot determine, before any batch.
//!
//! Rank needs a believable operating point, not a solution: the normal readings
//! of the plant file where it states them, and what the solved state predicts
//! for the other tags. Classes hold for almost every point; redundancies and
//! detectable errors are those of that point.

use super::attempt::{Found, attempt};
use super::class_set;
use super::compiled::Compiled;
use super::solution::Solution;
use super::tags::class;
use crate::diagnosis::detectable_bias;
use crate::equations::{Measured, StateKind, start};
use crate::plant::{Sigma, StreamId, Uncertainty, Unit};
use crate::report::{
    AssessedQuantity, AssessedStream, AssessedTag, Assessment, Class, Observability,
};
use indexmap::IndexMap;
use std::collections::BTreeSet;

/// Part of its range that a tag without a normal reading is taken to read.
const PART_OF_RANGE: f64 = 0.7;

/// What the tags can and cannot determine.
pub fn assess(compiled: &Compiled) -> Assessment {
    let found = operating_point(compiled);
    let operating_point = match &found {
        Ok(_) => {
            "normal readings of the plant file, and what they predict for the tags without one"
                .to_owned()
        }
        Err(reason) => format!("none was found: {reason}"),
    };
    let plant = compiled.plant();
    let system = compiled.system();
    let mut assessment = Assessment {
        plant: plant.name.clone(),
        revision: compiled.revision(),
        operating_point,
        states: system.layout.len(),
        relations: 0,
        observations: system.observations.len(),
        unobservable_directions: 0,
        degrees_of_freedom: 0,
        tags: IndexMap::new(),
        assumptions: IndexMap::new(),
        streams: IndexMap::new(),
        unobservable: Vec::new(),
        warnings: Vec::new(),
    };
    let Ok(found) = found else {
        return assessment;
    };
    let class_set = class_set::apart(compiled, &found);
    let solution = Solution::new(compiled, &found, &class_set);
    let classes = solution.classes();
    assessment.relations = classes.relations_independent;
    assessment.unobservable_directions = classes.unobservable_directions;
    assessment.degrees_of_freedom = classes.degrees_of_freedom;
    for (i, tag) in plant.tags.iter().enumerate() {
        let entry = assessed_tag(&solution, i, &tag.unit);
        assessment.tags.insert(tag.name.clone(), entry);
    }
    for (a, assumption) in plant.assumptions.iter().enumerate() {
        let entry = assessed_tag(&solution, plant.tags.len() + a, &assumption.unit);
        assessment
            .assumptions
            .insert(assumption.name.clone(), entry);
    }
    for (s, stream) in plant.streams.iter().enumerate() {
        let entry = assessed_stream(compiled, &solution, StreamId(s));
        assessment.streams.insert(stream.name.clone(), entry);
    }
    assessment.unobservable = unobservable(compiled, &solution);
    assessment
}

/// Solves the plant at its normal readings; tags without one then read what
/// the solution predicts for them.
fn operating_point(compiled: &Compiled) -> Result<Found<'_>, String> {
    let plant = compiled.plant();
    let system = compiled.system();
    let assumptions = plant
        .assumptions
        .iter()
        .map(|a| measured(&a.unit, a.value, &a.uncertainty));
    let mut known: Vec<Option<Measured>> = plant
        .tags
        .iter()
        .map(|tag| {
            let of_range = |(low, high): (f64, f64)| low + PART_OF_RANGE * (high - low);
            let reading = tag.normal.or_else(|| tag.range.map(of_range))?;
            measured(&tag.unit, reading, &tag.uncertainty)
        })
        .chain(assumptions)
        .collect();
    let found = attempt(compiled, &known);
    let x = match &found {
        Ok(found) => found.outcome.x.clone(),
        Err(_) => start(plant, system, &known).x,
    };
    let complete = known[..plant.tags.len()].iter().all(Option::is_some);
    if complete && let Ok(found) = found {
        return Ok(found);
    }
    for (i, tag) in plant.tags.iter().enumerate() {
        if (known[i].is_none() || found.is_err())
            && let Some((value, _)) = system.predict(i, &x)
        {
            let reading = tag.unit.from_internal(value);
            known[i] = measured(&tag.unit, reading, &tag.uncertainty);
        }
    }
    attempt(compiled, &known)
}

fn measured(unit: &Unit, reading: f64, uncertainty: &Uncertainty) -> Option<Measured> {
    let sigma = uncertainty.sigma(reading)?;
    Some(Measured {
        value: unit.to_internal(reading),
        sigma: Sigma::new(unit.difference_to_internal(sigma.get()))?,
    })
}

fn assessed_tag(solution: &Solution, i: usize, unit: &Unit) -> AssessedTag {
    let mut tag = AssessedTag {
        class: Class::Unused,
        redundancy: None,
        detectable: None,
        unit: unit.symbol.clone(),
    };
    let Some(measured) = solution.measured(i) else {
        return tag;
    };
    let redundancy = solution.redundancy(i);
    tag.class = class(solution.is_redundant(i), redundancy);
    tag.redundancy = Some(redundancy);
    if let (Class::Redundant, Some(test)) = (tag.class, solution.single_test()) {
        let sigma = unit.difference_from_internal(measured.sigma.get());
        tag.detectable = Some(detectable_bias(test.critical_value, sigma, redundancy));
    }
    tag
}

fn assessed_stream(compiled: &Compiled, solution: &Solution, s: StreamId) -> AssessedStream {
    let layout = &compiled.system().layout;
    let of = |gradient: &[(usize, f64)]| match solution.is_observable(gradient) {
        true => Observability::Observable,
        false => Observability::Unobservable,
    };
    AssessedStream {
        mass_flow: of(&[(layout.m(s), 1.0)]),
        pressure: of(&[(layout.p(s), 1.0)]),
        temperature: of(&solution.temperature(s).1),
        enthalpy: of(&[(layout.h(s), 1.0)]),
    }
}

/// Every state that is not determined, and what it hangs together with.
fn unobservable(compiled: &Compiled, solution: &Solution) -> Vec<AssessedQuantity> {
    let layout = &compiled.system().layout;
    let unobservable = (0..layout.len()).filter(|&j| !solution.is_observable(&[(j, 1.0)]));
    unobservable
        .map(|j| {
            let (quantity, of) = state_name(compiled, j);
            let mut together: Vec<String> = moves_with(solution, j)
                .into_iter()
                .map(|other| {
                    let (quantity, of) = state_name(compiled, other);
                    format!("{quantity} of {of}")
                })
                .collect();
            let others = together.len();
            together.truncate(6);
            let why = if others == 0 {
                format!("no tag, assumption or balance says anything of it; a tag for the {quantity} would")
            } else {
                let more = if others > together.len() { " and others" } else { "" };
                format!(
                    "it can move together with {}{more} without any tag or balance noticing; a tag for one of them would determine it",
                    together.join(", ")
                )
            };
            AssessedQuantity { quantity, of, why }
        })
        .collect()
}

/// The other states of the unobservable directions that state `j` is part of.
fn moves_with(solution: &Solution, j: usize) -> BTreeSet<usize> {
    let directions = solution.classes().unobservable_basis().iter();
    directions
        .filter(|direction| direction.iter().any(|&(state, _)| state == j))
        .flat_map(|direction| direction.iter().map(|&(state, _)| state))
        .filter(|&state| state != j)
        .collect()
}

/// A state in the words of the plant file: quantity, and stream or equipment.
fn state_name(compiled: &Compiled, j: usize) -> (String, String) {
    let layout = &compiled.system().layout;
    let plant = compiled.plant();
    if let Some(s) = layout.stream_of(j) {
        let quantity = match layout.kind(j) {
            StateKind::MassFlow => "mass-flow",
            StateKind::Pressure => "pressure",
            _ => "enthalpy",
        };
        return (quantity.to_owned(), plant.streams[s.0].name.clone());
    }
    for (own, equipment) in layout.own.iter().zip(&plant.equipment) {
        let states = [
            (own.work, "work"),
            (own.heat, "heat"),
            (own.loss, "loss"),
            (own.power, "power"),
            (own.holdup, "holdup-change"),
        ];
        if let Some((_, quantity)) = states.iter().find(|(state, _)| *state == Some(j)) {
            return ((*quantity).to_owned(), equipment.name.clone());
        }
    }
    ("pressure".to_owned(), "barometer".to_owned())
}
