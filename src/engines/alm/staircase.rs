//! The staircase: second-order points at growing widths, until one is certified.
//!
//! At a point of width p with a negative direction u of its slack, [R, 0] is a saddle of the problem of width p + 1: along
//! [0, u] the objective falls by t^2 |u'Su|, and a new descent starts there. It ends when the least eigenvalue of S proves the
//! point optimal for the relaxation, or at the greatest width. Source: N. Boumal, A Riemannian low-rank method for
//! optimization over semidefinite matrices with block-diagonal constraints, arXiv:1506.00575, 2015; N. Boumal, V. Voroninski,
//! A. Bandeira, Communications on Pure and Applied Mathematics 73:581-608, 2020 (bibliographic data from memory). Unit rows
//! are descended on by the trust-region method of [`super::spheres`], as in the source; general constraints by the augmented
//! Lagrangian of `general`, which is ours. At the end [`decreased`] takes spare columns away.

use super::certificate::{CertificateParams, least_eigenpair};
use super::descent::FIRST_SIGMA;
use super::general::{Candidate, FEASIBLE, Run, width_limits};
use super::lagrangian::Lagrangian;
use super::pivoted::decreased;
use super::spheres::cost::{SphereBlock, recognise};
use super::spheres::{BlockOutcome, ESCAPE, Solver, Whole, normalise_rows, random_rows};
use super::spheres::{rank_bound, stretched, widened};
use super::start::{numerical_rank, random, resized};
use super::{AlmError, AlmParams, AlmSolution, by_blocks};
use crate::budget::{Halt, Meter};
use crate::linalg::lanczos::LanczosWorkspace;
use crate::linalg::vector::norm2;
use crate::problem::{BlockOperator, Factor, Operator, Problem};
use crate::seed::Stream;

/// Halvings of an escape until the objective falls.
const HALVINGS: usize = 30;
/// Remainders of rows up to this share of the longest go when the rank is decreased.
const SPARE: f64 = 1e-6;
/// Columns that hold at most this share of the largest eigenvalue of RR' take the escape, so that the width stays.
const EMPTY: f64 = 1e-9;

/// Whether spare columns are taken away from a certified point.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Decrease {
    /// By QR with pivoting, and a descent at the lower width; kept when that is certified too.
    PivotedQr,
    /// Never.
    Never,
}

/// Settings beside those of the engine, whose widths are the first ones here.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct ClimbParams {
    /// Greatest width of any block; the least p with p(p+1)/2 > m when there is none. Never above the order.
    pub most: Option<usize>,
    /// Whether spare columns go at the end.
    pub decrease: Decrease,
}

/// Climbs from the widths of `params`, one random start, by its schedule. The factors of the solution have the widths at
/// which it ended; `info.widest` is the greatest one used.
///
/// # Errors
/// As [`super::solve`].
pub fn climb(
    problem: &Problem,
    op: &Operator,
    params: &AlmParams,
    climb: &ClimbParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<AlmSolution, AlmError> {
    match recognise(problem, &op.blocks) {
        Some(blocks) => by_blocks(problem, op, &blocks, |k, whole| {
            let (operator, width) = (&op.blocks[k], params.widths[k]);
            climb_block(&blocks[k], operator, width, whole, params, climb, stream, meter)
        }),
        None => climb_general(problem, op, params, climb, stream, meter),
    }
}

fn climb_block(
    block: &SphereBlock,
    operator: &BlockOperator,
    width: usize,
    whole: Whole,
    params: &AlmParams,
    climb: &ClimbParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> BlockOutcome {
    let most = climb.most.unwrap_or(rank_bound(block.order)).min(block.order).max(width);
    let mut solver = Solver::new(block, operator, whole, params);
    let mut q = random_rows(block.order, width, stream);
    let (mut widest, mut tried) = (width, 0);
    let mut state;
    loop {
        // 1. A second-order point, its multipliers and bound.
        let halt = solver.descend(&mut q, meter);
        state = Level::of(&mut solver, &q, halt, meter);
        tried += 1;
        if state.halt.is_some() || state.certified(params.certificate) || q.width >= most {
            break;
        }
        // 2. The way off: the escape as a new column, halved until the objective falls.
        let wider = params.schedule.next(q.width).min(most);
        if let Err(reason) = meter.check_room(8 * 12 * (block.order * wider) as u64) {
            state.halt = Some(reason);
            break;
        }
        let mut length = ESCAPE;
        let mut next = widened(&q, wider, &state.vector, length, stream);
        for _ in 0..HALVINGS {
            if solver.objective(&next) < state.objective {
                break;
            }
            length *= 0.5;
            next = widened(&q, wider, &state.vector, length, stream);
        }
        q = next;
        widest = wider;
    }
    if climb.decrease == Decrease::PivotedQr && state.certified(params.certificate) {
        let mut narrow = decreased(&q, SPARE);
        if narrow.width < q.width {
            normalise_rows(&mut narrow, stream);
            let halt = solver.descend(&mut narrow, meter);
            let lower = Level::of(&mut solver, &narrow, halt, meter);
            if lower.certified(params.certificate) {
                (q, state) = (narrow, lower);
            }
        }
    }
    BlockOutcome {
        factor: stretched(q, block),
        multipliers: block.ids.iter().copied().zip(state.y).collect(),
        objective: state.objective,
        least: state.least,
        widest,
        tried,
        halt: state.halt,
        settled: solver.settled,
    }
}

/// A second-order point with what proves it or leads on.
struct Level {
    y: Vec<f64>,
    objective: f64,
    bound: f64,
    least: Option<f64>,
    vector: Vec<f64>,
    halt: Option<Halt>,
}

impl Level {
    fn of(solver: &mut Solver<'_>, q: &Factor, halt: Option<Halt>, meter: &mut Meter) -> Self {
        let (objective, y) = (solver.objective(q), solver.multipliers(q));
        let (mut bound, mut least, mut vector) = (f64::NEG_INFINITY, None, Vec::new());
        if halt.is_none() {
            let (value, found) = solver.certify(q, &y, meter);
            bound = solver.bound(solver.dual(&y), value);
            (least, vector) = (Some(value), found);
        }
        Level { y, objective, bound, least, vector, halt }
    }

    fn certified(&self, tolerance: f64) -> bool {
        self.objective - self.bound <= tolerance * (1.0 + self.objective.abs())
    }
}

fn climb_general(
    problem: &Problem,
    op: &Operator,
    params: &AlmParams,
    climb: &ClimbParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<AlmSolution, AlmError> {
    let limits = width_limits(problem);
    let limits: Vec<usize> = (problem.blocks().iter().zip(limits).zip(&params.widths))
        .map(|((block, limit), width)| climb.most.unwrap_or(limit).min(block.order).max(*width))
        .collect();
    let mut run = Run::new(problem, op, params, meter);
    let mut widths = params.widths.clone();
    let mut l = Lagrangian::new(problem, op, &widths);
    random(&mut l, stream);
    l.sigma = FIRST_SIGMA;
    let mut current = run.descend(l);
    while let Some(mut candidate) = current.take() {
        // 1. Proved, out of time, or on.
        let found = run.halt.is_none().then(|| run.certify(&candidate));
        let feasible = candidate.feasibility <= FEASIBLE;
        let proved =
            feasible && found.as_ref().is_some_and(|found| found.gap <= params.certificate);
        let mut way = found.filter(|_| !proved).and_then(|found| found.escape);
        if way.is_none() && !feasible && run.halt.is_none() {
            // Multipliers that ran off while the residual stayed hide the objective; without them the residual alone
            // shows the way.
            candidate.y.fill(0.0);
            way = towards_feasibility(&mut run, &candidate);
        }
        let next = way
            .and_then(|(block, u)| step_up(&mut run, &candidate, block, &u, &mut widths, &limits));
        let Some(next) = next else {
            let lower = (proved && climb.decrease == Decrease::PivotedQr)
                .then(|| narrowed(&mut run, &candidate))
                .flatten();
            let last = lower.unwrap_or(candidate);
            if proved || run.best.as_ref().is_none_or(|best| last.better_than(best)) {
                run.best = Some(last);
            }
            break;
        };
        // 2. The best point so far is the answer when the budget ends on the way.
        if run.best.as_ref().is_none_or(|best| candidate.better_than(best)) {
            run.best = Some(candidate);
        }
        current = run.descend(next);
    }
    run.answer()
}

/// Returns block and vector along which a new column lowers ||A(X) - b|| fastest: the least eigenpair of A*(A(X) - b), when
/// it is negative. At a stationary point of the residual that is no solution there is one unless no X is feasible at all.
fn towards_feasibility(run: &mut Run<'_, '_>, candidate: &Candidate) -> Option<(usize, Vec<f64>)> {
    let mut weights = vec![0.0; run.op.constraints()];
    run.op.apply_factors(&candidate.factors, &candidate.orthant, &mut weights);
    for (weight, b) in weights.iter_mut().zip(run.problem.rhs()) {
        *weight = b - *weight;
    }
    let (settings, mut workspace) = (CertificateParams::default(), LanczosWorkspace::new());
    let mut best: Option<(f64, usize, Vec<f64>)> = None;
    for (k, block) in run.op.blocks.iter().enumerate() {
        let mut slack = block.slack();
        block.fill_slack(&weights, 0.0, &mut slack);
        let factor = &candidate.factors[k];
        let (value, vector) =
            least_eigenpair(block, &slack, factor, &settings, &mut workspace, run.meter);
        if value < best.as_ref().map_or(0.0, |(least, _, _)| *least) {
            best = Some((value, k, vector));
        }
    }
    best.map(|(_, block, vector)| (block, vector))
}

/// Puts the escape vector into a column that is empty, or into a new one, at the length that lowers the Lagrangian
/// most; none at the greatest width.
fn step_up<'a>(
    run: &mut Run<'a, '_>,
    candidate: &Candidate,
    block: usize,
    vector: &[f64],
    widths: &mut [usize],
    limits: &[usize],
) -> Option<Lagrangian<'a>> {
    let width = widths[block];
    let empty = numerical_rank(&candidate.factors[block], EMPTY) < width;
    if !empty {
        let wider = run.params.schedule.next(width).min(limits[block]);
        if wider == width || run.meter.check().is_err() {
            return None;
        }
        widths[block] = wider;
        run.widest = run.widest.max(wider);
    }
    let mut factors = candidate.factors.clone();
    let column = if empty {
        // Principal columns are in ascending order: the first is the emptiest.
        factors[block] = super::start::principal(&candidate.factors[block])?.1;
        0
    } else {
        factors[block] = resized(&candidate.factors[block], widths[block]);
        width
    };
    let mut l = Lagrangian::new(run.problem, run.op, widths);
    l.import(&factors, &candidate.orthant, &candidate.y);
    l.sigma = FIRST_SIGMA;
    let mut direction = vec![0.0; l.layout.length()];
    let start = l.layout.ranges[block].start;
    for (i, value) in vector.iter().enumerate() {
        direction[start + i * widths[block] + column] = *value;
    }
    // Along [0, u] the Lagrangian is q2 t^2 + q4 t^4, but for what an empty column still holds.
    let q = l.line(&direction);
    let exact = (-0.5 * q[1] / q[3]).sqrt();
    let length = if exact.is_finite() && exact > 0.0 { exact } else { 0.1 * norm2(&l.z) };
    l.advance(length, &direction);
    l.refresh();
    Some(l)
}

/// Takes spare columns away and descends again; none when nothing is spared or the result is not as good.
fn narrowed(run: &mut Run<'_, '_>, candidate: &Candidate) -> Option<Candidate> {
    let factors: Vec<Factor> = candidate.factors.iter().map(|f| decreased(f, SPARE)).collect();
    let widths: Vec<usize> = factors.iter().map(|factor| factor.width).collect();
    if factors.iter().zip(&candidate.factors).all(|(a, b)| a.width == b.width) {
        return None;
    }
    let mut l = Lagrangian::new(run.problem, run.op, &widths);
    l.import(&factors, &candidate.orthant, &candidate.y);
    l.sigma = candidate.sigma;
    let lower = run.descend(l)?;
    let certified = run.halt.is_none()
        && lower.feasibility <= FEASIBLE
        && run.certify(&lower).gap <= run.params.certificate;
    certified.then_some(lower)
}
