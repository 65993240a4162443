//! Projections, by the identities that characterise them.

use super::*;
use crate::linalg::eigen::SymmetricEigen;
use crate::linalg::project::*;
use crate::linalg::workspace::Workspace;
use proptest::prelude::*;

fn decomposed(a: &Mat<f64>) -> SymmetricEigen {
    let mut eig = SymmetricEigen::new(a.nrows());
    eig.decompose(a.as_ref()).unwrap();
    eig
}

fn minus(a: &Mat<f64>, b: &Mat<f64>) -> Mat<f64> {
    Mat::from_fn(a.nrows(), a.ncols(), |i, j| a[(i, j)] - b[(i, j)])
}

fn inner(a: &Mat<f64>, b: &Mat<f64>) -> f64 {
    (0..a.ncols()).map(|j| (0..a.nrows()).map(|i| a[(i, j)] * b[(i, j)]).sum::<f64>()).sum()
}

#[test]
fn both_routes_to_the_cone_agree_with_the_definition() {
    let mut ws = Workspace::new();
    for n in ORDERS {
        for (name, spectrum) in spectra(n) {
            for sign in [1.0, -1.0] {
                let values: Vec<f64> = spectrum.iter().map(|v| sign * v).collect();
                let a = with_spectrum(&values, 4);
                let eig = decomposed(&a);
                let norm = frobenius(a.as_ref());
                let clipped: Vec<f64> = eig.values().iter().map(|v| v.max(0.0)).collect();
                let q = eig.vectors();
                let scaled = Mat::from_fn(n, n, |i, j| q[(i, j)] * clipped[j]);
                let expected = product(scaled.as_ref(), q.transpose());
                let mut out = Mat::from_fn(n, n, |_, _| f64::NAN);
                let count = psd_projection(&eig, poison_upper(&a).as_ref(), out.as_mut(), &mut ws);
                assert_eq!(count, eig.values().iter().filter(|v| **v > 0.0).count());
                assert_ratio(difference(out.as_ref(), expected.as_ref()), n, norm, name);
                let (mut plus, mut negative) = (out.clone(), out.clone());
                psd_split(&eig, a.as_ref(), plus.as_mut(), negative.as_mut(), &mut ws);
                assert_ratio(difference(plus.as_ref(), expected.as_ref()), n, norm, name);
                assert_ratio(
                    difference(minus(&plus, &negative).as_ref(), a.as_ref()),
                    1,
                    norm,
                    name,
                );
                let least = decomposed(&negative).values()[0];
                assert_ratio(-least, n, norm, "negative part is positive semidefinite");
            }
        }
    }
}

#[test]
fn factors_give_the_rank_projection() {
    let mut ws = Workspace::new();
    for n in ORDERS {
        for (name, spectrum) in spectra(n) {
            let a = with_spectrum(&spectrum, 8);
            let eig = decomposed(&a);
            for rank in [0, 1, n / 2, n] {
                let factor = factor_of_rank(&eig, rank.min(n));
                let expected = product(factor.as_ref(), factor.transpose());
                let mut out = Mat::from_fn(n, n, |_, _| f64::NAN);
                let taken = rank_projection(&eig, rank, out.as_mut(), &mut ws);
                assert!(taken <= rank);
                assert_ratio(
                    difference(out.as_ref(), expected.as_ref()),
                    n,
                    frobenius(a.as_ref()),
                    name,
                );
            }
        }
    }
}

/// Symmetric matrices of order 1 to 8, another of the same order, and a rank.
fn pairs() -> impl Strategy<Value = (Mat<f64>, Mat<f64>, usize)> {
    (1usize..=8).prop_flat_map(|n| {
        let entries = || proptest::collection::vec(-10.0..10.0f64, n * n);
        (entries(), entries(), 0..=n).prop_map(move |(x, y, rank)| {
            let symmetric = |v: Vec<f64>| Mat::from_fn(n, n, |i, j| v[i.max(j) + n * i.min(j)]);
            (symmetric(x), symmetric(y), rank)
        })
    })
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, ..ProptestConfig::default() })]

    /// Weyl: |lambda_i(A + E) - lambda_i(A)| <= ||E||_2 (Horn and Johnson, Matrix Analysis, section 4.3).
    #[test]
    fn eigenvalues_move_no_further_than_the_perturbation((a, e, _) in pairs()) {
        let sum = Mat::from_fn(a.nrows(), a.ncols(), |i, j| a[(i, j)] + e[(i, j)]);
        let (before, after, change) = (decomposed(&a), decomposed(&sum), decomposed(&e));
        let spectral = change.values().iter().fold(0.0, |m: f64, v| m.max(v.abs()));
        let slack = RATIO * 8.0 * f64::EPSILON * (frobenius(a.as_ref()) + frobenius(e.as_ref()));
        for (x, y) in before.values().iter().zip(after.values()) {
            prop_assert!((x - y).abs() <= spectral + slack);
        }
    }

    /// Eckart-Young-Mirsky in the cone: the squared distance is what the kept eigenvalues leave, and no other matrix of the
    /// rank is nearer.
    #[test]
    fn the_rank_projection_is_nearest((a, other, rank) in pairs()) {
        let n = a.nrows();
        let eig = decomposed(&a);
        let mut nearest = Mat::zeros(n, n);
        rank_projection(&eig, rank, nearest.as_mut(), &mut Workspace::new());
        let kept: f64 = eig.values().iter().rev().take(rank).map(|v| v.max(0.0).powi(2)).sum();
        let squared = frobenius(a.as_ref()).powi(2);
        let distance = difference(a.as_ref(), nearest.as_ref());
        let slack = RATIO * n as f64 * f64::EPSILON * squared;
        prop_assert!((distance.powi(2) - (squared - kept)).abs() <= slack);
        let rival = factor_of_rank(&decomposed(&other), rank);
        let rival = product(rival.as_ref(), rival.transpose());
        prop_assert!(distance.powi(2) <= difference(a.as_ref(), rival.as_ref()).powi(2) + slack);
    }

    /// Ky Fan: the sum of the r largest eigenvalues is the maximum of tr(V'AV) over orthonormal V with r columns.
    #[test]
    fn the_largest_eigenvalues_maximise_the_trace((a, _, rank) in pairs(), seed in 0u64..1000) {
        let n = a.nrows();
        let eig = decomposed(&a);
        let top: f64 = eig.values().iter().rev().take(rank).sum();
        let trace = |v: MatRef<'_, f64>| {
            let image = product(a.as_ref(), v);
            (0..v.ncols()).map(|j| (0..n).map(|i| v[(i, j)] * image[(i, j)]).sum::<f64>()).sum::<f64>()
        };
        let slack = RATIO * n as f64 * f64::EPSILON * frobenius(a.as_ref()) * (1 + rank) as f64;
        prop_assert!((trace(eig.vectors().subcols(n - rank, rank)) - top).abs() <= slack);
        prop_assert!(trace(random_orthonormal(n, rank, seed).as_ref()) <= top + slack);
    }

    /// Moreau: A = P - N with P, N in the cone and <P, N> = 0, and <A - P, Y - P> <= 0 for every Y of the cone.
    #[test]
    fn the_cone_projection_satisfies_its_variational_inequality((a, other, _) in pairs()) {
        let n = a.nrows();
        let mut ws = Workspace::new();
        let (mut p, mut negative) = (Mat::zeros(n, n), Mat::zeros(n, n));
        psd_split(&decomposed(&a), a.as_ref(), p.as_mut(), negative.as_mut(), &mut ws);
        let squared = frobenius(a.as_ref()).powi(2);
        let slack = RATIO * n as f64 * f64::EPSILON * (squared + frobenius(other.as_ref()).powi(2));
        prop_assert!(inner(&p, &negative).abs() <= slack);
        let mut member = Mat::zeros(n, n);
        psd_projection(&decomposed(&other), other.as_ref(), member.as_mut(), &mut ws);
        prop_assert!(inner(&minus(&a, &p), &minus(&member, &p)) <= slack);
    }
}
