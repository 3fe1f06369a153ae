//! What a plant's tags can and cannot determine, before any batch.
//!
//! Rank needs a believable operating point, not a solution: the normal readings
//! of the plant file where it states them, and what the solved state predicts
//! for the other tags. Classes hold for almost every point; redundancies and
//! detectable errors are those of that point.

use super::attempt::{Found, attempt};
use super::class_set;
use super::compiled::Compiled;
use super::hypotheses::{judged, limits};
use super::line_up;
use super::solution::Solution;
use super::tags::class;
use crate::diagnosis::detectable;
use crate::equations::{Measured, StateKind, start};
use crate::plant::{Quantity, Sigma, StreamId, Uncertainty, Unit};
use crate::report::{
    AssessedQuantity, AssessedStream, AssessedTag, Assessment, Class, LineUp, Observability,
};
use indexmap::IndexMap;
use std::collections::BTreeSet;

/// Part of its range that a tag without a normal reading is taken to read.
const PART_OF_RANGE: f64 = 0.7;

/// Factor on the sigma of readings that are only guessed.
const LOOSE: f64 = 10.0;

/// What the tags can and cannot determine, in the line-up of normal operation.
pub fn assess(compiled: &Compiled) -> Assessment {
    let (lined_up, told) = line_up::normal(compiled);
    let mut assessment = assess_all(lined_up.compiled());
    assessment.operating_point = with_line_up(assessment.operating_point, told.as_ref());
    assessment.line_up = told;
    let Some(places) = lined_up.places() else {
        return assessment;
    };
    let plant = compiled.plant();
    line_up::spread(&mut assessment.streams, plant, places);
    let unused = |unit: &Unit| AssessedTag {
        class: Class::Unused,
        redundancy: None,
        detectable: None,
        unit: unit.symbol.clone(),
    };
    let whole = |names: Vec<(&String, &Unit)>, mut known: IndexMap<String, AssessedTag>| {
        let entries = names.into_iter().map(|(name, unit)| {
            let entry = known.swap_remove(name).unwrap_or_else(|| unused(unit));
            (name.clone(), entry)
        });
        entries.collect()
    };
    let tags = plant.tags.iter().map(|tag| (&tag.name, &tag.unit));
    assessment.tags = whole(tags.collect(), assessment.tags);
    let assumptions = plant.assumptions.iter().map(|a| (&a.name, &a.unit));
    assessment.assumptions = whole(assumptions.collect(), assessment.assumptions);
    assessment
}

/// An operating point in words with its line-up.
pub(super) fn with_line_up(in_words: String, line_up: Option<&LineUp>) -> String {
    match line_up {
        Some(line_up) if line_up.name != "full" => format!("{in_words}, {}", line_up.name),
        _ => in_words,
    }
}

fn assess_all(compiled: &Compiled) -> Assessment {
    let (found, operating_point) = operating_point(compiled);
    let plant = compiled.plant();
    let system = compiled.system();
    let mut assessment = Assessment {
        plant: plant.name.clone(),
        revision: compiled.revision(),
        operating_point,
        line_up: None,
        states: system.layout.len(),
        relations: 0,
        observations: system.observations.len(),
        unobservable_directions: 0,
        degrees_of_freedom: 0,
        tags: IndexMap::new(),
        assumptions: IndexMap::new(),
        limits: Vec::new(),
        streams: IndexMap::new(),
        unobservable: Vec::new(),
        warnings: Vec::new(),
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
    let critical = solution.single_test().map(|test| test.critical_value);
    assessment.limits = limits(compiled, &judged(compiled, &solution), critical);
    // The operating point is no batch: nothing is held against anything.
    (assessment.limits.iter_mut()).for_each(|limit| limit.standardised = None);
    assessment.unobservable = unobservable(compiled, &solution);
    assessment
}

/// Solves the plant at its normal readings; answers in words too where that is.
///
/// A tag without one reads at first, loosely, what the start predicts for it,
/// and then what the solution does. Where no solution is found the start itself
/// serves: rank is the same at almost every point.
pub(super) fn operating_point(compiled: &Compiled) -> (Found<'_>, String) {
    let plant = compiled.plant();
    let system = compiled.system();
    let assumptions = plant
        .assumptions
        .iter()
        .map(|a| measured(&a.unit, a.value, &a.uncertainty));
    let known: Vec<Option<Measured>> = plant
        .tags
        .iter()
        .map(|tag| {
            let of_range = |(low, high): (f64, f64)| low + PART_OF_RANGE * (high - low);
            // The range of a thermometer says little of what it reads.
            let reads_in_range = !matches!(tag.quantity, Quantity::Temperature(_));
            let range = tag.range.filter(|_| reads_in_range);
            let reading = tag.normal.or_else(|| range.map(of_range))?;
            measured(&tag.unit, reading, &tag.uncertainty)
        })
        .chain(assumptions)
        .collect();
    let started = start(plant, system, &known, 1.0).x;
    let loosely = complete(compiled, &known, &started, LOOSE);
    let x = match attempt(compiled, &loosely) {
        Ok(found) => found.outcome.x,
        Err(_) => started,
    };
    // What was not stated now reads what the solution says.
    let exactly = complete(compiled, &known, &x, 1.0);
    let untold = plant.tags.iter().filter(|tag| tag.normal.is_none());
    let guessed: Vec<&str> = untold.map(|tag| tag.name.as_str()).collect();
    match attempt(compiled, &exactly) {
        Ok(found) => (found, in_words(&guessed, None)),
        Err(reason) => {
            let in_words = in_words(&guessed, Some(&reason));
            (Found::unsolved(compiled, exactly, &x), in_words)
        }
    }
}

/// Readings of all tags: the known ones, and what `x` predicts for the others
/// with `widened` times their sigma.
fn complete(
    compiled: &Compiled,
    known: &[Option<Measured>],
    x: &[f64],
    widened: f64,
) -> Vec<Option<Measured>> {
    let mut readings = known.to_vec();
    for (i, tag) in compiled.plant().tags.iter().enumerate() {
        if readings[i].is_some() {
            continue;
        }
        let predicted = compiled.system().predict(i, x);
        let reading = predicted.map(|(value, _)| tag.unit.from_internal(value));
        readings[i] = reading
            .and_then(|reading| measured(&tag.unit, reading, &tag.uncertainty))
            .and_then(|m| {
                Some(Measured {
                    sigma: Sigma::new(m.sigma.get() * widened)?,
                    ..m
                })
            });
    }
    readings
}

/// The operating point for people.
fn in_words(guessed: &[&str], trouble: Option<&str>) -> String {
    if let Some(reason) = trouble {
        return format!(
            "a rough guess, since no solution was found ({reason}): classes hold, redundancies and detectable errors are rough; `normal` readings of the tags would help"
        );
    }
    match guessed {
        [] => "the normal readings of the plant file".to_owned(),
        _ => format!(
            "the normal readings of the plant file, and for {} without one a guess from their range or from the others: redundancies are rough there",
            guessed.join(", ")
        ),
    }
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
        tag.detectable = Some(detectable(test.critical_value, sigma / redundancy.sqrt()));
    }
    tag
}

fn assessed_stream(compiled: &Compiled, solution: &Solution, s: StreamId) -> AssessedStream {
    let layout = &compiled.system().layout;
    let class = |observable| match observable {
        true => Observability::Observable,
        false => Observability::Unobservable,
    };
    let state = |j: usize| class(solution.is_observable(&[(j, 1.0)]));
    AssessedStream {
        mass_flow: state(layout.m(s)),
        pressure: state(layout.p(s)),
        temperature: class(solution.temperature(s).is_some()),
        enthalpy: state(layout.h(s)),
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
                    "it can move together with {}{more} without any tag or balance noticing; a tag for one of them would take away one of these freedoms",
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
