//! Connected parts (union-find) and rings (strongly connected components).

/// A partition of 0..n that only ever gets coarser.
pub(super) struct Parts {
    parent: Vec<usize>,
}

impl Parts {
    pub fn new(n: usize) -> Self {
        Parts {
            parent: (0..n).collect(),
        }
    }

    /// The representative of the part of `i`.
    pub fn of(&mut self, mut i: usize) -> usize {
        while self.parent[i] != i {
            self.parent[i] = self.parent[self.parent[i]];
            i = self.parent[i];
        }
        i
    }

    /// Every part, members sorted, in the order of first members.
    pub fn all(&mut self) -> Vec<Vec<usize>> {
        let mut parts = vec![Vec::new(); self.parent.len()];
        for i in 0..parts.len() {
            parts[self.of(i)].push(i);
        }
        parts.retain(|part| !part.is_empty());
        parts
    }

    pub fn join(&mut self, a: usize, b: usize) {
        let (a, b) = (self.of(a), self.of(b));
        // The smaller index stands for the part: results follow file order.
        self.parent[a.max(b)] = a.min(b);
    }

    /// Makes one part of all.
    pub fn join_all(&mut self, members: impl IntoIterator<Item = usize>) {
        let mut members = members.into_iter();
        if let Some(first) = members.next() {
            for other in members {
                self.join(first, other);
            }
        }
    }
}

/// The rings of a directed graph: every strongly connected component of two
/// nodes or more, each sorted, in the order of their first nodes.
///
/// Two passes of depth-first search (Kosaraju), without recursion.
pub(super) fn rings(nodes: usize, edges: &[(usize, usize)]) -> Vec<Vec<usize>> {
    let mut forward = vec![Vec::new(); nodes];
    let mut backward = vec![Vec::new(); nodes];
    for &(from, to) in edges {
        forward[from].push(to);
        backward[to].push(from);
    }
    let mut finished = Vec::with_capacity(nodes);
    let mut seen = vec![false; nodes];
    for root in 0..nodes {
        visit(root, &forward, &mut seen, &mut finished);
    }
    seen.fill(false);
    let mut rings = Vec::new();
    for &root in finished.iter().rev() {
        let mut ring = Vec::new();
        visit(root, &backward, &mut seen, &mut ring);
        if ring.len() > 1 {
            ring.sort_unstable();
            rings.push(ring);
        }
    }
    rings.sort();
    rings
}

/// Appends the unseen nodes reachable from `root` in the order they are
/// finished.
fn visit(root: usize, next: &[Vec<usize>], seen: &mut [bool], finished: &mut Vec<usize>) {
    if std::mem::replace(&mut seen[root], true) {
        return;
    }
    let mut open = vec![(root, 0)];
    while let Some((node, done)) = open.pop() {
        match next[node].get(done) {
            Some(&child) => {
                open.push((node, done + 1));
                if !std::mem::replace(&mut seen[child], true) {
                    open.push((child, 0));
                }
            }
            None => finished.push(node),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn parts_join() {
        let mut parts = Parts::new(5);
        parts.join_all([4, 2, 3]);
        assert_eq!([0, 1, 2, 2, 2], [0, 1, 2, 3, 4].map(|i| parts.of(i)));
        assert_eq!(parts.all(), [vec![0], vec![1], vec![2, 3, 4]]);
    }

    #[test]
    fn rings_are_found() {
        let edges = [
            (0, 1),
            (1, 2),
            (2, 0),
            (2, 3),
            (3, 4),
            (5, 4),
            (4, 5),
            (1, 0),
        ];
        assert_eq!(rings(7, &edges), vec![vec![0, 1, 2], vec![4, 5]]);
        assert!(rings(3, &[(0, 1), (1, 2), (0, 2)]).is_empty());
        // Long chains do not exhaust the stack.
        let chain: Vec<_> = (0..200_000).map(|i| (i, (i + 1) % 200_000)).collect();
        assert_eq!(rings(200_000, &chain).len(), 1);
    }
}
