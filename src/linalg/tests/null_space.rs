//! Null spaces, ranks and least squares.

use super::*;
use crate::linalg::null_space::*;

const SHAPES: [(usize, usize); 9] =
    [(1, 1), (1, 5), (5, 1), (3, 2), (17, 17), (50, 17), (17, 50), (120, 30), (400, 9)];

/// A matrix with the given singular values (zero beyond them).
fn with_singular_values(rows: usize, columns: usize, values: &[f64], seed: u64) -> Mat<f64> {
    let left = random_orthonormal(rows, values.len(), seed);
    let right = random_orthonormal(columns, values.len(), seed + 1);
    let scaled = Mat::from_fn(rows, values.len(), |i, j| left[(i, j)] * values[j]);
    product(scaled.as_ref(), right.transpose())
}

#[test]
fn null_spaces_have_the_planted_dimension_and_are_annihilated() {
    for (m, k) in SHAPES {
        let size = m.min(k);
        for rank in [0, 1, size / 2, size] {
            let values: Vec<f64> = (0..rank.min(size)).map(|i| 3.0 / (1 + i) as f64).collect();
            let a = with_singular_values(m, k, &values, (m + k) as u64);
            let found = null_space(a.as_ref(), 1e-10).unwrap();
            let what = format!("{m} x {k} of rank {rank}");
            assert_eq!(found.basis.nrows(), k, "{what}");
            assert_eq!(found.basis.ncols(), k - values.len(), "{what}");
            assert_eq!(numerical_rank(a.as_ref(), 1e-10).unwrap(), values.len(), "{what}");
            assert_ratio(orthogonality_defect(found.basis.as_ref()), m.max(k), 1.0, &what);
            let norm = frobenius(a.as_ref());
            let image = product(a.as_ref(), found.basis.as_ref());
            assert_ratio(frobenius(image.as_ref()), m.max(k), norm, &what);
            assert!(found.singular_values.is_sorted_by(|x, y| x >= y), "{what}");
            for (i, s) in found.singular_values.iter().enumerate() {
                let planted = values.get(i).copied().unwrap_or(0.0);
                assert_ratio((s - planted).abs(), m.max(k), norm, &what);
            }
            for (x, y) in singular_values(a.as_ref()).unwrap().iter().zip(&found.singular_values) {
                assert_ratio((x - y).abs(), m.max(k), norm, &what);
            }
        }
    }
}

#[test]
fn the_threshold_is_relative_and_inclusive() {
    for (m, k) in [(40, 6), (6, 6), (6, 9)] {
        for factor in [1e-290, 1e-150, 1.0, 1e150, 1e300] {
            let values: Vec<f64> = [1.0, 1e-2, 1e-5, 1e-8].iter().map(|v| factor * v).collect();
            let a = with_singular_values(m, k, &values, 3);
            for (tau, rank) in [(0.5, 1), (1e-3, 2), (1e-6, 3), (1e-10, 4)] {
                assert_eq!(
                    null_space(a.as_ref(), tau).unwrap().basis.ncols(),
                    k - rank,
                    "{m} x {k} by {factor:e}, {tau:e}"
                );
            }
        }
    }
    // sigma_2 = tau sigma_1 exactly counts as zero.
    let a = Mat::from_fn(2, 2, |i, j| if i == j { [1.0, 0.5][i] } else { 0.0 });
    assert_eq!(null_space(a.as_ref(), 0.5).unwrap().basis.ncols(), 1);
    assert_eq!(null_space(a.as_ref(), 0.49).unwrap().basis.ncols(), 0);
}

#[test]
fn empty_and_zero_matrices_annihilate_everything() {
    for a in [Mat::<f64>::zeros(0, 4), Mat::zeros(3, 4), Mat::zeros(9, 4)] {
        let found = null_space(a.as_ref(), 1e-9).unwrap();
        assert_eq!((found.basis.nrows(), found.basis.ncols()), (4, 4));
        assert_ratio(orthogonality_defect(found.basis.as_ref()), 4, 1.0, "everything");
    }
    assert_eq!(null_space(Mat::zeros(3, 0).as_ref(), 0.0).unwrap().basis.ncols(), 0);
}

#[test]
fn entries_that_are_not_finite_are_located() {
    let mut a = random(5, 3, 1);
    a[(4, 2)] = f64::INFINITY;
    let error = null_space(a.as_ref(), 1e-9).unwrap_err();
    assert_eq!(error, NullSpaceError::NonFinite { row: 4, column: 2, value: f64::INFINITY });
    assert!(least_squares(a.as_ref(), Mat::zeros(5, 1).as_ref(), 1e-9).is_err());
    assert!(numerical_rank(a.as_ref(), 1e-9).is_err());
}

#[test]
fn least_squares_solutions_satisfy_the_normal_equations_with_least_norm() {
    for (m, k) in SHAPES {
        let size = m.min(k);
        for rank in [0, 1, size / 2, size] {
            let values: Vec<f64> =
                (0..rank.min(size)).map(|i| 3.0 - i as f64 / size as f64).collect();
            let a = with_singular_values(m, k, &values, 11);
            let b = random(m, 2, 5);
            let fit = least_squares(a.as_ref(), b.as_ref(), 1e-10).unwrap();
            assert_eq!(fit.rank, values.len());
            let image = product(a.as_ref(), fit.solution.as_ref());
            let residual = Mat::from_fn(m, 2, |i, j| b[(i, j)] - image[(i, j)]);
            let normal = product(a.transpose(), residual.as_ref());
            let norm = frobenius(a.as_ref()).max(1.0) * frobenius(b.as_ref());
            assert_ratio(frobenius(normal.as_ref()), m.max(k), norm, "normal equations");
            let null = null_space(a.as_ref(), 1e-10).unwrap().basis;
            let part = product(null.transpose(), fit.solution.as_ref());
            assert_ratio(frobenius(part.as_ref()), m.max(k), norm, "component in the null space");
        }
    }
}
