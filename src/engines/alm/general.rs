//! The general path: starts, lift, truncation, and which point is returned.

use super::certificate::{Certificate, CertificateParams, certify};
use super::descent::{DescentEnd, DescentParams, DescentWorkspace, descend};
use super::lagrangian::Lagrangian;
use super::start::{principal, random, resized};
use super::{AlmError, AlmInfo, AlmParams, AlmSolution, Finish, Lift, Start, finish_info, stop_of};
use crate::budget::{Halt, Meter};
use crate::engines::newton::{NewtonEnd, NewtonParams, polish};
use crate::linalg::vector::norm2;
use crate::problem::{Factor, Operator, Problem, StopReason};
use crate::seed::Stream;

/// Residual and gradient at which Newton steps take over.
const HAND_OVER: f64 = 1e-5;
/// Newton steps are tried when residual and gradient are at most this: farther away the point is a stationary
/// one that violates the constraints, and no step leads on.
const PROMISING: f64 = 1e-3;
/// A point is feasible for the choice between points when its residual is at most this.
pub(super) const FEASIBLE: f64 = 1e-7;
/// A wide point that is not finished is truncated at once when the eigenvalues dropped are at most this share of
/// the trace.
const LOW_SHARE: f64 = 0.1;
/// Most escapes along a negative eigenvector at one width.
const ESCAPES: usize = 4;

/// A point with everything the choice between points needs.
#[derive(Clone, Debug)]
pub(super) struct Candidate {
    pub(super) factors: Vec<Factor>,
    pub(super) orthant: Vec<f64>,
    pub(super) y: Vec<f64>,
    pub(super) objective: f64,
    pub(super) feasibility: f64,
    converged: bool,
    /// Penalty at the end of the descent.
    pub(super) sigma: f64,
}

impl Candidate {
    /// Feasible before infeasible, then the lower objective, or the smaller residual.
    pub(super) fn better_than(&self, other: &Candidate) -> bool {
        match (self.feasibility <= FEASIBLE, other.feasibility <= FEASIBLE) {
            (true, true) => self.objective < other.objective,
            (true, false) => true,
            (false, true) => false,
            (false, false) => self.feasibility < other.feasibility,
        }
    }
}

/// The run: problem, settings and budget in one place.
pub(super) struct Run<'a, 'm> {
    pub(super) problem: &'a Problem,
    pub(super) op: &'a Operator,
    pub(super) params: &'a AlmParams,
    pub(super) meter: &'m mut Meter,
    pub(super) halt: Option<Halt>,
    pub(super) best: Option<Candidate>,
    /// Best bound met, with the multipliers that gave it.
    bound: Option<(f64, Vec<f64>)>,
    starts: usize,
    pub(super) widest: usize,
}

/// Solves a problem by the augmented Lagrangian.
pub fn solve(
    problem: &Problem,
    op: &Operator,
    params: &AlmParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<AlmSolution, AlmError> {
    let mut run = Run::new(problem, op, params, meter);
    // 1. One random start at the widths asked for.
    let mut certified = run.start_randomly(&params.widths, stream);
    // 2. A lift: solve wider, truncate, solve again.
    if !certified && run.halt.is_none() && params.lift == Lift::WhenNeeded {
        certified = run.lifted(stream);
    }
    // 3. More random starts.
    while !certified && run.starts < params.starts && run.halt.is_none() {
        run.starts += 1;
        certified = run.start_randomly(&params.widths, stream);
    }
    run.answer()
}

/// Descends from a given point at the widths of its factors.
pub fn refine(
    problem: &Problem,
    op: &Operator,
    start: &Start<'_>,
    params: &AlmParams,
    meter: &mut Meter,
) -> Result<AlmSolution, AlmError> {
    let widths: Vec<usize> = start.factors.iter().map(|factor| factor.width).collect();
    let mut run = Run::new(problem, op, params, meter);
    run.widest = widths.iter().copied().max().unwrap_or(0);
    let mut l = Lagrangian::new(problem, op, &widths);
    l.import(start.factors, start.orthant, start.multipliers);
    l.sigma = super::descent::FIRST_SIGMA;
    run.best = run.descend(l);
    run.answer()
}

impl<'a, 'm> Run<'a, 'm> {
    /// Begins a run with nothing found; it will make one start at least.
    pub(super) fn new(
        problem: &'a Problem,
        op: &'a Operator,
        params: &'a AlmParams,
        meter: &'m mut Meter,
    ) -> Self {
        let widest = params.widths.iter().copied().max().unwrap_or(0);
        Run { problem, op, params, meter, halt: None, best: None, bound: None, starts: 1, widest }
    }
}

impl Run<'_, '_> {
    /// Descends from a random point; true when it is certified.
    fn start_randomly(&mut self, widths: &[usize], stream: &mut Stream) -> bool {
        let mut l = Lagrangian::new(self.problem, self.op, widths);
        random(&mut l, stream);
        l.sigma = super::descent::FIRST_SIGMA;
        let Some(candidate) = self.descend(l) else {
            return false;
        };
        self.judge(candidate, widths)
    }

    fn descent_params(&self, least: f64) -> DescentParams {
        let p = self.params;
        DescentParams {
            feasibility: p.feasibility.max(least),
            stationarity: p.stationarity.max(least),
            outer: p.outer,
            inner: p.inner,
            pairs: p.pairs,
            solver: p.solver,
        }
    }

    /// Descends to the hand-over tolerance only; none when that runs off.
    fn descend_loosely(&mut self, l: &mut Lagrangian<'_>) -> Option<Candidate> {
        let params = self.descent_params(HAND_OVER);
        let mut ws = DescentWorkspace::new(l.layout.length(), params.pairs);
        match descend(self.problem, l, &params, &mut ws, self.meter).end {
            DescentEnd::Halted(halt) => self.halt = Some(halt),
            DescentEnd::Diverged => return None,
            DescentEnd::Converged | DescentEnd::Limit => {}
        }
        Some(self.candidate(l, false))
    }

    /// Descends from a loaded Lagrangian, finishes by Newton steps.
    pub(super) fn descend(&mut self, mut l: Lagrangian<'_>) -> Option<Candidate> {
        let p = self.params;
        let loose = p.finish == Finish::Newton;
        let mut params = self.descent_params(if loose { HAND_OVER } else { 0.0 });
        let mut ws = DescentWorkspace::new(l.layout.length(), p.pairs);
        let mut converged = false;
        // Newton steps are tried at the loose tolerance and, should they stall, once more at a tighter one.
        for _ in 0..2 {
            let info = descend(self.problem, &mut l, &params, &mut ws, self.meter);
            match &info.end {
                DescentEnd::Halted(halt) => self.halt = Some(halt.clone()),
                DescentEnd::Diverged => return None,
                DescentEnd::Converged | DescentEnd::Limit => {}
            }
            converged = info.end == DescentEnd::Converged && !loose;
            let promising = info.feasibility <= PROMISING && info.stationarity <= PROMISING;
            if self.halt.is_some() || !loose || !promising {
                break;
            }
            let (mut factors, mut orthant, mut y) = l.export();
            let settings = NewtonParams::default();
            let newton = polish(
                self.op,
                self.problem,
                &mut factors,
                &mut orthant,
                &mut y,
                &settings,
                self.meter,
            );
            l.import(&factors, &orthant, &y);
            if let NewtonEnd::Halted(halt) = &newton.end {
                self.halt = Some(halt.clone());
                break;
            }
            converged = newton.merit <= p.feasibility.min(p.stationarity);
            if converged {
                break;
            }
            params.feasibility = p.feasibility;
            params.stationarity = p.stationarity;
        }
        Some(self.candidate(&mut l, converged))
    }

    fn candidate(&mut self, l: &mut Lagrangian<'_>, converged: bool) -> Candidate {
        l.refresh();
        let (factors, orthant, y) = l.export();
        Candidate {
            factors,
            orthant,
            y,
            objective: l.cost * l.scaling.variable / l.scaling.cost,
            feasibility: l.feasibility(self.problem),
            converged,
            sigma: l.sigma,
        }
    }

    pub(super) fn certify(&mut self, c: &Candidate) -> Certificate {
        let settings = CertificateParams::default();
        let (problem, op) = (self.problem, self.op);
        let found = certify(problem, op, &c.factors, &c.orthant, &c.y, &settings, self.meter);
        // The bound rests on the trace of the point, so a point that is not feasible has no say.
        let feasible = c.feasibility <= FEASIBLE;
        if feasible && self.bound.as_ref().is_none_or(|(bound, _)| found.bound > *bound) {
            self.bound = Some((found.bound, c.y.clone()));
        }
        found
    }

    /// Escapes along negative eigenvectors while the width leaves room, keeps the best point of the asked
    /// widths, and tells whether one is certified.
    fn judge(&mut self, mut candidate: Candidate, widths: &[usize]) -> bool {
        for escape in 0..=ESCAPES {
            if self.halt.is_some() {
                break;
            }
            let found = self.certify(&candidate);
            if candidate.feasibility <= FEASIBLE && found.gap <= self.params.certificate {
                self.keep(candidate, widths);
                return true;
            }
            let Some((block, vector)) = found.escape else {
                break;
            };
            if escape == ESCAPES {
                break;
            }
            let Some(next) = self.escape(&candidate, block, &vector, widths) else {
                break;
            };
            // An escape that ends no lower leads nowhere.
            let gain = candidate.objective - next.objective;
            let worthwhile = gain > 1e-9 * (1.0 + candidate.objective.abs());
            if !(next.better_than(&candidate) && worthwhile) {
                break;
            }
            candidate = next;
        }
        self.keep(candidate, widths);
        false
    }

    fn keep(&mut self, candidate: Candidate, widths: &[usize]) {
        if widths == self.params.widths.as_slice()
            && self.best.as_ref().is_none_or(|best| candidate.better_than(best))
        {
            self.best = Some(candidate);
        }
    }

    /// Moves along the escape vector, put into the smallest principal column of its block when that column is
    /// negligible, and descends.
    pub(super) fn escape(
        &mut self,
        c: &Candidate,
        block: usize,
        vector: &[f64],
        widths: &[usize],
    ) -> Option<Candidate> {
        let (values, turned) = principal(&c.factors[block])?;
        let largest = values.last().copied()?;
        if values[0] > 1e-6 * largest || values[0].is_nan() {
            return None;
        }
        let mut factors = c.factors.clone();
        factors[block] = turned;
        let mut l = Lagrangian::new(self.problem, self.op, widths);
        l.import(&factors, &c.orthant, &c.y);
        l.sigma = super::descent::FIRST_SIGMA;
        let width = widths[block];
        let length = 0.1 * norm2(&l.z);
        let start = l.layout.ranges[block].start;
        for (i, value) in vector.iter().enumerate() {
            l.z[start + i * width] += length * value;
        }
        l.refresh();
        self.descend(l)
    }

    /// Solves at greater widths and brings each result back to the widths asked for, until one is certified at
    /// either width or the bound is reached; true when it is at the widths asked for.
    fn lifted(&mut self, stream: &mut Stream) -> bool {
        let limits = width_limits(self.problem);
        let mut widths = self.params.widths.clone();
        loop {
            let before = widths.clone();
            for (k, width) in widths.iter_mut().enumerate() {
                *width = self.params.schedule.next(*width).min(limits[k]).max(*width);
            }
            if widths == before || self.halt.is_some() {
                return false;
            }
            self.widest = self.widest.max(widths.iter().copied().max().unwrap_or(0));
            let mut l = Lagrangian::new(self.problem, self.op, &widths);
            random(&mut l, stream);
            l.sigma = super::descent::FIRST_SIGMA;
            let Some(loose) = self.descend_loosely(&mut l) else { continue };
            // 1. A wide point of low rank need not be finished: its truncation is.
            let low = |(factor, &width): (&Factor, &usize)| tail_share(factor, width) <= LOW_SHARE;
            let low = loose.factors.iter().zip(&self.params.widths).all(low);
            if (low || self.halt.is_some()) && self.truncated(&loose) {
                return true;
            }
            if self.halt.is_some() {
                return false;
            }
            // 2. Finish it, escape from saddles, truncate.
            let Some(mut wide) = self.descend(l) else { continue };
            let mut certified = false;
            for _ in 0..ESCAPES {
                if self.halt.is_some() {
                    return false;
                }
                let found = self.certify(&wide);
                certified = wide.feasibility <= FEASIBLE && found.gap <= self.params.certificate;
                let Some((block, vector)) = found.escape.filter(|_| !certified) else {
                    break;
                };
                let Some(next) = self.escape(&wide, block, &vector, &widths) else {
                    break;
                };
                if !next.better_than(&wide) {
                    break;
                }
                wide = next;
            }
            if self.truncated(&wide) {
                return true;
            }
            if certified {
                return false;
            }
        }
    }

    /// Truncates a wide point to the widths asked for and descends; true when the result is certified.
    fn truncated(&mut self, wide: &Candidate) -> bool {
        let asked = self.params.widths.clone();
        let factors: Vec<Factor> = wide
            .factors
            .iter()
            .zip(&asked)
            .map(|(factor, &width)| resized(factor, width))
            .collect();
        let mut l = Lagrangian::new(self.problem, self.op, &asked);
        l.import(&factors, &wide.orthant, &wide.y);
        l.sigma = wide.sigma;
        match self.descend(l) {
            Some(candidate) => self.judge(candidate, &asked),
            None => false,
        }
    }

    /// Makes the answer from the best point.
    pub(super) fn answer(mut self) -> Result<AlmSolution, AlmError> {
        let Some(best) = self.best.take() else {
            return Err(match self.halt.take() {
                Some(halt) => AlmError::Halted(halt),
                None => AlmError::Diverged { starts: self.starts },
            });
        };
        let stop = match &self.halt {
            Some(halt) => stop_of(halt)?,
            None if best.converged => StopReason::Converged,
            None => StopReason::Stalled,
        };
        let mut info = AlmInfo {
            objective: best.objective,
            feasibility: best.feasibility,
            certificate: None,
            bound: self.bound.as_ref().map(|(bound, _)| *bound),
            starts: self.starts,
            widest: self.widest,
            stop,
        };
        // Multipliers of the best bound prove more than those of the point itself.
        let multipliers = match self.bound.take() {
            Some((bound, y)) if bound.is_finite() => y,
            _ => best.y,
        };
        let (factors, orthant) = (best.factors, best.orthant);
        let (problem, op) = (self.problem, self.op);
        finish_info(problem, op, &factors, &orthant, &multipliers, self.meter, &mut info);
        Ok(AlmSolution { factors, orthant, multipliers, info })
    }
}

/// Returns the share of the trace of V V' beyond its `width` largest eigenvalues.
fn tail_share(factor: &Factor, width: usize) -> f64 {
    match principal(factor) {
        Some((values, _)) => {
            let tail: f64 = values.iter().rev().skip(width).sum();
            tail / values.iter().sum::<f64>().max(f64::MIN_POSITIVE)
        }
        None => 1.0,
    }
}

/// Largest sensible width of each block: the least p with p(p+1)/2 > m, at most the order.
pub fn width_limits(problem: &Problem) -> Vec<usize> {
    let bound = problem.rank_bound() + 1;
    problem.blocks().iter().map(|block| bound.min(block.order)).collect()
}
