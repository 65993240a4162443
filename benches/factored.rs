//! Times the factored engine: max-cut relaxations of random graphs of average degree 6 at the width
//! ceil(sqrt(2n)), and planted problems with random sparse constraints at the planted rank.

use criterion::{Criterion, criterion_group, criterion_main};
use rankassay::budget::Meter;
use rankassay::engines::alm::{AlmParams, solve};
use rankassay::problem::{
    Block, Coefficient, Factor, Functional, Operator, Problem, SparseSymmetric,
};
use rankassay::seed::Stream;

/// Minimise <-L/4, X>, X_ii = 1, for a random graph with 3n edges.
fn max_cut(order: usize) -> Problem {
    let mut draw = Stream::named(1, &["bench", "max-cut"]);
    let mut entries = Vec::new();
    for _ in 0..3 * order {
        let (i, j) = (draw.index(order), draw.index(order));
        if i != j {
            entries.extend([(i, i, -0.25), (j, j, -0.25), (i, j, 0.25)]);
        }
    }
    let constraints = (0..order)
        .map(|i| {
            let matrix = SparseSymmetric::gather(order, vec![(i, i, 1.0)]);
            Functional::on_block(0, Coefficient::Sparse(matrix))
        })
        .collect();
    let cost = Coefficient::Sparse(SparseSymmetric::gather(order, entries));
    let blocks = vec![Block { order, rank: None }];
    Problem::new(blocks, 0, Functional::on_block(0, cost), constraints, vec![1.0; order])
        .expect("a problem")
}

/// Integer constraints of 6 entries (the first is the identity), X* = VV', S* = WW' with V'W = 0.
fn planted(order: usize, count: usize, rank: usize) -> Problem {
    let mut draw = Stream::named(1, &["bench", "planted"]);
    let rest = order - rank;
    let base: Vec<f64> = (0..rest * rank).map(|_| draw.between(-1, 1) as f64).collect();
    let mut v = Factor::zeros(order, rank);
    for i in 0..rank {
        v.row_mut(i)[i] = 1.0;
    }
    for i in 0..rest {
        v.row_mut(rank + i).copy_from_slice(&base[i * rank..(i + 1) * rank]);
    }
    let identity = (0..order).map(|i| (i, i, 1.0)).collect();
    let mut matrices = vec![SparseSymmetric::gather(order, identity)];
    for _ in 1..count {
        let entries = (0..6)
            .map(|_| (draw.index(order), draw.index(order), draw.between(1, 3) as f64))
            .collect();
        matrices.push(SparseSymmetric::gather(order, entries));
    }
    // W = [-B'; I], S* = WW'.
    let mut cost = Vec::new();
    for i in 0..rest {
        cost.push((rank + i, rank + i, 1.0));
        for a in 0..rank {
            cost.push((a, rank + i, -base[i * rank + a]));
            for b in a..rank {
                cost.push((a, b, base[i * rank + a] * base[i * rank + b]));
            }
        }
    }
    for matrix in &matrices {
        let y = draw.between(-2, 2) as f64;
        cost.extend(matrix.iter().map(|(i, j, value)| (i, j, y * value)));
    }
    let functional = |m: &SparseSymmetric| Functional::on_block(0, Coefficient::Sparse(m.clone()));
    let constraints: Vec<Functional> = matrices.iter().map(functional).collect();
    let cost = functional(&SparseSymmetric::gather(order, cost));
    let blocks = vec![Block { order, rank: Some(rank) }];
    let make = |rhs| Problem::new(blocks.clone(), 0, cost.clone(), constraints.clone(), rhs);
    let mut rhs = vec![0.0; count];
    let bare = make(rhs.clone()).expect("a problem");
    Operator::new(&bare).apply_factors(&[v], &[], &mut rhs);
    make(rhs).expect("a problem")
}

fn bench(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("factored");
    group.sample_size(10);
    let mut time = |name: String, problem: &Problem, width: usize| {
        let op = Operator::new(problem);
        let params = AlmParams::with_widths(vec![width]);
        group.bench_function(name, |bencher| {
            bencher.iter(|| {
                let mut stream = Stream::named(7, &["bench", "start"]);
                let mut meter = Meter::unlimited();
                solve(problem, &op, &params, &mut stream, &mut meter).expect("a point")
            });
        });
    };
    for order in [200, 1000] {
        let width = (2.0 * order as f64).sqrt().ceil() as usize;
        time(format!("max-cut n={order} width={width}"), &max_cut(order), width);
    }
    for (order, count, rank) in [(50, 50, 2), (100, 100, 3)] {
        let name = format!("planted n={order} m={count} r={rank}");
        time(name, &planted(order, count, rank), rank);
    }
    group.finish();
}

criterion_group!(benches, bench);
criterion_main!(benches);
