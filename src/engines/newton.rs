//! Newton's method on the Lagrangian of the factored problem in (R, y), without the cone.
//!
//! One step solves
//!
//! ```text
//! [ H + lambda I + gamma G   -J' ] [ dz ]   [ -g ]
//! [ J                         0  ] [ dy ] = [ -v ]
//! ```
//!
//! with g = (2 S R, 2 s o u) the gradient of the Lagrangian, H d = (2 S D, 2 s o d), J d = A(RD' + DR') + a(2 u o d),
//! v = A(RR') - b, and G D = R (R'D - D'R), which fixes the gauge freedom R -> RQ by the horizontal
//! condition (R'dR symmetric). Small systems are solved densely by `dense`, which needs the Hessian
//! positive definite on the null space of J and raises the Levenberg term lambda until it is; larger ones
//! by preconditioned MINRES (`krylov`), matrix-free. Steps are halved until the merit
//! `sqrt((||g||/(1+||z||))^2 + (||v||/(1+||b||))^2)`, in scaled data, falls. Own combination of standard
//! parts (J. Nocedal and S. Wright, Numerical Optimization, 2nd ed. 2006, chapters 16 and 18, from memory).
//!
//! A Newton step takes memory for one copy of each slack (dense) or one vector (matrix-free); MINRES itself
//! allocates nothing. It is a local method: it neither escapes saddles on purpose nor changes the width.

mod dense;
mod krylov;
mod system;

use crate::budget::{Halt, Meter};
use crate::engines::alm::lagrangian::Lagrangian;
use crate::problem::{Factor, Operator, Problem};
use dense::DenseSolver;
use krylov::{Minres, MinresParams};
use system::System;

/// Settings of a Newton run.
#[derive(Clone, Copy, Debug)]
pub struct NewtonParams {
    /// Stops when the merit is at most this.
    pub tolerance: f64,
    /// Stops at this merit already when a step gained less than tenfold: convergence is then linear, as where
    /// the optimum or the multipliers are not unique.
    pub enough: f64,
    /// Most Newton steps.
    pub steps: usize,
    /// Systems of at most this order (unknowns of R and u, plus m) are solved densely.
    pub dense_order: usize,
    /// Most products with the system in one MINRES run.
    pub krylov_steps: usize,
    /// Levenberg term at the start, relative to the merit; the term shrinks with the merit.
    pub levenberg: f64,
}

impl Default for NewtonParams {
    fn default() -> Self {
        NewtonParams {
            tolerance: 1e-13,
            enough: 1e-11,
            steps: 30,
            dense_order: 3000,
            krylov_steps: 1000,
            levenberg: 1e-3,
        }
    }
}

/// Why a Newton run ended.
#[derive(Clone, Debug, PartialEq)]
pub enum NewtonEnd {
    /// The merit meets the tolerance.
    Converged,
    /// No step lowers the merit any more.
    Stalled,
    /// The step limit was reached.
    Limit,
    /// The budget ended.
    Halted(Halt),
}

/// What a Newton run did.
#[derive(Clone, Debug, PartialEq)]
pub struct NewtonInfo {
    /// Merit at the start.
    pub merit_before: f64,
    /// Merit at the end.
    pub merit: f64,
    /// ||gradient||_2 / (1 + ||z||_2) at the end, scaled data.
    pub stationarity: f64,
    /// ||A(X) - b||_2 / (1 + ||b||_2) at the end, in the problem's units.
    pub feasibility: f64,
    /// Newton steps accepted.
    pub steps: usize,
    /// Products with the system in all MINRES runs.
    pub krylov_steps: usize,
    /// Why it ended.
    pub end: NewtonEnd,
}

/// Improves factors, nonnegative part and multipliers by Newton steps; the point is never made worse in merit.
///
/// `y` may be anything at hand (zeros included). Factors keep their widths.
#[track_caller]
pub fn polish(
    op: &Operator,
    problem: &Problem,
    factors: &mut [Factor],
    orthant: &mut [f64],
    y: &mut [f64],
    params: &NewtonParams,
    meter: &mut Meter,
) -> NewtonInfo {
    let widths: Vec<usize> = factors.iter().map(|factor| factor.width).collect();
    let mut l = Lagrangian::new(problem, op, &widths);
    l.import(factors, orthant, y);
    run(problem, op, l, params, meter, |l| {
        let (new_factors, new_orthant, new_y) = l.export();
        factors.clone_from_slice(&new_factors);
        orthant.copy_from_slice(&new_orthant);
        y.copy_from_slice(&new_y);
    })
}

/// Runs the iteration on a loaded Lagrangian and hands the final one to `take`.
fn run(
    problem: &Problem,
    op: &Operator,
    l: Lagrangian<'_>,
    params: &NewtonParams,
    meter: &mut Meter,
    take: impl FnOnce(&Lagrangian<'_>),
) -> NewtonInfo {
    let mut system = System::new(op, l);
    let (unknowns, m) = (system.unknowns(), op.constraints());
    let mut solver = if unknowns + m <= params.dense_order {
        Solver::Dense(DenseSolver::new(unknowns, m))
    } else {
        Solver::Krylov(Minres::new(unknowns + m))
    };
    let mut step = vec![0.0; unknowns + m];
    let mut merit = system.evaluate();
    let mut info = NewtonInfo {
        merit_before: merit,
        merit,
        stationarity: f64::INFINITY,
        feasibility: f64::INFINITY,
        steps: 0,
        krylov_steps: 0,
        end: NewtonEnd::Limit,
    };
    let mut factor = params.levenberg;
    let mut attempts = 0;
    while info.steps < params.steps {
        if merit <= params.tolerance {
            info.end = NewtonEnd::Converged;
            break;
        }
        if let Err(halt) = meter.check() {
            info.end = NewtonEnd::Halted(halt);
            break;
        }
        let lambda = (factor * merit).clamp(1e-14, 1e3);
        let solved = match &mut solver {
            Solver::Dense(dense) => dense.solve(&mut system, lambda, merit, &mut step, meter),
            Solver::Krylov(minres) => {
                let tolerance = (0.1 * merit).clamp(1e-10, 1e-2);
                let settings = MinresParams { tolerance, steps: params.krylov_steps, lambda };
                info.krylov_steps += minres.solve(&mut system, &settings, &mut step, meter);
                true
            }
        };
        meter.effort.inner_steps += 1;
        let accepted = if solved { system.try_step(&step, merit) } else { None };
        match accepted {
            Some(new) => {
                info.steps += 1;
                // Steps that gain less than a thousandth are the noise of the arithmetic.
                let futile = new > 0.999 * merit;
                factor = if new < 0.1 * merit { 0.2 * factor } else { 2.0 * factor };
                let linear = new > 0.1 * merit;
                merit = new;
                if linear && merit <= params.enough {
                    info.end = NewtonEnd::Converged;
                    break;
                }
                attempts = if futile { attempts + 1 } else { 0 };
                if attempts > 3 {
                    info.end = NewtonEnd::Stalled;
                    break;
                }
            }
            None => {
                factor = (10.0 * factor).max(1e-4 / merit.max(1e-4));
                attempts += 1;
                if attempts > 6 || factor * merit > 1e3 {
                    info.end = NewtonEnd::Stalled;
                    break;
                }
            }
        }
    }
    info.merit = merit;
    info.stationarity = system.stationarity();
    info.feasibility = system.lagrangian().feasibility(problem);
    take(system.lagrangian());
    info
}

enum Solver {
    Dense(DenseSolver),
    Krylov(Minres),
}

#[cfg(test)]
mod tests;
