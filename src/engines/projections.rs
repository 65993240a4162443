//! What the projection methods share: dense points, the projector on the rank set, random starts, the best point,
//! the descent of the objective cut, and the answer.
//!
//! The *rank set* is {X_k PSD with rank X_k <= r_k, x >= 0}; blocks without a bound are projected on the cone. Nearest
//! points in the Frobenius norm (`linalg::project`). The affine set is `engines::affine`'s. Every full
//! eigendecomposition is one of a dense block: problems whose blocks do not fit in memory densely are not for these
//! methods.

pub mod levels;
pub mod point;
pub mod restrict;
pub mod search;
pub mod tangent;

use crate::budget::{Halt, Meter};
use crate::engines::ipm::scaling::Scaling;
use crate::engines::newton::{NewtonParams, polish};
use crate::linalg::eigen::{SymmetricEigen, flops_full};
use crate::linalg::project::{factor_of_rank, psd_projection, rank_projection};
use crate::linalg::vector::norm2;
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, MatRef, dense};
use crate::problem::{Answer, Block, BlockPoint, Factor, Operator, Point, Problem, StopReason};
use crate::seed::Stream;
use point::DensePoint;

/// Two sets are met when ||P_r(X) - X|| <= this times (1 + ||X||).
pub const CLOSE: f64 = 1e-9;

/// Returns the bytes of `matrices` dense matrices for each block and of a solver for AA*.
pub fn memory_bytes(problem: &Problem, matrices: usize) -> u64 {
    let squares: usize = problem.blocks().iter().map(|block| block.order * block.order).sum();
    let system = problem.constraints().len().min(crate::engines::affine::DIRECT_LIMIT).pow(2);
    8 * (matrices * squares + 2 * system) as u64
}

/// The projector on the rank set.
pub struct RankSet {
    blocks: Vec<Block>,
    eigen: Vec<SymmetricEigen>,
    workspace: Workspace,
}

impl RankSet {
    /// Makes the projector of a problem.
    pub fn new(problem: &Problem) -> Self {
        RankSet {
            blocks: problem.blocks().to_vec(),
            eigen: problem.blocks().iter().map(|b| SymmetricEigen::new(b.order)).collect(),
            workspace: Workspace::new(),
        }
    }

    /// Returns the decomposition of block `k` of the point projected last.
    pub fn eigen(&self, k: usize) -> &SymmetricEigen {
        &self.eigen[k]
    }

    /// Sets `low` to the point of the rank set nearest to `point` and returns its distance.
    ///
    /// # Errors
    /// `Failed` when an eigendecomposition fails.
    pub fn project(
        &mut self,
        point: &DensePoint,
        low: &mut DensePoint,
        meter: &mut Meter,
    ) -> Result<f64, Halt> {
        for (k, block) in self.blocks.iter().enumerate() {
            let from = point.blocks[k].as_ref();
            decompose(&mut self.eigen[k], k, from)?;
            meter.effort.eigendecompositions += 1;
            meter.effort.flops += flops_full(block.order);
            let low = low.blocks[k].as_mut();
            match block.rank {
                Some(rank) => rank_projection(&self.eigen[k], rank, low, &mut self.workspace),
                None => psd_projection(&self.eigen[k], from, low, &mut self.workspace),
            };
        }
        for (low, x) in low.x.iter_mut().zip(&point.x) {
            *low = x.max(0.0);
        }
        Ok(point.distance(low))
    }

    /// Returns factors of the target ranks (the order, where the rank is free) of `point`. Not counted as effort:
    /// the referee would do it otherwise.
    ///
    /// # Errors
    /// `Failed` when an eigendecomposition fails.
    pub fn factors(&mut self, point: &DensePoint) -> Result<Vec<Factor>, Halt> {
        let mut factors = Vec::new();
        for (k, block) in self.blocks.iter().enumerate() {
            decompose(&mut self.eigen[k], k, point.blocks[k].as_ref())?;
            let columns = factor_of_rank(&self.eigen[k], block.rank.unwrap_or(block.order));
            let columns: Vec<Vec<f64>> =
                (0..columns.ncols()).map(|j| columns.col_as_slice(j).to_vec()).collect();
            factors.push(Factor::from_columns(block.order, &columns));
        }
        Ok(factors)
    }
}

fn decompose(eigen: &mut SymmetricEigen, k: usize, matrix: MatRef<'_, f64>) -> Result<(), Halt> {
    eigen.decompose(matrix).map_err(|error| Halt::Failed(format!("block {}: {error}", k + 1)))
}

/// Draws X = GG' with G Gaussian of the target width (the order, where the rank is free) and x = |g|, scaled so that
/// the image has the norm of the right side.
pub fn draw(problem: &Problem, op: &Operator, point: &mut DensePoint, stream: &mut Stream) {
    for (block, point) in problem.blocks().iter().zip(&mut point.blocks) {
        let width = block.rank.unwrap_or(block.order);
        let mut g = Mat::zeros(block.order, width);
        for j in 0..width {
            g.col_as_slice_mut(j).iter_mut().for_each(|value| *value = stream.normal());
        }
        let (replace, g_t) = (dense::Accumulate::Replace, g.as_ref().transpose());
        dense::gemm(point.as_mut(), replace, 1.0, g.as_ref(), g_t);
    }
    point.x.iter_mut().for_each(|value| *value = stream.normal().abs());
    let mut image = vec![0.0; op.constraints()];
    op.apply_dense(&point.blocks, &point.x, &mut image);
    let factor = norm2(problem.rhs()) / norm2(&image);
    if factor.is_finite() && factor > 0.0 {
        point.blocks.iter_mut().for_each(|block| dense::scale(factor, block.as_mut()));
        point.x.iter_mut().for_each(|value| *value *= factor);
    }
}

/// The best point of the rank set so far.
#[derive(Clone, Debug)]
pub struct Best {
    /// The point.
    pub point: DensePoint,
    /// Its objective; infinite until the sets were met.
    pub value: f64,
    /// Its distance to the affine set (as the method measures it); infinite until there is a point.
    pub distance: f64,
}

impl Best {
    /// Starts without a point.
    pub fn new(problem: &Problem) -> Self {
        let point = DensePoint::zeros(problem);
        Best { point, value: f64::INFINITY, distance: f64::INFINITY }
    }

    /// Returns whether the sets were met.
    pub fn met(&self) -> bool {
        self.value.is_finite()
    }

    /// Takes `low` when the sets meet there (`distance <= close`) and its value is lower, or, while none met and
    /// `gamma` is infinite, when it is nearer.
    pub fn offer(
        &mut self,
        low: &DensePoint,
        distance: f64,
        close: f64,
        gamma: f64,
        value: impl FnOnce() -> f64,
    ) {
        if distance <= close {
            let value = value();
            if self.met() && value >= self.value {
                return;
            }
            self.value = value;
        } else if self.met() || gamma.is_finite() || distance >= self.distance {
            return;
        }
        self.distance = distance;
        self.point.copy_from(low);
    }
}

/// Turns the limit that ended a loop into a stop reason, when there is a point to return.
///
/// # Errors
/// Every other halt, and the limit itself when there is no point.
pub fn stop_of(outcome: Result<StopReason, Halt>, best: &Best) -> Result<StopReason, Halt> {
    match outcome {
        Ok(stop) if best.distance.is_finite() => Ok(stop),
        Err(Halt::TimeLimit) if best.distance.is_finite() => Ok(StopReason::TimeLimit),
        Err(Halt::MemoryLimit) if best.distance.is_finite() => Ok(StopReason::MemoryLimit),
        Ok(_) => Err(Halt::Failed("no point was reached".to_owned())),
        Err(halt) => Err(halt),
    }
}

/// Whether an answer is improved by Newton steps in factor form.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Finish {
    /// It is returned as it is.
    Plain,
    /// Newton steps on (R, y) from y = 0.
    Newton,
}

/// Makes the answer of a best point: factors of the target ranks, in the caller's units when `scaling` is given, and
/// improved where `finish` says so.
///
/// # Errors
/// `Failed` when an eigendecomposition fails.
pub fn answer(
    problem: &Problem,
    set: &mut RankSet,
    best: &Best,
    scaling: Option<&Scaling>,
    finish: Finish,
    (stop, mut note): (StopReason, String),
    meter: &mut Meter,
) -> Result<Answer, Halt> {
    let mut factors = set.factors(&best.point)?;
    let mut x = best.point.x.clone();
    if let Some(scaling) = scaling {
        let root = scaling.rhs.sqrt();
        factors.iter_mut().for_each(|f| f.data.iter_mut().for_each(|value| *value *= root));
        x.iter_mut().for_each(|value| *value *= scaling.rhs);
    }
    let mut multipliers = None;
    if finish == Finish::Newton {
        let op = Operator::new(problem);
        let mut y = vec![0.0; op.constraints()];
        let params = NewtonParams::default();
        let info = polish(&op, problem, &mut factors, &mut x, &mut y, &params, meter);
        note.push_str(&format!("; {} Newton steps, merit {:.1e}", info.steps, info.merit));
        multipliers = Some(y);
    }
    let blocks = factors.into_iter().map(BlockPoint::Factor).collect();
    Ok(Answer { point: Point { blocks, orthant: x }, multipliers, stop, note })
}
