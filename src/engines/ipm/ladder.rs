//! Iterates kept on the way down, from which a later run with another cost may start.
//!
//! An optimum is no start: at it X S is nearly zero, and a change of the cost leaves it far from the
//! central path. Iterates at larger gaps are central and bear a change of their own size. A rung moves
//! its S by the change of the cost, so that its dual residual stays, and is dropped when that leaves S
//! too near the boundary or the gap too large. Own combination of common practice (restarts from
//! an earlier, more central iterate).

use super::Residuals;
use super::direction::State;
use super::iterate::{copy_slack, inner};
use crate::linalg::cholesky;
use crate::linalg::dense;
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, MatRef};
use crate::problem::{Slack, SlackStore};

/// Relative gaps at or below which an iterate is kept, the first of each.
const GAPS: [f64; 4] = [1e-1, 1e-2, 1e-3, 1e-4];
/// A moved rung must keep `S + dC >= KEPT * S`.
const KEPT: f64 = 0.1;
/// A moved rung must keep `<X, S + dC> <= GROWN * <X, S>` in every block.
const GROWN: f64 = 10.0;

/// One kept iterate.
#[derive(Debug)]
struct Rung {
    valid: bool,
    points: Vec<Mat<f64>>,
    slacks: Vec<Slack>,
    x: Vec<f64>,
    z: Vec<f64>,
    y: Vec<f64>,
}

/// The kept iterates, from the largest gap to the smallest.
#[derive(Debug)]
pub(super) struct Ladder {
    rungs: Vec<Rung>,
    /// Rungs passed in the present run.
    passed: usize,
    ws: Workspace,
}

impl Ladder {
    /// Takes the memory for iterates of the shape of `state`.
    pub fn new(state: &State) -> Self {
        let rungs = GAPS
            .iter()
            .map(|_| Rung {
                valid: false,
                points: state.blocks.iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
                slacks: state.op.blocks.iter().map(|block| block.slack()).collect(),
                x: state.x.clone(),
                z: state.z.clone(),
                y: state.y.clone(),
            })
            .collect();
        Ladder { rungs, passed: 0, ws: Workspace::new() }
    }

    /// Keeps the iterate when it is the first of this run at or below a gap, and as nearly feasible.
    pub fn keep(&mut self, residuals: &Residuals, state: &State) {
        let reached = GAPS.iter().filter(|gap| residuals.worst() <= **gap).count();
        if reached <= self.passed {
            return;
        }
        self.passed = reached;
        let rung = &mut self.rungs[reached - 1];
        rung.valid = true;
        for (k, block) in state.blocks.iter().enumerate() {
            dense::copy_into(block.x.as_ref(), rung.points[k].as_mut());
            copy_slack(&block.s, &mut rung.slacks[k]);
        }
        rung.x.copy_from_slice(&state.x);
        rung.z.copy_from_slice(&state.z);
        rung.y.copy_from_slice(&state.y);
    }

    /// Follows a change of the cost of one dense block; `trial` is work of the same shape.
    pub fn follow(&mut self, block: usize, change: MatRef<'_, f64>, trial: &mut Mat<f64>) {
        for rung in self.rungs.iter_mut().filter(|rung| rung.valid) {
            let before = inner(&rung.points[block], &rung.slacks[block]);
            let SlackStore::Dense(slack) = &mut rung.slacks[block].store else {
                rung.valid = false;
                continue;
            };
            dense::copy_into(change, trial.as_mut());
            dense::axpy_matrix(1.0 - KEPT, slack.as_ref(), trial.as_mut());
            let inside = cholesky::factor_in_place(trial.as_mut(), &mut self.ws).is_ok();
            dense::axpy_matrix(1.0, change, slack.as_mut());
            let after = inner(&rung.points[block], &rung.slacks[block]);
            rung.valid = inside && after <= GROWN * before;
        }
    }

    /// Loads the valid iterate of the smallest gap; false when there is none, or it cannot be factored.
    pub fn load(&mut self, state: &mut State) -> bool {
        self.passed = 0;
        let Some(rung) = self.rungs.iter().rev().find(|rung| rung.valid) else { return false };
        for (k, block) in state.blocks.iter_mut().enumerate() {
            dense::copy_into(rung.points[k].as_ref(), block.x.as_mut());
            copy_slack(&rung.slacks[k], &mut block.s);
        }
        state.x.copy_from_slice(&rung.x);
        state.z.copy_from_slice(&rung.z);
        state.y.copy_from_slice(&rung.y);
        let ws = &mut state.ws;
        state.blocks.iter_mut().all(|block| block.factor_x(ws) && block.factor_s(ws))
    }

    /// Forgets all iterates.
    pub fn clear(&mut self) {
        self.passed = 0;
        self.rungs.iter_mut().for_each(|rung| rung.valid = false);
    }
}
