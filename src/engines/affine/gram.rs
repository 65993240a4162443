//! Solving with AA*: a dense or sparse factor made once, or conjugate gradients.
//!
//! Up to 400 constraints AA* is factored densely. Beyond that a sparse factor is tried and taken when it is sparse:
//! at most a sixteenth of m^2 entries, or 3e7 where AA* is too large for a dense one. Else the dense factor serves up to
//! 1500 constraints, and conjugate gradients with the Jacobi preconditioner diag(||A_i||^2) beyond, which also
//! tolerate dependent rows of a consistent system.

use super::AffineError;
use super::maps::DenseMaps;
use super::sparse::{SparseFactor, SparseGram};
use crate::budget::Meter;
use crate::linalg::cg::{self, CgWorkspace, Diagonal};
use crate::linalg::eigen::flops;
use crate::linalg::lanczos::LinearOperator;
use crate::linalg::vector::{axpy, dot};
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, cholesky, dense};
use crate::problem::{Operator, Problem};

/// Most constraints for which AA* is factored densely.
pub const DIRECT_LIMIT: usize = 1500;
/// Constraints from which on a sparse factor is tried.
const SPARSE_FROM: usize = 400;
/// Most pairs of constraints at common places, and most entries of a factor, for a sparse one.
const SPARSE_MOST: usize = 30_000_000;
/// Share of the largest diagonal entry of AA* added to its diagonal, so that dependent rows do no harm;
/// refinement takes its effect out again.
const SHIFT: f64 = 1e-12;
/// Refinements of a direct solution.
const REFINEMENTS: usize = 2;
/// Conjugate gradients stop at this relative residual.
const CG_TOLERANCE: f64 = 1e-13;

/// How the solver works.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum SolverKind {
    /// Dense Cholesky factor.
    Dense,
    /// Sparse Cholesky factor.
    Sparse,
    /// Conjugate gradients.
    Iterative,
}

/// The solver of one problem.
pub struct GramSolver<'a> {
    inner: Inner<'a>,
}

enum Inner<'a> {
    Dense { gram: Mat<f64>, factor: Mat<f64>, correction: Vec<f64> },
    Sparse(Box<Sparse>),
    Iterative { diagonal: Diagonal, product: Product<'a>, workspace: CgWorkspace },
}

struct Sparse {
    gram: SparseGram,
    factor: SparseFactor,
    right: Vec<f64>,
    solution: Vec<f64>,
    correction: Vec<f64>,
}

impl<'a> GramSolver<'a> {
    /// Forms and factors AA*, or prepares conjugate gradients.
    ///
    /// # Errors
    /// [`AffineError::NotPositive`], when the shifted matrix is not positive definite (a number that is not finite).
    pub fn new(
        problem: &Problem,
        op: &'a Operator,
        meter: &mut Meter,
    ) -> Result<Self, AffineError> {
        let m = op.constraints();
        if m > SPARSE_FROM
            && let Some(sparse) = Sparse::try_new(problem, op, meter)
        {
            return Ok(GramSolver { inner: Inner::Sparse(Box::new(sparse)) });
        }
        if m > DIRECT_LIMIT {
            return Ok(GramSolver { inner: Inner::iterative(problem, op) });
        }
        let gram = gram_matrix(problem, op);
        let mut factor = gram.clone();
        let largest = (0..m).fold(f64::MIN_POSITIVE, |s, i| s.max(gram[(i, i)]));
        for i in 0..m {
            factor[(i, i)] += SHIFT * largest;
        }
        cholesky::factor_in_place(factor.as_mut(), &mut Workspace::new())
            .map_err(|error| AffineError::NotPositive { constraints: m, pivot: error.index })?;
        meter.effort.factorisations += 1;
        meter.effort.flops += flops::cholesky(m);
        Ok(GramSolver { inner: Inner::Dense { gram, factor, correction: vec![0.0; m] } })
    }

    /// Makes a solver by conjugate gradients, whatever the size.
    pub fn iterative(problem: &Problem, op: &'a Operator) -> Self {
        GramSolver { inner: Inner::iterative(problem, op) }
    }

    /// Returns how the solver works.
    pub fn kind(&self) -> SolverKind {
        match &self.inner {
            Inner::Dense { .. } => SolverKind::Dense,
            Inner::Sparse(_) => SolverKind::Sparse,
            Inner::Iterative { .. } => SolverKind::Iterative,
        }
    }

    /// Solves AA* w = `right`.
    #[track_caller]
    pub fn solve(&mut self, right: &[f64], weights: &mut [f64], meter: &mut Meter) {
        assert_eq!(right.len(), weights.len(), "a right side of another length");
        weights.fill(0.0);
        match &mut self.inner {
            Inner::Dense { gram, factor, correction } => {
                correction.copy_from_slice(right);
                for round in 0..=REFINEMENTS {
                    cholesky::solve_vector(factor.as_ref(), correction);
                    axpy(1.0, correction, weights);
                    if round == REFINEMENTS {
                        break;
                    }
                    correction.copy_from_slice(right);
                    let product = dense::Accumulate::Add;
                    dense::gemv(correction, product, -1.0, gram.as_ref(), weights);
                }
                let m = weights.len() as u64;
                meter.effort.flops += (REFINEMENTS as u64 + 1) * 4 * m * m;
            }
            Inner::Sparse(sparse) => sparse.solve(right, weights, meter),
            Inner::Iterative { diagonal, product, workspace } => {
                let params = cg::Params { tolerance: CG_TOLERANCE, max_steps: 2000 };
                let info =
                    cg::solve_preconditioned(product, diagonal, right, weights, &params, workspace);
                meter.effort.operator_products += 2 * info.steps as u64;
                meter.effort.flops += 2 * info.steps as u64 * product.maps.flops();
            }
        }
    }
}

impl<'a> Inner<'a> {
    fn iterative(problem: &Problem, op: &'a Operator) -> Self {
        let square = |norm: f64| if norm > 0.0 { 1.0 / (norm * norm) } else { 1.0 };
        let entries = problem.constraints().iter().map(|a| square(a.norm())).collect();
        let product = Product {
            maps: DenseMaps::new(op),
            images: op.blocks.iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
            x: vec![0.0; problem.orthant()],
            constraints: op.constraints(),
        };
        let workspace = CgWorkspace::new();
        Inner::Iterative { diagonal: Diagonal { entries }, product, workspace }
    }
}

impl Sparse {
    /// Factors AA* when its factor is sparse.
    fn try_new(problem: &Problem, op: &Operator, meter: &mut Meter) -> Option<Self> {
        let m = op.constraints();
        let gram = SparseGram::new(m, sparse_entries(problem, op)?);
        let most = if m > DIRECT_LIMIT { SPARSE_MOST } else { m * m / 16 };
        gram.fill(most)?;
        let factor = gram.factor(SHIFT * gram.largest_diagonal().max(f64::MIN_POSITIVE)).ok()?;
        meter.effort.factorisations += 1;
        meter.effort.flops += factor.flops();
        let room = || vec![0.0; m];
        Some(Sparse { gram, factor, right: room(), solution: room(), correction: room() })
    }

    fn solve(&mut self, right: &[f64], weights: &mut [f64], meter: &mut Meter) {
        self.gram.permute(right, &mut self.right);
        self.solution.fill(0.0);
        self.correction.copy_from_slice(&self.right);
        for round in 0..=REFINEMENTS {
            self.factor.solve(&mut self.correction);
            axpy(1.0, &self.correction, &mut self.solution);
            if round == REFINEMENTS {
                break;
            }
            self.correction.copy_from_slice(&self.right);
            self.gram.subtract_product(&self.solution, &mut self.correction);
        }
        self.gram.restore(&self.solution, weights);
        let stored = (self.factor.stored() + self.gram.stored()) as u64;
        meter.effort.flops += (REFINEMENTS as u64 + 1) * 4 * stored;
    }
}

/// w -> A(A*(w)), by way of dense images.
struct Product<'a> {
    maps: DenseMaps<'a>,
    images: Vec<Mat<f64>>,
    x: Vec<f64>,
    constraints: usize,
}

impl LinearOperator for Product<'_> {
    fn order(&self) -> usize {
        self.constraints
    }

    fn apply(&mut self, w: &[f64], out: &mut [f64]) {
        self.images.iter_mut().for_each(|image| image.fill(0.0));
        self.x.fill(0.0);
        self.maps.add_adjoint(w, 1.0, &mut self.images, &mut self.x);
        self.maps.apply(&self.images, &self.x, out);
    }
}

/// Upper-triangle entries of all constraints of one block, `(column, row, constraint, value)`, by place.
fn by_place(block: &crate::problem::BlockOperator) -> Vec<(u32, u32, u32, f64)> {
    let entries = &block.entries;
    let mut places: Vec<(u32, u32, u32, f64)> = Vec::with_capacity(entries.values.len());
    for (g, &id) in entries.ids.iter().enumerate() {
        places.extend(
            entries.range(g).map(|k| (entries.columns[k], entries.rows[k], id, entries.values[k])),
        );
    }
    places.sort_by_key(|place| (place.0, place.1, place.2));
    places
}

/// The constraints on each nonnegative scalar.
fn orthant_columns(problem: &Problem, op: &Operator) -> Vec<Vec<(usize, f64)>> {
    let mut columns: Vec<Vec<(usize, f64)>> = vec![Vec::new(); problem.orthant()];
    for (id, row) in op.orthant_rows.iter().enumerate() {
        row.iter().for_each(|(index, a)| columns[index].push((id, a)));
    }
    columns
}

/// Returns the upper triangle of AA* as entries to be added up, or nothing when there are long outer products or
/// more than [`SPARSE_MOST`] pairs of constraints at common places.
fn sparse_entries(problem: &Problem, op: &Operator) -> Option<Vec<(u32, u32, f64)>> {
    if op.blocks.iter().any(|block| block.outer.is_some()) {
        return None;
    }
    // A full diagonal, so that rows without data have a place for the shift.
    let mut entries: Vec<(u32, u32, f64)> =
        (0..op.constraints() as u32).map(|i| (i, i, 0.0)).collect();
    let mut pairs = 0;
    for block in &op.blocks {
        let places = by_place(block);
        for same in places.chunk_by(|a, b| (a.0, a.1) == (b.0, b.1)) {
            pairs += same.len() * (same.len() + 1) / 2;
            if pairs > SPARSE_MOST {
                return None;
            }
            let weight = if same[0].0 == same[0].1 { 1.0 } else { 2.0 };
            for (k, b) in same.iter().enumerate() {
                entries.extend(same[..=k].iter().map(|a| (a.2, b.2, weight * a.3 * b.3)));
            }
        }
    }
    for column in orthant_columns(problem, op) {
        pairs += column.len() * (column.len() + 1) / 2;
        if pairs > SPARSE_MOST {
            return None;
        }
        for (k, &(j, b)) in column.iter().enumerate() {
            entries.extend(column[..=k].iter().map(|&(i, a)| (i as u32, j as u32, a * b)));
        }
    }
    Some(entries)
}

/// Forms AA*, both triangles: inner products of all constraints.
fn gram_matrix(problem: &Problem, op: &Operator) -> Mat<f64> {
    let m = op.constraints();
    let mut gram = Mat::zeros(m, m);
    for block in &op.blocks {
        // 1. Sparse with sparse: constraints that share a place.
        let entries = &block.entries;
        let places = by_place(block);
        for same in places.chunk_by(|a, b| (a.0, a.1) == (b.0, b.1)) {
            let weight = if same[0].0 == same[0].1 { 1.0 } else { 2.0 };
            for a in same {
                for b in same {
                    gram[(a.2 as usize, b.2 as usize)] += weight * a.3 * b.3;
                }
            }
        }
        // 2. Long outer products with each other and with the sparse parts.
        let Some(outer) = &block.outer else { continue };
        let count = outer.ids.len();
        for k in 0..count {
            let a = outer.vectors.col_as_slice(k);
            let id = outer.ids[k] as usize;
            for l in 0..count {
                let inner = dot(a, outer.vectors.col_as_slice(l));
                gram[(id, outer.ids[l] as usize)] +=
                    outer.weights[k] * outer.weights[l] * inner * inner;
            }
            for (g, &other) in entries.ids.iter().enumerate() {
                let sum: f64 = entries
                    .range(g)
                    .map(|e| {
                        let (i, j) = (entries.rows[e] as usize, entries.columns[e] as usize);
                        let value = entries.values[e] * a[i] * a[j];
                        if i == j { value } else { 2.0 * value }
                    })
                    .sum();
                gram[(id, other as usize)] += outer.weights[k] * sum;
                gram[(other as usize, id)] += outer.weights[k] * sum;
            }
        }
    }
    // 3. The nonnegative part.
    for column in orthant_columns(problem, op) {
        for &(i, a) in &column {
            for &(j, b) in &column {
                gram[(i, j)] += a * b;
            }
        }
    }
    gram
}
