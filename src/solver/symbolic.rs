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
//! measures alone. The unknowns are therefore eliminated in blocks of two: a
//! state and a relation that it takes part in (see `pairing`), which form
//! [h e; e d] with h >= 0 >= d, sound even where both are next to nothing. A
//! block with one unknown is filled up with an idle one, +1 or -1 on the
//! diagonal and nothing beside. Relations without a partner (bounds, which are
//! mostly out of use, and relations that others imply) follow the first of
//! their states. All patterns are of blocks: one index for four numbers.

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
    /// Place of each unknown (states, relations, residuals): twice its block,
    /// plus one for relations and residuals.
    pub(super) place: Vec<u32>,
    /// Places of idle unknowns.
    pub(super) idle: Vec<u32>,
    /// Blocks above the diagonal.
    pub(super) matrix: Pattern,
    /// Place among the matrix's values, beside `relations.index`.
    pub(super) relation_slot: Vec<u32>,
    /// The same beside `observations.index`; meaningless for observations of one state.
    pub(super) observation_slot: Vec<u32>,
    /// (row, column) with row > column, sorted, and the slot of each pair of states.
    pub(super) pair_slot: Vec<((u32, u32), u32)>,
    pub(super) factor: FactorPattern,
}

/// Strict upper triangle by columns: `row[start[k]..start[k + 1]]` are the rows above k.
///
/// Block number i holds the values 4 i to 4 i + 3, by rows; behind those of all
/// blocks come the entries e of the diagonal blocks.
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
        let blocks = order_blocks(structure, &several, &entries);
        let mut place = vec![0; states + relations + several.len()];
        let mut idle = Vec::new();
        for (at, &unknown) in blocks.iter().flatten().enumerate() {
            match unknown {
                Some(unknown) => place[unknown as usize] = at as u32,
                None => idle.push(at as u32),
            }
        }
        let (matrix, slots) = entries.lay_out(&place, blocks.len());
        let (relation_slot, rest) = slots.split_at(structure.relations.index.len());
        let (observation_slot, pair_slots) = rest.split_at(structure.observations.index.len());
        let mut pair_slot: Vec<((u32, u32), u32)> = entries
            .pairs
            .iter()
            .copied()
            .zip(pair_slots.iter().copied())
            .collect();
        pair_slot.sort_unstable();
        pair_slot.dedup();
        Symbolic {
            states,
            relations,
            several,
            idle,
            factor: FactorPattern::of(&matrix),
            relation_slot: relation_slot.to_vec(),
            observation_slot: observation_slot.to_vec(),
            pair_slot,
            place,
            matrix,
        }
    }

    /// Length of the vectors of the augmented system, idle unknowns included.
    pub fn dimension(&self) -> usize {
        self.place.len() + self.idle.len()
    }

    /// Number of 2x2 blocks on the diagonal.
    pub(super) fn blocks(&self) -> usize {
        self.dimension() / 2
    }

    /// Number of values of the matrix beside its diagonal.
    pub(super) fn values(&self) -> usize {
        4 * self.matrix.row.len() + self.blocks()
    }

    /// Numbers held by the factor below its diagonal.
    pub fn fill(&self) -> usize {
        4 * self.factor.column_row.len()
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
        let at = self
            .pair_slot
            .binary_search_by_key(&key, |&(pair, _)| pair)
            .ok()?;
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

    /// The upper triangle of blocks in the elimination order, and the slot of every entry.
    fn lay_out(&self, place: &[u32], blocks: usize) -> (Pattern, Vec<u32>) {
        // (later, earlier) place of an entry.
        let at = |&(a, b): &(u32, u32)| {
            let (a, b) = (place[a as usize], place[b as usize]);
            (a.max(b), a.min(b))
        };
        let cell = |(later, earlier): (u32, u32)| (later / 2, earlier / 2);
        let mut cells: Vec<(u32, u32)> = self
            .list
            .iter()
            .map(|entry| cell(at(entry)))
            .filter(|(column, row)| column != row)
            .collect();
        cells.sort_unstable();
        cells.dedup();
        let mut start = vec![0; blocks + 1];
        for &(column, _) in &cells {
            start[column as usize + 1] += 1;
        }
        for k in 0..blocks {
            start[k + 1] += start[k];
        }
        let slot = |entry: &(u32, u32)| {
            let (later, earlier) = at(entry);
            if later == earlier {
                return CONDENSED;
            }
            match cells.binary_search(&cell((later, earlier))) {
                Ok(number) => 4 * number as u32 + 2 * (earlier % 2) + later % 2,
                Err(_) => 4 * cells.len() as u32 + later / 2,
            }
        };
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
    fn of(matrix: &Pattern) -> Self {
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
        FactorPattern {
            column_start: count,
            column_row,
            row_start,
            row_column,
        }
    }
}

/// The blocks of unknowns in the order of elimination: a state first, a
/// relation or residual second, either of them possibly idle.
fn order_blocks(
    structure: &Structure,
    several: &[usize],
    entries: &Entries,
) -> Vec<[Option<u32>; 2]> {
    let (states, relations) = (structure.states, structure.relations.len());
    let mut second: Vec<Option<u32>> = partners(structure)
        .into_iter()
        .map(|partner| partner.map(|k| (states as u32) + k))
        .collect();
    let mut placed = vec![false; relations + several.len()];
    second
        .iter()
        .flatten()
        .for_each(|&unknown| placed[unknown as usize - states] = true);
    // Each group is eliminated in one go; it starts with a state, if it has one.
    let mut groups: Vec<Vec<[Option<u32>; 2]>> = vec![Vec::new(); states];
    for at in (0..placed.len()).filter(|&at| !placed[at]) {
        let row = match at.checked_sub(relations) {
            None => structure.relations.row(at),
            Some(nth) => structure.observations.row(several[nth]),
        };
        let unknown = Some((states + at) as u32);
        match (row.iter().find(|&&j| second[j].is_none()), row.first()) {
            (Some(&j), _) => second[j] = unknown,
            (None, Some(&j)) if at < relations => groups[j].push([None, unknown]),
            _ => groups.push(vec![[None, unknown]]),
        }
    }
    for (j, (group, second)) in groups.iter_mut().zip(second).enumerate() {
        group.insert(0, [Some(j as u32), second]);
    }
    let mut node = vec![0; states + placed.len()];
    for (number, group) in groups.iter().enumerate() {
        group
            .iter()
            .flatten()
            .flatten()
            .for_each(|&unknown| node[unknown as usize] = number as u32);
    }
    let weight: Vec<u32> = groups.iter().map(|group| group.len() as u32).collect();
    let graph = entries.neighbours(&node, groups.len());
    minimum_degree(graph, &weight)
        .into_iter()
        .flat_map(|at| std::mem::take(&mut groups[at as usize]))
        .collect()
}
