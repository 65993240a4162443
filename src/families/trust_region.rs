//! `trust-region`: a quadratic over a sphere, in the easy and in the hard case.
//!
//! min x'Qx + 2q'x over |x|^2 = rho^2 lifts to order n = k + 1 with C = [[Q, q], [q', 0]], the trace of the upper
//! block equal to rho^2 and the corner equal to 1. It is tight for any data: with two constraints some optimum has
//! rank 1 (the rank bound r(r+1)/2 <= 2).
//!
//! Optimum. Choose K = W D W' PSD, a whole multiplier l and a whole point x, and set Q = K - l I, q = -K x,
//! T = [I, -x]. Then C = T'K T + Diag(-l, .., -l, -x'Kx), so the multipliers (-l, -x'Kx) give the slack
//! S = T'K T, PSD with S (x; 1) = 0: x is optimal with the value -l |x|^2 - x'Kx.
//!
//! - Easy case: K is positive definite (l exceeds minus the least eigenvalue of Q), rank S = n - 1, and the planted
//!   point is the only optimum.
//! - Hard case: K has the null space range(Z), Z of h columns, so l is minus the least eigenvalue of Q and q is
//!   orthogonal to its eigenvectors. x is drawn with Z'x != 0. Let z be the part of x in range(Z), not 0:
//!   x - z + z' is optimal for every z' in range(Z) with |z'| = |z|, so there are two optima for h = 1, a sphere of
//!   them for more, and the relaxation has optima of rank up to h + 1, such as the mean of those for z' = z and
//!   z' = -z, of rank 2.
//!
//! Source: J. More, D. Sorensen, SIAM Journal on Scientific and Statistical Computing 4:553-572, 1983, for the
//! condition and the hard case (citation from memory); the whole-number data are our own.

use super::assembly::{IntegerCoefficient, PairDraft, bases, column, draw_b, draw_nonzero};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerColumn, IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `trust-region`.
#[derive(Clone, Copy, Debug)]
pub struct TrustRegion;

/// Entries drawn for each column of K beyond the diagonal, in the easy case.
const ENTRIES: usize = 3;

static CARD: FamilyCard = FamilyCard {
    id: "trust-region",
    title: "Quadratic over a sphere, easy and hard case",
    formula: "min <C,X> s.t. X_11 + .. + X_kk = |x|^2, X_nn = 1, X PSD of order n = k + 1, rank X <= 1; \
        C = [[Q,q],[q',0]]",
    construction: "whole x and multiplier l; K = Diag(1..3) + sparse squares (easy) or K = W D W' with null space of \
        dimension `nullity` (hard); Q = K - l I, q = -K x",
    optimum: "-l|x|^2 - x'Kx, attained by (x;1)(x;1)' only in the easy case; in the hard case also by the reflections of x \
        in the null space of K, and by means of those at higher rank",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: S = T'KT with T = [I, -x], y = (-l, -x'Kx); unique in the easy case by rank n - 1 \
        modulo 2^61 - 1",
    source: "optimality condition of J. More, D. Sorensen, SIAM Journal on Scientific and Statistical Computing \
        4:553-572, 1983 (citation from memory); whole-number data: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 3, most: 1000 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n = k + 1 of the matrix variable for k unknowns.",
        },
        SettingSpec {
            name: "case",
            kind: Kind::Word(&["easy", "hard"]),
            default: DefaultSetting::Word("easy"),
            meaning: "`easy`: the only optimum is planted. `hard`: the optimal face has higher rank.",
        },
        SettingSpec {
            name: "nullity",
            kind: Kind::Integer { least: 1, most: 20 },
            default: DefaultSetting::Integer(1),
            meaning: "Multiplicity h < k of the least eigenvalue of Q in the hard case; the easy case ignores it.",
        },
        SettingSpec {
            name: "size",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(5),
            meaning: "Entries of x are at most this in modulus.",
        },
    ],
};

impl Family for TrustRegion {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let unknowns = parameters.size("order") - 1;
        let size = parameters.integer("size");
        let multiplier = draw_nonzero(stream, 5);
        if parameters.word("case") == "easy" {
            let slack = definite(stream, unknowns);
            let x = draw_point(stream, unknowns, size, |x| x.iter().any(|value| *value != 0));
            return draft(stream, &slack, &x, multiplier).plant();
        }
        let nullity = parameters.size("nullity");
        if nullity >= unknowns {
            return Err(PlantError::Parameters(format!(
                "nullity = {nullity} is not below the {unknowns} unknowns; the nearest possible value is {}",
                unknowns - 1
            )));
        }
        let permutation = stream.permutation(unknowns);
        let b = draw_b(stream, unknowns - nullity, nullity);
        let base = bases(&b, nullity, &permutation);
        let x = draw_point(stream, unknowns, size, |x| meets(&base.range, x));
        draft(stream, &base.slack, &x, multiplier).plant()
    }
}

/// Draws columns whose squares sum to a positive definite matrix: unit vectors and sparse ones.
fn definite(stream: &mut Stream, unknowns: usize) -> Vec<IntegerColumn> {
    let mut columns: Vec<IntegerColumn> = (0..unknowns).map(|i| column(vec![(i, 1)])).collect();
    for _ in 0..unknowns {
        let places = stream.sample(unknowns, ENTRIES.min(unknowns));
        let entries = places.into_iter().map(|i| (i, draw_nonzero(stream, 2))).collect();
        columns.push(column(entries));
    }
    columns
}

/// Draws x in {-size..size}^k until it passes the test.
fn draw_point(
    stream: &mut Stream,
    unknowns: usize,
    size: i64,
    passes: impl Fn(&[i64]) -> bool,
) -> Vec<i64> {
    loop {
        let x: Vec<i64> = (0..unknowns).map(|_| stream.between(-size, size)).collect();
        if passes(&x) {
            return x;
        }
    }
}

/// Returns whether Z'x is not zero.
fn meets(range: &IntegerFactor, x: &[i64]) -> bool {
    let product = |p: usize| (0..range.order).map(|i| range.row(i)[p] * x[i]).sum::<i64>();
    (0..range.width).any(|p| product(p) != 0)
}

fn draft(stream: &mut Stream, slack: &[IntegerColumn], x: &[i64], multiplier: i64) -> PairDraft {
    let unknowns = x.len();
    let mut lifted = Vec::with_capacity(slack.len());
    let mut weights = Vec::with_capacity(slack.len());
    let mut corner = 0;
    for b in slack {
        // T'b = (b; -b'x).
        let product: i64 = b.iter().map(|(i, value)| value * x[i]).sum();
        let weight = stream.between(1, 3);
        corner += weight * product * product;
        let entries = b.iter().chain([(unknowns, -product)]).filter(|entry| entry.1 != 0);
        lifted.push(column(entries.collect()));
        weights.push(weight);
    }
    PairDraft {
        rank: 1,
        factor: IntegerFactor {
            order: unknowns + 1,
            width: 1,
            rows: x.iter().copied().chain([1]).collect(),
        },
        slack: lifted,
        weights,
        constraints: vec![
            IntegerCoefficient::identity(unknowns),
            IntegerCoefficient::Sparse(vec![(unknowns, unknowns, 1)]),
        ],
        multipliers: vec![-multiplier, -corner],
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::BTreeMap;

    use crate::card::Setting;

    /// Reflects the planted point in the null vector and compares values.
    #[test]
    fn the_hard_case_has_a_second_optimum() {
        let mut stream = Stream::named(4, &["trust-region"]);
        let unknowns = 9;
        // Z = e_0 + e_1 is the null vector of K.
        let b: Vec<Vec<i64>> = (1..unknowns).map(|i| vec![i64::from(i == 1)]).collect();
        let identity: Vec<usize> = (0..unknowns).collect();
        let base = bases(&b, 1, &identity);
        let x = vec![3, 1, -2, 0, 4, 1, 1, -1, 2];
        assert!(meets(&base.range, &x));
        let planted = draft(&mut stream, &base.slack, &x, 2).plant().unwrap();
        let value = |x: &[i64]| {
            let lifted: Vec<i64> = x.iter().copied().chain([1]).collect();
            let cost = planted.problem.cost().part(0).unwrap().to_sparse();
            cost.iter()
                .map(|(i, j, c)| (if i == j { 1 } else { 2 }) * c as i64 * lifted[i] * lifted[j])
                .sum::<i64>()
        };
        // Z'x / |Z|^2 = 2: the reflection takes 2 Z twice from x.
        let mut other = x.clone();
        other[0] -= 4;
        other[1] -= 4;
        let norm = |x: &[i64]| x.iter().map(|v| v * v).sum::<i64>();
        assert_eq!(norm(&x), norm(&other));
        assert_eq!(value(&x), planted.optimum as i64);
        assert_eq!(value(&other), planted.optimum as i64);
    }

    #[test]
    fn the_corner_of_the_cost_is_zero() {
        for case in ["easy", "hard"] {
            let given = BTreeMap::from([("case".to_owned(), Setting::Word(case.to_owned()))]);
            let settings = Settings::resolve(CARD.parameters, &given).unwrap();
            let mut stream = Stream::named(2, &["trust-region"]);
            let planted = TrustRegion.plant(&settings, &mut stream).unwrap();
            let cost = planted.problem.cost().part(0).unwrap().to_sparse();
            assert!(cost.iter().all(|(i, j, _)| (i, j) != (19, 19)));
        }
    }
}
