//! Checks of the engine: derivatives, line search, certificates, closed forms.

use super::lagrangian::Lagrangian;
use super::*;
use crate::linalg::vector::{axpy, dot, norm2};
use crate::problem::{
    Block, Coefficient, Functional, OuterSum, OuterTerm, SparseSymmetric, SparseVector,
};

fn stream(label: &str) -> Stream {
    Stream::named(5, &["alm-tests", label])
}

/// Max-cut relaxation of a weighted graph: minimise <-L/4, X>, X_ii = 1.
pub(crate) fn max_cut(order: usize, edges: &[(usize, usize, f64)]) -> Problem {
    let mut entries = Vec::new();
    for &(i, j, weight) in edges {
        entries.push((i, i, -0.25 * weight));
        entries.push((j, j, -0.25 * weight));
        entries.push((i, j, 0.25 * weight));
    }
    unit_diagonal(SparseSymmetric::gather(order, entries), None)
}

/// Minimise <C, X> subject to X_ii = 1.
pub(crate) fn unit_diagonal(cost: SparseSymmetric, rank: Option<usize>) -> Problem {
    let order = cost.order();
    let constraints = (0..order)
        .map(|i| {
            let matrix = SparseSymmetric::gather(order, vec![(i, i, 1.0)]);
            Functional::on_block(0, Coefficient::Sparse(matrix))
        })
        .collect();
    let cost = Functional::on_block(0, Coefficient::Sparse(cost));
    Problem::new(vec![Block { order, rank }], 0, cost, constraints, vec![1.0; order]).unwrap()
}

fn cycle(order: usize) -> Vec<(usize, usize, f64)> {
    (0..order).map(|i| (i, (i + 1) % order, 1.0)).collect()
}

fn petersen() -> Vec<(usize, usize, f64)> {
    let mut edges = Vec::new();
    for i in 0..5 {
        edges.push((i, (i + 1) % 5, 1.0));
        edges.push((5 + i, 5 + (i + 2) % 5, 1.0));
        edges.push((i, 5 + i, 1.0));
    }
    edges
}

/// Adds a constraint that is no single diagonal entry, so that the general path is taken: the sum of the
/// diagonal, which the other constraints imply (a dependent row on purpose).
fn with_trace_row(problem: &Problem) -> Problem {
    let order = problem.blocks()[0].order;
    let trace = SparseSymmetric::gather(order, (0..order).map(|i| (i, i, 1.0)).collect());
    let mut constraints = problem.constraints().to_vec();
    constraints.push(Functional::on_block(0, Coefficient::Sparse(trace)));
    let mut rhs = problem.rhs().to_vec();
    rhs.push(order as f64);
    Problem::new(problem.blocks().to_vec(), 0, problem.cost().clone(), constraints, rhs).unwrap()
}

/// Two blocks (one sparse, one dense), long and short outer products and a nonnegative part.
pub(crate) fn mixed(seed: &str) -> (Problem, Vec<Factor>, Vec<f64>) {
    let mut draw = stream(seed);
    let orders = [40usize, 9];
    let number = |draw: &mut Stream| draw.between(-3, 3) as f64;
    let functional = |draw: &mut Stream, long: bool| {
        let mut entries = Vec::new();
        for _ in 0..5 {
            entries.push((draw.index(orders[0]), draw.index(orders[0]), number(draw)));
        }
        let small = (0..4).map(|_| (draw.index(9), draw.index(9), number(draw))).collect();
        let first = if long {
            let values: Vec<f64> = (0..orders[0]).map(|_| number(draw) + 0.5).collect();
            let vector = SparseVector { indices: (0..orders[0] as u32).collect(), values };
            Coefficient::Outer(OuterSum {
                order: orders[0],
                terms: vec![OuterTerm { weight: 0.5, vector }],
            })
        } else {
            Coefficient::Sparse(SparseSymmetric::gather(orders[0], entries))
        };
        Functional {
            parts: vec![(0, first), (1, Coefficient::Sparse(SparseSymmetric::gather(9, small)))],
            orthant: SparseVector::gather(vec![(draw.index(3) as u32, number(draw) + 0.25)]),
        }
    };
    let constraints: Vec<Functional> = (0..12).map(|i| functional(&mut draw, i % 3 == 0)).collect();
    let mut cost = functional(&mut draw, false);
    cost.orthant = SparseVector::gather(vec![(0, 1.0), (1, 2.0), (2, 1.5)]);
    let widths = [3usize, 2];
    let factors: Vec<Factor> = orders
        .iter()
        .zip(widths)
        .map(|(&n, w)| {
            let data = (0..n * w).map(|_| draw.between(-2, 2) as f64).collect();
            Factor { order: n, width: w, data }
        })
        .collect();
    let x = vec![1.0, 4.0, 0.25];
    let blocks = orders.iter().map(|&order| Block { order, rank: Some(2) }).collect::<Vec<_>>();
    let empty =
        Problem::new(blocks.clone(), 3, cost.clone(), constraints.clone(), vec![0.0; 12]).unwrap();
    let mut rhs = vec![0.0; 12];
    Operator::new(&empty).apply_factors(&factors, &x, &mut rhs);
    (Problem::new(blocks, 3, cost, constraints, rhs).unwrap(), factors, x)
}

fn loaded<'a>(
    problem: &Problem,
    op: &'a Operator,
    widths: &[usize],
    label: &str,
) -> Lagrangian<'a> {
    let mut l = Lagrangian::new(problem, op, widths);
    let mut draw = stream(label);
    start::random(&mut l, &mut draw);
    l.y.iter_mut().for_each(|y| *y = draw.normal());
    l.sigma = 0.7;
    l.refresh();
    l
}

#[test]
fn the_gradient_is_the_difference_quotient_of_the_value() {
    let (problem, _, _) = mixed("gradient");
    let op = Operator::new(&problem);
    let mut l = loaded(&problem, &op, &[3, 2], "gradient-point");
    let mut draw = stream("gradient-direction");
    let d: Vec<f64> = (0..l.z.len()).map(|_| draw.normal()).collect();
    l.compute_gradient();
    let slope = dot(&l.gradient, &d);
    let base = l.z.clone();
    let mut value_at = |t: f64| {
        l.z.copy_from_slice(&base);
        axpy(t, &d, &mut l.z);
        l.refresh();
        l.value()
    };
    // Central difference with error h^2: Richardson's rule removes it, the quartic leaves nothing beyond.
    let quotient = |h: f64, f: &mut dyn FnMut(f64) -> f64| (f(h) - f(-h)) / (2.0 * h);
    let (coarse, fine) = (quotient(2e-2, &mut value_at), quotient(1e-2, &mut value_at));
    let extrapolated = (4.0 * fine - coarse) / 3.0;
    assert!((slope - extrapolated).abs() < 1e-10 * slope.abs().max(1.0), "{slope} {extrapolated}");
}

#[test]
fn the_quartic_is_exact_and_its_second_coefficient_is_half_the_hessian_form() {
    let (problem, _, _) = mixed("quartic");
    let op = Operator::new(&problem);
    let mut l = loaded(&problem, &op, &[3, 2], "quartic-point");
    let mut draw = stream("quartic-direction");
    let d: Vec<f64> = (0..l.z.len()).map(|_| 0.3 * draw.normal()).collect();
    l.compute_gradient();
    let (value, gradient) = (l.value(), l.gradient.clone());
    let q = l.line(&d);
    assert!((q[0] - dot(&gradient, &d)).abs() < 1e-12 * (1.0 + q[0].abs()));
    let base = l.z.clone();
    for t in [-1.5, -0.4, 0.2, 1.0, 2.5] {
        l.z.copy_from_slice(&base);
        axpy(t, &d, &mut l.z);
        l.refresh();
        let model = value + t * (q[0] + t * (q[1] + t * (q[2] + t * q[3])));
        assert!((l.value() - model).abs() < 1e-11 * (1.0 + model.abs()), "t = {t}");
    }
    // Hessian form by a difference of gradients: <H d, d> = 2 q2.
    let slope_at = |t: f64, l: &mut Lagrangian<'_>| {
        l.z.copy_from_slice(&base);
        axpy(t, &d, &mut l.z);
        l.refresh();
        l.compute_gradient();
        dot(&l.gradient, &d)
    };
    let h = 1e-3;
    let coarse = (slope_at(2.0 * h, &mut l) - slope_at(-2.0 * h, &mut l)) / (4.0 * h);
    let fine = (slope_at(h, &mut l) - slope_at(-h, &mut l)) / (2.0 * h);
    let curvature = (4.0 * fine - coarse) / 3.0;
    assert!(
        (curvature - 2.0 * q[1]).abs() < 1e-8 * (1.0 + curvature.abs()),
        "{curvature} {}",
        q[1]
    );
    // The update equals the recomputation.
    l.z.copy_from_slice(&base);
    l.refresh();
    l.line(&d);
    l.advance(0.7, &d);
    let (kept, cost) = (l.residual.clone(), l.cost);
    l.refresh();
    assert!((cost - l.cost).abs() < 1e-13);
    assert!(kept.iter().zip(&l.residual).all(|(a, b)| (a - b).abs() < 1e-13));
}

#[test]
fn export_and_import_undo_each_other() {
    let (problem, factors, x) = mixed("export");
    let op = Operator::new(&problem);
    let mut l = Lagrangian::new(&problem, &op, &[3, 2]);
    let y: Vec<f64> = (0..12).map(|i| i as f64 - 4.0).collect();
    l.import(&factors, &x, &y);
    assert!(norm2(&l.residual) < 1e-13, "the planted point is feasible: {}", norm2(&l.residual));
    let (back, orthant, again) = l.export();
    for (a, b) in back.iter().zip(&factors) {
        assert!(a.data.iter().zip(&b.data).all(|(a, b)| (a - b).abs() < 1e-13));
    }
    assert!(orthant.iter().zip(&x).all(|(a, b)| (a - b).abs() < 1e-13));
    assert!(again.iter().zip(&y).all(|(a, b)| (a - b).abs() < 1e-12));
}

fn run(problem: &Problem, widths: Vec<usize>, lift: Lift, label: &str) -> AlmSolution {
    let op = Operator::new(problem);
    let mut params = AlmParams::with_widths(widths);
    params.lift = lift;
    let mut meter = Meter::unlimited();
    solve(problem, &op, &params, &mut stream(label), &mut meter).unwrap()
}

/// Closed forms: odd cycles (n/2)(1 + cos(pi/n)); vertex-transitive graphs n lambda_max(L)/4 (C. Delorme and S.
/// Poljak, Mathematical Programming 62:557-574, 1993, from memory): Petersen 10 * 5 / 4.
#[test]
fn max_cut_relaxations_reach_their_closed_forms_on_both_paths_and_are_certified() {
    let pi = std::f64::consts::PI;
    let odd = |n: usize| n as f64 / 2.0 * (1.0 + (pi / n as f64).cos());
    assert!((odd(5) - 4.5225425).abs() < 1e-7 && (odd(7) - 6.6533910).abs() < 1e-7);
    let cases = [
        ("C5", max_cut(5, &cycle(5)), odd(5)),
        ("C7", max_cut(7, &cycle(7)), odd(7)),
        ("Petersen", max_cut(10, &petersen()), 12.5),
    ];
    for (name, problem, value) in cases {
        let width = problem.rank_bound() + 1;
        for general in [false, true] {
            let problem = if general { with_trace_row(&problem) } else { problem.clone() };
            let solution = run(&problem, vec![width], Lift::WhenNeeded, name);
            let info = &solution.info;
            assert!((-info.objective - value).abs() < 1e-8, "{name} {general}: {info:?}");
            assert!(info.feasibility < 1e-9, "{name} {general}: {info:?}");
            let certificate = info.certificate.as_ref().unwrap();
            assert!(certificate.gap < 1e-7, "{name} {general}: {certificate:?}");
            assert!((certificate.bound + value).abs() < 1e-6, "{name}: {certificate:?}");
        }
    }
}

/// The 6 x 6 cost with a spurious minimum at width 2 (I. Waldspurger and A. Waters, SIAM Journal on Optimization
/// 30:2577-2602, 2020, 10.1137/19M1303162 from memory; the numbers are our own construction).
pub(crate) fn trap() -> (Problem, Factor) {
    let rows: [[f64; 6]; 6] = [
        [631.0, -92.0, -65.0, 169.0, -308.0, -335.0],
        [-92.0, 694.0, -20.0, -308.0, 106.0, -380.0],
        [-65.0, -20.0, 775.0, -335.0, -380.0, 25.0],
        [169.0, -308.0, -335.0, 631.0, -92.0, -65.0],
        [-308.0, 106.0, -380.0, -92.0, 694.0, -20.0],
        [-335.0, -380.0, 25.0, -65.0, -20.0, 775.0],
    ];
    let mut entries = Vec::new();
    for (i, row) in rows.iter().enumerate() {
        for (j, value) in row.iter().enumerate().skip(i) {
            entries.push((i, j, *value));
        }
    }
    let data = vec![1.0, 0.0, 0.0, 1.0, -0.6, -0.8, -1.0, 0.0, 0.0, -1.0, 0.6, 0.8];
    let v = Factor { order: 6, width: 2, data };
    (unit_diagonal(SparseSymmetric::gather(6, entries), Some(1)), v)
}

#[test]
fn the_trap_holds_at_width_two_and_lets_go_at_width_three() {
    let (problem, v) = trap();
    let op = Operator::new(&problem);
    let blocks = spheres::cost::recognise(&problem, &op.blocks).unwrap();
    let mut meter = Meter::unlimited();
    let params =
        spheres::trust::TrustParams { tolerance: 1e-12, outer: 100, inner: 100, constant: None };
    let objective = |q: &[f64], width: usize| {
        let mut image = vec![0.0; q.len()];
        blocks[0].product(q, width, &mut image);
        dot(q, &image) + blocks[0].constant()
    };
    // 1. Exactly at V nothing moves: CV = 300 V, a second-order point of value 1800.
    let mut ws = spheres::trust::TrustWorkspace::default();
    let mut q = v.data.clone();
    spheres::trust::minimise(&blocks[0], &mut q, 2, &params, &mut ws, &mut meter);
    assert!((objective(&q, 2) - 1800.0).abs() < 1e-9, "{}", objective(&q, 2));
    // 2. Near V at width 2 it comes back: V is a minimum there.
    let mut draw = stream("trap");
    q.iter_mut().for_each(|value| *value += 1e-3 * draw.normal());
    for row in q.chunks_exact_mut(2) {
        let norm = row[0].hypot(row[1]);
        row.iter_mut().for_each(|value| *value /= norm);
    }
    spheres::trust::minimise(&blocks[0], &mut q, 2, &params, &mut ws, &mut meter);
    assert!((objective(&q, 2) - 1800.0).abs() < 1e-6, "{}", objective(&q, 2));
    // 3. At width 3 the same disturbance leaves for the optimum 0.
    let mut wide: Vec<f64> = v.data.chunks_exact(2).flat_map(|row| [row[0], row[1], 0.0]).collect();
    wide.iter_mut().for_each(|value| *value += 1e-3 * draw.normal());
    for row in wide.chunks_exact_mut(3) {
        let norm = norm2(row);
        row.iter_mut().for_each(|value| *value /= norm);
    }
    spheres::trust::minimise(&blocks[0], &mut wide, 3, &params, &mut ws, &mut meter);
    assert!(objective(&wide, 3).abs() < 1e-6, "{}", objective(&wide, 3));
    // 4. The engine with its lift finds the optimum at any width, certified.
    for width in [1, 2, 3] {
        let solution = run(&problem, vec![width], Lift::WhenNeeded, "trap-engine");
        assert!(solution.info.objective.abs() < 1e-5, "{:?}", solution.info);
        assert!(solution.info.certificate.unwrap().gap < 1e-6);
    }
}

#[test]
fn the_general_path_also_stays_at_the_trap_and_certification_tells() {
    let (problem, v) = trap();
    let problem = with_trace_row(&problem);
    let op = Operator::new(&problem);
    let mut y = vec![300.0; 6];
    y.push(0.0);
    let mut l = Lagrangian::new(&problem, &op, &[2]);
    l.import(std::slice::from_ref(&v), &[], &y);
    l.sigma = 5.0;
    l.refresh();
    l.compute_gradient();
    assert!(norm2(&l.gradient) < 1e-12, "V is critical: {}", norm2(&l.gradient));
    let settings = CertificateParams::default();
    let mut meter = Meter::unlimited();
    let found = certify(&problem, &op, &[v], &[], &y, &settings, &mut meter);
    // C - 300 I has the eigenvector 1 of value -300: C1 = 0.
    assert!((found.least + 300.0).abs() < 1e-9, "{found:?}");
    assert!((found.bound + 0.0).abs() < 1e-9, "b'y + 6 * (-300) = 0: {found:?}");
    let solution = run(&problem, vec![3], Lift::WhenNeeded, "trap-general");
    assert!(solution.info.objective.abs() < 1e-5, "{:?}", solution.info);
}

/// A signed graph without frustration: cost D L D with D = diag(signs), optimum 0 at xx'.
pub(crate) fn balanced(order: usize, extra: usize, label: &str) -> (Problem, Vec<f64>) {
    let mut draw = stream(label);
    let signs: Vec<f64> = (0..order).map(|_| draw.sign() as f64).collect();
    let mut edges = Vec::new();
    for i in 1..order {
        edges.push((draw.index(i), i));
    }
    for _ in 0..extra {
        let (i, j) = (draw.index(order), draw.index(order));
        if i != j {
            edges.push((i, j));
        }
    }
    let mut entries = Vec::new();
    for (i, j) in edges {
        entries.push((i, i, 1.0));
        entries.push((j, j, 1.0));
        entries.push((i, j, -signs[i] * signs[j]));
    }
    (unit_diagonal(SparseSymmetric::gather(order, entries), Some(1)), signs)
}

#[test]
fn a_balanced_graph_gives_its_signs_at_widths_one_and_two() {
    let (problem, signs) = balanced(400, 300, "balanced");
    for width in [1, 2] {
        let solution = run(&problem, vec![width], Lift::WhenNeeded, "balanced-engine");
        assert!(solution.info.objective.abs() < 1e-6, "{:?}", solution.info);
        assert!(solution.info.certificate.as_ref().unwrap().gap < 1e-6, "{:?}", solution.info);
        let factor = &solution.factors[0];
        let flip = factor.row(0)[0] * signs[0];
        for i in 0..400 {
            let along: f64 = factor.row(0).iter().zip(factor.row(i)).map(|(a, b)| a * b).sum();
            assert!((along - signs[0] * signs[i]).abs() < 1e-6, "row {i}, {flip}");
        }
    }
}

#[test]
fn a_time_limit_still_gives_a_point() {
    let (problem, _) = balanced(3000, 3000, "limit");
    let op = Operator::new(&problem);
    let budget = crate::budget::Budget { wall: std::time::Duration::ZERO, memory: None };
    let interrupt = std::sync::Arc::new(std::sync::atomic::AtomicBool::new(false));
    let mut meter = Meter::start(budget, interrupt, crate::budget::Tracing::Off);
    std::thread::sleep(std::time::Duration::from_millis(2));
    let params = AlmParams::with_widths(vec![2]);
    let solution = solve(&problem, &op, &params, &mut stream("limit"), &mut meter).unwrap();
    assert_eq!(solution.info.stop, StopReason::TimeLimit);
    assert!(solution.info.feasibility < 1e-12, "unit rows are feasible");
    assert!(solution.info.certificate.is_none());
}

/// The products with the Hessian, against differences of gradients (Richardson's rule leaves nothing: the gradient is cubic).
#[test]
fn hessian_products_are_difference_quotients_of_the_gradient() {
    let (problem, _, _) = mixed("hessian");
    let op = Operator::new(&problem);
    let mut l = loaded(&problem, &op, &[3, 2], "hessian-point");
    let mut draw = stream("hessian-direction");
    let d: Vec<f64> = (0..l.z.len()).map(|_| draw.normal()).collect();
    let base = l.z.clone();
    let gradient_at = |t: f64, l: &mut Lagrangian<'_>| {
        l.z.copy_from_slice(&base);
        axpy(t, &d, &mut l.z);
        l.refresh();
        l.compute_gradient();
        l.gradient.clone()
    };
    let h = 1e-2;
    let points: Vec<Vec<f64>> =
        [2.0 * h, -2.0 * h, h, -h].iter().map(|t| gradient_at(*t, &mut l)).collect();
    gradient_at(0.0, &mut l);
    let (mut adjoint, mut image) = (l.empty_slacks(), vec![0.0; d.len()]);
    let mut product = vec![0.0; d.len()];
    l.hessian_times(&d, &mut adjoint, &mut image, &mut product);
    let size = norm2(&product);
    for (i, value) in product.iter().enumerate() {
        let coarse = (points[0][i] - points[1][i]) / (4.0 * h);
        let fine = (points[2][i] - points[3][i]) / (2.0 * h);
        let quotient = (4.0 * fine - coarse) / 3.0;
        assert!((value - quotient).abs() < 1e-9 * (1.0 + size), "{i}: {value} {quotient}");
    }
    // The form agrees with the quartic of the line.
    let q = l.line(&d);
    assert!((dot(&d, &product) - 2.0 * q[1]).abs() < 1e-11 * (1.0 + q[1].abs()));
}

/// Both inner solvers reach the closed form of the 5-cycle (n/2)(1 + cos(pi/n)); Newton in fewer inner steps.
#[test]
fn truncated_newton_steps_reach_the_same_optimum_in_fewer_steps() {
    let problem = with_trace_row(&max_cut(5, &cycle(5)));
    let value = 2.5 * (1.0 + (std::f64::consts::PI / 5.0).cos());
    let op = Operator::new(&problem);
    let mut steps = Vec::new();
    for solver in [InnerSolver::Lbfgs, InnerSolver::Newton] {
        let mut params = AlmParams::with_widths(vec![3]);
        params.solver = solver;
        params.finish = Finish::Plain;
        params.lift = Lift::Never;
        let mut meter = Meter::unlimited();
        let solution = solve(&problem, &op, &params, &mut stream("inner"), &mut meter).unwrap();
        let info = &solution.info;
        assert!((-info.objective - value).abs() < 1e-7, "{solver:?}: {info:?}");
        assert!(info.certificate.as_ref().unwrap().gap < 1e-6, "{solver:?}: {info:?}");
        steps.push(meter.effort.inner_steps);
    }
    assert!(steps[1] < steps[0], "{steps:?}");
}

/// Started within 1e-6 of a saddle with a small gradient, truncated Newton steps leave it along negative curvature.
#[test]
fn truncated_newton_steps_leave_a_saddle() {
    let (problem, v) = trap();
    let problem = with_trace_row(&problem);
    let op = Operator::new(&problem);
    let mut y = vec![300.0; 6];
    y.push(0.0);
    // [V, 0] at width 3 is a saddle: C - 300 I has the eigenvector 1 of value -300.
    let mut l = Lagrangian::new(&problem, &op, &[3]);
    l.import(&[start::resized(&v, 3)], &[], &y);
    let place = l.layout.ranges[0].start;
    (0..6).for_each(|i| l.z[place + 3 * i + 2] += 1e-6);
    l.sigma = descent::FIRST_SIGMA;
    let params = descent::DescentParams {
        feasibility: 1e-9,
        stationarity: 1e-9,
        outer: 60,
        inner: 200,
        pairs: 8,
        solver: InnerSolver::Newton,
    };
    let mut ws = descent::DescentWorkspace::new(l.layout.length(), 8);
    let mut meter = Meter::unlimited();
    let info = descent::descend(&problem, &mut l, &params, &mut ws, &mut meter);
    assert!(info.inner > 0, "{info:?}");
    // The start was feasible, so that the outer loop has no better residual to go by and leaves the multipliers; the
    // direction is what counts here: all rows are parallel, as in the optimum, and the cost is near 0.
    let objective = l.cost * l.scaling.variable / l.scaling.cost;
    assert!(objective.abs() < 1e-4, "{objective}, the trap has 1800");
}
