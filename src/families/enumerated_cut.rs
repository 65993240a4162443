//! `enumerated-cut`: largest cuts of small graphs, joined and hidden.
//!
//! Each part is a graph on at most 24 vertices with whole weights w. Its largest cut is found by trying all of them. The
//! parts are spread over the indices by a random permutation and turned by random signs g (a gauge), so that neither the
//! blocks nor the cut shows: with L the Laplacian of a part, C = -Diag(g) L Diag(g) there. The optimum is -4 times the
//! sum of the largest cuts; the proof is in the certificate's module, which also decides for each instance whether
//! the relaxation has a gap. A part without odd cycles (an even cycle, a sparse draw) has none.
//!
//! Closed forms (reference notes, computed by enumeration there, and well known): the largest cut is n - 1 for an odd cycle,
//! floor(n^2 / 4) for a complete graph, 12 for the Petersen graph, 26 for the Paley graph on 13 vertices.

use super::assembly::{TriangleSum, sign_problem};
use super::graphs::random_graph;
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{Certificate, CutPart, EnumeratedCut, Planted, largest_cut};
use crate::seed::Stream;

/// Primes p = 1 modulo 4 up to 24, for which the quadratic residues give an undirected graph.
const PALEY: [usize; 3] = [5, 13, 17];

/// The family `enumerated-cut`.
#[derive(Clone, Copy, Debug)]
pub struct EnumeratedCuts;

static CARD: FamilyCard = FamilyCard {
    id: "enumerated-cut",
    title: "Largest cuts of small graphs, joined and hidden by a permutation and a gauge",
    formula: "min <C,X> s.t. X_ii = 1, X PSD, rank X <= 1; C = -Diag(g) L Diag(g) on each part, L its Laplacian",
    construction: "order/block graphs on `block` vertices with whole weights, on randomly chosen indices, with random \
        signs g; the largest cut of each by a Gray code over all 2^(block-1) cuts",
    optimum: "-4 times the sum of the largest cuts",
    relaxation: Relaxation::GapToTight,
    certificate: "enumerated, exact: every part is enumerated anew in whole numbers; whether the relaxation is tight or \
        strictly lower is decided exactly for each instance",
    source: "own construction by enumeration; the relaxation: M. Goemans, D. Williamson, Journal of the ACM \
        42:1115-1145, 1995",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 2, most: 2000 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n of the matrix variable, a multiple of `block`.",
        },
        SettingSpec {
            name: "block",
            kind: Kind::Integer { least: 2, most: 24 },
            default: DefaultSetting::Integer(10),
            meaning: "Vertices of a part. Planting and checking take 2^(block-1) steps a part: at 24 about half a \
                second.",
        },
        SettingSpec {
            name: "graph",
            kind: Kind::Word(&["random", "cycle", "complete", "petersen", "paley"]),
            default: DefaultSetting::Word("random"),
            meaning: "`random`: connected, with a share of edges set by `density`. `cycle`: gap for odd block only. `complete`. \
                `petersen`: block = 10. `paley`: block = 5, 13 or 17, edges between numbers that differ by a square.",
        },
        SettingSpec {
            name: "density",
            kind: Kind::Integer { least: 1, most: 100 },
            default: DefaultSetting::Integer(50),
            meaning: "For random: percent of all pairs that are edges, at least a spanning tree. Sparse \
                parts have no gap, from about 30 on nearly all have one.",
        },
        SettingSpec {
            name: "weight",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Weights are drawn from 1..=weight; with 1 many cuts are largest at once.",
        },
    ],
};

impl Family for EnumeratedCuts {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        check(parameters)?;
        let (order, block) = (parameters.size("order"), parameters.size("block"));
        let places = stream.permutation(order);
        let mut cost = TriangleSum::new(order);
        let mut signs = vec![0i64; order];
        let mut parts = Vec::with_capacity(order / block);
        for vertices in places.chunks(block) {
            let gauge: Vec<i64> = vertices.iter().map(|_| stream.sign()).collect();
            let mut weights = vec![0i64; block * (block - 1) / 2];
            for (i, j) in graph(parameters, stream) {
                let weight = stream.between(1, parameters.integer("weight"));
                weights[j * (j - 1) / 2 + i] = weight;
                let wide = i128::from(weight);
                cost.add(vertices[i], vertices[j], wide * i128::from(gauge[i] * gauge[j]));
                cost.add(vertices[i], vertices[i], -wide);
                cost.add(vertices[j], vertices[j], -wide);
            }
            let best = largest_cut(block, &weights);
            for ((&place, sign), side) in vertices.iter().zip(&gauge).zip(&best.sides) {
                signs[place] = sign * side;
            }
            let vertices = vertices.iter().map(|&place| place as u32).collect();
            parts.push(CutPart { vertices, gauge, weights, largest_cut: best.weight });
        }
        let problem = sign_problem(cost.floats()?)?;
        let certificate = Certificate::Enumerated(EnumeratedCut { parts, signs });
        Ok(Planted::prove(problem, certificate)?)
    }
}

/// Refuses sizes that no graph of the kind has.
fn check(parameters: &Settings) -> Result<(), PlantError> {
    let (order, block) = (parameters.size("order"), parameters.size("block"));
    let kind = parameters.word("graph");
    let nearest = match kind {
        "petersen" => 10,
        "paley" => PALEY.into_iter().min_by_key(|p| p.abs_diff(block)).expect("three primes"),
        "cycle" => block.max(3),
        _ => block,
    };
    if nearest != block {
        return Err(PlantError::Parameters(format!(
            "there is no graph of the kind {kind} with block = {block}; the nearest possible value is {nearest}"
        )));
    }
    if !order.is_multiple_of(block) {
        let nearest = (((order + block / 2) / block) * block).max(block);
        return Err(PlantError::Parameters(format!(
            "order = {order} is no multiple of block = {block}; the nearest possible value is {nearest}"
        )));
    }
    Ok(())
}

/// Returns the edges (i, j), i < j, of one part.
fn graph(parameters: &Settings, stream: &mut Stream) -> Vec<(usize, usize)> {
    let block = parameters.size("block");
    let pairs = (0..block).flat_map(|j| (0..j).map(move |i| (i, j)));
    match parameters.word("graph") {
        "random" => {
            let count = block * (block - 1) / 2 * parameters.size("density") / 100;
            random_graph(stream, block, count)
        }
        "cycle" => pairs.filter(|(i, j)| j - i == 1 || j - i == block - 1).collect(),
        "petersen" => petersen(),
        "paley" => {
            let is_square = |d: usize| (1..block).any(|x| x * x % block == d);
            pairs.filter(|(i, j)| is_square(j - i)).collect()
        }
        _ => pairs.collect(),
    }
}

/// Returns the Petersen graph: an outer cycle, a star of spokes, an inner pentagram.
fn petersen() -> Vec<(usize, usize)> {
    let sorted = |i: usize, j: usize| (i.min(j), i.max(j));
    (0..5)
        .flat_map(|i| [sorted(i, (i + 1) % 5), (i, i + 5), sorted(i + 5, (i + 2) % 5 + 5)])
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::card::Setting;
    use crate::problem::Uniqueness;
    use crate::problem::certificate::RelaxationFact;
    use std::collections::BTreeMap;

    fn plant(seed: u64, numbers: &[(&str, i64)], graph: &str) -> Planted {
        let mut given: BTreeMap<String, Setting> = numbers
            .iter()
            .map(|&(name, value)| (name.to_owned(), Setting::Integer(value)))
            .collect();
        given.insert("graph".to_owned(), Setting::Word(graph.to_owned()));
        let settings = Settings::resolve(CARD.parameters, &given).unwrap();
        let mut stream = Stream::named(seed, &["enumerated-cut", &settings.to_string()]);
        EnumeratedCuts.plant(&settings, &mut stream).unwrap()
    }

    /// Cuts by enumeration: reference notes, closed forms (C5 4, C7 6, K5 6, Petersen 12, Paley 13 26).
    #[test]
    fn closed_forms_are_reproduced() {
        for (graph, block, cut) in [
            ("cycle", 5, 4),
            ("cycle", 7, 6),
            ("complete", 5, 6),
            ("petersen", 10, 12),
            ("paley", 13, 26),
        ] {
            for copies in [1, 3] {
                let numbers = [("order", copies * block), ("block", block), ("weight", 1)];
                let planted = plant(1, &numbers, graph);
                assert_eq!(planted.optimum, (-4 * copies * cut) as f64, "{graph} {block}");
                assert_eq!(
                    planted.proof.relaxation,
                    RelaxationFact::StrictlyLower,
                    "{graph} {block}"
                );
            }
        }
        // A bipartite graph is cut whole, and its relaxation is tight.
        let planted = plant(1, &[("order", 8), ("block", 8), ("weight", 1)], "cycle");
        assert_eq!(planted.optimum, -32.0);
        assert_eq!(planted.proof.relaxation, RelaxationFact::SameOptimum);
        assert_eq!(planted.uniqueness, Uniqueness::Proved);
    }

    #[test]
    fn a_thousand_seeds_plant() {
        let mut gaps = 0;
        for seed in 0..1000 {
            let planted = plant(seed, &[("order", 14), ("block", 7)], "random");
            assert_eq!(planted.proved_optimum(), Some(planted.optimum));
            gaps += usize::from(planted.proof.relaxation == RelaxationFact::StrictlyLower);
        }
        assert!(gaps > 500, "{gaps} of 1000 relaxations have a gap");
    }
}
