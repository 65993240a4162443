//! The units in which the referee states how far a point is off.
//!
//! A tolerance means the same for every family only when it does not depend on how the data happen to be
//! scaled: multiplying a constraint, the cost or the unit of X by a number changes nothing about a problem.
//! The formulas are in the documentation of [`super`]. A term of the residual,
//! `|<A_i, X> - b_i| / a_i`, is the distance of X from the hyperplane of its constraint.

use crate::linalg::norms;
use crate::problem::{Functional, Problem};

/// Canonical units of a problem.
#[derive(Clone, Debug)]
pub(super) struct Units {
    /// `a_i`.
    rows: Vec<f64>,
    /// Size that residuals are relative to.
    residual: f64,
    /// `c x`.
    objective: f64,
}

impl Units {
    /// Finds the units of a problem.
    pub(super) fn of(problem: &Problem) -> Self {
        let rows: Vec<f64> =
            problem.constraints().iter().map(|row| or_one(Functional::norm(row))).collect();
        let scaled: Vec<f64> = problem.rhs().iter().zip(&rows).map(|(b, a)| b / a).collect();
        let rhs = norms::euclidean(&scaled);
        Units {
            rows,
            residual: if rhs == 0.0 { 1.0 } else { 2.0 * rhs },
            objective: or_one(problem.cost().norm()) * or_one(rhs),
        }
    }

    /// Returns the relative size of a residual b - A(X).
    pub(super) fn feasibility(&self, residual: &[f64]) -> f64 {
        let scaled: Vec<f64> = residual.iter().zip(&self.rows).map(|(r, a)| r / a).collect();
        norms::euclidean(&scaled) / self.residual
    }

    /// Returns how far an objective is from the optimum, relatively.
    pub(super) fn objective_error(&self, objective: f64, optimum: f64) -> f64 {
        (objective - optimum).abs() / self.objective_size(optimum)
    }

    /// Returns the size that objective errors are relative to.
    pub(super) fn objective_size(&self, optimum: f64) -> f64 {
        self.objective + optimum.abs()
    }
}

fn or_one(norm: f64) -> f64 {
    if norm > 0.0 { norm } else { 1.0 }
}
