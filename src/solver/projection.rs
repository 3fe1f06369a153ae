//! The rows of a problem split into states that no reading measures alone and
//! readings: the null spaces that tell observability and redundancy.

use super::problem::{Evaluation, Structure};
use super::rank::{NULL_TOLERANCE, PivotedQr, RANK_TOLERANCE};
use super::sparse_rows::{SparseRow, scaled_row, take_apart};

/// An observation that moves less than this many sigma per state scale observes nothing.
const NO_OBSERVATION: f64 = 1e-12;

/// The observations in use, sorted by how many states they truly depend on.
pub(super) struct Observed {
    /// The state that observation i measures alone, if it does.
    alone: Vec<Option<usize>>,
    /// (observation, row) of those that involve several states.
    several: Vec<(usize, SparseRow)>,
    /// In use, but without any gradient.
    constant: Vec<bool>,
    /// How many observations measure each state alone.
    count: Vec<usize>,
}

impl Observed {
    pub(super) fn new(
        structure: &Structure,
        evaluation: &Evaluation,
        state_scale: &[f64],
        used: &[bool],
    ) -> Self {
        let rows = &structure.observations;
        let mut observed = Observed {
            alone: vec![None; rows.len()],
            several: Vec::new(),
            constant: vec![false; rows.len()],
            count: vec![0; structure.states],
        };
        for i in (0..rows.len()).filter(|&i| used[i]) {
            let row = scaled_row(rows, &evaluation.g_values, i, state_scale, NO_OBSERVATION);
            match row.as_slice() {
                [] => observed.constant[i] = true,
                [(j, _)] => {
                    observed.alone[i] = Some(*j);
                    observed.count[*j] += 1;
                }
                _ => observed.several.push((i, row)),
            }
        }
        observed
    }

    /// `checked` lies beside the states, then beside `several`.
    pub(super) fn redundant(&self, checked: &[bool]) -> Vec<bool> {
        let mut redundant: Vec<bool> = self
            .alone
            .iter()
            .zip(&self.constant)
            .map(|(alone, &constant)| {
                constant || alone.is_some_and(|j| self.count[j] > 1 || checked[j])
            })
            .collect();
        let own = &checked[self.count.len()..];
        for ((i, _), &checked) in self.several.iter().zip(own) {
            redundant[*i] = checked;
        }
        redundant
    }
}

/// The rows split into unmeasured states and readings.
pub(super) struct Split {
    /// Null vectors in scaled states, sorted by state.
    pub(super) basis: Vec<SparseRow>,
    pub(super) free_states: Vec<usize>,
    /// Beside the states, then the observations of several states: the column
    /// of this reading survives the projection.
    pub(super) checked: Vec<bool>,
    /// Beside the relations: part of a combination free of unmeasured states.
    pub(super) relation_checked: Vec<bool>,
}

impl Split {
    pub(super) fn new(states: usize, relations: Vec<SparseRow>, observed: &Observed) -> Self {
        let columns = states + observed.several.len();
        let count = relations.len();
        let mut rows = relations;
        for (nth, (_, row)) in observed.several.iter().enumerate() {
            let mut row = row.clone();
            row.push((states + nth, 1.0));
            rows.push(row);
        }
        let unmeasured: Vec<bool> = (0..columns)
            .map(|j| j < states && observed.count[j] == 0)
            .collect();
        let pieces = take_apart(&rows, &unmeasured);
        let mut split = Split {
            basis: Vec::new(),
            free_states: Vec::new(),
            checked: vec![false; columns],
            relation_checked: vec![false; count],
        };
        let mut directions: Vec<(usize, SparseRow)> =
            pieces.free.iter().map(|&j| (j, vec![(j, 1.0)])).collect();
        for block in &pieces.blocks {
            let qr = PivotedQr::new(block.rows.len(), block.dense_columns(&rows));
            for (free, vector) in qr.null_vectors() {
                let entries = block
                    .columns
                    .iter()
                    .copied()
                    .zip(vector)
                    .filter(|&(_, v)| v != 0.0)
                    .collect();
                directions.push((block.columns[free], entries));
            }
            if qr.rank < block.rows.len() {
                split.check(&qr, &block.rows, &rows, &unmeasured);
            }
        }
        let mut work = vec![0.0; columns];
        for (free, core) in directions {
            split.free_states.push(free);
            split
                .basis
                .push(extend(core, &pieces.peeled, &rows, &mut work));
        }
        split
    }

    /// Projects the readings' columns of a block, and a unit column for each of
    /// its relations, onto its left null space.
    fn check(
        &mut self,
        qr: &PivotedQr,
        numbers: &[usize],
        rows: &[SparseRow],
        unmeasured: &[bool],
    ) {
        let survives = |mut column: Vec<f64>| {
            let before = length(&column);
            qr.apply_transpose(&mut column);
            length(&column[qr.rank..]) > RANK_TOLERANCE * before
        };
        let mut cells: Vec<(usize, usize, f64)> = Vec::new();
        for (at, &i) in numbers.iter().enumerate() {
            cells.extend(
                rows[i]
                    .iter()
                    .filter(|&&(j, _)| !unmeasured[j])
                    .map(|&(j, v)| (j, at, v)),
            );
            if i < self.relation_checked.len() && !rows[i].is_empty() {
                let mut unit = vec![0.0; numbers.len()];
                unit[at] = 1.0;
                self.relation_checked[i] = survives(unit);
            }
        }
        cells.sort_unstable_by_key(|&(j, at, _)| (j, at));
        for column in cells.chunk_by(|a, b| a.0 == b.0) {
            let mut dense = vec![0.0; numbers.len()];
            for &(_, at, value) in column {
                dense[at] = value;
            }
            if survives(dense) {
                self.checked[column[0].0] = true;
            }
        }
    }
}

/// Carries a null vector of the core over to the peeled states: each peeled
/// row, last first, gives its own state.
fn extend(
    core: SparseRow,
    peeled: &[(usize, usize)],
    rows: &[SparseRow],
    work: &mut [f64],
) -> SparseRow {
    let mut touched: Vec<usize> = core.iter().map(|&(j, _)| j).collect();
    for &(j, value) in &core {
        work[j] = value;
    }
    for &(i, own) in peeled.iter().rev() {
        let (mut sum, mut size, mut pivot) = (0.0, 0.0, 1.0);
        for &(j, value) in &rows[i] {
            if j == own {
                pivot = value;
            } else {
                sum += value * work[j];
                size += (value * work[j]).abs();
            }
        }
        if sum.abs() > NULL_TOLERANCE * size {
            work[own] = -sum / pivot;
            touched.push(own);
        }
    }
    let largest = touched.iter().map(|&j| work[j].abs()).fold(0.0, f64::max);
    touched.sort_unstable();
    let vector = touched.iter().map(|&j| (j, work[j] / largest)).collect();
    touched.iter().for_each(|&j| work[j] = 0.0);
    vector
}

fn length(v: &[f64]) -> f64 {
    v.iter().map(|a| a * a).sum::<f64>().sqrt()
}
