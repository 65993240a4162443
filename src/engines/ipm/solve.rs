//! The loop: start, residuals, stopping, predictor, centring, corrector, step.

use super::direction::{Reach, State};
use super::ending::Best;
use super::iterate::{BlockState, norm_squared, write_dense};
use super::ladder::Ladder;
use super::scaling::Scaling;
use super::start::Start;
use super::{Hook, Info, NewtonDirection, Outcome, Params, Residuals, Solution, Steer, Steering};
use crate::budget::{Halt, Meter, TracePoint};
use crate::linalg::Mat;
use crate::linalg::dense;
use crate::linalg::vector::{dot, norm2};
use crate::problem::operator::Storage;
use crate::problem::{Operator, Problem, SlackStore};

/// Steps below this end the loop.
const TINY_STEP: f64 = 1e-7;
/// Residuals of a direction below this share of `1 + ||b||` are not refined.
const REFINE_BELOW: f64 = 1e-13;
/// Figures of the current iterate.
#[derive(Clone, Copy, Debug)]
pub(super) struct Figures {
    pub residuals: Residuals,
    /// Value of the weighted cost.
    pub primal: f64,
    pub dual: f64,
    /// Value of the cost alone.
    pub value: f64,
}

/// Solves the relaxation of `problem`; rank bounds are ignored.
///
/// `hook`, when given, is called before every Newton step and may move the cost; blocks are then held
/// dense. Memory: about eight n x n matrices a block and two m x m matrices.
///
/// # Errors
/// `MemoryLimit` before the matrices are taken; `Interrupted`; `TimeLimit` or `MemoryLimit` when not
/// even one step was done.
pub fn solve(
    problem: &Problem,
    params: &Params,
    hook: Option<&mut dyn Hook>,
    meter: &mut Meter,
) -> Result<Solution, Halt> {
    meter.check_room(memory_bytes(problem, params.newton))?;
    let storage = if hook.is_some() { Storage::Dense } else { Storage::Automatic };
    let mut run = Run::new(problem, storage, params.newton);
    if hook.is_some() {
        for block in &mut run.state.blocks {
            block.weight = Some(Mat::zeros(block.order, block.order));
        }
    }
    run.begin();
    let (outcome, iterations) = run.iterate(params, hook, meter)?;
    Ok(run.into_solution(outcome, iterations, params))
}

/// Counts the bytes of the matrices of a run.
pub(super) fn memory_bytes(problem: &Problem, newton: NewtonDirection) -> u64 {
    let m = problem.rhs().len() as u64;
    let blocks: u64 = problem.blocks().iter().map(|b| (b.order as u64).pow(2)).sum();
    let squares = if newton == NewtonDirection::Nt { 18 } else { 9 };
    8 * (2 * m * m + squares * blocks)
}

/// The loop with everything it holds, in scaled data.
#[derive(Debug)]
pub(super) struct Run {
    pub scaling: Scaling,
    pub b_norm: f64,
    /// Norm of the cost, with its weight when the weight is set from outside.
    pub c_norm: f64,
    pub state: State,
    pub start: Start,
    pub best: Option<Best>,
    /// Iterates to start later runs from; none unless a session asks for them.
    pub ladder: Option<Ladder>,
    /// Steps of the last iteration.
    steps: Reach,
}

impl Run {
    /// Scales a problem and takes the memory.
    pub(super) fn new(problem: &Problem, storage: Storage, newton: NewtonDirection) -> Self {
        let (scaled, scaling) = Scaling::scale(problem);
        let op = Operator::with_storage(&scaled, storage);
        let start = Start::of(&scaled, &op);
        let blocks = op.blocks.iter().map(|block| BlockState::new(block, newton)).collect();
        let state = State::new(op, scaled.rhs().to_vec(), blocks, scaled.orthant());
        Run {
            scaling,
            b_norm: norm2(scaled.rhs()),
            c_norm: scaled.cost().norm(),
            state,
            start,
            best: None,
            ladder: None,
            steps: Reach { primal: 0.0, dual: 0.0 },
        }
    }

    /// Puts the iterate at the start: multiples of the identity, no multipliers.
    pub(super) fn begin(&mut self) {
        let state = &mut self.state;
        for (block, (xi, eta)) in state.blocks.iter_mut().zip(&self.start.blocks) {
            block.set_multiples(*xi, eta.max(1.0 + self.c_norm), &mut state.ws);
        }
        let (xi, eta) = self.start.orthant;
        state.x.fill(xi);
        state.z.fill(eta);
        state.y.fill(0.0);
    }

    /// Iterates from the present point; returns how it ended and after how many iterations.
    pub(super) fn iterate(
        &mut self,
        params: &Params,
        mut hook: Option<&mut dyn Hook>,
        meter: &mut Meter,
    ) -> Result<(Outcome, usize), Halt> {
        self.best = None;
        self.steps = Reach { primal: 0.0, dual: 0.0 };
        let mut outcome = Outcome::IterationLimit;
        let mut iteration = 0;
        while iteration < params.max_iterations {
            // Step 1: residuals, the hook, stopping.
            let mut figures = self.figures();
            let mut may_stop = true;
            let mut least_centring = 0.0;
            if let Some(hook) = hook.as_deref_mut() {
                match self.steer(hook, &figures, meter) {
                    Steering::Free => {}
                    Steering::Hold => may_stop = false,
                    Steering::Centre => {
                        may_stop = false;
                        least_centring = 0.5;
                    }
                    Steering::Stop => {
                        outcome = Outcome::Optimal;
                        self.best = None;
                        break;
                    }
                }
                figures = self.figures();
            }
            self.trace(&figures, meter);
            if let Some(ladder) = &mut self.ladder {
                ladder.keep(&figures.residuals, &self.state);
            }
            if may_stop {
                self.keep_best(&figures, iteration, hook.is_none());
            } else {
                self.best = None;
            }
            if let Some(end) = self.verdict(params, &figures, iteration, may_stop) {
                outcome = end;
                break;
            }
            match meter.check() {
                Err(Halt::TimeLimit) if iteration > 0 => {
                    outcome = Outcome::TimeLimit;
                    break;
                }
                other => other?,
            }
            // Step 2: Newton system at this iterate.
            if !self.state.factor_schur(&mut meter.effort) {
                outcome = Outcome::Stalled;
                break;
            }
            // Step 3: predictor, centring, corrector, step.
            meter.effort.inner_steps += 1;
            iteration += 1;
            if self.newton_step(&figures, least_centring, meter) {
                continue;
            }
            // The iterate may have drifted to the boundary: one centring step may free it.
            let figures = self.figures();
            let freed = self.state.factor_schur(&mut meter.effort)
                && self.newton_step(&figures, 1.0, meter);
            if !freed {
                outcome = Outcome::Stalled;
                break;
            }
        }
        Ok((outcome, iteration))
    }

    fn newton_step(&mut self, figures: &Figures, least_centring: f64, meter: &mut Meter) -> bool {
        let effort = &mut meter.effort;
        let state = &mut self.state;
        state.predictor(figures.residuals.dual, effort);
        let reach = state.reach(effort);
        let g = 0.9 + 0.09 * self.steps.primal.min(self.steps.dual);
        let (a, b) = ((g * reach.primal).min(1.0), (g * reach.dual).min(1.0));
        let mu = state.mu;
        let predicted = state.trial_complementarity(a, b) / state.pairs();
        let sigma = centring(mu, predicted, a.min(b)).max(least_centring);
        state.corrector(sigma * mu, effort);
        state.refine(REFINE_BELOW * (1.0 + self.b_norm), effort);
        let reach = state.reach(effort);
        let g = 0.9 + 0.09 * a.min(b);
        let (a, b) = ((g * reach.primal).min(1.0), (g * reach.dual).min(1.0));
        if !(a.is_finite() && b.is_finite()) || a.max(b) < TINY_STEP {
            return false;
        }
        match state.advance(a, b, effort) {
            Some((a, b)) => {
                self.steps = Reach { primal: a, dual: b };
                a.min(b) > TINY_STEP
            }
            None => false,
        }
    }

    pub(super) fn figures(&mut self) -> Figures {
        let state = &mut self.state;
        state.residuals();
        let mut dual_squared = dot(&state.rdz, &state.rdz);
        let mut value = dot(&state.op.orthant_cost, &state.x);
        let mut weighed = 0.0;
        for (block, part) in state.op.blocks.iter().zip(&state.blocks) {
            dual_squared += norm_squared(&part.rd);
            value += block.cost_with_dense(part.x.as_ref());
            if let Some(weight) = &part.weight {
                weighed += dense::dot_symmetric(weight.as_ref(), part.x.as_ref());
            }
        }
        let primal = value + weighed;
        let dual = dot(&state.b, &state.y);
        let complementarity = state.complementarity();
        state.mu = complementarity / state.pairs();
        // Values are compared in the caller's units: scaling must not hide a large gap.
        let unit = self.scaling.rhs * self.scaling.cost;
        let residuals = Residuals {
            primal: norm2(&state.rp) / (1.0 + self.b_norm),
            dual: dual_squared.sqrt() / (1.0 + self.c_norm),
            gap: unit * complementarity.abs() / (1.0 + unit * (primal.abs() + dual.abs())),
        };
        Figures { residuals, primal, dual, value }
    }

    fn steer(&mut self, hook: &mut dyn Hook, figures: &Figures, meter: &mut Meter) -> Steering {
        let mut points = Vec::new();
        let mut slacks = Vec::new();
        let mut weights = Vec::new();
        for part in &mut self.state.blocks {
            points.push(std::mem::replace(&mut part.x, Mat::new()));
            weights.push(part.weight.take().expect("a hooked run has weights"));
            if let SlackStore::Dense(matrix) = &mut part.s.store {
                slacks.push(std::mem::replace(matrix, Mat::new()));
            }
        }
        let word = hook.steer(
            &mut Steer {
                points: &points,
                residuals: figures.residuals,
                value: figures.value,
                complementarity: self.state.mu * self.state.pairs(),
                slacks: &mut slacks,
                weights: &mut weights,
            },
            meter,
        );
        let parts = points.into_iter().zip(slacks).zip(weights);
        for (part, ((x, s), weight)) in self.state.blocks.iter_mut().zip(parts) {
            part.x = x;
            part.weight = Some(weight);
            part.s.store = SlackStore::Dense(s);
            part.factor_s(&mut self.state.ws);
        }
        word
    }

    fn trace(&self, figures: &Figures, meter: &mut Meter) {
        meter.trace(TracePoint {
            flops: 0,
            objective: Some(figures.value * self.scaling.rhs * self.scaling.cost),
            residual: Some(figures.residuals.primal),
            tail: None,
        });
    }

    /// Turns the state into a solution in the caller's units.
    fn into_solution(mut self, outcome: Outcome, iterations: usize, params: &Params) -> Solution {
        let info = self.report(outcome, iterations, params);
        let mut slacks = Vec::new();
        let mut points = Vec::new();
        for block in self.state.blocks {
            let mut s = block.ls;
            write_dense(&block.s, &mut s);
            dense::scale(self.scaling.cost, s.as_mut());
            slacks.push(s);
            let mut x = block.x;
            dense::scale(self.scaling.rhs, x.as_mut());
            points.push(x);
        }
        Solution {
            points,
            orthant: self.state.x.iter().map(|value| value * self.scaling.rhs).collect(),
            multipliers: self.scaling.multipliers(&self.state.y),
            slacks,
            info,
        }
    }

    /// Settles on the iterate to return and says what is known of it.
    pub(super) fn report(&mut self, outcome: Outcome, iterations: usize, params: &Params) -> Info {
        let (outcome, residuals) = self.settle(outcome, params);
        let unit = self.scaling.rhs * self.scaling.cost;
        let figures = self.figures();
        Info {
            outcome,
            iterations,
            residuals,
            primal_value: unit * figures.primal,
            dual_value: unit * figures.dual,
        }
    }
}

/// Chooses sigma from the predictor: small when the predictor goes far.
fn centring(mu: f64, predicted: f64, step: f64) -> f64 {
    if predicted < 0.0 {
        return 0.8;
    }
    let exponent = if mu > 1e-6 {
        if step < 1.0 / 3.0_f64.sqrt() { 1.0 } else { (3.0 * step * step).max(1.0) }
    } else {
        // Near the end the exponent is held at one: bolder centring loses the last digits.
        1.0
    };
    (predicted / mu).powf(exponent).min(1.0)
}
