//! `flat-face`: a planted rank-r point at the end of an optimal face of higher rank.
//!
//! With V of width k and S* = W D W', the optimal face of the relaxation is `{V U V' : U PSD,
//! <V'A_iV, U> = b_i}`. All constraints annihilate `V G V'`, so the face holds the segment
//! `U(t) = diag(4 - a t, 1 (r - 1 times), h t (k - r times))`, `0 <= t <= 4/a`, whose trace
//! `<V'V, U(t)>` is constant (A_1 = I). With `constraints >= k(k+1)/2 - 1` the face is this segment
//! and nothing else (a rank modulo 2^61 - 1 proves it): its points have rank r at t = 0 (the planted
//! end), k - 1 at the other end and k between, and an interior-point method ends at rank k. With
//! fewer constraints the face is larger and may hold points of other ranks, also below r.

use super::assembly::{bases, draw_b, multiply};
use super::face::{Face, TRIES};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, Setting, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `flat-face`.
#[derive(Clone, Copy, Debug)]
pub struct FlatFace;

static CARD: FamilyCard = FamilyCard {
    id: "flat-face",
    title: "Optimal face of rank k with a planted point of rank r at one end",
    formula: "min <C,X> s.t. <A_i,X> = b_i, X PSD, rank X <= r; A_1 = I",
    construction: "V = P[I;B] of width k, S* = W D W' with null space range V; every A_i annihilates \
        V G V' with G = diag(-a, 0 (r-1 times), h (k-r times)), drawn sparse and combined in pairs; \
        X* = V diag(4, 1, .., 1, 0, .., 0) V'",
    optimum: "b'y, attained at rank r by X*; with k(k+1)/2 - 1 constraints or more the optimal face is a \
        segment of ranks r (planted end), k (inside) and k - 1 (other end)",
    relaxation: Relaxation::Face,
    certificate: "dual pair, exact; the dimension of the face by a rank modulo 2^61 - 1",
    source: "own construction; ranks on faces after A. Barvinok, Discrete and Computational Geometry \
        13:189-202, 1995, and G. Pataki, Mathematics of Operations Research 23:339-358, 1998 (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 4, most: 1000 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n of the matrix variable, above the face's rank.",
        },
        SettingSpec {
            name: "face",
            kind: Kind::Integer { least: 2, most: 40 },
            default: DefaultSetting::Integer(4),
            meaning: "Rank k inside the face.",
        },
        SettingSpec {
            name: "rank",
            kind: Kind::Integer { least: 1, most: 39 },
            default: DefaultSetting::Integer(2),
            meaning: "Rank r of the planted point and rank bound, below the face's rank.",
        },
        SettingSpec {
            name: "constraints",
            kind: Kind::WordOrInteger { words: &["auto"], least: 2, most: 40_000 },
            default: DefaultSetting::Word("auto"),
            meaning: "Number m of constraints, 2 <= m < nk - k(k-1)/2; `auto` takes k(k+1)/2 - 1, the least \
                for which the face is a segment.",
        },
    ],
};

struct Sizes {
    order: usize,
    face: usize,
    rank: usize,
    constraints: usize,
}

impl Family for FlatFace {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let sizes = sizes(parameters)?;
        for _ in 0..TRIES {
            let (face, factor) = draw(&sizes, stream);
            let planted = face.plant(stream, factor, sizes.constraints)?;
            if face.is_generic(&planted) {
                return Ok(planted);
            }
        }
        Err(PlantError::Parameters(format!(
            "{TRIES} draws of flat-face with order = {}, face = {} and constraints = {} were degenerate; \
             fewer constraints are easier to draw",
            sizes.order, sizes.face, sizes.constraints
        )))
    }
}

fn sizes(parameters: &Settings) -> Result<Sizes, PlantError> {
    let (order, face) = (parameters.size("order"), parameters.size("face"));
    let rank = parameters.size("rank");
    if face >= order {
        return Err(PlantError::Parameters(format!(
            "face = {face} is not below order = {order}; the nearest possible value is {}",
            order - 1
        )));
    }
    if rank >= face {
        return Err(PlantError::Parameters(format!(
            "rank = {rank} is not below face = {face}; the nearest possible value is {}",
            face - 1
        )));
    }
    let most = order * face - face * (face - 1) / 2 - 1;
    let constraints = match parameters.get("constraints") {
        Some(Setting::Integer(_)) => parameters.size("constraints"),
        _ => face * (face + 1) / 2 - 1,
    };
    if !(2..=most).contains(&constraints) {
        return Err(PlantError::Parameters(format!(
            "constraints = {constraints} lies outside 2..={most} for order = {order} and face = {face}; \
             the nearest possible value is {}",
            constraints.clamp(2, most)
        )));
    }
    Ok(Sizes { order, face, rank, constraints })
}

/// Draws the face and the factor of the planted end.
fn draw(sizes: &Sizes, stream: &mut Stream) -> (Face, IntegerFactor) {
    let (k, r) = (sizes.face, sizes.rank);
    let permutation = stream.permutation(sizes.order);
    let bases = bases(&draw_b(stream, sizes.order - k, k), k, &permutation);
    // h = |v_1|^2 and a = sum_{p>=r} |v_p|^2, divided by their greatest common divisor, keep the
    // trace constant.
    let norm = |p: usize| -> i64 { (0..sizes.order).map(|i| bases.range.row(i)[p].pow(2)).sum() };
    let (head, tail) = (norm(0), (r..k).map(norm).sum::<i64>());
    let divisor = greatest_common_divisor(head, tail);
    let direction = (0..k)
        .map(|p| match p {
            0 => -tail / divisor,
            p if p < r => 0,
            _ => head / divisor,
        })
        .collect();
    let select: Vec<Vec<i64>> = (0..k)
        .map(|p| (0..r).map(|q| if p != q { 0 } else { 1 + i64::from(p == 0) }).collect())
        .collect();
    let factor = multiply(&bases.range, &select);
    (Face { bases, direction }, factor)
}

fn greatest_common_divisor(mut a: i64, mut b: i64) -> i64 {
    while b != 0 {
        (a, b) = (b, a % b);
    }
    a
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::certificate::{Certificate, compressed_rank};

    /// Draws until generic; returns the face and the instance.
    fn instance(order: usize, face: usize, rank: usize, constraints: usize) -> (Face, Planted) {
        let sizes = Sizes { order, face, rank, constraints };
        let mut stream = Stream::named(5, &["flat-face"]);
        loop {
            let (face, factor) = draw(&sizes, &mut stream);
            let planted = face.plant(&mut stream, factor, constraints).unwrap();
            if face.is_generic(&planted) {
                return (face, planted);
            }
        }
    }

    #[test]
    fn a_segment_face_has_exactly_one_direction() {
        for (order, k, rank) in [(8, 3, 1), (20, 4, 2), (30, 6, 3)] {
            let full = k * (k + 1) / 2;
            let (face, planted) = instance(order, k, rank, full - 1);
            let range = &face.bases.range;
            // Every compression annihilates G, and nothing else is annihilated by all.
            for constraint in planted.problem.constraints() {
                let alone = std::slice::from_ref(constraint);
                assert_eq!(compressed_rank(alone, range, 1), 1);
            }
            assert_eq!(compressed_rank(planted.problem.constraints(), range, full), full - 1);
        }
    }

    #[test]
    fn fewer_constraints_leave_a_larger_face() {
        let (face, planted) = instance(20, 4, 2, 6);
        assert_eq!(compressed_rank(planted.problem.constraints(), &face.bases.range, 10), 6);
    }

    #[test]
    fn the_other_end_is_feasible_with_the_same_value_and_rank_k_less_one() {
        let (face, planted) = instance(20, 4, 2, 9);
        let Certificate::DualPair(pair) = &planted.certificate else {
            panic!("another certificate");
        };
        // a U(4/a) = diag(0, a, .., a, 4h, .., 4h) in whole numbers.
        let (a, h) = (-face.direction[0], face.direction[3]);
        let end = [0, a, 4 * h, 4 * h];
        for (constraint, rhs) in planted.problem.constraints().iter().zip(planted.problem.rhs()) {
            let matrix = constraint.part(0).unwrap().to_sparse();
            let entries = matrix.iter().map(|(i, j, value)| (i, j, value as i64)).collect();
            let coefficient = super::super::assembly::IntegerCoefficient::gather(entries);
            let value = coefficient.value(&face.bases.range, &end);
            assert_eq!(value, i128::from(a) * (*rhs as i128));
            let planted_value = coefficient.value(&face.bases.range, &[4, 1, 0, 0]);
            assert_eq!(planted_value, *rhs as i128);
        }
        // S* V = 0 holds for all of V, so <C, X> = b'y all along the segment.
        for column in &pair.blocks[0].slack {
            for p in 0..4 {
                let dot: i64 =
                    column.iter().map(|(i, value)| value * face.bases.range.row(i)[p]).sum();
                assert_eq!(dot, 0);
            }
        }
        assert_eq!(end.iter().filter(|weight| **weight != 0).count(), 3);
    }
}
