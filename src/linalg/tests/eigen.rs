//! Symmetric eigendecomposition.

use super::*;
use crate::linalg::eigen::{EigenError, SymmetricEigen, flops};

#[test]
fn decompositions_are_backward_stable_on_all_spectra() {
    for n in ORDERS {
        let mut eig = SymmetricEigen::new(n);
        for (name, spectrum) in spectra(n) {
            let a = with_spectrum(&spectrum, n as u64);
            let norm = frobenius(a.as_ref());
            eig.decompose(poison_upper(&a).as_ref()).unwrap();
            let what = format!("{name} of order {n}");
            assert!(eig.values().is_sorted(), "{what}");
            let q = eig.vectors();
            let scaled = Mat::from_fn(n, n, |i, j| q[(i, j)] * eig.values()[j]);
            let again = product(scaled.as_ref(), q.transpose());
            assert_ratio(difference(again.as_ref(), a.as_ref()), n, norm, &what);
            assert_ratio(orthogonality_defect(q), n, 1.0, &what);
            let mut sorted = spectrum.clone();
            sorted.sort_by(f64::total_cmp);
            for (found, planted) in eig.values().iter().zip(&sorted) {
                assert_ratio((found - planted).abs(), n, norm, &what);
            }
            let full = eig.values().to_vec();
            eig.decompose_values_only(poison_upper(&a).as_ref()).unwrap();
            for (alone, with_vectors) in eig.values().iter().zip(&full) {
                assert_ratio((alone - with_vectors).abs(), n, norm, &what);
            }
        }
    }
}

/// Second differences with fixed ends, tridiagonal (-1, 2, -1): eigenvalues 4 sin^2(k pi / (2 (n + 1))), k = 1..n
/// (Golub and Van Loan, Matrix Computations, section on fast Poisson solvers; from memory, and checked by substitution).
#[test]
fn second_differences_have_their_known_eigenvalues() {
    for n in ORDERS {
        let a = Mat::from_fn(n, n, |i, j| match i.abs_diff(j) {
            0 => 2.0,
            1 => -1.0,
            _ => 0.0,
        });
        let mut eig = SymmetricEigen::new(n);
        eig.decompose(a.as_ref()).unwrap();
        for (k, value) in eig.values().iter().enumerate() {
            let angle = (k + 1) as f64 * std::f64::consts::PI / (2 * (n + 1)) as f64;
            assert_ratio((value - 4.0 * angle.sin().powi(2)).abs(), n, 4.0, "second differences");
        }
    }
}

/// Wilkinson's W21+: the two largest eigenvalues agree to about 14 digits, 10.746194182903 (Wilkinson, The Algebraic Eigenvalue
/// Problem, 1965, chapter 5; from memory).
#[test]
fn wilkinson_matrix_shows_its_close_pair() {
    let a = Mat::from_fn(21, 21, |i, j| match i.abs_diff(j) {
        0 => (i as f64 - 10.0).abs(),
        1 => 1.0,
        _ => 0.0,
    });
    let mut eig = SymmetricEigen::new(21);
    eig.decompose(a.as_ref()).unwrap();
    let top = &eig.values()[19..];
    assert!(
        (top[0] - 10.746194182903).abs() < 1e-12 && (top[1] - 10.746194182903).abs() < 1e-12,
        "{top:?}"
    );
    assert_ratio(orthogonality_defect(eig.vectors()), 21, 1.0, "vectors of the close pair");
}

#[test]
fn extreme_magnitudes_are_scaled() {
    for n in [1, 2, 17, 50] {
        let a = random_symmetric(n, 3);
        let mut reference = SymmetricEigen::new(n);
        reference.decompose(a.as_ref()).unwrap();
        for exponent in [-1000, -500, 500, 1000] {
            let factor = 2f64.powi(exponent);
            let scaled = Mat::from_fn(n, n, |i, j| a[(i, j)] * factor);
            let mut eig = SymmetricEigen::new(n);
            eig.decompose(scaled.as_ref()).unwrap();
            for (found, base) in eig.values().iter().zip(reference.values()) {
                assert_ratio((found / factor - base).abs(), n, frobenius(a.as_ref()), "scaled");
            }
            assert_ratio(orthogonality_defect(eig.vectors()), n, 1.0, "scaled vectors");
        }
    }
}

#[test]
fn entries_that_are_not_finite_are_located() {
    for (n, row, column) in [(1, 0, 0), (3, 2, 1), (50, 49, 3), (50, 40, 40)] {
        for value in [f64::INFINITY, f64::NEG_INFINITY, f64::NAN] {
            let mut a = random_symmetric(n, 1);
            a[(row, column)] = value;
            let mut eig = SymmetricEigen::new(n);
            let EigenError::NonFinite { row: r, column: c, value: v } =
                eig.decompose(a.as_ref()).unwrap_err()
            else {
                panic!("another error");
            };
            assert_eq!((r, c, v.to_bits()), (row, column, value.to_bits()));
        }
    }
}

#[test]
#[should_panic(expected = "not fully decomposed")]
fn vectors_are_not_given_out_after_values_only() {
    let mut eig = SymmetricEigen::new(2);
    eig.decompose(Mat::identity(2, 2).as_ref()).unwrap();
    eig.decompose_values_only(Mat::identity(2, 2).as_ref()).unwrap();
    eig.vectors();
}

#[test]
fn an_empty_matrix_has_an_empty_spectrum() {
    let mut eig = SymmetricEigen::new(0);
    eig.decompose(Mat::zeros(0, 0).as_ref()).unwrap();
    assert!(eig.values().is_empty());
}

#[test]
fn flop_conventions_are_as_documented() {
    assert_eq!(
        (flops::eigen(10), flops::cholesky(30), flops::inverse_from_factor(30)),
        (9_000, 9_000, 18_000)
    );
    assert_eq!(
        (flops::gemm(2, 3, 4), flops::triangular_solve(10, 3), flops::eigenvalues(30)),
        (48, 300, 36_000)
    );
}
