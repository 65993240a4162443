//! `orthogonal-sync`: hidden signed permutations on the vertices of a sparse connected graph, seen through their
//! exact ratios on the edges.
//!
//! V stacks the d x d signed permutations R_1, ..., R_N, so V V' has the blocks R_i R_j' and X_ii = I. Row a of R_i
//! and row b of R_j that point along the same axis, with signs s and s', give the column u = e_{ia} - s s' e_{jb},
//! V'u = 0. The connection Laplacian S = sum over edges w_ij sum over axes u u' has the blocks -w_ij R_i R_j' and
//! the diagonal blocks deg_i I; it is PSD with S V = 0, so V V' is optimal.
//!
//! In the coordinates (vertex, axis) S is d copies of the signed Laplacian of one connected graph, hence
//! rank S = dN - d and every optimum is V U V'. The constraints of one vertex give U = I: the optimum is the only
//! one. Each constraint matrix e_p e_q' + e_q e_p' times V has its own two entries, so the multipliers are the
//! only ones too. Both are checked by ranks modulo 2^61 - 1 in linear time, because all columns have at most two
//! entries.
//!
//! X_ii = I asks R_i to be orthogonal; det R_i = 1 is not imposed.

use super::assembly::{IntegerCoefficient, PairDraft, column};
use super::graphs::random_graph;
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `orthogonal-sync`.
#[derive(Clone, Copy, Debug)]
pub struct OrthogonalSync;

static CARD: FamilyCard = FamilyCard {
    id: "orthogonal-sync",
    title: "Synchronisation of signed permutations on a sparse connected graph without noise",
    formula: "min <C,X> s.t. X_ii = I_d (i = 1..N), X PSD of order dN, rank X <= d",
    construction: "a random recursive tree and random further edges on N vertices, whole weights w_ij, hidden signed \
        permutations R_i; C is the connection Laplacian with blocks -w_ij R_i R_j'",
    optimum: "0 for cost = laplacian, -2d sum w_ij for cost = adjacency; attained by the blocks R_i R_j' only",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: S = sum over edges and axes of w_ij (e_ia - s e_jb)(...)'; unique because the \
        graph is connected (ranks of gain graphs modulo 2^61 - 1)",
    source: "the certificate of rotation synchronisation, D. Rosen, L. Carlone, A. Bandeira, J. Leonard, International \
        Journal of Robotics Research 38:95-125, 2019, without noise (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 2, most: 1_000_000 },
            default: DefaultSetting::Integer(60),
            meaning: "Order n = dN of the matrix variable for N >= 2 vertices.",
        },
        SettingSpec {
            name: "rank",
            kind: Kind::Integer { least: 1, most: 10 },
            default: DefaultSetting::Integer(3),
            meaning: "Order d of the blocks, which is the rank of the planted point and the rank bound.",
        },
        SettingSpec {
            name: "degree",
            kind: Kind::Integer { least: 2, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Mean degree of the graph, which has max(N - 1, floor(N degree / 2)) edges, at most all. A larger \
                degree widens the spectral gap of C.",
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
            meaning: "`laplacian`: C is the connection Laplacian, y* = 0. `adjacency`: the same without its diagonal, \
                which X_ii = I makes a constant; y* is minus the weighted degree on X_pp = 1 and 0 elsewhere.",
        },
    ],
};

impl Family for OrthogonalSync {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let (rank, vertices) = sizes(parameters)?;
        let order = rank * vertices;
        let count = (vertices * parameters.size("degree") / 2).max(vertices - 1);
        let edges = random_graph(stream, vertices, count);
        // rows[i * rank + axis]: the index of the row of R_i along the axis, and its sign.
        let mut rows = Vec::with_capacity(order);
        for i in 0..vertices {
            let places = stream.permutation(rank);
            rows.extend(places.into_iter().map(|a| (i * rank + a, stream.sign())));
        }
        let mut factor = IntegerFactor { order, width: rank, rows: vec![0; order * rank] };
        for (position, &(row, sign)) in rows.iter().enumerate() {
            factor.rows[row * rank + position % rank] = sign;
        }
        let mut degrees = vec![0i64; vertices];
        let mut slack = Vec::with_capacity(edges.len() * rank);
        let mut weights = Vec::with_capacity(edges.len() * rank);
        for &(i, j) in &edges {
            let weight = stream.between(1, parameters.integer("weight"));
            degrees[i] += weight;
            degrees[j] += weight;
            for axis in 0..rank {
                let (left, right) = (rows[i * rank + axis], rows[j * rank + axis]);
                slack.push(column(vec![(left.0, 1), (right.0, -left.1 * right.1)]));
                weights.push(weight);
            }
        }
        let adjacency = parameters.word("cost") == "adjacency";
        let mut constraints = Vec::with_capacity(vertices * rank * (rank + 1) / 2);
        let mut multipliers = Vec::with_capacity(constraints.capacity());
        for (i, degree) in degrees.into_iter().enumerate() {
            for q in 0..rank {
                for p in 0..=q {
                    let entry = (i * rank + p, i * rank + q, 1);
                    constraints.push(IntegerCoefficient::Sparse(vec![entry]));
                    multipliers.push(if adjacency && p == q { -degree } else { 0 });
                }
            }
        }
        PairDraft { rank, factor, slack, weights, constraints, multipliers }.plant()
    }
}

/// Returns d and N.
fn sizes(parameters: &Settings) -> Result<(usize, usize), PlantError> {
    let (order, rank) = (parameters.size("order"), parameters.size("rank"));
    let vertices = order / rank;
    if !order.is_multiple_of(rank) || vertices < 2 {
        let nearest = (2 * order + rank) / (2 * rank);
        return Err(PlantError::Parameters(format!(
            "order = {order} is not a multiple, at least the double, of rank = {rank}; the nearest possible value \
             is {}",
            nearest.max(2) * rank
        )));
    }
    let degree = parameters.size("degree");
    if degree >= vertices && vertices > 2 {
        return Err(PlantError::Parameters(format!(
            "degree = {degree} is not below the number {vertices} of vertices; the nearest possible value is {}",
            vertices - 1
        )));
    }
    Ok((rank, vertices))
}
