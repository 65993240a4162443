//! A rigorous lower bound of the optimum from any multipliers.
//!
//! **Theorem** (Jansson, Chaykin, Keil, SIAM J. Numer. Anal. 46:180-200, 2007, in the trace form). Let
//! `y` be any vector, `S_j = C_j - sum_i y_i A_ij` for the PSD blocks and `s = c - sum_i y_i a_i` for the
//! nonnegative part, `d_j <= lambda_min(S_j)`, `tr X_j <= t_j` and `x_i <= u_i` for every feasible
//! point (infinite bounds allowed, 0 times infinity read as 0). Then every feasible point has
//!
//! ```text
//! <C, X> + c'x  >=  b'y + sum_j min(0, d_j) t_j + sum_i min(0, s_i) u_i.
//! ```
//!
//! *Proof.* A feasible point satisfies `<C,X> + c'x = b'y + sum_j <S_j, X_j> + s'x`, by the equations.
//! `S_j - d_j I` and `X_j` are PSD, hence `<S_j, X_j> >= d_j tr X_j >= min(0, d_j) tr X_j >= min(0, d_j) t_j`;
//! and `s_i x_i >= min(0, s_i) u_i`. Rank bounds only shrink the feasible set. QED
//!
//! Every quantity is evaluated so that rounding can only lower the result:
//!
//! - entries of S come with an error bound (`slack`);
//! - `d_j` is the better of two bounds: the diagonal excess `min_i (S_ii - sum_{k != i} |S_ik|)` (Gershgorin),
//!   for any size, and a *verified Cholesky factorisation* for orders up to [`CHOLESKY_ORDER`];
//! - `t_j` and `u_i` come from the constraints that have diagonal entries only, none of them negative:
//!   there `a X_kk <= b` for each entry, and `tr X_j <= b / min a` when the whole diagonal of block j
//!   stands in it. This covers diag(X) = 1, tr X = c and X + Z = c I.
//!
//! **Verified Cholesky.** Let B be the rounded `S - sigma I`, sigma a little below the computed least
//! eigenvalue, and let its floating-point Cholesky factorisation run to completion, giving R. Then R'R is
//! PSD whatever rounding did, so with `E = R'R - B`, `lambda_min(B) >= -||E||`. The norm of E is bounded
//!
//! - up to order [`RESIDUAL_ORDER`] by its largest row sum, each entry `sum_k r_ki r_kj - b_ij` evaluated
//!   with a compensated sum that bounds its own error;
//! - beyond, without evaluating it: `|E| <= g |R'| |R|`, `g = (n+1)u / (1 - (n+1)u)`, `u = 2^-53`, whatever
//!   the order of the sums (Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed., theorem
//!   10.3; from memory). The diagonal of this gives `||r_k||^2 <= b_kk + g ||r_k||^2`, so
//!   `||r_k||^2 <= b_kk / (1 - g)`, and by Cauchy `|E_kl| <= g/(1-g) sqrt(b_kk b_ll)`, a rank-one matrix of
//!   norm `g/(1-g) tr B` (the criterion of Rump, BIT 46:433-452, 2006). Underflow adds at most
//!   `2^-1073 max(1, r_kk)` for each of at most n+2 operations of an entry, less than
//!   `(n+2)^2 2^-1000 (1 + tr B)` in norm.
//!
//! B differs from the true `S - sigma I` by at most the largest row sum of the entry radii plus u |b_kk| for
//! the rounding of the shift. Hence `lambda_min(S) >= sigma - ||E|| - row sum - rounding`.

use super::slack::{self, SlackBlock};
use super::spectral;
use crate::linalg::compensated::{Accumulator, UNIT_ROUNDOFF};
use crate::problem::{Coefficient, Functional, Problem};
use faer::Mat;

/// Largest order whose least eigenvalue is bounded by a verified Cholesky factorisation: about
/// n^3/3 multiplications a trial.
pub const CHOLESKY_ORDER: usize = 800;

/// Largest order for which the residual of that factorisation is evaluated, about n^3/6 compensated
/// products; beyond, its a-priori bound is taken, which is some n times larger.
pub const RESIDUAL_ORDER: usize = 400;

/// Most trials with growing shifts.
const TRIALS: usize = 14;

/// Computes a number that is proved to be at most the objective of every feasible point of `problem`,
/// from the multipliers `y` (length m); see the theorem in the module's header.
///
/// None when the theorem gives nothing: an indefinite block of S whose trace the constraints do not
/// bound, a slack too large to evaluate, or numbers that overflow.
#[track_caller]
pub fn lower_bound(problem: &Problem, y: &[f64]) -> Option<f64> {
    assert_eq!(y.len(), problem.constraints().len(), "one multiplier a constraint");
    let limits = Limits::of(problem);
    let mut total = Accumulator::new();
    for (rhs, multiplier) in problem.rhs().iter().zip(y) {
        total.add_product(*rhs, *multiplier);
    }
    for (index, trace) in limits.traces.iter().enumerate() {
        let least = least_eigenvalue_bound(&slack::block(problem, y, index)?)?;
        total.add(down_product(least, *trace)?);
    }
    for ((value, radius), limit) in slack::orthant(problem, y).into_iter().zip(&limits.scalars) {
        total.add(down_product((value - radius).next_down(), *limit)?);
    }
    let bound = (total.value() - total.error_bound().next_up()).next_down();
    bound.is_finite().then_some(bound)
}

/// Bounds `min(0, least) * limit` from below.
fn down_product(least: f64, limit: f64) -> Option<f64> {
    if least >= 0.0 {
        return Some(0.0);
    }
    let product = (least * limit).next_down();
    product.is_finite().then_some(product)
}

/// Upper bounds of traces and scalars that hold at every feasible point; infinite where none is found.
struct Limits {
    traces: Vec<f64>,
    scalars: Vec<f64>,
}

impl Limits {
    fn of(problem: &Problem) -> Self {
        let mut diagonals: Vec<Vec<f64>> =
            problem.blocks().iter().map(|block| vec![f64::INFINITY; block.order]).collect();
        let mut traces = vec![f64::INFINITY; problem.blocks().len()];
        let mut scalars = vec![f64::INFINITY; problem.orthant()];
        for (constraint, &rhs) in problem.constraints().iter().zip(problem.rhs()) {
            let Some(parts) = diagonal_parts(constraint) else {
                continue;
            };
            let limit = |coefficient: f64| {
                if rhs > 0.0 { (rhs / coefficient).next_up() } else { 0.0 }
            };
            for (block, entries) in parts {
                let least = entries.iter().map(|entry| entry.1).fold(f64::INFINITY, f64::min);
                if entries.len() == problem.blocks()[block].order {
                    traces[block] = traces[block].min(limit(least));
                }
                for (i, coefficient) in entries {
                    let known = &mut diagonals[block][i];
                    *known = known.min(limit(coefficient));
                }
            }
            for (i, coefficient) in constraint.orthant.iter().filter(|entry| entry.1 > 0.0) {
                scalars[i] = scalars[i].min(limit(coefficient));
            }
        }
        for (trace, diagonal) in traces.iter_mut().zip(&diagonals) {
            // A sum of n rounded nonnegative numbers is below its true value by at most n u of itself.
            let sum: f64 = diagonal.iter().sum();
            *trace = trace.min(sum * (1.0 + (diagonal.len() + 2) as f64 * f64::EPSILON));
        }
        Limits { traces, scalars }
    }
}

/// The entries `(i, value)` of a diagonal.
type Diagonal = Vec<(usize, f64)>;

/// Lists the diagonals of a constraint by block, when it has no other entries and no negative ones.
fn diagonal_parts(constraint: &Functional) -> Option<Vec<(usize, Diagonal)>> {
    if constraint.orthant.values.iter().any(|value| *value < 0.0) {
        return None;
    }
    let mut parts = Vec::with_capacity(constraint.parts.len());
    for (block, coefficient) in &constraint.parts {
        let product;
        let matrix = match coefficient {
            Coefficient::Sparse(matrix) => matrix,
            Coefficient::Outer(sum) => {
                // Several terms may share a place, and a square may be rounded: only exact squares count.
                let [term] = &sum.terms[..] else { return None };
                let exact =
                    |a: f64| term.weight.abs() == 1.0 && a.fract() == 0.0 && a.abs() < 67_108_864.0;
                if term.vector.len() > 1 || !term.vector.values.iter().all(|a| exact(*a)) {
                    return None;
                }
                product = coefficient.to_sparse();
                &product
            }
        };
        let mut entries = Vec::with_capacity(matrix.stored());
        for (i, j, value) in matrix.iter() {
            if i != j || value < 0.0 {
                return None;
            }
            entries.push((i, value));
        }
        parts.push((*block, entries));
    }
    Some(parts)
}

/// Bounds the least eigenvalue of every matrix within the radii of `block` from below.
fn least_eigenvalue_bound(block: &SlackBlock) -> Option<f64> {
    let dominance = diagonal_excess(block);
    if dominance >= 0.0 || block.order > CHOLESKY_ORDER {
        return dominance.is_finite().then_some(dominance);
    }
    let best = verified_cholesky(block).map_or(dominance, |bound| bound.max(dominance));
    best.is_finite().then_some(best)
}

/// Computes `min_i (S_ii - sum_{k != i} |S_ik|)`, rounded down.
fn diagonal_excess(block: &SlackBlock) -> f64 {
    let mut diagonal = vec![0.0f64; block.order];
    let mut others = vec![Accumulator::new(); block.order];
    for entry in &block.entries {
        if entry.row == entry.column {
            diagonal[entry.row] = (entry.value - entry.radius).next_down();
        } else {
            let size = entry.value.abs();
            for i in [entry.row, entry.column] {
                others[i].add(size);
                others[i].add(entry.radius);
            }
        }
    }
    diagonal
        .iter()
        .zip(&others)
        .map(|(excess, others)| {
            (excess - (others.value() + others.error_bound()).next_up()).next_down()
        })
        .fold(f64::INFINITY, f64::min)
}

/// Proves a lower bound of the least eigenvalue by factorisations; none when they all break down.
fn verified_cholesky(block: &SlackBlock) -> Option<f64> {
    let n = block.order;
    let mut matrix = Mat::zeros(n, n);
    let mut radii = vec![0.0f64; n];
    for entry in &block.entries {
        matrix[(entry.column, entry.row)] = entry.value;
        radii[entry.row] += entry.radius;
        if entry.row != entry.column {
            radii[entry.column] += entry.radius;
        }
    }
    let inflate = 1.0 + (n + 8) as f64 * f64::EPSILON;
    let radius = radii.iter().copied().fold(0.0, f64::max) * inflate;
    let least = spectral::least(&matrix).ok()?;
    let largest = (0..n).map(|i| (matrix[(i, i)] - least).abs()).fold(least.abs(), f64::max);
    let mut margin = 4.0 * UNIT_ROUNDOFF * (n as f64).sqrt() * largest + radius + f64::MIN_POSITIVE;
    let mut factor = vec![0.0; n * n];
    for _ in 0..TRIALS {
        let shift = least - margin;
        let mut trace = 0.0;
        let mut rounding = 0.0f64;
        for i in 0..n {
            for j in 0..i {
                factor[i * n + j] = matrix[(i, j)];
            }
            let pivot = matrix[(i, i)] - shift;
            factor[i * n + i] = pivot;
            trace += pivot;
            rounding = rounding.max(UNIT_ROUNDOFF * pivot.abs());
        }
        if runs_to_completion(&mut factor, n) {
            let residual = if n <= RESIDUAL_ORDER {
                residual_norm(&factor, &matrix, shift) * inflate
            } else {
                let g = (n + 2) as f64 * UNIT_ROUNDOFF;
                let underflow = ((n + 2) * (n + 2)) as f64 * 2f64.powi(-1000) * (1.0 + trace);
                g / (1.0 - 3.0 * g) * trace * inflate + underflow
            };
            let loss = (residual + radius + rounding) * (1.0 + 8.0 * f64::EPSILON);
            return Some((shift - loss.next_up()).next_down());
        }
        margin *= 4.0;
    }
    None
}

/// Bounds the largest row sum of `|L L' - (S - shift I)|`, L the lower triangle in `factor`, up to the
/// rounding of the sums over a row.
fn residual_norm(factor: &[f64], matrix: &Mat<f64>, shift: f64) -> f64 {
    let n = matrix.nrows();
    let mut sums = vec![0.0; n];
    for i in 0..n {
        for j in 0..=i {
            let entry = matrix[(i, j)];
            let mut difference = Accumulator::new();
            difference.add(if i == j { shift - entry } else { -entry });
            difference.add_dot(&factor[i * n..=i * n + j], &factor[j * n..=j * n + j]);
            let size = difference.value().abs() + difference.error_bound();
            sums[i] += size;
            if i != j {
                sums[j] += size;
            }
        }
    }
    sums.into_iter().fold(0.0, f64::max)
}

/// Runs the Cholesky factorisation of the lower triangle in `a` (rows one after another, in place) and
/// tells whether every pivot was positive and finite.
fn runs_to_completion(a: &mut [f64], n: usize) -> bool {
    for i in 0..n {
        let (above, from_i) = a.split_at_mut(i * n);
        let row = &mut from_i[..=i];
        for j in 0..i {
            let other = &above[j * n..=j * n + j];
            row[j] = (row[j] - laned_dot(&row[..j], &other[..j])) / other[j];
        }
        let pivot = row[i] - laned_dot(&row[..i], &row[..i]);
        if !(pivot > 0.0 && pivot.is_finite()) {
            return false;
        }
        row[i] = pivot.sqrt();
    }
    true
}

/// Computes a dot product in eight running sums, which compilers turn into vector instructions.
fn laned_dot(x: &[f64], y: &[f64]) -> f64 {
    let mut lanes = [0.0; 8];
    let (x_blocks, y_blocks) = (x.chunks_exact(8), y.chunks_exact(8));
    let rest: f64 = x_blocks.remainder().iter().zip(y_blocks.remainder()).map(|(a, b)| a * b).sum();
    for (a, b) in x_blocks.zip(y_blocks) {
        for k in 0..8 {
            lanes[k] += a[k] * b[k];
        }
    }
    lanes.iter().sum::<f64>() + rest
}
