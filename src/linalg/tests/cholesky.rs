//! Cholesky factorisation, solves and inverses.

use super::*;
use crate::linalg::cholesky::*;
use crate::linalg::workspace::Workspace;

/// Positive definite matrices of one order, by name.
fn positive(n: usize) -> Vec<(&'static str, Mat<f64>)> {
    spectra(n)
        .into_iter()
        .take(3)
        .map(|(name, values)| (name, with_spectrum(&values, n as u64)))
        .collect()
}

fn lower(l: &Mat<f64>) -> Mat<f64> {
    Mat::from_fn(l.nrows(), l.ncols(), |i, j| if i < j { 0.0 } else { l[(i, j)] })
}

#[test]
fn factors_reproduce_the_matrix_and_leave_the_upper_triangle_alone() {
    let mut ws = Workspace::new();
    for n in ORDERS {
        for (name, a) in positive(n) {
            let mut l = poison_upper(&a);
            factor_in_place(l.as_mut(), &mut ws).unwrap();
            for j in 0..n {
                assert!(
                    (0..j).all(|i| l[(i, j)].is_nan()),
                    "{name} of order {n}: upper part of column {j} written"
                );
            }
            let l = lower(&l);
            let again = product(l.as_ref(), l.transpose());
            assert_ratio(difference(again.as_ref(), a.as_ref()), n, frobenius(a.as_ref()), name);
        }
    }
}

#[test]
fn solves_are_backward_stable() {
    let mut ws = Workspace::new();
    for n in ORDERS {
        for (name, a) in positive(n) {
            let mut l = poison_upper(&a);
            factor_in_place(l.as_mut(), &mut ws).unwrap();
            let b = random(n, 3, 9);
            let mut x = b.clone();
            solve_in_place(l.as_ref(), x.as_mut(), &mut ws);
            let image = product(a.as_ref(), x.as_ref());
            let norm = frobenius(a.as_ref()) * frobenius(x.as_ref());
            assert_ratio(difference(image.as_ref(), b.as_ref()), n, norm, name);
            let mut v: Vec<f64> = (0..n).map(|i| b[(i, 0)]).collect();
            solve_vector(l.as_ref(), &mut v);
            let v = Mat::from_fn(n, 1, |i, _| v[i]);
            let image = product(a.as_ref(), v.as_ref());
            let norm = frobenius(a.as_ref()) * frobenius(v.as_ref());
            assert_ratio(difference(image.as_ref(), b.as_ref().subcols(0, 1)), n, norm, name);
        }
    }
}

#[test]
fn triangular_solves_are_backward_stable_at_every_panel_remainder() {
    for n in (1..=41).chain([120, 131]) {
        let l = Mat::from_fn(n, n, |i, j| match i.cmp(&j) {
            std::cmp::Ordering::Less => f64::NAN,
            std::cmp::Ordering::Equal => 1.0 + (i % 5) as f64,
            std::cmp::Ordering::Greater => ((i * 7 + j * 3) % 11) as f64 / 11.0 - 0.5,
        });
        let clean = lower(&l);
        let b = random(n, 2, n as u64);
        let first = |m: &Mat<f64>| (0..n).map(|i| m[(i, 0)]).collect::<Vec<_>>();
        let check = |x: &Mat<f64>, factor: MatRef<'_, f64>, b: MatRef<'_, f64>| {
            let image = product(factor, x.as_ref());
            let norm = frobenius(clean.as_ref()) * frobenius(x.as_ref());
            assert_ratio(difference(image.as_ref(), b), n, norm, "triangular solve");
        };
        let column_of = |v: Vec<f64>| Mat::from_fn(n, 1, |i, _| v[i]);
        let b0 = b.as_ref().subcols(0, 1);

        let mut v = first(&b);
        solve_lower_vector(l.as_ref(), &mut v);
        check(&column_of(v), clean.as_ref(), b0);
        let mut v = first(&b);
        solve_lower_transpose_vector(l.as_ref(), &mut v);
        check(&column_of(v), clean.transpose(), b0);
        let mut x = b.clone();
        solve_lower_matrix(l.as_ref(), x.as_mut());
        check(&x, clean.as_ref(), b.as_ref());
        let mut x = b.clone();
        solve_lower_transpose_matrix(l.as_ref(), x.as_mut());
        check(&x, clean.transpose(), b.as_ref());

        let mut v = first(&b);
        multiply_lower_vector(l.as_ref(), &mut v);
        let expected = product(clean.as_ref(), b0);
        let norm = frobenius(clean.as_ref()) * frobenius(b0);
        assert_ratio(
            difference(column_of(v).as_ref(), expected.as_ref()),
            n,
            norm,
            "multiply_lower_vector",
        );
    }
}

#[test]
fn inverses_are_symmetric_and_accurate() {
    let mut ws = Workspace::new();
    for n in ORDERS {
        for (name, a) in positive(n) {
            let mut l = poison_upper(&a);
            factor_in_place(l.as_mut(), &mut ws).unwrap();
            let mut inverse = Mat::from_fn(n, n, |_, _| f64::NAN);
            invert_from_factor(l.as_ref(), inverse.as_mut(), &mut ws);
            for j in 0..n {
                assert!((0..n).all(|i| inverse[(i, j)] == inverse[(j, i)]));
            }
            let unit = product(a.as_ref(), inverse.as_ref());
            let norm = frobenius(a.as_ref()) * frobenius(inverse.as_ref());
            assert_ratio(difference(unit.as_ref(), Mat::identity(n, n).as_ref()), n, norm, name);
        }
    }
}

/// Hilbert matrix of order 5: the determinant is 1 / 266716800000 (OEIS A005249), the inverse is integral with corner 25
/// and (-1)^(i+j) formula of Choi, Amer. Math. Monthly 90:301-312 (1983), from memory; its condition number is about 4.8e5.
#[test]
fn hilbert_matrix_has_its_known_determinant_and_inverse() {
    let mut ws = Workspace::new();
    let mut l = Mat::from_fn(5, 5, |i, j| 1.0 / (i + j + 1) as f64);
    factor_in_place(l.as_mut(), &mut ws).unwrap();
    let allowed = RATIO * 5.0 * 4.8e5 * f64::EPSILON;
    assert!((log_determinant(l.as_ref()) + 266_716_800_000f64.ln()).abs() <= allowed);
    let mut inverse = Mat::zeros(5, 5);
    invert_from_factor(l.as_ref(), inverse.as_mut(), &mut ws);
    let first_row = [25.0, -300.0, 1050.0, -1400.0, 630.0];
    for (j, expected) in first_row.iter().enumerate() {
        assert!(
            (inverse[(0, j)] - expected).abs() <= allowed * 179_200.0,
            "{} for {expected}",
            inverse[(0, j)]
        );
    }
}

#[test]
fn the_first_pivot_that_fails_is_named() {
    let mut ws = Workspace::new();
    for n in ORDERS {
        for bad in [0, n / 2, n - 1] {
            for value in [-1.0, 0.0, f64::NAN, f64::INFINITY] {
                let mut a = Mat::from_fn(n, n, |i, j| if i == j { 2.0 } else { 0.0 });
                a[(bad, bad)] = value;
                assert_eq!(
                    factor_in_place(a.as_mut(), &mut ws),
                    Err(NotPositive { index: bad, order: n }),
                    "{value}"
                );
            }
        }
    }
    // The leading minors are 1 and 1 - 4 < 0.
    let mut a = Mat::from_fn(2, 2, |i, j| if i == j { 1.0 } else { 2.0 });
    assert_eq!(factor_in_place(a.as_mut(), &mut ws), Err(NotPositive { index: 1, order: 2 }));
}

#[test]
fn infinity_off_the_diagonal_does_not_pass() {
    let mut ws = Workspace::new();
    for n in [2, 17, 120] {
        let mut a = Mat::from_fn(n, n, |i, j| if i == j { 2.0 } else { 0.0 });
        a[(n - 1, 0)] = f64::INFINITY;
        assert!(factor_in_place(a.as_mut(), &mut ws).is_err());
    }
}
