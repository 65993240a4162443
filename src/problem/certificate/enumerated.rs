//! Enumerated cuts: a cost that is a direct sum of small cut problems, each solved by trying every cut.
//!
//! The problem is `min <C, X>` subject to `X_ii = 1`, X PSD of rank one: X = x x' with x a sign vector. The certificate
//! splits the indices into parts of at most 24. A part has a graph with whole weights w on its vertices and a sign g (the
//! gauge) on each; within it `C_ij = g_i g_j w_ij` off the diagonal and `C_ii = -sum_j w_ij`, and C is zero between
//! parts. With L the Laplacian of the weights, C = -Diag(g) L Diag(g), so
//! `x'C x = -(g * x)'L (g * x) = -4 cut(g * x)`, the cut of a sign vector being the weight between its two sides.
//!
//! Theorem. The rank-constrained optimum is -4 times the sum of the largest cuts of the parts: x ranges over the parts
//! independently. The largest cut of a part is found by going through all 2^(m-1) cuts in the order of a Gray code
//! (one vertex changes sides at a time), in whole numbers, anew at each check.
//!
//! Relaxation. Let t be optimal and S = C - Diag(t * (C t)). If S is PSD, the relaxation has the same optimum (S t = 0:
//! a dual pair). If it is not, the relaxation's optimum is strictly lower. Proof: X = I is a Slater point, so the dual
//! optimum is attained; were t t' optimal for the relaxation, an optimal slack would have S t = 0 and the
//! off-diagonal entries of C, hence be this S. Whether S, which is a direct sum too, is PSD is decided in whole
//! numbers part by part. QED.

use num_bigint::BigInt;
use serde::{Deserialize, Serialize};

use super::entries::EntrySum;
use super::shared_minimiser::check_sign_problem;
use super::{CertificateError, Proof, RelaxationFact, Stop, Uniqueness, expect_size, settle};
use crate::problem::exact::{Whole, is_positive_semidefinite};
use crate::problem::{Factor, Problem};

/// Most vertices of a part.
pub const MOST_VERTICES: usize = 24;

/// Largest sum of the moduli of a part's weights; it keeps every number of the enumeration within 64 bits.
const MOST_WEIGHT: i128 = 1 << 53;

/// A small cut problem and where it is hidden.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct CutPart {
    /// Index in the matrix, from 0, of each of the m vertices.
    pub vertices: Vec<u32>,
    /// The sign g of each vertex.
    pub gauge: Vec<i64>,
    /// Weights of the pairs (1,2), (1,3), (2,3), (1,4), ...: m(m-1)/2 whole numbers.
    pub weights: Vec<i64>,
    /// The weight of the largest cut.
    pub largest_cut: i64,
}

/// A cost that is a direct sum of small cut problems.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct EnumeratedCut {
    /// The parts; each index is in one of them.
    pub parts: Vec<CutPart>,
    /// The planted sign vector t.
    pub signs: Vec<i64>,
}

/// What going through all cuts of a graph found.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct LargestCut {
    /// The weight of the largest cut.
    pub weight: i64,
    /// One side of each vertex in the first cut of this weight, 1 for the last vertex.
    pub sides: Vec<i64>,
    /// How many cuts have this weight.
    pub count: u64,
}

/// Goes through all cuts of a graph on m vertices; `weights` as in [`CutPart`].
///
/// # Panics
/// m is 0 or above [`MOST_VERTICES`], the list of weights does not have m(m-1)/2 numbers, or their moduli sum to more than
/// 2^53.
#[track_caller]
pub fn largest_cut(order: usize, weights: &[i64]) -> LargestCut {
    assert!((1..=MOST_VERTICES).contains(&order), "{order} vertices");
    assert_eq!(weights.len(), order * (order - 1) / 2, "one weight a pair");
    assert!(total(weights) <= MOST_WEIGHT, "weights beyond 2^53");
    let mut matrix = vec![[0i64; MOST_VERTICES]; order];
    for j in 0..order {
        for i in 0..j {
            matrix[i][j] = weights[j * (j - 1) / 2 + i];
            matrix[j][i] = matrix[i][j];
        }
    }
    let mut sides = [1i64; MOST_VERTICES];
    // field[i] = sum_j w_ij x_j: changing the side of i adds x_i field[i] to the cut.
    let mut field = [0i64; MOST_VERTICES];
    for (target, row) in field.iter_mut().zip(&matrix) {
        *target = row.iter().sum();
    }
    let (mut cut, mut best, mut found, mut count) = (0i64, 0i64, sides, 1u64);
    for step in 1u64..1 << (order - 1) {
        let vertex = step.trailing_zeros() as usize;
        let side = sides[vertex];
        cut += side * field[vertex];
        for (target, weight) in field.iter_mut().zip(&matrix[vertex]) {
            *target -= 2 * side * weight;
        }
        sides[vertex] = -side;
        if cut > best {
            (best, found, count) = (cut, sides, 0);
        }
        count += u64::from(cut == best);
    }
    LargestCut { weight: best, sides: found[..order].to_vec(), count }
}

fn total(weights: &[i64]) -> i128 {
    weights.iter().map(|weight| i128::from(*weight).abs()).sum()
}

impl CutPart {
    /// Iterates over the pairs with a weight other than zero, as (i, j, weight) with local i < j.
    fn edges(&self) -> impl Iterator<Item = (usize, usize, i64)> {
        let pairs = (0..self.vertices.len()).flat_map(|j| (0..j).map(move |i| (i, j)));
        let weighted = pairs.zip(&self.weights).map(|((i, j), &weight)| (i, j, weight));
        weighted.filter(|edge| edge.2 != 0)
    }

    /// Returns the weight that the sign vector t of the whole problem cuts in this part.
    fn cut<W: Whole>(&self, signs: &[i64]) -> Result<W, Stop> {
        let side = |i: usize| self.gauge[i] * signs[self.vertices[i] as usize];
        let mut cut = W::of(0);
        for (i, j, weight) in self.edges() {
            if side(i) != side(j) {
                cut.increase(&W::of(weight))?;
            }
        }
        Ok(cut)
    }

    /// Returns whether the part of S at t is PSD. With s = g * t it is Diag(g) (Diag(d) - L) Diag(g),
    /// d = s * (L s): off the diagonal w_ij, on it d_i - sum_j w_ij.
    fn is_tight(&self, signs: &[i64]) -> bool {
        let order = self.vertices.len();
        let side = |i: usize| self.gauge[i] * signs[self.vertices[i] as usize];
        let mut rows = vec![vec![BigInt::from(0); order]; order];
        for (i, j, weight) in self.edges() {
            let weight = BigInt::from(weight);
            // s_i (L s)_i - L_ii = -sum_j w_ij s_i s_j.
            let aligned = BigInt::from(side(i) * side(j)) * &weight;
            rows[i][i] -= &aligned;
            rows[j][j] -= aligned;
            rows[i][j] = weight.clone();
            rows[j][i] = weight;
        }
        is_positive_semidefinite(rows)
    }
}

impl EnumeratedCut {
    /// Checks the certificate against `problem`; every part is enumerated anew.
    ///
    /// # Errors
    /// The first identity or condition that fails.
    pub fn check(&self, problem: &Problem) -> Result<Proof, CertificateError> {
        check_sign_problem(problem)?;
        self.check_parts(problem.blocks()[0].order)?;
        let optimum = settle(self.identities::<i128>(problem), || self.identities(problem))?;
        let mut minimisers = 1u64;
        for (k, part) in self.parts.iter().enumerate() {
            let found = largest_cut(part.vertices.len(), &part.weights);
            minimisers = minimisers.saturating_mul(found.count);
            if found.weight != part.largest_cut {
                return Err(CertificateError::Identity {
                    identity: "largest cut = the best of all cuts",
                    place: format!("part {}", k + 1),
                    left: part.largest_cut.to_string(),
                    right: found.weight.to_string(),
                });
            }
        }
        // The signs of each part may be turned on their own, so one part is needed for one optimum.
        let only = self.parts.len() == 1 && minimisers == 1;
        let uniqueness = if only { Uniqueness::Proved } else { Uniqueness::NotProved };
        let tight = self.parts.iter().all(|part| part.is_tight(&self.signs));
        let (relaxation, tail) = if tight {
            (RelaxationFact::SameOptimum, "the relaxation has the same optimum")
        } else {
            (RelaxationFact::StrictlyLower, "the relaxation's optimum is strictly lower")
        };
        let statement = format!(
            "the rank-one problem has the optimum {optimum}, attained by the planted sign vector ({} parts \
             enumerated); {tail}",
            self.parts.len()
        );
        let dual_uniqueness = Uniqueness::NotProved;
        Ok(Proof { optimum, uniqueness, dual_uniqueness, relaxation, statement })
    }

    /// Returns the planted factor t.
    pub(super) fn point(&self) -> Factor {
        let data = self.signs.iter().map(|&sign| sign as f64).collect();
        Factor { order: self.signs.len(), width: 1, data }
    }

    fn check_parts(&self, order: usize) -> Result<(), CertificateError> {
        let fail = |condition, place: String, value: String| {
            Err(CertificateError::Condition { condition, place, value })
        };
        let not_sign = |signs: &[i64]| signs.iter().position(|sign| sign.abs() != 1);
        expect_size("t", order, self.signs.len())?;
        if let Some(i) = not_sign(&self.signs) {
            let place = format!("t_{}", i + 1);
            return fail("a sign is 1 or -1", place, self.signs[i].to_string());
        }
        let mut seen = vec![false; order];
        for (k, part) in self.parts.iter().enumerate() {
            let named = |what: &str| format!("{what} of part {}", k + 1);
            let count = part.vertices.len();
            if !(1..=MOST_VERTICES).contains(&count) {
                let condition = "a part has 1 to 24 vertices";
                return fail(condition, named("the number of vertices"), count.to_string());
            }
            expect_size(&named("the gauge"), count, part.gauge.len())?;
            expect_size(
                &named("the list of weights"),
                count * (count - 1) / 2,
                part.weights.len(),
            )?;
            if let Some(i) = not_sign(&part.gauge) {
                let place = named(&format!("gauge {}", i + 1));
                return fail("a sign is 1 or -1", place, part.gauge[i].to_string());
            }
            if total(&part.weights) > MOST_WEIGHT {
                let condition = "the moduli of the weights of a part sum to at most 2^53";
                return fail(condition, named("the sum"), total(&part.weights).to_string());
            }
            for &vertex in &part.vertices {
                match seen.get_mut(vertex as usize) {
                    Some(place) if !*place => *place = true,
                    _ => {
                        let condition = "each index is in one part, once, and within the block";
                        let value = (u64::from(vertex) + 1).to_string();
                        return fail(condition, named("a vertex"), value);
                    }
                }
            }
        }
        match seen.iter().position(|found| !found) {
            None => Ok(()),
            Some(i) => {
                fail("each index is in one part", "an index".to_owned(), (i + 1).to_string())
            }
        }
    }

    /// Checks that the parts make up the cost and that t cuts what they state; returns <C, tt'>.
    fn identities<W: Whole>(&self, problem: &Problem) -> Result<W, Stop> {
        let mut sum = EntrySum::<W>::new(self.signs.len());
        if let Some(part) = problem.cost().part(0) {
            sum.add_coefficient(part, &W::of(-1), || "cost".to_owned())?;
        }
        let mut optimum = W::of(0);
        for (k, part) in self.parts.iter().enumerate() {
            for (i, j, weight) in part.edges() {
                let (row, column) = (part.vertices[i] as usize, part.vertices[j] as usize);
                let gauge = W::of(part.gauge[i] * part.gauge[j]);
                sum.add(row, column, W::of(weight).times(&gauge)?)?;
                let minus = W::of(weight).times(&W::of(-1))?;
                sum.add(row, row, minus.clone())?;
                sum.add(column, column, minus)?;
            }
            let (cut, stated) = (part.cut::<W>(&self.signs)?, W::of(part.largest_cut));
            if cut != stated {
                return Err(Stop::Fails(CertificateError::Identity {
                    identity: "cut of t = largest cut",
                    place: format!("part {}", k + 1),
                    left: cut.to_string(),
                    right: stated.to_string(),
                }));
            }
            optimum.increase(&cut.times(&W::of(-4))?)?;
        }
        if let Some((i, j, excess)) = sum.first_nonzero()? {
            return Err(Stop::Fails(CertificateError::Identity {
                identity: "sum of the parts - C = 0",
                place: format!("entry ({}, {})", i + 1, j + 1),
                left: excess.to_string(),
                right: "0".to_owned(),
            }));
        }
        Ok(optimum)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    proptest! {
        #[test]
        fn the_gray_code_agrees_with_trying_every_subset(
            order in 1usize..9,
            drawn in proptest::collection::vec(-4i64..5, 28),
        ) {
            let weights = &drawn[..order * (order - 1) / 2];
            let cut = |subset: u32| -> i64 {
                let side = |i: usize| subset >> i & 1;
                (0..order)
                    .flat_map(|j| (0..j).map(move |i| (i, j)))
                    .zip(weights)
                    .filter(|((i, j), _)| side(*i) != side(*j))
                    .map(|(_, weight)| *weight)
                    .sum()
            };
            let cuts: Vec<i64> = (0..1 << (order - 1)).map(cut).collect();
            let best = *cuts.iter().max().unwrap();
            let found = largest_cut(order, weights);
            prop_assert_eq!(found.weight, best);
            prop_assert_eq!(found.count, cuts.iter().filter(|c| **c == best).count() as u64);
            let subset = (0..order).filter(|i| found.sides[*i] < 0).map(|i| 1 << i).sum();
            prop_assert_eq!(cut(subset), best);
        }
    }

    #[test]
    fn the_complete_graph_on_24_vertices_is_within_reach() {
        // Halves of 12: 144 edges, 24 choose 12 halved by symmetry.
        let found = largest_cut(24, &[1; 276]);
        assert_eq!((found.weight, found.count), (144, 1_352_078));
    }
}
