//! What the families of synchronisation share: random connected graphs. No family lives here.

use std::collections::BTreeSet;

use crate::seed::Stream;

/// Draws a connected graph: a random recursive tree over a random order of the vertices, then
/// different random edges up to `count`, at most all. Edges come sorted, as (i, j) with i < j.
pub(super) fn random_graph(stream: &mut Stream, order: usize, count: usize) -> Vec<(usize, usize)> {
    let all = order * (order - 1) / 2;
    let count = count.min(all);
    let sorted = |i: usize, j: usize| if i < j { (i, j) } else { (j, i) };
    let labels = stream.permutation(order);
    let mut edges = BTreeSet::new();
    for position in 1..order {
        edges.insert(sorted(labels[position], labels[stream.index(position)]));
    }
    if 2 * count > all {
        let pairs = (0..order).flat_map(|j| (0..j).map(move |i| (i, j)));
        let mut free: Vec<(usize, usize)> = pairs.filter(|pair| !edges.contains(pair)).collect();
        stream.shuffle(&mut free);
        free.truncate(count - edges.len());
        edges.extend(free);
    }
    while edges.len() < count {
        let i = stream.index(order);
        let j = (i + 1 + stream.index(order - 1)) % order;
        edges.insert(sorted(i, j));
    }
    edges.into_iter().collect()
}
