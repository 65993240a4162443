//! Full eigendecomposition of a dense symmetric matrix, with all memory kept between calls.
//!
//! Backward stable: the computed values are those of a matrix within a modest multiple of n * 2^-53 * ||A|| of the input, so
//! eigenvalues smaller than that are noise. For a few extreme eigenvalues of a large operator use [`super::lanczos`].

use super::dense::column;
use super::workspace::Workspace;
use faer::diag::DiagMut;
use faer::linalg::evd::{
    ComputeEigenvectors, EvdError, self_adjoint_evd, self_adjoint_evd_scratch,
};
use faer::{Mat, MatRef, Par};

/// Flop counts that kernels are charged with, so that budgets and rates use one convention.
pub mod flops {
    /// Counts a full symmetric eigendecomposition of order n as 9 n^3 (common practice).
    pub fn eigen(n: usize) -> u64 {
        9 * cube(n)
    }

    /// Counts eigenvalues alone as 4/3 n^3, the cost of tridiagonalisation (Golub and Van Loan, Matrix Computations, section 8.3).
    pub fn eigenvalues(n: usize) -> u64 {
        4 * cube(n) / 3
    }

    /// Counts a Cholesky factorisation as n^3 / 3.
    pub fn cholesky(n: usize) -> u64 {
        cube(n) / 3
    }

    /// Counts an inverse from a Cholesky factor as 2 n^3 / 3.
    pub fn inverse_from_factor(n: usize) -> u64 {
        2 * cube(n) / 3
    }

    /// Counts an (m x k)(k x n) product as 2 m n k.
    pub fn gemm(m: usize, n: usize, k: usize) -> u64 {
        2 * m as u64 * n as u64 * k as u64
    }

    /// Counts a triangular solve of order n with k right sides as n^2 k.
    pub fn triangular_solve(n: usize, k: usize) -> u64 {
        n as u64 * n as u64 * k as u64
    }

    fn cube(n: usize) -> u64 {
        (n as u64).pow(3)
    }
}

/// Counts a full eigendecomposition of order `n` as 9 n^3 flops.
pub fn flops_full(n: usize) -> u64 {
    flops::eigen(n)
}

/// What can be wrong with the input of an eigendecomposition.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum EigenError {
    /// An entry of the lower triangle is NaN or infinite.
    #[error("entry ({row}, {column}) of the matrix is {value}")]
    NonFinite {
        /// Row, counted from 0.
        row: usize,
        /// Column, counted from 0.
        column: usize,
        /// The offending entry.
        value: f64,
    },
    /// The iteration for the tridiagonal matrix did not converge.
    #[error("the eigenvalue iteration did not converge on a matrix of order {order}")]
    NoConvergence {
        /// Order of the matrix.
        order: usize,
    },
}

/// Eigendecomposition A = Q diag(values) Q' of symmetric matrices of one order, values ascending.
pub struct SymmetricEigen {
    order: usize,
    values: Vec<f64>,
    vectors: Mat<f64>,
    scaled: Mat<f64>,
    workspace: Workspace,
    holds: Holds,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Holds {
    Nothing,
    Values,
    Everything,
}

impl SymmetricEigen {
    /// Creates a decomposition for matrices of order `order`; memory for vectors is taken at the first full decomposition.
    pub fn new(order: usize) -> Self {
        Self {
            order,
            values: vec![0.0; order],
            vectors: Mat::new(),
            scaled: Mat::new(),
            workspace: Workspace::new(),
            holds: Holds::Nothing,
        }
    }

    /// Returns the order of the matrices.
    pub fn order(&self) -> usize {
        self.order
    }

    /// Decomposes `a`, reading its lower triangle only, in about 9 n^3 flops.
    ///
    /// Fails on entries that are not finite and when the iteration does not converge; the earlier content is lost then.
    /// Panics when `a` is not of the order given at creation.
    #[track_caller]
    pub fn decompose(&mut self, a: MatRef<'_, f64>) -> Result<(), EigenError> {
        if self.vectors.nrows() != self.order {
            self.vectors = Mat::zeros(self.order, self.order);
        }
        self.run(a, ComputeEigenvectors::Yes)
    }

    /// Computes the eigenvalues of `a` alone, reading its lower triangle only, in about 4/3 n^3 flops.
    ///
    /// Fails and panics as [`Self::decompose`] does. The vectors of an earlier call are no longer accessible.
    #[track_caller]
    pub fn decompose_values_only(&mut self, a: MatRef<'_, f64>) -> Result<(), EigenError> {
        self.run(a, ComputeEigenvectors::No)
    }

    /// Returns the eigenvalues, ascending. Panics before the first successful decomposition.
    #[track_caller]
    pub fn values(&self) -> &[f64] {
        assert_ne!(self.holds, Holds::Nothing, "values of a matrix that was not decomposed");
        &self.values
    }

    /// Returns the orthonormal eigenvectors, column j belonging to value j. Panics unless the last call was a successful full decomposition.
    #[track_caller]
    pub fn vectors(&self) -> MatRef<'_, f64> {
        assert_eq!(
            self.holds,
            Holds::Everything,
            "vectors of a matrix that was not fully decomposed"
        );
        self.vectors.as_ref()
    }

    #[track_caller]
    fn run(&mut self, a: MatRef<'_, f64>, what: ComputeEigenvectors) -> Result<(), EigenError> {
        let n = self.order;
        assert!(
            a.nrows() == n && a.ncols() == n,
            "matrix {} x {} for order {n}",
            a.nrows(),
            a.ncols()
        );
        self.holds = Holds::Nothing;
        let largest = largest_in_lower(a)?;
        // The iteration squares entries: bring extreme magnitudes to the middle of the range, by a power of two to stay exact.
        let exponent = if largest == 0.0 || (1e-100..=1e100).contains(&largest) {
            0
        } else {
            largest.log2() as i32
        };
        let request = self_adjoint_evd_scratch::<f64>(n, what, Par::Seq, Default::default());
        if exponent != 0 {
            self.fill_scaled(a, exponent);
        }
        let input = if exponent == 0 { a } else { self.scaled.as_ref() };
        let vectors = (what == ComputeEigenvectors::Yes).then(|| self.vectors.as_mut());
        let stack = self.workspace.stack(request);
        let values = DiagMut::from_slice_mut(&mut self.values);
        self_adjoint_evd(input, values, vectors, Par::Seq, stack, Default::default())
            .map_err(|EvdError::NoConvergence| EigenError::NoConvergence { order: n })?;
        if exponent != 0 {
            self.values.iter_mut().for_each(|v| *v = times_power_of_two(*v, exponent));
        }
        self.holds =
            if what == ComputeEigenvectors::Yes { Holds::Everything } else { Holds::Values };
        Ok(())
    }

    fn fill_scaled(&mut self, a: MatRef<'_, f64>, exponent: i32) {
        let n = self.order;
        if self.scaled.nrows() != n {
            self.scaled = Mat::zeros(n, n);
        }
        for j in 0..n {
            for i in j..n {
                self.scaled[(i, j)] = times_power_of_two(a[(i, j)], -exponent);
            }
        }
    }
}

impl std::fmt::Debug for SymmetricEigen {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("SymmetricEigen")
            .field("order", &self.order)
            .field("holds", &self.holds)
            .finish()
    }
}

/// Multiplies by 2^exponent in two steps, as the whole power may lie outside the range of numbers.
pub(super) fn times_power_of_two(value: f64, exponent: i32) -> f64 {
    let half = exponent / 2;
    value * 2f64.powi(half) * 2f64.powi(exponent - half)
}

/// Returns the largest absolute entry of the lower triangle, or the place of an entry that is not finite.
fn largest_in_lower(a: MatRef<'_, f64>) -> Result<f64, EigenError> {
    let mut largest = 0.0f64;
    for j in 0..a.ncols() {
        let part = &column(a, j)[j..];
        let column_largest = super::vector::norm_max(part);
        if !column_largest.is_finite() {
            let offset = part.iter().position(|v| !v.is_finite()).unwrap_or(0);
            return Err(EigenError::NonFinite { row: j + offset, column: j, value: part[offset] });
        }
        largest = largest.max(column_largest);
    }
    Ok(largest)
}
