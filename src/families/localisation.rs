//! `localisation`: sensors in the plane or in space, located from exact ranges among them and to anchors.
//!
//! With d the dimension, anchors a_k and sensors x_j, all whole points, and Z = V V' for V = [I_d; x_1'; ...; x_N'],
//! node vectors u_k = (a_k; 0) and u_j = (0; e_j) satisfy V'u = the node's place. A range between two nodes
//! is the constraint (u - v)(u - v)'.Z = |place of u - place of v|^2, and Z_{1:d,1:d} = I.
//!
//! Exact stress. Nodes are placed one after another, each with ranges to d + 1 earlier nodes K that have
//! all ranges among themselves (anchors know theirs) and are affinely independent. For these d + 2 nodes let w be the
//! whole affine dependency, sum w = 0 and sum w_i p_i = 0. Then W_K = sum w_i u_i has V'W_K = 0, and, because
//! sum w = 0, W_K W_K' = -sum_{i<l} w_i w_l (u_i - u_l)(u_i - u_l)', which is minus a combination of the
//! constraints. With S = sum_K W_K W_K' and y the summed coefficients, A*(y) + S = 0 = C: the point is
//! optimal for the cost 0, and S has rank N because each W_K holds a sensor that no earlier one holds. By
//! strict complementarity and because ranges span (checked by a rank modulo 2^61 - 1) the feasible set is
//! this one point, so the relaxation has no Slater point.
//!
//! Source: exactness by stress, A. So, Y. Ye, Mathematical Programming 109:367-384, 2007 (citation from memory);
//! the construction by cliques is our own.

use std::collections::BTreeMap;

use super::assembly::{IntegerCoefficient, PairDraft, column};
use super::cliques::{Cliques, Placement, draw_start};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerColumn, IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `localisation`.
#[derive(Clone, Copy, Debug)]
pub struct Localisation;

static CARD: FamilyCard = FamilyCard {
    id: "localisation",
    title: "Sensors located from exact ranges among them and to anchors",
    formula: "min 0 s.t. Z_{1:d,1:d} = I, (u_i-u_l)(u_i-u_l)'.Z = |p_i-p_l|^2 on measured pairs, Z PSD, \
        rank Z <= d; u = (a_k;0) for an anchor at a_k, (0;e_j) for sensor j",
    construction: "d + 1 anchors and N = n - d sensors at different whole points of a square or cube; each \
        sensor has ranges to d + 1 earlier nodes that have all ranges among themselves and do not lie on \
        one line or plane, and `extra` further ranges",
    optimum: "0, attained by Z = VV' with V = [I; x'] only: the feasible set is one point, so there is no \
        Slater point",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: the stress S = sum over cliques of w w' for the whole affine dependency w \
        of each, of rank N; unique by a rank modulo 2^61 - 1",
    source: "unique localisability by stress, A. So, Y. Ye, Mathematical Programming 109:367-384, 2007 \
        (citation from memory); construction by cliques: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 3, most: 5000 },
            default: DefaultSetting::Integer(22),
            meaning: "Order n = d + N of the matrix variable for N sensors.",
        },
        SettingSpec {
            name: "rank",
            kind: Kind::Integer { least: 2, most: 3 },
            default: DefaultSetting::Integer(2),
            meaning: "Dimension d of the places, which is the rank of the planted point and the rank bound.",
        },
        SettingSpec {
            name: "side",
            kind: Kind::Integer { least: 4, most: 1000 },
            default: DefaultSetting::Integer(20),
            meaning: "Places are drawn from {0..side}^d.",
        },
        SettingSpec {
            name: "extra",
            kind: Kind::Integer { least: 0, most: 100 },
            default: DefaultSetting::Integer(1),
            meaning: "Further ranges of each sensor to earlier nodes, as far as there are any.",
        },
    ],
};

impl Family for Localisation {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let (order, dimension) = (parameters.size("order"), parameters.size("rank"));
        if order <= dimension {
            return Err(PlantError::Parameters(format!(
                "order = {order} leaves no sensor for rank = {dimension}; the nearest possible value is {}",
                dimension + 1
            )));
        }
        let network = Network::draw(stream, order, dimension, parameters)?;
        network.draft().plant()
    }
}

/// Anchors first, then sensors.
struct Network {
    dimension: usize,
    cliques: Cliques,
}

impl Network {
    fn draw(
        stream: &mut Stream,
        order: usize,
        dimension: usize,
        parameters: &Settings,
    ) -> Result<Self, PlantError> {
        let side = parameters.integer("side");
        let mut place = |stream: &mut Stream| -> Vec<i64> {
            (0..dimension).map(|_| stream.between(0, side)).collect()
        };
        let mut anchors = |stream: &mut Stream| (0..=dimension).map(|_| place(stream)).collect();
        let start = draw_start(stream, &mut anchors).ok_or_else(|| crowded(side, 0))?;
        let mut cliques = Cliques::start(start);
        for node in dimension + 1..=order {
            if cliques.add(stream, parameters.size("extra"), &mut place)? == Placement::Crowded {
                return Err(crowded(side, node));
            }
        }
        Ok(Network { dimension, cliques })
    }

    /// Returns the node's vector u: (a_k; 0) or (0; e_j).
    fn vector(&self, node: usize) -> Vec<(usize, i64)> {
        let anchors = self.dimension + 1;
        if node < anchors {
            self.cliques.places[node].iter().copied().enumerate().collect()
        } else {
            vec![(self.dimension + node - anchors, 1)]
        }
    }

    fn draft(self) -> PairDraft {
        let (dimension, anchors) = (self.dimension, self.dimension + 1);
        let order = dimension + self.cliques.places.len() - anchors;
        let mut rows = Vec::with_capacity(order * dimension);
        for p in 0..dimension {
            rows.extend((0..dimension).map(|q| i64::from(p == q)));
        }
        for place in &self.cliques.places[anchors..] {
            rows.extend(place);
        }
        let mut corner = vec![vec![0i64; dimension]; dimension];
        let mut constraints = Vec::new();
        let mut multipliers = Vec::new();
        for (&(i, l), &stress) in &self.cliques.stress {
            let difference = self.difference(i, l);
            if l < anchors {
                // Ranges between anchors say nothing new: they are combinations of Z_{1:d,1:d} = I.
                for &(p, left) in &difference {
                    for &(q, right) in &difference {
                        corner[p][q] += stress * left * right;
                    }
                }
            } else {
                constraints.push(IntegerCoefficient::Outer(difference));
                multipliers.push(stress);
            }
        }
        let mut head = Vec::new();
        let mut first = Vec::new();
        for q in 0..dimension {
            for p in 0..=q {
                head.push(IntegerCoefficient::Sparse(vec![(p, q, 1)]));
                first.push(corner[p][q]);
            }
        }
        head.extend(constraints);
        first.extend(multipliers);
        let slack: Vec<IntegerColumn> =
            self.cliques.dependencies.iter().map(|w| self.slack(w)).collect();
        PairDraft {
            rank: dimension,
            factor: IntegerFactor { order, width: dimension, rows },
            weights: vec![1; slack.len()],
            slack,
            constraints: head,
            multipliers: first,
        }
    }

    /// Returns u_i - u_l without zeros, indices ascending.
    fn difference(&self, i: usize, l: usize) -> Vec<(usize, i64)> {
        let mut sum: BTreeMap<usize, i64> = BTreeMap::new();
        for (node, sign) in [(i, 1), (l, -1)] {
            for (at, value) in self.vector(node) {
                *sum.entry(at).or_insert(0) += sign * value;
            }
        }
        sum.into_iter().filter(|entry| entry.1 != 0).collect()
    }

    /// Returns sum w_i u_i.
    fn slack(&self, dependency: &[(usize, i64)]) -> IntegerColumn {
        let mut sum: BTreeMap<usize, i64> = BTreeMap::new();
        for &(node, weight) in dependency {
            for (at, value) in self.vector(node) {
                *sum.entry(at).or_insert(0) += weight * value;
            }
        }
        column(sum.into_iter().filter(|entry| entry.1 != 0).collect())
    }
}

fn crowded(side: i64, nodes: usize) -> PlantError {
    PlantError::Parameters(format!(
        "side = {side} leaves no place in general position after {nodes} nodes; the nearest possible value is \
         larger, such as {}",
        2 * side
    ))
}
