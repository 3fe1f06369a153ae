//! Which readings a reconciled value hangs on.
//!
//! To first order the value is a sum of k_i y_i over the readings in sigma, with
//! k = G P g from the gradient g of the value and the covariance P of the
//! states. Its variance is the sum of k_i^2, and reading i moves it by
//! k_i r_i / R_ii from what it is without that reading, since r_i / R_ii is what
//! the reading is off from what the others predict for it.

use super::attempt::attempt;
use super::class_set;
use super::compiled::Compiled;
use super::line_up::Situation;
use super::solution::Solution;
use super::streams::{BAR, ZERO_CELSIUS};
use crate::diagnosis::HARDLY_REDUNDANT;
use crate::plant::{Batch, ByHand, COVERAGE_FACTOR, Plant, StreamId, Unit};
use crate::report::{Influence, Influences};

/// A part of the variance below this is not worth telling.
const LEAST_SHARE: f64 = 1e-4;

/// Why there is nothing to tell.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum NoInfluences {
    /// The plant has no such thing.
    #[error("{0}")]
    Unknown(String),
    /// The batch did not converge.
    #[error("the batch did not converge: {0}")]
    NotConverged(String),
    /// It is out of service in this batch, or the plant is down.
    #[error("{0}")]
    OutOfService(String),
    /// Nothing determines the value.
    #[error("the readings do not determine it")]
    Unobservable,
}

/// A value with its gradient, in the unit of the report.
struct Value {
    value: f64,
    gradient: Vec<(usize, f64)>,
    unit: String,
}

/// The readings that moved a reconciled value most: a `quantity` of a stream or
/// piece of equipment, or, without one, a tag or assumption.
///
/// # Errors
/// See [`NoInfluences`].
pub fn influences(
    compiled: &Compiled,
    batch: &Batch,
    by_hand: &[ByHand],
    of: &str,
    quantity: Option<&str>,
) -> Result<Influences, NoInfluences> {
    let situation = Situation::new(compiled, batch, by_hand);
    if let Some(reason) = situation.standstill() {
        return Err(NoInfluences::OutOfService(format!(
            "the plant is not running: {reason}"
        )));
    }
    if situation.is_out(of) {
        let reason = format!("\"{of}\" is out of service in this batch");
        return Err(NoInfluences::OutOfService(reason));
    }
    let (compiled, readings) = (situation.compiled(), &situation.readings);
    let found = attempt(compiled, &readings.measured).map_err(NoInfluences::NotConverged)?;
    let class_set = class_set::of(compiled, &found);
    let solution = Solution::new(compiled, &found, &class_set);
    let target = value(compiled, &solution, situation.stream_name(of), quantity)?;
    let sigma = solution.uncertainty(&target.gradient);
    let sigma = sigma.ok_or(NoInfluences::Unobservable)?;
    let mut gradient = vec![0.0; compiled.system().layout.len()];
    for &(j, slope) in &target.gradient {
        gradient[j] += slope;
    }
    let response = solution.covariance().column(&gradient, &[], &[]);
    let variance: f64 = response.residuals.iter().map(|k| k * k).sum();
    let mut influences: Vec<Influence> = names(compiled.plant())
        .enumerate()
        .filter_map(|(i, (name, unit))| {
            let sigma = readings.sigmas[i].filter(|_| readings.measured[i].is_some())?;
            let k = -response.residuals[i];
            let redundancy = solution.redundancy(i);
            let checked = redundancy >= HARDLY_REDUNDANT;
            Some(Influence {
                tag: name.to_owned(),
                sensitivity: k / sigma.get(),
                unit: unit.symbol.clone(),
                share: if variance > 0.0 {
                    k * k / variance
                } else {
                    0.0
                },
                moved: checked.then(|| -k * solution.adjustment(i) / redundancy),
            })
        })
        .filter(|influence| influence.share >= LEAST_SHARE)
        .collect();
    influences.sort_by(|a, b| b.share.total_cmp(&a.share));
    Ok(Influences {
        of: of.to_owned(),
        quantity: quantity.map(str::to_owned),
        value: target.value,
        uncertainty: COVERAGE_FACTOR * sigma,
        unit: target.unit,
        readings: influences,
    })
}

/// Tags and assumptions in the order of the observations.
fn names(plant: &Plant) -> impl Iterator<Item = (&str, &Unit)> {
    let tags = plant.tags.iter().map(|tag| (tag.name.as_str(), &tag.unit));
    let assumptions = plant.assumptions.iter();
    tags.chain(assumptions.map(|a| (a.name.as_str(), &a.unit)))
}

fn value(
    compiled: &Compiled,
    solution: &Solution,
    of: &str,
    quantity: Option<&str>,
) -> Result<Value, NoInfluences> {
    let plant = compiled.plant();
    let unknown = |what: String| NoInfluences::Unknown(what);
    let Some(quantity) = quantity else {
        let known = names(plant).enumerate().find(|(_, (name, _))| *name == of);
        let (i, (_, unit)) =
            known.ok_or_else(|| unknown(format!("there is no tag or assumption \"{of}\"")))?;
        let (value, gradient) = solution.prediction(i).ok_or(NoInfluences::Unobservable)?;
        let factor = unit.difference_from_internal(1.0);
        return Ok(Value {
            value: unit.from_internal(value),
            gradient: gradient.into_iter().map(|(j, d)| (j, factor * d)).collect(),
            unit: unit.symbol.clone(),
        });
    };
    if let Some(s) = plant.streams.iter().position(|stream| stream.name == of) {
        return of_stream(solution, StreamId(s), quantity).ok_or_else(|| {
            unknown(format!(
                "a stream has no quantity \"{quantity}\"; it has mass_flow, pressure, temperature, enthalpy"
            ))
        });
    }
    let Some(e) = plant.equipment.iter().position(|item| item.name == of) else {
        return Err(unknown(format!(
            "there is no stream or piece of equipment \"{of}\""
        )));
    };
    let own = solution.layout().own[e];
    let (state, unit) = match quantity {
        "heat" => (own.heat, "kW"),
        "work" => (own.work, "kW"),
        "power" => (own.power, "kW"),
        "loss" => (own.loss, "kW"),
        "holdup_change" => (own.holdup, "kg/s"),
        _ => (None, ""),
    };
    let j = state.ok_or_else(|| {
        unknown(format!(
            "\"{of}\" has no state \"{quantity}\"; equipment has, as its kind does, heat, work, power, loss, holdup_change"
        ))
    })?;
    Ok(Value {
        value: solution.x()[j],
        gradient: vec![(j, 1.0)],
        unit: unit.to_owned(),
    })
}

fn of_stream(solution: &Solution, s: StreamId, quantity: &str) -> Option<Value> {
    let layout = solution.layout();
    let (x, m, p, h) = (solution.x(), layout.m(s), layout.p(s), layout.h(s));
    let (value, gradient, unit) = match quantity {
        "mass_flow" => (x[m], vec![(m, 1.0)], "kg/s"),
        "pressure" => (x[p] / BAR, vec![(p, 1.0 / BAR)], "bar"),
        "enthalpy" => (x[h], vec![(h, 1.0)], "kJ/kg"),
        "temperature" => {
            let state = solution.state(s)?;
            (
                state.t - ZERO_CELSIUS,
                vec![(p, state.t_p), (h, state.t_h)],
                "Cel",
            )
        }
        _ => return None,
    };
    Some(Value {
        value,
        gradient,
        unit: unit.to_owned(),
    })
}
