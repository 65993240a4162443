//! Krylov methods for extreme eigenvalues of symmetric operators that are known only by their action on a vector.
//!
//! [`step_bound`] gives a safe bound of the largest eigenvalue in few steps, for step lengths of interior-point methods.
//! [`smallest_eigenpair`] and [`largest_eigenpair`] iterate to a residual tolerance with thick restarts. Neither proves that no
//! eigenvalue lies beyond the one found: a Krylov space sees only what its start vector contains.

mod deflation;
mod extreme;
mod step;
mod tridiagonal;

pub use extreme::{Extreme, ExtremeOutcome, ExtremeParams, largest_eigenpair, smallest_eigenpair};
pub use step::{StepBound, StepParams, step_bound};

use super::workspace::Workspace;
use faer::Mat;

/// A symmetric linear map on vectors of length `order`.
pub trait LinearOperator {
    /// Returns the length of the vectors.
    fn order(&self) -> usize;

    /// Writes the image of `x` into `y`, both of length `order`; the old content of `y` is arbitrary.
    fn apply(&mut self, x: &[f64], y: &mut [f64]);
}

impl<T: LinearOperator + ?Sized> LinearOperator for &mut T {
    fn order(&self) -> usize {
        (**self).order()
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        (**self).apply(x, y);
    }
}

/// A dense symmetric matrix as an operator; both triangles are read.
#[derive(Clone, Copy, Debug)]
pub struct DenseOperator<'a> {
    /// The matrix.
    pub matrix: faer::MatRef<'a, f64>,
}

impl LinearOperator for DenseOperator<'_> {
    fn order(&self) -> usize {
        self.matrix.nrows()
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        super::dense::gemv(y, super::dense::Accumulate::Replace, 1.0, self.matrix, x);
    }
}

/// Memory of the Krylov methods, kept between runs.
#[derive(Debug)]
pub struct LanczosWorkspace {
    /// Basis vectors one after another.
    basis: Vec<f64>,
    /// Known vectors to stay away from, orthonormalised, one after another.
    deflated: Vec<f64>,
    /// Current image and Ritz vector, one after another.
    vectors: Vec<f64>,
    /// Coefficients of one orthogonalisation.
    coefficients: Vec<f64>,
    /// Diagonals and work of the tridiagonal method.
    small: Vec<f64>,
    /// Projected matrix of the restarted method, and its eigenvectors.
    projected: Mat<f64>,
    ritz_vectors: Mat<f64>,
    ritz_values: Vec<f64>,
    scratch: Workspace,
}

impl LanczosWorkspace {
    /// Creates an empty workspace; the first run allocates.
    pub fn new() -> Self {
        Self {
            basis: Vec::new(),
            deflated: Vec::new(),
            vectors: Vec::new(),
            coefficients: Vec::new(),
            small: Vec::new(),
            projected: Mat::new(),
            ritz_vectors: Mat::new(),
            ritz_values: Vec::new(),
            scratch: Workspace::new(),
        }
    }
}

impl Default for LanczosWorkspace {
    fn default() -> Self {
        Self::new()
    }
}
