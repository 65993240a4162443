//! The loop: start, residuals, stopping, predictor, centring, corrector, step.

use super::direction::{Reach, State};
use super::iterate::{BlockState, fill_identity, norm_squared, write_dense};
use super::scaling::Scaling;
use super::{Hook, Info, Outcome, Params, Residuals, Solution, Steer, Steering};
use crate::budget::{Halt, Meter, TracePoint};
use crate::linalg::Mat;
use crate::linalg::dense;
use crate::linalg::vector::{dot, norm2};
use crate::problem::operator::Storage;
use crate::problem::{Operator, Problem, SlackStore};

/// Relative size below which a certificate of infeasibility is believed.
const INFEASIBLE: f64 = 1e-8;
/// Steps below this end the loop.
const TINY_STEP: f64 = 1e-7;
/// Residuals of a direction below this share of `1 + ||b||` are not refined.
const REFINE_BELOW: f64 = 1e-13;
/// Iterations without a better iterate that end the loop.
const PATIENCE: usize = 12;

/// A saved iterate.
struct Best {
    worst: f64,
    at: usize,
    residuals: Residuals,
    points: Vec<Mat<f64>>,
    slacks: Vec<crate::problem::Slack>,
    x: Vec<f64>,
    z: Vec<f64>,
    y: Vec<f64>,
}

/// Figures of the current iterate.
#[derive(Clone, Copy, Debug)]
struct Figures {
    residuals: Residuals,
    primal: f64,
    dual: f64,
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
    let (scaled, scaling) = Scaling::scale(problem);
    meter.check_room(memory_bytes(problem))?;
    let storage = if hook.is_some() { Storage::Dense } else { Storage::Automatic };
    let op = Operator::with_storage(&scaled, storage);
    let (state, start) = start(&scaled, op);
    let mut run = Run {
        scaled: &scaled,
        scaling: &scaling,
        b_norm: norm2(scaled.rhs()),
        c_norm: scaled.cost().norm(),
        state,
        start,
        best: None,
        steps: Reach { primal: 0.0, dual: 0.0 },
    };
    if hook.is_some() {
        for block in &mut run.state.blocks {
            block.weight = Some(Mat::zeros(block.order, block.order));
        }
    }
    run.iterate(params, hook, meter)
}

fn memory_bytes(problem: &Problem) -> u64 {
    let m = problem.rhs().len() as u64;
    let blocks: u64 = problem.blocks().iter().map(|b| (b.order as u64).pow(2)).sum();
    8 * (2 * m * m + 9 * blocks)
}

/// Sizes of the starting point, kept to recognise divergence.
#[derive(Clone, Copy, Debug)]
struct Start {
    x_norm: f64,
    s_norm: f64,
}

fn start(problem: &Problem, op: Operator) -> (State, Start) {
    let b = problem.rhs().to_vec();
    let block_norm = |functional: &crate::problem::Functional, index: usize| {
        functional.part(index).map_or(0.0, crate::problem::Coefficient::norm)
    };
    let mut blocks = Vec::new();
    let mut start = Start { x_norm: 0.0, s_norm: 0.0 };
    for (index, block) in op.blocks.iter().enumerate() {
        let n = block.order as f64;
        let mut xi: f64 = 10.0_f64.max(n.sqrt());
        let mut eta: f64 = 10.0_f64.max(n.sqrt()).max(1.0 + block_norm(problem.cost(), index));
        for (functional, b) in problem.constraints().iter().zip(&b) {
            let norm = block_norm(functional, index);
            if norm > 0.0 {
                xi = xi.max(n * (1.0 + b.abs()) / (1.0 + norm));
                eta = eta.max(1.0 + norm);
            }
        }
        start.x_norm += xi * n;
        start.s_norm += eta * n;
        blocks.push(BlockState::new(block, xi, eta));
    }
    let size = problem.orthant() as f64;
    let row_norm = |row: &crate::problem::SparseVector| norm2(&row.values);
    let mut xi: f64 = 10.0_f64.max(size.sqrt());
    let mut eta: f64 = 10.0_f64.max(size.sqrt()).max(1.0 + norm2(&op.orthant_cost));
    for (row, b) in op.orthant_rows.iter().zip(&b) {
        if !row.is_empty() {
            xi = xi.max(size.sqrt() * (1.0 + b.abs()) / (1.0 + row_norm(row)));
            eta = eta.max(1.0 + row_norm(row));
        }
    }
    start.x_norm += xi * size;
    start.s_norm += eta * size;
    let mut state = State::new(op, b, blocks, xi, eta);
    for block in &mut state.blocks {
        block.factor_x(&mut state.ws);
        block.factor_s(&mut state.ws);
    }
    (state, start)
}

struct Run<'a> {
    scaled: &'a Problem,
    scaling: &'a Scaling,
    b_norm: f64,
    c_norm: f64,
    state: State,
    start: Start,
    best: Option<Best>,
    /// Steps of the last iteration.
    steps: Reach,
}

impl Run<'_> {
    fn iterate(
        mut self,
        params: &Params,
        mut hook: Option<&mut dyn Hook>,
        meter: &mut Meter,
    ) -> Result<Solution, Halt> {
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
        Ok(self.finish(outcome, iteration, params))
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

    fn figures(&mut self) -> Figures {
        let state = &mut self.state;
        state.residuals();
        let mut dual_squared = dot(&state.rdz, &state.rdz);
        let mut primal = dot(&state.op.orthant_cost, &state.x);
        for (block, part) in state.op.blocks.iter().zip(&state.blocks) {
            dual_squared += norm_squared(&part.rd);
            primal += block.cost_with_dense(part.x.as_ref());
            if let Some(weight) = &part.weight {
                primal += dense::dot_symmetric(weight.as_ref(), part.x.as_ref());
            }
        }
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
        Figures { residuals, primal, dual }
    }

    fn steer(&mut self, hook: &mut dyn Hook, figures: &Figures, meter: &mut Meter) -> Steering {
        let mut value = dot(&self.state.op.orthant_cost, &self.state.x);
        for (block, part) in self.state.op.blocks.iter().zip(&self.state.blocks) {
            value += block.cost_with_dense(part.x.as_ref());
        }
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
                value,
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

    fn keep_best(&mut self, figures: &Figures, iteration: usize, copy: bool) {
        let worst = figures.residuals.worst();
        if self.best.as_ref().is_some_and(|best| worst >= best.worst) {
            return;
        }
        let state = &self.state;
        // A copy is only worth its time when the iterate could be the one returned.
        let copy = copy && worst < 1e-4;
        let mut best = Best {
            worst,
            at: iteration,
            residuals: figures.residuals,
            points: Vec::new(),
            slacks: Vec::new(),
            x: state.x.clone(),
            z: state.z.clone(),
            y: state.y.clone(),
        };
        if copy {
            let (points, slacks) = match self.best.take() {
                Some(old) if !old.points.is_empty() => (old.points, old.slacks),
                _ => (
                    state.blocks.iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
                    state.blocks.iter().map(|b| b.s.clone()).collect(),
                ),
            };
            best.points = points;
            best.slacks = slacks;
            for (index, block) in state.blocks.iter().enumerate() {
                best.points[index].copy_from(&block.x);
                copy_slack(&block.s, &mut best.slacks[index]);
            }
        }
        self.best = Some(best);
    }

    fn verdict(
        &self,
        params: &Params,
        figures: &Figures,
        iteration: usize,
        may_stop: bool,
    ) -> Option<Outcome> {
        let residuals = figures.residuals;
        if !may_stop {
            return None;
        }
        if residuals.worst() < params.tolerance {
            return Some(Outcome::Optimal);
        }
        if !residuals.worst().is_finite() {
            return Some(Outcome::Stalled);
        }
        if let Some(end) = self.infeasibility(figures) {
            return Some(end);
        }
        let size = |norm: f64, start: f64| norm > 1e15 * start.max(1.0);
        let x_norm: f64 = self.state.blocks.iter().map(|b| dense::frobenius(b.x.as_ref())).sum();
        let s_norm: f64 = self.state.blocks.iter().map(|b| norm_squared(&b.s).sqrt()).sum();
        if size(x_norm, self.start.x_norm) || size(s_norm, self.start.s_norm) {
            return Some(Outcome::Stalled);
        }
        let best = self.best.as_ref()?;
        if best.worst < 1e-6 {
            // Near the end rounding takes over: a clearly worse iterate will not recover.
            if iteration >= best.at + 3 && residuals.worst() > 30.0 * best.worst {
                return Some(Outcome::Stalled);
            }
            if iteration >= best.at + 5 {
                return Some(Outcome::Stalled);
            }
        }
        (iteration >= best.at + PATIENCE).then_some(Outcome::Stalled)
    }

    fn infeasibility(&self, figures: &Figures) -> Option<Outcome> {
        let state = &self.state;
        if figures.dual > 0.0 {
            // ||A*(y) + S|| = ||C - R_d||, bounded by the norms; both directions are cheap to bound.
            let c = self.c_norm;
            let rd = figures.residuals.dual * (1.0 + self.c_norm);
            if (c + rd) / figures.dual <= INFEASIBLE {
                return Some(Outcome::PrimalInfeasible);
            }
        }
        if figures.primal < 0.0 {
            let image: f64 =
                state.b.iter().zip(&state.rp).map(|(b, r)| (b - r) * (b - r)).sum::<f64>().sqrt();
            if image / -figures.primal <= INFEASIBLE {
                return Some(Outcome::DualInfeasible);
            }
        }
        None
    }

    fn trace(&self, figures: &Figures, meter: &mut Meter) {
        meter.trace(TracePoint {
            flops: 0,
            objective: Some(figures.primal * self.scaling.rhs * self.scaling.cost),
            residual: Some(figures.residuals.primal),
            tail: None,
        });
    }

    fn finish(mut self, outcome: Outcome, iterations: usize, params: &Params) -> Solution {
        let figures = self.figures();
        let mut residuals = figures.residuals;
        let mut outcome = outcome;
        if let Some(best) = self.best.take()
            && !best.points.is_empty()
            && best.worst < residuals.worst()
            && !matches!(outcome, Outcome::PrimalInfeasible | Outcome::DualInfeasible)
        {
            residuals = best.residuals;
            let parts = best.points.into_iter().zip(best.slacks);
            for (block, (x, s)) in self.state.blocks.iter_mut().zip(parts) {
                block.x = x;
                block.s = s;
            }
            self.state.x = best.x;
            self.state.z = best.z;
            self.state.y = best.y;
        }
        if outcome == Outcome::Stalled && residuals.worst() < params.tolerance {
            outcome = Outcome::Optimal;
        }
        let unit = self.scaling.rhs * self.scaling.cost;
        let final_figures = self.figures();
        let dual_value = unit * final_figures.dual;
        let primal_value = unit * final_figures.primal;
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
        debug_assert_eq!(points.len(), self.scaled.blocks().len());
        Solution {
            points,
            orthant: self.state.x.iter().map(|value| value * self.scaling.rhs).collect(),
            multipliers: self.scaling.multipliers(&self.state.y),
            slacks,
            info: Info { outcome, iterations, residuals, primal_value, dual_value },
        }
    }
}

fn copy_slack(from: &crate::problem::Slack, to: &mut crate::problem::Slack) {
    fill_identity(to, 0.0);
    super::iterate::add_scaled(1.0, from, to);
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
