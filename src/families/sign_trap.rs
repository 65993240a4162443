//! `sign-trap`: a segment of optima whose end of rank one lies opposite to where the published rule
//! of rank reduction goes.
//!
//! The optimal face is `X(t) = V diag(1 - t, t, .., t) V'`, `0 <= t <= 1`, which is half of
//! `V diag(2 - s, s, .., s) V'` at s = 2t. Its ends have rank 1 (t = 0, planted) and k - 1 (t = 1). The
//! analytic centre, where interior-point methods arrive, is t = (k - 1)/k; seen from there the
//! direction has the eigenvalues -k (once) and k/(k - 1) (k - 1 times), so the rule that divides by
//! the eigenvalue of largest modulus ends at t = 1, at rank k - 1 (A. Lemon, A. So, Y. Ye, Foundations
//! and Trends in Optimization 2, 2016, for the rule, from memory).
//!
//! All constraints annihilate the direction `V diag(-1, 1, .., 1) V'`. That the first can be the
//! identity needs `|v_1|^2 = |v_2|^2 + .. + |v_k|^2`: the first column of B is all signs, and n - 2k + 2
//! of its n - k rows have one further sign. So n >= 2k - 2.

use super::assembly::{bases, multiply};
use super::face::{Face, TRIES};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `sign-trap`.
#[derive(Clone, Copy, Debug)]
pub struct SignTrap;

static CARD: FamilyCard = FamilyCard {
    id: "sign-trap",
    title: "Segment of optima from rank one to rank k - 1, with the centre near the wrong end",
    formula: "min <C,X> s.t. <A_i,X> = b_i (i = 1..k(k+1)/2 - 1), X PSD, rank X <= 1; A_1 = I",
    construction: "V = P[I;B] of width k, S* = W D W' with null space range V; every A_i annihilates \
        V diag(-1, 1, .., 1) V', drawn sparse and combined in pairs; X* = v_1 v_1'",
    optimum: "b'y, attained at rank 1 by X* only; the optima of the relaxation are \
        V diag(1 - t, t, .., t) V', 0 <= t <= 1, of rank 1, k (inside) and k - 1",
    relaxation: Relaxation::Face,
    certificate: "dual pair, exact; that the face is this segment by a rank modulo 2^61 - 1",
    source: "own construction against the rule of A. Lemon, A. So, Y. Ye, Foundations and Trends in \
        Optimization 2:1-156, 2016 (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 4, most: 1000 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n of the matrix variable, above the face's rank k and at least 2k - 2.",
        },
        SettingSpec {
            name: "face",
            kind: Kind::Integer { least: 3, most: 40 },
            default: DefaultSetting::Integer(4),
            meaning: "Rank k inside the face.",
        },
    ],
};

impl Family for SignTrap {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let (order, face) = (parameters.size("order"), parameters.size("face"));
        if order <= face || order + 2 < 2 * face {
            let nearest = (order - 1).min(order / 2 + 1);
            return Err(PlantError::Parameters(format!(
                "face = {face} is too large for order = {order} (which must exceed it and be at least \
                 2 face - 2); the nearest possible value is {nearest}"
            )));
        }
        for _ in 0..TRIES {
            let (segment, factor) = draw(order, face, stream);
            let planted = segment.plant(stream, factor, face * (face + 1) / 2 - 1)?;
            if segment.is_generic(&planted) {
                return Ok(planted);
            }
        }
        Err(PlantError::Parameters(format!(
            "{TRIES} draws of sign-trap with order = {order} and face = {face} were degenerate; a larger \
             order is easier to draw"
        )))
    }
}

/// Draws the segment and the factor v_1 of its planted end.
fn draw(order: usize, face: usize, stream: &mut Stream) -> (Face, IntegerFactor) {
    let permutation = stream.permutation(order);
    let mut b: Vec<Vec<i64>> = (face..order)
        .map(|_| {
            let mut row = vec![0; face];
            row[0] = stream.sign();
            row
        })
        .collect();
    for q in stream.sample(order - face, order + 2 - 2 * face) {
        b[q][1 + stream.index(face - 1)] = stream.sign();
    }
    let bases = bases(&b, face, &permutation);
    let direction = (0..face).map(|p| if p == 0 { -1 } else { 1 }).collect();
    let select: Vec<Vec<i64>> = (0..face).map(|p| vec![i64::from(p == 0)]).collect();
    let factor = multiply(&bases.range, &select);
    (Face { bases, direction }, factor)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::families::assembly::IntegerCoefficient;
    use crate::problem::certificate::{Certificate, compressed_rank};
    use crate::problem::exact::ResidueColumns;

    fn factor_rank(factor: &IntegerFactor, columns: std::ops::Range<usize>) -> usize {
        let mut matrix = ResidueColumns::new(factor.order);
        for p in columns {
            matrix.push_integers((0..factor.order).map(|i| (i, factor.row(i)[p])));
        }
        matrix.rank()
    }

    #[test]
    fn the_optimal_face_is_a_segment_from_rank_one_to_rank_k_less_one() {
        for (order, k) in [(6, 4), (20, 4), (20, 7), (41, 5)] {
            let mut stream = Stream::named(9, &["sign-trap"]);
            let count = k * (k + 1) / 2 - 1;
            let (segment, planted) = loop {
                let (segment, factor) = draw(order, k, &mut stream);
                let planted = segment.plant(&mut stream, factor, count).unwrap();
                if segment.is_generic(&planted) {
                    break (segment, planted);
                }
            };
            let range = &segment.bases.range;
            let rank = compressed_rank(planted.problem.constraints(), range, count + 1);
            assert_eq!(rank, count, "the compressions annihilate one direction only");
            assert_eq!(factor_rank(range, 0..1), 1);
            assert_eq!(factor_rank(range, 1..k), k - 1);
            let Certificate::DualPair(pair) = &planted.certificate else {
                panic!("another certificate");
            };
            assert_eq!(pair.blocks[0].factor.width, 1);
            let other_end: Vec<i64> = (0..k).map(|p| i64::from(p > 0)).collect();
            let here: Vec<i64> = (0..k).map(|p| i64::from(p == 0)).collect();
            let constraints = planted.problem.constraints();
            for (constraint, rhs) in constraints.iter().zip(planted.problem.rhs()) {
                let matrix = constraint.part(0).unwrap().to_sparse();
                let entries = matrix.iter().map(|(i, j, value)| (i, j, value as i64)).collect();
                let coefficient = IntegerCoefficient::gather(entries);
                assert_eq!(coefficient.value(range, &other_end), *rhs as i128);
                assert_eq!(coefficient.value(range, &here), *rhs as i128);
            }
        }
    }
}
