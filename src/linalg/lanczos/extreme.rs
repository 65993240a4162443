//! Thick-restart Lanczos for one extreme eigenpair of a large symmetric operator.
//!
//! Source: Wu and Simon, SIAM J. Matrix Anal. Appl. 22:602-616 (2000). Every new vector is orthogonalised against the whole basis, the
//! projected matrix is the measured one (not the assumed tridiagonal), and convergence is accepted on a residual computed anew.

use super::deflation::{fill_deflated, remove_components};
use super::{LanczosWorkspace, LinearOperator};
use crate::linalg::dense::{Accumulate, column, gemm, gemv};
use crate::linalg::vector::{axpy, dot, fill_pseudo_random, norm2, normalise, scale};
use faer::diag::DiagMut;
use faer::linalg::evd::{ComputeEigenvectors, self_adjoint_evd, self_adjoint_evd_scratch};
use faer::{Mat, MatMut, MatRef, Par};

/// Least steps before convergence is believed, again for starts near a wrong eigenvector.
const LEAST_STEPS: usize = 8;

/// Steps between two convergence tests.
const TEST_EVERY: usize = 4;

/// Rows of the basis that a restart rewrites at a time, so that it needs no second basis.
const ROW_BLOCK: usize = 256;

/// Settings of an extreme eigenpair run.
#[derive(Clone, Copy, Debug)]
pub struct ExtremeParams<'a> {
    /// Accepts (theta, y) when ||A y - theta y||_2 <= max(tolerance, 4 eps) * max(1, norm), norm being the largest |Ritz value| met.
    pub tolerance: f64,
    /// Most applications of the operator, but for the one that measures the residual at the end.
    pub max_steps: usize,
    /// Most basis vectors held at once, at least 4 (smaller is taken as 4); 40 to 60 suit hard spectra.
    pub basis: usize,
    /// Known vectors (columns, not necessarily orthonormal) to whose orthogonal complement the operator is confined.
    pub deflate: Option<MatRef<'a, f64>>,
    /// Norm of the pseudo-random vector that is added to a given start of norm 1.
    ///
    /// A start at or near a wrong eigenvector hides a lower eigenvalue whose distance times noise / sqrt n is below the residual
    /// allowed. The default 1 is safe; smaller values keep more of a good start.
    pub start_noise: f64,
    /// Number that chooses the pseudo-random parts.
    pub seed: u64,
}

impl Default for ExtremeParams<'_> {
    fn default() -> Self {
        Self {
            tolerance: 1e-8,
            max_steps: 5_000,
            basis: 48,
            deflate: None,
            start_noise: 1.0,
            seed: 0,
        }
    }
}

/// How an extreme eigenpair run ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ExtremeOutcome {
    /// The residual meets the tolerance.
    Converged,
    /// The step limit was reached; the pair is the best one known.
    StepLimit,
    /// The operator gave a number that is not finite, or the small eigenproblem failed; the pair is not usable.
    Failed,
}

/// An approximate extreme eigenpair.
#[derive(Clone, Debug)]
pub struct Extreme {
    /// The Rayleigh quotient of `vector`.
    pub value: f64,
    /// The Ritz vector, of norm 1.
    pub vector: Vec<f64>,
    /// ||A y - theta y||_2, computed anew, within the complement of the deflated vectors; some eigenvalue lies this near `value`.
    pub residual: f64,
    /// The largest |Ritz value| met, a lower estimate of the spectral norm.
    pub norm_estimate: f64,
    /// Applications of the operator.
    pub steps: usize,
    /// How the run ended.
    pub outcome: ExtremeOutcome,
}

/// Computes the smallest eigenvalue of `op` and its vector, starting from `start` (empty, zero or deflated altogether: pseudo-random).
///
/// Memory: (basis + 4) vectors of length n. The number of steps grows with sqrt(spread / gap) at the lower end: a spectrum graded over
/// eight decades is out of reach at tight tolerances unless the basis holds the whole space. Usable from n = 1 on. Panics when `start` is neither empty nor of length n, when the
/// order is 0, when the deflated vectors have another length, or when nothing is left beside them.
#[track_caller]
pub fn smallest_eigenpair<A: LinearOperator + ?Sized>(
    op: &mut A,
    start: &[f64],
    params: &ExtremeParams<'_>,
    ws: &mut LanczosWorkspace,
) -> Extreme {
    let n = op.order();
    assert!(n > 0, "eigenpair of an operator of order 0");
    assert!(start.is_empty() || start.len() == n, "start of length {} for order {n}", start.len());
    let left = n - fill_deflated(params.deflate, n, &mut ws.deflated);
    assert!(left > 0, "the deflated vectors leave nothing of order {n}");
    Run::new(op, params, left, ws).run(start)
}

/// Computes the largest eigenvalue of `op` and its vector; see [`smallest_eigenpair`].
#[track_caller]
pub fn largest_eigenpair<A: LinearOperator + ?Sized>(
    op: &mut A,
    start: &[f64],
    params: &ExtremeParams<'_>,
    ws: &mut LanczosWorkspace,
) -> Extreme {
    let mut extreme = smallest_eigenpair(&mut Negated(op), start, params, ws);
    extreme.value = -extreme.value;
    extreme
}

struct Negated<'a, A: ?Sized>(&'a mut A);

impl<A: LinearOperator + ?Sized> LinearOperator for Negated<'_, A> {
    fn order(&self) -> usize {
        self.0.order()
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        self.0.apply(x, y);
        scale(-1.0, y);
    }
}

/// What a round of expansion ended with.
enum Expansion {
    /// The basis is full; the remainder has this norm and sits behind the basis.
    Full(f64),
    /// The smallest Ritz pair seems to have converged, or the space is complete; the remainder has this norm.
    Candidate(f64),
    /// The step limit was reached.
    Limit,
    /// A number that is not finite appeared.
    Failed,
}

struct Run<'a, 'p, A: ?Sized> {
    op: &'a mut A,
    params: &'a ExtremeParams<'p>,
    ws: &'a mut LanczosWorkspace,
    n: usize,
    /// Dimension of the space that is searched.
    left: usize,
    /// Most basis vectors.
    capacity: usize,
    /// Basis vectors whose images have been taken.
    size: usize,
    steps: usize,
    norm_estimate: f64,
    seed: u64,
    /// Steps before which convergence is not believed.
    believe_from: usize,
}

impl<'a, 'p, A: LinearOperator + ?Sized> Run<'a, 'p, A> {
    fn new(
        op: &'a mut A,
        params: &'a ExtremeParams<'p>,
        left: usize,
        ws: &'a mut LanczosWorkspace,
    ) -> Self {
        let n = op.order();
        let capacity = params.basis.max(4).min(left);
        ws.basis.resize((capacity + 1) * n, 0.0);
        ws.vectors.resize(2 * n, 0.0);
        ws.coefficients.resize(2 * (capacity + 1), 0.0);
        ws.ritz_values.resize(capacity, 0.0);
        if ws.projected.nrows() != capacity {
            ws.projected = Mat::zeros(capacity, capacity);
            ws.ritz_vectors = Mat::zeros(capacity, capacity);
        }
        let believe_from = LEAST_STEPS.min(left);
        Self {
            op,
            params,
            ws,
            n,
            left,
            capacity,
            size: 0,
            steps: 0,
            norm_estimate: 0.0,
            seed: params.seed,
            believe_from,
        }
    }

    fn run(mut self, start: &[f64]) -> Extreme {
        self.place_start(start);
        loop {
            match self.expand() {
                Expansion::Failed => return self.failed(),
                Expansion::Limit => {
                    let (value, residual) = self.ritz_pair();
                    return self.finish(value, residual);
                }
                Expansion::Candidate(remainder) => {
                    let (value, residual) = self.ritz_pair();
                    let complete = self.size == self.left;
                    if complete || residual <= self.limit() || self.steps >= self.params.max_steps {
                        return self.finish(value, residual);
                    }
                    if self.size == self.capacity {
                        self.restart(remainder);
                    }
                }
                Expansion::Full(remainder) => self.restart(remainder),
            }
        }
    }

    fn limit(&self) -> f64 {
        self.params.tolerance.max(4.0 * f64::EPSILON) * self.norm_estimate.max(1.0)
    }

    /// Sets the first basis vector: the given start with the noise asked for, outside the deflated space.
    fn place_start(&mut self, start: &[f64]) {
        let n = self.n;
        self.place_random(0);
        let given = if start.is_empty() { 0.0 } else { norm2(start) };
        if given > 0.0 && given.is_finite() {
            let first = &mut self.ws.basis[..n];
            scale(self.params.start_noise, first);
            axpy(given.recip(), start, first);
            remove_components(&self.ws.deflated, n, &mut self.ws.basis[..n]);
            remove_components(&self.ws.deflated, n, &mut self.ws.basis[..n]);
            if normalise(&mut self.ws.basis[..n]) <= 1e-10 {
                self.place_random(0);
            }
        }
    }

    /// Sets basis vector `index` to a pseudo-random unit vector orthogonal to the earlier and the deflated ones; false when none is left.
    fn place_random(&mut self, index: usize) -> bool {
        let n = self.n;
        for _ in 0..3 {
            self.seed = self.seed.wrapping_add(0x632B_E59B_D9B4_E019);
            let (known, rest) = self.ws.basis.split_at_mut(index * n);
            let new = &mut rest[..n];
            fill_pseudo_random(self.seed, new);
            normalise(new);
            for _ in 0..3 {
                remove_components(&self.ws.deflated, n, new);
                remove_components(known, n, new);
            }
            if norm2(new) > 1e-8 {
                normalise(new);
                remove_components(&self.ws.deflated, n, new);
                remove_components(known, n, new);
                normalise(new);
                return true;
            }
        }
        false
    }

    /// Adds basis vectors until the basis is full, the smallest Ritz pair looks converged, or the step limit.
    fn expand(&mut self) -> Expansion {
        loop {
            let Some(remainder) = self.add_image() else {
                return Expansion::Failed;
            };
            if self.size == self.left {
                return if self.solve_projected() {
                    Expansion::Candidate(0.0)
                } else {
                    Expansion::Failed
                };
            }
            let closed = remainder <= 8.0 * f64::EPSILON * self.norm_estimate || remainder == 0.0;
            if closed {
                // The space is invariant, but eigenvalues may lie outside it: go on in a new direction.
                self.believe_from =
                    self.believe_from.max((self.steps + LEAST_STEPS).min(self.left));
                if !self.place_random(self.size) {
                    return if self.solve_projected() {
                        Expansion::Candidate(0.0)
                    } else {
                        Expansion::Failed
                    };
                }
            }
            let remainder = if closed { 0.0 } else { remainder };
            let full = self.size == self.capacity;
            let limit = self.steps >= self.params.max_steps;
            if full || limit || self.size.is_multiple_of(TEST_EVERY) {
                if !self.solve_projected() {
                    return Expansion::Failed;
                }
                let estimate = remainder * self.ws.ritz_vectors[(self.size - 1, 0)].abs();
                if limit {
                    return Expansion::Limit;
                }
                if self.steps >= self.believe_from && estimate <= self.limit() {
                    return Expansion::Candidate(remainder);
                }
                if full {
                    return Expansion::Full(remainder);
                }
            }
        }
    }

    /// Takes the image of the newest basis vector, records its components, places the normalised remainder behind and returns its norm.
    fn add_image(&mut self) -> Option<f64> {
        let (n, j) = (self.n, self.size);
        let count = j + 1;
        let (known, rest) = self.ws.basis.split_at_mut(count * n);
        let next = &mut rest[..n];
        self.op.apply(&known[j * n..], next);
        self.steps += 1;
        remove_components(&self.ws.deflated, n, next);
        let basis = MatRef::from_column_major_slice(known, n, count);
        let (total, pass) = self.ws.coefficients.split_at_mut(self.capacity + 1);
        let (total, pass) = (&mut total[..count], &mut pass[..count]);
        total.fill(0.0);
        // The two newest vectors carry nearly all of it; without them one pass over the whole basis is usually enough.
        for i in (j.saturating_sub(1)..=j).rev() {
            let vector = &known[i * n..(i + 1) * n];
            total[i] = dot(vector, next);
            axpy(-total[i], vector, next);
        }
        let mut norm = norm2(next);
        for _ in 0..3 {
            let before = norm;
            gemv(pass, Accumulate::Replace, 1.0, basis.transpose(), next);
            gemv(next, Accumulate::Add, -1.0, basis, pass);
            axpy(1.0, pass, total);
            norm = norm2(next);
            if norm > 0.7 * before || norm == 0.0 {
                break;
            }
        }
        // Components along the deflated vectors that rounding brought back would grow.
        remove_components(&self.ws.deflated, n, next);
        for (i, c) in total.iter().enumerate() {
            self.ws.projected[(j, i)] = *c;
        }
        self.norm_estimate = self.norm_estimate.max(total[j].abs());
        self.size = count;
        if !norm.is_finite() {
            return None;
        }
        if norm > 0.0 {
            scale(norm.recip(), next);
        }
        Some(norm)
    }

    /// Decomposes the projected matrix of the current size; false when that fails.
    fn solve_projected(&mut self) -> bool {
        let k = self.size;
        let ws = &mut *self.ws;
        let request = self_adjoint_evd_scratch::<f64>(
            k,
            ComputeEigenvectors::Yes,
            Par::Seq,
            Default::default(),
        );
        let values = &mut ws.ritz_values[..k];
        let outcome = self_adjoint_evd(
            ws.projected.as_ref().submatrix(0, 0, k, k),
            DiagMut::from_slice_mut(values),
            Some(ws.ritz_vectors.as_mut().submatrix_mut(0, 0, k, k)),
            Par::Seq,
            ws.scratch.stack(request),
            Default::default(),
        );
        let finite = values.iter().all(|v| v.is_finite());
        self.norm_estimate = self.norm_estimate.max(values[0].abs()).max(values[k - 1].abs());
        outcome.is_ok() && finite
    }

    /// Forms the smallest Ritz vector and returns its Rayleigh quotient and true residual norm.
    fn ritz_pair(&mut self) -> (f64, f64) {
        let (n, k) = (self.n, self.size);
        let (image, vector) = self.ws.vectors.split_at_mut(n);
        let basis = MatRef::from_column_major_slice(&self.ws.basis[..k * n], n, k);
        let weights = &column(self.ws.ritz_vectors.as_ref(), 0)[..k];
        gemv(vector, Accumulate::Replace, 1.0, basis, weights);
        normalise(vector);
        self.op.apply(vector, image);
        self.steps += 1;
        remove_components(&self.ws.deflated, n, image);
        let value = dot(vector, image);
        axpy(-value, vector, image);
        (value, norm2(image))
    }

    /// Replaces the basis by the Ritz vectors of the smallest values, followed by the remainder.
    fn restart(&mut self, remainder: f64) {
        let (n, k) = (self.n, self.size);
        let keep = (k / 2).max(1);
        let mut block = std::mem::take(&mut self.ws.small);
        block.resize(ROW_BLOCK * keep, 0.0);
        let weights = self.ws.ritz_vectors.as_ref().submatrix(0, 0, k, keep);
        for first in (0..n).step_by(ROW_BLOCK) {
            let rows = ROW_BLOCK.min(n - first);
            let mut basis = MatMut::from_column_major_slice_mut(&mut self.ws.basis[..k * n], n, k);
            let mut product =
                MatMut::from_column_major_slice_mut(&mut block[..rows * keep], rows, keep);
            let part = basis.as_ref().subrows(first, rows);
            gemm(product.as_mut(), Accumulate::Replace, 1.0, part, weights);
            basis.as_mut().subrows_mut(first, rows).subcols_mut(0, keep).copy_from(product);
        }
        self.ws.small = block;
        self.ws.basis.copy_within(k * n..(k + 1) * n, keep * n);
        for j in 0..keep {
            for i in j..keep {
                self.ws.projected[(i, j)] = if i == j { self.ws.ritz_values[j] } else { 0.0 };
            }
        }
        self.size = keep;
        if remainder == 0.0 {
            // After a closed space the direction behind the basis was a random one: take a fresh one, free of the discarded part.
            self.place_random(keep);
        }
    }

    fn finish(self, value: f64, residual: f64) -> Extreme {
        let outcome = if !(value.is_finite() && residual.is_finite()) {
            ExtremeOutcome::Failed
        } else if residual <= self.limit() {
            ExtremeOutcome::Converged
        } else {
            ExtremeOutcome::StepLimit
        };
        Extreme {
            value,
            vector: self.ws.vectors[self.n..2 * self.n].to_vec(),
            residual,
            norm_estimate: self.norm_estimate,
            steps: self.steps,
            outcome,
        }
    }

    fn failed(self) -> Extreme {
        Extreme {
            value: f64::NAN,
            vector: vec![f64::NAN; self.n],
            residual: f64::NAN,
            norm_estimate: self.norm_estimate,
            steps: self.steps,
            outcome: ExtremeOutcome::Failed,
        }
    }
}
