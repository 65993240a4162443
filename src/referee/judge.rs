//! The judgement: measurements and the finding drawn from them.

use super::measure::{self, View};
use super::units::Units;
use super::{Finding, Known, KnownOptimum, Tolerance};
use super::{bound, dimacs, distance, restore, shape, truncate};
use crate::linalg::compensated::{Accumulator, dot2};
use crate::linalg::norms;
use crate::problem::{Answer, Factor, Problem};
use truncate::Truncated;

/// Cut-offs at which ranks are counted, relative to the largest eigenvalue.
const CUTS: [f64; 3] = [1e-4, 1e-6, 1e-8];

/// Everything the referee says of one answer. What was not measured is none; no number is infinite
/// or NaN.
#[derive(Clone, Debug, PartialEq)]
pub struct Judgement {
    /// The finding.
    pub finding: Finding,
    /// Why, in a phrase; empty when the finding says it all.
    pub reason: String,
    /// `-log10(max(feasibility, objective_error))`, held within 0 and 16; none without a known optimum.
    pub digits: Option<f64>,
    /// `||A(X_r) - b|| / (1 + ||b||)` of the truncated point in canonical units ([`super`]).
    pub feasibility: Option<f64>,
    /// Least eigenvalue of the untruncated blocks, and least entry of the nonnegative part; a factored
    /// block counts as exactly 0.
    pub min_eigenvalue: Option<f64>,
    /// `<C, X_r>` of the truncated point.
    pub objective: Option<f64>,
    /// `|<C, X_r> - p*| / (1 + |p*|)` in canonical units; none without a known optimum.
    pub objective_error: Option<f64>,
    /// `||X_r - X*||_F / (1 + ||X*||_F)`, when the optimal point is known to be the only one.
    pub distance: Option<f64>,
    /// Ranks of the untruncated point at cut-offs 1e-4, 1e-6 and 1e-8: numbers of eigenvalues above
    /// the cut-off times the largest; the largest over the blocks with a rank bound, or over all blocks
    /// when none has one; none without blocks.
    pub ranks: Option<[usize; 3]>,
    /// Share of the (nonnegative) spectrum behind the target rank; the largest over the blocks with a
    /// rank bound, none without any.
    pub tail_ratio: Option<f64>,
    /// Feasibility after the referee's own restoration.
    pub restored_feasibility: Option<f64>,
    /// Objective error after it.
    pub restored_objective_error: Option<f64>,
    /// Feasibility of the untruncated answer.
    pub raw_feasibility: Option<f64>,
    /// Objective of the untruncated answer: a relaxation's own value.
    pub raw_objective: Option<f64>,
    /// Rigorous lower bound of the optimum from the answer's multipliers.
    pub lower_bound: Option<f64>,
    /// The six DIMACS errors of the untruncated answer, when it has multipliers.
    pub dimacs: Option<[f64; 6]>,
}

/// What contradicts a certified optimum.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Contradicted {
    /// The objective of a point that is PSD and of the target rank.
    ByPoint,
    /// A lower bound proved from multipliers.
    ByBound,
}

/// A certified optimum and the referee's arithmetic exclude each other: the certificate or the referee
/// is wrong, and no figure of the run can be trusted.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
#[error(
    "{} {value:?} contradicts the certified optimum {optimum:?} by more than {allowance:e}",
    match .by { Contradicted::ByPoint => "the objective", Contradicted::ByBound => "the lower bound" }
)]
pub struct Contradiction {
    /// What contradicts it.
    pub by: Contradicted,
    /// The objective or the bound.
    pub value: f64,
    /// The certified optimum.
    pub optimum: f64,
    /// By how much the value may pass the optimum.
    pub allowance: f64,
}

/// Judges an answer.
///
/// The finding, with `X_r` the truncated and `X_f` the restored point, "feasible" meaning
/// `||A(X) - b|| <= tolerance.feasibility * (1 + ||b||)` and "optimal"
/// `|<C,X> - p*| <= tolerance.objective * (1 + |p*|)`, both in canonical units ([`super`]); a reported optimum
/// also allows its own inaccuracy, `accuracy * (1 + |p*|)` in the given units:
///
/// - `Malformed`: shapes or numbers cannot be read (beyond 1e100 in magnitude counts as such);
/// - `Solved`: X_r is feasible and optimal; `Near`: X_f is;
/// - `Suboptimal`: X_r or X_f is feasible, the optimum is known and the objective is off;
/// - `Feasible`: X_r or X_f is feasible and the optimum is not known;
/// - `Infeasible`: neither is feasible.
///
/// # Errors
/// A [`Contradiction`], only with a certified optimum p*:
///
/// - with `known.dual` = y (of an exact dual pair, so that C - A*(y) is PSD and b'y = p*): for any PSD X,
///   `<C,X> - p* >= y'(A(X) - b)`; an objective of X_r or X_f below `p* - |y'(A(X) - b)| - e` is refused,
///   e being a bound of the rounding in all three terms;
/// - without it: an objective below `p* - 1e-9 (1 + |p*|)` at a relative residual of at most 1e-12.
///   This one is an alarm, not a proof: it takes the optimal value to move by less than a thousand times
///   the residual;
/// - a rigorous lower bound above p*.
///
/// # Panics
/// `known` does not fit the problem.
#[track_caller]
pub fn judge(
    problem: &Problem,
    answer: &Answer,
    known: &Known<'_>,
    tolerance: &Tolerance,
) -> Result<Judgement, Contradiction> {
    if let Some(dual) = known.dual {
        assert_eq!(
            dual.len(),
            problem.constraints().len(),
            "one certificate multiplier a constraint"
        );
    }
    if let Some(point) = known.unique_point {
        assert_eq!(point.len(), problem.blocks().len(), "one factor of the unique point a block");
    }
    let truncated =
        shape::check(problem, answer).and_then(|()| truncate::truncate(problem, &answer.point));
    let truncated = match truncated {
        Ok(truncated) => truncated,
        Err(reason) => return Ok(Judgement::malformed(reason)),
    };
    let units = Units::of(problem);
    let mut judgement = Judgement::malformed(String::new());
    judge_untruncated(problem, answer, &truncated, &units, &mut judgement);

    let point = Measured::of(problem, truncated.factors, truncated.orthant);
    let restored = restore::restore(problem, &point.factors, &point.orthant, &point.residual);
    let restored = Measured {
        objective: View::of_factors(problem, &restored.factors, &restored.orthant)
            .value(problem.cost()),
        factors: restored.factors,
        orthant: restored.orthant,
        residual: restored.residual,
    };
    point.check_against(problem, known)?;
    restored.check_against(problem, known)?;
    if let Some(y) = &answer.multipliers {
        judgement.lower_bound = bound::lower_bound(problem, y);
        check_bound(judgement.lower_bound, known)?;
    }
    judgement.distance =
        known.unique_point.and_then(|known| finite(distance::relative(&point.factors, known)));
    conclude(&point, &restored, &units, known, tolerance, &mut judgement);
    if judgement.reason.is_empty() && judgement.finding != Finding::Solved {
        let rank = rank_over(problem, &truncated.spectra, tolerance.rank).unwrap_or(0);
        judgement.reason = format!("rank {rank} at cut-off {:e} before truncation", tolerance.rank);
    }
    Ok(judgement)
}

/// Fills in what is said of the answer before truncation.
fn judge_untruncated(
    problem: &Problem,
    answer: &Answer,
    truncated: &Truncated,
    units: &Units,
    judgement: &mut Judgement,
) {
    let view = View::of_point(problem, &answer.point.blocks, &answer.point.orthant);
    let residual = view.residual(problem);
    let objective = view.value(problem.cost());
    judgement.raw_feasibility = finite(units.feasibility(&residual));
    judgement.raw_objective = finite(objective);
    judgement.min_eigenvalue = finite(truncated.least_eigenvalue);
    if !problem.blocks().is_empty() {
        judgement.ranks =
            Some(CUTS.map(|cut| rank_over(problem, &truncated.spectra, cut).unwrap_or(0)));
    }
    judgement.tail_ratio = problem
        .blocks()
        .iter()
        .zip(&truncated.spectra)
        .filter_map(|(block, spectrum)| block.rank.map(|rank| truncate::tail_share(spectrum, rank)))
        .reduce(f64::max);
    if let Some(y) = &answer.multipliers {
        let least = truncated.least_eigenvalue;
        judgement.dimacs = dimacs::errors(problem, y, objective, &residual, least);
    }
}

/// Returns the largest rank over the blocks with a bound, over all blocks when none has one.
fn rank_over(problem: &Problem, spectra: &[Vec<f64>], cut: f64) -> Option<usize> {
    let any_bound = problem.blocks().iter().any(|block| block.rank.is_some());
    let blocks = problem.blocks().iter().zip(spectra);
    blocks
        .filter(|(block, _)| !any_bound || block.rank.is_some())
        .map(|(_, spectrum)| truncate::rank_at(spectrum, cut))
        .max()
}

/// Draws the finding from the truncated and the restored point.
fn conclude(
    point: &Measured,
    restored: &Measured,
    units: &Units,
    known: &Known<'_>,
    tolerance: &Tolerance,
    judgement: &mut Judgement,
) {
    let optimum = match known.optimum {
        KnownOptimum::Certified(value) => Some((value, 0.0)),
        KnownOptimum::Reported { value, accuracy } => {
            Some((value, accuracy * (1.0 + value.abs()) / units.objective_size(value)))
        }
        KnownOptimum::Unknown => None,
    };
    let feasibility = units.feasibility(&point.residual);
    let restored_feasibility = units.feasibility(&restored.residual);
    judgement.feasibility = finite(feasibility);
    judgement.objective = finite(point.objective);
    judgement.restored_feasibility = finite(restored_feasibility);
    let feasible = feasibility <= tolerance.feasibility;
    let restorable = restored_feasibility <= tolerance.feasibility;
    let Some((value, inaccuracy)) = optimum else {
        judgement.finding =
            if feasible || restorable { Finding::Feasible } else { Finding::Infeasible };
        judgement.reason = residual_reason(feasible, restorable, feasibility, restored_feasibility);
        return;
    };
    let objective_tolerance = tolerance.objective.max(inaccuracy);
    let error = units.objective_error(point.objective, value);
    let restored_error = units.objective_error(restored.objective, value);
    judgement.objective_error = finite(error);
    judgement.restored_objective_error = finite(restored_error);
    let worst = feasibility.max(error);
    judgement.digits = worst.is_finite().then(|| (-worst.log10()).clamp(0.0, 16.0));
    judgement.finding = if feasible && error <= objective_tolerance {
        Finding::Solved
    } else if restorable && restored_error <= objective_tolerance {
        Finding::Near
    } else if feasible || restorable {
        Finding::Suboptimal
    } else {
        Finding::Infeasible
    };
    judgement.reason = match judgement.finding {
        Finding::Solved => String::new(),
        Finding::Suboptimal => {
            let off = if feasible { point.objective - value } else { restored.objective - value };
            let side = if off < 0.0 { "below" } else { "above" };
            format!("the objective lies {:.2e} {side} the optimum", off.abs())
        }
        _ => residual_reason(feasible, restorable, feasibility, restored_feasibility),
    };
}

fn residual_reason(feasible: bool, restorable: bool, before: f64, after: f64) -> String {
    match (feasible, restorable) {
        (true, _) => String::new(),
        (false, true) => format!("feasible after restoration only (residual {before:.2e} before)"),
        (false, false) => {
            format!("relative residual {before:.2e} at the target rank, {after:.2e} restored")
        }
    }
}

impl Judgement {
    fn malformed(reason: String) -> Self {
        Judgement {
            finding: Finding::Malformed,
            reason,
            digits: None,
            feasibility: None,
            min_eigenvalue: None,
            objective: None,
            objective_error: None,
            distance: None,
            ranks: None,
            tail_ratio: None,
            restored_feasibility: None,
            restored_objective_error: None,
            raw_feasibility: None,
            raw_objective: None,
            lower_bound: None,
            dimacs: None,
        }
    }
}

fn finite(value: f64) -> Option<f64> {
    value.is_finite().then_some(value)
}

/// A point by factors with its residual b - A(X) and objective.
struct Measured {
    factors: Vec<Factor>,
    orthant: Vec<f64>,
    residual: Vec<f64>,
    objective: f64,
}

/// Relative residual at which an objective below an optimum without dual certificate raises the alarm.
const ALARM_RESIDUAL: f64 = 1e-12;

/// How far below such an optimum it must lie, relative to 1 + |p*|.
const ALARM_OBJECTIVE: f64 = 1e-9;

impl Measured {
    fn of(problem: &Problem, factors: Vec<Factor>, orthant: Vec<f64>) -> Self {
        let view = View::of_factors(problem, &factors, &orthant);
        let (residual, objective) = (view.residual(problem), view.value(problem.cost()));
        Measured { factors, orthant, residual, objective }
    }

    /// Refuses an objective below a certified optimum that the residual does not explain; see [`judge`].
    fn check_against(&self, problem: &Problem, known: &Known<'_>) -> Result<(), Contradiction> {
        let KnownOptimum::Certified(optimum) = known.optimum else {
            return Ok(());
        };
        let contradiction = |allowance| {
            let value = self.objective;
            Err(Contradiction { by: Contradicted::ByPoint, value, optimum, allowance })
        };
        let Some(y) = known.dual else {
            let residual =
                norms::euclidean(&self.residual) / (1.0 + norms::euclidean(problem.rhs()));
            let allowance = ALARM_OBJECTIVE * (1.0 + optimum.abs());
            let alarm = residual <= ALARM_RESIDUAL && self.objective < optimum - allowance;
            return if alarm { contradiction(allowance) } else { Ok(()) };
        };
        let explained = dot2(y, &self.residual).abs();
        if self.objective >= optimum - explained {
            return Ok(());
        }
        let allowance = explained + self.rounding(problem, y, optimum);
        if self.objective < optimum - allowance { contradiction(allowance) } else { Ok(()) }
    }

    /// Bounds the rounding of `<C,X> - p* + y'(b - A(X))`.
    ///
    /// An entry of X costs at most width + 2 roundings relative to the product of two row norms, a
    /// compensated sum of products two more; 64 stands for the rest (row norms, this sum itself), and
    /// 2^-52 rather than 2^-53 for second order.
    fn rounding(&self, problem: &Problem, y: &[f64], optimum: f64) -> f64 {
        let norms = measure::row_norms(&self.factors);
        let mut size = Accumulator::new();
        size.add(optimum.abs());
        size.add(measure::scale(problem.cost(), &norms, &self.orthant));
        for ((constraint, rhs), multiplier) in
            problem.constraints().iter().zip(problem.rhs()).zip(y)
        {
            let value = measure::scale(constraint, &norms, &self.orthant) + rhs.abs();
            size.add_product(multiplier.abs(), value);
        }
        let width = self.factors.iter().map(|factor| factor.width).max().unwrap_or(1);
        (width + 64) as f64 * f64::EPSILON * size.value()
    }
}

/// Refuses a rigorous lower bound above a certified optimum.
fn check_bound(bound: Option<f64>, known: &Known<'_>) -> Result<(), Contradiction> {
    match (bound, known.optimum) {
        (Some(value), KnownOptimum::Certified(optimum)) if value > optimum => {
            Err(Contradiction { by: Contradicted::ByBound, value, optimum, allowance: 0.0 })
        }
        _ => Ok(()),
    }
}
