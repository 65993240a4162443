//! Holds `relax-ipm` against published optimal values: test problems from files when they are at
//! hand, and closed forms that need no file.

#![allow(clippy::print_stderr)] // A skipped check says so.

use rankassay::budget::Meter;
use rankassay::card::Settings;
use rankassay::formats::sdpa;
use rankassay::methods::{self, Trial};
use rankassay::problem::{
    Answer, Block, Coefficient, Functional, Problem, SparseSymmetric, StopReason,
};
use rankassay::referee::{Known, KnownOptimum, Tolerance, judge};
use rankassay::seed::Stream;
use std::collections::BTreeMap;
use std::path::PathBuf;

fn relax(problem: &Problem) -> Answer {
    let method = methods::find("relax-ipm").unwrap();
    let mut trial = Trial {
        options: Settings::resolve(method.card().options, &BTreeMap::new()).unwrap(),
        meter: Meter::unlimited(),
        stream: Stream::named(1, &["relaxation"]),
    };
    method.solve(problem, &mut trial).unwrap()
}

/// Returns the referee's raw objective and raw feasibility of the relaxation's answer.
fn raw(problem: &Problem) -> (f64, f64) {
    let known = Known { optimum: KnownOptimum::Unknown, dual: None, unique_point: None };
    let judgement = judge(problem, &relax(problem), &known, &Tolerance::default()).unwrap();
    (judgement.raw_objective.unwrap(), judgement.raw_feasibility.unwrap())
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

/// Optimal values as published with SDPLIB 1.2 (B. Borchers, Optim. Methods Softw. 11(1):683-690,
/// 1999), in the file format's sign, and the digits to reach.
const SDPLIB: &[(&str, f64, i32)] = &[
    ("mcp100", 226.157351, 7),
    ("mcp124-1", 141.990477, 7),
    ("mcp250-1", 317.264340, 7),
    ("theta1", 23.0, 7),
    ("theta2", 32.8791690, 7),
    ("truss1", -8.9999963, 7),
    ("truss3", -9.1099962, 7),
    ("control1", 17.7846267, 6),
    ("arch0", 0.56651726, 6),
    ("gpp100", -44.9435, 5),
    ("qap5", -436.0, 5),
];

#[test]
fn sdplib_values_are_reached() {
    for (name, optimum, digits) in SDPLIB {
        let Some(path) = data(&format!("sdplib/{name}.dat-s")) else { continue };
        let problem = sdpa::read(&path).unwrap().problem;
        let (objective, feasibility) = raw(&problem);
        // The file format maximises <F_0, Y>; C = -F_0.
        let error = (-objective - optimum).abs() / (1.0 + optimum.abs());
        let tolerance = 10.0_f64.powi(-digits);
        assert!(error <= tolerance, "{name}: value {} for {optimum}, error {error:e}", -objective);
        assert!(feasibility <= tolerance, "{name}: feasibility {feasibility:e}");
    }
}

/// The source lists infp1 and infd1 as infeasible, primal and dual in the file format's sense.
#[test]
fn infeasible_problems_are_recognised() {
    for (name, expected) in
        [("infp1", StopReason::DualInfeasible), ("infd1", StopReason::PrimalInfeasible)]
    {
        let Some(path) = data(&format!("sdplib/{name}.dat-s")) else { continue };
        let problem = sdpa::read(&path).unwrap().problem;
        assert_eq!(relax(&problem).stop, expected, "{name}");
    }
}

/// Three-bus power flow with a relaxation gap: Lesieutre, Molzahn, Borden, DeMarco, 49th Allerton
/// Conference (2011) give 5707.07 (60 MVA) and 5789.87 (50 MVA); compared at 2e-5 relative.
#[test]
fn three_bus_values_are_reached() {
    for (name, published) in [("three-bus-60", 5707.07), ("three-bus-50", 5789.87)] {
        let Some(path) = data(&format!("opf/{name}.dat-s")) else { continue };
        let problem = sdpa::read(&path).unwrap().problem;
        let (objective, feasibility) = raw(&problem);
        assert!((objective - published).abs() <= 2e-5 * published, "{name}: {objective}");
        assert!(feasibility <= 1e-7, "{name}: {feasibility:e}");
    }
}

type Edges = Vec<(usize, usize)>;

fn cycle(n: usize) -> Edges {
    (0..n).map(|i| (i, (i + 1) % n)).collect()
}

fn petersen() -> Edges {
    let mut edges = cycle(5);
    edges.extend((0..5).map(|i| (i, i + 5)));
    edges.extend((0..5).map(|i| (i + 5, (i + 2) % 5 + 5)));
    edges
}

/// The Paley graph of a prime q = 1 mod 4: i and j are joined when i - j is a square modulo q.
fn paley(q: usize) -> Edges {
    let square = |d: usize| (1..q).any(|x| x * x % q == d);
    let mut edges = Vec::new();
    for j in 0..q {
        edges.extend((0..j).filter(|i| square(j - i)).map(|i| (i, j)));
    }
    edges
}

/// The Kneser graph K(6, 2): pairs of six things, joined when disjoint.
fn kneser_6_2() -> (usize, Edges) {
    let mut pairs = Vec::new();
    for b in 0..6 {
        pairs.extend((0..b).map(|a| (a, b)));
    }
    let mut edges = Vec::new();
    for (j, p) in pairs.iter().enumerate() {
        for (i, q) in pairs[..j].iter().enumerate() {
            if p.0 != q.0 && p.0 != q.1 && p.1 != q.0 && p.1 != q.1 {
                edges.push((i, j));
            }
        }
    }
    (pairs.len(), edges)
}

fn entry(n: usize, i: usize, j: usize, value: f64) -> Functional {
    let matrix = SparseSymmetric::gather(n, vec![(i, j, value)]);
    Functional::on_block(0, Coefficient::Sparse(matrix))
}

/// min -<J, X>, tr X = 1, X_ij = 0 on edges.
fn theta(n: usize, edges: &Edges) -> Problem {
    let all = (0..n).flat_map(|j| (0..=j).map(move |i| (i, j, -1.0))).collect();
    let identity = (0..n).map(|i| (i, i, 1.0)).collect();
    let sparse =
        |entries| Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(n, entries)));
    let mut constraints = vec![sparse(identity)];
    constraints.extend(edges.iter().map(|&(i, j)| entry(n, i, j, 1.0)));
    let mut rhs = vec![0.0; constraints.len()];
    rhs[0] = 1.0;
    let block = Block { order: n, rank: None };
    Problem::new(vec![block], 0, sparse(all), constraints, rhs).unwrap()
}

/// min -<L, X>/4, X_ii = 1.
fn max_cut(n: usize, edges: &Edges) -> Problem {
    let mut entries = Vec::new();
    for &(i, j) in edges {
        entries.extend([(i, i, -0.25), (j, j, -0.25), (i, j, 0.25)]);
    }
    let cost = Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(n, entries)));
    let constraints = (0..n).map(|i| entry(n, i, i, 1.0)).collect();
    Problem::new(vec![Block { order: n, rank: None }], 0, cost, constraints, vec![1.0; n]).unwrap()
}

fn close(name: &str, value: f64, exact: f64) {
    assert!((value - exact).abs() <= 1e-7 * (1.0 + exact.abs()), "{name}: {value} for {exact}");
}

/// Closed forms of L. Lovasz, IEEE Trans. Inf. Theory 25:1-7 (1979).
#[test]
fn theta_numbers_match_their_closed_forms() {
    for n in [5usize, 7] {
        let angle = std::f64::consts::PI / n as f64;
        let exact = n as f64 * angle.cos() / (1.0 + angle.cos());
        close(&format!("C{n}"), -raw(&theta(n, &cycle(n))).0, exact);
    }
    close("C5", -raw(&theta(5, &cycle(5))).0, 5.0_f64.sqrt());
    close("Petersen", -raw(&theta(10, &petersen())).0, 4.0);
    close("Paley 13", -raw(&theta(13, &paley(13))).0, 13.0_f64.sqrt());
    let (n, edges) = kneser_6_2();
    close("Kneser (6, 2)", -raw(&theta(n, &edges)).0, 5.0);
}

/// Odd cycles: (n/2)(1 + cos(pi/n)); vertex-transitive graphs: n lambda_max(L)/4; complete graphs:
/// n^2/4 (common practice; the 0.878 bound is Goemans and Williamson, JACM 42:1115-1145, 1995).
#[test]
fn max_cut_relaxations_match_their_closed_forms() {
    for n in [5usize, 7] {
        let exact = n as f64 / 2.0 * (1.0 + (std::f64::consts::PI / n as f64).cos());
        close(&format!("C{n}"), -raw(&max_cut(n, &cycle(n))).0, exact);
    }
    close("Petersen", -raw(&max_cut(10, &petersen())).0, 12.5);
    let lambda = (13.0 + 13.0_f64.sqrt()) / 2.0;
    close("Paley 13", -raw(&max_cut(13, &paley(13))).0, 13.0 * lambda / 4.0);
    let complete: Edges = (0..6).flat_map(|j| (0..j).map(move |i| (i, j))).collect();
    close("K6", -raw(&max_cut(6, &complete)).0, 9.0);
}

/// A single frustrated cycle of length l: relaxation -l cos(pi/l) in sums over edges J_ij x_i x_j
/// (Hen et al., Phys. Rev. A 92:042325, 2015, for the cycles; the value is derived).
#[test]
fn single_frustrated_cycles_have_the_known_relaxation() {
    for l in [3usize, 5, 7] {
        let mut entries: Vec<(usize, usize, f64)> =
            cycle(l).into_iter().map(|(i, j)| (i, j, -0.5)).collect();
        entries[0].2 = 0.5;
        let cost = SparseSymmetric::gather(l, entries);
        let problem = Problem::new(
            vec![Block { order: l, rank: Some(1) }],
            0,
            Functional::on_block(0, Coefficient::Sparse(cost)),
            (0..l).map(|i| entry(l, i, i, 1.0)).collect(),
            vec![1.0; l],
        )
        .unwrap();
        let exact = -(l as f64) * (std::f64::consts::PI / l as f64).cos();
        close(&format!("cycle of {l}"), raw(&problem).0, exact);
    }
}
