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
/// Prior sigma of the atmospheric pressure, relative.
const ATMOSPHERE: f64 = 0.01;

/// Prior sigma of a flow that is read, relative: its balances know better.
const GIVEN_FLOW: f64 = 0.3;
/// A flow that nothing tells, as a part of the largest.
const GUESSED_FLOW: f64 = 0.1;

/// Where the solver starts.
#[derive(Clone, Debug)]
pub struct Start {
    /// The states.
    pub x: Vec<f64>,
    /// Prior sigma of each state in its own unit; infinite where there is none.
    pub prior_sigma: Vec<f64>,
    /// Some pressure is neither read nor carried over, but smoothed.
    pub guesses_pressures: bool,
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
///
/// Pressures that are only guessed are taken `factor` times as high: another
/// factor is another start, where the first leads nowhere.
pub fn start(plant: &Plant, system: &System, measured: &[Option<Measured>], factor: f64) -> Start {
    let pressures = pressures::guess(plant, system, measured, factor);
    let (enthalpies, given) = Enthalpies::new(plant, system, measured, &pressures).guess();
    let layout = &system.layout;
    let mut x = vec![0.0; layout.len()];
    let mut prior_sigma = vec![f64::INFINITY; layout.len()];
    for (observation, measured) in system.observations.iter().zip(measured) {
        if let (Some(j), Some(measured)) = (observation.state(), measured) {
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
            x[m] = GUESSED_FLOW * typical_flow;
            prior_sigma[m] = x[m];
        } else {
            prior_sigma[m] = GIVEN_FLOW * x[m];
        }
        x[p] = pressures.stream[s.0];
        x[h] = enthalpies[s.0];
        prior_sigma[p] = pressures.sigma[s.0];
        prior_sigma[h] = if given[s.0] {
            GIVEN_ENTHALPY
        } else {
            GUESSED_ENTHALPY
        };
    }
    if let Some(b) = layout.barometer {
        x[b] = pressures.barometer;
        prior_sigma[b] = ATMOSPHERE * x[b];
    }
    let guesses_pressures = pressures.known.contains(&false);
    Start {
        x,
        prior_sigma,
        guesses_pressures,
    }
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
        // What tells the enthalpy itself comes first, then temperatures that
        // tell the side of saturation; the others only where nothing else does.
        // A pump warms the water by less than a thermometer resolves, so what it
        // delivers is worked out from what it draws, and read only failing that.
        let pumped = self.pumped();
        self.read(|guess, s| guess.saturated(s));
        self.read(|guess, s| {
            guess
                .by_temperature(s)
                .filter(|_| !pumped[s] && !guess.doubtful(s))
        });
        let mut given: Vec<bool> = self.h.iter().map(Option::is_some).collect();
        self.read(|guess, s| guess.by_hinted_temperature(s).filter(|_| !pumped[s]));
        self.carry_on();
        self.read(|guess, s| guess.by_temperature(s));
        self.carry_on();
        for (s, given) in given.iter_mut().enumerate() {
            *given |= self.temperature[s].is_some();
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

    /// Takes enthalpies from `source` for the streams that have none yet.
    fn read(&mut self, source: impl Fn(&Self, usize) -> Option<f64>) {
        for s in 0..self.h.len() {
            if self.h[s].is_none() {
                self.h[s] = source(self, s);
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

    /// Whether temperature and pressure leave the side of saturation open.
    fn doubtful(&self, s: usize) -> bool {
        let Some((t, sigma)) = self.temperature[s] else {
            return false;
        };
        let Ok(at) = fluid::saturation(self.pressures.stream[s]) else {
            return false;
        };
        let sigma = sigma.hypot(at.t_p * self.pressures.sigma[s]);
        (t - at.t).abs() <= (NEAR_SIGMA * sigma).max(NEAR_KELVIN)
    }

    /// Enthalpy by temperature on the side that the ports tell, if they do.
    fn by_hinted_temperature(&self, s: usize) -> Option<f64> {
        match self.hint[s] {
            Hint::Liquid => self.on_side(s, Side::Liquid),
            Hint::Vapour => self.on_side(s, Side::Vapour),
            // Wet or barely superheated: the temperature says nothing of it.
            Hint::Expanded | Hint::Nothing => None,
        }
    }

    /// Enthalpy by temperature and pressure, on the side that they show.
    fn by_temperature(&self, s: usize) -> Option<f64> {
        let (t, _) = self.temperature[s]?;
        let p = self.pressures.stream[s];
        match fluid::saturation_temperature(p) {
            Ok(saturated) if t > saturated => self.on_side(s, Side::Vapour),
            Ok(_) => self.on_side(s, Side::Liquid),
            Err(_) => fluid::from_pt(p, t).ok().map(|state| state.h),
        }
    }

    /// Enthalpy by temperature, no further than the saturation line.
    fn on_side(&self, s: usize, side: Side) -> Option<f64> {
        let (t, _) = self.temperature[s]?;
        let p = self.pressures.stream[s];
        let state = || fluid::from_pt(p, t).ok().map(|state| state.h);
        let Ok(saturation) = fluid::saturation(p) else {
            return state();
        };
        match side {
            Side::Vapour if t <= saturation.t => Some(saturation.vapour.h),
            Side::Liquid if t >= saturation.t => Some(saturation.liquid.h),
            _ => state(),
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
            } else if water_out[..] == [s] || reheats.iter().any(|(_, out)| *out == s) {
                Hint::Vapour
            } else {
                Hint::Nothing
            }
        }
        _ => Hint::Nothing,
    }
}
