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
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerColumn, IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `localisation`.
#[derive(Clone, Copy, Debug)]
pub struct Localisation;

/// Draws of a place before the family gives up.
const TRIES: usize = 1000;

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

/// An affine dependency: nodes and their weights.
type Dependency = Vec<(usize, i64)>;

/// Anchors first, then sensors.
struct Network {
    dimension: usize,
    places: Vec<Vec<i64>>,
    /// Measured pairs (i, l), i < l, with the stress on them.
    ranges: BTreeMap<(usize, usize), i64>,
    dependencies: Vec<Dependency>,
}

impl Network {
    fn draw(
        stream: &mut Stream,
        order: usize,
        dimension: usize,
        parameters: &Settings,
    ) -> Result<Self, PlantError> {
        let side = parameters.integer("side");
        let anchors = dimension + 1;
        let places = draw_anchors(stream, dimension, side)?;
        let mut network =
            Network { dimension, places, ranges: BTreeMap::new(), dependencies: Vec::new() };
        // Sets of d + 1 nodes that have all ranges among themselves.
        let mut bases: Vec<Vec<usize>> = vec![(0..anchors).collect()];
        for node in anchors..anchors + order - dimension {
            let base = bases[stream.index(bases.len())].clone();
            let (place, dependency) = network.draw_place(stream, &base, side, node)?;
            network.places.push(place);
            for (at, &(i, weight)) in dependency.iter().enumerate() {
                for &(l, other) in &dependency[at + 1..] {
                    *network.ranges.entry((i, l)).or_insert(0) += weight * other;
                }
            }
            for left_out in &base {
                let mut next: Vec<usize> = base.iter().copied().filter(|i| i != left_out).collect();
                next.push(node);
                if network.spans(&next) {
                    bases.push(next);
                }
            }
            network.dependencies.push(dependency);
            let extra = parameters.size("extra").min(node - base.len());
            let mut added = 0;
            while added < extra {
                let pair = (stream.index(node), node);
                if let std::collections::btree_map::Entry::Vacant(slot) = network.ranges.entry(pair)
                {
                    slot.insert(0);
                    added += 1;
                }
            }
        }
        Ok(network)
    }

    /// Draws a place that no node has, and the dependency of it and the base with no weight zero.
    fn draw_place(
        &self,
        stream: &mut Stream,
        base: &[usize],
        side: i64,
        node: usize,
    ) -> Result<(Vec<i64>, Dependency), PlantError> {
        for _ in 0..TRIES {
            let place: Vec<i64> = (0..self.dimension).map(|_| stream.between(0, side)).collect();
            if self.places.contains(&place) {
                continue;
            }
            let mut points: Vec<&[i64]> = base.iter().map(|i| self.places[*i].as_slice()).collect();
            points.push(&place);
            let weights = dependency(&points);
            if weights.iter().all(|weight| *weight != 0) {
                let nodes = base.iter().copied().chain([node]);
                return Ok((place, nodes.zip(weights).collect()));
            }
        }
        Err(crowded(side, self.places.len()))
    }

    /// Returns whether d + 1 nodes lie on no common line (d = 2) or plane (d = 3).
    fn spans(&self, nodes: &[usize]) -> bool {
        let points: Vec<&[i64]> = nodes.iter().map(|i| self.places[*i].as_slice()).collect();
        volume(&points) != 0
    }

    /// Returns the node's vector u: (a_k; 0) or (0; e_j).
    fn vector(&self, node: usize) -> Vec<(usize, i64)> {
        let anchors = self.dimension + 1;
        if node < anchors {
            self.places[node].iter().copied().enumerate().collect()
        } else {
            vec![(self.dimension + node - anchors, 1)]
        }
    }

    fn draft(self) -> PairDraft {
        let (dimension, anchors) = (self.dimension, self.dimension + 1);
        let order = dimension + self.places.len() - anchors;
        let mut rows = Vec::with_capacity(order * dimension);
        for p in 0..dimension {
            rows.extend((0..dimension).map(|q| i64::from(p == q)));
        }
        for place in &self.places[anchors..] {
            rows.extend(place);
        }
        let mut corner = vec![vec![0i64; dimension]; dimension];
        let mut constraints = Vec::new();
        let mut multipliers = Vec::new();
        for (&(i, l), &stress) in &self.ranges {
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
        let slack: Vec<IntegerColumn> = self.dependencies.iter().map(|w| self.slack(w)).collect();
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

fn draw_anchors(
    stream: &mut Stream,
    dimension: usize,
    side: i64,
) -> Result<Vec<Vec<i64>>, PlantError> {
    for _ in 0..TRIES {
        let places: Vec<Vec<i64>> = (0..=dimension)
            .map(|_| (0..dimension).map(|_| stream.between(0, side)).collect())
            .collect();
        let points: Vec<&[i64]> = places.iter().map(Vec::as_slice).collect();
        if volume(&points) != 0 {
            return Ok(places);
        }
    }
    Err(crowded(side, 0))
}

fn crowded(side: i64, nodes: usize) -> PlantError {
    PlantError::Parameters(format!(
        "side = {side} leaves no place in general position after {nodes} nodes; the nearest possible value is \
         larger, such as {}",
        2 * side
    ))
}

/// Returns the signed volume of d + 1 points, times d!: the determinant of their differences from the
/// first.
fn volume(points: &[&[i64]]) -> i64 {
    let row = |i: usize| -> Vec<i64> {
        points[i + 1].iter().zip(points[0]).map(|(a, b)| a - b).collect()
    };
    match points.len() {
        3 => {
            let (a, b) = (row(0), row(1));
            a[0] * b[1] - a[1] * b[0]
        }
        4 => {
            let (a, b, c) = (row(0), row(1), row(2));
            a[0] * (b[1] * c[2] - b[2] * c[1]) - a[1] * (b[0] * c[2] - b[2] * c[0])
                + a[2] * (b[0] * c[1] - b[1] * c[0])
        }
        other => unreachable!("{other} points span neither plane nor space"),
    }
}

/// Returns the affine dependency of d + 2 points in lowest terms: sum w = 0 and sum w_i p_i = 0, by Cramer's
/// rule w_i = (-1)^i times the volume of the others.
fn dependency(points: &[&[i64]]) -> Vec<i64> {
    let mut weights: Vec<i64> = (0..points.len())
        .map(|left_out| {
            let others: Vec<&[i64]> = points
                .iter()
                .enumerate()
                .filter(|(at, _)| *at != left_out)
                .map(|(_, point)| *point)
                .collect();
            if left_out % 2 == 0 { volume(&others) } else { -volume(&others) }
        })
        .collect();
    let divisor = weights.iter().fold(0, |divisor, weight| gcd(divisor, weight.abs())).max(1);
    for weight in &mut weights {
        *weight /= divisor;
    }
    weights
}

fn gcd(a: i64, b: i64) -> i64 {
    if b == 0 { a } else { gcd(b, a % b) }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn dependencies_vanish_on_places_and_on_ones() {
        let points: [&[i64]; 5] = [&[0, 0, 1], &[3, 1, 4], &[1, 5, 9], &[2, 6, 5], &[3, 5, 8]];
        let weights = dependency(&points);
        assert!(weights.iter().all(|weight| *weight != 0), "{weights:?}");
        assert_eq!(weights.iter().sum::<i64>(), 0);
        for axis in 0..3 {
            let sum: i64 = weights.iter().zip(points).map(|(w, point)| w * point[axis]).sum();
            assert_eq!(sum, 0, "axis {axis}");
        }
    }
}
