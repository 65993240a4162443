//! Projections of a symmetric matrix onto the positive semidefinite cone and onto its members of bounded rank.
//!
//! Nearest points in the Frobenius norm: Higham, Linear Algebra Appl. 103:103-118 (1988) for the cone; Eckart and Young,
//! Psychometrika 1:211-218 (1936) for the rank (bibliographic data from memory). All start from an eigendecomposition made before.

use super::dense::{
    Accumulate, axpy_matrix, column, column_mut, copy_into, mirror_lower, syrk_lower,
};
use super::eigen::SymmetricEigen;
use super::workspace::Workspace;
use faer::linalg::{temp_mat_scratch, temp_mat_uninit};
use faer::{Mat, MatMut, MatRef};
use std::ops::Range;

/// Writes into `out` the nearest positive semidefinite matrix of rank at most `rank`: the sum of max(lambda, 0) q q' over the `rank` largest eigenvalues.
///
/// Costs about n^2 k flops, k being the number of positive eigenvalues taken, and returns k. The nearest matrix is unique unless
/// eigenvalues `rank` and `rank + 1` (counted from the largest) are equal and positive. A `rank` above the order counts as the order.
/// Panics when `out` has not the order of `eig` or `eig` holds no vectors.
#[track_caller]
pub fn rank_projection(
    eig: &SymmetricEigen,
    rank: usize,
    out: MatMut<'_, f64>,
    ws: &mut Workspace,
) -> usize {
    let n = eig.order();
    let taken = positive_count(eig).min(rank);
    scaled_sum(eig, n - taken..n, out, ws);
    taken
}

/// Writes into `out` the nearest positive semidefinite matrix to `a`, whose decomposition is `eig`, and returns the number of positive eigenvalues.
///
/// Forms the side with fewer eigenvalues: either the positive part itself, or `a` minus the negative part, so at most n^3/2 flops.
/// In the second case eigenvalues of the result may be as low as about -n 2^-53 ||A||. Reads the lower triangle of `a`.
/// Panics when a shape differs from the order of `eig` or `eig` holds no vectors.
#[track_caller]
pub fn psd_projection(
    eig: &SymmetricEigen,
    a: MatRef<'_, f64>,
    mut out: MatMut<'_, f64>,
    ws: &mut Workspace,
) -> usize {
    let n = eig.order();
    assert!(a.nrows() == n && a.ncols() == n, "matrix {} x {} for order {n}", a.nrows(), a.ncols());
    let (positive, negative) = (positive_count(eig), negative_count(eig));
    if positive <= negative {
        scaled_sum(eig, n - positive..n, out, ws);
    } else {
        scaled_sum(eig, 0..negative, out.as_mut(), ws);
        // out holds |A_-| and becomes A + |A_-|.
        for j in 0..n {
            let from = &column(a, j)[j..];
            super::vector::axpy(1.0, from, &mut column_mut(out.as_mut(), j)[j..]);
        }
        mirror_lower(out);
    }
    positive
}

/// Splits `a` = `positive` - `negative` into its two positive semidefinite parts and returns the number of positive eigenvalues.
///
/// The part of lower rank is formed, the other follows by a subtraction; the identity holds to one rounding per entry.
/// `a` must be symmetric in both triangles. Panics as [`psd_projection`] does.
#[track_caller]
pub fn psd_split(
    eig: &SymmetricEigen,
    a: MatRef<'_, f64>,
    mut positive: MatMut<'_, f64>,
    mut negative: MatMut<'_, f64>,
    ws: &mut Workspace,
) -> usize {
    let n = eig.order();
    let (above, below) = (positive_count(eig), negative_count(eig));
    if above <= below {
        scaled_sum(eig, n - above..n, positive.as_mut(), ws);
        copy_into(positive.as_ref(), negative.as_mut());
        axpy_matrix(-1.0, a, negative);
    } else {
        scaled_sum(eig, 0..below, negative.as_mut(), ws);
        copy_into(negative.as_ref(), positive.as_mut());
        axpy_matrix(1.0, a, positive);
    }
    above
}

/// Returns the n x `rank` factor R whose columns are sqrt(max(lambda, 0)) q for the largest eigenvalues in descending order, so that R R' is the rank projection.
///
/// Panics when `rank` exceeds the order or `eig` holds no vectors.
#[track_caller]
pub fn factor_of_rank(eig: &SymmetricEigen, rank: usize) -> Mat<f64> {
    let mut factor = Mat::zeros(eig.order(), rank);
    factor_of_rank_into(eig, factor.as_mut());
    factor
}

/// Fills `factor` (n x rank) as [`factor_of_rank`] does. Panics when its row number is not the order or it has more columns than rows.
#[track_caller]
pub fn factor_of_rank_into(eig: &SymmetricEigen, mut factor: MatMut<'_, f64>) {
    let (n, rank) = (eig.order(), factor.ncols());
    assert!(factor.nrows() == n && rank <= n, "factor {} x {rank} for order {n}", factor.nrows());
    for k in 0..rank {
        let index = n - 1 - k;
        scaled_column(eig, index, column_mut(factor.as_mut(), k));
    }
}

/// Counts the eigenvalues above 0.
fn positive_count(eig: &SymmetricEigen) -> usize {
    let values = eig.values();
    values.len() - values.partition_point(|&v| v <= 0.0)
}

/// Counts the eigenvalues below 0.
fn negative_count(eig: &SymmetricEigen) -> usize {
    eig.values().partition_point(|&v| v < 0.0)
}

/// Writes sqrt(max(lambda, 0)) q for eigenvalue `index`.
fn scaled_column(eig: &SymmetricEigen, index: usize, out: &mut [f64]) {
    let factor = eig.values()[index].max(0.0).sqrt();
    for (o, q) in out.iter_mut().zip(column(eig.vectors(), index)) {
        *o = factor * q;
    }
}

/// Writes the sum of |lambda| q q' over the eigenvalues in `range`, in both triangles.
#[track_caller]
fn scaled_sum(
    eig: &SymmetricEigen,
    range: Range<usize>,
    mut out: MatMut<'_, f64>,
    ws: &mut Workspace,
) {
    let n = eig.order();
    assert!(
        out.nrows() == n && out.ncols() == n,
        "result {} x {} for order {n}",
        out.nrows(),
        out.ncols()
    );
    if range.is_empty() {
        super::dense::fill(0.0, out);
        return;
    }
    let count = range.len();
    let stack = ws.stack(temp_mat_scratch::<f64>(n, count));
    // SAFETY: every entry of the temporary is written in the loop below before it is read.
    let (mut scaled, _) = unsafe { temp_mat_uninit::<f64, _, _>(n, count, stack) };
    let mut scaled = faer::mat::AsMatMut::as_mat_mut(&mut scaled);
    for (k, index) in range.enumerate() {
        let factor = eig.values()[index].abs().sqrt();
        let to = column_mut(scaled.as_mut(), k);
        for (o, q) in to.iter_mut().zip(column(eig.vectors(), index)) {
            *o = factor * q;
        }
    }
    syrk_lower(out.as_mut(), Accumulate::Replace, 1.0, scaled.as_ref());
    mirror_lower(out);
}
