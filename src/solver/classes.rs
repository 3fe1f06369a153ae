//! What the observations can determine and what they can check, by rank at one
//! point and never from a variance.
//!
//! Split the states into those that an observation measures alone (m) and the
//! rest (u). Relations and observations of several states are rows over both,
//! `U u + M m = 0`, where an observation of several states also has a column
//! of its own reading. Then (Crowe, Garcia Campos and Hrymak, AIChE J. 29,
//! 1983, 881)
//!
//! - the right null space of U holds the unobservable directions;
//! - the left null space of U projects the rows onto readings alone: a reading
//!   whose column of the projected M is zero is checked by nothing.
//!
//! Rank is found block by block: peeling, connected components, QR with column
//! pivoting (see `sparse_rows` and `rank`).

use super::problem::{Evaluation, Structure};
use super::projection::{Observed, Split};
use super::rank::{NULL_TOLERANCE, PivotedQr};
use super::sparse_rows::{SparseRow, scaled_row, take_apart};

/// A relation whose gradient is below this fraction of its scale is out of use.
const NO_GRADIENT: f64 = 1e-13;

/// The classes of states, observations and relations at one point.
#[derive(Clone, Debug, PartialEq)]
pub struct Classes {
    /// Rank of the relations in use, active bounds included.
    pub relations_independent: usize,
    /// Beside the relations: in use, but implied by the others.
    pub dependent_relations: Vec<bool>,
    /// Independent relations + observations used - states + unobservable directions.
    pub degrees_of_freedom: usize,
    /// Dimension of the space of state changes that nothing notices.
    pub unobservable_directions: usize,
    /// Beside the observations: in use, and checked by the others.
    pub redundant: Vec<bool>,
    /// Beside the observations: in use, as the caller said.
    pub observation_used: Vec<bool>,
    /// Beside the relations: in use, not set aside as dependent, and checked by
    /// the observations; the multipliers of the others are zero whatever is read.
    pub relation_checked: Vec<bool>,
    /// Beside the relations: neither an inactive bound nor without gradient.
    pub relation_used: Vec<bool>,
    /// Beside the states.
    observable: Vec<bool>,
    /// Directions that nothing notices, in the states' own units.
    basis: Vec<SparseRow>,
    /// One state per direction; with these held, everything is determined.
    pub(super) free_states: Vec<usize>,
}

impl Classes {
    /// True where the observations and relations determine state `j`.
    pub fn state_observable(&self, j: usize) -> bool {
        self.observable[j]
    }

    /// True where they determine a quantity with this gradient by the states,
    /// given as (state, derivative).
    pub fn combination_observable(&self, gradient: &[(usize, f64)]) -> bool {
        self.basis.iter().all(|direction| {
            let (mut sum, mut size) = (0.0, 0.0);
            for &(j, derivative) in gradient {
                if let Ok(at) = direction.binary_search_by_key(&j, |&(state, _)| state) {
                    let term: f64 = derivative * direction[at].1;
                    sum += term;
                    size += term.abs();
                }
            }
            sum.abs() <= NULL_TOLERANCE * size
        })
    }

    /// Directions that span what nothing notices, each as (state, change) in
    /// the states' own units, sorted by state.
    pub fn unobservable_basis(&self) -> &[Vec<(usize, f64)>] {
        &self.basis
    }
}

/// Classifies at the point of `evaluation`.
///
/// `active_bounds` lies beside `structure.bounds`, `observation_used` beside
/// the observations; rows of unused observations are not looked at.
pub fn classify(
    structure: &Structure,
    evaluation: &Evaluation,
    state_scale: &[f64],
    relation_scale: &[f64],
    active_bounds: &[bool],
    observation_used: &[bool],
) -> Classes {
    let relations = relation_rows(
        structure,
        evaluation,
        state_scale,
        relation_scale,
        active_bounds,
    );
    let relation_used: Vec<bool> = relations.iter().map(|row| !row.is_empty()).collect();
    let dependent_relations = dependent(&relations, structure.states);
    let relations_independent = (0..relations.len())
        .filter(|&k| relation_used[k] && !dependent_relations[k])
        .count();
    let observed = Observed::new(structure, evaluation, state_scale, observation_used);
    let mut independent = relations;
    for (row, _) in independent
        .iter_mut()
        .zip(&dependent_relations)
        .filter(|&(_, &dependent)| dependent)
    {
        row.clear();
    }
    let split = Split::new(structure.states, independent, &observed);
    let used = observation_used.iter().filter(|&&used| used).count();
    let unobservable_directions = split.basis.len();
    let mut observable = vec![true; structure.states];
    for &(j, _) in split.basis.iter().flatten() {
        observable[j] = false;
    }
    let in_units = |direction: SparseRow| {
        direction
            .into_iter()
            .map(|(j, v)| (j, v * state_scale[j]))
            .collect()
    };
    Classes {
        relations_independent,
        degrees_of_freedom: (relations_independent + used + unobservable_directions)
            .saturating_sub(structure.states),
        unobservable_directions,
        redundant: observed.redundant(&split.checked),
        observation_used: observation_used.to_vec(),
        relation_checked: split.relation_checked,
        relation_used,
        dependent_relations,
        observable,
        basis: split.basis.into_iter().map(in_units).collect(),
        free_states: split.free_states,
    }
}

/// Scaled rows of the relations; empty where one is out of use.
fn relation_rows(
    structure: &Structure,
    evaluation: &Evaluation,
    state_scale: &[f64],
    relation_scale: &[f64],
    active_bounds: &[bool],
) -> Vec<SparseRow> {
    let rows = &structure.relations;
    let mut scaled: Vec<SparseRow> = (0..rows.len())
        .map(|k| {
            scaled_row(
                rows,
                &evaluation.f_values,
                k,
                state_scale,
                NO_GRADIENT * relation_scale[k],
            )
        })
        .collect();
    for (&k, _) in structure
        .bounds
        .iter()
        .zip(active_bounds)
        .filter(|&(_, &active)| !active)
    {
        scaled[k].clear();
    }
    scaled
}

/// Which rows the others imply. Of several choices the later rows are named.
fn dependent(rows: &[SparseRow], states: usize) -> Vec<bool> {
    let mut dependent = vec![false; rows.len()];
    for block in take_apart(rows, &vec![true; states]).blocks {
        if block.columns.is_empty() {
            continue;
        }
        // Rows of the block are columns here: their rank and which of them are left over.
        let qr = PivotedQr::new(block.columns.len(), block.dense_rows(rows));
        for &i in &qr.order[qr.rank..] {
            dependent[block.rows[i]] = true;
        }
    }
    dependent
}

#[cfg(test)]
mod tests {
    use super::super::Problem;
    use super::super::testing::{Oracle, Polynomial, Random, Sample, random_network};
    use super::*;

    fn classes_of(sample: &Sample, evaluation: &Evaluation, active: &[bool]) -> Classes {
        let (states, relations) = (sample.state_scale(), sample.relation_scale());
        classify(
            sample.structure(),
            evaluation,
            states,
            relations,
            active,
            &sample.used(),
        )
    }

    fn agree(sample: &Sample, x: &[f64]) {
        let mut evaluation = Evaluation::for_structure(sample.structure());
        sample.evaluate(x, &mut evaluation).expect("inside");
        let classes = classes_of(sample, &evaluation, &[]);
        let oracle = Oracle::at(sample, &evaluation, &[]);
        assert_eq!(classes.relations_independent, oracle.relation_rank);
        assert_eq!(classes.unobservable_directions, oracle.unobservable);
        assert_eq!(classes.degrees_of_freedom, oracle.degrees_of_freedom);
        let observable: Vec<bool> = (0..x.len()).map(|j| classes.state_observable(j)).collect();
        assert_eq!(observable, oracle.observable);
        let redundant: Vec<bool> = oracle.redundancy.iter().map(|&r| r > 1e-9).collect();
        assert_eq!(classes.redundant, redundant, "{:?}", oracle.redundancy);
        // The basis lies in the dense null space and has its dimension.
        for direction in classes.unobservable_basis() {
            let mut dense = nalgebra::DVector::zeros(x.len());
            direction
                .iter()
                .for_each(|&(j, v)| dense[j] = v / sample.state_scale[j]);
            let null = nalgebra::DMatrix::from_fn(x.len(), oracle.null.ncols(), |i, j| {
                oracle.null[(i, j)] / sample.state_scale[i]
            });
            let left = &dense - &null * (null.transpose() * &dense);
            assert!(left.norm() < 1e-7 * dense.norm());
        }
    }

    #[test]
    fn random_networks_agree_with_singular_values() {
        for seed in 0..300 {
            let mut random = Random(seed);
            let nodes = 2 + random.below(12);
            let streams = nodes + random.below(3 * nodes);
            let measured = random.between(0.1, 0.8);
            let sample = random_network(&mut random, nodes, streams, measured);
            agree(&sample, &vec![1.0; streams]);
        }
    }

    #[test]
    fn dependent_relations_are_found_and_change_nothing_else() {
        for seed in 0..100 {
            let mut random = Random(1000 + seed);
            let mut sample = random_network(&mut random, 8, 20, 0.5);
            let mut relations = sample.relations.clone();
            let sum = relations
                .iter()
                .take(3)
                .flat_map(|relation| relation.0.clone())
                .collect();
            relations.push(Polynomial(sum));
            relations.push(relations[0].clone());
            let scale = sample.state_scale.clone();
            let before = classes_of(&sample, &evaluated(&sample, 20), &[]);
            sample = Sample::new(20, relations, sample.readings, Vec::new());
            sample.state_scale = scale;
            agree(&sample, &[1.0; 20]);
            let after = classes_of(&sample, &evaluated(&sample, 20), &[]);
            assert_eq!(before.relations_independent, after.relations_independent);
            assert_eq!(before.redundant, after.redundant);
            assert_eq!(before.degrees_of_freedom, after.degrees_of_freedom);
            let named = after
                .dependent_relations
                .iter()
                .filter(|&&dependent| dependent)
                .count();
            assert_eq!(named + after.relations_independent, sample.relations.len());
        }
    }

    fn evaluated(sample: &Sample, states: usize) -> Evaluation {
        let mut evaluation = Evaluation::for_structure(sample.structure());
        sample
            .evaluate(&vec![1.0; states], &mut evaluation)
            .expect("inside");
        evaluation
    }

    #[test]
    fn bilinear_networks_agree_with_singular_values() {
        for seed in 0..100 {
            let mut random = Random(2000 + seed);
            let flows = random_network(&mut random, 6, 14, 0.5);
            // A second balance of flow times concentration at every node.
            let mut relations = flows.relations.clone();
            for relation in &flows.relations {
                relations.push(Polynomial(
                    relation
                        .0
                        .iter()
                        .map(|(c, j)| (*c, vec![j[0], 14 + j[0]]))
                        .collect(),
                ));
            }
            let mut readings = flows.readings.clone();
            for j in 0..14 {
                if random.uniform() < 0.5 {
                    let mut extra =
                        flows
                            .readings
                            .first()
                            .cloned()
                            .unwrap_or(super::super::testing::Reading {
                                of: Polynomial::default(),
                                value: 1.0,
                                sigma: 1.0,
                                used: true,
                            });
                    extra.of = Polynomial::linear(&[(14 + j, 1.0)]);
                    readings.push(extra);
                }
            }
            let sample = Sample::new(28, relations, readings, Vec::new());
            let x: Vec<f64> = (0..28).map(|_| random.between(0.5, 2.0)).collect();
            agree(&sample, &x);
        }
    }

    #[test]
    fn a_cycle_of_unmeasured_flows_has_one_unobservable_direction() {
        // Three nodes in a ring; flows 0, 1, 2 go round, 3, 4, 5 leave and are read.
        let ring: Vec<Polynomial> = (0..3)
            .map(|i| Polynomial::linear(&[(i, 1.0), ((i + 1) % 3, -1.0), (3 + i, 1.0)]))
            .collect();
        let readings = (3..6)
            .map(|j| super::super::testing::Reading {
                of: Polynomial::linear(&[(j, 1.0)]),
                value: 0.0,
                sigma: 1.0,
                used: true,
            })
            .collect();
        let sample = Sample::new(6, ring, readings, Vec::new());
        let classes = classes_of(&sample, &evaluated(&sample, 6), &[]);
        assert_eq!(
            (classes.unobservable_directions, classes.degrees_of_freedom),
            (1, 1)
        );
        assert!((0..3).all(|j| !classes.state_observable(j)));
        assert!(classes.redundant.iter().all(|&redundant| redundant));
        // The difference of two flows round the ring is known all the same.
        assert!(classes.combination_observable(&[(0, 1.0), (1, -1.0)]));
        assert!(!classes.combination_observable(&[(0, 1.0), (1, 1.0)]));
    }
}
