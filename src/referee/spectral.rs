//! Eigenvalues the referee asks for, in plain shapes.

use crate::linalg::eigen::SymmetricEigen;
use faer::Mat;

/// Eigenvalues in descending order; column j of `vectors` belongs to value j.
pub(super) struct Spectrum {
    pub values: Vec<f64>,
    pub vectors: Mat<f64>,
}

/// Decomposes a symmetric matrix given by its lower triangle.
pub(super) fn decompose(matrix: &Mat<f64>) -> Result<Spectrum, String> {
    let n = matrix.nrows();
    let mut eigen = SymmetricEigen::new(n);
    eigen.decompose(matrix.as_ref()).map_err(|error| error.to_string())?;
    let values = eigen.values().iter().rev().copied().collect();
    let ascending = eigen.vectors();
    let vectors = Mat::from_fn(n, n, |i, j| ascending[(i, n - 1 - j)]);
    Ok(Spectrum { values, vectors })
}

/// Computes the least eigenvalue of a symmetric matrix given by its lower triangle.
pub(super) fn least(matrix: &Mat<f64>) -> Result<f64, String> {
    let mut eigen = SymmetricEigen::new(matrix.nrows());
    eigen.decompose_values_only(matrix.as_ref()).map_err(|error| error.to_string())?;
    Ok(eigen.values().first().copied().unwrap_or(0.0))
}
