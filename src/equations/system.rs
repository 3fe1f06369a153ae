//! A plant as equations, and one batch of it as a problem for the solver.
//!
//! [`System`] is compiled once per revision: states, relations, measurement
//! functions and their sparsity. [`Case`] adds what one batch brings: readings
//! with their sigma, and scales.

use super::kinds;
use super::layout::{Layout, StateKind};
use super::modes::Modes;
use super::observation::Observation;
use super::relation::{Floors, Law, Relation, Role, Saturations, Side};
use crate::fluid::{self, Saturation, State};
use crate::plant::{Plant, Sigma, StreamId};
use crate::solver::{Evaluation, Outside, Problem, Rows, Structure};

/// Pressures a state may take: those at which water can be liquid, MPa.
const LOWEST_PRESSURE: f64 = fluid::MIN_SATURATION_PRESSURE;
const HIGHEST_PRESSURE: f64 = fluid::MAX_PRESSURE;
/// What is smaller than this part of the largest flow is nearly zero.
const SMALL: f64 = 1e-3;
/// Largest change of pressure in one step, as a factor.
const PRESSURE_STEP: f64 = 2.0;
/// Largest change of a pump's rise of enthalpy in one step, as a factor.
const RISE_STEP: f64 = 3.0;
/// Between `COLD_SLOPE * p + COLD` and `HOT` (kJ/kg, p in MPa) every enthalpy
/// is in range: the coldest liquid has -0.04 kJ/kg at no pressure and 95.4 at
/// 100 MPa, the hottest steam of 1073.15 K 3715 at 100 MPa and more below.
const COLD_SLOPE: f64 = 1.05;
const COLD: f64 = 0.1;
const HOT: f64 = 3700.0;
/// Largest change of enthalpy in one step, kJ/kg.
const ENTHALPY_STEP: f64 = 600.0;

/// A plant's states, relations and measurement functions.
#[derive(Clone, Debug)]
pub struct System {
    /// Where each state stands.
    pub layout: Layout,
    /// Relations in use order, bounds last.
    pub relations: Vec<Relation>,
    /// Tags in file order, then assumptions.
    pub observations: Vec<Observation>,
    /// Streams that a relation holds on the saturation line.
    pub on_saturation: Vec<Option<Side>>,
    /// Streams that leave a vessel as liquid.
    pub always_liquid: Vec<bool>,
    /// Streams that "equal enthalpy" relations join, each in one chain.
    pub chains: Vec<Vec<StreamId>>,
    /// Sparsity, for the solver.
    pub structure: Structure,
    /// Streams whose saturated states a relation or tag always needs.
    needs_saturation: Vec<bool>,
}

/// One observation's value in a batch, internal units.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Measured {
    /// Reading.
    pub value: f64,
    /// Its standard uncertainty.
    pub sigma: Sigma,
}

/// One batch of a system, as a problem for the solver.
#[derive(Clone, Debug)]
pub struct Case<'a> {
    system: &'a System,
    measured: Vec<Option<Measured>>,
    modes: Modes,
    scales: Scales,
}

/// Typical sizes: of each state's uncertainty and of each relation's terms.
#[derive(Clone, Debug)]
struct Scales {
    state: Vec<f64>,
    relation: Vec<f64>,
}

impl Scales {
    /// A state's scale is its instrument's sigma or one per cent of its size,
    /// whichever is less; what is nearly zero gets a small part of the plant's
    /// typical size.
    fn at(system: &System, measured: &[Option<Measured>], x: &[f64]) -> Self {
        let layout = &system.layout;
        let flows = (0..layout.streams()).map(|s| x[layout.m(StreamId(s))].abs());
        let largest_flow = flows.fold(1e-3, f64::max);
        let floors = Floors {
            flow: SMALL * largest_flow,
            pressure: 1e-3,
            enthalpy: 1000.0,
            energy: SMALL * 1000.0 * largest_flow,
        };
        let mut state: Vec<f64> = (0..layout.len())
            .map(|j| match layout.kind(j) {
                StateKind::Enthalpy => 5.0,
                _ => 0.01 * x[j].abs().max(floors.of(layout, j)),
            })
            .collect();
        for (observation, value) in system.observations.iter().zip(measured) {
            if let (Some(j), Some(measured)) = (observation.state(), value) {
                state[j] = state[j].min(measured.sigma.get());
            }
        }
        let relations = system.relations.iter();
        let relation = relations.map(|r| r.size(layout, x, &floors)).collect();
        Scales { state, relation }
    }
}

impl System {
    /// Compiles a plant.
    pub fn new(plant: &Plant) -> Self {
        let layout = Layout::new(plant);
        let relations = kinds::relations(plant, &layout);
        Self::of(plant, layout, relations)
    }

    /// The system of these relations between the states of a layout.
    pub(super) fn of(plant: &Plant, layout: Layout, relations: Vec<Relation>) -> Self {
        let mut on_saturation = vec![None; plant.streams.len()];
        for relation in &relations {
            if let (Role::Condition(_), Law::Saturated { stream, side, .. }) =
                (&relation.role, &relation.law)
            {
                on_saturation[stream.0] = Some(*side);
            }
        }
        let mut always_liquid = vec![false; plant.streams.len()];
        let liquid = plant.equipment.iter();
        for s in liquid.filter_map(|e| kinds::liquid_outlet(&e.kind)) {
            always_liquid[s.0] = true;
        }
        let quantities = plant.tags.iter().map(|tag| tag.quantity);
        let stated = plant.assumptions.iter().map(|a| a.quantity);
        let observations: Vec<Observation> = quantities
            .chain(stated)
            .map(|q| {
                Observation::new(
                    q,
                    &plant.equipment,
                    plant.barometer,
                    &on_saturation,
                    &layout,
                )
            })
            .collect();
        let rows = |lists: Vec<&[usize]>| Rows::from_lists(&lists);
        let structure = Structure {
            states: layout.len(),
            relations: rows(relations.iter().map(|r| &r.row[..]).collect()),
            observations: rows(observations.iter().map(|o| &o.row[..]).collect()),
            bounds: (0..relations.len())
                .filter(|&k| matches!(relations[k].role, Role::Bound(_) | Role::SideOfSaturation))
                .collect(),
            pairs: (0..plant.streams.len())
                .map(|s| (layout.p(StreamId(s)), layout.h(StreamId(s))))
                .collect(),
        };
        let mut needs_saturation = vec![false; plant.streams.len()];
        let by_relations = relations
            .iter()
            .filter(|r| r.role != Role::SideOfSaturation);
        let by_relations = by_relations.flat_map(Relation::needs_saturation);
        let by_tags = observations
            .iter()
            .filter_map(Observation::needs_saturation);
        by_relations
            .chain(by_tags)
            .for_each(|s| needs_saturation[s.0] = true);
        let chains = chains(&relations, &layout);
        System {
            layout,
            relations,
            observations,
            on_saturation,
            always_liquid,
            chains,
            structure,
            needs_saturation,
        }
    }

    /// Value of observation `i` at `x`, in internal units, with its gradient
    /// beside `observations[i].row`; `None` where it has none.
    pub fn predict(&self, i: usize, x: &[f64]) -> Option<(f64, Vec<f64>)> {
        let observation = &self.observations[i];
        let mut states = vec![None; self.layout.streams()];
        for s in observation.needs().into_iter().flatten() {
            states[s.0] = self.state(s, x).ok();
        }
        let mut saturations = vec![None; self.layout.streams()];
        if let Some(s) = observation.needs_saturation() {
            saturations[s.0] = self.saturation(s, x);
        }
        let mut gradient = vec![0.0; observation.row.len()];
        let value = observation
            .evaluate(x, &states, &saturations, &mut gradient)
            .ok()?;
        Some((value, gradient))
    }

    /// Residual of relation `k` at `x`, with its gradient beside
    /// `relations[k].row`; `None` where it has none.
    pub fn residual(&self, k: usize, x: &[f64]) -> Option<(f64, Vec<f64>)> {
        let relation = &self.relations[k];
        let mut saturations = vec![None; self.layout.streams()];
        for s in relation.needs_saturation() {
            saturations[s.0] = self.saturation(s, x);
        }
        let mut gradient = vec![0.0; relation.row.len()];
        let value = relation.evaluate(&self.layout, x, &saturations, &mut gradient);
        Some((value.ok()?, gradient))
    }

    /// Whether nothing can flow in a stream: its valve is closed, and no
    /// hypothesis lets it pass.
    pub fn is_closed(&self, stream: StreamId) -> bool {
        let flow = [self.layout.m(stream)];
        let closed = Role::Condition(kinds::NORMALLY_CLOSED);
        let mut relations = self.relations.iter();
        relations.any(|r| r.role == closed && r.row == flow)
    }

    /// Saturated states at a stream's pressure; `None` above the critical
    /// pressure.
    pub fn saturation(&self, stream: StreamId, x: &[f64]) -> Option<Saturation> {
        fluid::saturation(x[self.layout.p(stream)]).ok()
    }

    /// Saturation temperature at a stream's pressure, K, likewise.
    pub fn saturation_temperature(&self, stream: StreamId, x: &[f64]) -> Option<f64> {
        fluid::saturation_temperature(x[self.layout.p(stream)]).ok()
    }

    /// Thermodynamic state of a stream at `x`.
    ///
    /// # Errors
    /// Where pressure and enthalpy lie outside the range of the properties.
    pub fn state(&self, stream: StreamId, x: &[f64]) -> Result<State, fluid::OutOfRange> {
        fluid::from_ph(x[self.layout.p(stream)], x[self.layout.h(stream)])
    }
}

impl<'a> Case<'a> {
    /// A batch of `system`: one entry per observation, `None` where it is not
    /// used. Scales are taken from `at`, a state of believable size.
    pub fn new(
        system: &'a System,
        measured: Vec<Option<Measured>>,
        modes: Modes,
        at: &[f64],
    ) -> Self {
        let scales = Scales::at(system, &measured, at);
        Case {
            system,
            measured,
            modes,
            scales,
        }
    }

    /// The same batch with scales taken from another state. Variances come out
    /// best where each state's scale is within some hundred times its sigma.
    pub fn rescaled(self, at: &[f64]) -> Self {
        Case {
            scales: Scales::at(self.system, &self.measured, at),
            ..self
        }
    }

    /// The system.
    pub fn system(&self) -> &'a System {
        self.system
    }

    /// The sides of saturation that doubtful streams are taken to be on.
    pub fn modes(&self) -> &Modes {
        &self.modes
    }

    /// The same batch with other sides.
    pub fn with_modes(&self, modes: Modes) -> Self {
        Case {
            modes,
            ..self.clone()
        }
    }

    /// What each observation reads; `None` where it is not used.
    pub fn measured(&self) -> &[Option<Measured>] {
        &self.measured
    }

    /// Which observations are used.
    pub fn used(&self) -> Vec<bool> {
        self.measured.iter().map(Option::is_some).collect()
    }

    /// Thermodynamic states of the streams whose tags need them.
    fn states(&self, x: &[f64], saturations: &Saturations) -> Result<Vec<Option<State>>, Outside> {
        let mut states = vec![None; self.system.layout.streams()];
        for (observation, measured) in self.system.observations.iter().zip(&self.measured) {
            if measured.is_none() {
                continue;
            }
            for s in observation.needs().into_iter().flatten() {
                if states[s.0].is_none() {
                    let state = self.system.state(s, x).map_err(|_| Outside {
                        state: self.system.layout.h(s),
                    })?;
                    let saturation = saturations[s.0].as_ref();
                    states[s.0] = Some(self.modes.continued(s, state, saturation));
                }
            }
        }
        Ok(states)
    }

    /// The part of a step that no pump's rise of enthalpy changes by more than a
    /// factor: its efficiency has a pole at no rise, and a step across it leads
    /// to a false minimum. The whole step is shortened, so that it stays a
    /// direction of descent.
    fn rise_limit(&self, x: &[f64], step: &[f64]) -> f64 {
        let layout = &self.system.layout;
        let observations = self.system.observations.iter().zip(&self.measured);
        let pumps = observations.filter(|(_, measured)| measured.is_some());
        let mut part = 1.0_f64;
        for (from, to) in pumps.filter_map(|(observation, _)| observation.compression()) {
            let (from, to) = (layout.h(from), layout.h(to));
            let (rise, change) = (x[to] - x[from], step[to] - step[from]);
            let growth = change / rise;
            if growth > RISE_STEP - 1.0 {
                part = part.min((RISE_STEP - 1.0) / growth);
            } else if growth < 1.0 / RISE_STEP - 1.0 {
                part = part.min((1.0 / RISE_STEP - 1.0) / growth);
            }
        }
        part
    }

    /// Saturated states of the streams that relations, tags or modes need.
    fn saturations(&self, x: &[f64]) -> Vec<Option<Saturation>> {
        let streams = (0..self.system.layout.streams()).map(StreamId);
        streams
            .map(|s| {
                let needed = self.system.needs_saturation[s.0] || self.modes.get(s).is_some();
                if needed {
                    self.system.saturation(s, x)
                } else {
                    None
                }
            })
            .collect()
    }
}

impl Problem for Case<'_> {
    fn structure(&self) -> &Structure {
        &self.system.structure
    }

    fn evaluate(&self, x: &[f64], into: &mut Evaluation) -> Result<(), Outside> {
        let system = self.system;
        let outside = |state| Outside { state };
        let saturations = self.saturations(x);
        let states = self.states(x, &saturations)?;
        for (k, relation) in system.relations.iter().enumerate() {
            let values = &mut into.f_values[system.structure.relations.range(k)];
            let sign = match (&relation.role, &relation.law) {
                (Role::SideOfSaturation, Law::Saturated { stream, side, .. }) => {
                    self.modes.sign(*stream, *side)
                }
                _ => 1.0,
            };
            if sign == 0.0 {
                values.fill(0.0);
                into.f[k] = 0.0;
                continue;
            }
            let f = relation.evaluate(&system.layout, x, &saturations, values);
            into.f[k] = sign * f.map_err(outside)?;
            if sign < 0.0 {
                values.iter_mut().for_each(|value| *value = -*value);
            }
        }
        for (i, observation) in system.observations.iter().enumerate() {
            let values = &mut into.g_values[system.structure.observations.range(i)];
            into.r[i] = match self.measured[i] {
                None => {
                    values.fill(0.0);
                    0.0
                }
                Some(Measured { value, sigma }) => {
                    let g = observation
                        .evaluate(x, &states, &saturations, values)
                        .map_err(outside)?;
                    values.iter_mut().for_each(|v| *v /= sigma.get());
                    (value - g) / sigma.get()
                }
            };
        }
        Ok(())
    }

    fn state_scale(&self) -> &[f64] {
        &self.scales.state
    }

    fn relation_scale(&self) -> &[f64] {
        &self.scales.relation
    }

    /// Bends a step so that pressures stay positive and change by a factor of
    /// two at most, and enthalpies stay where the properties are valid.
    fn limit(&self, x: &[f64], step: &mut [f64]) {
        let layout = &self.system.layout;
        let pressure_range = |p: f64| (p / PRESSURE_STEP, p * PRESSURE_STEP);
        for s in (0..layout.streams()).map(StreamId) {
            let (p, h) = (layout.p(s), layout.h(s));
            let (low, high) = pressure_range(x[p]);
            bend(
                x[p],
                &mut step[p],
                low.max(LOWEST_PRESSURE),
                high.min(HIGHEST_PRESSURE),
            );
            bend(
                x[h],
                &mut step[h],
                x[h] - ENTHALPY_STEP,
                x[h] + ENTHALPY_STEP,
            );
            let (new_p, new_h) = (x[p] + step[p], x[h] + step[h]);
            let inside = new_h > COLD_SLOPE * new_p + COLD && new_h < HOT;
            if !inside && let Ok((low, high)) = fluid::enthalpy_range(new_p) {
                bend(x[h], &mut step[h], low, high);
            }
        }
        if let Some(b) = layout.barometer {
            let (low, high) = pressure_range(x[b]);
            bend(x[b], &mut step[b], low, high);
        }
        let shortened = self.rise_limit(x, step);
        if shortened < 1.0 {
            step.iter_mut().for_each(|s| *s *= shortened);
        }
    }
}

/// Bends a step so that `from + step` stays within `low` and `high`; a step
/// that stays there by itself is left as it is, to the last bit.
fn bend(from: f64, step: &mut f64, low: f64, high: f64) {
    let to = from + *step;
    if to < low {
        *step = low - from;
    } else if to > high {
        *step = high - from;
    }
}

/// Streams joined by "equal enthalpy" relations, in the order of their first
/// members; a stream that none joins is a chain of its own.
fn chains(relations: &[Relation], layout: &Layout) -> Vec<Vec<StreamId>> {
    let mut chain_of: Vec<usize> = (0..layout.streams()).collect();
    let equal = Role::Condition("equal enthalpy");
    for relation in relations.iter().filter(|r| r.role == equal) {
        let ends: Vec<usize> = relation.row.iter().map(|&j| chain_of[j / 3]).collect();
        let least = ends.iter().copied().min().unwrap_or_default();
        for chain in &mut chain_of {
            if ends.contains(chain) {
                *chain = least;
            }
        }
    }
    let mut chains = vec![Vec::new(); layout.streams()];
    for (s, &chain) in chain_of.iter().enumerate() {
        chains[chain].push(StreamId(s));
    }
    chains.retain(|chain| !chain.is_empty());
    chains
}
