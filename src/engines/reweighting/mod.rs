//! Rank promotion by repeating a convex problem with another cost: the loop that such methods share.
//!
//! From the relaxation's point X_0 the loop takes turns. Turn k asks an [`Inner`] for the solution X_k of a
//! convex problem made from X_{k-1} and a weight rho, most often
//!
//! ```text
//! min <C + rho T, X>   s.t.  A(X) = b, X PSD,   T = T(X_{k-1})
//! ```
//!
//! ([`Weighted`], with T from a [`WeightRule`]). The objective stays in the cost, and the weight decides how
//! much rank is worth: rho starts at `share` times the price `max(|<C, X_0>| / tr X_0, 1e-3 ||C||_F)` (1 where
//! C = 0), the trace over the blocks with a rank bound, and grows by `growth` after each turn in which the tail
//! ratio (eigenvalues beyond the bounds over the trace) did not fall below `hold` times its last value. An
//! attempt ends when the tail ratio is at most `tail`, when rho has passed 1e3 times the price, or after `turns`
//! turns. Further attempts start from random points V G G' V' (V V' = X_0, G normal, of the target width) in
//! the place of X_0; they end early when a point meets the relaxation's value, below which nothing lies.
//!
//! Where C = 0 the relaxation is the one of least trace over the bounded blocks.
//!
//! Ends of attempts are truncated to the target ranks and finished by Newton steps on the factors with
//! the given cost alone (`finish`), so that the weight leaves no bias; the feasible one of least objective is
//! returned. Nothing here is a global method.

mod finish;
mod measured;
mod tail;
mod weighted;

pub use measured::{BlockView, Measured};
pub use tail::TailProjector;
pub use weighted::{WeightRule, Weighted, largest_eigenvalues, spectral_matrix};

use crate::budget::{Halt, Meter, TracePoint};
use crate::engines::ipm::{self, Outcome};
use crate::linalg::Mat;
use crate::problem::{Answer, BlockPoint, Operator, Point, Problem, StopReason};
use crate::seed::Stream;
use finish::Candidate;

/// Weights beyond this multiple of the price end an attempt.
const LARGEST: f64 = 1e3;
/// Candidates are tried at the end of a stage when the tail ratio is below this.
const WORTH_TRYING: f64 = 1e-2;
/// The price per unit of trace is at least this times ||C||_F.
const LEAST_PRICE: f64 = 1e-3;

/// Settings of the loop, as the module's text says.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Params {
    /// First weight over the price.
    pub share: f64,
    /// Growth of the weight.
    pub growth: f64,
    /// Share to which the tail ratio must fall in a turn for the weight to be held.
    pub hold: f64,
    /// Tail ratio at which an attempt ends.
    pub tail: f64,
    /// Most turns in an attempt.
    pub turns: usize,
    /// Further attempts from random points.
    pub restarts: usize,
    /// Growth of the first weight from one attempt to the next.
    pub restart_growth: f64,
    /// Whether ends are finished by Newton steps.
    pub polish: Polish,
}

/// Whether ends of attempts are finished by Newton steps on the factors.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Polish {
    /// Truncated points are returned as they are.
    Off,
    /// Newton steps restore constraints and remove the weight's bias.
    Newton,
}

/// A stage of an attempt begins.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Stage {
    /// The first of an attempt.
    First,
    /// The weight has just grown.
    Next,
}

/// The convex problem of a turn.
pub trait Inner {
    /// Solves the relaxation into `next`; the least trace over bounded blocks where the cost is zero.
    ///
    /// # Errors
    /// What the engine beneath returns.
    fn relax(&mut self, next: &mut Measured, meter: &mut Meter) -> Result<ipm::Info, Halt>;

    /// Returns multipliers of the relaxation just solved, for the cost as given.
    fn multipliers(&self) -> Vec<f64>;

    /// Says that a stage begins at this point.
    fn stage(&mut self, stage: Stage, at: &Measured);

    /// Solves the convex problem of weight `rho` made at `at`, into `next`.
    ///
    /// # Errors
    /// What the engine beneath returns.
    fn turn(
        &mut self,
        rho: f64,
        at: &Measured,
        next: &mut Measured,
        meter: &mut Meter,
    ) -> Result<ipm::Info, Halt>;

    /// Returns the penalty p of a point, such that one turn does not raise `<C, X> + rho p(X)`. It is asked
    /// before and after a turn.
    fn penalty(&self, at: &Measured) -> f64;

    /// Says that the turn is over: parameters that change from turn to turn change now.
    fn turned(&mut self) {}
}

/// One turn, for tests of what is published about it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Turn {
    /// Attempt, from 0.
    pub attempt: usize,
    /// Weight.
    pub rho: f64,
    /// `<C, X> + rho p(X)` before; none when the turn started from a random point.
    pub before: Option<f64>,
    /// The same after.
    pub after: f64,
    /// `<C, X>` after.
    pub value: f64,
    /// Tail ratio after.
    pub tail: f64,
    /// Interior-point iterations.
    pub iterations: usize,
}

/// What the loop did.
#[derive(Clone, Debug, PartialEq)]
pub struct Info {
    /// Tail ratio and value of the relaxation.
    pub relaxed_tail: f64,
    /// Value of the relaxation.
    pub relaxed_value: f64,
    /// All turns.
    pub turns: Vec<Turn>,
    /// Tail ratio of the point whose truncation is returned.
    pub tail: f64,
}

enum End {
    /// The tail vanished.
    Vanished,
    /// A point meets the relaxation's value.
    Met,
    /// The weight passed its limit.
    Exhausted,
    /// The turns ran out.
    Turns,
}

/// Runs the loop and returns the answer with what was done.
///
/// # Errors
/// Limits reached before the relaxation has a point; `Interrupted`; `Failed` when the relaxation is infeasible
/// or an eigendecomposition fails.
pub fn run(
    problem: &Problem,
    inner: &mut dyn Inner,
    params: &Params,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<(Answer, Info), Halt> {
    let mut now = Measured::new(problem);
    let relaxed = inner.relax(&mut now, meter)?;
    if matches!(relaxed.outcome, Outcome::PrimalInfeasible | Outcome::DualInfeasible) {
        let word = relaxed.outcome.stop_reason().word();
        return Err(Halt::Failed(format!("the relaxation is {word}")));
    }
    now.decompose(meter)?;
    let op = Operator::new(problem);
    let value = op.cost_dense(&now.points, &now.orthant);
    let info = Info {
        relaxed_tail: now.tail,
        relaxed_value: value,
        turns: Vec::with_capacity(params.turns * (params.restarts + 1)),
        tail: now.tail,
    };
    let mut drive = Drive {
        problem,
        origin: now.points.clone(),
        next: Measured::new(problem),
        now,
        op,
        params,
        multipliers: inner.multipliers(),
        best: None,
        info,
    };
    let stop = match (relaxed.outcome, drive.attempts(inner, stream, meter)) {
        (Outcome::TimeLimit, _) | (_, Err(Halt::TimeLimit)) => StopReason::TimeLimit,
        (_, Err(Halt::MemoryLimit)) => StopReason::MemoryLimit,
        (_, other) => other?,
    };
    drive.answer(stop, meter)
}

struct Drive<'a> {
    problem: &'a Problem,
    op: Operator,
    params: &'a Params,
    /// X_0.
    origin: Vec<Mat<f64>>,
    now: Measured,
    next: Measured,
    multipliers: Vec<f64>,
    best: Option<Candidate>,
    info: Info,
}

impl Drive<'_> {
    fn attempts(
        &mut self,
        inner: &mut dyn Inner,
        stream: &mut Stream,
        meter: &mut Meter,
    ) -> Result<StopReason, Halt> {
        if self.now.tail <= self.params.tail {
            self.propose(meter)?;
            return Ok(StopReason::Converged);
        }
        // A truncated relaxation may already be finished to an optimum.
        if self.now.tail <= WORTH_TRYING && self.propose(meter)? {
            return Ok(StopReason::Converged);
        }
        let norm = self.problem.cost().norm();
        let share = self.info.relaxed_value.abs() / self.now.trace.max(f64::MIN_POSITIVE);
        let price = if norm > 0.0 { share.max(LEAST_PRICE * norm) } else { 1.0 };
        let mut first = self.params.share * price;
        let mut stop = StopReason::Stalled;
        for attempt in 0..=self.params.restarts {
            if attempt > 0 {
                self.now.draw(&self.origin, stream, meter)?;
                first *= self.params.restart_growth;
            }
            let limit = LARGEST * price.max(first);
            match self.attempt(inner, attempt, first, limit, meter)? {
                End::Met => return Ok(StopReason::Converged),
                End::Vanished => stop = StopReason::Converged,
                End::Turns if stop == StopReason::Stalled => stop = StopReason::IterationLimit,
                End::Turns | End::Exhausted => {}
            }
        }
        Ok(stop)
    }

    fn attempt(
        &mut self,
        inner: &mut dyn Inner,
        attempt: usize,
        first: f64,
        limit: f64,
        meter: &mut Meter,
    ) -> Result<End, Halt> {
        let mut rho = first;
        let mut random = attempt > 0;
        let mut last = if random { f64::INFINITY } else { self.now.tail };
        inner.stage(Stage::First, &self.now);
        for _ in 0..self.params.turns {
            meter.check()?;
            let before = (!random).then(|| self.weighed(rho, inner, &self.now));
            let solved = inner.turn(rho, &self.now, &mut self.next, meter)?;
            self.next.decompose(meter)?;
            std::mem::swap(&mut self.now, &mut self.next);
            random = false;
            let tail = self.now.tail;
            let value = self.op.cost_dense(&self.now.points, &self.now.orthant);
            let after = self.weighed(rho, inner, &self.now);
            let iterations = solved.iterations;
            self.info.turns.push(Turn { attempt, rho, before, after, value, tail, iterations });
            meter.trace(TracePoint {
                flops: 0,
                objective: Some(value),
                residual: Some(solved.residuals.primal),
                tail: Some(tail),
            });
            if solved.outcome == Outcome::TimeLimit {
                return Err(Halt::TimeLimit);
            }
            inner.turned();
            if tail <= self.params.tail {
                let met = self.propose(meter)?;
                return Ok(if met { End::Met } else { End::Vanished });
            }
            if tail > self.params.hold * last {
                if tail <= WORTH_TRYING && self.propose(meter)? {
                    return Ok(End::Met);
                }
                rho *= self.params.growth;
                if rho > limit || self.params.growth == 1.0 {
                    self.propose(meter)?;
                    return Ok(End::Exhausted);
                }
                inner.stage(Stage::Next, &self.now);
            }
            last = tail;
        }
        self.propose(meter)?;
        Ok(End::Turns)
    }

    fn weighed(&self, rho: f64, inner: &dyn Inner, at: &Measured) -> f64 {
        self.op.cost_dense(&at.points, &at.orthant) + rho * inner.penalty(at)
    }

    /// Finishes the present point and keeps it when it is the best; true when nothing can be better.
    fn propose(&mut self, meter: &mut Meter) -> Result<bool, Halt> {
        let (now, y) = (&self.now, &self.multipliers);
        let candidate = Candidate::of(self.problem, &self.op, now, y, self.params.polish, meter);
        meter.check()?;
        let met = candidate.meets(self.info.relaxed_value);
        if self.best.as_ref().is_none_or(|best| candidate.betters(best)) {
            self.best = Some(candidate);
        }
        Ok(met)
    }

    fn answer(mut self, stop: StopReason, meter: &mut Meter) -> Result<(Answer, Info), Halt> {
        if let Err(Halt::Interrupted) = meter.check() {
            return Err(Halt::Interrupted);
        }
        let best = match self.best.take() {
            Some(best) => best,
            // A limit came before the first end of an attempt: truncation costs next to nothing.
            None => {
                let (now, y) = (&self.now, &self.multipliers);
                Candidate::of(self.problem, &self.op, now, y, Polish::Off, meter)
            }
        };
        self.info.tail = best.tail;
        let iterations: usize = self.info.turns.iter().map(|turn| turn.iterations).sum();
        let attempts = self.info.turns.last().map_or(0, |turn| turn.attempt + 1);
        let note = format!(
            "{} turns in {attempts} attempts, {iterations} interior-point iterations in them; tail {:.1e} relaxed, {:.1e} \
             before the truncation",
            self.info.turns.len(),
            self.info.relaxed_tail,
            best.tail,
        );
        let blocks = best.factors.into_iter().map(BlockPoint::Factor).collect();
        let answer = Answer {
            point: Point { blocks, orthant: best.orthant },
            multipliers: Some(self.multipliers),
            stop,
            note,
        };
        Ok((answer, self.info))
    }
}
