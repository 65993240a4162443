//! Times of the dense kernels and of a Lanczos step bound, at orders 50, 200 and 500.

use criterion::{BatchSize, BenchmarkId, Criterion, Throughput, criterion_group, criterion_main};
use rankassay::linalg::cholesky;
use rankassay::linalg::dense::{Accumulate, gemm, symmetrise};
use rankassay::linalg::eigen::{SymmetricEigen, flops};
use rankassay::linalg::lanczos::{LanczosWorkspace, LinearOperator, StepParams, step_bound};
use rankassay::linalg::vector::fill_pseudo_random;
use rankassay::linalg::workspace::Workspace;
use rankassay::linalg::{Mat, MatRef, project};
use std::hint::black_box;
use std::time::Duration;

const ORDERS: [usize; 3] = [50, 200, 500];

fn positive_definite(n: usize) -> Mat<f64> {
    let mut entries = vec![0.0; n * n];
    fill_pseudo_random(n as u64, &mut entries);
    let shift = n as f64;
    let mut a = Mat::from_fn(n, n, |i, j| entries[i + n * j] + if i == j { shift } else { 0.0 });
    symmetrise(a.as_mut());
    a
}

fn factor_of(a: &Mat<f64>) -> Mat<f64> {
    let mut l = a.clone();
    cholesky::factor_in_place(l.as_mut(), &mut Workspace::new())
        .expect("the matrix is positive definite");
    l
}

/// v -> L^-1 D L^-T v, the operator of a step length to the boundary of the cone.
struct Congruence<'a> {
    factor: MatRef<'a, f64>,
    direction: MatRef<'a, f64>,
    work: Vec<f64>,
}

impl LinearOperator for Congruence<'_> {
    fn order(&self) -> usize {
        self.factor.nrows()
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        self.work.copy_from_slice(x);
        cholesky::solve_lower_transpose_vector(self.factor, &mut self.work);
        rankassay::linalg::dense::gemv(y, Accumulate::Replace, 1.0, self.direction, &self.work);
        cholesky::solve_lower_vector(self.factor, y);
    }
}

fn dense(c: &mut Criterion) {
    for n in ORDERS {
        let a = positive_definite(n);
        let l = factor_of(&a);
        let mut out = a.clone();
        let mut ws = Workspace::new();
        let mut eig = SymmetricEigen::new(n);
        let mut group = c.benchmark_group("dense");
        group
            .sample_size(20)
            .warm_up_time(Duration::from_millis(300))
            .measurement_time(Duration::from_secs(1));
        group.throughput(Throughput::Elements(flops::gemm(n, n, n)));
        group.bench_function(BenchmarkId::new("gemm", n), |b| {
            b.iter(|| {
                gemm(out.as_mut(), Accumulate::Replace, 1.0, black_box(a.as_ref()), l.as_ref())
            });
        });
        group.throughput(Throughput::Elements(flops::cholesky(n)));
        group.bench_function(BenchmarkId::new("cholesky", n), |b| {
            b.iter_batched_ref(
                || a.clone(),
                |m| cholesky::factor_in_place(m.as_mut(), &mut ws),
                BatchSize::LargeInput,
            );
        });
        group.throughput(Throughput::Elements(flops::inverse_from_factor(n)));
        group.bench_function(BenchmarkId::new("inverse", n), |b| {
            b.iter(|| cholesky::invert_from_factor(black_box(l.as_ref()), out.as_mut(), &mut ws));
        });
        group.throughput(Throughput::Elements(flops::eigen(n)));
        group.bench_function(BenchmarkId::new("eigen", n), |b| {
            b.iter(|| eig.decompose(black_box(a.as_ref())));
        });
        group.throughput(Throughput::Elements(flops::gemm(n, n, n / 4) / 2));
        group.bench_function(BenchmarkId::new("rank projection", n), |b| {
            b.iter(|| project::rank_projection(&eig, n / 4, out.as_mut(), &mut ws));
        });
        let mut x = vec![1.0; n];
        group.throughput(Throughput::Elements(2 * flops::triangular_solve(n, 1)));
        group.bench_function(BenchmarkId::new("vector solve", n), |b| {
            b.iter(|| {
                x.fill(1.0);
                cholesky::solve_vector(black_box(l.as_ref()), &mut x);
            });
        });
        group.finish();
    }
}

fn krylov(c: &mut Criterion) {
    for n in ORDERS {
        let factor = factor_of(&positive_definite(n));
        let direction = {
            let mut d = positive_definite(n + 1).as_ref().submatrix(0, 0, n, n).to_owned();
            for j in 0..n {
                d[(j, j)] = -d[(j, j)] * (j as f64 / n as f64);
            }
            d
        };
        let mut op = Congruence {
            factor: factor.as_ref(),
            direction: direction.as_ref(),
            work: vec![0.0; n],
        };
        let mut ws = LanczosWorkspace::new();
        let mut group = c.benchmark_group("krylov");
        group
            .sample_size(20)
            .warm_up_time(Duration::from_millis(300))
            .measurement_time(Duration::from_secs(1));
        group.bench_function(BenchmarkId::new("step bound", n), |b| {
            b.iter(|| step_bound(&mut op, &mut ws, &StepParams::default()));
        });
        group.finish();
    }
}

criterion_group!(kernels, dense, krylov);
criterion_main!(kernels);
