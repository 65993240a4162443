//! The fast path for constraints that fix each diagonal entry: unit rows, no multipliers to iterate on.
//!
//! Each block is solved by itself. Stage 1 works at a width above the asked one when `lift` allows: Gauss-Seidel
//! sweeps (each row in turn gets its best unit vector; A. Javanmard, A. Montanari, F. Ricci-Tersenghi, PNAS
//! 113:E2218-E2223, 2016, from memory), a cut of the width to the numerical rank, then the trust-region Newton
//! method of [`trust`]; a certificate; and while that fails and the rank bound is not reached, twice the width
//! with the escape vector as a new column. Stage 2 brings the result to the asked width: its leading principal
//! columns, and random projections of it, rows normalised, each polished at the asked width (at width 1 by
//! sweeps, which are then single flips). From width 3 on a signed graph without frustration has no spurious
//! minimum (J. Markdahl, J. Thunberg, J. Goncalves, IEEE Transactions on Automatic Control 63:1664-1675, 2018,
//! from memory); at width 2 it may have winding states, so the lift starts at 3.

pub mod cost;
pub mod trust;

use super::certificate::{CertificateParams, least_eigenpair};
use super::start::{numerical_rank, principal, resized};
use super::{AlmParams, Lift, Schedule};
use crate::budget::{Halt, Meter, TracePoint};
use crate::linalg::lanczos::LanczosWorkspace;
use crate::linalg::vector::{axpy, dot};
use crate::problem::{BlockOperator, Factor};
use crate::seed::Stream;
use cost::SphereBlock;
use trust::{TrustEnd, TrustParams, TrustWorkspace};

/// Least width at which the lifted stage starts.
const LEAST_LIFT: usize = 3;
/// Sweeps end when one of them gains less than this share of the sum of row norms of the cost.
const SWEEP_GAIN: f64 = 1e-4;
/// Most sweeps before the trust-region method takes over.
const SWEEPS: usize = 60;
/// Eigenvalues of X above this share of the largest count when the width is cut after the sweeps.
const CUT_SHARE: f64 = 3e-3;
/// Columns kept beyond the numerical rank at that cut.
const CUT_SPARE: usize = 2;
/// Tolerance of the descent before the second cut, and the share of its cut: gradients of this size leave
/// eigenvalues of this share in columns that vanish at the solution.
const LOOSE: f64 = 1e-4;
/// See [`LOOSE`].
const LOOSE_SHARE: f64 = 1e-5;
/// Length of the escape column relative to the rows.
pub(super) const ESCAPE: f64 = 0.1;
/// Most widenings of the lifted stage.
const WIDENINGS: usize = 10;
/// Random projections tried at width 1 for each start that the caller grants.
const FLIPS_A_START: usize = 16;

/// What came out for one block.
#[derive(Clone, Debug)]
pub struct BlockOutcome {
    /// The factor, in the problem's units, of the asked width.
    pub factor: Factor,
    /// Multipliers of the block's constraints (constraint, value), from the stage with the best certificate.
    pub multipliers: Vec<(usize, f64)>,
    /// Objective of the factor.
    pub objective: f64,
    /// Least eigenvalue of the block's slack at these multipliers, unless the budget ended before.
    pub least: Option<f64>,
    /// Width of the lifted stage at its end.
    pub widest: usize,
    /// Points polished at the asked width.
    pub tried: usize,
    /// Why the block ended early, if it did.
    pub halt: Option<Halt>,
    /// Whether every descent met its tolerance.
    pub settled: bool,
}

/// Everything one block's solution works with.
pub(super) struct Solver<'a> {
    block: &'a SphereBlock,
    operator: &'a BlockOperator,
    params: &'a AlmParams,
    trust: TrustWorkspace,
    lanczos: LanczosWorkspace,
    pub(super) settled: bool,
    /// Whether this block is the whole problem, so that its objective makes a trace.
    traced: bool,
}

/// A point at some width with its objective.
#[derive(Clone, Debug)]
struct Candidate {
    q: Factor,
    objective: f64,
}

/// Whether a block is the whole problem.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Whole {
    /// It is.
    Yes,
    /// There are others.
    No,
}

/// Solves one block at `width`. Only a block that is the whole problem leaves a trace: its rows are
/// exact throughout, so the residual there is 0.
pub fn solve_block(
    block: &SphereBlock,
    operator: &BlockOperator,
    width: usize,
    whole: Whole,
    params: &AlmParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> BlockOutcome {
    let mut solver = Solver::new(block, operator, whole, params);
    let first = match params.lift {
        Lift::WhenNeeded => width.max(LEAST_LIFT.max(width + 1).min(rank_bound(block.order))),
        Lift::Never => width,
    };
    let mut lifted = solver.lifted(first, stream, meter);
    let widest = lifted.candidate.q.width;
    let mut best: Option<Candidate> = None;
    let mut tried = 0;
    if lifted.halt.is_none() && numerical_rank(&lifted.candidate.q, 1e-14) <= width {
        let objective = lifted.candidate.objective;
        best = Some(Candidate { q: resized(&lifted.candidate.q, width), objective });
    } else {
        // Stage 2 also runs when the budget has ended: the leading columns are then only normalised.
        let repeats = if width == 1 { FLIPS_A_START } else { 1 };
        for attempt in 0..(params.starts * repeats).max(1) {
            let mut q = match attempt {
                0 => resized(&lifted.candidate.q, width),
                _ if params.lift == Lift::Never => random_rows(block.order, width, stream),
                _ => projected(&lifted.candidate.q, width, stream),
            };
            normalise_rows(&mut q, stream);
            tried += 1;
            let halt = if lifted.halt.is_none() { solver.descend(&mut q, meter) } else { None };
            let objective = solver.objective(&q);
            if best.as_ref().is_none_or(|candidate| objective < candidate.objective) {
                best = Some(Candidate { q, objective });
            }
            lifted.halt = lifted.halt.or(halt);
            let reached = |o: f64| o - lifted.bound <= params.certificate * (1.0 + o.abs());
            if lifted.halt.is_some() || best.as_ref().is_some_and(|c| reached(c.objective)) {
                break;
            }
        }
    }
    let best = best.expect("at least one candidate was made");
    BlockOutcome {
        factor: stretched(best.q, block),
        multipliers: block.ids.iter().copied().zip(lifted.multipliers).collect(),
        objective: best.objective,
        least: lifted.least,
        widest,
        tried,
        halt: lifted.halt,
        settled: solver.settled,
    }
}

/// Descends from a given factor, in the problem's units, and certifies the result; widths stay.
pub fn refine_block(
    block: &SphereBlock,
    operator: &BlockOperator,
    factor: &Factor,
    whole: Whole,
    params: &AlmParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> BlockOutcome {
    let mut solver = Solver::new(block, operator, whole, params);
    let mut q = factor.clone();
    normalise_rows(&mut q, stream);
    let halt = solver.descend(&mut q, meter);
    let y = solver.multipliers(&q);
    let least = halt.is_none().then(|| solver.certify(&q, &y, meter).0);
    BlockOutcome {
        objective: solver.objective(&q),
        widest: q.width,
        tried: 1,
        factor: stretched(q, block),
        multipliers: block.ids.iter().copied().zip(y).collect(),
        least,
        halt,
        settled: solver.settled,
    }
}

/// Gives unit rows their lengths in the problem's units.
pub fn stretched(mut q: Factor, block: &SphereBlock) -> Factor {
    for i in 0..block.order {
        q.row_mut(i).iter_mut().for_each(|value| *value *= block.radii[i]);
    }
    q
}

/// Result of the lifted stage.
struct Lifted {
    candidate: Candidate,
    multipliers: Vec<f64>,
    bound: f64,
    least: Option<f64>,
    halt: Option<Halt>,
}

impl<'a> Solver<'a> {
    /// Takes memory for a block.
    pub(super) fn new(
        block: &'a SphereBlock,
        operator: &'a BlockOperator,
        whole: Whole,
        params: &'a AlmParams,
    ) -> Self {
        Solver {
            block,
            operator,
            params,
            trust: TrustWorkspace::default(),
            lanczos: LanczosWorkspace::new(),
            settled: true,
            traced: whole == Whole::Yes,
        }
    }
}

impl Solver<'_> {
    /// Stage 1: descends, certifies and widens.
    fn lifted(&mut self, first: usize, stream: &mut Stream, meter: &mut Meter) -> Lifted {
        let n = self.block.order;
        let limit = first.max(rank_bound(n));
        let mut q = random_rows(n, first, stream);
        let mut halt = None;
        let mut kept: Option<(f64, Vec<f64>, Option<f64>)> = None;
        let rounds = match self.params.schedule {
            Schedule::Double => WIDENINGS,
            Schedule::One => limit,
        };
        for round in 0..=rounds {
            // 1. Descend; cut the width twice, where it is cheap to be wrong: the certificate tells.
            let mut ended = self.sweeps(&mut q, meter).err();
            if round == 0 && first > LEAST_LIFT {
                cut(&mut q, CUT_SHARE, CUT_SPARE, stream);
                if ended.is_none() {
                    ended = self.trust_region(&mut q, LOOSE, meter);
                }
                cut(&mut q, LOOSE_SHARE, 0, stream);
            }
            if ended.is_none() {
                ended = self.trust_region(&mut q, self.params.stationarity, meter);
            }
            // 2. Certify.
            let objective = self.objective(&q);
            let y = self.multipliers(&q);
            let dual = self.dual(&y);
            if ended.is_some() {
                halt = ended;
                kept.get_or_insert((f64::NEG_INFINITY, y, None));
                break;
            }
            let (least, vector) = self.certify(&q, &y, meter);
            let bound = self.bound(dual, least);
            if kept.as_ref().is_none_or(|(best, _, _)| bound > *best) {
                kept = Some((bound, y, Some(least)));
            }
            let certified = objective - bound <= self.params.certificate * (1.0 + objective.abs());
            let last = q.width >= limit && round > 1;
            if certified || last || self.params.lift == Lift::Never || round == rounds {
                break;
            }
            // 3. Widen along the escape vector; the other new columns get a little noise.
            let room = 8 * 12 * (n * (2 * q.width + 1)) as u64;
            if let Err(reason) = meter.check_room(room) {
                halt = Some(reason);
                break;
            }
            let width = self.params.schedule.next(q.width).min(limit).max(q.width + 1);
            q = widened(&q, width, &vector, ESCAPE, stream);
        }
        let (bound, multipliers, least) = kept.expect("the first round keeps its multipliers");
        let objective = self.objective(&q);
        Lifted { candidate: Candidate { q, objective }, multipliers, bound, least, halt }
    }

    /// Returns the lower bound of the block's objective from the dual value and the least eigenvalue of its slack.
    pub(super) fn bound(&self, dual: f64, least: f64) -> f64 {
        let trace: f64 = self.block.radii.iter().map(|s| s * s).sum();
        dual + trace * least.min(0.0)
    }

    /// Returns the dual value `sum_i y_i b_i` over the block's constraints.
    pub(super) fn dual(&self, y: &[f64]) -> f64 {
        dot_radii(self.block, y)
    }

    /// Brings a point to a minimiser at its width; returns why it ended early, if it did.
    pub(super) fn descend(&mut self, q: &mut Factor, meter: &mut Meter) -> Option<Halt> {
        if let Err(halt) = self.sweeps(q, meter) {
            return Some(halt);
        }
        if q.width == 1 { None } else { self.trust_region(q, self.params.stationarity, meter) }
    }

    fn sweeps(&self, q: &mut Factor, meter: &mut Meter) -> Result<(), Halt> {
        let mut image = vec![0.0; q.width];
        let mut objective = if self.traced { self.objective(q) } else { 0.0 };
        let (mut count, flat) = (0, q.width == 1);
        loop {
            meter.check()?;
            let fall = self.block.sweep(&mut q.data, q.width, &mut image);
            count += 1;
            meter.effort.inner_steps += 1;
            meter.effort.operator_products += 1;
            meter.effort.flops += self.block.flops(q.width);
            if self.traced {
                objective -= fall;
                let point = TracePoint { objective: Some(objective), ..TracePoint::default() };
                meter.trace(TracePoint { residual: Some(0.0), ..point });
            }
            let done = if flat { fall <= 0.0 } else { fall <= SWEEP_GAIN * self.block.scale() };
            if done || (!flat && count >= SWEEPS) || count >= 100 * SWEEPS {
                return Ok(());
            }
        }
    }

    fn trust_region(&mut self, q: &mut Factor, tolerance: f64, meter: &mut Meter) -> Option<Halt> {
        let params = TrustParams {
            tolerance: tolerance.max(self.params.stationarity),
            outer: self.params.outer * 4,
            inner: self.params.inner,
            constant: self.traced.then(|| self.block.constant()),
        };
        let ended =
            trust::minimise(self.block, &mut q.data, q.width, &params, &mut self.trust, meter);
        match ended {
            TrustEnd::Halted(halt) => return Some(halt),
            TrustEnd::Limit => self.settled = false,
            TrustEnd::Converged | TrustEnd::Stalled => {}
        }
        None
    }

    fn image(&self, q: &Factor) -> Factor {
        let mut image = Factor::zeros(q.order, q.width);
        self.block.product(&q.data, q.width, &mut image.data);
        image
    }

    pub(super) fn objective(&self, q: &Factor) -> f64 {
        dot(&q.data, &self.image(q).data) + self.block.constant()
    }

    /// Returns the multipliers `(C_ii + q_i.(CQ)_i / s_i^2) / a_i` of the rows.
    pub(super) fn multipliers(&self, q: &Factor) -> Vec<f64> {
        let image = self.image(q);
        (0..q.order)
            .map(|i| {
                let row: f64 = q.row(i).iter().zip(image.row(i)).map(|(a, b)| a * b).sum();
                let square = self.block.radii[i].powi(2);
                (self.block.diagonal[i] + row / square) / self.block.coefficients[i]
            })
            .collect()
    }

    /// Returns the least eigenvalue of the slack and its vector.
    pub(super) fn certify(&mut self, q: &Factor, y: &[f64], meter: &mut Meter) -> (f64, Vec<f64>) {
        let mut factor = q.clone();
        for i in 0..q.order {
            factor.row_mut(i).iter_mut().for_each(|value| *value *= self.block.radii[i]);
        }
        let largest = self.block.ids.iter().max().map_or(0, |id| id + 1);
        let mut all = vec![0.0; largest];
        for (id, value) in self.block.ids.iter().zip(y) {
            all[*id] = *value;
        }
        let mut slack = self.operator.slack();
        self.operator.fill_slack(&all, 1.0, &mut slack);
        let settings = CertificateParams::default();
        least_eigenpair(self.operator, &slack, &factor, &settings, &mut self.lanczos, meter)
    }
}

/// Least p with p(p+1)/2 > n, at most n: the rank bound of n diagonal constraints, plus one.
pub fn rank_bound(n: usize) -> usize {
    let mut p = 1;
    while p < n && p * (p + 1) / 2 <= n {
        p += 1;
    }
    p
}

fn dot_radii(block: &SphereBlock, y: &[f64]) -> f64 {
    (0..block.order).map(|i| y[i] * block.coefficients[i] * block.radii[i].powi(2)).sum()
}

pub(super) fn random_rows(order: usize, width: usize, stream: &mut Stream) -> Factor {
    let mut q = Factor::zeros(order, width);
    q.data.iter_mut().for_each(|value| *value = stream.normal());
    normalise_rows(&mut q, stream);
    q
}

/// Cuts the width to the eigenvalues of X above `share` of the largest and `spare` columns more.
fn cut(q: &mut Factor, share: f64, spare: usize, stream: &mut Stream) {
    let width = (numerical_rank(q, share) + spare).max(LEAST_LIFT);
    if width < q.width {
        *q = resized(q, width);
        normalise_rows(q, stream);
    }
}

/// Projects the rows of a point on random directions: returns `Q G`, G Gaussian of `width` columns (M. Goemans and D. Williamson,
/// Journal of the ACM 42:1115-1145, 1995, for width 1).
pub fn projected(q: &Factor, width: usize, stream: &mut Stream) -> Factor {
    let turn: Vec<f64> = (0..q.width * width).map(|_| stream.normal()).collect();
    let mut out = Factor::zeros(q.order, width);
    for i in 0..q.order {
        let target = &mut out.data[i * width..][..width];
        for (value, row) in q.row(i).iter().zip(turn.chunks_exact(width)) {
            axpy(*value, row, target);
        }
    }
    out
}

/// Gives every row norm 1; rows that vanish are drawn anew.
pub fn normalise_rows(q: &mut Factor, stream: &mut Stream) {
    for i in 0..q.order {
        let row = q.row_mut(i);
        while dot(row, row) <= 1e-24 || dot(row, row).is_nan() {
            row.iter_mut().for_each(|value| *value = stream.normal());
        }
        let inverse = 1.0 / dot(row, row).sqrt();
        row.iter_mut().for_each(|value| *value *= inverse);
    }
}

/// Appends columns: the first is the escape vector with largest entry `length`, the others noise; then normalises rows.
pub(super) fn widened(
    q: &Factor,
    width: usize,
    escape: &[f64],
    length: f64,
    stream: &mut Stream,
) -> Factor {
    let base = principal(q).map_or_else(|| q.clone(), |(_, turned)| turned);
    let mut out = Factor::zeros(q.order, width);
    let largest = escape.iter().fold(0.0_f64, |m, v| m.max(v.abs())).max(f64::MIN_POSITIVE);
    for i in 0..q.order {
        let row = out.row_mut(i);
        row[..q.width].copy_from_slice(base.row(i));
        row[q.width] = length * escape[i] / largest;
        for value in &mut row[q.width + 1..] {
            *value = 0.1 * length * stream.normal() / (width as f64).sqrt();
        }
    }
    normalise_rows(&mut out, stream);
    out
}
