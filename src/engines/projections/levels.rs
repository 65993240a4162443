//! The descent of an objective cut <C, X> + c'x <= gamma over stages of a method that knows no objective.
//!
//! The first stage has no cut and gives the value f0; the cut then goes down to f0 - d, d = 0.1 (1 + |f0|), doubling d
//! while stages succeed; from the first failure on it is bisected between the failed and the best value. Then random
//! starts are made a thousandth below the best value; one that succeeds begins a new descent. Own construction.

use crate::budget::{Halt, Meter};
use crate::problem::StopReason;
use crate::seed::Stream;

/// The bisection ends at this relative width.
const WIDTH: f64 = 1e-8;
/// Random starts after a descent begin at a cut this much lower, relative.
const BELOW: f64 = 1e-3;

/// Limits of the descent.
#[derive(Clone, Copy, Debug)]
pub struct Limits {
    /// Most random starts of the first stage.
    pub starts: usize,
    /// Most values of the cut.
    pub stages: usize,
    /// Most steps of one stage; ten times as many for the first.
    pub steps: usize,
    /// Random starts made a thousandth of 1 + |f| below the value f that a descent ended at.
    pub retries: usize,
}

/// How a stage ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Stage {
    /// A point of both sets within the cut was found.
    Met,
    /// None was.
    Missed,
}

/// A method that looks for a point of both sets within a cut.
pub trait Staged {
    /// Draws a new starting point.
    fn draw(&mut self, stream: &mut Stream);

    /// Starts from the best point.
    fn resume(&mut self);

    /// Runs one stage of at most `limit` steps; `gamma` is infinite without a cut.
    ///
    /// # Errors
    /// A limit of the meter, or `Failed`.
    fn stage(&mut self, gamma: f64, limit: usize, meter: &mut Meter) -> Result<Stage, Halt>;

    /// Returns the objective of the best point.
    fn value(&self) -> f64;

    /// Returns whether the objective varies over the affine set.
    fn varies(&self) -> bool;

    /// Returns whether the method's own limit of all steps together is reached.
    fn spent(&self) -> bool {
        false
    }
}

/// Lowers the cut as far as it goes; says how it ended.
///
/// # Errors
/// What [`Staged::stage`] returns.
pub fn descend(
    method: &mut impl Staged,
    limits: Limits,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<StopReason, Halt> {
    // 1. Without a cut, from random points.
    let mut met = Stage::Missed;
    for _ in 0..limits.starts {
        method.draw(stream);
        met = method.stage(f64::INFINITY, 10 * limits.steps, meter)?;
        if met == Stage::Met || method.spent() {
            break;
        }
    }
    if met == Stage::Missed {
        return Ok(StopReason::Stalled);
    }
    if !method.varies() {
        return Ok(StopReason::Converged);
    }
    // 2. Down from there, and from random points below the end.
    let mut end = lower(method, limits, meter)?;
    let mut left = limits.retries;
    while left > 0 && !method.spent() {
        left -= 1;
        let gamma = method.value() - BELOW * (1.0 + method.value().abs());
        method.draw(stream);
        if method.stage(gamma, limits.steps, meter)? == Stage::Met {
            end = lower(method, limits, meter)?;
            left = limits.retries;
        }
    }
    Ok(end)
}

/// Lowers the cut from the best point: downwards while it works, then by bisection.
fn lower(method: &mut impl Staged, limits: Limits, meter: &mut Meter) -> Result<StopReason, Halt> {
    let mut drop = 0.1 * (1.0 + method.value().abs());
    let mut failed: Option<f64> = None;
    for _ in 0..limits.stages {
        if method.spent() {
            break;
        }
        let best = method.value();
        let gamma = match failed {
            Some(low) if best - low <= WIDTH * (1.0 + best.abs()) => {
                return Ok(StopReason::Converged);
            }
            Some(low) => 0.5 * (low + best),
            None => best - drop,
        };
        method.resume();
        match method.stage(gamma, limits.steps, meter)? {
            Stage::Met => drop *= 2.0,
            Stage::Missed => failed = Some(gamma),
        }
    }
    Ok(StopReason::IterationLimit)
}
