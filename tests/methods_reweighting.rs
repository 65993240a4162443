//! Published properties of the rank-promoting methods that repeat a convex relaxation with another
//! cost, and of what they rest on: the NT direction and the warm start of the interior-point engine.

#![allow(clippy::print_stderr)] // A skipped check says so.

use rankassay::budget::Meter;
use rankassay::card::{Setting, Settings};
use rankassay::engines::ipm::{self, Beginning, NewtonDirection, Outcome, Session};
use rankassay::engines::reweighting::{
    Inner, Measured, Params, Polish, Stage, TailProjector, Turn, WeightRule, Weighted, run,
};
use rankassay::families;
use rankassay::formats::sdpa;
use rankassay::linalg::dense::{self, Accumulate};
use rankassay::linalg::{Mat, MatRef};
use rankassay::methods::complementarity_penalty::{
    ComplementRule, ComplementarityPenalty, Momentum,
};
use rankassay::methods::convex_iteration::ConvexIteration;
use rankassay::methods::iterative_rank_minimisation::{
    Bound, Columns, EigenvalueBound, IterativeRankMinimisation,
};
use rankassay::methods::ky_fan_dc::KyFanDc;
use rankassay::methods::log_det::{LogDet, LogDetRule};
use rankassay::methods::relax_ipm::RelaxIpm;
use rankassay::methods::reweighted_trace::{PowerRule, ReweightedTrace};
use rankassay::methods::{Method, Trial};
use rankassay::problem::{
    Block, Coefficient, Functional, Planted, Problem, SparseSymmetric, SparseVector,
};
use rankassay::referee::{Finding, Known, KnownOptimum, Tolerance, judge};
use rankassay::seed::Stream;
use std::collections::BTreeMap;
use std::path::PathBuf;

fn planted(family: &str, order: i64, index: &str) -> Planted {
    let family = families::find(family).unwrap();
    let mut given = BTreeMap::new();
    if order > 0 {
        given.insert("order".to_owned(), Setting::Integer(order));
    }
    let settings = Settings::resolve(family.card().parameters, &given).unwrap();
    family.plant(&settings, &mut Stream::named(21, &["plant", family.card().id, index])).unwrap()
}

fn relaxed(problem: &Problem, newton: NewtonDirection) -> ipm::Solution {
    let params = ipm::Params { newton, ..ipm::Params::default() };
    ipm::solve(problem, &params, None, &mut Meter::unlimited()).unwrap()
}

/// Third-party test data lie beside the checkout where they are at hand; they are never part of it.
fn data(name: &str) -> Option<PathBuf> {
    let path = PathBuf::from(concat!(env!("CARGO_MANIFEST_DIR"), "/../shared/data")).join(name);
    if !path.exists() {
        eprintln!("skipped: the test problem {name} is not at hand");
        return None;
    }
    Some(path)
}

/// Both directions solve the same problem: the values meet the planted optimum of tight families, and each
/// other on every family (blocks, nonnegative parts and gaps included).
#[test]
fn both_directions_reach_the_same_optimum_of_planted_problems() {
    for (family, order, tight) in [
        ("tight-unique", 20, true),
        ("balanced-graph", 40, true),
        ("orthogonal-sync", 30, true),
        ("trust-region", 12, true),
        ("flat-face", 20, true),
        ("sign-trap", 20, true),
        ("ky-fan-gap", 8, false),
        ("lattice-tiles", 16, false),
    ] {
        let planted = planted(family, order, "0");
        let hkm = relaxed(&planted.problem, NewtonDirection::Hkm);
        let nt = relaxed(&planted.problem, NewtonDirection::Nt);
        for (name, solution) in [("hkm", &hkm), ("nt", &nt)] {
            assert!(
                solution.info.residuals.worst() <= 1e-7,
                "{family}, {name}: {:?}",
                solution.info
            );
        }
        let size = 1.0 + planted.optimum.abs();
        let difference = (hkm.info.primal_value - nt.info.primal_value).abs();
        assert!(difference <= 1e-7 * size, "{family}: {difference:e}");
        if tight {
            let error = (nt.info.primal_value - planted.optimum).abs();
            assert!(error <= 1e-7 * size, "{family}: {error:e}");
        }
    }
}

/// The option of `relax-ipm` reaches the engine: only the NT direction decomposes the blocks.
#[test]
fn the_relaxation_method_takes_a_direction() {
    let planted = planted("tight-unique", 16, "option");
    for (word, decomposes) in [("hkm", false), ("nt", true)] {
        let given = BTreeMap::from([("direction".to_owned(), Setting::Word(word.to_owned()))]);
        let mut trial = Trial {
            options: Settings::resolve(RelaxIpm.card().options, &given).unwrap(),
            meter: Meter::unlimited(),
            stream: Stream::named(4, &["direction"]),
        };
        RelaxIpm.solve(&planted.problem, &mut trial).unwrap();
        assert_eq!(trial.meter.effort.eigendecompositions > 0, decomposes, "{word}");
    }
}

/// Values as published with SDPLIB 1.2 (B. Borchers, Optim. Methods Softw. 11(1):683-690, 1999), in the
/// file format's sign. (gpp100, without an interior, is left out: the NT direction stalls there at a gap of
/// 1e-5, as its documentation says.)
#[test]
fn the_nt_direction_reaches_published_values() {
    for (name, optimum, digits) in [
        ("mcp100", 226.157351, 7),
        ("theta1", 23.0, 7),
        ("truss1", -8.9999963, 7),
        ("truss3", -9.1099962, 7),
        ("control1", 17.7846267, 6),
    ] {
        let Some(path) = data(&format!("sdplib/{name}.dat-s")) else { continue };
        let problem = sdpa::read(&path).unwrap().problem;
        let nt = relaxed(&problem, NewtonDirection::Nt);
        let hkm = relaxed(&problem, NewtonDirection::Hkm);
        eprintln!("{name}: {} and {} iterations", nt.info.iterations, hkm.info.iterations);
        // The file format maximises <F_0, Y>; C = -F_0.
        let tolerance = 10.0_f64.powi(-digits) * (1.0 + f64::abs(optimum));
        assert!((-nt.info.primal_value - optimum).abs() <= tolerance, "{name}: {:?}", nt.info);
        let difference = (hkm.info.primal_value - nt.info.primal_value).abs();
        assert!(difference <= tolerance, "{name}: {difference:e}");
    }
}

/// A warm run ends at the value of a cold one, in fewer iterations when the cost moved little; the saving
/// fades as the move grows, and a warm run never starts from a rung that cannot bear the move.
#[test]
fn warm_runs_end_where_cold_ones_do() {
    for family in ["tight-unique", "flat-face", "lattice-tiles", "ky-fan-gap"] {
        let planted = planted(family, if family == "ky-fan-gap" { 8 } else { 16 }, "warm");
        let problem = &planted.problem;
        let n = problem.blocks()[0].order;
        let mut stream = Stream::named(5, &["warm", family]);
        let g = Mat::from_fn(n, n, |_, _| stream.normal());
        let mut meter = Meter::unlimited();
        let params = ipm::Params { tolerance: 1e-8, ..ipm::Params::default() };
        let mut warm = Session::new(problem, NewtonDirection::Hkm, &meter).unwrap();
        let mut cold = Session::new(problem, NewtonDirection::Hkm, &meter).unwrap();
        let first = warm.solve(Beginning::Warm, &params, &mut meter).unwrap();
        let plain = ipm::solve(problem, &params, None, &mut meter).unwrap();
        assert!(
            (first.primal_value - plain.info.primal_value).abs()
                <= 1e-6 * (1.0 + first.primal_value.abs())
        );
        for share in [1e-4, 1e-2, 1.0] {
            let mut weight = Mat::zeros(n, n);
            let size = share * problem.cost().norm() / (n as f64);
            dense::gemm(
                weight.as_mut(),
                dense::Accumulate::Replace,
                size / n as f64,
                g.as_ref(),
                g.transpose(),
            );
            dense::symmetrise(weight.as_mut());
            warm.set_weight(0, weight.as_ref());
            cold.set_weight(0, weight.as_ref());
            let before = warm.warm_runs();
            let a = warm.solve(Beginning::Warm, &params, &mut meter).unwrap();
            let b = cold.solve(Beginning::Cold, &params, &mut meter).unwrap();
            eprintln!(
                "{family}, move {share:e}: {} warm ({}), {} cold iterations",
                a.iterations,
                warm.warm_runs() - before,
                b.iterations
            );
            assert_eq!(a.outcome, Outcome::Optimal, "{family}, {share}: {a:?}");
            assert_eq!(b.outcome, Outcome::Optimal, "{family}, {share}: {b:?}");
            let difference = (a.primal_value - b.primal_value).abs();
            assert!(difference <= 1e-7 * (1.0 + b.primal_value.abs()), "{family}: {difference:e}");
            if share < 1e-3 {
                assert!(a.iterations < b.iterations, "{family}: {} {}", a.iterations, b.iterations);
            }
        }
    }
}

/// Accuracy of the inner solutions in the tests below.
const TOLERANCE: f64 = 1e-9;
/// By how much a monotone quantity may rise, relative to 1 + its size: what the inner accuracy leaves.
const SLACK: f64 = 1e-7;

fn params(share: f64, growth: f64, turns: usize) -> Params {
    Params {
        share,
        growth,
        hold: 0.7,
        tail: 1e-9,
        turns,
        restarts: 0,
        restart_growth: 1.0,
        polish: Polish::Off,
    }
}

fn turns(problem: &Problem, inner: &mut dyn Inner, params: &Params) -> Vec<Turn> {
    let mut stream = Stream::named(8, &["turns"]);
    run(problem, inner, params, &mut stream, &mut Meter::unlimited()).unwrap().1.turns
}

/// No turn raises `<C,X> + rho p(X)`, and some lower it.
#[track_caller]
fn assert_falling(name: &str, turns: &[Turn]) {
    let mut fallen = 0;
    for (k, turn) in turns.iter().enumerate() {
        let Some(before) = turn.before else { continue };
        let slack = SLACK * (1.0 + before.abs());
        assert!(turn.after <= before + slack, "{name}, turn {k}: {before} to {}", turn.after);
        fallen += usize::from(turn.after < before - 10.0 * slack);
    }
    assert!(turns.len() >= 3 && fallen >= 1, "{name}: {fallen} of {} turns fall", turns.len());
}

const GAPS_AND_FACES: [(&str, i64); 4] =
    [("lattice-tiles", 16), ("ky-fan-gap", 8), ("flat-face", 16), ("sign-trap", 14)];

/// Majorisation-minimisation (Fazel, Hindi, Boyd 2003; Mohan, Fazel 2012) and differences of convex functions
/// (Gotoh, Takeda, Tono 2018): the penalised objective does not rise at fixed parameters.
#[test]
fn penalised_objectives_never_rise() {
    let meter = Meter::unlimited();
    for (family, order) in GAPS_AND_FACES {
        let problem = planted(family, order, "falling").problem;
        for growth in [1.5, 8.0] {
            let params = params(0.05, growth, 12);
            let name = |rule: &str| format!("{rule} on {family}, growth {growth}");
            let rule = LogDetRule::new(0.2, 0.8, 1e-3);
            let mut inner = Weighted::new(&problem, rule, TOLERANCE, &meter).unwrap();
            assert_falling(&name("log-det"), &turns(&problem, &mut inner, &params));
            let rule = PowerRule::new(0.5, 0.2, 1.3, 1e-3);
            let mut inner = Weighted::new(&problem, rule, TOLERANCE, &meter).unwrap();
            assert_falling(&name("power"), &turns(&problem, &mut inner, &params));
            let mut inner = Weighted::new(&problem, TailProjector, TOLERANCE, &meter).unwrap();
            assert_falling(&name("tail"), &turns(&problem, &mut inner, &params));
            for momentum in [Momentum::Off, Momentum::On] {
                let rule = ComplementRule::new(0.3, momentum);
                let mut inner = Weighted::new(&problem, rule, TOLERANCE, &meter).unwrap();
                assert_falling(&name("complement"), &turns(&problem, &mut inner, &params));
            }
        }
    }
}

/// Takes the cost away: only the rank bound and the constraints are left.
fn feasibility(problem: &Problem) -> Problem {
    let (blocks, orthant) = (problem.blocks().to_vec(), problem.orthant());
    let (constraints, rhs) = (problem.constraints().to_vec(), problem.rhs().to_vec());
    Problem::new(blocks, orthant, Functional::default(), constraints, rhs).unwrap()
}

/// Convex iteration for pure feasibility (Dattorro): `<X,W>` falls monotonically, over the whole attempt.
#[test]
fn convex_iteration_is_monotone_for_feasibility() {
    let mut most = 0;
    for (family, order) in GAPS_AND_FACES {
        let problem = feasibility(&planted(family, order, "feasible").problem);
        let meter = Meter::unlimited();
        let mut inner = Weighted::new(&problem, TailProjector, TOLERANCE, &meter).unwrap();
        let fixed = Params { growth: 1.0, hold: 1.0, ..params(1.0, 1.0, 25) };
        let turns = turns(&problem, &mut inner, &fixed);
        let mut last = f64::INFINITY;
        for (k, turn) in turns.iter().enumerate() {
            assert!(turn.value == 0.0 && turn.rho == 1.0);
            let before = turn.before.unwrap();
            assert!(before <= last + SLACK * (1.0 + last.min(1e9)), "{family}, turn {k}");
            assert!(turn.after <= before + SLACK * (1.0 + before), "{family}, turn {k}: {turn:?}");
            last = turn.after;
        }
        most = most.max(turns.len());
    }
    assert!(most >= 2, "no feasibility problem took two turns");
}

/// e falls monotonically, bounds the (r+1)st eigenvalue, and `<C,X> + w lambda_{r+1}` does not rise in a turn.
#[test]
fn the_eigenvalue_bound_falls() {
    for (family, order) in [("lattice-tiles", 16), ("ky-fan-gap", 8), ("flat-face", 12)] {
        let problem = planted(family, order, "bound").problem;
        let mut inner =
            EigenvalueBound::new(&problem, Columns::All, Bound::Falling, TOLERANCE).unwrap();
        let growing = Params { hold: 0.0, ..params(0.1, 1.5, 12) };
        let taken = turns(&problem, &mut inner, &growing);
        assert_falling(family, &taken);
        let values = &inner.values;
        assert_eq!(values.len(), taken.len());
        for pair in values.windows(2) {
            assert!(pair[1] <= pair[0] + SLACK * (1.0 + pair[0]), "{family}: {values:?}");
        }
        for (turn, e) in taken.iter().zip(values) {
            // The penalty, (after - value) / rho, is the (r+1)st eigenvalue.
            let eigenvalue = (turn.after - turn.value) / turn.rho;
            assert!(eigenvalue <= e + 1e-6 * (1.0 + e), "{family}: {eigenvalue} above {e}");
        }
    }
}

fn random_point(n: usize, width: usize, stream: &mut Stream) -> Mat<f64> {
    let g = Mat::from_fn(n, width, |_, _| stream.normal());
    let mut x = Mat::zeros(n, n);
    dense::gemm(x.as_mut(), Accumulate::Replace, 1.0, g.as_ref(), g.transpose());
    dense::symmetrise(x.as_mut());
    x
}

/// Measures a point of a problem with one block.
fn measured(problem: &Problem, x: &Mat<f64>) -> Measured {
    let mut at = Measured::new(problem);
    at.points[0] = x.clone();
    at.decompose(&mut Meter::unlimited()).unwrap();
    at
}

/// T is a supergradient, `p(Y) <= p(X) + <T, Y - X>` for all PSD Y, and at random points, where p is smooth, its
/// gradient: central differences agree.
#[test]
fn weights_are_supergradients_of_their_penalties() {
    let problem = planted("tight-unique", 12, "gradient").problem;
    let mut stream = Stream::named(2, &["supergradient"]);
    let mut rules: Vec<(&str, Box<dyn WeightRule>)> = vec![
        ("log-det", Box::new(LogDetRule::new(0.1, 0.5, 1e-3))),
        ("power", Box::new(PowerRule::new(0.4, 0.1, 1.2, 1e-3))),
        ("power 1", Box::new(PowerRule::new(1.0, 0.1, 1.2, 1e-3))),
        ("tail", Box::new(TailProjector)),
    ];
    for (name, rule) in &mut rules {
        for _ in 0..20 {
            let x = random_point(12, 12, &mut stream);
            let at = measured(&problem, &x);
            rule.stage(Stage::First, &at);
            let mut weight = Mat::zeros(12, 12);
            let view = at.bounded().next().unwrap();
            rule.weigh(view, &mut weight);
            let here = rule.penalty(view);
            for width in [1, 2, 5, 12] {
                let y = random_point(12, width, &mut stream);
                let there = measured(&problem, &y);
                let value = rule.penalty(there.bounded().next().unwrap());
                let bound = here + inner(weight.as_ref(), &y) - inner(weight.as_ref(), &x);
                assert!(value <= bound + 1e-9 * (1.0 + bound.abs()), "{name}: {value} {bound}");
            }
            let d = random_point(12, 12, &mut stream);
            let h = 1e-6;
            let moved = |sign: f64| {
                let mut y = x.clone();
                dense::axpy_matrix(sign * h, d.as_ref(), y.as_mut());
                rule.penalty(measured(&problem, &y).bounded().next().unwrap())
            };
            let difference = (moved(1.0) - moved(-1.0)) / (2.0 * h);
            let exact = inner(weight.as_ref(), &d);
            let error = (difference - exact).abs();
            assert!(error <= 1e-5 * (1.0 + exact.abs()), "{name}: {difference} {exact}");
        }
    }
}

fn inner(a: MatRef<'_, f64>, b: &Mat<f64>) -> f64 {
    dense::dot_symmetric(a, b.as_ref())
}

/// At a fixed X, steps of U keep 0 <= U <= I and lead to the least penalty, the sum of min(lambda, theta).
#[test]
fn steps_of_the_complement_reach_the_capped_trace() {
    let problem = planted("tight-unique", 12, "complement").problem;
    let mut stream = Stream::named(4, &["complement"]);
    for momentum in [Momentum::Off, Momentum::On] {
        let start = measured(&problem, &random_point(12, 12, &mut stream));
        let mut rule = ComplementRule::new(0.4, momentum);
        rule.stage(Stage::First, &start);
        let view = start.bounded().next().unwrap();
        let n = view.values.len();
        let theta = 0.5 * (view.values[n - view.rank] + view.values[n - view.rank - 1]);
        let other = measured(&problem, &random_point(12, 12, &mut stream));
        let view = other.bounded().next().unwrap();
        let least: f64 = view.values.iter().map(|value| value.min(theta)).sum();
        let mut u = Mat::zeros(12, 12);
        let mut last = rule.penalty(view);
        assert!(last > least * 1.01, "the start is optimal already");
        for _ in 0..400 {
            rule.weigh(view, &mut u);
            let value = rule.penalty(view);
            assert!(value <= last + 1e-12 * last, "{momentum:?}: {last} to {value}");
            last = value;
            let of_u = measured(&problem, &u);
            let values = of_u.bounded().next().unwrap().values.to_vec();
            assert!(values[0] >= -1e-12 && values[n - 1] <= 1.0 + 1e-12, "{values:?}");
        }
        assert!(last <= least * (1.0 + 1e-6), "{momentum:?}: {last} for {least}");
    }
}

/// Returns the planted point of a single block.
fn planted_point(planted: &Planted) -> Mat<f64> {
    let factor = &planted.point[0];
    let mut x = Mat::zeros(factor.order, factor.order);
    for i in 0..factor.order {
        for j in 0..factor.order {
            x[(i, j)] = factor.row(i).iter().zip(factor.row(j)).map(|(a, b)| a * b).sum();
        }
    }
    x
}

/// A point of the target rank that is optimal with the weight made at it is a fixed point: with a unique
/// optimum of the relaxation at any weight, with a gap (where the relaxation is elsewhere) at a large one.
#[test]
fn points_of_the_target_rank_are_fixed() {
    for (family, order, weight, fixed) in [
        ("tight-unique", 16, 1.0, true),
        ("orthogonal-sync", 24, 1.0, true),
        ("lattice-tiles", 16, 20.0, true),
        ("lattice-tiles", 16, 0.01, false),
    ] {
        let planted = planted(family, order, "fixed");
        let x = planted_point(&planted);
        let at = measured(&planted.problem, &x);
        let mut meter = Meter::unlimited();
        let mut inner = Weighted::new(&planted.problem, TailProjector, TOLERANCE, &meter).unwrap();
        let mut next = Measured::new(&planted.problem);
        inner.turn(weight, &at, &mut next, &mut meter).unwrap();
        let mut change = next.points[0].clone();
        dense::axpy_matrix(-1.0, x.as_ref(), change.as_mut());
        let relative = dense::frobenius(change.as_ref()) / dense::frobenius(x.as_ref());
        assert_eq!(relative <= 1e-4, fixed, "{family}, weight {weight}: moved by {relative:e}");
    }
}

fn solves(method: &dyn Method, family: &str, order: i64, index: &str) -> bool {
    let planted = planted(family, order, index);
    let mut trial = Trial {
        options: Settings::resolve(method.card().options, &BTreeMap::new()).unwrap(),
        meter: Meter::unlimited(),
        stream: Stream::named(4, &["solve", family, index]),
    };
    let answer = method.solve(&planted.problem, &mut trial).unwrap();
    let known = Known {
        optimum: KnownOptimum::Certified(planted.optimum),
        dual: planted.dual.as_deref(),
        unique_point: None,
    };
    judge(&planted.problem, &answer, &known, &Tolerance::default()).unwrap().finding
        == Finding::Solved
}

/// Sign vectors in one block, unit vectors of the plane in another, coupled by two scalars x >= 0.
fn coupled() -> Problem {
    let entry = |block: usize, n: usize, i: usize, j: usize, value: f64| {
        (block, Coefficient::Sparse(SparseSymmetric::gather(n, vec![(i, j, value)])))
    };
    let mut constraints = Vec::new();
    let mut rhs = Vec::new();
    for (block, n) in [(0, 4), (1, 6)] {
        for i in 0..n {
            let part = entry(block, n, i, i, 1.0);
            constraints.push(Functional { parts: vec![part], ..Functional::default() });
            rhs.push(1.0);
        }
    }
    // X_12 of both blocks plus the first scalar is 1/2; X_34 of the second minus the other one is -1/4.
    let scalar = |index: u32, value: f64| SparseVector::gather(vec![(index, value)]);
    let parts = vec![entry(0, 4, 0, 1, 0.5), entry(1, 6, 0, 1, 0.5)];
    constraints.push(Functional { parts, orthant: scalar(0, 1.0) });
    rhs.push(0.5);
    constraints.push(Functional { parts: vec![entry(1, 6, 2, 3, 0.5)], orthant: scalar(1, -1.0) });
    rhs.push(-0.25);
    let mut stream = Stream::named(6, &["coupled"]);
    let mut random = |n: usize| {
        let pairs = (0..n).flat_map(|j| (0..j).map(move |i| (i, j)));
        let entries = pairs.map(|(i, j)| (i, j, stream.normal())).collect();
        Coefficient::Sparse(SparseSymmetric::gather(n, entries))
    };
    let parts = vec![(0, random(4)), (1, random(6))];
    let cost = Functional { parts, orthant: SparseVector::gather(vec![(0, 1.0), (1, 0.5)]) };
    let block = |order: usize, rank: usize| Block { order, rank: Some(rank) };
    Problem::new(vec![block(4, 1), block(6, 2)], 2, cost, constraints, rhs).unwrap()
}

/// Several bounded blocks and a nonnegative part are supported, as the cards say.
#[test]
fn several_blocks_and_scalars_end_feasible_at_their_ranks() {
    let problem = coupled();
    let list: [&dyn Method; 6] = [
        &ComplementarityPenalty,
        &ConvexIteration,
        &IterativeRankMinimisation,
        &KyFanDc,
        &LogDet,
        &ReweightedTrace,
    ];
    for method in list {
        let mut trial = Trial {
            options: Settings::resolve(method.card().options, &BTreeMap::new()).unwrap(),
            meter: Meter::unlimited(),
            stream: Stream::named(4, &["coupled"]),
        };
        let answer = method.solve(&problem, &mut trial).unwrap();
        let known = Known { optimum: KnownOptimum::Unknown, dual: None, unique_point: None };
        let judged = judge(&problem, &answer, &known, &Tolerance::default()).unwrap();
        let name = method.card().id;
        assert_eq!(judged.finding, Finding::Feasible, "{name}: {judged:?}");
        assert!(judged.feasibility.unwrap() <= 1e-8, "{name}: {judged:?}");
        let relaxed = relaxed(&problem, NewtonDirection::Hkm).info.dual_value;
        assert!(judged.objective.unwrap() >= relaxed - 1e-6, "{name}: below the relaxation");
    }
}

/// What the cards promise, with a gap and on a face: more than half of five instances each.
#[test]
fn gaps_and_faces_are_solved_more_often_than_not() {
    let cases: [(&dyn Method, &str, i64); 7] = [
        (&KyFanDc, "lattice-tiles", 36),
        (&KyFanDc, "frustrated-loops", 24),
        (&KyFanDc, "ky-fan-gap", 8),
        (&ComplementarityPenalty, "lattice-tiles", 16),
        (&ComplementarityPenalty, "ky-fan-gap", 8),
        (&ConvexIteration, "flat-face", 16),
        (&ConvexIteration, "lattice-tiles", 16),
    ];
    for (method, family, order) in cases {
        let solved =
            (0..5).filter(|k| solves(method, family, order, &format!("often {k}"))).count();
        assert!(solved >= 3, "{} on {family}: {solved} of 5", method.card().id);
    }
}
