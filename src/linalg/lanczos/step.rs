//! A safe upper bound of the largest eigenvalue from a short Lanczos run, for step lengths to the boundary of the cone.

use super::tridiagonal::eigen_with_last_row;
use super::{LanczosWorkspace, LinearOperator};
use crate::linalg::vector::{axpy, dot, fill_pseudo_random, norm2, normalise, scale};

/// Steps between two convergence tests (Toh 2002).
const TEST_EVERY: usize = 5;

/// A new vector whose norm falls below this share of the old one is orthogonalised again (Toh 2002).
const REORTHOGONALISE_BELOW: f64 = 0.8;

/// Stop rule of [`step_bound`].
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct StepParams {
    /// Stops when delta <= tolerance * max(1, |theta_1|), delta being the distance from the largest Ritz value to the safe value.
    pub tolerance: f64,
    /// Most steps; 0 stands for max(min(n, 30), round(sqrt n)).
    pub max_steps: usize,
    /// Number that chooses the start vector.
    pub seed: u64,
}

impl Default for StepParams {
    fn default() -> Self {
        Self { tolerance: 1e-3, max_steps: 0, seed: 0 }
    }
}

/// An estimate of the largest eigenvalue from above.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct StepBound {
    /// The safe value theta_1 + delta; NaN or infinite when the operator gave such numbers.
    pub upper: f64,
    /// The largest Ritz value theta_1, a lower bound of the largest eigenvalue up to rounding.
    pub ritz: f64,
    /// Applications of the operator.
    pub steps: usize,
}

/// Bounds the largest eigenvalue of `op` from above by theta_1 + delta after a few Lanczos steps.
///
/// Rule of Toh (Comput. Optim. Appl. 21:301-310, 2002): with the two largest Ritz values theta_1 >= theta_2 and their residual norms
/// rho_1, rho_2, delta = min(rho_1, rho_1^2 / max(theta_1 - theta_2 - rho_2, eps)), tested every 5 steps and at the last. The source
/// asks delta <= 1e-3; here the test is relative where |theta_1| > 1. The value is safe in practice, not by proof: where the spectrum
/// is crowded at its upper end it can fall short of the largest eigenvalue by a part of the tolerance (6e-5 was seen), so a step
/// length taken from it needs a factor below 1 - tolerance, and a larger error is possible when the step limit ends the run.
/// An operator of order 0 gives minus infinity.
pub fn step_bound<A: LinearOperator + ?Sized>(
    op: &mut A,
    ws: &mut LanczosWorkspace,
    params: &StepParams,
) -> StepBound {
    let n = op.order();
    if n == 0 {
        return StepBound { upper: f64::NEG_INFINITY, ritz: f64::NEG_INFINITY, steps: 0 };
    }
    let rule = n.min(30).max((n as f64).sqrt().round() as usize);
    let limit = if params.max_steps == 0 { rule } else { params.max_steps }.min(n);
    ws.basis.resize((limit + 1) * n, 0.0);
    ws.small.resize(5 * limit, 0.0);
    let (diagonal, rest) = ws.small.split_at_mut(limit);
    let (off, work) = rest.split_at_mut(limit);
    fill_pseudo_random(params.seed, &mut ws.basis[..n]);
    normalise(&mut ws.basis[..n]);
    let mut magnitude = 0.0f64;
    for j in 0..limit {
        let (known, rest) = ws.basis.split_at_mut((j + 1) * n);
        let next = &mut rest[..n];
        let current = &known[j * n..];
        op.apply(current, next);
        diagonal[j] = dot(current, next);
        axpy(-diagonal[j], current, next);
        if j > 0 {
            axpy(-off[j - 1], &known[(j - 1) * n..j * n], next);
        }
        let before = diagonal[j].hypot(if j > 0 { off[j - 1] } else { 0.0 });
        off[j] = orthogonalise(known, n, next, before);
        magnitude = magnitude.max(diagonal[j].abs()).max(off[j]);
        let steps = j + 1;
        // A vanishing remainder means that the space is invariant: the Ritz values are eigenvalues.
        let closed = steps == n || off[j] <= 4.0 * f64::EPSILON * magnitude;
        if closed || !off[j].is_finite() || steps == limit || steps.is_multiple_of(TEST_EVERY) {
            let last = if closed { 0.0 } else { off[j] };
            let (ritz, delta) = safe_margin(&diagonal[..steps], &off[..steps], last, work);
            let done = delta <= params.tolerance * ritz.abs().max(1.0);
            if done || closed || steps == limit || !delta.is_finite() {
                return StepBound { upper: ritz + delta, ritz, steps };
            }
        }
        scale(off[j].recip(), next);
    }
    unreachable!("the last step returns")
}

/// Removes from `next` what is left of it in the basis, until its norm keeps more than the stated share, and returns the norm.
fn orthogonalise(known: &[f64], n: usize, next: &mut [f64], removed: f64) -> f64 {
    let mut norm = norm2(next);
    let mut old = norm.hypot(removed);
    // Two passes are enough unless the vector is rounding noise altogether (Giraud et al., Numer. Math. 101:87-100, 2005).
    for _ in 0..2 {
        if norm > REORTHOGONALISE_BELOW * old || norm == 0.0 {
            break;
        }
        for vector in known.chunks_exact(n) {
            let c = dot(vector, next);
            axpy(-c, vector, next);
        }
        old = norm;
        norm = norm2(next);
    }
    norm
}

/// Returns the largest Ritz value and the margin delta above it; NaN when the small eigenproblem fails.
fn safe_margin(diagonal: &[f64], off: &[f64], last_off: f64, work: &mut [f64]) -> (f64, f64) {
    let k = diagonal.len();
    let third = work.len() / 3;
    let (values, rest) = work.split_at_mut(third);
    let (offs, lasts) = rest.split_at_mut(third);
    let (values, offs, lasts) = (&mut values[..k], &mut offs[..k], &mut lasts[..k]);
    values.copy_from_slice(diagonal);
    offs.copy_from_slice(off);
    if !eigen_with_last_row(values, offs, lasts) {
        return (f64::NAN, f64::NAN);
    }
    let first = (0..k).max_by(|&a, &b| values[a].total_cmp(&values[b])).unwrap_or(0);
    let second = (0..k).filter(|&i| i != first).max_by(|&a, &b| values[a].total_cmp(&values[b]));
    let residual = |i: usize| (last_off * lasts[i]).abs();
    let gap = second.map_or(0.0, |i| values[first] - values[i] - residual(i)).max(f64::EPSILON);
    let rho = residual(first);
    (values[first], rho.min(rho * rho / gap))
}
