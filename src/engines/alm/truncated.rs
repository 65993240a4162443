//! Truncated Newton steps for the augmented Lagrangian: a second-order inner solver.
//!
//! A step solves H s = -g by conjugate gradients without preconditioner, to a residual of min(1/2, sqrt(|g|/|g_0|)) |g|, and
//! stops at a direction of curvature at most 0 (R. Dembo, T. Steihaug, Mathematical Programming 26:190-212, 1983, from
//! memory). What follows is ours: the line search is the exact one of the quartic along s and, when there is such a
//! direction d, along d as well; the lower of the two is taken, so that no trust region is needed.

use super::descent::InnerEnd;
use super::lagrangian::Lagrangian;
use super::quartic::least_step;
use crate::budget::{Halt, Meter};
use crate::linalg::vector::{axpby, axpy, dot, norm2, scale};
use crate::problem::Slack;

/// Curvature d'Hd at most this times |d|^2 counts as none, in scaled data.
const FLAT: f64 = 1e-13;
/// Most conjugate gradient steps in one Newton step.
const PRODUCTS: usize = 500;
/// Conjugate gradient steps between two looks at the budget.
const CHECK_EVERY: usize = 8;

/// Vectors of the inner solver.
#[derive(Clone, Debug)]
pub struct TruncatedWorkspace {
    adjoint: Vec<Slack>,
    scratch: Vec<f64>,
    step: Vec<f64>,
    residual: Vec<f64>,
    direction: Vec<f64>,
    image: Vec<f64>,
}

impl TruncatedWorkspace {
    /// Takes memory for the Lagrangian's point.
    pub fn new(l: &Lagrangian<'_>) -> Self {
        let zero = vec![0.0; l.layout.length()];
        TruncatedWorkspace {
            adjoint: l.empty_slacks(),
            scratch: zero.clone(),
            step: zero.clone(),
            residual: zero.clone(),
            direction: zero.clone(),
            image: zero,
        }
    }
}

/// Which direction a run of conjugate gradients offers.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Offer {
    /// The step only.
    Step,
    /// The step, and a direction of no positive curvature.
    Both,
    /// That direction only.
    Direction,
}

/// Minimises the augmented Lagrangian over z at fixed multipliers and penalty, to
/// `||gradient|| <= tolerance (1 + ||z||)`.
pub(super) fn minimise(
    l: &mut Lagrangian<'_>,
    tolerance: f64,
    limit: usize,
    ws: &mut TruncatedWorkspace,
    meter: &mut Meter,
    steps: &mut usize,
) -> InnerEnd {
    l.refresh();
    l.compute_gradient();
    let first = norm2(&l.gradient);
    for _ in 0..limit {
        // 1. Stop rules.
        if let Err(halt) = meter.check() {
            return InnerEnd::Halted(halt);
        }
        let size = norm2(&l.gradient);
        if size <= tolerance * (1.0 + norm2(&l.z)) {
            return InnerEnd::Converged;
        }
        // 2. Directions.
        let goal = 0.5_f64.min((size / first).sqrt()) * size;
        let offer = match truncated_gradients(l, goal, ws, meter) {
            Ok(offer) => offer,
            Err(halt) => return InnerEnd::Halted(halt),
        };
        // 3. The exact step along the better one.
        let value = |q: &[f64; 4], a: f64| a * (q[0] + a * (q[1] + a * (q[2] + a * q[3])));
        let mut falls = [None; 2];
        let mut unbounded = false;
        for (fall, (d, used)) in falls
            .iter_mut()
            .zip([(&ws.step, offer != Offer::Direction), (&ws.direction, offer != Offer::Step)])
        {
            if used {
                let q = l.line(d);
                *fall = least_step(q).map(|a| (value(&q, a), a));
                unbounded |= fall.is_none() && ((q[0] < 0.0 && q[3] <= 0.0) || !q[0].is_finite());
            }
        }
        let (d, a) = match falls {
            [Some((s, _)), Some((e, a))] if e < s => (&ws.direction, a),
            [Some((_, a)), _] => (&ws.step, a),
            [None, Some((_, a))] => (&ws.direction, a),
            [None, None] if unbounded => return InnerEnd::Diverged,
            [None, None] => return InnerEnd::Limit,
        };
        l.line(d);
        l.advance(a, d);
        l.refresh();
        l.compute_gradient();
        *steps += 1;
        meter.effort.inner_steps += 1;
        meter.effort.operator_products += 5;
        meter.effort.flops += 3 * l.flops();
    }
    InnerEnd::Limit
}

/// Runs conjugate gradients from zero until the residual is at most `goal`.
fn truncated_gradients(
    l: &mut Lagrangian<'_>,
    goal: f64,
    ws: &mut TruncatedWorkspace,
    meter: &mut Meter,
) -> Result<Offer, Halt> {
    ws.step.fill(0.0);
    ws.residual.copy_from_slice(&l.gradient);
    ws.direction.copy_from_slice(&l.gradient);
    scale(-1.0, &mut ws.direction);
    let mut square = dot(&ws.residual, &ws.residual);
    for product in 0..PRODUCTS {
        if product % CHECK_EVERY == 0 {
            meter.check()?;
        }
        l.hessian_times(&ws.direction, &mut ws.adjoint, &mut ws.scratch, &mut ws.image);
        meter.effort.operator_products += 3;
        meter.effort.flops += 2 * l.flops() + 10 * l.z.len() as u64;
        let curvature = dot(&ws.direction, &ws.image);
        if curvature <= FLAT * dot(&ws.direction, &ws.direction) || curvature.is_nan() {
            return Ok(if product == 0 { Offer::Direction } else { Offer::Both });
        }
        let alpha = square / curvature;
        axpy(alpha, &ws.direction, &mut ws.step);
        axpy(alpha, &ws.image, &mut ws.residual);
        let next = dot(&ws.residual, &ws.residual);
        if next.sqrt() <= goal {
            break;
        }
        axpby(-1.0, &ws.residual, next / square, &mut ws.direction);
        square = next;
    }
    Ok(Offer::Step)
}
