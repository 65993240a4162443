//! Cholesky factorisation A = L L' of a dense positive definite matrix, and everything that is done with a factor.
//!
//! Factors are read from the lower triangle, so the strict upper triangle may hold anything. There is no pivoting: a matrix that is
//! only semidefinite is reported as not positive definite, or is factored with a tiny pivot when rounding so decides.

use super::dense::{column, mirror_lower};
use super::vector::dot_kernel;
use super::workspace::Workspace;
use faer::linalg::cholesky::llt;
use faer::linalg::triangular_solve::{
    solve_lower_triangular_in_place, solve_upper_triangular_in_place,
};
use faer::{MatMut, MatRef, Par};
use pulp::{Arch, Simd, WithSimd};

/// Tells where a factorisation met a pivot that is not a positive finite number.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error(
    "the matrix of order {order} is not positive definite: pivot {index} is not a positive number"
)]
pub struct NotPositive {
    /// Index of the pivot, counted from 0: the leading minor of order `index` was still positive.
    pub index: usize,
    /// Order of the matrix.
    pub order: usize,
}

/// Replaces the lower triangle of `a` by its Cholesky factor in n^3/3 flops; the strict upper triangle keeps its content.
///
/// Fails when a pivot is not a positive finite number (so also when NaN or infinity is met); `a` is then destroyed.
/// Panics when `a` is not square.
#[track_caller]
pub fn factor_in_place(mut a: MatMut<'_, f64>, ws: &mut Workspace) -> Result<(), NotPositive> {
    let order = a.nrows();
    assert_eq!(order, a.ncols(), "Cholesky factorisation of a matrix that is not square");
    let request =
        llt::factor::cholesky_in_place_scratch::<f64>(order, Par::Seq, Default::default());
    let outcome = llt::factor::cholesky_in_place(
        a.as_mut(),
        Default::default(),
        Par::Seq,
        ws.stack(request),
        Default::default(),
    );
    if let Err(llt::factor::LltError::NonPositivePivot { index }) = outcome {
        return Err(NotPositive { index, order });
    }
    match (0..order).find(|&j| !(a[(j, j)] > 0.0 && a[(j, j)].is_finite())) {
        Some(index) => Err(NotPositive { index, order }),
        None => Ok(()),
    }
}

/// Replaces `rhs` by A^-1 rhs, where A = L L', in 2 n^2 k flops. Panics when the shapes do not fit.
#[track_caller]
pub fn solve_in_place(l: MatRef<'_, f64>, rhs: MatMut<'_, f64>, ws: &mut Workspace) {
    assert_square_with_rows(l, rhs.nrows());
    let request = llt::solve::solve_in_place_scratch::<f64>(l.nrows(), rhs.ncols(), Par::Seq);
    llt::solve::solve_in_place(l, rhs, Par::Seq, ws.stack(request));
}

/// Replaces `x` by A^-1 x, where A = L L'. Panics when the lengths do not fit.
#[track_caller]
pub fn solve_vector(l: MatRef<'_, f64>, x: &mut [f64]) {
    solve_lower_vector(l, x);
    solve_lower_transpose_vector(l, x);
}

/// Replaces `x` by L^-1 x, reading each column of L once. Panics when the lengths do not fit.
#[track_caller]
pub fn solve_lower_vector(l: MatRef<'_, f64>, x: &mut [f64]) {
    assert_square_with_rows(l, x.len());
    Arch::new().dispatch(ForwardSolve { l, x });
}

/// Replaces `x` by L^-T x, reading each column of L once. Panics when the lengths do not fit.
#[track_caller]
pub fn solve_lower_transpose_vector(l: MatRef<'_, f64>, x: &mut [f64]) {
    assert_square_with_rows(l, x.len());
    Arch::new().dispatch(BackwardSolve { l, x });
}

/// Replaces `x` by L x, reading each column of L once. Panics when the lengths do not fit.
#[track_caller]
pub fn multiply_lower_vector(l: MatRef<'_, f64>, x: &mut [f64]) {
    assert_square_with_rows(l, x.len());
    for j in (0..x.len()).rev() {
        let (head, tail) = x.split_at_mut(j + 1);
        super::vector::axpy(head[j], &column(l, j)[j + 1..], tail);
        head[j] *= l[(j, j)];
    }
}

/// Replaces `rhs` by L^-1 rhs in n^2 k flops. Panics when the shapes do not fit.
#[track_caller]
pub fn solve_lower_matrix(l: MatRef<'_, f64>, rhs: MatMut<'_, f64>) {
    assert_square_with_rows(l, rhs.nrows());
    solve_lower_triangular_in_place(l, rhs, Par::Seq);
}

/// Replaces `rhs` by L^-T rhs in n^2 k flops. Panics when the shapes do not fit.
#[track_caller]
pub fn solve_lower_transpose_matrix(l: MatRef<'_, f64>, rhs: MatMut<'_, f64>) {
    assert_square_with_rows(l, rhs.nrows());
    solve_upper_triangular_in_place(l.transpose(), rhs, Par::Seq);
}

/// Writes A^-1, where A = L L', into both triangles of `out`, exactly symmetric, in about 2 n^3/3 flops.
///
/// Panics when the shapes differ.
#[track_caller]
pub fn invert_from_factor(l: MatRef<'_, f64>, mut out: MatMut<'_, f64>, ws: &mut Workspace) {
    assert_square_with_rows(l, out.nrows());
    assert_eq!(out.nrows(), out.ncols(), "inverse written to a matrix that is not square");
    let request = llt::inverse::inverse_scratch::<f64>(l.nrows(), Par::Seq);
    llt::inverse::inverse(out.as_mut(), l, Par::Seq, ws.stack(request));
    mirror_lower(out);
}

/// Computes log det A, where A = L L'. Panics when `l` is not square.
#[track_caller]
pub fn log_determinant(l: MatRef<'_, f64>) -> f64 {
    assert_square_with_rows(l, l.nrows());
    2.0 * (0..l.nrows()).map(|j| l[(j, j)].ln()).sum::<f64>()
}

#[track_caller]
fn assert_square_with_rows(l: MatRef<'_, f64>, rows: usize) {
    assert!(
        l.nrows() == l.ncols() && l.nrows() == rows,
        "factor {} x {} against {rows} rows",
        l.nrows(),
        l.ncols()
    );
}

/// Columns taken together: enough to hide the traffic of the vector behind that of the matrix.
const PANEL: usize = 4;

struct ForwardSolve<'a> {
    l: MatRef<'a, f64>,
    x: &'a mut [f64],
}

impl WithSimd for ForwardSolve<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        let Self { l, x } = self;
        let n = x.len();
        let mut first = 0;
        while first < n {
            let width = PANEL.min(n - first);
            for j in first..first + width {
                let pivot = x[j] / l[(j, j)];
                x[j] = pivot;
                for i in j + 1..first + width {
                    x[i] -= pivot * l[(i, j)];
                }
            }
            let next = first + width;
            if next < n {
                // Only the last panel may be narrower, and nothing lies below it.
                let columns = std::array::from_fn(|k| &column(l, first + k)[next..]);
                let (solved, below) = x.split_at_mut(next);
                subtract_panel(simd, columns, &solved[first..], below);
            }
            first = next;
        }
    }
}

struct BackwardSolve<'a> {
    l: MatRef<'a, f64>,
    x: &'a mut [f64],
}

impl WithSimd for BackwardSolve<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        let Self { l, x } = self;
        let n = x.len();
        let mut next = n;
        while next > 0 {
            let width = if next.is_multiple_of(PANEL) { PANEL } else { next % PANEL };
            let first = next - width;
            let (above, below) = x.split_at_mut(next);
            if width == PANEL {
                let columns = std::array::from_fn(|k| &column(l, first + k)[next..]);
                let products = dot_panel(simd, columns, below);
                for k in 0..PANEL {
                    above[first + k] -= products[k];
                }
            } else {
                for j in first..next {
                    above[j] -= dot_kernel(simd, &column(l, j)[next..], below);
                }
            }
            for j in (first..next).rev() {
                for i in j + 1..next {
                    above[j] -= l[(i, j)] * above[i];
                }
                above[j] /= l[(j, j)];
            }
            next = first;
        }
    }
}

/// Subtracts the sum of `factors[k] * columns[k]` from `y`.
#[inline(always)]
fn subtract_panel<S: Simd>(simd: S, columns: [&[f64]; PANEL], factors: &[f64], y: &mut [f64]) {
    let [f0, f1, f2, f3] = std::array::from_fn(|k| simd.splat_f64s(-factors[k]));
    let [(c0, t0), (c1, t1), (c2, t2), (c3, t3)] = columns.map(S::as_simd_f64s);
    let (vectors, tail) = S::as_mut_simd_f64s(y);
    let step = |a, b, c, d, y| {
        let y = simd.mul_add_e_f64s(f0, a, y);
        let y = simd.mul_add_e_f64s(f1, b, y);
        let y = simd.mul_add_e_f64s(f2, c, y);
        simd.mul_add_e_f64s(f3, d, y)
    };
    for ((((y, a), b), c), d) in vectors.iter_mut().zip(c0).zip(c1).zip(c2).zip(c3) {
        *y = step(*a, *b, *c, *d, *y);
    }
    if !tail.is_empty() {
        let [a, b, c, d] = [t0, t1, t2, t3].map(|t| simd.partial_load_f64s(t));
        let result = step(a, b, c, d, simd.partial_load_f64s(tail));
        simd.partial_store_f64s(tail, result);
    }
}

/// Computes the inner products of four columns with `y`.
#[inline(always)]
fn dot_panel<S: Simd>(simd: S, columns: [&[f64]; PANEL], y: &[f64]) -> [f64; PANEL] {
    let [(c0, t0), (c1, t1), (c2, t2), (c3, t3)] = columns.map(S::as_simd_f64s);
    let (vectors, tail) = S::as_simd_f64s(y);
    let zero = simd.splat_f64s(0.0);
    let (mut s0, mut s1, mut s2, mut s3) = (zero, zero, zero, zero);
    for ((((y, a), b), c), d) in vectors.iter().zip(c0).zip(c1).zip(c2).zip(c3) {
        s0 = simd.mul_add_e_f64s(*a, *y, s0);
        s1 = simd.mul_add_e_f64s(*b, *y, s1);
        s2 = simd.mul_add_e_f64s(*c, *y, s2);
        s3 = simd.mul_add_e_f64s(*d, *y, s3);
    }
    if !tail.is_empty() {
        let y = simd.partial_load_f64s(tail);
        s0 = simd.mul_add_e_f64s(simd.partial_load_f64s(t0), y, s0);
        s1 = simd.mul_add_e_f64s(simd.partial_load_f64s(t1), y, s1);
        s2 = simd.mul_add_e_f64s(simd.partial_load_f64s(t2), y, s2);
        s3 = simd.mul_add_e_f64s(simd.partial_load_f64s(t3), y, s3);
    }
    [s0, s1, s2, s3].map(|s| simd.reduce_sum_f64s(s))
}
