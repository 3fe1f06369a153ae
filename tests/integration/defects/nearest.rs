//! The state nearest to a given one at which every relation holds, some of
//! them with something added.
//!
//! Minimise sum ((x - x0) / s)^2 subject to f(x) + c = 0 for every relation of
//! the plant, g(x) = g0 for every assumption and x = x0 for the states that the
//! operators hold. The offsets c are constants here: what a leak carries is
//! taken from the last solution by the caller.

use counterpoise::equations::{Role, StateKind, System};
use counterpoise::solver::{Evaluation, Outside, Problem, Rows, Structure};

/// Smallest size that a relation is held against: below a valve's leak, kg/s,
/// and a condenser's pressure, MPa.
const SMALLEST_RELATION: f64 = 1e-3;
/// How far states are let go, as sigmas: relative for flows, pressures and
/// powers, kJ/kg for enthalpies.
const RELATIVE: f64 = 0.01;
const ENTHALPY: f64 = 5.0;
/// What is smaller counts as this much, kg/s and kW. Powers follow from the
/// flows: a small pump's may change as much as a turbine's.
const SMALL_FLOW: f64 = 0.1;
const SMALL_POWER: f64 = 1e5;

/// What is the same for every truth of a plant: the rows, in the order plant's
/// relations, assumptions, held states.
pub struct Frame {
    pub system: System,
    /// The relations that are no bounds.
    pub laws: Vec<usize>,
    /// Observations that are assumptions.
    pub assumptions: Vec<usize>,
    /// States that stay what they are.
    pub held: Vec<usize>,
    pub structure: Structure,
}

impl Frame {
    pub fn new(system: System, tags: usize, held: Vec<usize>) -> Self {
        let laws: Vec<usize> = (0..system.relations.len())
            .filter(|&k| {
                let role = &system.relations[k].role;
                !matches!(role, Role::Bound(_) | Role::SideOfSaturation)
            })
            .collect();
        let assumptions: Vec<usize> = (tags..system.observations.len()).collect();
        let rows: Vec<Vec<usize>> = (laws.iter().map(|&k| system.relations[k].row.clone()))
            .chain((assumptions.iter()).map(|&i| system.observations[i].row.clone()))
            .chain(held.iter().map(|&j| vec![j]))
            .collect();
        let states = system.layout.len();
        let each: Vec<[usize; 1]> = (0..states).map(|j| [j]).collect();
        let structure = Structure {
            states,
            relations: Rows::from_lists(&rows),
            observations: Rows::from_lists(&each),
            bounds: Vec::new(),
            pairs: Vec::new(),
        };
        Frame {
            system,
            laws,
            assumptions,
            held,
            structure,
        }
    }

    /// Value and gradient of row `k`, before its target is taken off.
    fn row(&self, k: usize, x: &[f64]) -> Option<(f64, Vec<f64>)> {
        let (laws, stated) = (self.laws.len(), self.assumptions.len());
        if k < laws {
            self.system.residual(self.laws[k], x)
        } else if k < laws + stated {
            self.system.predict(self.assumptions[k - laws], x)
        } else {
            Some((x[self.held[k - laws - stated]], vec![1.0]))
        }
    }
}

/// One search for the nearest state.
pub struct Nearest<'a> {
    frame: &'a Frame,
    origin: &'a [f64],
    /// What each row has to come to.
    targets: Vec<f64>,
    state_scale: Vec<f64>,
    relation_scale: Vec<f64>,
}

impl<'a> Nearest<'a> {
    /// `laws` are what the plant's relations have to come to, `stated` the
    /// assumptions' values, both in the order of the frame.
    pub fn new(frame: &'a Frame, origin: &'a [f64], laws: &[f64], stated: &[f64]) -> Self {
        let held = frame.held.iter().map(|&j| origin[j]);
        let targets: Vec<f64> = (laws.iter().chain(stated).copied()).chain(held).collect();
        let layout = &frame.system.layout;
        let state_scale = (origin.iter().enumerate())
            .map(|(j, x)| match layout.kind(j) {
                StateKind::Enthalpy => ENTHALPY,
                StateKind::Pressure => RELATIVE * x,
                StateKind::MassFlow | StateKind::Holdup => RELATIVE * x.abs().max(SMALL_FLOW),
                StateKind::Energy => RELATIVE * x.abs().max(SMALL_POWER),
            })
            .collect();
        let relation_scale = (0..targets.len())
            .map(|k| {
                let (_, gradient) = frame.row(k, origin).expect("a truth is in range");
                let states = frame.structure.relations.row(k);
                let terms = gradient
                    .iter()
                    .zip(states)
                    .map(|(g, &j)| (g * origin[j]).abs());
                terms.sum::<f64>().max(SMALLEST_RELATION)
            })
            .collect();
        Nearest {
            frame,
            origin,
            targets,
            state_scale,
            relation_scale,
        }
    }

    /// Largest difference of two points, in scales of the states.
    pub fn distance(&self, a: &[f64], b: &[f64]) -> f64 {
        let pairs = a.iter().zip(b).zip(&self.state_scale);
        pairs.fold(0.0, |most: f64, ((a, b), scale)| {
            most.max((a - b).abs() / scale)
        })
    }
}

impl Problem for Nearest<'_> {
    fn structure(&self) -> &Structure {
        &self.frame.structure
    }

    fn evaluate(&self, x: &[f64], into: &mut Evaluation) -> Result<(), Outside> {
        let structure = &self.frame.structure;
        for (k, target) in self.targets.iter().enumerate() {
            let (value, gradient) = self.frame.row(k, x).ok_or(Outside {
                state: structure.relations.row(k)[0],
            })?;
            into.f[k] = value - target;
            into.f_values[structure.relations.range(k)].copy_from_slice(&gradient);
        }
        for (j, scale) in self.state_scale.iter().enumerate() {
            into.r[j] = (self.origin[j] - x[j]) / scale;
            into.g_values[structure.observations.range(j)].fill(1.0 / scale);
        }
        Ok(())
    }

    fn state_scale(&self) -> &[f64] {
        &self.state_scale
    }

    fn relation_scale(&self) -> &[f64] {
        &self.relation_scale
    }

    /// A disturbance is small: no step leads far.
    fn limit(&self, _x: &[f64], _step: &mut [f64]) {}
}
