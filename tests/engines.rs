//! Properties of the interior-point and reduction engines on problems with several blocks, a
//! nonnegative part, and sparse, dense and rank-one constraints.

use rankassay::budget::Meter;
use rankassay::card::{Setting, Settings};
use rankassay::engines::ipm::{self, Outcome};
use rankassay::engines::reduction::{Params, Rule, Spectral, reduce};
use rankassay::families;
use rankassay::formats::sdpa;
use rankassay::linalg::Mat;
use rankassay::methods::{self, Trial};
use rankassay::problem::{
    Block, Coefficient, Functional, Operator, OuterSum, OuterTerm, Problem, SparseSymmetric,
    SparseVector,
};
use rankassay::referee::{self, Known, KnownOptimum, Tolerance};
use rankassay::seed::Stream;
use std::collections::BTreeMap;
use std::path::Path;

/// Draws a coefficient of one of the three kinds.
fn coefficient(n: usize, kind: usize, stream: &mut Stream) -> Coefficient {
    if kind == 2 {
        let pairs = (0..n).map(|i| (i as u32, stream.normal())).collect();
        let vector = SparseVector::gather(pairs);
        let term = OuterTerm { weight: stream.normal(), vector };
        return Coefficient::Outer(OuterSum { order: n, terms: vec![term] });
    }
    let count = if kind == 0 { 4 } else { n * n };
    let entries = (0..count).map(|_| (stream.index(n), stream.index(n), stream.normal())).collect();
    Coefficient::Sparse(SparseSymmetric::gather(n, entries))
}

/// Draws a problem on two blocks and a nonnegative part for which X = I, x = 1 is strictly feasible,
/// and so is S = I, z = 1 with random multipliers: both sides attain equal optima.
fn random_problem(orders: [usize; 2], orthant: usize, m: usize, seed: u64) -> Problem {
    let mut stream = Stream::named(seed, &["random problem"]);
    let mut constraints = Vec::new();
    for k in 0..m {
        let parts = (0..2).map(|b| (b, coefficient(orders[b], (k + b) % 3, &mut stream))).collect();
        let pairs = (0..orthant).map(|j| (j as u32, stream.normal())).collect();
        constraints.push(Functional { parts, orthant: SparseVector::gather(pairs) });
    }
    let rhs = constraints.iter().map(value_at_identity).collect();
    let mut cost: Vec<Vec<(usize, usize, f64)>> =
        orders.iter().map(|n| (0..*n).map(|i| (i, i, 1.0)).collect()).collect();
    let mut cost_orthant: Vec<(u32, f64)> = (0..orthant).map(|j| (j as u32, 1.0)).collect();
    for functional in &constraints {
        let y = stream.normal();
        for (b, part) in &functional.parts {
            cost[*b].extend(part.to_sparse().iter().map(|(i, j, v)| (i, j, y * v)));
        }
        cost_orthant.extend(functional.orthant.iter().map(|(j, v)| (j as u32, y * v)));
    }
    let parts = cost
        .into_iter()
        .enumerate()
        .map(|(b, e)| (b, Coefficient::Sparse(SparseSymmetric::gather(orders[b], e))))
        .collect();
    let cost = Functional { parts, orthant: SparseVector::gather(cost_orthant) };
    let blocks = orders.iter().map(|n| Block { order: *n, rank: None }).collect();
    Problem::new(blocks, orthant, cost, constraints, rhs).unwrap()
}

fn value_at_identity(functional: &Functional) -> f64 {
    let blocks: f64 = functional
        .parts
        .iter()
        .flat_map(|(_, part)| part.to_sparse().iter().collect::<Vec<_>>())
        .filter(|(i, j, _)| i == j)
        .map(|(_, _, value)| value)
        .sum();
    blocks + functional.orthant.values.iter().sum::<f64>()
}

fn residual(problem: &Problem, points: &[Mat<f64>], orthant: &[f64]) -> f64 {
    let op = Operator::new(problem);
    let mut image = vec![0.0; problem.rhs().len()];
    op.apply_dense(points, orthant, &mut image);
    let norm = |v: &mut dyn Iterator<Item = f64>| v.map(|x| x * x).sum::<f64>().sqrt();
    let difference = norm(&mut image.iter().zip(problem.rhs()).map(|(a, b)| a - b));
    difference / (1.0 + norm(&mut problem.rhs().iter().copied()))
}

/// Strong duality: with strictly feasible points on both sides the values meet.
#[test]
fn primal_and_dual_values_meet_on_mixed_problems() {
    for (seed, orders, orthant, m) in
        [(1, [6, 9], 4, 12), (2, [30, 12], 7, 40), (3, [3, 70], 1, 25), (4, [25, 26], 0, 60)]
    {
        let problem = random_problem(orders, orthant, m, seed);
        let mut meter = Meter::unlimited();
        let solution = ipm::solve(&problem, &ipm::Params::default(), None, &mut meter).unwrap();
        let info = solution.info;
        assert_eq!(info.outcome, Outcome::Optimal, "seed {seed}: {info:?}");
        let gap = (info.primal_value - info.dual_value).abs();
        assert!(gap <= 1e-8 * (1.0 + info.primal_value.abs()), "seed {seed}: gap {gap:e}");
        let feasibility = residual(&problem, &solution.points, &solution.orthant);
        assert!(feasibility <= 1e-9, "seed {seed}: {feasibility:e}");
        assert!(solution.orthant.iter().all(|x| *x > 0.0));
    }
}

/// Reduction keeps constraints and value, and ends at or below the bound: the sum of r(r+1)/2 over
/// the blocks and of the positive scalars is at most m (Barvinok 1995; Pataki 1998).
#[test]
fn reduction_keeps_the_value_and_meets_the_bound() {
    for (seed, rule) in [(5, Rule::Largest), (6, Rule::BothEnds), (7, Rule::Largest)] {
        // A cost of zero on the first block leaves a large optimal face.
        let drawn = random_problem([12, 10], 3, 14, seed);
        let cost = Functional::default();
        let problem = Problem::new(
            drawn.blocks().to_vec(),
            drawn.orthant(),
            cost,
            drawn.constraints().to_vec(),
            drawn.rhs().to_vec(),
        )
        .unwrap();
        let mut meter = Meter::unlimited();
        let identity = |n: usize| Mat::<f64>::identity(n, n);
        let points = vec![identity(12), identity(10)];
        let mut point = Spectral::of(&points, &[1.0; 3], 1e-9, &mut meter).unwrap();
        let op = Operator::new(&problem);
        let params = Params { rule, cut: 1e-9, null: 1e-10 };
        let info = reduce(&problem, &op, &mut point, &params, &mut meter).unwrap();
        assert!(info.ranks.windows(2).all(|pair| pair[1] < pair[0]), "{:?}", info.ranks);
        assert_eq!(info.free_directions, 0);
        let used: usize =
            point.parts.iter().map(|p| p.values.len() * (p.values.len() + 1) / 2).sum::<usize>()
                + point.orthant.iter().filter(|x| **x > 0.0).count();
        assert!(used <= 14, "{used} with {:?}", info.ranks);
        let factors: Vec<_> = point.parts.iter().map(|part| part.factor()).collect();
        let mut image = vec![0.0; 14];
        op.apply_factors(&factors, &point.orthant, &mut image);
        let worst = image.iter().zip(problem.rhs()).map(|(a, b)| (a - b).abs());
        let scale = problem.rhs().iter().fold(1.0_f64, |m, b| m.max(b.abs()));
        let worst = worst.fold(0.0_f64, f64::max);
        assert!(worst <= 1e-8 * scale, "seed {seed}: {worst:e}");
    }
}

#[test]
fn an_infeasible_problem_is_recognised() {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("instances/small/infeasible.dat-s");
    let problem = sdpa::read(&path).unwrap().problem;
    let mut meter = Meter::unlimited();
    let solution = ipm::solve(&problem, &ipm::Params::default(), None, &mut meter).unwrap();
    assert_eq!(solution.info.outcome, Outcome::PrimalInfeasible);
}

/// Sparse, dense and rank-one measurements lead to the same proved optimum.
#[test]
fn every_kind_of_measurement_is_solved() {
    for kind in ["sparse", "dense", "rank-one"] {
        let family = families::find("tight-unique").unwrap();
        let given = BTreeMap::from([
            ("order".to_owned(), Setting::Integer(40)),
            ("measurements".to_owned(), Setting::Word(kind.to_owned())),
        ]);
        let parameters = Settings::resolve(family.card().parameters, &given).unwrap();
        let planted = family.plant(&parameters, &mut Stream::named(9, &["kind", kind])).unwrap();
        for id in ["relax-ipm", "reduce-both-ends", "factored-alm", "ipm-tail-weight"] {
            let method = methods::find(id).unwrap();
            let mut trial = Trial {
                options: Settings::resolve(method.card().options, &BTreeMap::new()).unwrap(),
                meter: Meter::unlimited(),
                stream: Stream::named(9, &[id]),
            };
            let answer = method.solve(&planted.problem, &mut trial).unwrap();
            let known = Known {
                optimum: KnownOptimum::Certified(planted.optimum),
                dual: planted.dual.as_deref(),
                unique_point: Some(&planted.point),
            };
            let tolerance = Tolerance::default();
            let judged = referee::judge(&planted.problem, &answer, &known, &tolerance).unwrap();
            assert_eq!(judged.finding, referee::Finding::Solved, "{id}, {kind}: {}", judged.reason);
            assert!(judged.distance.unwrap() <= 1e-3, "{id}, {kind}: {:?}", judged.distance);
        }
    }
}
