//! The referee on points whose quality is known, on cheats, and on wrong certificates.

#![allow(clippy::print_stderr, reason = "a test says what it skipped or measured")]

use proptest::prelude::*;
use rankassay::formats::sdpa;
use rankassay::linalg::Mat;
use rankassay::problem::{
    Answer, Block, BlockPoint, Coefficient, Factor, Functional, OuterSum, OuterTerm, Point,
    Problem, SparseSymmetric, SparseVector, StopReason,
};
use rankassay::referee::{
    Contradicted, Finding, Judgement, Known, KnownOptimum, Tolerance, judge, lower_bound,
};
use std::path::PathBuf;

const UNKNOWN: Known<'static> =
    Known { optimum: KnownOptimum::Unknown, dual: None, unique_point: None };

/// A small linear congruential generator (Knuth, TAOCP 2, section 3.3.4, MMIX constants; from memory).
struct Draw(u64);

impl Draw {
    fn next(&mut self, below: u64) -> u64 {
        self.0 =
            self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 33) % below
    }

    /// A number in [-1, 1).
    fn unit(&mut self) -> f64 {
        self.next(1 << 30) as f64 / (1u64 << 29) as f64 - 1.0
    }
}

/// min <C,X>, diag(X) = 1, with C = S + Diag(y), S the signed Laplacian of a connected graph balanced by
/// the signs t: S t = 0, S is PSD of rank n-1, so tt' is the only optimum and its value is sum y, all in
/// integers.
struct Balanced {
    problem: Problem,
    signs: Vec<f64>,
    dual: Vec<f64>,
    optimum: f64,
}

fn unit_entry(order: usize, i: usize) -> Functional {
    Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(order, vec![(i, i, 1.0)])))
}

fn balanced(n: usize, seed: u64) -> Balanced {
    let mut draw = Draw(seed);
    let signs: Vec<f64> = (0..n).map(|_| if draw.next(2) == 0 { 1.0 } else { -1.0 }).collect();
    let dual: Vec<f64> = (0..n).map(|_| draw.next(7) as f64 - 4.0).collect();
    let mut entries: Vec<(usize, usize, f64)> = (0..n).map(|i| (i, i, dual[i])).collect();
    for i in 0..2 * n {
        let (a, b) = if i < n { (i, (i + 1) % n) } else { (i - n, draw.next(n as u64) as usize) };
        if a != b {
            let weight = 1.0 + draw.next(4) as f64;
            entries.push((a, a, weight));
            entries.push((b, b, weight));
            entries.push((a, b, -weight * signs[a] * signs[b]));
        }
    }
    let cost = Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(n, entries)));
    let constraints = (0..n).map(|i| unit_entry(n, i)).collect();
    let blocks = vec![Block { order: n, rank: Some(1) }];
    let problem = Problem::new(blocks, 0, cost, constraints, vec![1.0; n]).unwrap();
    let optimum = dual.iter().sum();
    Balanced { problem, signs, dual, optimum }
}

impl Balanced {
    fn known(&self) -> Known<'_> {
        Known {
            optimum: KnownOptimum::Certified(self.optimum),
            dual: Some(&self.dual),
            unique_point: None,
        }
    }

    fn unique(&self) -> Vec<Factor> {
        vec![Factor { order: self.signs.len(), width: 1, data: self.signs.clone() }]
    }

    fn judge(&self, answer: &Answer) -> Judgement {
        judge(&self.problem, answer, &self.known(), &Tolerance::default()).unwrap()
    }
}

fn answer_of(blocks: Vec<BlockPoint>, orthant: Vec<f64>) -> Answer {
    Answer {
        point: Point { blocks, orthant },
        multipliers: None,
        stop: StopReason::Converged,
        note: String::new(),
    }
}

fn factor_answer(order: usize, width: usize, data: Vec<f64>) -> Answer {
    answer_of(vec![BlockPoint::Factor(Factor { order, width, data })], vec![])
}

fn dense_answer(matrix: Mat<f64>) -> Answer {
    answer_of(vec![BlockPoint::Dense(matrix)], vec![])
}

fn small(name: &str) -> Problem {
    let path =
        PathBuf::from(env!("CARGO_MANIFEST_DIR")).join(format!("instances/small/{name}.dat-s"));
    sdpa::read(&path).unwrap_or_else(|error| panic!("{error}")).problem
}

// ---------------------------------------------------------------------------------------------------
// Good points

#[test]
fn the_planted_point_is_solved_with_every_figure_right() {
    let instance = balanced(40, 1);
    let unique = instance.unique();
    let known = Known { unique_point: Some(&unique), ..instance.known() };
    let mut answer = factor_answer(40, 1, instance.signs.clone());
    answer.multipliers = Some(instance.dual.clone());
    let judgement = judge(&instance.problem, &answer, &known, &Tolerance::default()).unwrap();
    assert_eq!(judgement.finding, Finding::Solved);
    assert_eq!(judgement.reason, "");
    assert_eq!(judgement.digits, Some(16.0));
    assert_eq!(judgement.feasibility, Some(0.0));
    assert_eq!(judgement.objective, Some(instance.optimum));
    assert_eq!(judgement.raw_objective, Some(instance.optimum));
    assert_eq!(judgement.distance, Some(0.0));
    assert_eq!(judgement.min_eigenvalue, Some(0.0));
    assert_eq!(judgement.ranks, Some([1, 1, 1]));
    assert_eq!(judgement.tail_ratio, Some(0.0));
    assert_eq!(judgement.restored_feasibility, Some(0.0));
    let bound = judgement.lower_bound.unwrap();
    assert!(
        bound <= instance.optimum && bound >= instance.optimum - 1e-9 * instance.optimum.abs(),
        "{bound}"
    );
    let dimacs = judgement.dimacs.unwrap();
    assert!(dimacs.iter().all(|error| error.abs() <= 1e-13), "{dimacs:?}");
}

#[test]
fn a_dense_point_and_its_factor_are_judged_alike() {
    let instance = balanced(30, 2);
    let mut draw = Draw(5);
    let width = 4;
    let noise = |draw: &mut Draw, size: f64| -> Vec<f64> {
        (0..30 * width)
            .map(|k| if k % width == 0 { instance.signs[k / width] } else { size * draw.unit() })
            .collect()
    };
    for size in [0.0, 1e-5, 1e-3, 0.3] {
        let data = noise(&mut draw, size);
        let row = |i: usize| &data[i * width..(i + 1) * width];
        let dense =
            Mat::from_fn(30, 30, |i, j| row(i).iter().zip(row(j)).map(|(a, b)| a * b).sum());
        let (a, b) = (
            instance.judge(&factor_answer(30, width, data.clone())),
            instance.judge(&dense_answer(dense)),
        );
        assert_eq!(a.finding, b.finding, "{size}");
        assert_eq!(a.ranks, b.ranks, "{size}");
        for (x, y) in [
            (a.feasibility, b.feasibility),
            (a.objective, b.objective),
            (a.raw_feasibility, b.raw_feasibility),
            (a.raw_objective, b.raw_objective),
            (a.tail_ratio, b.tail_ratio),
            (a.restored_feasibility, b.restored_feasibility),
        ] {
            let (x, y) = (x.unwrap(), y.unwrap());
            assert!((x - y).abs() <= 1e-11 * (1.0 + x.abs()), "{size}: {x} {y}");
        }
    }
}

#[test]
fn a_point_that_restoration_repairs_is_near() {
    let instance = balanced(50, 3);
    let data = instance
        .signs
        .iter()
        .enumerate()
        .map(|(i, t)| t * (1.0 + 1e-4 * (i as f64).sin()))
        .collect();
    let judgement = instance.judge(&factor_answer(50, 1, data));
    assert_eq!(judgement.finding, Finding::Near);
    assert!(judgement.feasibility.unwrap() > 1e-5);
    assert!(judgement.restored_feasibility.unwrap() <= 1e-13);
    assert!(judgement.reason.contains("restoration"), "{}", judgement.reason);
}

#[test]
fn a_feasible_point_off_the_optimum_is_suboptimal() {
    let instance = balanced(20, 4);
    let mut data = instance.signs.clone();
    data[3] = -data[3];
    let judgement = instance.judge(&factor_answer(20, 1, data));
    assert_eq!(judgement.finding, Finding::Suboptimal);
    assert_eq!(judgement.feasibility, Some(0.0));
    assert!(judgement.reason.contains("above the optimum"), "{}", judgement.reason);
}

#[test]
fn spectra_give_ranks_and_tails_by_hand() {
    // X = diag(1, 1e-3, 1e-5, 1e-7) against cut-offs 1e-4, 1e-6, 1e-8; target rank 2.
    let blocks = vec![Block { order: 4, rank: Some(2) }];
    let problem =
        Problem::new(blocks, 0, unit_entry(4, 0), vec![unit_entry(4, 0)], vec![1.0]).unwrap();
    let values = [1.0, 1e-3, 1e-5, 1e-7];
    let dense = Mat::from_fn(4, 4, |i, j| if i == j { values[i] } else { 0.0 });
    let judgement = judge(&problem, &dense_answer(dense), &UNKNOWN, &Tolerance::default()).unwrap();
    assert_eq!(judgement.ranks, Some([2, 3, 4]));
    let tail = (1e-5 + 1e-7) / (1.0 + 1e-3 + 1e-5 + 1e-7);
    assert!((judgement.tail_ratio.unwrap() - tail).abs() <= 1e-15);
    assert_eq!(judgement.finding, Finding::Feasible);
    assert_eq!((judgement.digits, judgement.objective_error), (None, None));
}

#[test]
fn a_reported_optimum_is_judged_at_its_accuracy() {
    let instance = balanced(12, 6);
    let answer = factor_answer(12, 1, instance.signs.clone());
    let finding = |value: f64, accuracy: f64| {
        let optimum = KnownOptimum::Reported { value, accuracy };
        judge(&instance.problem, &answer, &Known { optimum, ..UNKNOWN }, &Tolerance::default())
            .unwrap()
            .finding
    };
    let off = instance.optimum + 1e-4 * (1.0 + instance.optimum.abs());
    assert_eq!(finding(off, 1e-3), Finding::Solved);
    assert_eq!(finding(off, 1e-6), Finding::Suboptimal);
    assert_eq!(finding(instance.optimum, 0.0), Finding::Solved);
}

// ---------------------------------------------------------------------------------------------------
// Cheats and unreadable answers

#[test]
fn a_high_rank_point_with_the_value_of_the_relaxation_is_not_solved() {
    // K5 at rank 1: the relaxation reaches n^2/4 = 6.25 with a simplex, the largest cut is 6.
    let entries = (0..5).flat_map(|j| (0..j).map(move |i| (i, j, 0.25)));
    let entries = entries.chain((0..5).map(|i| (i, i, -1.0))).collect();
    let cost = Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(5, entries)));
    let constraints: Vec<_> = (0..5).map(|i| unit_entry(5, i)).collect();
    let blocks = vec![Block { order: 5, rank: Some(1) }];
    let problem = Problem::new(blocks, 0, cost, constraints, vec![1.0; 5]).unwrap();
    let known = Known { optimum: KnownOptimum::Certified(-6.0), ..UNKNOWN };
    let dense = Mat::from_fn(5, 5, |i, j| if i == j { 1.0 } else { -0.25 });
    let judgement = judge(&problem, &dense_answer(dense), &known, &Tolerance::default()).unwrap();
    assert_ne!(judgement.finding, Finding::Solved);
    assert!((judgement.raw_objective.unwrap() + 6.25).abs() <= 1e-14);
    assert!(judgement.raw_feasibility.unwrap() <= 1e-15);
    assert!(judgement.feasibility.unwrap() > 0.1);
    assert_eq!(judgement.ranks, Some([4, 4, 4]));
}

#[test]
fn an_indefinite_point_is_judged_by_its_truncation() {
    // Feasible for the equations and far below the optimum, but indefinite.
    let instance = balanced(10, 7);
    let t = &instance.signs;
    let dense = Mat::from_fn(10, 10, |i, j| if i == j { 1.0 } else { 50.0 * t[i] * t[j] });
    let judgement = instance.judge(&dense_answer(dense));
    assert!(judgement.raw_objective.unwrap() < instance.optimum - 100.0);
    assert!((judgement.min_eigenvalue.unwrap() + 49.0).abs() <= 1e-10);
    assert_ne!(judgement.finding, Finding::Solved);
    assert!(judgement.feasibility.unwrap() > 1.0);
}

#[test]
fn scaled_and_empty_points_are_not_solved() {
    let instance = balanced(16, 8);
    assert!(instance.optimum < 0.0, "scaling up has to look better");
    let scaled: Vec<f64> = instance.signs.iter().map(|t| 3.0 * t).collect();
    let judgement = instance.judge(&factor_answer(16, 1, scaled));
    assert!(judgement.objective.unwrap() < instance.optimum);
    assert_ne!(judgement.finding, Finding::Solved);
    for empty in [factor_answer(16, 1, vec![0.0; 16]), factor_answer(16, 0, vec![])] {
        let judgement = instance.judge(&empty);
        assert_eq!(judgement.finding, Finding::Infeasible);
        assert_eq!(judgement.ranks, Some([0, 0, 0]));
        assert_eq!(judgement.distance, None);
    }
}

#[test]
fn unreadable_answers_are_malformed_with_a_reason() {
    let instance = balanced(6, 9);
    let signs = || instance.signs.clone();
    let with = |place: usize, value: f64| {
        let mut data = signs();
        data[place] = value;
        factor_answer(6, 1, data)
    };
    let mut wrong_multipliers = factor_answer(6, 1, signs());
    wrong_multipliers.multipliers = Some(vec![0.0; 5]);
    let mut infinite_multipliers = factor_answer(6, 1, signs());
    infinite_multipliers.multipliers = Some(vec![f64::INFINITY; 6]);
    let cases = [
        (with(2, f64::NAN), "NaN"),
        (with(2, f64::NEG_INFINITY), "-inf"),
        (with(2, 1e200), "beyond"),
        (factor_answer(5, 1, vec![1.0; 5]), "5 x 5"),
        (factor_answer(6, 1, vec![1.0; 7]), "7 numbers"),
        (dense_answer(Mat::zeros(6, 5)), "6 x 5"),
        (dense_answer(Mat::from_fn(6, 6, |_, _| f64::NAN)), "NaN"),
        (answer_of(vec![], vec![]), "0 blocks"),
        (
            Answer {
                point: Point { orthant: vec![1.0], ..factor_answer(6, 1, signs()).point },
                ..with(0, 1.0)
            },
            "1 nonnegative",
        ),
        (wrong_multipliers, "5 multipliers"),
        (infinite_multipliers, "inf"),
    ];
    for (answer, words) in cases {
        let judgement = instance.judge(&answer);
        assert_eq!(judgement.finding, Finding::Malformed, "{words}");
        assert!(judgement.reason.contains(words), "{words}: {}", judgement.reason);
        assert_eq!(
            (judgement.feasibility, judgement.objective, judgement.digits),
            (None, None, None)
        );
    }
}

#[test]
fn no_point_of_an_infeasible_problem_is_feasible() {
    let problem = small("infeasible");
    for data in [vec![1.0, 0.0, 0.0, 1.0], vec![2.0, 1.0, 2.0, -1.0], vec![1.0, 0.0, 1.0, 0.0]] {
        let judgement =
            judge(&problem, &factor_answer(2, 2, data), &UNKNOWN, &Tolerance::default()).unwrap();
        assert_eq!(judgement.finding, Finding::Infeasible);
        assert_eq!(judgement.tail_ratio, None);
    }
}

// ---------------------------------------------------------------------------------------------------
// Wrong certificates

#[test]
fn a_wrong_certificate_is_contradicted() {
    let instance = balanced(15, 10);
    let answer = factor_answer(15, 1, instance.signs.clone());
    // A dual that is not feasible claims more than the optimum.
    let dual: Vec<f64> = instance.dual.iter().map(|y| y + 1e-6).collect();
    let claimed = dual.iter().sum();
    let known =
        Known { optimum: KnownOptimum::Certified(claimed), dual: Some(&dual), unique_point: None };
    let error = judge(&instance.problem, &answer, &known, &Tolerance::default()).unwrap_err();
    assert_eq!(error.by, Contradicted::ByPoint);
    assert!(error.to_string().contains("contradicts the certified optimum"), "{error}");
    let without = Known { dual: None, ..known.clone() };
    assert!(judge(&instance.problem, &answer, &without, &Tolerance::default()).is_err());
    // An optimum claimed too low is contradicted by a proved bound above it.
    let known = Known { optimum: KnownOptimum::Certified(instance.optimum - 0.5), ..UNKNOWN };
    let mut with_dual = answer.clone();
    with_dual.multipliers = Some(instance.dual.clone());
    let error = judge(&instance.problem, &with_dual, &known, &Tolerance::default()).unwrap_err();
    assert_eq!(error.by, Contradicted::ByBound);
}

proptest! {
    #[test]
    fn no_answer_contradicts_a_right_certificate(
        seed in 0u64..1000,
        size in prop_oneof![Just(0.0), Just(1e-14), Just(1e-9), Just(1e-3), Just(1.0), Just(1e6)],
        width in 1usize..4,
        pull in -1.0f64..1.0,
    ) {
        let instance = balanced(8, seed);
        let mut draw = Draw(seed + 77);
        let data = (0..8 * width).map(|k| {
            let base = if k % width == 0 { instance.signs[k / width] } else { 0.0 };
            base * (1.0 + size * pull) + size * draw.unit()
        }).collect();
        let mut answer = factor_answer(8, width, data);
        answer.multipliers = Some(instance.dual.iter().map(|y| y + size * draw.unit()).collect());
        let result = judge(&instance.problem, &answer, &instance.known(), &Tolerance::default());
        prop_assert!(result.is_ok(), "{}", result.unwrap_err());
    }

    #[test]
    fn the_lower_bound_never_passes_the_optimum(
        seed in 0u64..1000,
        n in 3usize..30,
        size in prop_oneof![Just(0.0), Just(1e-12), Just(1e-6), Just(1e-2), Just(1.0), Just(100.0)],
    ) {
        let instance = balanced(n, seed);
        let mut draw = Draw(seed + 1);
        let y: Vec<f64> = instance.dual.iter().map(|y| y + size * draw.unit()).collect();
        let bound = lower_bound(&instance.problem, &y).expect("diag(X) = 1 bounds the trace");
        prop_assert!(bound <= instance.optimum, "{bound} above {}", instance.optimum);
        // With lambda_min(S + Diag(e)) >= -max|e| the bound loses at most 2 n max|e|.
        let loss = 2.0 * n as f64 * size + 1e-9 * (1.0 + instance.optimum.abs());
        prop_assert!(bound >= instance.optimum - loss, "{bound} far below {}", instance.optimum);
    }

    #[test]
    fn the_lower_bound_never_passes_the_optimum_with_outer_products_and_slacks(
        weights in prop::collection::vec(-3.0f64..3.0, 5),
        k in 1u32..50,
        y in -60.0f64..60.0,
    ) {
        // min <(aa' - k I), X> + 0.5 z, tr X + z = 2: the optimum is min(-2k, 1) = -2k, reached at X
        // orthogonal to a with tr X = 2.
        let a = SparseVector::gather(weights.iter().enumerate().map(|(i, w)| (i as u32, *w)).collect());
        let mut terms = vec![OuterTerm { weight: 1.0, vector: a }];
        for i in 0..5 {
            let unit = SparseVector { indices: vec![i], values: vec![1.0] };
            terms.push(OuterTerm { weight: -f64::from(k), vector: unit });
        }
        let one = |value: f64| SparseVector { indices: vec![0], values: vec![value] };
        let outer = Coefficient::Outer(OuterSum { order: 5, terms });
        let cost = Functional { parts: vec![(0, outer)], orthant: one(0.5) };
        let identity = SparseSymmetric::gather(5, (0..5).map(|i| (i, i, 1.0)).collect());
        let trace = Functional { parts: vec![(0, Coefficient::Sparse(identity))], orthant: one(1.0) };
        let blocks = vec![Block { order: 5, rank: None }];
        let problem = Problem::new(blocks, 1, cost, vec![trace], vec![2.0]).unwrap();
        let optimum = -2.0 * f64::from(k);
        let bound = lower_bound(&problem, &[y]).expect("the trace is bounded");
        prop_assert!(bound <= optimum, "{bound} above {optimum}");
        // By hand: for y <= -k both slacks are nonnegative and the bound is 2y; above, X loses 2(y + k) and
        // z, from y = 0.5 on, 2(y - 0.5).
        let by_hand = 2.0 * y - 2.0 * (y + f64::from(k)).max(0.0) - 2.0 * (y - 0.5).max(0.0);
        prop_assert!((bound - by_hand).abs() <= 1e-11 * (1.0 + f64::from(k) + y.abs()), "{bound} {by_hand}");
    }
}

/// min <C,X> with C = WW' + Diag(y), W't = 0 column by column, diag(X) = 1: S = WW' is dense, singular and
/// not diagonally dominant; the optimum is tt' with value sum y, in integers.
fn dense_slack(n: usize, seed: u64) -> Balanced {
    let mut draw = Draw(seed);
    let mut sign = || if draw.next(2) == 0 { 1.0 } else { -1.0 };
    let signs: Vec<f64> = (0..n).map(|_| sign()).collect();
    let dual: Vec<f64> = (0..n).map(|_| -3.0 + 2.0 * sign()).collect();
    let mut product = Mat::<f64>::zeros(n, n);
    for k in 0..n - 1 {
        let mut column: Vec<f64> = (0..n).map(|_| sign()).collect();
        let others: f64 = (0..n).filter(|i| *i != k).map(|i| signs[i] * column[i]).sum();
        column[k] = -signs[k] * others;
        for j in 0..n {
            for i in 0..n {
                product[(i, j)] += column[i] * column[j];
            }
        }
    }
    let entry = |i: usize, j: usize| product[(i, j)] + if i == j { dual[i] } else { 0.0 };
    let entries =
        (0..n).flat_map(|j| (0..=j).map(move |i| (i, j))).map(|(i, j)| (i, j, entry(i, j)));
    let cost =
        Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(n, entries.collect())));
    let constraints = (0..n).map(|i| unit_entry(n, i)).collect();
    let blocks = vec![Block { order: n, rank: Some(1) }];
    let problem = Problem::new(blocks, 0, cost, constraints, vec![1.0; n]).unwrap();
    let optimum = dual.iter().sum();
    Balanced { problem, signs, dual, optimum }
}

#[test]
fn a_dense_singular_slack_gives_the_optimum_to_nine_digits() {
    for (n, seed) in [(5, 1), (40, 2), (150, 3), (400, 5)] {
        let instance = dense_slack(n, seed);
        let bound =
            lower_bound(&instance.problem, &instance.dual).expect("diag(X) = 1 bounds the trace");
        let loss = 1e-9 * instance.optimum.abs();
        assert!(
            bound <= instance.optimum && bound >= instance.optimum - loss,
            "{n}: {bound} {}",
            instance.optimum
        );
        // A multiplier that is too large makes S indefinite and must not raise the bound.
        for shift in [1e-9, 1e-3, 1.0] {
            let mut corrupted = instance.dual.clone();
            corrupted[n / 2] += shift;
            let lower =
                lower_bound(&instance.problem, &corrupted).expect("the trace is still bounded");
            assert!(lower <= instance.optimum, "{n}, {shift}: {lower} above {}", instance.optimum);
        }
    }
}

#[test]
fn a_spectral_bound_is_never_passed() {
    // 0 <= X <= 4I by X + Z = 4I, C = sum l_i h_i h_i' with the orthogonal columns h_i of a 4 x 4 Hadamard
    // matrix: the eigenvalues of C are 4 l_i, the optimum is 4 sum min(0, 4 l_i).
    let hadamard = [
        [1.0, 1.0, 1.0, 1.0],
        [1.0, -1.0, 1.0, -1.0],
        [1.0, 1.0, -1.0, -1.0],
        [1.0, -1.0, -1.0, 1.0],
    ];
    let weights = [-3.0, -1.0, 0.0, 2.0];
    let entry = |i: usize, j: usize| {
        (0..4).map(|k| weights[k] * hadamard[k][i] * hadamard[k][j]).sum::<f64>()
    };
    let pairs: Vec<(usize, usize)> = (0..4).flat_map(|j| (0..=j).map(move |i| (i, j))).collect();
    let cost =
        SparseSymmetric::gather(4, pairs.iter().map(|&(i, j)| (i, j, entry(i, j))).collect());
    let cost = Functional::on_block(0, Coefficient::Sparse(cost));
    let unit = |i, j| Coefficient::Sparse(SparseSymmetric::gather(4, vec![(i, j, 1.0)]));
    let both = |&(i, j): &(usize, usize)| Functional {
        parts: vec![(0, unit(i, j)), (1, unit(i, j))],
        orthant: SparseVector::default(),
    };
    let rhs = pairs.iter().map(|&(i, j)| if i == j { 4.0 } else { 0.0 }).collect();
    let blocks = vec![Block { order: 4, rank: Some(2) }, Block { order: 4, rank: None }];
    let problem = Problem::new(blocks, 0, cost, pairs.iter().map(both).collect(), rhs).unwrap();
    let optimum = -64.0;
    // The optimal multipliers make S_X = C - Y the positive and S_Z = -Y the negative part of C.
    let negative = |i: usize, j: usize| -> f64 {
        (0..4).map(|k| weights[k].min(0.0) * hadamard[k][i] * hadamard[k][j]).sum()
    };
    let best: Vec<f64> = pairs.iter().map(|&(i, j)| negative(i, j)).collect();
    let bound = lower_bound(&problem, &best).unwrap();
    assert!(bound <= optimum && bound >= optimum - 1e-9 * 64.0, "{bound}");
    let mut draw = Draw(99);
    for trial in 0..200 {
        let size = 10f64.powi(trial % 12 - 9);
        let y: Vec<f64> = best.iter().map(|y| y + size * draw.unit()).collect();
        let bound = lower_bound(&problem, &y).unwrap();
        assert!(bound <= optimum, "{bound} at noise {size}");
    }
    // The planted rank-2 point, h_1 h_1' + h_2 h_2' with Z = 4I - X, attains it here.
    let columns = |range: std::ops::Range<usize>| {
        let columns: Vec<Vec<f64>> = range.map(|k| hadamard[k].to_vec()).collect();
        BlockPoint::Factor(Factor::from_columns(4, &columns))
    };
    let answer = answer_of(vec![columns(0..2), columns(2..4)], vec![]);
    let known = Known { optimum: KnownOptimum::Certified(optimum), ..UNKNOWN };
    let judgement = judge(&problem, &answer, &known, &Tolerance::default()).unwrap();
    assert_eq!((judgement.finding, judgement.digits), (Finding::Solved, Some(16.0)));
    // The whole of 4 I on the first block, which exceeds the rank, is no answer at rank 2.
    let answer = answer_of(vec![columns(0..4), BlockPoint::Dense(Mat::zeros(4, 4))], vec![]);
    let judgement = judge(&problem, &answer, &known, &Tolerance::default()).unwrap();
    assert_ne!(judgement.finding, Finding::Solved);
    assert_eq!((judgement.ranks, judgement.tail_ratio), (Some([4, 4, 4]), Some(0.5)));
}

#[test]
fn no_bound_is_given_where_the_trace_is_unbounded() {
    let constraint = |i: usize, j: usize| {
        Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(2, vec![(i, j, 1.0)])))
    };
    let identity = SparseSymmetric::gather(2, vec![(0, 0, 1.0), (1, 1, 1.0)]);
    let cost = Functional::on_block(0, Coefficient::Sparse(identity));
    let blocks = vec![Block { order: 2, rank: None }];
    // Only X_11 and X_12 are fixed: X_22 is free.
    let constraints = vec![constraint(0, 0), constraint(0, 1)];
    let problem = Problem::new(blocks, 0, cost, constraints, vec![1.0, 2.0]).unwrap();
    assert_eq!(lower_bound(&problem, &[2.0, 0.0]), None);
    let bound = lower_bound(&problem, &[0.5, 0.5]).expect("S is positive definite");
    assert!((bound - 1.5).abs() <= 1e-14 && bound <= 1.5, "{bound}");
}

// ---------------------------------------------------------------------------------------------------
// Closed forms (L. Lovasz, IEEE Trans. Inf. Theory 25:1-7, 1979; the files name them)

/// Holds the bound from the closed-form multipliers against the closed-form value.
fn check_bound(name: &str, y: &[f64], value: f64) {
    let bound = lower_bound(&small(name), y).expect("the trace is fixed");
    assert!(bound <= value + 1e-12 && bound >= value - 1e-9, "{name}: {bound} against {value}");
}

#[test]
fn closed_forms_are_bounded_by_their_multipliers() {
    let root_five = 5f64.sqrt();
    // S = t I + c A - J: for C5 t = sqrt 5 and c = 2t/(1 + sqrt 5), for the Petersen graph t = 4, c = 2.
    let theta = |t: f64, c: f64, edges: usize| [vec![-t], vec![-c; edges]].concat();
    check_bound("theta-c5", &theta(root_five, 2.0 * root_five / (1.0 + root_five), 5), -root_five);
    check_bound("theta-petersen", &theta(4.0, 2.0, 15), -4.0);
    // S = (lambda_max(L)/4) I - L/4.
    let c5 = 2.5 * (1.0 + (std::f64::consts::PI / 5.0).cos());
    check_bound("cut-c5", &[-c5 / 5.0; 5], -c5);
    check_bound("cut-petersen", &[-1.25; 10], -12.5);
    // S = [[2, -1], [-1, 1/2]] and s = (2, 1/2).
    check_bound("two-blocks", &[-2.0, -0.5], -4.0);
}

#[test]
fn closed_form_points_are_solved() {
    // Max-cut on C5: X_ij = cos(4 pi (i - j)/5), rank 2.
    let angle = |i: usize| 4.0 * std::f64::consts::PI * i as f64 / 5.0;
    let data = (0..5).flat_map(|i| [angle(i).cos(), angle(i).sin()]).collect();
    let value = -2.5 * (1.0 + (std::f64::consts::PI / 5.0).cos());
    let optimum = KnownOptimum::Reported { value, accuracy: 0.0 };
    let judgement = judge(
        &small("cut-c5"),
        &factor_answer(5, 2, data),
        &Known { optimum, ..UNKNOWN },
        &Tolerance::default(),
    )
    .unwrap();
    assert_eq!(judgement.finding, Finding::Solved);
    assert!(judgement.digits.unwrap() >= 14.0, "{judgement:?}");
    // Two blocks: (1,2)(1,2)' with both slacks zero.
    let optimum = KnownOptimum::Certified(-4.0);
    let known = Known { optimum, dual: Some(&[-2.0, -0.5]), unique_point: None };
    let block = BlockPoint::Factor(Factor { order: 2, width: 1, data: vec![1.0, 2.0] });
    let answer = answer_of(vec![block.clone()], vec![0.0, 0.0]);
    let judgement = judge(&small("two-blocks"), &answer, &known, &Tolerance::default()).unwrap();
    assert_eq!((judgement.finding, judgement.digits), (Finding::Solved, Some(16.0)));
    // A negative scalar is reported and clipped.
    let answer = answer_of(vec![block], vec![0.0, -0.25]);
    let judgement = judge(&small("two-blocks"), &answer, &known, &Tolerance::default()).unwrap();
    assert_eq!(judgement.min_eigenvalue, Some(-0.25));
    assert_eq!((judgement.finding, judgement.feasibility), (Finding::Solved, Some(0.0)));
    assert!(judgement.raw_feasibility.unwrap() > 0.01);
}

#[test]
fn dimacs_errors_are_those_of_the_definition() {
    // Two blocks at X = diag(1, 4) - 0.5 I, x = 0, y = 0, by hand: A(X) - b = (-0.5, -0.5), b = (1, 4),
    // <C,X> = 0, S = C with eigenvalue -1, s = 0.
    let dense = Mat::from_fn(2, 2, |i, j| if i == j { [0.5, 3.5][i] } else { 0.0 });
    let mut answer = answer_of(vec![BlockPoint::Dense(dense)], vec![0.0, -0.1]);
    answer.multipliers = Some(vec![0.0, 0.0]);
    let judgement = judge(&small("two-blocks"), &answer, &UNKNOWN, &Tolerance::default()).unwrap();
    // The scalar -0.1 adds to the second residual.
    let expected = [(0.25f64 + 0.36).sqrt() / 5.0, 0.1 / 5.0, 0.0, 1.0 / 2.0, 0.0, 0.0];
    for (found, expected) in judgement.dimacs.unwrap().iter().zip(expected) {
        assert!((found - expected).abs() <= 1e-14, "{:?}", judgement.dimacs);
    }
}

// ---------------------------------------------------------------------------------------------------
// Distance and size

#[test]
fn distances_are_resolved_far_below_the_square_root_of_the_roundoff() {
    let instance = balanced(25, 11);
    let unique = instance.unique();
    let known = Known { unique_point: Some(&unique), ..instance.known() };
    for size in [1e-12, 1e-9, 1e-3] {
        // X = (1 + size)^2 tt': the distance is ((1 + size)^2 - 1) n / (1 + n).
        let data = instance.signs.iter().map(|t| t * (1.0 + size)).collect();
        let judgement =
            judge(&instance.problem, &factor_answer(25, 1, data), &known, &Tolerance::default())
                .unwrap();
        let expected = (2.0 * size + size * size) * 25.0 / 26.0;
        let distance = judgement.distance.unwrap();
        assert!((distance - expected).abs() <= 1e-15 + 1e-3 * expected, "{distance} {expected}");
    }
}

#[test]
fn a_sparse_problem_of_order_20000_is_judged_by_its_factor() {
    let n = 20_000;
    let instance = balanced(n, 12);
    let unique = instance.unique();
    let known = Known { unique_point: Some(&unique), ..instance.known() };
    let data = instance
        .signs
        .iter()
        .enumerate()
        .flat_map(|(i, t)| [*t, 1e-9 * (i as f64).sin()])
        .collect();
    let mut answer = factor_answer(n, 2, data);
    answer.multipliers = Some(instance.dual.clone());
    let start = std::time::Instant::now();
    let judgement = judge(&instance.problem, &answer, &known, &Tolerance::default()).unwrap();
    eprintln!("order {n}: judged in {:.2} s", start.elapsed().as_secs_f64());
    assert_eq!(judgement.finding, Finding::Solved);
    assert!(judgement.distance.unwrap() <= 1e-8);
    let bound = judgement.lower_bound.unwrap();
    assert!(
        bound <= instance.optimum && bound >= instance.optimum - 1e-9 * instance.optimum.abs(),
        "{bound}"
    );
    // And one that needs restoring.
    let rough = instance
        .signs
        .iter()
        .enumerate()
        .map(|(i, t)| t * (1.0 + 0.01 * (i as f64).cos()))
        .collect();
    let start = std::time::Instant::now();
    let judgement =
        judge(&instance.problem, &factor_answer(n, 1, rough), &known, &Tolerance::default())
            .unwrap();
    eprintln!("order {n}: judged with restoration in {:.2} s", start.elapsed().as_secs_f64());
    assert_eq!(judgement.finding, Finding::Near);
}

/// Scales constraint i by `rows[i]`, the cost by `cost` and X by `point`.
fn scaled(instance: &Balanced, rows: &[f64], cost: f64, point: f64) -> Problem {
    let problem = &instance.problem;
    let times = |functional: &Functional, factor: f64| Functional {
        parts: functional
            .parts
            .iter()
            .map(|(block, coefficient)| {
                let sparse = coefficient.to_sparse();
                let entries = sparse.iter().map(|(i, j, value)| (i, j, factor * value)).collect();
                let order = problem.blocks()[*block].order;
                (*block, Coefficient::Sparse(SparseSymmetric::gather(order, entries)))
            })
            .collect(),
        orthant: SparseVector::default(),
    };
    let constraints =
        problem.constraints().iter().zip(rows).map(|(a, row)| times(a, *row)).collect();
    let rhs = problem.rhs().iter().zip(rows).map(|(b, row)| b * row * point).collect();
    let blocks = problem.blocks().to_vec();
    Problem::new(blocks, 0, times(problem.cost(), cost), constraints, rhs).unwrap()
}

#[test]
fn relative_figures_do_not_move_with_the_scaling_of_the_data() {
    let instance = balanced(14, 8);
    let mut draw = Draw(77);
    for size in [0.0, 1e-7, 1e-5, 1e-3] {
        let data: Vec<f64> =
            instance.signs.iter().map(|t| t * (1.0 + size * draw.unit())).collect();
        let known = |factor: f64| Known {
            optimum: KnownOptimum::Certified(factor * instance.optimum),
            dual: None,
            unique_point: None,
        };
        let tolerance = Tolerance::default();
        let plain = factor_answer(14, 1, data.clone());
        let plain = judge(&instance.problem, &plain, &known(1.0), &tolerance).unwrap();
        // Powers of four for X, so that its factor is scaled by a power of two: nothing is rounded.
        for (cost, point) in [(1024.0, 1.0), (1.0, 4096.0), (0.125, 1.0 / 1024.0)] {
            let rows: Vec<f64> = (0..instance.problem.constraints().len())
                .map(|i| 2f64.powi(i as i32 % 21 - 10))
                .collect();
            let problem = scaled(&instance, &rows, cost, point);
            let factor = point.sqrt();
            let answer = factor_answer(14, 1, data.iter().map(|x| x * factor).collect());
            let judged = judge(&problem, &answer, &known(cost * point), &tolerance).unwrap();
            assert_eq!(judged.finding, plain.finding, "{size} {cost} {point}");
            assert_eq!(judged.feasibility, plain.feasibility, "{size} {cost} {point}");
            assert_eq!(judged.objective_error, plain.objective_error, "{size} {cost} {point}");
            assert_eq!(judged.raw_feasibility, plain.raw_feasibility, "{size} {cost} {point}");
        }
    }
}

#[test]
fn canonical_figures_are_those_of_their_formulas() {
    // Two constraints 3 X_11 = 12, 4 X_22 = 4 with cost 2 X_12, order 2: a = (3, 4), x = |(4, 1)|, c = 2 sqrt 2.
    let entry = |i: usize, j: usize, value: f64| {
        Functional::on_block(
            0,
            Coefficient::Sparse(SparseSymmetric::gather(2, vec![(i, j, value)])),
        )
    };
    let problem = Problem::new(
        vec![Block { order: 2, rank: Some(1) }],
        0,
        entry(0, 1, 2.0),
        vec![entry(0, 0, 3.0), entry(1, 1, 4.0)],
        vec![12.0, 4.0],
    )
    .unwrap();
    let known = Known { optimum: KnownOptimum::Certified(-8.0), dual: None, unique_point: None };
    let (first, second) = (2.0 + 1e-3, -1.0 + 2e-3);
    let answer = factor_answer(2, 1, vec![first, second]);
    let judged = judge(&problem, &answer, &known, &Tolerance::default()).unwrap();
    let unit = 17f64.sqrt();
    let residual = ((first * first - 4.0).powi(2) + (second * second - 1.0).powi(2)).sqrt();
    let feasibility = residual / (2.0 * unit);
    let objective_error = (4.0 * first * second + 8.0).abs() / (8f64.sqrt() * unit + 8.0);
    let near = |a: Option<f64>, b: f64| (a.unwrap() - b).abs() <= 1e-12 * b;
    assert!(near(judged.feasibility, feasibility), "{judged:?}");
    assert!(near(judged.objective_error, objective_error), "{judged:?}");
}
