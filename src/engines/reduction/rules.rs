//! Rules that choose the end of a step: by the rank it leaves, or by the tail beyond the rank bounds.

use super::{Spectral, moved, range};
use crate::budget::Halt;
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::vector::{dot, norm2};
use crate::linalg::{Mat, packed};
use crate::problem::Problem;
use crate::seed::Stream;

/// Ends are compared by the eigenvalues above this share of the largest: what should vanish at an end
/// vanishes only up to the accuracy of the point.
pub(super) const SEEN: f64 = 1e-4;
/// Linearisations of the tail in one step.
const ROUNDS: usize = 8;
/// The tail does not change over the face when its gradient there is below this share of the gradient.
const CONSTANT: f64 = 1e-8;

/// Returns the lowest total rank among both ends of every column.
pub(super) fn best_end(
    point: &Spectral,
    directions: &Mat<f64>,
    cut: f64,
) -> Result<Option<Spectral>, Halt> {
    let mut best: Option<Spectral> = None;
    for column in (0..directions.ncols()).rev() {
        let direction = directions.col_as_slice(column);
        let (low, high) = range(point, direction)?;
        for t in [high, low] {
            if let Some(next) = moved(point, direction, t, cut)?
                && best.as_ref().is_none_or(|b| next.rank_above(SEEN) < b.rank_above(SEEN))
            {
                best = Some(next);
            }
        }
    }
    Ok(best)
}

/// Draws Gaussian combinations of the columns of `basis`.
pub(super) fn combinations(basis: &Mat<f64>, count: usize, stream: &mut Stream) -> Mat<f64> {
    let weights = Mat::from_fn(basis.ncols(), count.max(1), |_, _| stream.normal());
    let mut out = Mat::zeros(basis.nrows(), weights.ncols());
    dense::gemm(out.as_mut(), Accumulate::Replace, 1.0, basis.as_ref(), weights.as_ref());
    out
}

/// Returns the end with the least tail that linearisation leads to.
///
/// The tail, the sum of the eigenvalues beyond each rank bound, is concave, with gradient P, the projector onto their
/// eigenvectors. The direction over the face in which a linearised tail falls fastest is P projected on the null space; its
/// better end gives the next P, until the tail does not fall. Where the tail is constant to first order, the lowest
/// total rank decides.
pub(super) fn tail_end(
    problem: &Problem,
    point: &Spectral,
    basis: &Mat<f64>,
    cut: f64,
) -> Result<Option<Spectral>, Halt> {
    let mut best: Option<Spectral> = None;
    let mut gradient = tail_gradient(problem, point, None);
    for _ in 0..ROUNDS {
        let direction = projected(basis, &gradient);
        if norm2(&direction) <= CONSTANT * norm2(&gradient) {
            break;
        }
        let (low, high) = range(point, &direction)?;
        let mut end: Option<Spectral> = None;
        for t in [high, low] {
            if let Some(next) = moved(point, &direction, t, cut)?
                && end.as_ref().is_none_or(|e| tail(problem, &next) < tail(problem, e))
            {
                end = Some(next);
            }
        }
        let Some(end) = end else { break };
        if best.as_ref().is_some_and(|b| tail(problem, &end) >= tail(problem, b)) {
            break;
        }
        gradient = tail_gradient(problem, point, Some(&end));
        best = Some(end);
    }
    match best {
        Some(best) => Ok(Some(best)),
        None => best_end(point, basis, cut),
    }
}

/// Projects a vector on the span of orthonormal columns.
fn projected(basis: &Mat<f64>, vector: &[f64]) -> Vec<f64> {
    let mut out = vec![0.0; vector.len()];
    for j in 0..basis.ncols() {
        let column = basis.col_as_slice(j);
        crate::linalg::vector::axpy(dot(column, vector), column, &mut out);
    }
    out
}

/// Returns the share of the trace beyond the rank bounds.
fn tail(problem: &Problem, point: &Spectral) -> f64 {
    let (mut beyond, mut whole) = (0.0, f64::MIN_POSITIVE);
    for (part, block) in point.parts.iter().zip(problem.blocks()) {
        whole += part.values.iter().sum::<f64>();
        if let Some(rank) = block.rank {
            beyond += part.values.iter().rev().skip(rank).sum::<f64>();
        }
    }
    beyond / whole
}

/// Writes the gradient of the tail at `end` (or at the point itself) in the coordinates of the point's ranges: I - UU', U
/// the leading eigenvectors, for each block with a rank bound.
fn tail_gradient(problem: &Problem, point: &Spectral, end: Option<&Spectral>) -> Vec<f64> {
    let mut out = vec![0.0; point.unknowns()];
    let mut offset = 0;
    for (k, (part, block)) in point.parts.iter().zip(problem.blocks()).enumerate() {
        let r = part.rank();
        let length = packed::packed_len(r);
        if let Some(rank) = block.rank {
            let mut matrix = Mat::<f64>::identity(r, r);
            let leading = end.map_or(part, |end| &end.parts[k]);
            let kept = leading.rank().min(rank);
            let top = leading.basis.subcols(leading.rank() - kept, kept);
            let mut turned = Mat::zeros(r, kept);
            let rows = part.basis.transpose();
            dense::gemm(turned.as_mut(), Accumulate::Replace, 1.0, rows, top);
            let columns = turned.transpose();
            dense::gemm(matrix.as_mut(), Accumulate::Add, -1.0, turned.as_ref(), columns);
            packed::svec(matrix.as_ref(), &mut out[offset..offset + length]);
        }
        offset += length;
    }
    out
}

impl Spectral {
    /// Returns by how much the ranks, counted at the share at which ends are compared, exceed the rank bounds, in sum.
    pub fn excess(&self, problem: &Problem) -> usize {
        let over = |(part, block): (&super::Part, &crate::problem::Block)| {
            let top = part.values.last().copied().unwrap_or(0.0);
            let rank = part.values.iter().filter(|value| **value > SEEN * top).count();
            block.rank.map_or(0, |bound| rank.saturating_sub(bound))
        };
        self.parts.iter().zip(problem.blocks()).map(over).sum()
    }
}
