//! A synthetic network of mixers, splitters and exchangers as a problem for
//! the solver: bilinear energy balances with h = a t + b t^2, t in Celsius.
//!
//! Reads the files that `generate.py` writes. States are the mass flows
//! (kg/s), then the temperatures (K), of all streams.

use std::path::Path;

use counterpoise::solver::{Evaluation, Outside, Problem, Rows, Structure};
use serde_json::Value;

const A: f64 = 4.0;
const B: f64 = 8e-4;
const ICE: f64 = 273.15;

/// Specific enthalpy in kJ/kg at a temperature in K.
fn enthalpy(t: f64) -> f64 {
    (A + B * (t - ICE)) * (t - ICE)
}

fn heat_capacity(t: f64) -> f64 {
    A + 2.0 * B * (t - ICE)
}

/// One relation of a network; streams by number.
#[derive(Clone, Debug)]
pub enum Relation {
    Mass {
        inlets: Vec<usize>,
        outlets: Vec<usize>,
    },
    Energy {
        inlets: Vec<usize>,
        outlets: Vec<usize>,
    },
    SameTemperature(usize, usize),
}

/// A network with its measurements.
#[derive(Clone, Debug)]
pub struct Network {
    pub streams: usize,
    pub relations: Vec<Relation>,
    pub relation_scale: Vec<f64>,
    pub state_scale: Vec<f64>,
    /// (state, reading, sigma) of each measured state.
    pub readings: Vec<(usize, f64, f64)>,
    pub start: Vec<f64>,
    structure: Structure,
}

impl Network {
    pub fn read(path: &Path) -> Network {
        let text = std::fs::read_to_string(path)
            .unwrap_or_else(|error| panic!("{}: {error}", path.display()));
        Network::parse(&text)
    }

    pub fn parse(text: &str) -> Network {
        let file: Value = serde_json::from_str(text).expect("a problem file is JSON");
        let streams = file["n"].as_u64().expect("n") as usize;
        let relations = file["eqs"]
            .as_array()
            .expect("eqs")
            .iter()
            .map(relation)
            .collect();
        let (y, sigma, start) = (
            numbers(&file["y"]),
            numbers(&file["sigma"]),
            numbers(&file["x0"]),
        );
        let measured: Vec<bool> = numbers(&file["meas"])
            .iter()
            .map(|&flag| flag != 0.0)
            .collect();
        let readings = (0..2 * streams)
            .filter(|&j| measured[j])
            .map(|j| (j, y[j], sigma[j]))
            .collect();
        let state_scale = (0..2 * streams)
            .map(|j| match (measured[j], j < streams) {
                (true, _) => sigma[j],
                (false, true) => 0.01 * start[j].abs(),
                (false, false) => 0.5,
            })
            .collect();
        Network::new(
            streams,
            relations,
            numbers(&file["escale"]),
            state_scale,
            readings,
            start,
        )
    }

    fn new(
        streams: usize,
        relations: Vec<Relation>,
        relation_scale: Vec<f64>,
        state_scale: Vec<f64>,
        readings: Vec<(usize, f64, f64)>,
        start: Vec<f64>,
    ) -> Network {
        let lists: Vec<Vec<usize>> = relations
            .iter()
            .map(|relation| states_of(relation, streams))
            .collect();
        let observations: Vec<[usize; 1]> = readings.iter().map(|&(j, _, _)| [j]).collect();
        let mut with_energy = vec![false; streams];
        for relation in &relations {
            if let Relation::Energy { inlets, outlets } = relation {
                inlets
                    .iter()
                    .chain(outlets)
                    .for_each(|&i| with_energy[i] = true);
            }
        }
        let structure = Structure {
            states: 2 * streams,
            relations: Rows::from_lists(&lists),
            observations: Rows::from_lists(&observations),
            bounds: Vec::new(),
            pairs: (0..streams)
                .filter(|&i| with_energy[i])
                .map(|i| (i, streams + i))
                .collect(),
        };
        Network {
            streams,
            relations,
            relation_scale,
            state_scale,
            readings,
            start,
            structure,
        }
    }
}

fn numbers(value: &Value) -> Vec<f64> {
    value
        .as_array()
        .expect("a list")
        .iter()
        .map(|v| v.as_f64().expect("a number"))
        .collect()
}

fn relation(row: &Value) -> Relation {
    let list = |value: &Value| {
        numbers(value)
            .iter()
            .map(|&i| i as usize)
            .collect::<Vec<usize>>()
    };
    match row[0].as_str() {
        Some("mass") => Relation::Mass {
            inlets: list(&row[1]),
            outlets: list(&row[2]),
        },
        Some("energy") => Relation::Energy {
            inlets: list(&row[1]),
            outlets: list(&row[2]),
        },
        Some("teq") => Relation::SameTemperature(
            row[1].as_u64().expect("a stream") as usize,
            row[2].as_u64().expect("a stream") as usize,
        ),
        other => panic!("unknown relation {other:?}"),
    }
}

fn states_of(relation: &Relation, n: usize) -> Vec<usize> {
    match relation {
        Relation::Mass { inlets, outlets } => inlets.iter().chain(outlets).copied().collect(),
        Relation::Energy { inlets, outlets } => inlets
            .iter()
            .chain(outlets)
            .flat_map(|&i| [i, n + i])
            .collect(),
        Relation::SameTemperature(a, b) => vec![n + a, n + b],
    }
}

impl Problem for Network {
    fn structure(&self) -> &Structure {
        &self.structure
    }

    fn evaluate(&self, x: &[f64], into: &mut Evaluation) -> Result<(), Outside> {
        let (m, t) = x.split_at(self.streams);
        let mut entry = 0;
        let mut put = |value: f64, values: &mut Vec<f64>| {
            values[entry] = value;
            entry += 1;
        };
        for (k, relation) in self.relations.iter().enumerate() {
            let mut sum = 0.0;
            match relation {
                Relation::Mass { inlets, outlets } => {
                    for (list, sign) in [(inlets, 1.0), (outlets, -1.0)] {
                        for &i in list {
                            sum += sign * m[i];
                            put(sign, &mut into.f_values);
                        }
                    }
                }
                Relation::Energy { inlets, outlets } => {
                    for (list, sign) in [(inlets, 1.0), (outlets, -1.0)] {
                        for &i in list {
                            let h = enthalpy(t[i]);
                            sum += sign * m[i] * h;
                            put(sign * h, &mut into.f_values);
                            put(sign * m[i] * heat_capacity(t[i]), &mut into.f_values);
                        }
                    }
                }
                Relation::SameTemperature(a, b) => {
                    sum = t[*a] - t[*b];
                    put(1.0, &mut into.f_values);
                    put(-1.0, &mut into.f_values);
                }
            }
            into.f[k] = sum;
        }
        for (i, &(j, y, sigma)) in self.readings.iter().enumerate() {
            into.r[i] = (y - x[j]) / sigma;
            into.g_values[i] = sigma.recip();
        }
        Ok(())
    }

    fn state_scale(&self) -> &[f64] {
        &self.state_scale
    }

    fn relation_scale(&self) -> &[f64] {
        &self.relation_scale
    }

    fn limit(&self, _x: &[f64], _step: &mut [f64]) {}

    fn curvature(
        &self,
        x: &[f64],
        multipliers: &[f64],
        into: &mut Vec<(usize, usize, f64)>,
    ) -> bool {
        let n = self.streams;
        into.clear();
        for (relation, multiplier) in self.relations.iter().zip(multipliers) {
            if let Relation::Energy { inlets, outlets } = relation {
                for (list, sign) in [(inlets, 1.0), (outlets, -1.0)] {
                    for &i in list {
                        let weight = sign * multiplier;
                        into.push((n + i, i, weight * heat_capacity(x[n + i])));
                        into.push((n + i, n + i, weight * x[i] * 2.0 * B));
                    }
                }
            }
        }
        true
    }
}
