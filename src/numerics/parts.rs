//! Connected parts of the graph; every part has its own zero of psi.

use super::graph::Graph;

/// Connected parts of the unknowns.
pub struct Parts {
    /// Part of every unknown, counted from 1 (largest first), 0 without edges.
    pub of: Vec<u16>,
    /// Number of parts.
    pub count: usize,
    /// Number of unknowns in every part.
    pub size: Vec<usize>,
}

impl Parts {
    /// One part that holds everything.
    pub fn single(unknowns: usize) -> Self {
        Self { of: vec![1; unknowns], count: 1, size: vec![unknowns] }
    }

    /// Parts of a graph by union-find.
    pub fn new(graph: &Graph) -> Self {
        let n = graph.nodes + graph.extras;
        let mut parent: Vec<u32> = (0..n as u32).collect();
        fn root(parent: &mut [u32], mut k: u32) -> u32 {
            while parent[k as usize] != k {
                parent[k as usize] = parent[parent[k as usize] as usize];
                k = parent[k as usize];
            }
            k
        }
        let mut used = vec![false; n];
        for (a, b, _) in graph.edges() {
            (used[a as usize], used[b as usize]) = (true, true);
            let (a, b) = (root(&mut parent, a), root(&mut parent, b));
            parent[a.max(b) as usize] = a.min(b);
        }
        let mut size_of_root = std::collections::BTreeMap::new();
        for k in 0..n as u32 {
            if used[k as usize] {
                *size_of_root.entry(root(&mut parent, k)).or_insert(0usize) += 1;
            }
        }
        let mut order: Vec<(u32, usize)> = size_of_root.into_iter().collect();
        order.sort_by_key(|&(root, size)| (std::cmp::Reverse(size), root));
        // More parts than fit a label: the smallest ones carry no psi.
        order.truncate(usize::from(u16::MAX));
        let label: std::collections::BTreeMap<u32, u16> =
            order.iter().enumerate().map(|(k, &(root, _))| (root, k as u16 + 1)).collect();
        let of = (0..n as u32)
            .map(|k| if used[k as usize] { label.get(&root(&mut parent, k)).copied().unwrap_or(0) } else { 0 })
            .collect();
        Self { of, count: order.len(), size: order.into_iter().map(|(_, size)| size).collect() }
    }
}
