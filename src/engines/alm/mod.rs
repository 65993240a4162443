//! The factored augmented Lagrangian engine: X_k = R_k R_k', x = u o u.
//!
//! Two paths. Constraints that fix each diagonal entry once are handled with unit rows ([`spheres`]); every
//! other problem by an augmented Lagrangian with limited-memory BFGS and an exact line search
//! ([`descent`], [`lagrangian`], [`quartic`]), finished by [`crate::engines::newton`]. Both end with the least
//! eigenvalue of the slack ([`certificate`]). The engine knows no rank target beyond the widths it is given
//! and does not truncate its answer.

pub mod certificate;
pub mod descent;
mod general;
pub mod lagrangian;
pub mod pivoted;
pub mod quartic;
pub mod spheres;
pub mod staircase;
pub mod start;
mod truncated;

#[cfg(test)]
pub(crate) mod tests;

use crate::budget::{Halt, Meter};
use crate::linalg::vector::{distance, dot, norm2};
use crate::problem::{Factor, Operator, Problem, StopReason};
use crate::seed::Stream;
use certificate::{Certificate, CertificateParams, certify};
pub use descent::InnerSolver;
use spheres::cost::{SphereBlock, recognise};
use spheres::{BlockOutcome, Whole};

/// Whether the engine may work at a greater width for a while.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Lift {
    /// When no point at the given widths is certified (general path), or from the start (unit rows).
    WhenNeeded,
    /// Never.
    Never,
}

/// Whether the general path ends with Newton steps.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Finish {
    /// It does, from a residual of 1e-5 on.
    Newton,
    /// It does not; the augmented Lagrangian iterates to the end.
    Plain,
}

/// How widths grow.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Schedule {
    /// Twofold.
    Double,
    /// By one column.
    One,
}

impl Schedule {
    /// Returns the width after `width`.
    pub fn next(self, width: usize) -> usize {
        match self {
            Schedule::Double => (2 * width).max(width + 1),
            Schedule::One => width + 1,
        }
    }
}

/// Settings of the engine.
#[derive(Clone, Debug)]
pub struct AlmParams {
    /// Width of each block's factor.
    pub widths: Vec<usize>,
    /// Random starts before giving up on a certificate.
    pub starts: usize,
    /// Whether greater widths are used on the way.
    pub lift: Lift,
    /// How the general path ends.
    pub finish: Finish,
    /// Accepts ||A(X) - b||_2 <= feasibility * (1 + ||b||_2), in scaled data.
    pub feasibility: f64,
    /// Accepts ||gradient||_2 <= stationarity * (1 + ||z||_2) in scaled data (general path), or
    /// ||S Q||_F <= stationarity * ||y||_2 (unit rows).
    pub stationarity: f64,
    /// Calls a point certified when its gap (see [`Certificate::gap`]) is at most this.
    pub certificate: f64,
    /// Most outer steps of one descent (a quarter of the trust-region steps of the unit-row path).
    pub outer: usize,
    /// Most inner steps of one outer step.
    pub inner: usize,
    /// Pairs of the quasi-Newton memory.
    pub pairs: usize,
    /// Inner solver of the general path; the path with unit rows has its own.
    pub solver: InnerSolver,
    /// How the width grows.
    pub schedule: Schedule,
}

impl AlmParams {
    /// Returns the defaults for the given widths.
    pub fn with_widths(widths: Vec<usize>) -> Self {
        AlmParams {
            widths,
            starts: 3,
            lift: Lift::WhenNeeded,
            finish: Finish::Newton,
            feasibility: 1e-9,
            stationarity: 1e-9,
            certificate: 1e-7,
            outer: 60,
            inner: 2000,
            pairs: 8,
            solver: InnerSolver::Lbfgs,
            schedule: Schedule::Double,
        }
    }
}

/// Why the engine returns nothing.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum AlmError {
    /// The budget ended before there was a point.
    #[error(transparent)]
    Halted(#[from] Halt),
    /// Every start ran off to infinity.
    #[error("all {starts} starts diverged; the objective may be unbounded below")]
    Diverged {
        /// Number of starts.
        starts: usize,
    },
}

/// What a run did.
#[derive(Clone, Debug)]
pub struct AlmInfo {
    /// Objective of the point.
    pub objective: f64,
    /// ||A(X) - b||_2 / (1 + ||b||_2).
    pub feasibility: f64,
    /// The certificate of the point with the multipliers returned, when the budget allowed one.
    pub certificate: Option<Certificate>,
    /// Best lower bound of the relaxation met on the way (with the trace of its point), when there is one.
    pub bound: Option<f64>,
    /// Starts used.
    pub starts: usize,
    /// Largest width used on the way.
    pub widest: usize,
    /// Why the engine stopped.
    pub stop: StopReason,
}

/// A point with its multipliers.
#[derive(Clone, Debug)]
pub struct AlmSolution {
    /// Factors, of the widths asked for.
    pub factors: Vec<Factor>,
    /// Nonnegative part.
    pub orthant: Vec<f64>,
    /// Multipliers y with S = C - A*(y).
    pub multipliers: Vec<f64>,
    /// What the run did.
    pub info: AlmInfo,
}

/// Solves `problem` at the widths of `params`.
///
/// # Errors
/// [`AlmError`]: the budget ended before there was a point, or nothing finite was found.
#[track_caller]
pub fn solve(
    problem: &Problem,
    op: &Operator,
    params: &AlmParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<AlmSolution, AlmError> {
    assert_eq!(params.widths.len(), problem.blocks().len(), "one width a block");
    match recognise(problem, &op.blocks) {
        Some(blocks) => by_blocks(problem, op, &blocks, |k, whole| {
            let (operator, width) = (&op.blocks[k], params.widths[k]);
            spheres::solve_block(&blocks[k], operator, width, whole, params, stream, meter)
        }),
        None => general::solve(problem, op, params, stream, meter),
    }
}

/// Descends from a given point at the widths of its factors, without random starts, lift or escapes.
///
/// # Errors
/// As [`solve`].
pub fn refine(
    problem: &Problem,
    op: &Operator,
    start: &Start<'_>,
    params: &AlmParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<AlmSolution, AlmError> {
    match recognise(problem, &op.blocks) {
        Some(blocks) => by_blocks(problem, op, &blocks, |k, whole| {
            let (operator, factor) = (&op.blocks[k], &start.factors[k]);
            spheres::refine_block(&blocks[k], operator, factor, whole, params, stream, meter)
        }),
        None => general::refine(problem, op, start, params, meter),
    }
}

/// A point to start from.
#[derive(Clone, Copy, Debug)]
pub struct Start<'a> {
    /// One factor a block.
    pub factors: &'a [Factor],
    /// Nonnegative part.
    pub orthant: &'a [f64],
    /// Multipliers, zero when unknown; unit rows need none.
    pub multipliers: &'a [f64],
}

/// Puts the outcomes of independent blocks with unit rows together.
fn by_blocks(
    problem: &Problem,
    op: &Operator,
    blocks: &[SphereBlock],
    mut outcome_of: impl FnMut(usize, Whole) -> BlockOutcome,
) -> Result<AlmSolution, AlmError> {
    let mut factors = Vec::new();
    let mut multipliers = vec![0.0; op.constraints()];
    let mut info = AlmInfo {
        objective: 0.0,
        feasibility: 0.0,
        certificate: None,
        bound: None,
        starts: 0,
        widest: 0,
        stop: StopReason::Converged,
    };
    let mut least = Some(f64::INFINITY);
    let whole = if blocks.len() == 1 { Whole::Yes } else { Whole::No };
    for k in 0..blocks.len() {
        let outcome = outcome_of(k, whole);
        for (id, value) in outcome.multipliers {
            multipliers[id] = value;
        }
        info.objective += outcome.objective;
        least = least.zip(outcome.least).map(|(a, b)| a.min(b));
        info.starts = info.starts.max(outcome.tried.max(1));
        info.widest = info.widest.max(outcome.widest);
        if !outcome.settled {
            info.stop = StopReason::IterationLimit;
        }
        if let Some(halt) = outcome.halt {
            info.stop = stop_of(&halt)?;
        }
        factors.push(outcome.factor);
    }
    info.feasibility = relative_residual(problem, op, &factors, &[]);
    info.certificate = least.map(|least| {
        // The slack depends on the multipliers alone, so the eigenvalues found on the way are those of the end.
        let dual = dot(problem.rhs(), &multipliers);
        let trace: f64 = factors.iter().map(|factor| dot(&factor.data, &factor.data)).sum();
        let drop = trace * least.min(0.0);
        let gap = ((info.objective - dual).abs() - drop) / (1.0 + info.objective.abs());
        Certificate { least, escape: None, gap, bound: dual + drop }
    });
    info.bound = info.certificate.as_ref().map(|found| found.bound);
    Ok(AlmSolution { factors, orthant: Vec::new(), multipliers, info })
}

/// Turns a halt into the stop reason of an answer that exists.
///
/// # Errors
/// The halt itself, when it is no limit but an interruption, say.
pub fn stop_of(halt: &Halt) -> Result<StopReason, Halt> {
    match halt {
        Halt::TimeLimit => Ok(StopReason::TimeLimit),
        Halt::MemoryLimit => Ok(StopReason::MemoryLimit),
        other => Err(other.clone()),
    }
}

/// Measures the residual, and the certificate unless the budget has ended.
fn finish_info(
    problem: &Problem,
    op: &Operator,
    factors: &[Factor],
    orthant: &[f64],
    y: &[f64],
    meter: &mut Meter,
    info: &mut AlmInfo,
) {
    info.feasibility = relative_residual(problem, op, factors, orthant);
    if meter.check().is_ok() {
        let settings = CertificateParams::default();
        let found = certify(problem, op, factors, orthant, y, &settings, meter);
        info.bound = Some(info.bound.map_or(found.bound, |bound| bound.max(found.bound)));
        info.certificate = Some(found);
    }
}

/// Returns ||A(X) + a(x) - b||_2 / (1 + ||b||_2).
fn relative_residual(problem: &Problem, op: &Operator, factors: &[Factor], orthant: &[f64]) -> f64 {
    let mut values = vec![0.0; op.constraints()];
    op.apply_factors(factors, orthant, &mut values);
    distance(&values, problem.rhs()) / (1.0 + norm2(problem.rhs()))
}
