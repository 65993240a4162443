//! The loops: limited-memory BFGS (or truncated Newton steps) with the exact line search inside, multipliers
//! and penalty outside.

use super::lagrangian::Lagrangian;
use super::quartic::least_step;
use super::truncated::{self, TruncatedWorkspace};
use crate::budget::{Halt, Meter, TracePoint};
use crate::engines::lbfgs::Lbfgs;
use crate::linalg::vector::{dot, norm2};
use crate::problem::Problem;

/// First penalty, in scaled data (rows, cost and right side of norm 1).
pub const FIRST_SIGMA: f64 = 5.0;
/// Factor of the penalty when the residual did not fall enough.
pub const SIGMA_GROWTH: f64 = 4.0;
/// The penalty never exceeds this.
pub const LARGEST_SIGMA: f64 = 1e8;
/// The residual falls enough when it is at most this share of the best before.
pub const ENOUGH: f64 = 0.25;
/// First inner tolerance.
pub const FIRST_INNER: f64 = 1e-2;
/// Factor of the inner tolerance after each outer step.
pub const INNER_SHRINK: f64 = 0.3;
/// A descent ends when the residual has not halved in this many outer steps: it is then stationary and
/// infeasible, or at the limit of the arithmetic.
pub const PATIENCE: usize = 8;
/// A descent ends when this many inner minimisations in a row reached their step limit.
pub const INNER_LIMITS: usize = 3;
/// Residual and cost are recomputed from their definitions after this many updates.
pub const REFRESH_EVERY: usize = 64;

/// What minimises the augmented Lagrangian at fixed multipliers and penalty.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum InnerSolver {
    /// Limited-memory BFGS.
    Lbfgs,
    /// Truncated Newton steps.
    Newton,
}

/// Settings of the loops.
#[derive(Clone, Copy, Debug)]
pub struct DescentParams {
    /// Accepts ||A(X) - b||_2 <= feasibility * (1 + ||b||_2), in scaled data.
    pub feasibility: f64,
    /// Accepts ||gradient||_2 <= stationarity * (1 + ||z||_2), in scaled data.
    pub stationarity: f64,
    /// Most outer steps.
    pub outer: usize,
    /// Most inner steps in one outer step.
    pub inner: usize,
    /// Pairs of the quasi-Newton memory.
    pub pairs: usize,
    /// Inner solver.
    pub solver: InnerSolver,
}

/// How a descent ended.
#[derive(Clone, Debug, PartialEq)]
pub struct DescentInfo {
    /// ||gradient||_2 / (1 + ||z||_2), scaled.
    pub stationarity: f64,
    /// ||v||_2 / (1 + ||b||_2), scaled.
    pub feasibility: f64,
    /// Outer steps made.
    pub outer: usize,
    /// Inner steps made.
    pub inner: usize,
    /// Why it ended.
    pub end: DescentEnd,
}

/// Why a descent ended.
#[derive(Clone, Debug, PartialEq)]
pub enum DescentEnd {
    /// Both tolerances are met.
    Converged,
    /// The outer limit was reached or the penalty is at its limit without progress.
    Limit,
    /// A number was not finite: the Lagrangian is unbounded below along a ray.
    Diverged,
    /// The budget ended; the point is the last one.
    Halted(Halt),
}

/// Vectors of a descent, kept between runs.
#[derive(Clone, Debug)]
pub struct DescentWorkspace {
    memory: Lbfgs,
    direction: Vec<f64>,
    old_gradient: Vec<f64>,
    newton: Option<TruncatedWorkspace>,
}

impl DescentWorkspace {
    /// Takes memory for vectors of `length` numbers.
    pub fn new(length: usize, pairs: usize) -> Self {
        DescentWorkspace {
            memory: Lbfgs::new(length, pairs),
            direction: vec![0.0; length],
            old_gradient: vec![0.0; length],
            newton: None,
        }
    }
}

/// Why the inner loop ended.
#[derive(Clone, Debug, PartialEq)]
pub(super) enum InnerEnd {
    Converged,
    Limit,
    Diverged,
    Halted(Halt),
}

/// Minimises the augmented Lagrangian over z at fixed multipliers and penalty.
fn minimise(
    l: &mut Lagrangian<'_>,
    tolerance: f64,
    limit: usize,
    ws: &mut DescentWorkspace,
    meter: &mut Meter,
    steps: &mut usize,
) -> InnerEnd {
    ws.memory.clear();
    l.refresh();
    l.compute_gradient();
    for step in 1..=limit {
        // 1. Stop rules.
        if let Err(halt) = meter.check() {
            return InnerEnd::Halted(halt);
        }
        let size = norm2(&l.gradient);
        if size <= tolerance * (1.0 + norm2(&l.z)) {
            return InnerEnd::Converged;
        }
        // 2. Direction, the steepest one when the memory gives no descent.
        ws.memory.direction(&l.gradient, &mut ws.direction);
        let slope = dot(&ws.direction, &l.gradient);
        if slope >= -1e-12 * size * norm2(&ws.direction) || slope.is_nan() {
            ws.memory.clear();
            ws.memory.direction(&l.gradient, &mut ws.direction);
        }
        // 3. Exact step along it.
        let q = l.line(&ws.direction);
        let Some(alpha) = least_step(q) else {
            if ws.memory.pairs() == 0 {
                let unbounded = q[0] < 0.0 && q[3] <= 0.0;
                return if unbounded || !q[0].is_finite() {
                    InnerEnd::Diverged
                } else {
                    InnerEnd::Limit
                };
            }
            ws.memory.clear();
            continue;
        };
        ws.old_gradient.copy_from_slice(&l.gradient);
        l.advance(alpha, &ws.direction);
        if step % REFRESH_EVERY == 0 {
            l.refresh();
        }
        l.compute_gradient();
        ws.memory.push(alpha, &ws.direction, &ws.old_gradient, &l.gradient);
        *steps += 1;
        meter.effort.inner_steps += 1;
        meter.effort.operator_products += 3;
        meter.effort.flops += l.flops() + (8 * ws.memory.pairs() as u64 + 8) * l.z.len() as u64;
    }
    InnerEnd::Limit
}

/// Runs the outer loop from the point and multipliers held by `l`.
///
/// After each inner minimisation the multipliers are updated when the residual fell to a quarter of the best
/// before, or when it is the smallest so far; otherwise the penalty grows fourfold. (The source updates one
/// or the other, with constants known to us from memory only; ours were set by trials on planted problems.)
pub fn descend(
    problem: &Problem,
    l: &mut Lagrangian<'_>,
    params: &DescentParams,
    ws: &mut DescentWorkspace,
    meter: &mut Meter,
) -> DescentInfo {
    let right = 1.0 + l.rhs_norm();
    l.refresh();
    let mut best = f64::INFINITY;
    let mut limits = 0;
    let (mut marked, mut marked_at) = (f64::INFINITY, 0);
    let mut tolerance = FIRST_INNER.max(params.stationarity);
    let mut info = DescentInfo {
        stationarity: f64::INFINITY,
        feasibility: norm2(&l.residual) / right,
        outer: 0,
        inner: 0,
        end: DescentEnd::Limit,
    };
    while info.outer < params.outer {
        info.outer += 1;
        let end = match params.solver {
            InnerSolver::Lbfgs => minimise(l, tolerance, params.inner, ws, meter, &mut info.inner),
            InnerSolver::Newton => {
                let newton = ws.newton.get_or_insert_with(|| TruncatedWorkspace::new(l));
                truncated::minimise(l, tolerance, params.inner, newton, meter, &mut info.inner)
            }
        };
        let violation = norm2(&l.residual);
        info.stationarity = norm2(&l.gradient) / (1.0 + norm2(&l.z));
        info.feasibility = violation / right;
        meter.trace(TracePoint {
            flops: 0,
            objective: Some(l.cost * l.scaling.variable / l.scaling.cost),
            residual: Some(l.feasibility(problem)),
            tail: None,
        });
        match end {
            InnerEnd::Halted(halt) => {
                info.end = DescentEnd::Halted(halt);
                return info;
            }
            InnerEnd::Diverged if l.sigma >= LARGEST_SIGMA => {
                info.end = DescentEnd::Diverged;
                return info;
            }
            InnerEnd::Diverged => {
                l.sigma *= SIGMA_GROWTH;
                continue;
            }
            InnerEnd::Converged => limits = 0,
            InnerEnd::Limit => limits += 1,
        }
        let feasible = info.feasibility <= params.feasibility;
        // The gradient at the updated multipliers is the one just measured, so the update loses nothing.
        let fell = violation <= ENOUGH * best;
        if feasible || violation < best {
            l.update_multipliers();
        }
        best = best.min(violation);
        if best <= 0.5 * marked {
            (marked, marked_at) = (best, info.outer);
        }
        if feasible && info.stationarity <= params.stationarity {
            info.end = DescentEnd::Converged;
            return info;
        }
        if limits >= INNER_LIMITS {
            return info;
        }
        if !fell && !feasible {
            if l.sigma >= LARGEST_SIGMA || info.outer - marked_at >= PATIENCE {
                return info;
            }
            l.sigma *= SIGMA_GROWTH;
        }
        tolerance = (tolerance * INNER_SHRINK).max(params.stationarity);
    }
    info
}
