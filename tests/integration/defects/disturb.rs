//! Plant faults in the demo's truth.
//!
//! The heat balance of [`demo::truth`] knows no leaks. A [`Disturber`] starts
//! from one and finds the nearest state that obeys every relation of the plant
//! with the defects in it: a leak of b kg/s that carries h takes b out of the
//! mass balance of its side and b h out of the energy balance. What the
//! operators and the weather set stays as it is (load, live and hot reheat
//! steam, sprays, blowdown, cooling water and so on), and so does the true
//! value of every assumption; make-up closes the mass.

use std::collections::BTreeMap;

use counterpoise::demo::{Flow, LineUp, Machine, Truth};
use counterpoise::equations::{Law, Role, System};
use counterpoise::fluid;
use counterpoise::plant::{EquipmentId, Kind, Plant, StreamId};
use counterpoise::solver::{Options, Status, Symbolic, solve};

use super::nearest::{Frame, Nearest};

/// What is wrong with the plant, by its size.
#[derive(Clone, Debug, PartialEq)]
pub enum Defect {
    /// A leak of `size` kg/s from a side to the outside. It carries the
    /// enthalpy of the side's inlet; where there are several inlets, of its
    /// outlet, and where there are several, of the first in the plant file.
    Leak {
        of: EquipmentId,
        side: String,
        size: f64,
    },
    /// A leak of `size` kg/s from the tube or cooling side into the steam side.
    Tubes { of: EquipmentId, size: f64 },
    /// `size` kg/s through a valve that is normally closed.
    Passing { stream: StreamId, size: f64 },
    /// Heat (power, of machines) of `size` kW that leaves beside what is stated.
    HeatLoss { of: EquipmentId, size: f64 },
    /// A line that the plant file does not know, `size` kg/s from one side into another.
    Line {
        from: (EquipmentId, &'static str),
        into: (EquipmentId, &'static str),
        size: f64,
        carries: Carries,
    },
    /// A stream that the plant file declares saturated is subcooled by `kelvin`.
    Subcooled { stream: StreamId, kelvin: f64 },
}

/// Whose enthalpy a line carries.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Carries {
    /// A stream's.
    Stream(StreamId),
    /// That of dry saturated steam at a stream's pressure.
    DrySteam(StreamId),
}

/// What the operators and the weather set.
const HELD: [(&str, &str); 12] = [
    ("live-steam", "mph"),
    ("hot-reheat", "h"),
    ("superheat-spray", "m"),
    ("reheat-spray", "m"),
    ("blowdown", "m"),
    ("site-steam", "m"),
    ("hp-leakoff", "mh"),
    ("cooling-in", "mh"),
    ("make-up", "h"),
    // Governing valve and pumps' curves set these.
    ("chest-steam", "p"),
    ("final-feed", "p"),
    ("condensate-pumped", "p"),
];

/// Disturbs truths of the demo plant; made once.
pub struct Disturber {
    plant: Plant,
    frame: Frame,
    symbolic: Symbolic,
}

impl Disturber {
    pub fn new(plant: &Plant) -> Self {
        let system = System::new(plant);
        let layout = &system.layout;
        let held = HELD.iter().flat_map(|(name, states)| {
            let s = stream(plant, name);
            states.chars().map(move |state| match state {
                'm' => layout.m(s),
                'p' => layout.p(s),
                _ => layout.h(s),
            })
        });
        let held = held.collect();
        let frame = Frame::new(system, plant.tags.len(), held);
        Disturber {
            plant: plant.clone(),
            symbolic: Symbolic::new(&frame.structure),
            frame,
        }
    }

    pub fn plant(&self) -> &Plant {
        &self.plant
    }

    /// The truth with the defects in it, all at once.
    ///
    /// # Panics
    /// Where the plant cannot bear them.
    pub fn disturbed(&self, truth: &Truth, defects: &[Defect]) -> Truth {
        let disturbed = self.try_disturbed(truth, defects);
        disturbed.unwrap_or_else(|why| panic!("{defects:?}: {why}"))
    }

    /// The same; why, where the plant cannot bear the defects: more would leak
    /// than flows.
    pub fn try_disturbed(&self, truth: &Truth, defects: &[Defect]) -> Result<Truth, String> {
        const MOST_TURNS: usize = 20;
        // In units of the states' scales; an enthalpy's is 5 kJ/kg.
        const SETTLED: f64 = 1e-10;

        let origin = self.states(truth);
        let drawn: BTreeMap<&str, f64> = truth.assumptions.iter().collect();
        let stated = self.plant.assumptions.iter().map(|a| drawn[&*a.name]);
        let stated: Vec<f64> = stated.collect();
        let options = Options {
            tolerance_relation: 1e-12,
            ..Options::default()
        };
        let mut x = origin.clone();
        for _ in 0..MOST_TURNS {
            let laws = self.targets(defects, &x);
            let problem = Nearest::new(&self.frame, &origin, &laws, &stated);
            let outcome = solve(&problem, &self.symbolic, &x, &options);
            if outcome.status != Status::Converged {
                let worst = outcome.worst_relation.map(|k| self.describe(k));
                return Err(format!("{:?}, {worst:?}", outcome.status));
            }
            let moved = problem.distance(&x, &outcome.x);
            x = outcome.x;
            if moved < SETTLED {
                return self.truth(truth, &x);
            }
        }
        Err("what leaks does not settle".to_owned())
    }

    /// Every side with a mass balance, in the order of the plant file.
    pub fn sides(&self) -> Vec<(EquipmentId, String)> {
        let relations = self.frame.system.relations.iter();
        let sides = relations.filter_map(|relation| match &relation.role {
            Role::Mass { side } => Some((relation.of?, side.clone())),
            _ => None,
        });
        sides.collect()
    }

    /// Equipment with tubes that may leak into its steam side.
    pub fn with_tubes(&self) -> Vec<EquipmentId> {
        let all = (0..self.plant.equipment.len()).map(EquipmentId);
        let tubed = all.filter(|id| {
            let kind = &self.plant.equipment[id.0].kind;
            matches!(kind, Kind::ClosedHeater { .. })
                || matches!(
                    kind,
                    Kind::Condenser {
                        cooling: Some(_),
                        ..
                    }
                )
        });
        tubed.collect()
    }

    /// Equipment with a balance of energy or power.
    pub fn with_energy(&self) -> Vec<EquipmentId> {
        let relations = self.frame.system.relations.iter();
        let balances = relations.filter(|relation| relation.role == Role::Energy);
        balances.filter_map(|relation| relation.of).collect()
    }

    /// What each relation comes to at `x` without the defects: minus what they add.
    fn targets(&self, defects: &[Defect], x: &[f64]) -> Vec<f64> {
        let mut targets = vec![0.0; self.frame.laws.len()];
        for defect in defects {
            self.add(defect, x, &mut targets);
        }
        targets
    }

    fn add(&self, defect: &Defect, x: &[f64], targets: &mut [f64]) {
        let layout = &self.frame.system.layout;
        match defect {
            Defect::Leak { of, side, size } => {
                let carrier = self.carrier(*of, side);
                self.move_out(*of, side, *size, x[layout.h(carrier)], targets);
            }
            Defect::Tubes { of, size } => {
                let from = match self.plant.equipment[of.0].kind {
                    Kind::Condenser { .. } => "cooling",
                    _ => "tube",
                };
                // The energy balance is of both sides together: nothing leaves it.
                self.move_out(*of, from, *size, 0.0, targets);
                self.move_out(*of, "steam", -size, 0.0, targets);
            }
            Defect::Passing { stream, size } => {
                let closed = Law::Linear(vec![(layout.m(*stream), 1.0)]);
                let law = self.law(|k| self.frame.system.relations[k].law == closed);
                targets[law.expect("a normally closed stream")] += size;
            }
            Defect::HeatLoss { of, size } => {
                targets[self.energy(*of).expect("an energy balance")] += size;
            }
            Defect::Line {
                from,
                into,
                size,
                carries,
            } => {
                let enthalpy = match carries {
                    Carries::Stream(s) => x[layout.h(*s)],
                    Carries::DrySteam(s) => {
                        let at = fluid::saturation(x[layout.p(*s)]);
                        at.expect("below the critical pressure").vapour.h
                    }
                };
                self.move_out(from.0, from.1, *size, enthalpy, targets);
                self.move_out(into.0, into.1, -size, enthalpy, targets);
            }
            Defect::Subcooled { stream, kelvin } => {
                let p = x[layout.p(*stream)];
                let line = fluid::saturation(p).expect("below the critical pressure");
                let cooler = fluid::from_pt(p, line.t - kelvin).expect("in range");
                let law = self.law(|k| {
                    let law = &self.frame.system.relations[k].law;
                    matches!(law, Law::Saturated { stream: s, .. } if s == stream)
                });
                targets[law.expect("a saturated stream")] += cooler.h - line.liquid.h;
            }
        }
    }

    /// Takes a flow out of a side: what enters less what leaves then comes to it.
    fn move_out(&self, of: EquipmentId, side: &str, flow: f64, h: f64, targets: &mut [f64]) {
        let mass = self.mass(of, side).expect("a side of this equipment");
        targets[mass] += flow;
        // A valve or tee has no balance of energy: what leaks is like what flows.
        if let Some(energy) = self.energy(of) {
            targets[energy] += flow * h;
        }
    }

    /// The stream whose enthalpy a leak of a side carries.
    fn carrier(&self, of: EquipmentId, side: &str) -> StreamId {
        let mass = self.mass(of, side).expect("a side of this equipment");
        let Law::Linear(terms) = &self.frame.system.relations[self.frame.laws[mass]].law else {
            panic!("a mass balance is linear");
        };
        let with_sign = |sign: f64| {
            let flows = terms.iter().filter(move |(_, c)| *c == sign);
            flows.filter_map(|&(j, _)| self.frame.system.layout.stream_of(j))
        };
        let first = |sign: f64| with_sign(sign).min_by_key(|s| s.0);
        let from_inlet = with_sign(1.0).count() == 1;
        first(if from_inlet { 1.0 } else { -1.0 }).expect("a side has both ends")
    }

    fn mass(&self, of: EquipmentId, wanted: &str) -> Option<usize> {
        self.law(|k| {
            let relation = &self.frame.system.relations[k];
            relation.of == Some(of)
                && matches!(&relation.role, Role::Mass { side } if side == wanted)
        })
    }

    fn energy(&self, of: EquipmentId) -> Option<usize> {
        self.law(|k| {
            let relation = &self.frame.system.relations[k];
            relation.of == Some(of) && relation.role == Role::Energy
        })
    }

    fn law(&self, wanted: impl Fn(usize) -> bool) -> Option<usize> {
        self.frame.laws.iter().position(|&k| wanted(k))
    }

    fn describe(&self, row: usize) -> String {
        let relations = &self.frame.system.relations;
        match self.frame.laws.get(row) {
            Some(&k) => format!("{:?} of {:?}", relations[k].role, relations[k].of),
            None => format!("assumption or held state {}", row - self.frame.laws.len()),
        }
    }

    /// The states of a truth, as the equations lay them out.
    fn states(&self, truth: &Truth) -> Vec<f64> {
        let layout = &self.frame.system.layout;
        let mut x = vec![0.0; layout.len()];
        for s in (0..layout.streams()).map(StreamId) {
            let flow = truth.stream(&self.plant, s).expect("a known stream");
            x[layout.m(s)] = flow.mass_flow;
            x[layout.p(s)] = flow.pressure;
            x[layout.h(s)] = flow.enthalpy;
        }
        for (e, own) in layout.own.iter().enumerate() {
            let machine = truth.machine(&self.plant, EquipmentId(e));
            let pairs = [
                (own.heat, machine.heat),
                (own.work, machine.work),
                (own.power, machine.power),
                (own.loss, machine.loss),
                (own.holdup, machine.holdup_change),
            ];
            for (state, value) in pairs {
                if let Some(j) = state {
                    x[j] = value.expect("a truth has every own state");
                }
            }
        }
        if let Some(j) = layout.barometer {
            x[j] = truth.barometer;
        }
        x
    }

    /// The truth of these states, with the assumptions of the undisturbed one.
    fn truth(&self, undisturbed: &Truth, x: &[f64]) -> Result<Truth, String> {
        let layout = &self.frame.system.layout;
        let mut streams = BTreeMap::new();
        for (s, stream) in self.plant.streams.iter().enumerate() {
            let s = StreamId(s);
            let (mass_flow, pressure) = (x[layout.m(s)], x[layout.p(s)]);
            let enthalpy = x[layout.h(s)];
            if mass_flow <= 0.0 && !stream.normally_closed {
                return Err(format!("{mass_flow} kg/s in {}", stream.name));
            }
            let state = fluid::from_ph(pressure, enthalpy);
            let state = state.map_err(|outside| format!("{}: {outside}", stream.name))?;
            let flow = Flow {
                mass_flow,
                pressure,
                enthalpy,
                temperature: state.t,
            };
            streams.insert(stream.name.clone(), flow);
        }
        let machines = self.plant.equipment.iter().zip(&layout.own);
        let machines = machines.map(|(equipment, own)| {
            let of = |state: Option<usize>| state.map(|j| x[j]);
            let machine = Machine {
                heat: of(own.heat),
                work: of(own.work),
                power: of(own.power),
                loss: of(own.loss),
                holdup_change: of(own.holdup),
            };
            (equipment.name.clone(), machine)
        });
        Ok(Truth {
            line_up: LineUp::default(),
            streams,
            equipment: (machines.filter(|(_, machine)| *machine != Machine::default())).collect(),
            barometer: undisturbed.barometer,
            assumptions: undisturbed.assumptions.clone(),
        })
    }
}

/// A stream by its name.
pub fn stream(plant: &Plant, name: &str) -> StreamId {
    let place = plant.streams.iter().position(|s| s.name == name);
    StreamId(place.unwrap_or_else(|| panic!("no stream {name}")))
}

/// A piece of equipment by its name.
pub fn equipment(plant: &Plant, name: &str) -> EquipmentId {
    let place = plant.equipment.iter().position(|e| e.name == name);
    EquipmentId(place.unwrap_or_else(|| panic!("no equipment {name}")))
}
