//! `ill-scaled`: the construction of `tight-unique` with spectra, constraints and right sides over chosen powers
//! of two.
//!
//! Column p of V is multiplied by 2^{e_p}, weight j of D by 2^{f_j}, constraint i (with its right side) by
//! 2^{g_i}; further, a constraint A_j may be replaced by A_j + 2^h A_l with another A_l, which makes them nearly
//! parallel. The exponents run evenly from 0 to the parameter and are dealt at random, so each
//! range is attained at both ends wherever there are two numbers to scale; a single column of V gets the largest
//! exponent.
//!
//! None of this touches the proof: `V'W = 0`, D > 0, `b = A(VV')` and `C = A*(y) + W D W'` hold as before. It also
//! leaves both uniquenesses alone, because scaling the columns of V and the A_i, and adding a multiple of
//! one A_l to another A_j, are invertible on the spans whose ranks prove them; they are proved again by ranks
//! modulo 2^61 - 1. Powers of two up to the stated exponents keep every number below 2^53 (refused otherwise) and
//! cost no rounding, so that all ill effects are the method's.

use super::assembly::{IntegerCoefficient, PairDraft, bases, draw_b, draw_nonzero, draw_sparse};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{Planted, Uniqueness};
use crate::seed::Stream;

/// The family `ill-scaled`.
#[derive(Clone, Copy, Debug)]
pub struct IllScaled;

/// Entries drawn for each constraint.
const ENTRIES: usize = 5;

/// Draws of a whole instance before the family gives up.
const TRIES: usize = 50;

static CARD: FamilyCard = FamilyCard {
    id: "ill-scaled",
    title: "Unique optimum with spectra, constraints and right sides over powers of two",
    formula: "min <C,X> s.t. <A_i,X> = b_i (i = 1..max(n, r(r+1)), at most nr - r(r-1)/2), X PSD, rank X <= r; \
        A_1 = 2^g I",
    construction: "V = P[I;B] Diag(2^e), W = P[-B';I], D times 2^f; A_1 = I, the other A_i sparse, nearly \
        dependent ones made by A_j + 2^h A_l, then A_i and b_i times 2^g; y in {-2,-1,1,2}; b = A(VV'), \
        C = A*(y) + W D W'",
    optimum: "b'y, attained by X* = VV' of rank r only; the multipliers are unique too",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact; both nondegeneracies by ranks modulo 2^61 - 1 (an instance that misses one is \
        drawn again)",
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
            meaning: "Rank r of the planted point and rank bound, below the order.",
        },
        SettingSpec {
            name: "point",
            kind: Kind::Integer { least: 0, most: 8 },
            default: DefaultSetting::Integer(4),
            meaning: "Columns of V are scaled by 2^0 to 2^point, the nonzero eigenvalues of X* by about their \
                squares: tests rank cut-offs.",
        },
        SettingSpec {
            name: "slack",
            kind: Kind::Integer { least: 0, most: 20 },
            default: DefaultSetting::Integer(8),
            meaning: "Weights of S* are scaled by 2^0 to 2^slack: small nonzero eigenvalues of S* slow dual methods.",
        },
        SettingSpec {
            name: "rows",
            kind: Kind::Integer { least: 0, most: 8 },
            default: DefaultSetting::Integer(6),
            meaning: "Constraints and right sides are scaled by 2^0 to 2^rows.",
        },
        SettingSpec {
            name: "dependence",
            kind: Kind::Integer { least: 0, most: 8 },
            default: DefaultSetting::Integer(0),
            meaning: "0: no nearly dependent constraints. h > 0: every second constraint after A_1 gets 2^h times \
                the one after A_1 that precedes it, if any.",
        },
    ],
};

struct Sizes {
    order: usize,
    rank: usize,
    constraints: usize,
}

impl Family for IllScaled {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let (order, rank) = (parameters.size("order"), parameters.size("rank"));
        if rank >= order {
            return Err(PlantError::Parameters(format!(
                "rank = {rank} is not below order = {order}; the nearest possible value is {}",
                order - 1
            )));
        }
        let least = rank * (rank + 1) / 2;
        let most = order * rank - rank * (rank - 1) / 2;
        let sizes = Sizes { order, rank, constraints: order.max(2 * least).clamp(least, most) };
        for _ in 0..TRIES {
            let planted = draw(&sizes, parameters, stream).plant()?;
            let both = [planted.proof.uniqueness, planted.proof.dual_uniqueness];
            if both == [Uniqueness::Proved; 2] {
                return Ok(planted);
            }
        }
        Err(PlantError::Parameters(format!(
            "{TRIES} draws of ill-scaled with order = {order} and rank = {rank} were degenerate; a larger order is \
             easier to draw"
        )))
    }
}

fn draw(sizes: &Sizes, parameters: &Settings, stream: &mut Stream) -> PairDraft {
    let (order, rank) = (sizes.order, sizes.rank);
    let permutation = stream.permutation(order);
    let base = bases(&draw_b(stream, order - rank, rank), rank, &permutation);
    let mut factor = base.range;
    let scales = powers(stream, rank, parameters.integer("point"));
    for row in factor.rows.chunks_exact_mut(rank) {
        row.iter_mut().zip(&scales).for_each(|(value, scale)| *value *= scale);
    }
    let scales = powers(stream, order - rank, parameters.integer("slack"));
    let weights = scales.into_iter().map(|scale| scale * stream.between(1, 3)).collect();
    let mut drawn = vec![entries(IntegerCoefficient::identity(order))];
    while drawn.len() < sizes.constraints {
        let next = draw_sparse(stream, order, ENTRIES);
        // One constraint that does not see the planted point makes the whole instance degenerate.
        if !next.annihilates(&factor) {
            drawn.push(entries(next));
        }
    }
    let dependence = parameters.integer("dependence");
    if dependence > 0 {
        for j in (2..drawn.len()).step_by(2) {
            let near = drawn[j - 1].iter().map(|&(p, q, value)| (p, q, value << dependence));
            let near: Vec<_> = near.collect();
            drawn[j].extend(near);
        }
    }
    let scales = powers(stream, drawn.len(), parameters.integer("rows"));
    let scaled = |(list, scale): (Entries, i64)| {
        let list = list.into_iter().map(|(p, q, value)| (p, q, value * scale));
        IntegerCoefficient::gather(list.collect())
    };
    let constraints: Vec<_> = drawn.into_iter().zip(scales).map(scaled).collect();
    let multipliers = constraints.iter().map(|_| draw_nonzero(stream, 2)).collect();
    PairDraft { rank, factor, slack: base.slack, weights, constraints, multipliers }
}

/// Entries (i, j, value) of a sparse coefficient.
type Entries = Vec<(usize, usize, i64)>;

fn entries(coefficient: IntegerCoefficient) -> Entries {
    match coefficient {
        IntegerCoefficient::Sparse(entries) => entries,
        IntegerCoefficient::Outer(_) => unreachable!("the constraints of this family are sparse"),
    }
}

/// Returns `count` powers of two with exponents evenly from 0 to `most`, in random order; `2^most` when there is one.
fn powers(stream: &mut Stream, count: usize, most: i64) -> Vec<i64> {
    let exponent = |at: usize| match count {
        1 => most,
        _ => most * at as i64 / (count as i64 - 1),
    };
    let mut powers: Vec<i64> = (0..count).map(|at| 1 << exponent(at)).collect();
    stream.shuffle(&mut powers);
    powers
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn powers_attain_both_ends() {
        let mut stream = Stream::named(1, &["powers"]);
        for (count, most) in [(2, 8), (5, 3), (30, 20), (7, 0)] {
            let mut found = powers(&mut stream, count, most);
            found.sort_unstable();
            assert_eq!((found[0], found[count - 1]), (1, 1 << most));
        }
        assert_eq!(powers(&mut stream, 1, 5), [32]);
    }
}
