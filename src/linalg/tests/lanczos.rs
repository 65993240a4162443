//! Lanczos methods against dense and known eigenvalues.

use super::*;
use crate::linalg::cg::Diagonal;
use crate::linalg::eigen::SymmetricEigen;
use crate::linalg::lanczos::*;

fn dense_values(a: &Mat<f64>) -> Vec<f64> {
    let mut eig = SymmetricEigen::new(a.nrows());
    eig.decompose_values_only(a.as_ref()).unwrap();
    eig.values().to_vec()
}

#[test]
fn step_bounds_lie_within_the_tolerance_of_the_largest_eigenvalue() {
    let mut ws = LanczosWorkspace::new();
    let params = StepParams::default();
    for n in (1..=12).chain([17, 30, 50, 120, 300]) {
        let mut cases: Vec<(String, Mat<f64>)> =
            (0..4).map(|seed| (format!("random {seed}"), random_symmetric(n, seed))).collect();
        for (name, spectrum) in spectra(n) {
            cases.push((name.to_string(), with_spectrum(&spectrum, 2)));
        }
        for (name, a) in cases {
            let top = *dense_values(&a).last().unwrap();
            let bound = step_bound(&mut DenseOperator { matrix: a.as_ref() }, &mut ws, &params);
            let what = format!("{name} of order {n}: {bound:?} for {top}");
            let rounding = RATIO * n as f64 * f64::EPSILON * frobenius(a.as_ref());
            let margin = params.tolerance * top.abs().max(1.0) + rounding;
            assert!(bound.upper >= top - margin, "{what}");
            assert!(bound.ritz <= top + rounding, "{what}");
            let limit = n.min(30).max((n as f64).sqrt().round() as usize);
            assert!(bound.steps <= limit, "{what}");
            if bound.steps < limit || limit == n {
                assert!(bound.upper <= top + margin, "{what}");
            }
            let all = StepParams { tolerance: 0.0, max_steps: n, ..params };
            let exact = step_bound(&mut DenseOperator { matrix: a.as_ref() }, &mut ws, &all);
            assert!(
                (exact.upper - top).abs() <= 10.0 * rounding,
                "{name} of order {n}: {exact:?} for {top}"
            );
        }
    }
}

#[test]
fn step_bounds_end_at_once_on_multiples_of_the_identity_and_report_nan() {
    let mut ws = LanczosWorkspace::new();
    for factor in [0.0, -2.5, 1e-200, 3e100] {
        let mut op = Diagonal { entries: vec![factor; 60] };
        let bound = step_bound(&mut op, &mut ws, &StepParams::default());
        assert_eq!(bound.steps, 1);
        assert!((bound.upper - factor).abs() <= 100.0 * f64::EPSILON * factor.abs(), "{bound:?}");
    }
    assert!(!step_bound(&mut Broken(40), &mut ws, &StepParams::default()).upper.is_finite());
    assert_eq!(
        step_bound(&mut Broken(0), &mut ws, &StepParams::default()).upper,
        f64::NEG_INFINITY
    );
}

#[test]
fn extreme_pairs_agree_with_dense_eigenvalues() {
    let mut ws = LanczosWorkspace::new();
    for n in ORDERS {
        for (name, spectrum) in spectra(n) {
            // Four decades: the lower end of eight is beyond a restarted method at this tolerance.
            let spectrum: Vec<f64> = match name {
                "graded" => spectrum.iter().map(|v| v.sqrt()).collect(),
                _ => spectrum,
            };
            let a = with_spectrum(&spectrum, 6);
            let values = dense_values(&a);
            let params = ExtremeParams { tolerance: 1e-10, ..ExtremeParams::default() };
            let mut op = DenseOperator { matrix: a.as_ref() };
            let what = format!("{name} of order {n}");
            let least = smallest_eigenpair(&mut op, &[], &params, &mut ws);
            let most = largest_eigenpair(&mut op, &[], &params, &mut ws);
            for (found, expected) in [(&least, values[0]), (&most, values[n - 1])] {
                assert_eq!(found.outcome, ExtremeOutcome::Converged, "{what}: {found:?}");
                assert!(
                    (found.value - expected).abs() <= 1e-9,
                    "{what}: {} for {expected}",
                    found.value
                );
                let norm: f64 = found.vector.iter().map(|v| v * v).sum::<f64>().sqrt();
                assert!((norm - 1.0).abs() <= 1e-12, "{what}");
                let y = Mat::from_fn(n, 1, |i, _| found.vector[i]);
                let image = product(a.as_ref(), y.as_ref());
                let scaled = Mat::from_fn(n, 1, |i, _| found.value * y[(i, 0)]);
                let residual = difference(image.as_ref(), scaled.as_ref());
                assert!(
                    residual <= 1e-10 * found.norm_estimate.max(1.0) * (1.0 + 1e-3),
                    "{what}: residual {residual:e}"
                );
            }
        }
    }
}

#[test]
fn deflation_walks_up_through_a_multiple_eigenvalue() {
    let mut ws = LanczosWorkspace::new();
    let spectrum: Vec<f64> = (0..60).map(|i| if i < 4 { -1.0 } else { i as f64 / 60.0 }).collect();
    let a = with_spectrum(&spectrum, 3);
    let mut known = Mat::<f64>::zeros(60, 0);
    for expected in [-1.0, -1.0, -1.0, -1.0, 4.0 / 60.0, 5.0 / 60.0] {
        let params = ExtremeParams {
            tolerance: 1e-11,
            basis: 12,
            deflate: Some(known.as_ref()),
            ..ExtremeParams::default()
        };
        let pair =
            smallest_eigenpair(&mut DenseOperator { matrix: a.as_ref() }, &[], &params, &mut ws);
        assert_eq!(pair.outcome, ExtremeOutcome::Converged);
        assert!((pair.value - expected).abs() <= 1e-9, "{} for {expected}", pair.value);
        let count = known.ncols();
        known = Mat::from_fn(
            60,
            count + 1,
            |i, j| {
                if j < count { known[(i, j)] } else { pair.vector[i] }
            },
        );
        assert!(orthogonality_defect(known.as_ref()) <= 1e-10);
    }
}

#[test]
fn deflation_down_to_one_dimension_leaves_the_last_eigenvalue() {
    let mut ws = LanczosWorkspace::new();
    for n in [2, 3, 9] {
        let mut op = Diagonal { entries: (0..n).map(|i| i as f64).collect() };
        // Scaled and repeated vectors: they need not be orthonormal.
        let known = Mat::from_fn(n, 2 * (n - 1), |i, j| if i == j / 2 { 3.0 } else { 0.0 });
        let params = ExtremeParams { deflate: Some(known.as_ref()), ..ExtremeParams::default() };
        let pair = smallest_eigenpair(&mut op, &vec![1.0; n], &params, &mut ws);
        assert!((pair.value - (n - 1) as f64).abs() <= 1e-12, "{pair:?}");
        assert_eq!(pair.outcome, ExtremeOutcome::Converged);
    }
}

#[test]
fn a_start_at_a_wrong_eigenvector_does_not_hide_the_smallest() {
    let mut ws = LanczosWorkspace::new();
    for n in [2, 3, 30, 200] {
        let mut op = Diagonal {
            entries: (0..n).map(|i| if i == n / 2 { -1e-3 } else { i as f64 }).collect(),
        };
        for wrong in [0, n - 1] {
            let mut start = vec![0.0; n];
            start[wrong] = 7.0;
            let params = ExtremeParams { tolerance: 1e-8, ..ExtremeParams::default() };
            let expected = op.entries.iter().copied().fold(f64::INFINITY, f64::min);
            let pair = smallest_eigenpair(&mut op, &start, &params, &mut ws);
            assert!(
                (pair.value - expected).abs() <= 1e-5,
                "order {n}, start {wrong}: {} for {expected}",
                pair.value
            );
        }
    }
}

#[test]
fn grid_laplacians_show_their_clustered_lower_end() {
    let mut ws = LanczosWorkspace::new();
    let pi = std::f64::consts::PI;
    for (rows, columns) in [(1, 60), (8, 8), (40, 40), (100, 100)] {
        let n = rows * columns;
        let mut op = Grid { rows, columns };
        let ones = Mat::from_fn(n, 1, |_, _| 1.0);
        let params =
            ExtremeParams { tolerance: 1e-8, max_steps: 20_000, ..ExtremeParams::default() };
        let zero = smallest_eigenpair(&mut op, &[], &params, &mut ws);
        assert!(
            zero.value.abs() <= 8e-8 && zero.outcome == ExtremeOutcome::Converged,
            "{}",
            zero.value
        );
        let params = ExtremeParams { deflate: Some(ones.as_ref()), ..params };
        let fiedler = smallest_eigenpair(&mut op, &[], &params, &mut ws);
        let longest = rows.max(columns);
        let expected = 4.0 * (pi / (2 * longest) as f64).sin().powi(2);
        assert_eq!(fiedler.outcome, ExtremeOutcome::Converged);
        assert!(
            (fiedler.value - expected).abs() <= 8e-8,
            "{rows} x {columns}: {} for {expected}",
            fiedler.value
        );
        let most = largest_eigenpair(&mut op, &[], &params, &mut ws);
        let end = |k: usize| 4.0 * ((k - 1) as f64 * pi / (2 * k) as f64).sin().powi(2);
        let expected = end(rows) + end(columns);
        assert!(
            (most.value - expected).abs() <= 8e-8,
            "{rows} x {columns}: {} for {expected}",
            most.value
        );
    }
    let grid = Mat::from_fn(12, 12, |i, j| {
        let (mut x, mut y) = (vec![0.0; 12], vec![0.0; 12]);
        x[j] = 1.0;
        Grid { rows: 3, columns: 4 }.apply(&x, &mut y);
        y[i]
    });
    let expected = 4.0 * (pi / 8.0).sin().powi(2);
    assert!((dense_values(&grid)[1] - expected).abs() <= 1e-13);
}

#[test]
fn limits_and_broken_operators_are_reported() {
    let mut ws = LanczosWorkspace::new();
    let params = ExtremeParams { tolerance: 1e-14, max_steps: 10, ..ExtremeParams::default() };
    let pair = smallest_eigenpair(&mut Grid { rows: 30, columns: 30 }, &[], &params, &mut ws);
    assert_eq!(pair.outcome, ExtremeOutcome::StepLimit);
    assert!(pair.residual > 1e-14 && pair.value >= -1e-12);
    let broken = smallest_eigenpair(&mut Broken(30), &[], &params, &mut ws);
    assert_eq!(broken.outcome, ExtremeOutcome::Failed);
    assert!(broken.value.is_nan());
}
