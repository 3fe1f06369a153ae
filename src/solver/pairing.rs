//! Which state each relation is eliminated with.
//!
//! A maximum matching by augmenting paths: first every unmeasured state looks
//! for a relation, because it has no pivot of its own, then every relation
//! still alone looks for a state. Augmenting never unmatches what is matched.

use super::problem::Structure;

/// The partner of each state: a relation, if it has one.
pub(super) fn partners(structure: &Structure) -> Vec<Option<u32>> {
    let (n, m) = (structure.states, structure.relations.len());
    let mut measured = vec![false; n];
    for i in 0..structure.observations.len() {
        if let [j] = structure.observations.row(i) {
            measured[*j] = true;
        }
    }
    let mut bound = vec![false; m];
    structure.bounds.iter().for_each(|&k| bound[k] = true);
    let mut relations_of: Vec<Vec<u32>> = vec![Vec::new(); n];
    let mut states_of: Vec<Vec<u32>> = vec![Vec::new(); m];
    for k in (0..m).filter(|&k| !bound[k]) {
        for &j in structure.relations.row(k) {
            relations_of[j].push(k as u32);
            states_of[k].push(j as u32);
        }
    }
    // Relations with few unmeasured states are the scarcest partners: try them first.
    let scarcity: Vec<usize> = states_of
        .iter()
        .map(|list| list.iter().filter(|&&j| !measured[j as usize]).count())
        .collect();
    for list in &mut relations_of {
        list.sort_by_key(|&k| (scarcity[k as usize], k));
    }
    let mut matching = Matching {
        left: vec![None; n],
        right: vec![None; m],
    };
    let mut visited = vec![u32::MAX; m];
    for j in (0..n).filter(|&j| !measured[j]) {
        matching.augment(j as u32, &relations_of, &mut visited);
    }
    let mut matching = matching.turned();
    let mut visited = vec![u32::MAX; n];
    for k in 0..m {
        if matching.left[k].is_none() {
            matching.augment(k as u32, &states_of, &mut visited);
        }
    }
    matching.right
}

/// A matching of left nodes with right nodes.
struct Matching {
    left: Vec<Option<u32>>,
    right: Vec<Option<u32>>,
}

impl Matching {
    fn turned(self) -> Self {
        Matching {
            left: self.right,
            right: self.left,
        }
    }

    /// Matches left node `root` by an augmenting path, if there is one
    /// (depth first, without recursion). `visited` holds the last root that
    /// reached each right node.
    fn augment(&mut self, root: u32, neighbours: &[Vec<u32>], visited: &mut [u32]) {
        let mut path: Vec<(u32, usize)> = vec![(root, 0)];
        while let Some((node, tried)) = path.last_mut() {
            let Some(&right) = neighbours[*node as usize].get(*tried) else {
                path.pop();
                continue;
            };
            *tried += 1;
            if std::mem::replace(&mut visited[right as usize], root) == root {
                continue;
            }
            if let Some(other) = self.right[right as usize] {
                path.push((other, 0));
                continue;
            }
            for &(node, tried) in &path {
                let right = neighbours[node as usize][tried - 1];
                self.left[node as usize] = Some(right);
                self.right[right as usize] = Some(node);
            }
            return;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::problem::Rows;
    use super::*;

    #[test]
    fn every_relation_and_every_unmeasured_state_that_can_has_a_partner() {
        // A chain 0-1-2-3 of equal flows; 1 and 2 are unmeasured.
        let structure = Structure {
            states: 4,
            relations: Rows::from_lists(&[[0, 1], [1, 2], [2, 3]]),
            observations: Rows::from_lists(&[[0], [3]]),
            bounds: Vec::new(),
            pairs: Vec::new(),
        };
        let partners = partners(&structure);
        let mut relations: Vec<u32> = partners.iter().flatten().copied().collect();
        relations.sort_unstable();
        assert_eq!(relations, [0, 1, 2]);
        assert!(partners[1].is_some() && partners[2].is_some());
    }

    #[test]
    fn bounds_take_no_partner() {
        let structure = Structure {
            states: 1,
            relations: Rows::from_lists(&[[0]]),
            observations: Rows::default(),
            bounds: vec![0],
            pairs: Vec::new(),
        };
        assert_eq!(partners(&structure), [None]);
    }
}
