//! Products, triangle handling and elementwise operations on dense column-major matrices.
//!
//! Thin, allocation-free covers of the single-threaded `faer` kernels, with shapes checked by panics that name the caller.

use super::vector;
use faer::linalg::matmul::{self, triangular, triangular::BlockStructure};
use faer::{Accum, MatMut, MatRef, Par};

pub use super::norms::frobenius;

/// Edge of the square tiles in which triangles are mirrored: two tiles of 32 by 32 stay in the first-level cache.
const TILE: usize = 32;

/// What a product does with the old content of its destination.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Accumulate {
    /// Overwrites it.
    Replace,
    /// Adds to it.
    Add,
}

impl From<Accumulate> for Accum {
    fn from(value: Accumulate) -> Self {
        match value {
            Accumulate::Replace => Accum::Replace,
            Accumulate::Add => Accum::Add,
        }
    }
}

/// Returns column `j` of `a` as a slice.
///
/// Panics when the rows of `a` are not contiguous in memory, which no owned matrix and no sub-matrix of one is.
#[inline]
#[track_caller]
pub fn column<'a>(a: MatRef<'a, f64>, j: usize) -> &'a [f64] {
    a.col(j).try_as_col_major().expect("column: rows are not contiguous").as_slice()
}

/// Returns column `j` of `a` as a mutable slice.
///
/// Panics when the rows of `a` are not contiguous in memory, which no owned matrix and no sub-matrix of one is.
#[inline]
#[track_caller]
pub fn column_mut<'a>(a: MatMut<'a, f64>, j: usize) -> &'a mut [f64] {
    a.col_mut(j).try_as_col_major_mut().expect("column_mut: rows are not contiguous").as_slice_mut()
}

/// Computes `dst = alpha a b` or `dst += alpha a b` in 2mnk flops.
///
/// Panics unless `dst` is m x n, `a` is m x k and `b` is k x n. Transposed views are as good as plain ones.
#[track_caller]
pub fn gemm(
    dst: MatMut<'_, f64>,
    beta: Accumulate,
    alpha: f64,
    a: MatRef<'_, f64>,
    b: MatRef<'_, f64>,
) {
    assert!(
        dst.nrows() == a.nrows() && dst.ncols() == b.ncols() && a.ncols() == b.nrows(),
        "gemm: ({} x {}) from ({} x {})({} x {})",
        dst.nrows(),
        dst.ncols(),
        a.nrows(),
        a.ncols(),
        b.nrows(),
        b.ncols()
    );
    matmul::matmul(dst, beta.into(), a, b, alpha, Par::Seq);
}

/// Computes `dst = alpha a x` or `dst += alpha a x` for a vector `x`.
///
/// Panics unless the lengths of `dst` and `x` are the row and column numbers of `a`.
#[track_caller]
pub fn gemv(dst: &mut [f64], beta: Accumulate, alpha: f64, a: MatRef<'_, f64>, x: &[f64]) {
    let (rows, columns) = (dst.len(), x.len());
    gemm(
        MatMut::from_column_major_slice_mut(dst, rows, 1),
        beta,
        alpha,
        a,
        MatRef::from_column_major_slice(x, columns, 1),
    );
}

/// Computes the lower triangle of `dst = alpha a a'` or `dst += alpha a a'` in about n^2 k flops; the strict upper triangle is not touched.
///
/// Panics unless `dst` is n x n and `a` has n rows.
#[track_caller]
pub fn syrk_lower(dst: MatMut<'_, f64>, beta: Accumulate, alpha: f64, a: MatRef<'_, f64>) {
    product_lower(dst, beta, alpha, a, a.transpose());
}

/// Computes the lower triangle of `dst = alpha a b` or `dst += alpha a b`, for products known to be symmetric, in about n^2 k flops.
///
/// Panics unless `dst` is n x n, `a` is n x k and `b` is k x n.
#[track_caller]
pub fn product_lower(
    dst: MatMut<'_, f64>,
    beta: Accumulate,
    alpha: f64,
    a: MatRef<'_, f64>,
    b: MatRef<'_, f64>,
) {
    assert!(
        dst.nrows() == dst.ncols()
            && dst.nrows() == a.nrows()
            && dst.ncols() == b.ncols()
            && a.ncols() == b.nrows(),
        "product_lower: ({} x {}) from ({} x {})({} x {})",
        dst.nrows(),
        dst.ncols(),
        a.nrows(),
        a.ncols(),
        b.nrows(),
        b.ncols()
    );
    triangular::matmul(
        dst,
        BlockStructure::TriangularLower,
        beta.into(),
        a,
        BlockStructure::Rectangular,
        b,
        BlockStructure::Rectangular,
        alpha,
        Par::Seq,
    );
}

/// Copies the strict lower triangle of `m` onto the strict upper one. Panics when `m` is not square.
#[track_caller]
pub fn mirror_lower(m: MatMut<'_, f64>) {
    for_each_pair(m, |lower, upper| *upper = *lower);
}

/// Replaces `m` by (m + m')/2, exactly symmetric afterwards. Panics when `m` is not square.
#[track_caller]
pub fn symmetrise(m: MatMut<'_, f64>) {
    for_each_pair(m, |lower, upper| {
        let mean = 0.5 * (*lower + *upper);
        *lower = mean;
        *upper = mean;
    });
}

/// Applies `visit` to (m_ij, m_ji) for all i > j, tile by tile.
#[track_caller]
fn for_each_pair(mut m: MatMut<'_, f64>, visit: impl Fn(&mut f64, &mut f64)) {
    assert_eq!(m.nrows(), m.ncols(), "triangles of a matrix that is not square");
    let n = m.nrows();
    for first_column in (0..n).step_by(TILE) {
        let last_column = (first_column + TILE).min(n);
        for first_row in (first_column..n).step_by(TILE) {
            let last_row = (first_row + TILE).min(n);
            for j in first_column..last_column {
                for i in first_row.max(j + 1)..last_row {
                    let (mut lower, mut upper) = (m[(i, j)], m[(j, i)]);
                    visit(&mut lower, &mut upper);
                    m[(i, j)] = lower;
                    m[(j, i)] = upper;
                }
            }
        }
    }
}

/// Computes the Frobenius inner product of two matrices of equal shape, sum over all entries of a_ij b_ij.
///
/// Panics when the shapes differ.
#[track_caller]
pub fn dot_symmetric(a: MatRef<'_, f64>, b: MatRef<'_, f64>) -> f64 {
    assert_same_shape(a, b);
    (0..a.ncols()).map(|j| vector::dot(column(a, j), column(b, j))).sum()
}

/// Adds `alpha * x` to `y`. Panics when the shapes differ.
#[track_caller]
pub fn axpy_matrix(alpha: f64, x: MatRef<'_, f64>, mut y: MatMut<'_, f64>) {
    assert_same_shape(x, y.as_ref());
    for j in 0..x.ncols() {
        vector::axpy(alpha, column(x, j), column_mut(y.as_mut(), j));
    }
}

/// Multiplies `a` by `alpha`.
pub fn scale(alpha: f64, mut a: MatMut<'_, f64>) {
    for j in 0..a.ncols() {
        vector::scale(alpha, column_mut(a.as_mut(), j));
    }
}

/// Copies `from` into `to`. Panics when the shapes differ.
#[track_caller]
pub fn copy_into(from: MatRef<'_, f64>, mut to: MatMut<'_, f64>) {
    assert_same_shape(from, to.as_ref());
    for j in 0..from.ncols() {
        column_mut(to.as_mut(), j).copy_from_slice(column(from, j));
    }
}

/// Sets every entry of `a` to `value`.
pub fn fill(value: f64, mut a: MatMut<'_, f64>) {
    for j in 0..a.ncols() {
        column_mut(a.as_mut(), j).fill(value);
    }
}

#[track_caller]
fn assert_same_shape(a: MatRef<'_, f64>, b: MatRef<'_, f64>) {
    assert!(
        a.nrows() == b.nrows() && a.ncols() == b.ncols(),
        "matrices of different shape: {} x {} and {} x {}",
        a.nrows(),
        a.ncols(),
        b.nrows(),
        b.ncols()
    );
}
