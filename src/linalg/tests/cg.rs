//! Conjugate gradients.

use super::*;
use crate::linalg::cg::{self, CgWorkspace, Diagonal, Outcome};
use crate::linalg::lanczos::DenseOperator;

#[test]
fn conjugate_gradients_solve_positive_systems_to_the_true_residual() {
    let mut ws = CgWorkspace::new();
    let params = cg::Params { tolerance: 1e-10, max_steps: 2_000 };
    for n in ORDERS {
        for (name, spectrum) in spectra(n).into_iter().take(3) {
            let graded = name == "graded";
            let spectrum: Vec<f64> =
                spectrum.iter().map(|v| if graded { v.sqrt() } else { *v }).collect();
            let a = with_spectrum(&spectrum, 1);
            let b: Vec<f64> = (0..n).map(|i| random(n, 1, 3)[(i, 0)]).collect();
            let mut x = vec![0.0; n];
            let info =
                cg::solve(&mut DenseOperator { matrix: a.as_ref() }, &b, &mut x, &params, &mut ws);
            assert_eq!(info.outcome, Outcome::Converged, "{name} of order {n}: {info:?}");
            let x = Mat::from_fn(n, 1, |i, _| x[i]);
            let right = Mat::from_fn(n, 1, |i, _| b[i]);
            let residual = difference(product(a.as_ref(), x.as_ref()).as_ref(), right.as_ref());
            assert!(
                residual <= 1.0001e-10 * frobenius(right.as_ref()),
                "{name} of order {n}: {residual:e}"
            );
        }
    }
}

/// With k distinct eigenvalues the method ends after k steps in exact arithmetic (Hestenes and Stiefel 1952).
#[test]
fn few_distinct_eigenvalues_take_as_many_steps() {
    let spectrum: Vec<f64> = (0..80).map(|i| [1.0, 3.0, 10.0][i % 3]).collect();
    let a = with_spectrum(&spectrum, 5);
    let b = vec![1.0; 80];
    let mut x = vec![0.0; 80];
    let params = cg::Params { tolerance: 1e-11, max_steps: 100 };
    let info = cg::solve(
        &mut DenseOperator { matrix: a.as_ref() },
        &b,
        &mut x,
        &params,
        &mut CgWorkspace::new(),
    );
    assert_eq!((info.outcome, info.steps), (Outcome::Converged, 3));
}

#[test]
fn singular_systems_are_solved_when_consistent_and_refused_when_not() {
    let mut ws = CgWorkspace::new();
    let params = cg::Params { tolerance: 1e-9, max_steps: 5_000 };
    for (rows, columns) in [(1, 2), (1, 40), (20, 20)] {
        let n = rows * columns;
        let mut b: Vec<f64> = (0..n).map(|i| ((i * 37) % 17) as f64).collect();
        let mean = b.iter().sum::<f64>() / n as f64;
        b.iter_mut().for_each(|v| *v -= mean);
        let mut x = vec![0.0; n];
        let info = cg::solve(&mut Grid { rows, columns }, &b, &mut x, &params, &mut ws);
        assert_eq!(info.outcome, Outcome::Converged, "{rows} x {columns}: {info:?}");
        b.iter_mut().for_each(|v| *v += 1.0);
        let mut x = vec![0.0; n];
        let info = cg::solve(&mut Grid { rows, columns }, &b, &mut x, &params, &mut ws);
        assert_ne!(info.outcome, Outcome::Converged, "{rows} x {columns}");
        assert!(
            info.residual >= (n as f64).sqrt() * (1.0 - 1e-9),
            "the part outside the range cannot vanish: {info:?}"
        );
    }
}

#[test]
fn the_jacobi_preconditioner_repairs_bad_scaling() {
    let n = 200;
    let scales: Vec<f64> = (0..n).map(|i| 10f64.powf(3.0 * i as f64 / n as f64)).collect();
    let base = with_spectrum(&(0..n).map(|i| 1.0 + i as f64 / n as f64).collect::<Vec<_>>(), 8);
    let a = Mat::from_fn(n, n, |i, j| scales[i] * base[(i, j)] * scales[j]);
    let b = vec![1.0; n];
    let params = cg::Params { tolerance: 1e-8, max_steps: 4_000 };
    let mut ws = CgWorkspace::new();
    let (mut x, mut y) = (vec![0.0; n], vec![0.0; n]);
    let mut op = DenseOperator { matrix: a.as_ref() };
    let plain = cg::solve(&mut op, &b, &mut x, &params, &mut ws);
    let mut jacobi = Diagonal { entries: (0..n).map(|i| 1.0 / a[(i, i)]).collect() };
    let repaired = cg::solve_preconditioned(&mut op, &mut jacobi, &b, &mut y, &params, &mut ws);
    assert_eq!(repaired.outcome, Outcome::Converged);
    assert!(repaired.steps * 5 < plain.steps, "{} and {} steps", repaired.steps, plain.steps);
}

#[test]
fn odd_systems_are_named() {
    let mut ws = CgWorkspace::new();
    let params = cg::Params { tolerance: 1e-8, max_steps: 50 };
    let mut x = vec![0.0; 3];
    let info = cg::solve(
        &mut Diagonal { entries: vec![1.0, -1.0, 2.0] },
        &[0.0, 1.0, 0.0],
        &mut x,
        &params,
        &mut ws,
    );
    assert_eq!(info.outcome, Outcome::NotPositive);
    let info = cg::solve(&mut Broken(3), &[0.0, 1.0, 0.0], &mut x, &params, &mut ws);
    assert_eq!(info.outcome, Outcome::NonFinite);
    let mut x = vec![0.0; 3];
    let info =
        cg::solve(&mut Diagonal { entries: vec![1.0; 3] }, &[0.0; 3], &mut x, &params, &mut ws);
    assert_eq!((info.outcome, info.steps, info.residual), (Outcome::Converged, 0, 0.0));
    let one = cg::Params { max_steps: 1, ..params };
    let info =
        cg::solve(&mut Diagonal { entries: vec![1.0, 2.0, 3.0] }, &[1.0; 3], &mut x, &one, &mut ws);
    assert_eq!((info.outcome, info.steps), (Outcome::StepLimit, 1));
}
