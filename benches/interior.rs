//! Times the interior-point engine on planted instances and on max-cut relaxations of random graphs.
//!
//! Figures are for ratios within one run on one machine; they are no tests.

use criterion::{Criterion, criterion_group, criterion_main};
use rankassay::budget::Meter;
use rankassay::card::{Setting, Settings};
use rankassay::engines::ipm;
use rankassay::families;
use rankassay::problem::{Block, Coefficient, Functional, Problem, SparseSymmetric};
use rankassay::seed::Stream;
use std::collections::BTreeMap;
use std::hint::black_box;

/// Plants a tight instance of the given order and rank.
fn planted(order: i64, rank: i64) -> Problem {
    let family = families::find("tight-unique").unwrap();
    let given = BTreeMap::from([
        ("order".to_owned(), Setting::Integer(order)),
        ("rank".to_owned(), Setting::Integer(rank)),
    ]);
    let parameters = Settings::resolve(family.card().parameters, &given).unwrap();
    let mut stream = Stream::named(1, &["bench", &parameters.to_string()]);
    family.plant(&parameters, &mut stream).unwrap().problem
}

/// The max-cut relaxation of a random graph with average degree six.
fn max_cut(n: usize) -> Problem {
    let mut stream = Stream::named(1, &["bench", "max-cut", &n.to_string()]);
    let mut entries = Vec::new();
    for _ in 0..3 * n {
        let pair = stream.sample(n, 2);
        let (i, j) = (pair[0], pair[1]);
        entries.extend([(i, i, -0.25), (j, j, -0.25), (i, j, 0.25)]);
    }
    let cost = SparseSymmetric::gather(n, entries);
    let constraints = (0..n)
        .map(|i| {
            let matrix = SparseSymmetric::gather(n, vec![(i, i, 1.0)]);
            Functional::on_block(0, Coefficient::Sparse(matrix))
        })
        .collect();
    Problem::new(
        vec![Block { order: n, rank: None }],
        0,
        Functional::on_block(0, Coefficient::Sparse(cost)),
        constraints,
        vec![1.0; n],
    )
    .unwrap()
}

fn solve(problem: &Problem) -> f64 {
    let mut meter = Meter::unlimited();
    let solution = ipm::solve(problem, &ipm::Params::default(), None, &mut meter).unwrap();
    solution.info.primal_value
}

fn interior(c: &mut Criterion) {
    let mut group = c.benchmark_group("interior-point");
    group.sample_size(10);
    for (order, rank) in [(50, 2), (100, 3), (200, 4)] {
        let problem = planted(order, rank);
        group.bench_function(format!("planted n={order} m={}", problem.rhs().len()), |b| {
            b.iter(|| solve(black_box(&problem)));
        });
    }
    for n in [200, 500] {
        let problem = max_cut(n);
        group.bench_function(format!("max-cut n={n}"), |b| b.iter(|| solve(black_box(&problem))));
    }
    group.finish();
}

criterion_group!(benches, interior);
criterion_main!(benches);
