//! Solving one problem again and again with another extra cost.

use super::ladder::Ladder;
use super::solve::{Run, memory_bytes};
use super::{Info, NewtonDirection, Outcome, Params};
use crate::budget::{Halt, Meter};
use crate::linalg::dense;
use crate::linalg::vector::dot;
use crate::linalg::{Mat, MatRef};
use crate::problem::operator::Storage;
use crate::problem::{Problem, SlackStore};

/// Where a run of a session starts.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Beginning {
    /// At multiples of the identity, as [`super::solve`].
    Cold,
    /// At the kept iterate of least gap that still bears the change of the cost; cold when none does.
    Warm,
}

/// A warm run that stalls with larger residuals is done again from a cold start.
const LOST: f64 = 1e-6;

/// A problem with an extra cost W by block, minimising `<C + W, X> + c'x`.
#[derive(Debug)]
pub struct Session {
    run: Run,
    newton: NewtonDirection,
    /// Runs that started warm.
    warm: usize,
}

impl Session {
    /// Compiles the problem, with blocks held dense and W = 0. Memory: about eighteen n x n matrices a
    /// block (nine more for the NT direction) and two m x m matrices.
    ///
    /// # Errors
    /// `MemoryLimit` before the matrices are taken.
    pub fn new(problem: &Problem, newton: NewtonDirection, meter: &Meter) -> Result<Self, Halt> {
        let squares: u64 = problem.blocks().iter().map(|b| (b.order as u64).pow(2)).sum();
        meter.check_room(memory_bytes(problem, newton) + 8 * 9 * squares)?;
        let mut run = Run::new(problem, Storage::Dense, newton);
        for block in &mut run.state.blocks {
            block.weight = Some(Mat::zeros(block.order, block.order));
        }
        run.ladder = Some(Ladder::new(&run.state));
        Ok(Session { run, newton, warm: 0 })
    }

    /// Sets the extra cost of one block, symmetric, in the caller's units; it stays until set again.
    #[track_caller]
    pub fn set_weight(&mut self, block: usize, weight: MatRef<'_, f64>) {
        let run = &mut self.run;
        let state = &mut run.state.blocks[block];
        let kept = state.weight.as_mut().expect("a session has weights");
        let change = &mut state.p;
        dense::copy_into(weight, change.as_mut());
        dense::scale(1.0 / run.scaling.cost, change.as_mut());
        dense::axpy_matrix(-1.0, kept.as_ref(), change.as_mut());
        dense::axpy_matrix(1.0, change.as_ref(), kept.as_mut());
        if let Some(ladder) = &mut run.ladder {
            ladder.follow(block, change.as_ref(), &mut state.t);
        }
    }

    /// Solves with the present extra cost, by the direction that the session was made for. The values in
    /// the result are those of C + W; the iterate stays in the session.
    ///
    /// # Errors
    /// `Interrupted`; `TimeLimit` or `MemoryLimit` when not even one step was done, and there is no
    /// iterate then.
    pub fn solve(
        &mut self,
        beginning: Beginning,
        params: &Params,
        meter: &mut Meter,
    ) -> Result<Info, Halt> {
        let run = &mut self.run;
        run.c_norm = weighted_norm(run);
        let loaded = match (beginning, &mut run.ladder) {
            (Beginning::Warm, Some(ladder)) => ladder.load(&mut run.state),
            (_, Some(ladder)) => {
                ladder.clear();
                false
            }
            _ => false,
        };
        if loaded {
            self.warm += 1;
        } else {
            run.begin();
        }
        let params = Params { newton: self.newton, ..*params };
        let (outcome, iterations) = run.iterate(&params, None, meter)?;
        let info = run.report(outcome, iterations, &params);
        if !loaded || info.outcome != Outcome::Stalled || info.residuals.worst() <= LOST {
            return Ok(info);
        }
        run.begin();
        let (outcome, more) = run.iterate(&params, None, meter)?;
        Ok(run.report(outcome, iterations + more, &params))
    }

    /// Copies X of one block, in the caller's units.
    #[track_caller]
    pub fn copy_point(&self, block: usize, out: &mut Mat<f64>) {
        dense::copy_into(self.run.state.blocks[block].x.as_ref(), out.as_mut());
        dense::scale(self.run.scaling.rhs, out.as_mut());
    }

    /// Copies the nonnegative part x, in the caller's units.
    #[track_caller]
    pub fn copy_orthant(&self, out: &mut [f64]) {
        out.copy_from_slice(&self.run.state.x);
        out.iter_mut().for_each(|value| *value *= self.run.scaling.rhs);
    }

    /// Returns the multipliers y for C + W, in the caller's units.
    pub fn multipliers(&self) -> Vec<f64> {
        self.run.scaling.multipliers(&self.run.state.y)
    }

    /// Returns how many runs started warm.
    pub fn warm_runs(&self) -> usize {
        self.warm
    }
}

/// Returns the norm of C + W in scaled data; R_d serves as work.
fn weighted_norm(run: &mut Run) -> f64 {
    let state = &mut run.state;
    let mut square = dot(&state.op.orthant_cost, &state.op.orthant_cost);
    state.dy.fill(0.0);
    for (block, part) in state.op.blocks.iter().zip(&mut state.blocks) {
        block.fill_slack(&state.dy, 1.0, &mut part.rd);
        if let (SlackStore::Dense(matrix), Some(weight)) = (&mut part.rd.store, &part.weight) {
            dense::axpy_matrix(1.0, weight.as_ref(), matrix.as_mut());
            square += dense::dot_symmetric(matrix.as_ref(), matrix.as_ref());
        }
    }
    square.sqrt()
}
