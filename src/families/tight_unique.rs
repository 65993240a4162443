//! `tight-unique`: random constraints through a planted rank-r point that is the only optimum.

use super::assembly::{
    IntegerCoefficient, PairDraft, bases, draw_b, draw_nonzero, draw_sparse, multiply,
};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, Setting, SettingSpec, Settings};
use crate::problem::certificate::{Planted, Uniqueness};
use crate::seed::Stream;

/// The family `tight-unique`.
#[derive(Clone, Copy, Debug)]
pub struct TightUnique;

/// Entries drawn for each sparse constraint.
const SPARSE_ENTRIES: usize = 5;

/// Constraints that `auto` takes at most, unless uniqueness needs more.
const AUTO_LIMIT: usize = 1000;

/// Stored entries that dense constraints may have in all.
const DENSE_LIMIT: usize = 1 << 22;

/// Draws of a whole instance before the family gives up.
const TRIES: usize = 50;

static CARD: FamilyCard = FamilyCard {
    id: "tight-unique",
    title: "Random constraints through a planted point that is the only optimum",
    formula: "min <C,X> s.t. <A_i,X> = b_i, X PSD, rank X <= r; A_1 = I",
    construction: "V = P[I;B]T with B in {-1,0,1}, T unit upper triangular and P a permutation; \
        W = P[-B';I], D diagonal positive; A_1 = I bounds the trace, the other A_i are drawn sparse, \
        dense or rank one; y in {-2,-1,1,2}; b = A(VV'), C = A*(y) + W D W'",
    optimum: "b'y, attained by X* = VV' of rank r only; the multipliers are unique too",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact; both nondegeneracies by ranks modulo 2^61 - 1 (an instance that \
        misses one is drawn again)",
    source: "own construction on the optimality and nondegeneracy conditions of F. Alizadeh, \
        J.-P. Haeberly, M. Overton, Mathematical Programming 77:111-128, 1997 (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 4, most: 2000 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n of the matrix variable.",
        },
        SettingSpec {
            name: "rank",
            kind: Kind::Integer { least: 1, most: 1999 },
            default: DefaultSetting::Integer(2),
            meaning: "Rank r of the planted point and rank bound, below the order.",
        },
        SettingSpec {
            name: "constraints",
            kind: Kind::WordOrInteger { words: &["auto"], least: 1, most: 4_000_000 },
            default: DefaultSetting::Word("auto"),
            meaning: "Number m of constraints, r(r+1)/2 <= m <= nr - r(r-1)/2; `auto` takes the larger \
                of min(n, 1000) and r(r+1), cut to that range (and, for dense measurements, to 2^22 \
                stored entries).",
        },
        SettingSpec {
            name: "measurements",
            kind: Kind::Word(&["sparse", "dense", "rank-one"]),
            default: DefaultSetting::Word("sparse"),
            meaning: "Form of the A_i after A_1 = I: about five entries in {-2,-1,1,2}; all entries in \
                {-1,0,1}; or a a' with a in {-1,0,1}^n.",
        },
    ],
};

/// Sizes of an instance after the parameters have been found possible.
struct Sizes<'a> {
    order: usize,
    rank: usize,
    constraints: usize,
    measurements: &'a str,
}

impl Family for TightUnique {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let sizes = sizes(parameters)?;
        for _ in 0..TRIES {
            let planted = draw(&sizes, stream).plant()?;
            let both = [planted.proof.uniqueness, planted.proof.dual_uniqueness];
            if both == [Uniqueness::Proved; 2] {
                return Ok(planted);
            }
        }
        Err(PlantError::Parameters(format!(
            "{TRIES} draws of tight-unique with order = {}, rank = {} and constraints = {} were \
             degenerate; fewer constraints are easier to draw",
            sizes.order, sizes.rank, sizes.constraints
        )))
    }
}

fn sizes(parameters: &Settings) -> Result<Sizes<'_>, PlantError> {
    let (order, rank) = (parameters.size("order"), parameters.size("rank"));
    let measurements = parameters.word("measurements");
    if rank >= order {
        return Err(PlantError::Parameters(format!(
            "rank = {rank} is not below order = {order}; the nearest possible rank is {}",
            order - 1
        )));
    }
    let least = rank * (rank + 1) / 2;
    let mut most = order * rank - rank * (rank - 1) / 2;
    if measurements == "dense" {
        let affordable = DENSE_LIMIT / (order * (order + 1) / 2) + 1;
        if affordable < least {
            return Err(PlantError::Parameters(format!(
                "measurements = dense with order = {order} and rank = {rank} would store more than \
                 {DENSE_LIMIT} entries; the nearest possible value is sparse"
            )));
        }
        most = most.min(affordable);
    }
    let constraints = match parameters.get("constraints") {
        Some(Setting::Integer(_)) => parameters.size("constraints"),
        _ => order.min(AUTO_LIMIT).max(2 * least).clamp(least, most),
    };
    if !(least..=most).contains(&constraints) {
        return Err(PlantError::Parameters(format!(
            "constraints = {constraints} lies outside {least}..={most} for order = {order}, rank = \
             {rank} and measurements = {measurements}; the nearest possible value is {}",
            constraints.clamp(least, most)
        )));
    }
    Ok(Sizes { order, rank, constraints, measurements })
}

fn draw(sizes: &Sizes<'_>, stream: &mut Stream) -> PairDraft {
    let (order, rank) = (sizes.order, sizes.rank);
    let permutation = stream.permutation(order);
    let base = bases(&draw_b(stream, order - rank, rank), rank, &permutation);
    let transform: Vec<Vec<i64>> = (0..rank)
        .map(|i| {
            let entry = |j: usize, stream: &mut Stream| match j.cmp(&i) {
                std::cmp::Ordering::Less => 0,
                std::cmp::Ordering::Equal => 1,
                std::cmp::Ordering::Greater => stream.between(-1, 1),
            };
            (0..rank).map(|j| entry(j, stream)).collect()
        })
        .collect();
    let weights = (rank..order).map(|_| stream.between(1, 3)).collect();
    let factor = multiply(&base.range, &transform);
    let mut constraints = vec![IntegerCoefficient::identity(order)];
    while constraints.len() < sizes.constraints {
        let drawn = match sizes.measurements {
            "dense" => draw_dense(stream, order),
            "rank-one" => draw_outer(stream, order),
            _ => draw_sparse(stream, order, SPARSE_ENTRIES),
        };
        // One constraint that does not see the planted point makes the whole instance degenerate.
        if !drawn.annihilates(&factor) {
            constraints.push(drawn);
        }
    }
    let multipliers = constraints.iter().map(|_| draw_nonzero(stream, 2)).collect();
    PairDraft { rank, factor, slack: base.slack, weights, constraints, multipliers }
}

fn draw_dense(stream: &mut Stream, order: usize) -> IntegerCoefficient {
    let places = (0..order).flat_map(|j| (0..=j).map(move |i| (i, j)));
    IntegerCoefficient::gather(places.map(|(i, j)| (i, j, stream.between(-1, 1))).collect())
}

fn draw_outer(stream: &mut Stream, order: usize) -> IntegerCoefficient {
    let drawn: Vec<(usize, i64)> = (0..order).map(|i| (i, stream.between(-1, 1))).collect();
    IntegerCoefficient::Outer(drawn.into_iter().filter(|entry| entry.1 != 0).collect())
}
