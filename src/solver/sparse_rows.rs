//! Sparse rows of a Jacobian, ready for questions of rank: scaled, and taken
//! apart into pieces small enough for dense algebra.
//!
//! A column that only one row holds makes that row independent of the others:
//! row and column are peeled off, which may leave other columns with one row,
//! and so on. What no peeling removes (cycles) is the core; its connected
//! components are the blocks.

use super::problem::Rows;

/// An entry below this fraction of its row's length counts as zero.
const NO_ENTRY: f64 = 1e-10;
/// A column is peeled only by an entry of at least this fraction of its row's length.
const PEEL: f64 = 1e-6;

/// Entries of one row as (column, value).
pub(super) type SparseRow = Vec<(usize, f64)>;

/// Row `i` of a Jacobian in scaled states, of length one, without negligible
/// entries; empty where its length does not exceed `least`.
pub(super) fn scaled_row(
    rows: &Rows,
    values: &[f64],
    i: usize,
    state_scale: &[f64],
    least: f64,
) -> SparseRow {
    let range = rows.range(i);
    let mut row: SparseRow = rows.index[range.clone()]
        .iter()
        .zip(&values[range])
        .map(|(&j, v)| (j, v * state_scale[j]))
        .collect();
    let length = row.iter().map(|(_, v)| v * v).sum::<f64>().sqrt();
    if length.is_nan() || length <= least {
        return SparseRow::new();
    }
    row.iter_mut().for_each(|(_, v)| *v /= length);
    row.retain(|(_, v)| v.abs() > NO_ENTRY);
    row
}

/// How the rows come apart.
pub(super) struct Pieces {
    /// (row, column) in the order of peeling.
    pub(super) peeled: Vec<(usize, usize)>,
    /// Rows and columns of each connected component of the core, ascending.
    pub(super) blocks: Vec<Block>,
    /// Columns that no row of the core holds and that were not peeled.
    pub(super) free: Vec<usize>,
}

/// One connected component.
pub(super) struct Block {
    pub(super) rows: Vec<usize>,
    pub(super) columns: Vec<usize>,
}

impl Block {
    /// The block as dense columns.
    pub(super) fn dense_columns(&self, rows: &[SparseRow]) -> Vec<Vec<f64>> {
        let mut columns = vec![vec![0.0; self.rows.len()]; self.columns.len()];
        for (i, &row) in self.rows.iter().enumerate() {
            for &(j, value) in &rows[row] {
                if let Ok(at) = self.columns.binary_search(&j) {
                    columns[at][i] = value;
                }
            }
        }
        columns
    }

    /// The block as dense rows.
    pub(super) fn dense_rows(&self, rows: &[SparseRow]) -> Vec<Vec<f64>> {
        let mut dense = vec![vec![0.0; self.columns.len()]; self.rows.len()];
        for (row, &number) in dense.iter_mut().zip(&self.rows) {
            for &(j, value) in &rows[number] {
                if let Ok(at) = self.columns.binary_search(&j) {
                    row[at] = value;
                }
            }
        }
        dense
    }
}

/// Takes the rows apart, looking only at the columns that `of_interest` admits.
pub(super) fn take_apart(rows: &[SparseRow], of_interest: &[bool]) -> Pieces {
    let mut rows_of: Vec<Vec<usize>> = vec![Vec::new(); of_interest.len()];
    for (i, row) in rows.iter().enumerate() {
        for &(j, _) in row.iter().filter(|&&(j, _)| of_interest[j]) {
            rows_of[j].push(i);
        }
    }
    let mut count: Vec<usize> = rows_of.iter().map(Vec::len).collect();
    let mut row_left = vec![true; rows.len()];
    let mut column_left: Vec<bool> = of_interest.to_vec();
    let mut peeled = Vec::new();
    let mut queue: Vec<usize> = (0..count.len())
        .rev()
        .filter(|&j| of_interest[j] && count[j] == 1)
        .collect();
    while let Some(j) = queue.pop() {
        let Some(&i) = rows_of[j].iter().find(|&&i| row_left[i]) else {
            continue;
        };
        let entry = rows[i]
            .iter()
            .find(|&&(column, _)| column == j)
            .map_or(0.0, |&(_, value)| value);
        if !column_left[j] || entry.abs() < PEEL {
            continue;
        }
        row_left[i] = false;
        column_left[j] = false;
        peeled.push((i, j));
        for &(other, _) in rows[i].iter().filter(|&&(other, _)| of_interest[other]) {
            count[other] -= 1;
            if count[other] == 1 && column_left[other] {
                queue.push(other);
            }
        }
    }
    let free = (0..count.len())
        .filter(|&j| column_left[j] && count[j] == 0)
        .collect();
    let blocks = components(rows, &rows_of, row_left, column_left);
    Pieces {
        peeled,
        blocks,
        free,
    }
}

/// Connected components of what is left, in the order of their first row.
fn components(
    rows: &[SparseRow],
    rows_of: &[Vec<usize>],
    mut row_left: Vec<bool>,
    mut column_left: Vec<bool>,
) -> Vec<Block> {
    let mut blocks = Vec::new();
    for seed in 0..rows.len() {
        if !row_left[seed] {
            continue;
        }
        let mut block = Block {
            rows: Vec::new(),
            columns: Vec::new(),
        };
        let mut stack = vec![seed];
        row_left[seed] = false;
        while let Some(i) = stack.pop() {
            block.rows.push(i);
            for &(j, _) in &rows[i] {
                if !column_left[j] {
                    continue;
                }
                column_left[j] = false;
                block.columns.push(j);
                for &other in &rows_of[j] {
                    if std::mem::take(&mut row_left[other]) {
                        stack.push(other);
                    }
                }
            }
        }
        block.rows.sort_unstable();
        block.columns.sort_unstable();
        blocks.push(block);
    }
    blocks
}
