//! Turns that change the cost only: min <C + rho T, X> in one session of the interior-point engine.

use super::{BlockView, Inner, Measured, Stage};
use crate::budget::{Halt, Meter};
use crate::engines::ipm::{self, Beginning, NewtonDirection, Session};
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::{Mat, MatRef};
use crate::problem::Problem;

/// How T follows from a point.
pub trait WeightRule {
    /// Says that a stage begins at this point.
    fn stage(&mut self, stage: Stage, at: &Measured);

    /// Writes T of a bounded block, symmetric.
    fn weigh(&mut self, at: BlockView<'_>, weight: &mut Mat<f64>);

    /// Returns the penalty of a bounded block: a function that T, taken at X, bounds from above by
    /// `p(Y) <= p(X) + <T, Y - X>` (a concave function with T in its superdifferential, for instance).
    fn penalty(&self, at: BlockView<'_>) -> f64;

    /// Says that a turn is over.
    fn turned(&mut self) {}
}

/// Turns by a weight rule.
///
/// Every turn reuses the compiled operator, the scaling and the plan of the Schur complement, and starts from an
/// iterate kept on the way to the last solution, where one bears the change of cost.
#[derive(Debug)]
pub struct Weighted<R> {
    /// The rule.
    pub rule: R,
    session: Session,
    params: ipm::Params,
    weights: Vec<Mat<f64>>,
    /// The cost is zero.
    zero: bool,
}

impl<R: WeightRule> Weighted<R> {
    /// Opens a session of relative accuracy `tolerance`.
    ///
    /// # Errors
    /// `MemoryLimit` before the matrices are taken.
    pub fn new(problem: &Problem, rule: R, tolerance: f64, meter: &Meter) -> Result<Self, Halt> {
        let params = ipm::Params { tolerance, ..ipm::Params::default() };
        Ok(Weighted {
            rule,
            session: Session::new(problem, NewtonDirection::Hkm, meter)?,
            params,
            weights: problem.blocks().iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
            zero: problem.cost().norm() == 0.0,
        })
    }

    fn solve(
        &mut self,
        beginning: Beginning,
        next: &mut Measured,
        meter: &mut Meter,
    ) -> Result<ipm::Info, Halt> {
        let info = self.session.solve(beginning, &self.params, meter)?;
        for (block, point) in next.points.iter_mut().enumerate() {
            self.session.copy_point(block, point);
        }
        self.session.copy_orthant(&mut next.orthant);
        Ok(info)
    }
}

impl<R: WeightRule> Inner for Weighted<R> {
    fn relax(&mut self, next: &mut Measured, meter: &mut Meter) -> Result<ipm::Info, Halt> {
        if self.zero {
            for (block, weight) in self.weights.iter_mut().enumerate() {
                if next.ranks[block].is_some() {
                    weight.fill(0.0);
                    (0..weight.nrows()).for_each(|i| weight[(i, i)] = 1.0);
                    self.session.set_weight(block, weight.as_ref());
                }
            }
        }
        self.solve(Beginning::Cold, next, meter)
    }

    fn multipliers(&self) -> Vec<f64> {
        let mut y = self.session.multipliers();
        if self.zero {
            // Those of the least trace prove nothing for C = 0, for which y = 0 is optimal.
            y.fill(0.0);
        }
        y
    }

    fn stage(&mut self, stage: Stage, at: &Measured) {
        self.rule.stage(stage, at);
    }

    fn turn(
        &mut self,
        rho: f64,
        at: &Measured,
        next: &mut Measured,
        meter: &mut Meter,
    ) -> Result<ipm::Info, Halt> {
        for view in at.bounded() {
            let weight = &mut self.weights[view.block];
            self.rule.weigh(view, weight);
            dense::scale(rho, weight.as_mut());
            self.session.set_weight(view.block, weight.as_ref());
        }
        meter.effort.inner_steps += 1;
        self.solve(Beginning::Warm, next, meter)
    }

    fn penalty(&self, at: &Measured) -> f64 {
        at.bounded().map(|view| self.rule.penalty(view)).sum()
    }

    fn turned(&mut self) {
        self.rule.turned();
    }
}

/// Writes Q diag(profile) Q', using `work`, which takes the shape of Q when it has another.
#[track_caller]
pub fn spectral_matrix(
    vectors: MatRef<'_, f64>,
    profile: impl Fn(usize) -> f64,
    work: &mut Mat<f64>,
    out: &mut Mat<f64>,
) {
    if work.nrows() != vectors.nrows() || work.ncols() != vectors.ncols() {
        *work = Mat::zeros(vectors.nrows(), vectors.ncols());
    }
    dense::copy_into(vectors, work.as_mut());
    for j in 0..work.ncols() {
        let value = profile(j);
        work.col_as_slice_mut(j).iter_mut().for_each(|entry| *entry *= value);
    }
    let (left, right) = (work.as_ref(), vectors.transpose());
    dense::gemm(out.as_mut(), Accumulate::Replace, 1.0, left, right);
    dense::symmetrise(out.as_mut());
}

/// Returns the largest eigenvalue of each bounded block, and 1 for others (and for zero blocks).
pub fn largest_eigenvalues(at: &Measured) -> Vec<f64> {
    let mut largest = vec![1.0; at.points.len()];
    for view in at.bounded() {
        if let Some(value) = view.values.last().filter(|value| **value > 0.0) {
            largest[view.block] = *value;
        }
    }
    largest
}
