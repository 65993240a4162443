//! Plain norms of dense matrices and vectors, as an independent checker needs them.
//!
//! Sums are not compensated: relative errors are of the order of (number of entries) * 2^-53. A NaN in the data gives NaN.

use super::dense::column;
use super::vector;
use faer::MatRef;

/// Computes the Frobenius norm of `a` (all entries), without overflow or harmful underflow.
pub fn frobenius(a: MatRef<'_, f64>) -> f64 {
    let squared: f64 = (0..a.ncols()).map(|j| vector::norm2_squared(column(a, j))).sum();
    if (1e-280..=f64::MAX).contains(&squared) || squared.is_nan() {
        return squared.sqrt();
    }
    let largest = max_abs(a);
    if largest == 0.0 || !largest.is_finite() {
        return largest;
    }
    let sum: f64 = (0..a.ncols()).map(|j| (vector::norm2(column(a, j)) / largest).powi(2)).sum();
    largest * sum.sqrt()
}

/// Computes the largest absolute entry of `a`, 0 for an empty matrix.
pub fn max_abs(a: MatRef<'_, f64>) -> f64 {
    (0..a.ncols()).map(|j| vector::norm_max(column(a, j))).fold(0.0, larger)
}

/// Computes the largest absolute column sum of `a`, an upper bound of the spectral norm when `a` is symmetric.
pub fn one_norm(a: MatRef<'_, f64>) -> f64 {
    (0..a.ncols()).map(|j| vector::norm1(column(a, j))).fold(0.0, larger)
}

/// Computes the Euclidean norm of a vector.
pub fn euclidean(x: &[f64]) -> f64 {
    vector::norm2(x)
}

/// Computes the largest absolute entry of a vector, 0 when it is empty.
pub fn max_abs_slice(x: &[f64]) -> f64 {
    vector::norm_max(x)
}

/// Computes the sum of absolute entries of a vector.
pub fn one_norm_slice(x: &[f64]) -> f64 {
    vector::norm1(x)
}

/// Returns the larger value, NaN when one of them is NaN.
fn larger(a: f64, b: f64) -> f64 {
    if b > a || b.is_nan() { b } else { a }
}
