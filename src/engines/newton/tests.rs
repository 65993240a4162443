//! Checks of the saddle system and of the convergence of Newton's method.

use super::*;
use crate::card::{Setting, Settings};
use crate::engines::alm::tests::mixed;
use crate::families;
use crate::linalg::Mat;
use crate::problem::certificate::Planted;
use crate::seed::Stream;

fn planted(order: i64, rank: i64, label: &str) -> Planted {
    let family = families::find("tight-unique").expect("a family of this name");
    let given = [("order", order), ("rank", rank)]
        .into_iter()
        .map(|(name, value)| (name.to_owned(), Setting::Integer(value)))
        .collect();
    let settings = Settings::resolve(family.card().parameters, &given).unwrap();
    family.plant(&settings, &mut Stream::named(9, &["newton", label])).unwrap()
}

/// The planted point and multipliers, each entry disturbed by `size` times a normal number.
fn disturbed(planted: &Planted, size: f64, label: &str) -> (Vec<Factor>, Vec<f64>, Vec<f64>) {
    let mut draw = Stream::named(9, &["newton", "disturb", label]);
    let mut factors = planted.point.clone();
    for factor in &mut factors {
        factor.data.iter_mut().for_each(|value| *value += size * draw.normal());
    }
    let x = planted.orthant_point.iter().map(|x| x + size * draw.normal().abs()).collect();
    let dual = planted.dual.clone().expect("a dual certificate");
    let y = dual.iter().map(|y| y + size * draw.normal()).collect();
    (factors, x, y)
}

#[test]
fn full_matrices_are_those_of_the_products() {
    let (problem, factors, x) = mixed("newton");
    let op = Operator::new(&problem);
    let mut l = Lagrangian::new(&problem, &op, &[3, 2]);
    let y: Vec<f64> = (0..12).map(|i| 0.3 * i as f64 - 1.0).collect();
    l.import(&factors, &x, &y);
    let mut system = System::new(&op, l);
    system.evaluate();
    let n = system.unknowns();
    let (mut jacobian, mut hessian) = (Mat::zeros(n, 12), Mat::zeros(n, n));
    system.fill_jacobian(&mut jacobian);
    system.fill_hessian(&mut hessian);
    let (mut image, mut values) = (vec![0.0; n], vec![0.0; 12]);
    for i in 0..12 {
        let mut unit = vec![0.0; 12];
        unit[i] = 1.0;
        system.adjoint_times(&unit, &mut image);
        for k in 0..n {
            assert!((image[k] - jacobian[(k, i)]).abs() < 1e-12, "J' at ({k}, {i})");
        }
    }
    for j in 0..n {
        let mut unit = vec![0.0; n];
        unit[j] = 1.0;
        system.jacobian_times(&unit, &mut values);
        for i in 0..12 {
            assert!((values[i] - jacobian[(j, i)]).abs() < 1e-12, "J at ({i}, {j})");
        }
        image.fill(0.0);
        system.add_hessian(&unit, &mut image);
        system.add_gauge(&unit, &mut image);
        for i in j..n {
            assert!((image[i] - hessian[(i, j)]).abs() < 1e-12, "H + G at ({i}, {j})");
        }
    }
}

#[test]
fn convergence_from_nearby_is_quadratic() {
    let planted = planted(24, 2, "quadratic");
    let op = Operator::new(&planted.problem);
    let (mut factors, mut x, mut y) = disturbed(&planted, 1e-2, "quadratic");
    let mut merits = Vec::new();
    let params = NewtonParams { steps: 1, levenberg: 0.0, ..NewtonParams::default() };
    for _ in 0..8 {
        let mut meter = Meter::unlimited();
        let info = polish(&op, &planted.problem, &mut factors, &mut x, &mut y, &params, &mut meter);
        if merits.is_empty() {
            merits.push(info.merit_before);
        }
        merits.push(info.merit);
        if info.merit < 1e-12 {
            break;
        }
    }
    assert!(*merits.last().unwrap() < 1e-12, "{merits:?}");
    // Quadratic: the next merit is at most a constant times the square of the last, down to rounding.
    for pair in merits.windows(2) {
        assert!(pair[1] <= (100.0 * pair[0] * pair[0]).max(1e-13), "{merits:?}");
    }
    let value = op.cost_of_factors(&factors, &x);
    assert!((value - planted.optimum).abs() < 1e-9 * (1.0 + planted.optimum.abs()));
}

#[test]
fn the_matrix_free_solver_reaches_the_same_point() {
    let planted = planted(30, 2, "krylov");
    let op = Operator::new(&planted.problem);
    let (mut factors, mut x, mut y) = disturbed(&planted, 1e-3, "krylov");
    let params = NewtonParams { dense_order: 0, tolerance: 1e-11, ..NewtonParams::default() };
    let mut meter = Meter::unlimited();
    let info = polish(&op, &planted.problem, &mut factors, &mut x, &mut y, &params, &mut meter);
    assert_eq!(info.end, NewtonEnd::Converged, "{info:?}");
    let value = op.cost_of_factors(&factors, &x);
    assert!((value - planted.optimum).abs() < 1e-8 * (1.0 + planted.optimum.abs()), "{info:?}");
    let mut point = vec![0.0; 900];
    for i in 0..30 {
        for j in 0..30 {
            point[30 * i + j] =
                factors[0].row(i).iter().zip(factors[0].row(j)).map(|(a, b)| a * b).sum();
        }
    }
    for i in 0..30 {
        for j in 0..30 {
            let v = &planted.point[0];
            let exact: f64 = v.row(i).iter().zip(v.row(j)).map(|(a, b)| a * b).sum();
            assert!((point[30 * i + j] - exact).abs() < 1e-6, "X at ({i}, {j})");
        }
    }
}

#[test]
fn a_polish_never_raises_the_merit() {
    let (problem, factors, x) = mixed("newton");
    let op = Operator::new(&problem);
    let mut meter = Meter::unlimited();
    for (place, size) in [0.0, 0.1, 1.0, 10.0].into_iter().enumerate() {
        let mut draw = Stream::named(2, &["newton", "merit", &place.to_string()]);
        let mut far = factors.clone();
        for factor in &mut far {
            factor.data.iter_mut().for_each(|value| *value += size * draw.normal());
        }
        let (mut x, mut y) = (x.clone(), vec![0.0; 12]);
        let params = NewtonParams::default();
        let info = polish(&op, &problem, &mut far, &mut x, &mut y, &params, &mut meter);
        assert!(info.merit <= info.merit_before, "{info:?}");
        assert!(far[0].data.iter().all(|value| value.is_finite()));
    }
}
