//! Alternating direction augmented Lagrangian method on the dual of the relaxation, for larger orders.
//!
//! Source: Z. Wen, D. Goldfarb, W. Yin, Math. Program. Comput. 2:203-230 (2010), 10.1007/s12532-010-0017-1. With the
//! augmented Lagrangian `-b'y + <X, A*(y) + S - C> + ||A*(y) + S - C||^2/(2 mu)` one iteration is
//!
//! ```text
//! y    = (AA*)^-1 (mu (b - A(X)) + A(C - S))
//! V    = C - A*(y) - mu X = V+ - V-,   S = V+,   X^ = V-/mu
//! X    = (1 - rho) X + rho X^
//! ```
//!
//! At rho = 1 it is the boundary point method with penalty 1/mu (J. Povh, F. Rendl, A. Wiegele, Computing 78:277-286,
//! 2006; J. Malick et al., SIAM J. Optim. 20:336-356, 2009) with one inner step. X^ and S are PSD and X^ S = 0 at every
//! iteration, by construction; the loop works on the two residuals. X^, not X, is measured and returned: for rho > 1
//! X is a combination with a negative weight and need not be PSD. Penalty rule and stagnation stop are the source's;
//! their constants here, where they differ, are our choice and stated in [`AdmmParams`]. Bibliographic data from memory.
//!
//! Data are scaled as for the interior-point engine: rows to norm 1, C and b to norm at most 1. AA* is factored once
//! (`affine::gram`). An iteration costs one eigendecomposition a block and allocates nothing. Rank bounds are ignored;
//! infeasibility is not recognised.

use crate::budget::{Halt, Meter, TracePoint};
use crate::engines::affine::AffineError;
use crate::engines::affine::gram::GramSolver;
use crate::engines::affine::maps::{DenseMaps, dense_cost};
use crate::engines::ipm::scaling::Scaling;
use crate::engines::projections::point::DensePoint;
use crate::engines::projections::tangent::inner;
use crate::linalg::eigen::{SymmetricEigen, flops};
use crate::linalg::project::psd_split;
use crate::linalg::vector::{axpy, dot, norm2};
use crate::linalg::workspace::Workspace;
use crate::problem::{Operator, Problem, StopReason};

/// Settings of the engine.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct AdmmParams {
    /// Stops when the worst of the residuals is at most this.
    pub tolerance: f64,
    /// Most iterations.
    pub max_iterations: usize,
    /// Step length rho, in (0, (1 + sqrt 5)/2).
    pub step: f64,
    /// First mu, in scaled data.
    pub mu: f64,
    /// Factor gamma by which mu is changed.
    pub factor: f64,
    /// Iterations h4 in a row with the same residual lagging after which mu is changed.
    pub patience: usize,
}

impl Default for AdmmParams {
    fn default() -> Self {
        AdmmParams {
            tolerance: 1e-6,
            max_iterations: 20_000,
            step: 1.6,
            mu: 1.0,
            factor: 0.5,
            patience: 20,
        }
    }
}

/// Least and largest mu.
const MU_RANGE: (f64, f64) = (1e-6, 1e6);
/// Stagnation: iterations without a better iterate, and the multiple of the tolerance then accepted.
const STAGNATION: [(usize, f64); 3] = [(100, 10.0), (250, 100.0), (750, 1000.0)];

/// Residuals of an iterate (X^, y, S), the first two in scaled data.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct AdmmResiduals {
    /// ||A(X^) - b||_2 / (1 + ||b||_2).
    pub primal: f64,
    /// ||C - A*(y) - S||_F / (1 + ||C||_F).
    pub dual: f64,
    /// |b'y - <C, X^>| / (1 + |b'y| + |<C, X^>|), in the caller's units.
    pub gap: f64,
    /// <C, X^> in the caller's units.
    pub primal_value: f64,
    /// b'y in the caller's units.
    pub dual_value: f64,
}

impl AdmmResiduals {
    const NONE: AdmmResiduals = AdmmResiduals {
        primal: f64::INFINITY,
        dual: f64::INFINITY,
        gap: f64::INFINITY,
        primal_value: f64::NAN,
        dual_value: f64::NAN,
    };

    /// Returns the largest of the three.
    pub fn worst(&self) -> f64 {
        self.primal.max(self.dual).max(self.gap)
    }
}

/// The returned iterate, in the caller's units.
#[derive(Clone, Debug)]
pub struct AdmmSolution {
    /// X^, PSD up to rounding, and the nonnegative part.
    pub point: DensePoint,
    /// Multipliers y.
    pub multipliers: Vec<f64>,
    /// S, PSD up to rounding, with X^ S = 0, and its nonnegative part.
    pub slack: DensePoint,
    /// Residuals of the iterate.
    pub residuals: AdmmResiduals,
    /// Iterations done.
    pub iterations: usize,
    /// Why the loop ended.
    pub stop: StopReason,
}

/// The state of the iteration on one (scaled) problem.
pub struct Admm<'a> {
    rhs: &'a [f64],
    gram: GramSolver<'a>,
    maps: DenseMaps<'a>,
    /// Step length rho.
    pub step: f64,
    /// Penalty mu.
    pub mu: f64,
    cost: DensePoint,
    cost_norm: f64,
    /// X.
    point: DensePoint,
    /// S.
    slack: DensePoint,
    /// V- = mu X^.
    negative: DensePoint,
    split: DensePoint,
    multipliers: Vec<f64>,
    image_cost: Vec<f64>,
    image_point: Vec<f64>,
    image_slack: Vec<f64>,
    image_new: Vec<f64>,
    right: Vec<f64>,
    eigen: Vec<SymmetricEigen>,
    workspace: Workspace,
    /// What a value of the scaled problem is in the caller's units.
    unit: f64,
}

impl<'a> Admm<'a> {
    /// Factors AA* and starts at X = I, x = 1, S = 0.
    ///
    /// # Errors
    /// See [`AffineError`].
    pub fn new(
        problem: &'a Problem,
        op: &'a Operator,
        params: &AdmmParams,
        unit: f64,
        meter: &mut Meter,
    ) -> Result<Self, AffineError> {
        let m = op.constraints();
        let (blocks, x) = dense_cost(op);
        let cost = DensePoint { blocks, x };
        let zero = DensePoint::zeros(problem);
        let mut point = zero.clone();
        for block in &mut point.blocks {
            (0..block.nrows()).for_each(|i| block[(i, i)] = 1.0);
        }
        point.x.fill(1.0);
        let mut maps = DenseMaps::new(op);
        let (mut image_cost, mut image_point) = (vec![0.0; m], vec![0.0; m]);
        maps.apply(&cost.blocks, &cost.x, &mut image_cost);
        maps.apply(&point.blocks, &point.x, &mut image_point);
        Ok(Admm {
            rhs: problem.rhs(),
            gram: GramSolver::new(problem, op, meter)?,
            maps,
            step: params.step,
            mu: params.mu,
            cost_norm: cost.norm(),
            cost,
            point,
            slack: zero.clone(),
            negative: zero.clone(),
            split: zero,
            multipliers: vec![0.0; m],
            image_cost,
            image_point,
            image_slack: vec![0.0; m],
            image_new: vec![0.0; m],
            right: vec![0.0; m],
            eigen: problem.blocks().iter().map(|b| SymmetricEigen::new(b.order)).collect(),
            workspace: Workspace::new(),
            unit,
        })
    }

    /// Sets X = 0 and S = 0.
    pub fn start_at_zero(&mut self) {
        self.point.clear();
        self.slack.clear();
        self.image_point.fill(0.0);
        self.image_slack.fill(0.0);
    }

    /// Returns y.
    pub fn multipliers(&self) -> &[f64] {
        &self.multipliers
    }

    /// Returns S.
    pub fn slack(&self) -> &DensePoint {
        &self.slack
    }

    /// Writes X^.
    pub fn write_point(&self, out: &mut DensePoint) {
        out.copy_from(&self.negative);
        out.scale(1.0 / self.mu);
    }

    /// Runs one iteration; allocates nothing once warm.
    ///
    /// # Errors
    /// `Failed` when an eigendecomposition fails.
    pub fn iterate(&mut self, meter: &mut Meter) -> Result<AdmmResiduals, Halt> {
        let (mu, rho) = (self.mu, self.step);
        // 1. y.
        for i in 0..self.right.len() {
            self.right[i] = mu * (self.rhs[i] - self.image_point[i])
                + (self.image_cost[i] - self.image_slack[i]);
        }
        self.gram.solve(&self.right, &mut self.multipliers, meter);
        // 2. V and its two parts.
        self.split.copy_from(&self.cost);
        let split = &mut self.split;
        self.maps.add_adjoint(&self.multipliers, -1.0, &mut split.blocks, &mut split.x);
        split.add(-mu, &self.point);
        for (k, eigen) in self.eigen.iter_mut().enumerate() {
            let v = split.blocks[k].as_ref();
            eigen
                .decompose(v)
                .map_err(|error| Halt::Failed(format!("block {}: {error}", k + 1)))?;
            let (s, n) = (self.slack.blocks[k].as_mut(), self.negative.blocks[k].as_mut());
            let positive = psd_split(eigen, v, s, n, &mut self.workspace);
            let order = v.nrows();
            let part = positive.min(order - positive);
            meter.effort.eigendecompositions += 1;
            meter.effort.flops += flops::eigen(order) + (order * order * part) as u64;
        }
        for (j, v) in split.x.iter().enumerate() {
            self.slack.x[j] = v.max(0.0);
            self.negative.x[j] = (-v).max(0.0);
        }
        // 3. Residuals: C - A*(y) - S = mu (X - X^).
        let negative = &self.negative;
        self.maps.apply(&negative.blocks, &negative.x, &mut self.image_new);
        self.maps.apply(&self.slack.blocks, &self.slack.x, &mut self.image_slack);
        self.image_new.iter_mut().for_each(|value| *value /= mu);
        meter.effort.operator_products += 3;
        meter.effort.flops += 3 * self.maps.flops();
        meter.effort.inner_steps += 1;
        self.split.copy_from(&self.negative);
        self.split.add(-mu, &self.point);
        let dual = self.split.norm() / (1.0 + self.cost_norm);
        let primal_value = self.unit * inner(&self.cost, &self.negative) / mu;
        let dual_value = self.unit * dot(self.rhs, &self.multipliers);
        let gap = (dual_value - primal_value).abs() / (1.0 + dual_value.abs() + primal_value.abs());
        // 4. X = X + rho (X^ - X).
        self.point.add(rho / mu, &self.split);
        for (image, new) in self.image_point.iter_mut().zip(&self.image_new) {
            *image += rho * (new - *image);
        }
        axpy(-1.0, self.rhs, &mut self.image_new);
        let primal = norm2(&self.image_new) / (1.0 + norm2(self.rhs));
        Ok(AdmmResiduals { primal, dual, gap, primal_value, dual_value })
    }
}

/// The penalty rule: mu follows the residual that lags.
#[derive(Clone, Copy, Debug, Default)]
struct Penalty {
    dual_lags: usize,
    primal_lags: usize,
}

impl Penalty {
    fn next(&mut self, residuals: &AdmmResiduals, mu: f64, params: &AdmmParams) -> f64 {
        if residuals.primal <= residuals.dual {
            self.dual_lags += 1;
            self.primal_lags = 0;
            if self.dual_lags >= params.patience {
                self.dual_lags = 0;
                return (params.factor * mu).max(MU_RANGE.0);
            }
        } else {
            self.primal_lags += 1;
            self.dual_lags = 0;
            if self.primal_lags >= params.patience {
                self.primal_lags = 0;
                return (mu / params.factor).min(MU_RANGE.1);
            }
        }
        mu
    }
}

/// Solves the relaxation of `problem`. Memory: about ten n x n matrices a block and the factor of AA*.
///
/// # Errors
/// `MemoryLimit` before the matrices are taken; `Interrupted`; `TimeLimit` or `MemoryLimit` when not even one
/// iteration was done; `Failed` when a decomposition fails.
pub fn solve(
    problem: &Problem,
    params: &AdmmParams,
    meter: &mut Meter,
) -> Result<AdmmSolution, Halt> {
    meter.check_room(crate::engines::projections::memory_bytes(problem, 14))?;
    let (scaled, scaling) = Scaling::scale(problem);
    let op = Operator::new(&scaled);
    let unit = scaling.rhs * scaling.cost;
    let mut state = Admm::new(&scaled, &op, params, unit, meter)
        .map_err(|error| Halt::Failed(error.to_string()))?;
    let mut penalty = Penalty::default();
    let mut best = AdmmSolution {
        point: DensePoint::zeros(problem),
        multipliers: vec![0.0; op.constraints()],
        slack: DensePoint::zeros(problem),
        residuals: AdmmResiduals::NONE,
        iterations: 0,
        stop: StopReason::IterationLimit,
    };
    let mut idle = 0;
    while best.iterations < params.max_iterations {
        match meter.check() {
            Ok(()) => {}
            Err(Halt::TimeLimit) if best.iterations > 0 => {
                best.stop = StopReason::TimeLimit;
                break;
            }
            Err(Halt::MemoryLimit) if best.iterations > 0 => {
                best.stop = StopReason::MemoryLimit;
                break;
            }
            Err(halt) => return Err(halt),
        }
        let residuals = state.iterate(meter)?;
        best.iterations += 1;
        if best.iterations.is_multiple_of(10) {
            meter.trace(TracePoint {
                flops: 0,
                objective: Some(residuals.primal_value),
                residual: Some(residuals.primal),
                tail: None,
            });
        }
        if residuals.worst() < best.residuals.worst() {
            best.residuals = residuals;
            state.write_point(&mut best.point);
            best.slack.copy_from(state.slack());
            best.multipliers.copy_from_slice(state.multipliers());
            idle = 0;
        } else {
            idle += 1;
        }
        let worst = best.residuals.worst();
        if worst <= params.tolerance {
            best.stop = StopReason::Converged;
            break;
        }
        if STAGNATION.iter().any(|(h, share)| idle > *h && worst <= share * params.tolerance) {
            best.stop = StopReason::Stalled;
            break;
        }
        state.mu = penalty.next(&residuals, state.mu, params);
    }
    if !best.residuals.worst().is_finite() {
        return Err(Halt::Failed("the iterates are not finite".to_owned()));
    }
    best.point.scale(scaling.rhs);
    best.slack.scale(scaling.cost);
    best.multipliers = scaling.multipliers(&best.multipliers);
    Ok(best)
}
