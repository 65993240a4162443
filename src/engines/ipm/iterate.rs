//! One block of the iterate with its factors, and the operations on slacks that the loop needs.

use super::NewtonDirection;
use super::nt::NtScaling;
use crate::linalg::cholesky;
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::eigen::SymmetricEigen;
use crate::linalg::lanczos::{LanczosWorkspace, LinearOperator, StepParams, step_bound};
use crate::linalg::vector::{axpy, dot};
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, MatRef};
use crate::problem::{BlockOperator, Slack, SlackStore};

/// Blocks up to this order take their step length from all eigenvalues, larger ones from Lanczos.
const DENSE_STEP_ORDER: usize = 60;

/// State and workspace of one PSD block.
#[derive(Debug)]
pub(super) struct BlockState {
    pub order: usize,
    /// X and S.
    pub x: Mat<f64>,
    pub s: Slack,
    /// Cholesky factors of X and S.
    pub lx: Mat<f64>,
    pub ls: Mat<f64>,
    /// S^-1, both triangles.
    pub si: Mat<f64>,
    /// Dual residual C + W - S - A*(y).
    pub rd: Slack,
    /// Directions.
    pub dx: Mat<f64>,
    pub ds: Slack,
    /// Work: dS X or a sum of such products, and a second full matrix.
    pub t: Mat<f64>,
    pub p: Mat<f64>,
    /// Extra cost, when a hook steers.
    pub weight: Option<Mat<f64>>,
    /// Scaling point and factors of the NT direction; none for HKM.
    pub nt: Option<NtScaling>,
    /// Work for long outer products, order x count.
    pub outer_scratch: Mat<f64>,
    eigen: Option<SymmetricEigen>,
    lanczos: LanczosWorkspace,
    vector: Vec<f64>,
}

impl BlockState {
    /// Takes the memory of one block; [`Self::set_multiples`] makes it an iterate.
    pub fn new(block: &BlockOperator, newton: NewtonDirection) -> Self {
        let n = block.order;
        let zero = || Mat::zeros(n, n);
        BlockState {
            order: n,
            x: zero(),
            s: block.slack(),
            lx: zero(),
            ls: zero(),
            si: zero(),
            rd: block.slack(),
            dx: zero(),
            ds: block.slack(),
            t: zero(),
            p: zero(),
            weight: None,
            nt: (newton == NewtonDirection::Nt).then(|| NtScaling::new(n)),
            outer_scratch: Mat::zeros(n, block.outer.as_ref().map_or(0, |outer| outer.ids.len())),
            eigen: (n <= DENSE_STEP_ORDER).then(|| SymmetricEigen::new(n)),
            lanczos: LanczosWorkspace::new(),
            vector: vec![0.0; n],
        }
    }

    /// Sets X = xi I and S = eta I, and factors both.
    pub fn set_multiples(&mut self, xi: f64, eta: f64, ws: &mut Workspace) {
        self.x.fill(0.0);
        for i in 0..self.order {
            self.x[(i, i)] = xi;
        }
        fill_identity(&mut self.s, eta);
        self.factor_x(ws);
        self.factor_s(ws);
    }

    /// Factors X; false when it is not positive definite in floating point.
    ///
    /// Where no strictly feasible X exists, X becomes singular to rounding: the factor, which only
    /// serves step lengths, is then taken of X plus up to 1e-12 times its largest diagonal entry.
    pub fn factor_x(&mut self, ws: &mut Workspace) -> bool {
        let top = (0..self.order).fold(0.0_f64, |m, i| m.max(self.x[(i, i)]));
        for shift in [0.0, 1e-14, 1e-13, 1e-12] {
            dense::copy_into(self.x.as_ref(), self.lx.as_mut());
            for i in 0..self.order {
                self.lx[(i, i)] += shift * top;
            }
            if cholesky::factor_in_place(self.lx.as_mut(), ws).is_ok() {
                return true;
            }
        }
        false
    }

    /// Factors S; false when it is not positive definite in floating point.
    pub fn factor_s(&mut self, ws: &mut Workspace) -> bool {
        write_dense(&self.s, &mut self.ls);
        cholesky::factor_in_place(self.ls.as_mut(), ws).is_ok()
    }

    /// Inverts S from its factor.
    pub fn invert_s(&mut self, ws: &mut Workspace) {
        cholesky::invert_from_factor(self.ls.as_ref(), self.si.as_mut(), ws);
    }

    /// Returns the largest a with X + a dX positive semidefinite, infinite when there is no limit.
    pub fn reach_x(&mut self, seed: u64) -> f64 {
        let direction = Direction::Dense(self.dx.as_ref());
        reach(
            self.lx.as_ref(),
            direction,
            &mut self.eigen,
            &mut self.p,
            &mut self.lanczos,
            &mut self.vector,
            seed,
        )
    }

    /// Returns the largest a with S + a dS positive semidefinite, infinite when there is no limit.
    pub fn reach_s(&mut self, seed: u64) -> f64 {
        reach(
            self.ls.as_ref(),
            Direction::of(&self.ds),
            &mut self.eigen,
            &mut self.p,
            &mut self.lanczos,
            &mut self.vector,
            seed,
        )
    }
}

/// Sets a slack to `value` times the identity.
pub(super) fn fill_identity(slack: &mut Slack, value: f64) {
    match &mut slack.store {
        SlackStore::Sparse { pattern, values } => {
            values.fill(0.0);
            for i in 0..slack.order {
                values[pattern.slot(i, i).expect("a pattern holds the diagonal")] = value;
            }
        }
        SlackStore::Dense(matrix) => {
            matrix.fill(0.0);
            for i in 0..slack.order {
                matrix[(i, i)] = value;
            }
        }
    }
}

/// Writes the slack as a full matrix, at least its lower triangle.
pub(super) fn write_dense(slack: &Slack, target: &mut Mat<f64>) {
    match &slack.store {
        SlackStore::Dense(matrix) => dense::copy_into(matrix.as_ref(), target.as_mut()),
        SlackStore::Sparse { pattern, values } => {
            target.fill(0.0);
            for (slot, (i, j)) in pattern.upper().enumerate() {
                target[(j, i)] = values[slot];
                target[(i, j)] = values[slot];
            }
        }
    }
}

/// Returns <X, S>.
pub(super) fn inner(x: &Mat<f64>, s: &Slack) -> f64 {
    match &s.store {
        SlackStore::Dense(matrix) => dense::dot_symmetric(x.as_ref(), matrix.as_ref()),
        SlackStore::Sparse { pattern, values } => pattern
            .upper()
            .zip(values)
            .map(|((i, j), value)| if i == j { value * x[(i, j)] } else { 2.0 * value * x[(i, j)] })
            .sum(),
    }
}

/// Returns the squared Frobenius norm.
pub(super) fn norm_squared(s: &Slack) -> f64 {
    match &s.store {
        SlackStore::Dense(matrix) => dense::dot_symmetric(matrix.as_ref(), matrix.as_ref()),
        SlackStore::Sparse { pattern, values } => pattern
            .upper()
            .zip(values)
            .map(|((i, j), value)| if i == j { value * value } else { 2.0 * value * value })
            .sum(),
    }
}

/// Fills a slack with `cost_scale C - A*(y)`, long outer products multiplied into a dense store.
pub(super) fn fill_full(
    block: &BlockOperator,
    y: &[f64],
    cost_scale: f64,
    slack: &mut Slack,
    scratch: &mut Mat<f64>,
) {
    block.fill_slack(y, cost_scale, slack);
    let Some(outer) = &block.outer else { return };
    if let SlackStore::Dense(matrix) = &mut slack.store {
        for (k, weight) in slack.outer_weights.iter_mut().enumerate() {
            let target = scratch.col_as_slice_mut(k);
            for (value, source) in target.iter_mut().zip(outer.vectors.col_as_slice(k)) {
                *value = *weight * source;
            }
            *weight = 0.0;
        }
        let vectors_t = outer.vectors.transpose();
        dense::gemm(matrix.as_mut(), Accumulate::Add, 1.0, scratch.as_ref(), vectors_t);
    }
}

/// Copies one slack onto another of the same storage.
pub(super) fn copy_slack(from: &Slack, to: &mut Slack) {
    match (&from.store, &mut to.store) {
        (SlackStore::Dense(a), SlackStore::Dense(b)) => {
            dense::copy_into(a.as_ref(), b.as_mut());
        }
        (SlackStore::Sparse { values: a, .. }, SlackStore::Sparse { values: b, .. }) => {
            b.copy_from_slice(a);
        }
        _ => unreachable!("slacks of one block share their storage"),
    }
}

/// Adds `alpha * from` to `to`; both have the same storage.
pub(super) fn add_scaled(alpha: f64, from: &Slack, to: &mut Slack) {
    match (&from.store, &mut to.store) {
        (SlackStore::Dense(a), SlackStore::Dense(b)) => {
            dense::axpy_matrix(alpha, a.as_ref(), b.as_mut());
        }
        (SlackStore::Sparse { values: a, .. }, SlackStore::Sparse { values: b, .. }) => {
            axpy(alpha, a, b);
        }
        _ => unreachable!("slacks of one block share their storage"),
    }
}

/// Computes `out = S X` (or adds it).
pub(super) fn slack_times_dense(s: &Slack, x: &Mat<f64>, beta: Accumulate, out: &mut Mat<f64>) {
    match &s.store {
        SlackStore::Dense(matrix) => {
            dense::gemm(out.as_mut(), beta, 1.0, matrix.as_ref(), x.as_ref());
        }
        SlackStore::Sparse { pattern, values } => {
            for j in 0..x.ncols() {
                let source = x.col_as_slice(j);
                let target = out.col_as_slice_mut(j);
                if beta == Accumulate::Replace {
                    target.fill(0.0);
                }
                for (i, value) in target.iter_mut().enumerate() {
                    for (column, slot) in pattern.row(i) {
                        *value += values[slot] * source[column];
                    }
                }
            }
        }
    }
}

/// Adds <A_i, T' S^-1> to `out[i]`, by single entries: (T'S^-1)_ij = T_:i . (S^-1)_:j.
pub(super) fn add_product_by_entries(
    block: &BlockOperator,
    t: &Mat<f64>,
    si: &Mat<f64>,
    scale: f64,
    out: &mut [f64],
) {
    let entries = &block.entries;
    for (g, &id) in entries.ids.iter().enumerate() {
        let mut sum = 0.0;
        for k in entries.range(g) {
            let (i, j) = (entries.rows[k] as usize, entries.columns[k] as usize);
            let mut value = dot(t.col_as_slice(i), si.col_as_slice(j));
            if i != j {
                value += dot(t.col_as_slice(j), si.col_as_slice(i));
            }
            sum += entries.values[k] * value;
        }
        out[id as usize] += scale * sum;
    }
}

enum Direction<'a> {
    Dense(MatRef<'a, f64>),
    Sparse(&'a Slack),
}

impl<'a> Direction<'a> {
    fn of(slack: &'a Slack) -> Self {
        match &slack.store {
            SlackStore::Dense(matrix) => Direction::Dense(matrix.as_ref()),
            SlackStore::Sparse { .. } => Direction::Sparse(slack),
        }
    }

    fn times(&self, x: &[f64], y: &mut [f64]) {
        match self {
            Direction::Dense(matrix) => dense::gemv(y, Accumulate::Replace, 1.0, *matrix, x),
            Direction::Sparse(slack) => {
                if let SlackStore::Sparse { pattern, values } = &slack.store {
                    pattern.multiply_rows(values, x, 1, y);
                }
            }
        }
    }
}

/// The map v -> -L^-1 D L^-T v, whose largest eigenvalue is the inverse of the step to the boundary.
struct StepOperator<'a> {
    l: MatRef<'a, f64>,
    direction: Direction<'a>,
    work: &'a mut [f64],
}

impl LinearOperator for StepOperator<'_> {
    fn order(&self) -> usize {
        self.l.nrows()
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        self.work.copy_from_slice(x);
        cholesky::solve_lower_transpose_vector(self.l, self.work);
        self.direction.times(self.work, y);
        cholesky::solve_lower_vector(self.l, y);
        y.iter_mut().for_each(|value| *value = -*value);
    }
}

fn reach(
    l: MatRef<'_, f64>,
    direction: Direction<'_>,
    eigen: &mut Option<SymmetricEigen>,
    scratch: &mut Mat<f64>,
    lanczos: &mut LanczosWorkspace,
    vector: &mut [f64],
    seed: u64,
) -> f64 {
    let largest = if let Some(eigen) = eigen {
        match direction {
            Direction::Dense(matrix) => dense::copy_into(matrix, scratch.as_mut()),
            Direction::Sparse(slack) => write_dense(slack, scratch),
        }
        cholesky::solve_lower_matrix(l, scratch.as_mut());
        cholesky::solve_lower_matrix(l, scratch.as_mut().transpose_mut());
        match eigen.decompose_values_only(scratch.as_ref()) {
            Ok(()) => -eigen.values()[0],
            Err(_) => return 0.0,
        }
    } else {
        let mut operator = StepOperator { l, direction, work: vector };
        let params = StepParams { seed, ..StepParams::default() };
        step_bound(&mut operator, lanczos, &params).upper
    };
    if largest.is_nan() {
        0.0
    } else if largest > 0.0 {
        1.0 / largest
    } else {
        f64::INFINITY
    }
}
