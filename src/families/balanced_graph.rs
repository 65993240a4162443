//! `balanced-graph`: the signed Laplacian of a connected, sign-balanced graph with unit diagonal.

use super::assembly::{PairDraft, column, unit_diagonal};
use super::graphs::random_graph;
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `balanced-graph`.
#[derive(Clone, Copy, Debug)]
pub struct BalancedGraph;

static CARD: FamilyCard = FamilyCard {
    id: "balanced-graph",
    title: "Sign synchronisation on a sparse connected graph without noise",
    formula: "min <C,X> s.t. X_ii = 1, X PSD, rank X <= 1",
    construction: "a random recursive tree and random further edges, whole weights w_ij, hidden signs t; \
        C = D L D with D = Diag(t) and L the weighted Laplacian, so C_ij = -w_ij t_i t_j",
    optimum: "0 for cost = laplacian, -2 sum w_ij for cost = adjacency; attained by tt' only",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: S = D L D = sum w_ij (e_i - t_i t_j e_j)(...)'; unique because the \
        graph is connected (rank n - 1 of a gain graph modulo 2^61 - 1)",
    source: "the certificate of sign synchronisation, A. Bandeira, N. Boumal, A. Singer, Mathematical \
        Programming 163:145-167, 2017, without noise (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 2, most: 1_000_000 },
            default: DefaultSetting::Integer(100),
            meaning: "Number n of vertices.",
        },
        SettingSpec {
            name: "degree",
            kind: Kind::Integer { least: 2, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Mean degree d: the graph has max(n - 1, floor(n d / 2)) edges.",
        },
        SettingSpec {
            name: "weight",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Weights are drawn from 1..=weight.",
        },
        SettingSpec {
            name: "cost",
            kind: Kind::Word(&["laplacian", "adjacency"]),
            default: DefaultSetting::Word("laplacian"),
            meaning: "`laplacian`: C = D L D, y* = 0. `adjacency`: the same without its diagonal, which \
                X_ii = 1 makes a constant; y*_i is minus the weighted degree.",
        },
    ],
};

impl Family for BalancedGraph {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let (order, degree) = (parameters.size("order"), parameters.size("degree"));
        if degree >= order && order > 2 {
            return Err(PlantError::Parameters(format!(
                "degree = {degree} is not below order = {order}; the nearest possible value is {}",
                order - 1
            )));
        }
        let edges = random_graph(stream, order, (order * degree / 2).max(order - 1));
        let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
        let mut multipliers = vec![0i64; order];
        let mut slack = Vec::with_capacity(edges.len());
        let mut weights = Vec::with_capacity(edges.len());
        for &(i, j) in &edges {
            let weight = stream.between(1, parameters.integer("weight"));
            if parameters.word("cost") == "adjacency" {
                multipliers[i] -= weight;
                multipliers[j] -= weight;
            }
            slack.push(column(vec![(i, 1), (j, -signs[i] * signs[j])]));
            weights.push(weight);
        }
        let factor = IntegerFactor { order, width: 1, rows: signs };
        let constraints = unit_diagonal(order);
        PairDraft { rank: 1, factor, slack, weights, constraints, multipliers }.plant()
    }
}
