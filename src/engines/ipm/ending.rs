//! When the loop ends: the best iterate so far, stopping tests, certificates of infeasibility.

use super::iterate::{copy_slack, norm_squared};
use super::solve::{Figures, Run};
use super::{Outcome, Params, Residuals};
use crate::linalg::Mat;
use crate::linalg::dense;
use crate::problem::Slack;

/// Relative size below which a certificate of infeasibility is believed.
const INFEASIBLE: f64 = 1e-8;
/// Iterations without a better iterate that end the loop.
const PATIENCE: usize = 12;

/// A saved iterate.
#[derive(Debug)]
pub(super) struct Best {
    worst: f64,
    at: usize,
    residuals: Residuals,
    points: Vec<Mat<f64>>,
    slacks: Vec<Slack>,
    x: Vec<f64>,
    z: Vec<f64>,
    y: Vec<f64>,
}

impl Run {
    /// Keeps the figures of the iterate when it is the best so far, and a copy when it may be returned.
    pub(super) fn keep_best(&mut self, figures: &Figures, iteration: usize, copy: bool) {
        let worst = figures.residuals.worst();
        if self.best.as_ref().is_some_and(|best| worst >= best.worst) {
            return;
        }
        let state = &self.state;
        // A copy is only worth its time when the iterate could be the one returned.
        let copy = copy && worst < 1e-4;
        let mut best = Best {
            worst,
            at: iteration,
            residuals: figures.residuals,
            points: Vec::new(),
            slacks: Vec::new(),
            x: state.x.clone(),
            z: state.z.clone(),
            y: state.y.clone(),
        };
        if copy {
            let (points, slacks) = match self.best.take() {
                Some(old) if !old.points.is_empty() => (old.points, old.slacks),
                _ => (
                    state.blocks.iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
                    state.blocks.iter().map(|b| b.s.clone()).collect(),
                ),
            };
            best.points = points;
            best.slacks = slacks;
            for (index, block) in state.blocks.iter().enumerate() {
                best.points[index].copy_from(&block.x);
                copy_slack(&block.s, &mut best.slacks[index]);
            }
        }
        self.best = Some(best);
    }

    /// Says how the loop ends with this iterate, if it does.
    pub(super) fn verdict(
        &self,
        params: &Params,
        figures: &Figures,
        iteration: usize,
        may_stop: bool,
    ) -> Option<Outcome> {
        let residuals = figures.residuals;
        if !may_stop {
            return None;
        }
        if residuals.worst() < params.tolerance {
            return Some(Outcome::Optimal);
        }
        if !residuals.worst().is_finite() {
            return Some(Outcome::Stalled);
        }
        if let Some(end) = self.infeasibility(figures) {
            return Some(end);
        }
        let size = |norm: f64, start: f64| norm > 1e15 * start.max(1.0);
        let x_norm: f64 = self.state.blocks.iter().map(|b| dense::frobenius(b.x.as_ref())).sum();
        let s_norm: f64 = self.state.blocks.iter().map(|b| norm_squared(&b.s).sqrt()).sum();
        if size(x_norm, self.start.x_norm) || size(s_norm, self.start.s_norm) {
            return Some(Outcome::Stalled);
        }
        let best = self.best.as_ref()?;
        if best.worst < 1e-6 {
            // Near the end rounding takes over: a clearly worse iterate will not recover.
            if iteration >= best.at + 3 && residuals.worst() > 30.0 * best.worst {
                return Some(Outcome::Stalled);
            }
            if iteration >= best.at + 5 {
                return Some(Outcome::Stalled);
            }
        }
        (iteration >= best.at + PATIENCE).then_some(Outcome::Stalled)
    }

    fn infeasibility(&self, figures: &Figures) -> Option<Outcome> {
        let state = &self.state;
        if figures.dual > 0.0 {
            // ||A*(y) + S|| = ||C - R_d||, bounded by the norms; both directions are cheap to bound.
            let c = self.c_norm;
            let rd = figures.residuals.dual * (1.0 + self.c_norm);
            if (c + rd) / figures.dual <= INFEASIBLE {
                return Some(Outcome::PrimalInfeasible);
            }
        }
        if figures.primal < 0.0 {
            let image: f64 =
                state.b.iter().zip(&state.rp).map(|(b, r)| (b - r) * (b - r)).sum::<f64>().sqrt();
            if image / -figures.primal <= INFEASIBLE {
                return Some(Outcome::DualInfeasible);
            }
        }
        None
    }

    /// Goes back to the best iterate when it is better than the last; returns the final outcome and
    /// residuals.
    pub(super) fn settle(&mut self, outcome: Outcome, params: &Params) -> (Outcome, Residuals) {
        let mut residuals = self.figures().residuals;
        if let Some(best) = self.best.take()
            && !best.points.is_empty()
            && best.worst < residuals.worst()
            && !matches!(outcome, Outcome::PrimalInfeasible | Outcome::DualInfeasible)
        {
            residuals = best.residuals;
            let parts = best.points.into_iter().zip(best.slacks);
            for (block, (x, s)) in self.state.blocks.iter_mut().zip(parts) {
                block.x = x;
                block.s = s;
            }
            self.state.x = best.x;
            self.state.z = best.z;
            self.state.y = best.y;
        }
        if outcome == Outcome::Stalled && residuals.worst() < params.tolerance {
            return (Outcome::Optimal, residuals);
        }
        (outcome, residuals)
    }
}
