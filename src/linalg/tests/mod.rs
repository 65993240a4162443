//! Tests of the kernels, by dimensionless ratios: residual / (n norm eps) must stay below [`RATIO`], LAPACK's usual threshold 30
//! (LAPACK Working Note 41, section on the test programs; from memory).
//!
//! References are plain loops written here, so that a kernel is never judged by itself.

mod cg;
mod cholesky;
mod compensated;
mod dense;
mod eigen;
mod lanczos;
mod null_space;
mod project;

use super::lanczos::LinearOperator;
use super::vector::fill_pseudo_random;
use faer::{Mat, MatRef};

/// Largest acceptable ratio of a residual to n * norm * eps.
const RATIO: f64 = 30.0;

/// Orders that meet every blocking and remainder path.
const ORDERS: [usize; 7] = [1, 2, 3, 5, 17, 50, 120];

/// Asserts residual <= RATIO * n * norm * eps, so that zero data demand a zero residual.
#[track_caller]
fn assert_ratio(residual: f64, n: usize, norm: f64, what: &str) {
    let limit = RATIO * n as f64 * norm * f64::EPSILON;
    assert!(
        residual <= limit,
        "{what}: residual {residual:e} above {limit:e} (n {n}, norm {norm:e})"
    );
}

fn random(rows: usize, columns: usize, seed: u64) -> Mat<f64> {
    let mut entries = vec![0.0; rows * columns];
    fill_pseudo_random(seed.wrapping_mul(0x9E37_79B9) + 17, &mut entries);
    Mat::from_fn(rows, columns, |i, j| entries[i + j * rows])
}

fn random_symmetric(n: usize, seed: u64) -> Mat<f64> {
    let a = random(n, n, seed);
    Mat::from_fn(n, n, |i, j| a[(i, j)] + a[(j, i)])
}

/// Orthonormal columns by Gram-Schmidt, three passes.
fn random_orthonormal(rows: usize, columns: usize, seed: u64) -> Mat<f64> {
    let mut q = random(rows, columns, seed);
    for j in 0..columns {
        for _ in 0..3 {
            for k in 0..j {
                let c: f64 = (0..rows).map(|i| q[(i, k)] * q[(i, j)]).sum();
                for i in 0..rows {
                    q[(i, j)] -= c * q[(i, k)];
                }
            }
            let norm = (0..rows).map(|i| q[(i, j)].powi(2)).sum::<f64>().sqrt();
            for i in 0..rows {
                q[(i, j)] /= norm;
            }
        }
    }
    q
}

/// A symmetric matrix with (up to rounding) the given eigenvalues.
fn with_spectrum(values: &[f64], seed: u64) -> Mat<f64> {
    let n = values.len();
    let q = random_orthonormal(n, n, seed);
    let scaled = Mat::from_fn(n, n, |i, j| q[(i, j)] * values[j]);
    let a = product(scaled.as_ref(), q.transpose());
    Mat::from_fn(n, n, |i, j| 0.5 * (a[(i, j)] + a[(j, i)]))
}

/// Spectra that are hard in different ways, by name; the first three are positive.
fn spectra(n: usize) -> Vec<(&'static str, Vec<f64>)> {
    let share = |i: usize| i as f64 / n as f64;
    let by = |f: &dyn Fn(usize) -> f64| (0..n).map(f).collect::<Vec<_>>();
    vec![
        ("spread", by(&|i| 1.0 + share(i))),
        ("graded", by(&|i| 10f64.powf(-8.0 * share(i)))),
        (
            "clustered",
            by(&|i| {
                if i % 3 == 0 { 1.0 } else { 1.0 + 1e-13 * share(i) }
            }),
        ),
        ("rank deficient", by(&|i| if i < n / 2 { 1.0 + share(i) } else { 0.0 })),
        ("indefinite", by(&|i| share(i) - 0.4)),
        ("zero", vec![0.0; n]),
    ]
}

fn product(a: MatRef<'_, f64>, b: MatRef<'_, f64>) -> Mat<f64> {
    assert_eq!(a.ncols(), b.nrows());
    let mut c = Mat::zeros(a.nrows(), b.ncols());
    for j in 0..b.ncols() {
        for k in 0..a.ncols() {
            for i in 0..a.nrows() {
                c[(i, j)] += a[(i, k)] * b[(k, j)];
            }
        }
    }
    c
}

fn frobenius(a: MatRef<'_, f64>) -> f64 {
    let mut sum = 0.0;
    for j in 0..a.ncols() {
        for i in 0..a.nrows() {
            sum += a[(i, j)] * a[(i, j)];
        }
    }
    sum.sqrt()
}

fn difference(a: MatRef<'_, f64>, b: MatRef<'_, f64>) -> f64 {
    assert_eq!((a.nrows(), a.ncols()), (b.nrows(), b.ncols()));
    frobenius(Mat::from_fn(a.nrows(), a.ncols(), |i, j| a[(i, j)] - b[(i, j)]).as_ref())
}

/// ||Q'Q - I||_F.
fn orthogonality_defect(q: MatRef<'_, f64>) -> f64 {
    let gram = product(q.transpose(), q);
    difference(gram.as_ref(), Mat::identity(q.ncols(), q.ncols()).as_ref())
}

fn poison_upper(a: &Mat<f64>) -> Mat<f64> {
    Mat::from_fn(a.nrows(), a.ncols(), |i, j| if i < j { f64::NAN } else { a[(i, j)] })
}

/// Laplacian of a rows x columns grid: eigenvalues 4 sin^2(i pi / (2 rows)) + 4 sin^2(j pi / (2 columns)), the Kronecker sum of
/// two paths (Mohar, The Laplacian spectrum of graphs, 1991; from memory, and checked against the dense solver below).
struct Grid {
    rows: usize,
    columns: usize,
}

impl LinearOperator for Grid {
    fn order(&self) -> usize {
        self.rows * self.columns
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        y.fill(0.0);
        for r in 0..self.rows {
            for c in 0..self.columns {
                let i = r * self.columns + c;
                let neighbours =
                    [(c + 1 < self.columns, i + 1), (r + 1 < self.rows, i + self.columns)];
                for (_, j) in neighbours.into_iter().filter(|n| n.0) {
                    let d = x[i] - x[j];
                    y[i] += d;
                    y[j] -= d;
                }
            }
        }
    }
}

struct Broken(usize);

impl LinearOperator for Broken {
    fn order(&self) -> usize {
        self.0
    }

    fn apply(&mut self, _: &[f64], y: &mut [f64]) {
        y.fill(f64::NAN);
    }
}
