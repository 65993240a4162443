//! The least eigenvalue of the slack at a point: what proves a factored answer optimal.
//!
//! If A(X) = b, S = C - A*(y) PSD and <S, X> = 0, then X is optimal for the relaxation. In floating point
//! the measure is `|<C, X> - b'y| + trace * max(0, -least)`, with trace the trace of the point: for every
//! feasible Z of at most that trace, <C, Z> >= b'y - trace * max(0, -least). Large slacks are never
//! formed: their least eigenvalue comes from a Lanczos run, which converges to an eigenvalue but does not
//! prove that none lies below. A proof is the referee's. A Lanczos run is bounded by its step limit, not by the
//! clock: it ends before the budget is looked at again.

use crate::budget::Meter;
use crate::linalg::eigen::SymmetricEigen;
use crate::linalg::lanczos::{
    ExtremeOutcome, ExtremeParams, LanczosWorkspace, LinearOperator, smallest_eigenpair,
};
use crate::linalg::vector::{dot, norm2};
use crate::linalg::{Mat, dense};
use crate::problem::{BlockOperator, Factor, LineScratch, Operator, Problem, Slack};

/// Blocks up to this order are decomposed in full.
const FULL_ORDER: usize = 160;
/// Columns of the factor are held to span its range down to this share of the largest eigenvalue of V'V.
const RANGE_SHARE: f64 = 1e-7;
/// Residual tolerances of the Lanczos runs, relative to the norm of S: the next one is tried while the sign
/// of the least eigenvalue is open.
const LANCZOS_TOLERANCES: [f64; 3] = [1e-4, 1e-6, 1e-9];

/// What the slack says of a point.
#[derive(Clone, Debug, PartialEq)]
pub struct Certificate {
    /// Least eigenvalue of S over all blocks and entries of the nonnegative part, at most 0 when the sign was
    /// settled as nonnegative.
    pub least: f64,
    /// Block and unit vector of the least eigenvalue, when a block has it and it is negative.
    pub escape: Option<(usize, Vec<f64>)>,
    /// `|<C, X> - b'y| + trace * max(0, -least)`, relative to `1 + |<C, X>|`.
    pub gap: f64,
    /// `b'y + trace * min(0, least)`.
    pub bound: f64,
}

/// Settings of a certificate.
#[derive(Clone, Copy, Debug)]
pub struct CertificateParams {
    /// Most products with the slack in one Lanczos run.
    pub max_steps: usize,
    /// Seed of the Lanczos start.
    pub seed: u64,
}

impl Default for CertificateParams {
    fn default() -> Self {
        CertificateParams { max_steps: 4000, seed: 11 }
    }
}

/// A slack as an operator on vectors.
#[derive(Debug)]
pub struct SlackOperator<'a> {
    block: &'a BlockOperator,
    slack: &'a Slack,
    scratch: LineScratch,
}

impl<'a> SlackOperator<'a> {
    /// Wraps a filled slack.
    pub fn new(block: &'a BlockOperator, slack: &'a Slack) -> Self {
        SlackOperator { block, slack, scratch: LineScratch::new(block, 1) }
    }
}

impl LinearOperator for SlackOperator<'_> {
    fn order(&self) -> usize {
        self.block.order
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        self.block.slack_rows(self.slack, x, 1, &mut self.scratch, y);
    }
}

/// Computes the certificate of a point with multipliers `y`.
pub fn certify(
    problem: &Problem,
    op: &Operator,
    factors: &[Factor],
    orthant: &[f64],
    y: &[f64],
    params: &CertificateParams,
    meter: &mut Meter,
) -> Certificate {
    let mut values = vec![0.0; op.constraints()];
    let mut objective = dot(&op.orthant_cost, orthant);
    let mut trace: f64 = orthant.iter().sum();
    let mut least = f64::INFINITY;
    let mut escape = None;
    let mut workspace = LanczosWorkspace::new();
    for (k, block) in op.blocks.iter().enumerate() {
        let mut scratch = LineScratch::new(block, factors[k].width);
        objective +=
            block.add_square(&factors[k].data, factors[k].width, &mut scratch, &mut values);
        trace += dot(&factors[k].data, &factors[k].data);
        let mut slack = block.slack();
        block.fill_slack(y, 1.0, &mut slack);
        let (value, vector) =
            least_eigenpair(block, &slack, &factors[k], params, &mut workspace, meter);
        if value < least {
            least = value;
            escape = (value < 0.0).then_some((k, vector));
        }
    }
    let mut slack = vec![0.0; orthant.len()];
    op.orthant_slack(y, 1.0, &mut slack);
    for value in slack {
        if value < least {
            least = value;
            escape = None;
        }
    }
    let dual = dot(problem.rhs(), y);
    let drop = trace * least.min(0.0);
    let gap = ((objective - dual).abs() - drop) / (1.0 + objective.abs());
    Certificate { least, escape, gap, bound: dual + drop }
}

/// Returns the least eigenvalue of a block's slack and its vector.
pub(super) fn least_eigenpair(
    block: &BlockOperator,
    slack: &Slack,
    factor: &Factor,
    params: &CertificateParams,
    workspace: &mut LanczosWorkspace,
    meter: &mut Meter,
) -> (f64, Vec<f64>) {
    let n = block.order;
    if n <= FULL_ORDER {
        let mut full = Mat::zeros(n, n);
        block.add_slack_to(slack, 1.0, &mut full);
        let mut eigen = SymmetricEigen::new(n);
        meter.effort.eigendecompositions += 1;
        meter.effort.flops += crate::linalg::eigen::flops_full(n);
        return match eigen.decompose(full.as_ref()) {
            Ok(()) => (eigen.values()[0], dense::column(eigen.vectors(), 0).to_vec()),
            Err(_) => (f64::NEG_INFINITY, vec![0.0; n]),
        };
    }
    let (range, coupling) = range_basis(block, slack, factor);
    let mut operator = SlackOperator::new(block, slack);
    let mut start: Vec<f64> = Vec::new();
    let mut outcome = (f64::NEG_INFINITY, vec![0.0; n]);
    for tolerance in LANCZOS_TOLERANCES {
        let settings = ExtremeParams {
            tolerance,
            max_steps: params.max_steps,
            basis: 60,
            deflate: Some(range.as_ref()),
            start_noise: 1.0,
            seed: params.seed,
        };
        let found = smallest_eigenpair(&mut operator, &start, &settings, workspace);
        meter.effort.operator_products += found.steps as u64;
        meter.effort.flops += found.steps as u64 * (block.flops_per_column() + 200 * n as u64);
        let settled = found.outcome == ExtremeOutcome::Converged;
        // On the range of the factor S is zero but for `coupling`, so that is where the least value may lie.
        let value = (found.value - found.residual).min(0.0) - coupling;
        outcome = (value.min(found.value), found.vector.clone());
        let positive = found.value - found.residual > 0.0;
        let negative = found.value + found.residual < -coupling;
        if !settled || positive || (negative && found.residual <= 0.1 * found.value.abs()) {
            break;
        }
        start = found.vector;
    }
    outcome
}

/// Returns an orthonormal basis Q of the numerical range of V and `||S Q||_F`.
fn range_basis(block: &BlockOperator, slack: &Slack, factor: &Factor) -> (Mat<f64>, f64) {
    let (n, width) = (factor.order, factor.width);
    let rows = crate::linalg::MatRef::from_column_major_slice(&factor.data, width, n);
    let mut gram = Mat::zeros(width, width);
    dense::syrk_lower(gram.as_mut(), dense::Accumulate::Replace, 1.0, rows);
    let mut eigen = SymmetricEigen::new(width);
    if width == 0 || eigen.decompose(gram.as_ref()).is_err() {
        return (Mat::zeros(n, 0), 0.0);
    }
    let largest = eigen.values()[width - 1];
    let first = eigen.values().partition_point(|&v| v <= RANGE_SHARE * largest);
    let count = width - first;
    let mut turn = Mat::zeros(width, count);
    for j in 0..count {
        let weight = 1.0 / eigen.values()[first + j].sqrt();
        for i in 0..width {
            turn[(i, j)] = weight * eigen.vectors()[(i, first + j)];
        }
    }
    let mut basis = Mat::zeros(n, count);
    dense::gemm(basis.as_mut(), dense::Accumulate::Replace, 1.0, rows.transpose(), turn.as_ref());
    let mut scratch = LineScratch::new(block, 1);
    let mut image = vec![0.0; n];
    let mut square = 0.0;
    for j in 0..count {
        block.slack_rows(slack, basis.col_as_slice(j), 1, &mut scratch, &mut image);
        square += norm2(&image).powi(2);
    }
    (basis, square.sqrt())
}
