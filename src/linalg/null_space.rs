//! Null spaces, numerical ranks and least squares of dense rectangular matrices, by singular values.
//!
//! Direct methods for matrices that fit in memory, at a cost of the order m k min(m, k). They allocate; they are not for inner loops.

use super::dense::{Accumulate, column, column_mut, fill, gemm};
use super::eigen::times_power_of_two;
use super::norms::max_abs;
use super::workspace::Workspace;
use faer::diag::DiagMut;
use faer::linalg::qr::col_pivoting::factor as pivoted;
use faer::linalg::qr::no_pivoting::factor::recommended_block_size;
use faer::linalg::svd::{ComputeSvdVectors, SvdError, svd, svd_scratch};
use faer::{Mat, MatRef, Par};

/// What can be wrong with the input of a singular value decomposition.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum NullSpaceError {
    /// An entry is NaN or infinite.
    #[error("entry ({row}, {column}) of the matrix is {value}")]
    NonFinite {
        /// Row, counted from 0.
        row: usize,
        /// Column, counted from 0.
        column: usize,
        /// The offending entry.
        value: f64,
    },
    /// The iteration for the singular values did not converge.
    #[error("the singular value iteration did not converge on a matrix {rows} x {columns}")]
    NoConvergence {
        /// Number of rows.
        rows: usize,
        /// Number of columns.
        columns: usize,
    },
}

/// A null space and the singular values that decided it.
#[derive(Clone, Debug)]
pub struct NullSpace {
    /// k x d matrix with orthonormal columns that span the numerical null space, those of the smallest singular values last.
    pub basis: Mat<f64>,
    /// The min(m, k) singular values, descending.
    pub singular_values: Vec<f64>,
}

/// A least squares solution of smallest norm.
#[derive(Clone, Debug)]
pub struct LeastSquares {
    /// k x p matrix of solutions.
    pub solution: Mat<f64>,
    /// Number of singular values taken as non-zero.
    pub rank: usize,
    /// The min(m, k) singular values, descending.
    pub singular_values: Vec<f64>,
}

/// Computes an orthonormal basis of the vectors z with A z = 0, where singular values sigma_i <= `tau` * sigma_max count as zero.
///
/// A matrix with more rows than columns is first reduced to its triangular factor by QR with column pivoting. Without rows, or when
/// all entries are zero, the null space is everything. Fails on entries that are not finite. Panics when `tau` is negative or NaN.
#[track_caller]
pub fn null_space(a: MatRef<'_, f64>, tau: f64) -> Result<NullSpace, NullSpaceError> {
    assert!(tau >= 0.0, "null_space: threshold {tau}");
    check_finite(a)?;
    let (m, k) = (a.nrows(), a.ncols());
    if m == 0 || k == 0 {
        return Ok(NullSpace { basis: Mat::identity(k, k), singular_values: Vec::new() });
    }
    if max_abs(a) == 0.0 {
        return Ok(NullSpace { basis: Mat::identity(k, k), singular_values: vec![0.0; m.min(k)] });
    }
    let mut ws = Workspace::new();
    let (reduced, order) =
        if m > k { pivoted_triangle(a, &mut ws) } else { (a.to_owned(), (0..k).collect()) };
    let mut values = vec![0.0; m.min(k)];
    let mut right = Mat::zeros(k, k);
    decompose(reduced.as_ref(), &mut values, Vectors::Right(&mut right), &mut ws)?;
    let rank = rank_of(&values, tau);
    let mut basis = Mat::zeros(k, k - rank);
    for j in rank..k {
        // Row i of the reduced problem is unknown order[i] of the given one.
        for i in 0..k {
            basis[(order[i], j - rank)] = right[(i, j)];
        }
    }
    Ok(NullSpace { basis, singular_values: values })
}

/// Counts the singular values with sigma_i > `tau` * sigma_max. Fails and panics as [`null_space`] does.
#[track_caller]
pub fn numerical_rank(a: MatRef<'_, f64>, tau: f64) -> Result<usize, NullSpaceError> {
    assert!(tau >= 0.0, "numerical_rank: threshold {tau}");
    Ok(rank_of(&singular_values(a)?, tau))
}

/// Computes the min(m, k) singular values, descending. Fails on entries that are not finite.
pub fn singular_values(a: MatRef<'_, f64>) -> Result<Vec<f64>, NullSpaceError> {
    check_finite(a)?;
    let mut values = vec![0.0; a.nrows().min(a.ncols())];
    if !values.is_empty() {
        decompose(a, &mut values, Vectors::Neither, &mut Workspace::new())?;
    }
    Ok(values)
}

/// Minimises ||A x - b||_2 for every column b of `b` and, among the minimisers, ||x||_2; singular values <= `tau` * sigma_max count as zero.
///
/// Fails on entries of A that are not finite. Panics when the row numbers differ or `tau` is negative or NaN.
#[track_caller]
pub fn least_squares(
    a: MatRef<'_, f64>,
    b: MatRef<'_, f64>,
    tau: f64,
) -> Result<LeastSquares, NullSpaceError> {
    assert!(tau >= 0.0, "least_squares: threshold {tau}");
    assert_eq!(a.nrows(), b.nrows(), "least_squares: row numbers of matrix and right side");
    check_finite(a)?;
    let (m, k) = (a.nrows(), a.ncols());
    let size = m.min(k);
    let mut solution = Mat::zeros(k, b.ncols());
    if size == 0 {
        return Ok(LeastSquares { solution, rank: 0, singular_values: Vec::new() });
    }
    let mut values = vec![0.0; size];
    let (mut left, mut right) = (Mat::zeros(m, size), Mat::zeros(k, size));
    decompose(a, &mut values, Vectors::Thin(&mut left, &mut right), &mut Workspace::new())?;
    let rank = rank_of(&values, tau);
    let mut coefficients = Mat::<f64>::zeros(rank, b.ncols());
    gemm(
        coefficients.as_mut(),
        Accumulate::Replace,
        1.0,
        left.as_ref().subcols(0, rank).transpose(),
        b,
    );
    for j in 0..b.ncols() {
        for i in 0..rank {
            coefficients[(i, j)] /= values[i];
        }
    }
    gemm(
        solution.as_mut(),
        Accumulate::Replace,
        1.0,
        right.as_ref().subcols(0, rank),
        coefficients.as_ref(),
    );
    Ok(LeastSquares { solution, rank, singular_values: values })
}

/// Counts the values above `tau` times the first, none when all are zero.
fn rank_of(values: &[f64], tau: f64) -> usize {
    match values.first() {
        Some(&largest) if largest > 0.0 => {
            values.iter().take_while(|&&v| v > tau * largest).count()
        }
        _ => 0,
    }
}

/// Returns the k x k triangular factor of A P = Q R and the permutation: column i of R belongs to column `order[i]` of A.
fn pivoted_triangle(a: MatRef<'_, f64>, ws: &mut Workspace) -> (Mat<f64>, Vec<usize>) {
    let (m, k) = (a.nrows(), a.ncols());
    let block = recommended_block_size::<f64>(m, k);
    let mut qr = a.to_owned();
    let mut coefficients = Mat::<f64>::zeros(block, k);
    let (mut forward, mut backward) = (vec![0usize; k], vec![0usize; k]);
    let request =
        pivoted::qr_in_place_scratch::<usize, f64>(m, k, block, Par::Seq, Default::default());
    pivoted::qr_in_place(
        qr.as_mut(),
        coefficients.as_mut(),
        &mut forward,
        &mut backward,
        Par::Seq,
        ws.stack(request),
        Default::default(),
    );
    let mut triangle = Mat::zeros(k, k);
    for j in 0..k {
        column_mut(triangle.as_mut(), j)[..=j].copy_from_slice(&column(qr.as_ref(), j)[..=j]);
    }
    (triangle, forward)
}

/// Which singular vectors to compute, and where.
enum Vectors<'a> {
    Neither,
    Right(&'a mut Mat<f64>),
    Thin(&'a mut Mat<f64>, &'a mut Mat<f64>),
}

/// Computes singular values and vectors, with the scaling that the iteration needs: it fails on zeros, and squares may leave the range.
fn decompose(
    a: MatRef<'_, f64>,
    values: &mut [f64],
    vectors: Vectors<'_>,
    ws: &mut Workspace,
) -> Result<(), NullSpaceError> {
    let (m, k) = (a.nrows(), a.ncols());
    let (compute_left, compute_right, mut left, mut right) = match vectors {
        Vectors::Neither => (ComputeSvdVectors::No, ComputeSvdVectors::No, None, None),
        Vectors::Right(v) => {
            (ComputeSvdVectors::No, ComputeSvdVectors::Full, None, Some(v.as_mut()))
        }
        Vectors::Thin(u, v) => {
            (ComputeSvdVectors::Thin, ComputeSvdVectors::Thin, Some(u.as_mut()), Some(v.as_mut()))
        }
    };
    let largest = max_abs(a);
    if largest == 0.0 {
        values.fill(0.0);
        for vectors in [left.as_mut(), right.as_mut()].into_iter().flatten() {
            let mut vectors = vectors.as_mut();
            fill(0.0, vectors.as_mut());
            for j in 0..vectors.ncols() {
                vectors[(j, j)] = 1.0;
            }
        }
        return Ok(());
    }
    let exponent = if (1e-100..=1e100).contains(&largest) { 0 } else { largest.log2() as i32 };
    let scaled;
    let input = if exponent == 0 {
        a
    } else {
        scaled = Mat::from_fn(m, k, |i, j| times_power_of_two(a[(i, j)], -exponent));
        scaled.as_ref()
    };
    let request =
        svd_scratch::<f64>(m, k, compute_left, compute_right, Par::Seq, Default::default());
    let stack = ws.stack(request);
    svd(input, DiagMut::from_slice_mut(values), left, right, Par::Seq, stack, Default::default())
        .map_err(|SvdError::NoConvergence| NullSpaceError::NoConvergence { rows: m, columns: k })?;
    if exponent != 0 {
        values.iter_mut().for_each(|v| *v = times_power_of_two(*v, exponent));
    }
    Ok(())
}

fn check_finite(a: MatRef<'_, f64>) -> Result<(), NullSpaceError> {
    for j in 0..a.ncols() {
        let entries = column(a, j);
        if let Some(row) = entries.iter().position(|v| !v.is_finite()) {
            return Err(NullSpaceError::NonFinite { row, column: j, value: entries[row] });
        }
    }
    Ok(())
}
