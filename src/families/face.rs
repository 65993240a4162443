//! What the families of optimal faces share: constraints that annihilate a direction V G V', and the
//! test that the optimal face has no other direction.

use std::collections::BTreeMap;

use super::PlantError;
use super::assembly::{Bases, IntegerCoefficient, PairDraft, draw_nonzero, draw_sparse};
use crate::problem::certificate::{IntegerFactor, Planted, compressed_rank, image_rank};
use crate::problem::exact::{Echelon, residue};
use crate::seed::Stream;

/// Entries of a sparse coefficient that waits for its partner.
type Entries = Vec<(usize, usize, i64)>;

/// Entries drawn for each half of a constraint.
const ENTRIES: usize = 3;

/// Draws for each constraint, on the average over an instance.
const DRAWS: usize = 300;

/// Draws of a whole instance before a family gives up.
pub(super) const TRIES: usize = 50;

/// An optimal face that contains the segment `V (U + t G) V'` with diagonal U and G.
#[derive(Clone, Debug)]
pub(super) struct Face {
    /// V (n x k) and W.
    pub bases: Bases,
    /// Diagonal of G, in the coordinates of V.
    pub direction: Vec<i64>,
}

impl Face {
    /// Draws `count` constraints with `<A_i, V G V'> = 0`. The first is the identity, which the
    /// caller has made sure to annihilate the direction.
    ///
    /// The others are drawn sparse; one with `<A, V G V'> = a != 0` waits for a partner with plus or
    /// minus a, and their difference or sum is taken, so that entries stay small. Until the compressions
    /// V'A_iV have their full rank k(k+1)/2 - 1, only a constraint that raises it is kept. Returns none
    /// when `DRAWS` draws a constraint do not bring enough of them together.
    fn constraints(&self, stream: &mut Stream, count: usize) -> Option<Vec<IntegerCoefficient>> {
        let order = self.bases.range.order;
        let identity = IntegerCoefficient::identity(order);
        debug_assert_eq!(identity.value(&self.bases.range, &self.direction), 0);
        let range = &self.bases.range;
        let size = range.width * (range.width + 1) / 2;
        let mut spanned = Echelon::new(size);
        let mut fits = |coefficient: &IntegerCoefficient| {
            let compressed = coefficient.compressed(range);
            spanned.rank() == size - 1
                || spanned.admit(compressed.into_iter().map(residue).collect())
        };
        fits(&identity);
        let mut found = vec![identity];
        let mut waiting: BTreeMap<u128, (i128, Entries)> = BTreeMap::new();
        for _ in 0..DRAWS * count {
            if found.len() == count {
                break;
            }
            let drawn = draw_sparse(stream, order, ENTRIES);
            let value = drawn.value(range, &self.direction);
            let IntegerCoefficient::Sparse(entries) = drawn else {
                unreachable!("draw_sparse draws sparse coefficients");
            };
            let candidate = if value == 0 {
                IntegerCoefficient::Sparse(entries)
            } else {
                let Some((other_value, other)) = waiting.remove(&value.unsigned_abs()) else {
                    waiting.insert(value.unsigned_abs(), (value, entries));
                    continue;
                };
                let sign = if other_value == value { -1 } else { 1 };
                let flipped = other.into_iter().map(|(i, j, entry)| (i, j, sign * entry));
                IntegerCoefficient::gather(entries.into_iter().chain(flipped).collect())
            };
            if fits(&candidate) {
                found.push(candidate);
            }
        }
        (found.len() == count).then_some(found)
    }

    /// Draws weights, constraints and multipliers around the planted factor and proves the pair.
    ///
    /// # Errors
    /// As [`PairDraft::plant`], or no partners for the constraints.
    pub(super) fn plant(
        &self,
        stream: &mut Stream,
        factor: IntegerFactor,
        count: usize,
    ) -> Result<Planted, PlantError> {
        let constraints = self.constraints(stream, count).ok_or_else(|| {
            PlantError::Parameters(format!(
                "no {count} constraints were found that keep the face flat"
            ))
        })?;
        let multipliers = constraints.iter().map(|_| draw_nonzero(stream, 2)).collect();
        let weights = self.bases.slack.iter().map(|_| stream.between(1, 3)).collect();
        let slack = self.bases.slack.clone();
        let rank = factor.width;
        PairDraft { rank, factor, slack, weights, constraints, multipliers }.plant()
    }

    /// Tests two ranks modulo the prime: the A_i V are linearly independent, so that the multipliers
    /// are unique; and the compressions V'A_iV span as much as they can while annihilating G, so that
    /// the face is exactly the segment once there are k(k+1)/2 - 1 constraints.
    pub(super) fn is_generic(&self, planted: &Planted) -> bool {
        let constraints = planted.problem.constraints();
        let range = &self.bases.range;
        let full = range.width * (range.width + 1) / 2 - 1;
        let enough = full.min(constraints.len());
        compressed_rank(constraints, range, enough) == enough
            && image_rank(constraints, range, constraints.len()) == constraints.len()
    }
}
