//! `clique-cover`: the theta number of a graph with a planted cover by cliques and a planted independent set.
//!
//! The vertices are split into t cliques; S holds one vertex s_K of each, with no edge inside S. Scaled to whole
//! numbers, the problem is max <J, X> subject to tr X = t and X_ij = 0 on edges; with tr X = 1 its value
//! is the theta number, here t.
//!
//! Optimum. V = 1_S is feasible with <J, X*> = t^2. With the indicator c_K of each clique,
//! `t sum_K c_K c_K' - J = sum_{K<L} (c_K - c_L)(c_K - c_L)'` since J = (sum c_K)(sum c_K)'. So y = -t on the
//! trace and on every edge inside a clique, 0 on the other edges, gives the slack
//! S = -J + t I + t (edges inside cliques) = sum_{K<L} (c_K - c_L)(c_K - c_L)', V'(c_K - c_L) = 1 - 1 = 0, and
//! the value b'y = -t^2.
//!
//! Uniqueness. Every vertex i outside S is joined to all vertices of one clique L other than its own K. An optimal
//! X has X (c_K - c_L) = 0, so (X c_K)_i = (X c_L)_i; the left side is X_ii, since i is joined to the rest of K,
//! the right side 0. So X lives on S, where X c_K = X e_{s_K} does not depend on K: X = X*. The rank of the slack
//! is t - 1 only, so strict complementarity fails for this slack when cliques are larger than one vertex, and the
//! stored certificate's own test of uniqueness, which needs rank n - 1, says "not proved".

use std::collections::BTreeMap;

use super::assembly::{IntegerCoefficient, PairDraft, column};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `clique-cover`.
#[derive(Clone, Copy, Debug)]
pub struct CliqueCover;

static CARD: FamilyCard = FamilyCard {
    id: "clique-cover",
    title: "Theta number of a graph with a planted clique cover and independent set",
    formula: "min -<J,X> s.t. tr X = t, X_ij = 0 on edges, X PSD, rank X <= 1",
    construction: "n vertices in t cliques of nearly equal size; S one vertex of each; every vertex outside S is \
        joined to a whole other clique; each further pair between cliques, not inside S, is an edge with chance \
        density/100",
    optimum: "-t^2, attained by 1_S 1_S' only; the theta number and the largest independent set are t",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: S = sum over pairs of cliques of (c_K - c_L)(c_K - c_L)', of rank t - 1; unique by \
        the proof in the module, which the stored certificate does not repeat",
    source: "L. Lovasz, On the Shannon capacity of a graph, IEEE Transactions on Information Theory 25:1-7, 1979, \
        for the bound; the planted cover and its uniqueness: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 3, most: 400 },
            default: DefaultSetting::Integer(20),
            meaning: "Number n of vertices, which is the order of the matrix variable.",
        },
        SettingSpec {
            name: "cliques",
            kind: Kind::Integer { least: 2, most: 400 },
            default: DefaultSetting::Integer(5),
            meaning: "Number t of cliques, at most n. Fewer cliques lower the rank t - 1 of the slack.",
        },
        SettingSpec {
            name: "density",
            kind: Kind::Integer { least: 0, most: 100 },
            default: DefaultSetting::Integer(30),
            meaning: "Chance in percent of a further edge between two cliques.",
        },
    ],
};

impl Family for CliqueCover {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let (order, count) = (parameters.size("order"), parameters.size("cliques"));
        if count > order {
            return Err(PlantError::Parameters(format!(
                "cliques = {count} exceeds order = {order}; the nearest possible value is {order}"
            )));
        }
        let labels = stream.permutation(order);
        Cover::draw(stream, &labels, count, parameters.integer("density")).draft().plant()
    }
}

/// A graph with its cover.
struct Cover {
    order: usize,
    /// Vertices of each clique; the first is the one in S.
    cliques: Vec<Vec<usize>>,
    /// Edges (i, j), i < j, with their multipliers.
    edges: BTreeMap<(usize, usize), i64>,
}

impl Cover {
    fn draw(stream: &mut Stream, labels: &[usize], count: usize, density: i64) -> Self {
        let order = labels.len();
        let cliques: Vec<Vec<usize>> =
            (0..count).map(|k| labels.iter().copied().skip(k).step_by(count).collect()).collect();
        let mut edges = BTreeMap::new();
        let sorted = |i: usize, j: usize| if i < j { (i, j) } else { (j, i) };
        for (k, clique) in cliques.iter().enumerate() {
            for (at, &j) in clique.iter().enumerate() {
                for &i in &clique[..at] {
                    edges.insert(sorted(i, j), -(count as i64));
                }
            }
            for &i in &clique[1..] {
                let other = (k + 1 + stream.index(count - 1)) % count;
                for &j in &cliques[other] {
                    edges.insert(sorted(i, j), 0);
                }
            }
        }
        for l in 0..count {
            for k in 0..l {
                for (at, &i) in cliques[k].iter().enumerate() {
                    for (beside, &j) in cliques[l].iter().enumerate() {
                        let inside = at == 0 && beside == 0;
                        if !inside && stream.between(1, 100) <= density {
                            edges.insert(sorted(i, j), 0);
                        }
                    }
                }
            }
        }
        Cover { order, cliques, edges }
    }

    fn draft(&self) -> PairDraft {
        let count = self.cliques.len();
        let mut rows = vec![0; self.order];
        for clique in &self.cliques {
            rows[clique[0]] = 1;
        }
        let mut slack = Vec::with_capacity(count * (count - 1) / 2);
        for (l, right) in self.cliques.iter().enumerate() {
            for left in &self.cliques[..l] {
                let entries = left.iter().map(|&i| (i, 1)).chain(right.iter().map(|&j| (j, -1)));
                slack.push(column(entries.collect()));
            }
        }
        let mut constraints = vec![IntegerCoefficient::identity(self.order)];
        let mut multipliers = vec![-(count as i64)];
        for (&(i, j), &multiplier) in &self.edges {
            constraints.push(IntegerCoefficient::Sparse(vec![(i, j, 1)]));
            multipliers.push(multiplier);
        }
        PairDraft {
            rank: 1,
            factor: IntegerFactor { order: self.order, width: 1, rows },
            weights: vec![1; slack.len()],
            slack,
            constraints,
            multipliers,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Counts the independent sets of t vertices, one of each clique, by trying all.
    fn largest_sets(cover: &Cover) -> usize {
        fn extend(cover: &Cover, chosen: &mut Vec<usize>) -> usize {
            let Some(clique) = cover.cliques.get(chosen.len()) else {
                return 1;
            };
            let mut count = 0;
            for &j in clique {
                if chosen.iter().all(|&i| !cover.edges.contains_key(&(i.min(j), i.max(j)))) {
                    chosen.push(j);
                    count += extend(cover, chosen);
                    chosen.pop();
                }
            }
            count
        }
        extend(cover, &mut Vec::new())
    }

    #[test]
    fn the_cost_is_minus_all_ones_and_the_largest_independent_set_is_planted() {
        for (order, count, density) in
            [(6, 2, 0), (12, 4, 0), (20, 5, 30), (9, 9, 100), (15, 4, 100)]
        {
            let mut stream = Stream::named(6, &["clique-cover"]);
            let labels = stream.permutation(order);
            let cover = Cover::draw(&mut stream, &labels, count, density);
            assert_eq!(largest_sets(&cover), 1);
            let planted = cover.draft().plant().unwrap();
            let cost = planted.problem.cost().part(0).unwrap().to_sparse();
            assert_eq!(cost.stored(), order * (order + 1) / 2);
            assert!(cost.iter().all(|(_, _, value)| value == -1.0));
            assert_eq!(planted.optimum, -((count * count) as f64));
        }
    }
}
