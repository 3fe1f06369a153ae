//! Everything about a structure that does not depend on values: the pattern of
//! the augmented matrix, its elimination order and the pattern of its factor.
//!
//! The unknowns are the states x, one multiplier per relation, and one
//! residual for each observation that involves several states (Hachtel's
//! form; an observation of one state condenses into the diagonal):
//!
//! ```text
//!     | H   A'  -G' |      H  from observations of one state (diagonal)
//! K = | A   0    0  |      A  relations
//!     | -G  0   -I  |      G  observations of several states
//! ```
//!
//! A relation has nothing on the diagonal, nor has a state that no observation
//! measures alone. Relations are therefore paired with states by a maximum
//! matching, unmeasured states first, and a pair is eliminated together, the
//! state first: the pivots of a pair form the block [h a; a 0], which is sound
//! even where h is next to nothing. Relations that find no partner (bounds,
//! which are mostly out of use, and relations that others imply) follow the
//! first of their states, for the same reason.

use super::ordering::minimum_degree;
use super::pairing::partners;
use super::problem::{Rows, Structure};

/// Slot of an entry that has no place of its own in the matrix.
const CONDENSED: u32 = u32::MAX;

/// The symbolic part of all solves of one structure; made once, shared by all batches.
#[derive(Clone, Debug)]
pub struct Symbolic {
    pub(super) states: usize,
    pub(super) relations: usize,
    /// Observations with a residual of their own among the unknowns.
    pub(super) several: Vec<usize>,
    /// Place of each unknown (states, relations, residuals) in the elimination order.
    pub(super) place: Vec<u32>,
    /// True where the unknown at this place is a state: its pivot is positive.
    pub(super) positive: Vec<bool>,
    /// True where the unknown at this place is a state whose partner follows it.
    pub(super) leads_pair: Vec<bool>,
    pub(super) matrix: Pattern,
    /// Place in the strict upper triangle, beside `relations.index`.
    pub(super) relation_slot: Vec<u32>,
    /// The same beside `observations.index`; meaningless for observations of one state.
    pub(super) observation_slot: Vec<u32>,
    /// (row, column) with row > column, sorted, and the slot of each pair of states.
    pub(super) pair_slot: Vec<((u32, u32), u32)>,
    pub(super) factor: FactorPattern,
}

/// Strict upper triangle by columns: `row[start[k]..start[k + 1]]` are the rows above k.
#[derive(Clone, Debug, Default)]
pub(super) struct Pattern {
    pub(super) start: Vec<u32>,
    pub(super) row: Vec<u32>,
}

/// Pattern of the unit lower triangle L, by columns and by rows, ascending.
#[derive(Clone, Debug, Default)]
pub(super) struct FactorPattern {
    pub(super) column_start: Vec<u32>,
    pub(super) column_row: Vec<u32>,
    pub(super) row_start: Vec<u32>,
    pub(super) row_column: Vec<u32>,
}

impl Symbolic {
    /// Orders the unknowns of `structure` and works out the pattern of the factor.
    pub fn new(structure: &Structure) -> Symbolic {
        let states = structure.states;
        let relations = structure.relations.len();
        let several: Vec<usize> = (0..structure.observations.len())
            .filter(|&i| structure.observations.range(i).len() > 1)
            .collect();
        let entries = Entries::collect(structure, &several);
        let dimension = states + relations + several.len();
        let partner = partners(structure);
        let order = order_with_pairs(dimension, structure, &entries, &partner);
        let mut place = vec![0; dimension];
        for (at, &unknown) in order.iter().enumerate() {
            place[unknown as usize] = at as u32;
        }
        let (matrix, slots) = entries.lay_out(&place);
        let (relation_slot, rest) = slots.split_at(structure.relations.index.len());
        let (observation_slot, pair_slots) = rest.split_at(structure.observations.index.len());
        let mut pair_slot: Vec<((u32, u32), u32)> = entries.pairs.iter().copied().zip(pair_slots.iter().copied()).collect();
        pair_slot.sort_unstable();
        pair_slot.dedup();
        let leads_pair: Vec<bool> =
            order.iter().map(|&unknown| partner.get(unknown as usize).is_some_and(Option::is_some)).collect();
        Symbolic {
            states,
            relations,
            several,
            positive: order.iter().map(|&unknown| (unknown as usize) < states).collect(),
            factor: FactorPattern::of(&matrix, &leads_pair),
            leads_pair,
            relation_slot: relation_slot.to_vec(),
            observation_slot: observation_slot.to_vec(),
            pair_slot,
            place,
            matrix,
        }
    }

    /// Number of unknowns of the augmented system.
    pub fn dimension(&self) -> usize {
        self.place.len()
    }

    /// Entries of the factor below the diagonal.
    pub fn fill(&self) -> usize {
        self.factor.column_row.len()
    }

    /// Place of a relation's multiplier in the elimination order.
    pub(super) fn relation_place(&self, k: usize) -> usize {
        self.place[self.states + k] as usize
    }

    /// Place of the residual of the `nth` observation of several states.
    pub(super) fn residual_place(&self, nth: usize) -> usize {
        self.place[self.states + self.relations + nth] as usize
    }

    /// Slot of an off-diagonal pair of states, if it is among the structure's pairs.
    pub(super) fn slot_of_pair(&self, i: usize, j: usize) -> Option<u32> {
        let key = (i.max(j) as u32, i.min(j) as u32);
        let at = self.pair_slot.binary_search_by_key(&key, |&(pair, _)| pair).ok()?;
        Some(self.pair_slot[at].1)
    }
}

/// Off-diagonal entries of the augmented matrix as pairs of unknowns.
struct Entries {
    /// Relations', then observations' (condensed ones as (x, x)), then pairs'.
    list: Vec<(u32, u32)>,
    pairs: Vec<(u32, u32)>,
}

impl Entries {
    fn collect(structure: &Structure, several: &[usize]) -> Self {
        let (n, m) = (structure.states, structure.relations.len());
        let mut list = Vec::new();
        let mut push_row = |rows: &Rows, i: usize, unknown: usize| {
            list.extend(rows.row(i).iter().map(|&j| (j as u32, unknown as u32)));
        };
        for k in 0..m {
            push_row(&structure.relations, k, n + k);
        }
        let mut nth = 0;
        for i in 0..structure.observations.len() {
            if several.get(nth) == Some(&i) {
                push_row(&structure.observations, i, n + m + nth);
                nth += 1;
            } else if let Some(&j) = structure.observations.row(i).first() {
                push_row(&structure.observations, i, j);
            }
        }
        let pairs: Vec<(u32, u32)> = structure
            .pairs
            .iter()
            .filter(|(i, j)| i != j)
            .map(|&(i, j)| (i.max(j) as u32, i.min(j) as u32))
            .collect();
        list.extend(&pairs);
        Entries { list, pairs }
    }

    /// Neighbour lists of the graph whose node of unknown u is `node[u]`.
    fn neighbours(&self, node: &[u32], nodes: usize) -> Vec<Vec<u32>> {
        let mut lists = vec![Vec::new(); nodes];
        for &(a, b) in &self.list {
            let (a, b) = (node[a as usize], node[b as usize]);
            if a != b {
                lists[a as usize].push(b);
                lists[b as usize].push(a);
            }
        }
        for list in &mut lists {
            list.sort_unstable();
            list.dedup();
        }
        lists
    }

    /// The upper triangle in the elimination order, and the slot of every entry.
    fn lay_out(&self, place: &[u32]) -> (Pattern, Vec<u32>) {
        let at = |&(a, b): &(u32, u32)| {
            let (a, b) = (place[a as usize], place[b as usize]);
            (a.max(b), a.min(b))
        };
        let mut cells: Vec<(u32, u32)> = self.list.iter().map(at).filter(|(column, row)| column != row).collect();
        cells.sort_unstable();
        cells.dedup();
        let mut start = vec![0; place.len() + 1];
        for &(column, _) in &cells {
            start[column as usize + 1] += 1;
        }
        for k in 0..place.len() {
            start[k + 1] += start[k];
        }
        let slot = |entry: &(u32, u32)| cells.binary_search(&at(entry)).map_or(CONDENSED, |slot| slot as u32);
        let slots = self.list.iter().map(slot).collect();
        let row = cells.iter().map(|&(_, row)| row).collect();
        (Pattern { start, row }, slots)
    }
}

impl FactorPattern {
    /// Where the entries of column j lie.
    pub(super) fn column(&self, j: usize) -> std::ops::Range<usize> {
        self.column_start[j] as usize..self.column_start[j + 1] as usize
    }

    /// Row patterns of L by walking the elimination tree (Liu, ACM Trans. Math. Softw. 12, 1986, 127).
    ///
    /// The two columns of a pair get one pattern: that of the second, in which
    /// the first's is contained. The second is the first row of the first.
    fn of(matrix: &Pattern, leads_pair: &[bool]) -> Self {
        let n = matrix.start.len().saturating_sub(1);
        let mut parent = vec![u32::MAX; n];
        let mut mark = vec![u32::MAX; n];
        let mut row_start = vec![0; n + 1];
        let mut row_column = Vec::new();
        let mut count = vec![0_u32; n + 1];
        for k in 0..n {
            mark[k] = k as u32;
            let first = row_column.len();
            for &row in &matrix.row[matrix.start[k] as usize..matrix.start[k + 1] as usize] {
                let mut i = row as usize;
                while mark[i] != k as u32 {
                    if parent[i] == u32::MAX {
                        parent[i] = k as u32;
                    }
                    mark[i] = k as u32;
                    row_column.push(i as u32);
                    count[i + 1] += 1;
                    i = parent[i] as usize;
                }
            }
            row_column[first..].sort_unstable();
            let completed = with_leaders(&row_column[first..], leads_pair);
            completed.iter().filter(|&j| row_column[first..].binary_search(j).is_err()).for_each(|&j| count[j as usize + 1] += 1);
            row_column.truncate(first);
            row_column.extend(completed);
            row_start[k + 1] = row_column.len() as u32;
        }
        for k in 0..n {
            count[k + 1] += count[k];
        }
        let mut next = count.clone();
        let mut column_row = vec![0; row_column.len()];
        for k in 0..n {
            for &j in &row_column[row_start[k] as usize..row_start[k + 1] as usize] {
                column_row[next[j as usize] as usize] = k as u32;
                next[j as usize] += 1;
            }
        }
        FactorPattern { column_start: count, column_row, row_start, row_column }
    }
}

/// The columns of a row, with the first of every pair whose second is there.
fn with_leaders(columns: &[u32], leads_pair: &[bool]) -> Vec<u32> {
    let mut completed: Vec<u32> = Vec::with_capacity(columns.len() + columns.len() / 2);
    for &j in columns {
        if let Some(leader) = j.checked_sub(1).filter(|&leader| leads_pair[leader as usize])
            && completed.last() != Some(&leader)
        {
            completed.push(leader);
        }
        completed.push(j);
    }
    completed
}

/// Order of all unknowns in which a relation follows a state of its own.
fn order_with_pairs(dimension: usize, structure: &Structure, entries: &Entries, partner: &[Option<u32>]) -> Vec<u32> {
    let states = structure.states;
    let mut groups: Vec<Vec<u32>> = (0..states as u32).map(|j| vec![j]).collect();
    let mut paired = vec![false; structure.relations.len()];
    for (group, k) in groups.iter_mut().zip(partner) {
        if let Some(k) = k {
            group.push((states + *k as usize) as u32);
            paired[*k as usize] = true;
        }
    }
    for k in (0..paired.len()).filter(|&k| !paired[k]) {
        let relation = (states + k) as u32;
        match structure.relations.row(k).first() {
            Some(&j) => groups[j].push(relation),
            None => groups.push(vec![relation]),
        }
    }
    groups.extend((states + paired.len()..dimension).map(|residual| vec![residual as u32]));
    let mut node = vec![0; dimension];
    for (number, group) in groups.iter().enumerate() {
        group.iter().for_each(|&unknown| node[unknown as usize] = number as u32);
    }
    let weight: Vec<u32> = groups.iter().map(|group| group.len() as u32).collect();
    let graph = entries.neighbours(&node, groups.len());
    minimum_degree(graph, &weight)
        .into_iter()
        .flat_map(|at| std::mem::take(&mut groups[at as usize]))
        .collect()
}
