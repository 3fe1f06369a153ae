//! A start that needs no guess from the user: from readings and topology alone.
//!
//! Pressures come first ([`super::pressures`]); then enthalpies, from
//! temperatures on the side of the saturation line that the readings show, from
//! saturation, and by expansion, pumping and mixing from what is known; flows
//! and powers, which enter the balances linearly once enthalpies are there, are
//! left to the solver's first steps, in which [`Start::hold`] keeps pressures
//! and enthalpies near the guess by weights of (scale / prior sigma)^2.

use super::pressures::{self, Pressures};
use super::relation::{Law, Role, Side};
use super::system::{Measured, System};
use crate::fluid;
use crate::plant::{EquipmentId, Kind, Plant, Quantity, StreamId};

/// A temperature this close to saturation (in sigma, and in K) does not tell
/// the side.
const NEAR_SIGMA: f64 = 4.0;
const NEAR_KELVIN: f64 = 3.0;
/// Guessed isentropic efficiencies of turbines and pumps.
const TURBINE_EFFICIENCY: f64 = 0.85;
const PUMP_EFFICIENCY: f64 = 0.75;
/// Feedwater and drain leave a heater this much below saturation, K.
const HEATER_APPROACH: f64 = 5.0;
/// Water from outside the plant, K.
const OUTSIDE_TEMPERATURE: f64 = 293.15;
/// Prior sigma of enthalpies: given by a reading or saturation, or guessed, kJ/kg.
const GIVEN_ENTHALPY: f64 = 10.0;
const GUESSED_ENTHALPY: f64 = 200.0;
/// Prior sigma of pressures, relative: given or smoothed.
const GIVEN_PRESSURE: f64 = 0.01;
const GUESSED_PRESSURE: f64 = 0.2;

/// Where the solver starts.
#[derive(Clone, Debug)]
pub struct Start {
    /// The states.
    pub x: Vec<f64>,
    /// Prior sigma of each state in its own unit; infinite where there is none.
    pub prior_sigma: Vec<f64>,
}

impl Start {
    /// Weights on the scaled states that keep them near the start.
    pub fn hold(&self, state_scale: &[f64]) -> Vec<f64> {
        let pairs = state_scale.iter().zip(&self.prior_sigma);
        pairs
            .map(|(scale, sigma)| (scale / sigma).powi(2))
            .collect()
    }
}

/// What the ports of a stream tell of its phase.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Hint {
    Liquid,
    Vapour,
    /// Leaves a turbine: vapour or wet, as the expansion comes out.
    Expanded,
    Nothing,
}

/// Finds the start for one batch.
pub fn start(plant: &Plant, system: &System, measured: &[Option<Measured>]) -> Start {
    let pressures = pressures::guess(plant, system, measured);
    let (enthalpies, given) = Enthalpies::new(plant, system, measured, &pressures).guess();
    let layout = &system.layout;
    let mut x = vec![0.0; layout.len()];
    let mut prior_sigma = vec![f64::INFINITY; layout.len()];
    for (observation, measured) in system.observations.iter().zip(measured) {
        if let (&[j], Some(measured)) = (&observation.row[..], measured) {
            x[j] = measured.value;
        }
    }
    let typical_flow = (0..layout.streams())
        .map(|s| x[layout.m(StreamId(s))])
        .fold(0.0, f64::max)
        .max(1e-3);
    for s in (0..layout.streams()).map(StreamId) {
        let (m, p, h) = (layout.m(s), layout.p(s), layout.h(s));
        if x[m] <= 0.0 {
            x[m] = 0.1 * typical_flow;
        }
        x[p] = pressures.stream[s.0];
        x[h] = enthalpies[s.0];
        let relative = if pressures.known[s.0] {
            GIVEN_PRESSURE
        } else {
            GUESSED_PRESSURE
        };
        prior_sigma[p] = relative * x[p];
        prior_sigma[h] = if given[s.0] {
            GIVEN_ENTHALPY
        } else {
            GUESSED_ENTHALPY
        };
    }
    if let Some(b) = layout.barometer {
        x[b] = pressures.barometer;
        prior_sigma[b] = GIVEN_PRESSURE * x[b];
    }
    Start { x, prior_sigma }
}

/// The guess of enthalpies in progress.
struct Enthalpies<'a> {
    plant: &'a Plant,
    system: &'a System,
    pressures: &'a Pressures,
    /// Temperature and its sigma, where one is read.
    temperature: Vec<Option<(f64, f64)>>,
    hint: Vec<Hint>,
    h: Vec<Option<f64>>,
}

impl<'a> Enthalpies<'a> {
    fn new(
        plant: &'a Plant,
        system: &'a System,
        measured: &[Option<Measured>],
        pressures: &'a Pressures,
    ) -> Self {
        let n = plant.streams.len();
        let mut guess = Enthalpies {
            plant,
            system,
            pressures,
            temperature: vec![None; n],
            hint: (0..n).map(|s| hint(plant, StreamId(s))).collect(),
            h: vec![None; n],
        };
        for (observation, measured) in system.observations.iter().zip(measured) {
            let Some(Measured { value, sigma }) = *measured else {
                continue;
            };
            match observation.quantity {
                Quantity::Temperature(s) => guess.temperature[s.0] = Some((value, sigma.get())),
                Quantity::Enthalpy(s) => guess.h[s.0] = Some(value),
                Quantity::Quality(s) => {
                    let quality = value.clamp(0.0, 1.0);
                    let state = fluid::from_px(pressures.stream[s.0], quality);
                    guess.h[s.0] = state.ok().map(|state| state.h);
                }
                Quantity::Subcooling(s) => {
                    if let Ok(saturation) = fluid::saturation(pressures.stream[s.0]) {
                        let t = saturation.t - value.max(0.0);
                        guess.temperature[s.0].get_or_insert((t, sigma.get()));
                    }
                }
                _ => {}
            }
        }
        guess
    }

    /// Enthalpies, and which of them readings or saturation give.
    fn guess(mut self) -> (Vec<f64>, Vec<bool>) {
        let n = self.h.len();
        // A pump warms the water by less than a thermometer resolves, so what it
        // delivers is worked out from what it draws, and read only failing that.
        let pumped = self.pumped();
        self.read(|s| !pumped[s]);
        let mut given: Vec<bool> = self.h.iter().map(Option::is_some).collect();
        self.carry_on();
        self.read(|_| true);
        self.carry_on();
        for (s, given) in given.iter_mut().enumerate() {
            *given |= pumped[s] && self.temperature[s].is_some();
        }
        let enthalpies = (0..n)
            .map(|s| {
                let h = self.h[s].unwrap_or_else(|| self.by_hint(s));
                let range = fluid::enthalpy_range(self.pressures.stream[s]);
                range.map_or(h, |(low, high)| h.clamp(low + 1.0, high - 1.0))
            })
            .collect();
        (enthalpies, given)
    }

    /// Streams that leave a pump, and those of the same enthalpy.
    fn pumped(&self) -> Vec<bool> {
        let mut marks = Enthalpies {
            temperature: Vec::new(),
            hint: Vec::new(),
            h: vec![None; self.h.len()],
            ..*self
        };
        for equipment in &self.plant.equipment {
            if let Kind::Pump { outlet, .. } = equipment.kind {
                marks.h[outlet.0] = Some(0.0);
            }
        }
        marks.share();
        marks.h.iter().map(Option::is_some).collect()
    }

    /// Takes enthalpies from saturation and temperatures, for the streams that
    /// `wanted` names and that have none yet.
    fn read(&mut self, wanted: impl Fn(usize) -> bool) {
        for s in 0..self.h.len() {
            if self.h[s].is_none() && wanted(s) {
                self.h[s] = self.saturated(s).or_else(|| self.by_temperature(s));
            }
        }
        self.share();
    }

    /// Carries enthalpies on through the equipment until none is new.
    fn carry_on(&mut self) {
        loop {
            let before = self.h.clone();
            for s in 0..self.h.len() {
                if self.h[s].is_none() {
                    self.h[s] = self.by_equipment(s);
                }
            }
            self.share();
            if self.h == before {
                return;
            }
        }
    }

    /// Enthalpy of a stream that a relation holds on the saturation line.
    fn saturated(&self, s: usize) -> Option<f64> {
        let side = self.system.on_saturation[s]?;
        let saturation = fluid::saturation(self.pressures.stream[s]).ok()?;
        Some(match side {
            Side::Liquid => saturation.liquid.h,
            Side::Vapour => saturation.vapour.h,
        })
    }

    /// Enthalpy by temperature and pressure, on the side that they show.
    fn by_temperature(&self, s: usize) -> Option<f64> {
        let (t, sigma) = self.temperature[s]?;
        let p = self.pressures.stream[s];
        let Ok(saturation) = fluid::saturation(p) else {
            return fluid::from_pt(p, t).ok().map(|state| state.h);
        };
        let superheat = t - saturation.t;
        let near = superheat.abs() <= (NEAR_SIGMA * sigma).max(NEAR_KELVIN);
        let doubtful = near || !self.pressures.known[s];
        let side = match self.hint[s] {
            Hint::Liquid if doubtful => Side::Liquid,
            Hint::Vapour if doubtful => Side::Vapour,
            // Wet or barely superheated: the temperature says nothing of it.
            Hint::Expanded if near => return None,
            _ if superheat > 0.0 => Side::Vapour,
            _ => Side::Liquid,
        };
        match side {
            Side::Vapour if superheat <= 0.0 => Some(saturation.vapour.h),
            Side::Liquid if superheat >= 0.0 => Some(saturation.liquid.h),
            _ => fluid::from_pt(p, t).ok().map(|state| state.h),
        }
    }

    /// Copies enthalpies over "equal enthalpy" relations until none is new.
    fn share(&mut self) {
        let mut changed = true;
        while std::mem::take(&mut changed) {
            for relation in &self.system.relations {
                if relation.role != Role::Condition("equal enthalpy") {
                    continue;
                }
                if let Law::Linear(terms) = &relation.law
                    && let [(a, _), (b, _)] = terms[..]
                {
                    let (a, b) = (a / 3, b / 3);
                    match (self.h[a], self.h[b]) {
                        (Some(h), None) => self.h[b] = Some(h),
                        (None, Some(h)) => self.h[a] = Some(h),
                        _ => continue,
                    }
                    changed = true;
                }
            }
        }
    }

    /// Enthalpy from what enters the equipment that the stream leaves, or
    /// leaves the pump that it enters.
    fn by_equipment(&self, s: usize) -> Option<f64> {
        let stream = &self.plant.streams[s];
        let leaving = stream.from.and_then(|e| self.leaving(e, s));
        leaving.or_else(|| stream.to.and_then(|e| self.entering(e, s)))
    }

    fn leaving(&self, from: EquipmentId, s: usize) -> Option<f64> {
        let p = self.pressures.stream[s];
        let mean = |streams: &[StreamId]| {
            let known: Vec<f64> = streams.iter().filter_map(|i| self.h[i.0]).collect();
            (!known.is_empty()).then(|| known.iter().sum::<f64>() / known.len() as f64)
        };
        match &self.plant.equipment[from.0].kind {
            Kind::Turbine { inlets, .. } => inlets.iter().find_map(|i| {
                let h = self.h[i.0]?;
                let inlet = fluid::from_ph(self.pressures.stream[i.0], h).ok()?;
                let ideal = fluid::from_ps(p, inlet.s).ok()?;
                Some(h - TURBINE_EFFICIENCY * (h - ideal.h))
            }),
            Kind::Pump { inlet, .. } => self.h[inlet.0].map(|h| h + self.pumping(*inlet, s)),
            Kind::Mixer { inlets, .. } | Kind::Header { inlets, .. } => mean(inlets),
            Kind::ClosedHeater { steam, .. } => {
                let saturation = fluid::saturation(self.pressures.stream[steam.0]).ok()?;
                let t = saturation.t - HEATER_APPROACH;
                fluid::from_pt(p, t).ok().map(|state| state.h)
            }
            Kind::OpenHeater { .. } | Kind::Condenser { .. } if self.hint[s] == Hint::Liquid => {
                let saturation = fluid::saturation(p).ok()?;
                Some(saturation.liquid.h)
            }
            _ => None,
        }
    }

    fn entering(&self, to: EquipmentId, s: usize) -> Option<f64> {
        match &self.plant.equipment[to.0].kind {
            Kind::Pump { inlet, outlet } if inlet.0 == s => {
                self.h[outlet.0].map(|h| h - self.pumping(*inlet, outlet.0))
            }
            _ => None,
        }
    }

    /// Enthalpy rise of a pump, kJ/kg: v dp over the efficiency.
    fn pumping(&self, inlet: StreamId, outlet: usize) -> f64 {
        let rise = self.pressures.stream[outlet] - self.pressures.stream[inlet.0];
        1.05 * rise.max(0.0) / self.pump_efficiency(inlet)
    }

    /// The efficiency that the plant file states for the pump behind `inlet`.
    fn pump_efficiency(&self, inlet: StreamId) -> f64 {
        let stated = self
            .plant
            .assumptions
            .iter()
            .find_map(|a| match a.quantity {
                Quantity::IsentropicEfficiency { inlet: from, .. } if from == inlet => {
                    Some(a.unit.to_internal(a.value))
                }
                _ => None,
            });
        stated.unwrap_or(PUMP_EFFICIENCY).clamp(0.1, 1.0)
    }

    /// The last resort: liquid or steam near saturation, or water from outside.
    fn by_hint(&self, s: usize) -> f64 {
        let p = self.pressures.stream[s];
        let enters_plant = self.plant.streams[s].from.is_none();
        match (self.hint[s], fluid::saturation(p)) {
            (Hint::Liquid, _) if enters_plant => {
                fluid::from_pt(p, OUTSIDE_TEMPERATURE).map_or(85.0, |state| state.h)
            }
            (Hint::Liquid, Ok(saturation)) => 0.95 * saturation.liquid.h,
            (Hint::Liquid, Err(_)) => 1200.0,
            (Hint::Nothing, Ok(saturation)) => 0.5 * (saturation.liquid.h + saturation.vapour.h),
            (_, Ok(saturation)) => saturation.vapour.h + 150.0,
            (_, Err(_)) => 3000.0,
        }
    }
}

/// What the ports tell: liquid wins over vapour, since flashing streams end in
/// vapour spaces but no steam enters a pump.
fn hint(plant: &Plant, s: StreamId) -> Hint {
    let stream = &plant.streams[s.0];
    let ends = [stream.from, stream.to].into_iter().flatten();
    let hints: Vec<Hint> = ends.map(|e| hint_at(plant, e, s)).collect();
    for wanted in [Hint::Liquid, Hint::Expanded, Hint::Vapour] {
        if hints.contains(&wanted) {
            return wanted;
        }
    }
    Hint::Nothing
}

fn hint_at(plant: &Plant, at: EquipmentId, s: StreamId) -> Hint {
    let liquid_if = |yes: bool| if yes { Hint::Liquid } else { Hint::Nothing };
    let pair = |sides: &Option<(StreamId, StreamId)>| {
        sides.is_some_and(|(into, out)| into == s || out == s)
    };
    match &plant.equipment[at.0].kind {
        Kind::Pump { .. } => Hint::Liquid,
        Kind::Turbine { outlets, .. } if outlets.contains(&s) => Hint::Expanded,
        Kind::Turbine { .. } => Hint::Vapour,
        Kind::ClosedHeater { steam, vent, .. } => {
            if *steam == s || *vent == Some(s) {
                Hint::Vapour
            } else {
                Hint::Liquid
            }
        }
        Kind::OpenHeater { outlet, vent, .. } => {
            if *vent == Some(s) {
                Hint::Vapour
            } else {
                liquid_if(*outlet == s)
            }
        }
        Kind::Condenser {
            condensate,
            cooling,
            vent,
            ..
        } => {
            if *vent == Some(s) {
                Hint::Vapour
            } else {
                liquid_if(*condensate == s || pair(cooling))
            }
        }
        Kind::Boiler {
            water_in,
            water_out,
            reheats,
        } => {
            if water_in.contains(&s) {
                Hint::Liquid
            } else if water_out.first() == Some(&s) || reheats.iter().any(|(_, out)| *out == s) {
                Hint::Vapour
            } else {
                Hint::Nothing
            }
        }
        _ => Hint::Nothing,
    }
}
