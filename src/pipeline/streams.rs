//! Streams in the report: kg/s, bar (absolute), Cel, kJ/kg.

use super::compiled::Compiled;
use super::solution::Solution;
use crate::equations;
use crate::plant::{COVERAGE_FACTOR, StreamId};
use crate::report::{Observability, Phase, QuantityReport, StreamReport};
use indexmap::IndexMap;

/// 0 Cel in K.
pub const ZERO_CELSIUS: f64 = 273.15;
/// bar in MPa.
pub const BAR: f64 = 0.1;
/// A quality this close to 0 or 1 is saturated liquid or vapour: the line
/// itself, up to rounding.
const ON_THE_LINE: f64 = 1e-6;

/// A unit of the report: its symbol, what it is in internal units, and its zero.
struct ReportUnit(&'static str, f64, f64);

/// Every stream of the plant.
pub fn streams(compiled: &Compiled, solution: &Solution) -> IndexMap<String, StreamReport> {
    let streams = compiled.plant().streams.iter().enumerate();
    streams
        .map(|(s, stream)| (stream.name.clone(), entry(compiled, solution, StreamId(s))))
        .collect()
}

fn entry(compiled: &Compiled, solution: &Solution, s: StreamId) -> StreamReport {
    let layout = &compiled.system().layout;
    let (m, p, h) = (layout.m(s), layout.p(s), layout.h(s));
    let state = |j: usize| Some((solution.x()[j], solution.uncertainty(&[(j, 1.0)])?));
    // Behind a closed valve nothing flows by the plant file, and that is certain.
    let flow = if compiled.system().is_closed(s) {
        Some((0.0, 0.0))
    } else {
        state(m)
    };
    StreamReport {
        mass_flow: quantity(flow, ReportUnit("kg/s", 1.0, 0.0)),
        pressure: quantity(state(p), ReportUnit("bar", BAR, 0.0)),
        temperature: quantity(
            solution.temperature(s),
            ReportUnit("Cel", 1.0, ZERO_CELSIUS),
        ),
        enthalpy: quantity(state(h), ReportUnit("kJ/kg", 1.0, 0.0)),
        phase: phase(solution, s, p, h),
    }
}

/// A quantity in a unit of the report, from its value and sigma in internal
/// units.
fn quantity(value_and_sigma: Option<(f64, f64)>, unit: ReportUnit) -> QuantityReport {
    let ReportUnit(symbol, factor, zero) = unit;
    let converted = value_and_sigma.map(|(value, sigma)| ((value - zero) / factor, sigma / factor));
    report(symbol, converted)
}

/// A quantity from its value and sigma; `None` where it is unobservable.
pub fn report(unit: &str, value_and_sigma: Option<(f64, f64)>) -> QuantityReport {
    QuantityReport {
        value: value_and_sigma.map(|(value, _)| value),
        uncertainty: value_and_sigma.map(|(_, sigma)| COVERAGE_FACTOR * sigma),
        unit: unit.to_owned(),
        class: if value_and_sigma.is_some() {
            Observability::Observable
        } else {
            Observability::Unobservable
        },
    }
}

fn phase(solution: &Solution, s: StreamId, p: usize, h: usize) -> Option<Phase> {
    let known = [p, h].iter().all(|&j| solution.is_observable(&[(j, 1.0)]));
    if !known {
        return None;
    }
    if solution.is_phase_open(s) {
        return Some(Phase::Open);
    }
    let state = solution.state(s)?;
    Some(match (state.phase, state.x) {
        (equations::Phase::Wet, Some(x)) if x < ON_THE_LINE => Phase::Liquid,
        (equations::Phase::Wet, Some(x)) if x > 1.0 - ON_THE_LINE => Phase::Vapour,
        (equations::Phase::Wet, _) => Phase::Wet,
        (equations::Phase::Liquid, _) => Phase::Liquid,
        (equations::Phase::Vapour, _) => Phase::Vapour,
        (equations::Phase::Supercritical, _) => Phase::Supercritical,
    })
}
