//! `weak-complementarity`: unique optima of both problems whose ranks do not add up to the order.
//!
//! With V (n x k) and W (n x (n - k)) of `V'W = 0`, S* = W D W' has the null space range V, but the planted
//! point X* = (V T)(V T)' with T (k x r) has the rank r < k only: rank X* + rank S* = n - (k - r), so strict
//! complementarity fails by the excess k - r. It fails for every pair of optima, since both are unique:
//!
//! - Primal. Every optimum is V U V' with U PSD, because `<S*, X> = 0`. The matrices V'A_iV span the symmetric
//!   k x k matrices (a rank modulo 2^61 - 1), so `<V'A_iV, U> = b_i` determines U.
//! - Dual. The A_i V T are linearly independent (a rank modulo 2^61 - 1), and two optimal slacks satisfy
//!   S V T = 0, so their multipliers agree.
//!
//! The stored certificate holds V T and W, from which its own test proves the second, not the first (it knows no
//! basis of the null space): the proof of an instance says "not proved" of primal uniqueness, although the
//! family keeps only draws for which the rank above is full.

use super::assembly::{
    IntegerCoefficient, PairDraft, bases, draw_b, draw_nonzero, draw_sparse, multiply,
};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, Setting, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted, Uniqueness, compressed_rank};
use crate::seed::Stream;

/// The family `weak-complementarity`.
#[derive(Clone, Copy, Debug)]
pub struct WeakComplementarity;

/// Entries drawn for each constraint.
const ENTRIES: usize = 5;

/// Constraints that `auto` takes at most, unless uniqueness needs more.
const AUTO_LIMIT: usize = 1000;

/// Draws of a whole instance before the family gives up.
const TRIES: usize = 50;

static CARD: FamilyCard = FamilyCard {
    id: "weak-complementarity",
    title: "Unique optima of both problems without strict complementarity",
    formula: "min <C,X> s.t. <A_i,X> = b_i, X PSD, rank X <= r; A_1 = I",
    construction: "V = P[I;B] of width k = r + excess with B in {-1,0,1}, W = P[-B';I], D diagonal positive; \
        X* = (VT)(VT)' with T of r columns, S* = W D W' of rank n - k; A_1 = I, the other A_i sparse; \
        b = A(X*), C = A*(y) + S*",
    optimum: "b'y, attained by X* of rank r only; the multipliers are unique too; rank X* + rank S* = n - excess",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact; both uniquenesses by ranks modulo 2^61 - 1 when planted (an instance that \
        misses one is drawn again); the stored certificate alone proves the multipliers' only",
    source: "own construction on the optimality and nondegeneracy conditions of F. Alizadeh, J.-P. Haeberly, \
        M. Overton, Mathematical Programming 77:111-128, 1997 (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 4, most: 1000 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n of the matrix variable.",
        },
        SettingSpec {
            name: "rank",
            kind: Kind::Integer { least: 1, most: 20 },
            default: DefaultSetting::Integer(2),
            meaning: "Rank r of the planted point and rank bound, at most n - 2.",
        },
        SettingSpec {
            name: "excess",
            kind: Kind::Integer { least: 1, most: 20 },
            default: DefaultSetting::Integer(2),
            meaning: "What is missing to strict complementarity: S* has rank n - k with k = r + excess < n and \
                k(k+1)/2 <= nr - r(r-1)/2. More excess makes interior-point methods lose digits.",
        },
        SettingSpec {
            name: "constraints",
            kind: Kind::WordOrInteger { words: &["auto"], least: 1, most: 40_000 },
            default: DefaultSetting::Word("auto"),
            meaning: "Number m of constraints, k(k+1)/2 <= m <= nr - r(r-1)/2; `auto` takes the larger of \
                min(n, 1000) and k(k+1)/2, cut to that range.",
        },
    ],
};

struct Sizes {
    order: usize,
    rank: usize,
    /// Dimension k of the slack's null space.
    null: usize,
    constraints: usize,
}

impl Family for WeakComplementarity {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let sizes = sizes(parameters)?;
        for _ in 0..TRIES {
            let (range, draft) = draw(&sizes, stream);
            let planted = draft.plant()?;
            if planted.proof.dual_uniqueness == Uniqueness::Proved && determines(&planted, &range) {
                return Ok(planted);
            }
        }
        Err(PlantError::Parameters(format!(
            "{TRIES} draws of weak-complementarity with order = {}, rank = {} and constraints = {} were \
             degenerate; a larger order is easier to draw",
            sizes.order, sizes.rank, sizes.constraints
        )))
    }
}

/// Tests whether the V'A_iV span all symmetric matrices.
fn determines(planted: &Planted, range: &IntegerFactor) -> bool {
    let full = range.width * (range.width + 1) / 2;
    compressed_rank(planted.problem.constraints(), range, full) == full
}

fn sizes(parameters: &Settings) -> Result<Sizes, PlantError> {
    let (order, rank) = (parameters.size("order"), parameters.size("rank"));
    if rank + 2 > order {
        return Err(PlantError::Parameters(format!(
            "rank = {rank} leaves no slack and no excess for order = {order}; the nearest possible value is {}",
            order - 2
        )));
    }
    let most = order * rank - rank * (rank - 1) / 2;
    let fits = |excess: usize| {
        let null = rank + excess;
        null < order && null * (null + 1) / 2 <= most
    };
    let excess = parameters.size("excess");
    if !fits(excess) {
        // excess = 1 always fits: (r+1)(r+2)/2 <= nr - r(r-1)/2 says r(n - r - 1) >= 1.
        let nearest = (1..excess).rev().find(|&less| fits(less)).unwrap_or(1);
        return Err(PlantError::Parameters(format!(
            "excess = {excess} is too large for order = {order} and rank = {rank}; the nearest possible value \
             is {nearest}"
        )));
    }
    let null = rank + excess;
    let least = null * (null + 1) / 2;
    let constraints = match parameters.get("constraints") {
        Some(Setting::Integer(_)) => parameters.size("constraints"),
        _ => order.min(AUTO_LIMIT).clamp(least, most),
    };
    if !(least..=most).contains(&constraints) {
        return Err(PlantError::Parameters(format!(
            "constraints = {constraints} lies outside {least}..={most} for order = {order}, rank = {rank} and \
             excess = {excess}; the nearest possible value is {}",
            constraints.clamp(least, most)
        )));
    }
    Ok(Sizes { order, rank, null, constraints })
}

/// Draws V and the pair around V T.
fn draw(sizes: &Sizes, stream: &mut Stream) -> (IntegerFactor, PairDraft) {
    let (order, rank, null) = (sizes.order, sizes.rank, sizes.null);
    let permutation = stream.permutation(order);
    let base = bases(&draw_b(stream, order - null, null), null, &permutation);
    // The upper r x r part of T is unit upper triangular, so that T has full column rank.
    let transform: Vec<Vec<i64>> = (0..null)
        .map(|i| {
            (0..rank)
                .map(|j| match j.cmp(&i) {
                    std::cmp::Ordering::Less if i < rank => 0,
                    std::cmp::Ordering::Equal => 1,
                    _ => stream.between(-1, 1),
                })
                .collect()
        })
        .collect();
    let factor = multiply(&base.range, &transform);
    let weights = (null..order).map(|_| stream.between(1, 3)).collect();
    let mut constraints = vec![IntegerCoefficient::identity(order)];
    while constraints.len() < sizes.constraints {
        let drawn = draw_sparse(stream, order, ENTRIES);
        // One constraint that does not see the planted point makes the whole instance degenerate.
        if !drawn.annihilates(&factor) {
            constraints.push(drawn);
        }
    }
    let multipliers = constraints.iter().map(|_| draw_nonzero(stream, 2)).collect();
    let slack = base.slack;
    (base.range, PairDraft { rank, factor, slack, weights, constraints, multipliers })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::certificate::Certificate;
    use crate::problem::exact::ResidueColumns;

    #[test]
    fn ranks_miss_the_order_by_the_excess() {
        for (order, rank, excess) in [(6, 1, 1), (12, 2, 2), (30, 3, 4)] {
            let sizes = Sizes { order, rank, null: rank + excess, constraints: order };
            let mut stream = Stream::named(5, &["weak-complementarity"]);
            let (range, planted) = (0..TRIES)
                .map(|_| draw(&sizes, &mut stream))
                .map(|(range, draft)| (range, draft.plant().unwrap()))
                .find(|(range, planted)| determines(planted, range))
                .expect("one of many draws is not degenerate");
            let Certificate::DualPair(pair) = &planted.certificate else {
                panic!("another certificate");
            };
            let rank_of = |columns: Vec<Vec<i64>>| {
                let mut matrix = ResidueColumns::new(order);
                for column in columns {
                    matrix.push_integers(column.into_iter().enumerate());
                }
                matrix.rank()
            };
            let factor = &pair.blocks[0].factor;
            let columns = |factor: &IntegerFactor| -> Vec<Vec<i64>> {
                (0..factor.width).map(|p| (0..order).map(|i| factor.row(i)[p]).collect()).collect()
            };
            assert_eq!(rank_of(columns(factor)), rank);
            assert_eq!(rank_of(columns(&range)), rank + excess);
            assert_eq!(pair.blocks[0].slack.len(), order - rank - excess);
            for column in &pair.blocks[0].slack {
                for basis in columns(&range) {
                    assert_eq!(column.iter().map(|(i, value)| value * basis[i]).sum::<i64>(), 0);
                }
            }
        }
    }
}
