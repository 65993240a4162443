//! The independent judge of a returned point.
//!
//! The referee trusts nothing but the problem and the numbers of the answer. It uses its own loops
//! and compensated sums, so that a defect of a kernel the methods share cannot cancel out. It does
//! not solve, and it does not see how the answer was found.
//!
//! What it does, in this order:
//!
//! 1. shapes, finiteness and magnitude of the answer (`shape`); else `malformed`;
//! 2. truncation of every block to its target rank, as a factor (`truncate`): from here on the
//!    point is PSD and of the target rank by construction;
//! 3. residual and objective of the untruncated and of the truncated point (`measure`);
//! 4. restoration of feasibility in factor form, the same for every method (`restore`);
//! 5. distance, DIMACS errors and a rigorous lower bound where they can be had (`distance`,
//!    `dimacs`, `bound`);
//! 6. the finding (`judge`).
//!
//! # Canonical units
//!
//! Relative figures are stated for the problem with constraint i divided by `a_i = ||A_i||_F`, the cost by
//! `c = ||C||_F`, and X in units of `x = ||(b_i / a_i)_i||_2` (1 in place of a norm that is 0), so that they do
//! not move with the scaling of the data. In the given data, `||A(X) - b|| / (1 + ||b||)` then is
//! `||((<A_i, X> - b_i) / a_i)_i||_2 / (2 x)` (over x alone when b = 0), and `|<C, X> - p*| / (1 + |p*|)` is
//! `|<C, X> - p*| / (c x + |p*|)`.

mod bound;
mod dimacs;
mod distance;
mod judge;
mod measure;
mod restore;
mod shape;
mod slack;
mod spectral;
mod truncate;
mod units;

pub use bound::lower_bound;
pub use judge::{Contradicted, Contradiction, Judgement, judge};

use crate::problem::Factor;

/// Tolerances of a verdict.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Tolerance {
    /// `||A(X_r) - b|| <= feasibility * (1 + ||b||)` in canonical units ([`self`]).
    pub feasibility: f64,
    /// `|<C, X_r> - p*| <= objective * (1 + |p*|)` in canonical units.
    pub objective: f64,
    /// Eigenvalues above `rank` times the largest count towards the rank.
    pub rank: f64,
}

impl Default for Tolerance {
    fn default() -> Self {
        Tolerance { feasibility: 1e-6, objective: 1e-6, rank: 1e-6 }
    }
}

/// How an optimum is known.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum KnownOptimum {
    /// Proved exactly; a better objective than its certificate allows is an internal error.
    Certified(f64),
    /// Published or computed to the given relative accuracy.
    Reported {
        /// The value.
        value: f64,
        /// Relative accuracy: the true value lies within `accuracy * (1 + |value|)`.
        accuracy: f64,
    },
    /// Not known.
    Unknown,
}

/// What is known of an instance when its answers are judged.
#[derive(Clone, Debug)]
pub struct Known<'a> {
    /// The rank-constrained optimum.
    pub optimum: KnownOptimum,
    /// Multipliers of an exact dual certificate, when there is one: they bound how far below the
    /// optimum a point with a residual may lie.
    pub dual: Option<&'a [f64]>,
    /// The optimal point by factors, when it is proved to be the only one.
    pub unique_point: Option<&'a [Factor]>,
}

/// The referee's word on a point.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Finding {
    /// The rank-r truncation is feasible and optimal to tolerance.
    Solved,
    /// It is after the referee's restoration.
    Near,
    /// Feasible, the objective is off.
    Suboptimal,
    /// Feasible at the target rank; the optimum is not known.
    Feasible,
    /// Not feasible at the target rank, not even after restoration.
    Infeasible,
    /// Unreadable: wrong shapes or numbers that are not finite.
    Malformed,
}
