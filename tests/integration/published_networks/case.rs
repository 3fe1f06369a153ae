//! A small problem of functions with full gradients, solved and classified.

use counterpoise::solver::{
    Classes, Covariance, Evaluation, Options, Outcome, Outside, Problem, Rows, Status, Structure,
    Symbolic, classify, solve,
};

pub type Function = Box<dyn Fn(&[f64]) -> (f64, Vec<f64>)>;

/// A small problem: functions of all states that give value and full gradient.
pub struct Case {
    relations: Vec<Function>,
    /// (function, reading, sigma)
    observations: Vec<(Function, f64, f64)>,
    structure: Structure,
    pub state_scale: Vec<f64>,
    relation_scale: Vec<f64>,
}

/// The sum of c_j x_j less a constant, and the states it depends on.
pub fn linear(row: &[f64], constant: f64) -> (Function, Vec<usize>) {
    let states = (0..row.len()).filter(|&j| row[j] != 0.0).collect();
    let row = row.to_vec();
    let function = move |x: &[f64]| {
        (
            row.iter().zip(x).map(|(c, v)| c * v).sum::<f64>() - constant,
            row.clone(),
        )
    };
    (Box::new(function), states)
}

impl Case {
    pub fn new(
        states: usize,
        relations: Vec<(Function, Vec<usize>)>,
        observations: Vec<((Function, Vec<usize>), f64, f64)>,
    ) -> Self {
        let relation_states: Vec<Vec<usize>> =
            relations.iter().map(|(_, states)| states.clone()).collect();
        let observed: Vec<Vec<usize>> = observations
            .iter()
            .map(|((_, states), _, _)| states.clone())
            .collect();
        Case {
            state_scale: vec![1.0; states],
            relation_scale: vec![1.0; relations.len()],
            structure: Structure {
                states,
                relations: Rows::from_lists(&relation_states),
                observations: Rows::from_lists(&observed),
                bounds: Vec::new(),
                pairs: Vec::new(),
            },
            relations: relations
                .into_iter()
                .map(|(function, _)| function)
                .collect(),
            observations: observations
                .into_iter()
                .map(|((function, _), y, sigma)| (function, y, sigma))
                .collect(),
        }
    }

    /// A network of flows with the given balances; `readings` as (stream, value, sigma).
    pub fn network(balances: &[Vec<f64>], readings: &[(usize, f64, f64)]) -> Self {
        let streams = balances[0].len();
        let observations = readings
            .iter()
            .map(|&(j, y, sigma)| {
                let unit: Vec<f64> = (0..streams).map(|i| f64::from(i == j)).collect();
                (linear(&unit, 0.0), y, sigma)
            })
            .collect();
        let mut case = Case::new(
            streams,
            balances.iter().map(|row| linear(row, 0.0)).collect(),
            observations,
        );
        for &(j, _, sigma) in readings {
            case.state_scale[j] = sigma;
        }
        case
    }

    pub fn solve(&self, start: &[f64]) -> Solved {
        let symbolic = Symbolic::new(&self.structure);
        let outcome = solve(self, &symbolic, start, &Options::default());
        assert_eq!(outcome.status, Status::Converged);
        let used = vec![true; self.observations.len()];
        let classes = classify(
            &self.structure,
            &outcome.evaluation,
            &self.state_scale,
            &self.relation_scale,
            &[],
            &used,
        );
        let covariance = Covariance::new(
            &symbolic,
            &self.structure,
            &outcome.evaluation,
            &self.state_scale,
            &self.relation_scale,
            &classes,
        );
        let redundancy: Vec<f64> = (0..used.len()).map(|i| covariance.redundancy(i)).collect();
        let leak_ratio = (0..self.relations.len())
            .map(|k| outcome.multipliers[k].powi(2) / covariance.multiplier_variance(k))
            .collect();
        let covariances = (0..start.len())
            .map(|i| {
                (0..start.len())
                    .map(|j| covariance.state_covariance(i, j))
                    .collect()
            })
            .collect();
        Solved {
            redundancy,
            leak_ratio,
            covariances,
            classes,
            outcome,
        }
    }
}

impl Problem for Case {
    fn structure(&self) -> &Structure {
        &self.structure
    }

    fn evaluate(&self, x: &[f64], into: &mut Evaluation) -> Result<(), Outside> {
        for (k, function) in self.relations.iter().enumerate() {
            let (value, gradient) = function(x);
            into.f[k] = value;
            for at in self.structure.relations.range(k) {
                into.f_values[at] = gradient[self.structure.relations.index[at]];
            }
        }
        for (i, (function, y, sigma)) in self.observations.iter().enumerate() {
            let (value, gradient) = function(x);
            into.r[i] = (y - value) / sigma;
            for at in self.structure.observations.range(i) {
                into.g_values[at] = gradient[self.structure.observations.index[at]] / sigma;
            }
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
}

pub struct Solved {
    pub outcome: Outcome,
    pub classes: Classes,
    pub redundancy: Vec<f64>,
    /// Multiplier squared over its variance: the likelihood ratio of a leak.
    pub leak_ratio: Vec<f64>,
    pub covariances: Vec<Vec<f64>>,
}

impl Solved {
    pub fn standardised(&self, i: usize) -> f64 {
        self.outcome.evaluation.r[i] / self.redundancy[i].sqrt()
    }
}
