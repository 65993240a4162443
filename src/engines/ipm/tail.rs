//! A tail weight that steers the interior-point loop towards rank r.
//!
//! The loop runs on min <C + W, X> with W near rho T, T = I - U U' the projector on the tail of the
//! current X (U its top r eigenvectors), so that <T, X> is the sum of the eigenvalues beyond the r-th.
//! Before each Newton step T follows X and rho may grow; W moves towards rho T, and S moves by the same
//! matrix, so that the dual residual with respect to C + W does not change. The move is halved until S
//! stays positive definite.
//!
//! This is the steering part of `ipm-tail-weight`, an own combination of published parts: the penalty
//! is the truncated trace of Hu, Zhang, Ye, Li, He, IEEE TPAMI 35:2117-2130 (2013) and Gotoh, Takeda,
//! Tono, Math. Program. 169:141-176 (2018); no published algorithm is followed step by step.

use super::{Hook, Steer, Steering};
use crate::budget::{Meter, TracePoint};
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::eigen::{SymmetricEigen, flops};
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, cholesky};

/// Settings of the weight.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TailParams {
    /// The weight starts once `||r_p||/(1+||b||) < 1e-3` and the relative gap is below this.
    pub gate: f64,
    /// First weight.
    pub start: FirstWeight,
    /// Factor by which the weight grows when the tail ratio is above `1e-5` and did not fall below
    /// `hold` times its last value.
    pub growth: f64,
    /// See `growth`.
    pub hold: f64,
    /// Stops when the tail ratio, the primal residual and the relative gap are below this.
    pub tolerance: f64,
    /// Most steered iterations.
    pub patience: usize,
    /// Steered iterations during which a given first subspace is held, when there is one.
    pub held: usize,
}

/// How the first weight is chosen.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum FirstWeight {
    /// This share of `|<C, X>| / tr X`: enough to cross a gap.
    OfValue(f64),
    /// This share of `<X, S> / tail`: no more than the duality gap itself, so that the iterate stays
    /// near the optimal face.
    OfGap(f64),
}

/// How the steering ended.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct TailInfo {
    /// Tail ratio of the last iterate: eigenvalues beyond the target ranks over the trace.
    pub tail: f64,
    /// Last weight, in scaled data.
    pub rho: f64,
    /// Steered iterations.
    pub steered: usize,
}

/// The hook.
#[derive(Debug)]
pub struct TailWeight {
    params: TailParams,
    ranks: Vec<Option<usize>>,
    eigen: Vec<SymmetricEigen>,
    target: Vec<Mat<f64>>,
    trial: Vec<Mat<f64>>,
    ws: Workspace,
    last: f64,
    first: Option<Vec<Mat<f64>>>,
    /// What happened so far.
    pub info: TailInfo,
}

impl TailWeight {
    /// Makes the hook for blocks of the given orders and rank bounds.
    ///
    /// `first`, when given, holds one order x rank matrix with orthonormal columns per block: the
    /// subspace outside which the tail is weighed at first, instead of the leading eigenvectors of X.
    pub fn new(
        blocks: &[crate::problem::Block],
        params: TailParams,
        first: Option<Vec<Mat<f64>>>,
    ) -> Self {
        let square = |n: usize| Mat::zeros(n, n);
        TailWeight {
            params,
            ranks: blocks.iter().map(|b| b.rank.filter(|rank| *rank < b.order)).collect(),
            eigen: blocks.iter().map(|b| SymmetricEigen::new(b.order)).collect(),
            target: blocks.iter().map(|b| square(b.order)).collect(),
            trial: blocks.iter().map(|b| square(b.order)).collect(),
            ws: Workspace::new(),
            last: f64::INFINITY,
            first,
            info: TailInfo::default(),
        }
    }

    /// Decomposes the bounded blocks; returns the tail and the trace over them.
    fn measure(&mut self, steer: &Steer<'_>, meter: &mut Meter) -> Option<(f64, f64)> {
        let (mut tail, mut trace) = (0.0, 0.0);
        for (index, rank) in self.ranks.iter().enumerate() {
            let Some(rank) = rank else { continue };
            let point = &steer.points[index];
            self.eigen[index].decompose(point.as_ref()).ok()?;
            meter.effort.eigendecompositions += 1;
            meter.effort.flops += flops::eigen(point.nrows());
            let values = self.eigen[index].values();
            tail += values[..values.len() - rank].iter().sum::<f64>();
            trace += values.iter().sum::<f64>();
        }
        Some((tail, trace))
    }

    /// Moves W and S of one block towards rho T.
    fn turn(&mut self, index: usize, rank: usize, steer: &mut Steer<'_>, meter: &mut Meter) {
        let n = steer.points[index].nrows();
        let rho = self.info.rho;
        let change = &mut self.target[index];
        let top = match &self.first {
            Some(first) if self.info.steered <= self.params.held => first[index].as_ref(),
            _ => self.eigen[index].vectors().subcols(n - rank, rank),
        };
        dense::gemm(change.as_mut(), Accumulate::Replace, -rho, top, top.transpose());
        for i in 0..n {
            change[(i, i)] += rho;
        }
        dense::axpy_matrix(-1.0, steer.weights[index].as_ref(), change.as_mut());
        let mut share = 1.0;
        while share > 1e-4 {
            let trial = &mut self.trial[index];
            dense::copy_into(steer.slacks[index].as_ref(), trial.as_mut());
            dense::axpy_matrix(share, change.as_ref(), trial.as_mut());
            meter.effort.factorisations += 1;
            meter.effort.flops += flops::cholesky(n);
            if cholesky::factor_in_place(trial.as_mut(), &mut self.ws).is_ok() {
                dense::axpy_matrix(share, change.as_ref(), steer.slacks[index].as_mut());
                dense::axpy_matrix(share, change.as_ref(), steer.weights[index].as_mut());
                return;
            }
            share *= 0.5;
        }
    }
}

impl Hook for TailWeight {
    fn steer(&mut self, steer: &mut Steer<'_>, meter: &mut Meter) -> Steering {
        let residuals = steer.residuals;
        let started = self.info.steered > 0;
        if !started && (residuals.primal >= 1e-3 || residuals.gap >= self.params.gate) {
            return Steering::Hold;
        }
        let Some((tail, trace)) = self.measure(steer, meter) else { return Steering::Stop };
        let ratio = if trace > 0.0 { tail / trace } else { 0.0 };
        self.info.tail = ratio;
        meter.trace(TracePoint {
            flops: 0,
            objective: None,
            residual: Some(residuals.primal),
            tail: Some(ratio),
        });
        let tolerance = self.params.tolerance;
        if started && ratio < tolerance && residuals.primal < tolerance && residuals.gap < tolerance
        {
            return Steering::Stop;
        }
        if self.info.steered >= self.params.patience {
            return Steering::Stop;
        }
        self.info.steered += 1;
        if self.info.rho == 0.0 {
            self.info.rho = match self.params.start {
                FirstWeight::OfValue(share) => {
                    share * (steer.value.abs() / trace.max(f64::MIN_POSITIVE)).max(1e-3)
                }
                FirstWeight::OfGap(share) => {
                    share * steer.complementarity / tail.max(1e-6 * trace).max(f64::MIN_POSITIVE)
                }
            };
        } else if ratio > 1e-5 && ratio > self.params.hold * self.last {
            self.info.rho *= self.params.growth;
        }
        self.last = ratio;
        for index in 0..self.ranks.len() {
            if let Some(rank) = self.ranks[index] {
                self.turn(index, rank, steer, meter);
            }
        }
        if ratio > 1e-5 { Steering::Centre } else { Steering::Hold }
    }
}
