//! Infeasible primal-dual predictor-corrector interior-point method for the relaxation (HKM or NT
//! direction), with several PSD blocks and a nonnegative part.
//!
//! HKM: Helmberg, Rendl, Vanderbei, Wolkowicz, SIAM J. Optim. 6:342-361 (1996); Kojima,
//! Shindoh, Hara, SIAM J. Optim. 7:86-125 (1997); Monteiro, SIAM J. Optim. 7:663-678 (1997).
//! NT: see the module `nt`. Predictor-corrector and its step and centring rules after Mehrotra, SIAM J. Optim. 2:575-601
//! (1992) and Tutuncu, Toh, Todd, Math. Program. 95:189-217 (2003); the constants are the ones in
//! this module's code, recalled from the literature and not copied from a text.
//!
//! The practical infeasible method has no proof of convergence. Under strict complementarity its
//! iterates tend to the analytic centre of the optimal face, hence to maximal rank: lowering the
//! rank is not its business.
//!
//! Every constraint is scaled to unit norm, and C and b to norm at most one, before the loop; all
//! results are given in the units of the caller.
//!
//! [`solve`] is one run. A [`Session`] solves one problem again and again with another extra cost, with the
//! compiled operator, the scaling, the plan of the Schur complement and all workspace kept.

mod direction;
mod ending;
mod iterate;
mod ladder;
mod nt;
pub mod scaling;
mod schur;
mod session;
mod solve;
mod start;
pub mod tail;

pub use session::{Beginning, Session};
pub use solve::solve;

use crate::linalg::Mat;
use crate::problem::StopReason;

/// Settings of the engine.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Params {
    /// Stops when `max(phi, gap) < tolerance`, with `phi = max(||r_p|| / (1 + ||b||),
    /// ||R_d||_F / (1 + ||C||_F))` in scaled data and `gap = <X, S> / (1 + |<C, X>| + |b'y|)` in the
    /// caller's units, so that scaling cannot hide a gap.
    pub tolerance: f64,
    /// Most iterations.
    pub max_iterations: usize,
    /// Newton direction.
    pub newton: NewtonDirection,
}

/// How the complementarity equation is linearised.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum NewtonDirection {
    /// Helmberg-Rendl-Vanderbei-Wolkowicz, Kojima-Shindoh-Hara, Monteiro: cheapest.
    Hkm,
    /// Nesterov-Todd: one eigendecomposition and eleven products of a block more an iteration. Where no
    /// strictly feasible X exists it stalls earlier than HKM (SDPLIB gpp100: at a relative gap of 1e-5).
    Nt,
}

impl Default for Params {
    fn default() -> Self {
        Params { tolerance: 1e-9, max_iterations: 100, newton: NewtonDirection::Hkm }
    }
}

/// How the engine ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Outcome {
    /// The tolerance was met.
    Optimal,
    /// No further progress was possible; the best iterate is returned.
    Stalled,
    /// The iteration limit was reached; the best iterate is returned.
    IterationLimit,
    /// The wall-time limit was reached; the best iterate is returned.
    TimeLimit,
    /// `b'y > 0` and `||C||_F + ||R_d||_F <= 1e-8 b'y` in scaled data, which bounds
    /// `||A*(y) + S||_F` by the same: the constraints cannot be met.
    PrimalInfeasible,
    /// `<C, X> < 0` and `||A(X)|| <= -1e-8 <C, X>`: the value is unbounded or the dual infeasible.
    DualInfeasible,
}

impl Outcome {
    /// Returns the stop reason that an answer of this outcome carries.
    pub fn stop_reason(self) -> StopReason {
        match self {
            Outcome::Optimal => StopReason::Converged,
            Outcome::Stalled => StopReason::Stalled,
            Outcome::IterationLimit => StopReason::IterationLimit,
            Outcome::TimeLimit => StopReason::TimeLimit,
            Outcome::PrimalInfeasible => StopReason::PrimalInfeasible,
            Outcome::DualInfeasible => StopReason::DualInfeasible,
        }
    }
}

/// Residuals of an iterate, as [`Params::tolerance`] states them.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Residuals {
    /// `||b - A(X)||_2 / (1 + ||b||_2)`.
    pub primal: f64,
    /// `||C - S - A*(y)||_F / (1 + ||C||_F)`.
    pub dual: f64,
    /// `<X, S> / (1 + |<C, X>| + |b'y|)`.
    pub gap: f64,
}

impl Residuals {
    /// Returns the largest of the three.
    pub fn worst(&self) -> f64 {
        self.primal.max(self.dual).max(self.gap)
    }
}

/// What is known of a finished run.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Info {
    /// How it ended.
    pub outcome: Outcome,
    /// Iterations done.
    pub iterations: usize,
    /// Residuals of the returned iterate, in scaled data.
    pub residuals: Residuals,
    /// `<C, X>` of the returned iterate.
    pub primal_value: f64,
    /// `b'y` of the returned iterate.
    pub dual_value: f64,
}

/// The returned iterate, in the units of the caller.
#[derive(Clone, Debug)]
pub struct Solution {
    /// X by block, positive definite.
    pub points: Vec<Mat<f64>>,
    /// Nonnegative part x.
    pub orthant: Vec<f64>,
    /// Multipliers y.
    pub multipliers: Vec<f64>,
    /// Slacks S by block, positive definite.
    pub slacks: Vec<Mat<f64>>,
    /// Residuals and values.
    pub info: Info,
}

/// What a steering hook may see and change before a Newton step, in scaled data.
#[derive(Debug)]
pub struct Steer<'a> {
    /// X by block.
    pub points: &'a [Mat<f64>],
    /// Residuals of the iterate with respect to the weighted cost.
    pub residuals: Residuals,
    /// Value `<C, X> + c'x` of the unweighted cost.
    pub value: f64,
    /// `<X, S> + x'z`.
    pub complementarity: f64,
    /// S by block; a hook that moves the cost moves S with it and keeps it positive definite.
    pub slacks: &'a mut [Mat<f64>],
    /// Extra cost W by block: the method works on C + W.
    pub weights: &'a mut [Mat<f64>],
}

/// Whether the loop goes on after a hook.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Steering {
    /// Go on; the engine may stop by its own test.
    Free,
    /// Go on, and do not stop by the engine's own test.
    Hold,
    /// Go on as with `Hold`, and stay central: the cost has just moved, so that a bold step would end
    /// at the boundary. The centring parameter is at least one half.
    Centre,
    /// Stop with this iterate.
    Stop,
}

/// A hook called before every Newton step.
pub trait Hook {
    /// Inspects the iterate and may change the extra cost and the slack.
    fn steer(&mut self, steer: &mut Steer<'_>, meter: &mut crate::budget::Meter) -> Steering;
}
