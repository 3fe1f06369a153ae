//! Fill-reducing elimination order: approximate minimum degree on a quotient
//! graph (Amestoy, Davis and Duff, SIAM J. Matrix Anal. Appl. 17, 1996, 886).
//!
//! Eliminating node p joins all its neighbours; instead of storing that
//! clique, the quotient graph keeps p as an *element* with the list of its
//! neighbours. The degree of a variable i is bounded from above by
//!
//! |A_i| + |L_p \ i| + sum over its other elements e of |L_e \ L_p|,
//!
//! which costs one pass over the elements. Nodes have a weight: a pair of
//! unknowns that must be eliminated together enters as one node of weight 2.
//! Ties are broken by the lowest number, so the order is reproducible.

use std::cmp::Reverse;
use std::collections::BinaryHeap;

/// Elimination order of an undirected graph.
///
/// `neighbours[i]` lists the nodes joined to node i, symmetric, without i
/// itself and without repetition; `weight[i]` counts the unknowns node i
/// stands for. Returns the nodes in the order of their elimination.
pub fn minimum_degree(neighbours: Vec<Vec<u32>>, weight: &[u32]) -> Vec<u32> {
    Quotient::new(neighbours, weight).order()
}

/// What has become of a node.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Kind {
    Variable,
    /// Eliminated; its list is that of the neighbours it joined.
    Element,
    /// Merged into another node, or absorbed by a later element.
    Gone,
}

struct Quotient {
    kind: Vec<Kind>,
    weight: Vec<u32>,
    /// Neighbouring variables of a variable; members of an element.
    variables: Vec<Vec<u32>>,
    /// Elements next to a variable.
    elements: Vec<Vec<u32>>,
    degree: Vec<u32>,
    /// Nodes merged into this one, eliminated right after it.
    followers: Vec<Vec<u32>>,
    queue: BinaryHeap<Reverse<(u32, u32)>>,
    /// Marks of the current step.
    mark: Vec<u32>,
    stamp: u32,
}

impl Quotient {
    fn new(neighbours: Vec<Vec<u32>>, weight: &[u32]) -> Self {
        let n = neighbours.len();
        let degree: Vec<u32> = neighbours
            .iter()
            .map(|list| list.iter().map(|&j| weight[j as usize]).sum())
            .collect();
        let queue = (0..n as u32)
            .map(|i| Reverse((degree[i as usize], i)))
            .collect();
        Quotient {
            kind: vec![Kind::Variable; n],
            weight: weight.to_vec(),
            variables: neighbours,
            elements: vec![Vec::new(); n],
            degree,
            followers: vec![Vec::new(); n],
            queue,
            mark: vec![0; n],
            stamp: 0,
        }
    }

    fn order(mut self) -> Vec<u32> {
        let mut order = Vec::with_capacity(self.kind.len());
        while let Some(Reverse((degree, p))) = self.queue.pop() {
            // The queue keeps outdated entries; only the newest one counts.
            if self.kind[p as usize] == Kind::Variable && self.degree[p as usize] == degree {
                self.eliminate(p);
                self.push_with_followers(p, &mut order);
            }
        }
        order
    }

    fn push_with_followers(&mut self, p: u32, order: &mut Vec<u32>) {
        let mut stack = vec![p];
        while let Some(i) = stack.pop() {
            order.push(i);
            stack.extend(self.followers[i as usize].drain(..).rev());
        }
    }

    fn eliminate(&mut self, p: u32) {
        let members = self.join(p);
        let total: u32 = members.iter().map(|&i| self.weight[i as usize]).sum();
        self.kind[p as usize] = Kind::Element;
        let outside = self.outside_sizes(&members);
        for &i in &members {
            self.update(p, i, total, &outside);
        }
        self.merge_indistinguishable(p, &members);
        let alive = |kind: &[Kind], i: u32| kind[i as usize] == Kind::Variable;
        let mut members = members;
        members.retain(|&i| alive(&self.kind, i));
        for &i in &members {
            self.queue.push(Reverse((self.degree[i as usize], i)));
        }
        self.variables[p as usize] = members;
    }

    /// The variables next to p, directly or through its elements, which are absorbed.
    fn join(&mut self, p: u32) -> Vec<u32> {
        self.stamp += 1;
        self.mark[p as usize] = self.stamp;
        let mut members = Vec::new();
        let mut lists = vec![std::mem::take(&mut self.variables[p as usize])];
        for e in std::mem::take(&mut self.elements[p as usize]) {
            if self.kind[e as usize] == Kind::Element {
                self.kind[e as usize] = Kind::Gone;
                lists.push(std::mem::take(&mut self.variables[e as usize]));
            }
        }
        for i in lists.into_iter().flatten() {
            let at = i as usize;
            if self.kind[at] == Kind::Variable && self.mark[at] != self.stamp {
                self.mark[at] = self.stamp;
                members.push(i);
            }
        }
        members.sort_unstable();
        members
    }

    /// |L_e \ L_p| for every element e that touches a member of L_p.
    fn outside_sizes(&self, members: &[u32]) -> std::collections::HashMap<u32, u32> {
        let mut outside = std::collections::HashMap::new();
        for &i in members {
            for &e in &self.elements[i as usize] {
                if self.kind[e as usize] != Kind::Element {
                    continue;
                }
                let left = outside.entry(e).or_insert_with(|| {
                    self.variables[e as usize]
                        .iter()
                        .filter(|&&v| self.kind[v as usize] == Kind::Variable)
                        .map(|&v| self.weight[v as usize])
                        .sum()
                });
                *left -= self.weight[i as usize];
            }
        }
        outside
    }

    /// Puts element p in the place of what it covers and bounds the degree of i.
    fn update(
        &mut self,
        p: u32,
        i: u32,
        total: u32,
        outside: &std::collections::HashMap<u32, u32>,
    ) {
        let at = i as usize;
        let (kind, mark, stamp, weight) = (&self.kind, &self.mark, self.stamp, &self.weight);
        let mut bound = total - weight[at];
        self.variables[at].retain(|&j| {
            let keep = kind[j as usize] == Kind::Variable && mark[j as usize] != stamp;
            if keep {
                bound += weight[j as usize];
            }
            keep
        });
        let mut seen = 0;
        self.elements[at].retain(|&e| {
            // An element whose members all lie in L_p says nothing more.
            let keep =
                kind[e as usize] == Kind::Element && outside.get(&e).is_some_and(|&left| left > 0);
            if keep {
                seen += outside[&e];
            }
            keep
        });
        self.elements[at].push(p);
        self.degree[at] = bound + seen;
    }

    /// Members with the same neighbourhood are one node from here on.
    fn merge_indistinguishable(&mut self, p: u32, members: &[u32]) {
        let mut keys: Vec<(u64, u32)> = members
            .iter()
            .map(|&i| {
                let at = i as usize;
                self.variables[at].sort_unstable();
                self.elements[at].sort_unstable();
                let sum: u64 = self.variables[at]
                    .iter()
                    .chain(&self.elements[at])
                    .map(|&j| u64::from(j) + 1)
                    .sum();
                (sum, i)
            })
            .collect();
        keys.sort_unstable();
        for group in keys.chunk_by(|a, b| a.0 == b.0) {
            for (nth, &(_, i)) in group.iter().enumerate() {
                for &(_, j) in &group[nth + 1..] {
                    if self.same_neighbourhood(i, j) {
                        self.weight[i as usize] += self.weight[j as usize];
                        self.degree[i as usize] -= self.weight[j as usize];
                        self.kind[j as usize] = Kind::Gone;
                        self.followers[i as usize].push(j);
                    }
                }
            }
        }
        // Nothing but p is next to these: they follow it without further fill.
        for &i in members {
            let at = i as usize;
            if self.kind[at] == Kind::Variable
                && self.variables[at].is_empty()
                && self.elements[at].len() == 1
            {
                self.kind[at] = Kind::Gone;
                self.followers[p as usize].push(i);
            }
        }
    }

    fn same_neighbourhood(&self, i: u32, j: u32) -> bool {
        let (a, b) = (i as usize, j as usize);
        self.kind[a] == Kind::Variable
            && self.kind[b] == Kind::Variable
            && self.variables[a] == self.variables[b]
            && self.elements[a] == self.elements[b]
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Fill of the Cholesky factor in the given order, by explicit elimination.
    fn fill(neighbours: &[Vec<u32>], order: &[u32]) -> usize {
        let n = neighbours.len();
        let mut joined: Vec<std::collections::BTreeSet<u32>> = neighbours
            .iter()
            .map(|list| list.iter().copied().collect())
            .collect();
        let mut total = 0;
        for &p in order {
            let around: Vec<u32> = std::mem::take(&mut joined[p as usize])
                .into_iter()
                .collect();
            total += around.len();
            for &i in &around {
                joined[i as usize].remove(&p);
                joined[i as usize].extend(around.iter().filter(|&&j| j != i));
            }
        }
        assert_eq!(order.len(), n);
        total
    }

    fn grid(side: u32) -> Vec<Vec<u32>> {
        (0..side * side)
            .map(|k| {
                let (i, j) = (k / side, k % side);
                let mut list = Vec::new();
                if i > 0 {
                    list.push(k - side)
                }
                if i + 1 < side {
                    list.push(k + side)
                }
                if j > 0 {
                    list.push(k - 1)
                }
                if j + 1 < side {
                    list.push(k + 1)
                }
                list
            })
            .collect()
    }

    #[test]
    fn a_tree_is_eliminated_without_fill() {
        let n = 40;
        let mut tree = vec![Vec::new(); n];
        for i in 1..n {
            tree[i].push(((i - 1) / 3) as u32);
            tree[(i - 1) / 3].push(i as u32);
        }
        let order = minimum_degree(tree.clone(), &vec![1; n]);
        assert_eq!(fill(&tree, &order), n - 1);
    }

    #[test]
    fn a_grid_has_less_fill_than_in_natural_order() {
        let graph = grid(24);
        let order = minimum_degree(graph.clone(), &vec![1; 24 * 24]);
        let mut sorted = order.clone();
        sorted.sort_unstable();
        assert_eq!(sorted, (0..24 * 24).collect::<Vec<u32>>());
        let natural: Vec<u32> = (0..24 * 24).collect();
        assert!(2 * fill(&graph, &order) < fill(&graph, &natural));
    }

    #[test]
    fn an_empty_graph_and_single_nodes_are_ordered() {
        assert!(minimum_degree(Vec::new(), &[]).is_empty());
        assert_eq!(
            minimum_degree(vec![Vec::new(); 3], &[1, 1, 1]),
            vec![0, 1, 2]
        );
    }
}
