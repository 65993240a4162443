//! From a problem to a reduced answer: interior point, reduction, restoration, and the report of
//! rank bound and uniqueness.

use super::{Params, Rule, Spectral, reduce, uniqueness};
use crate::budget::{Halt, Meter};
use crate::engines::ipm;
use crate::engines::newton::{NewtonParams, polish};
use crate::problem::operator::Storage;
use crate::problem::{Answer, BlockPoint, Factor, Operator, Point, Problem, StopReason};

/// Settings of the way from a problem to a reduced answer.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pipeline {
    /// Tolerance of the interior-point engine.
    pub tolerance: f64,
    /// Which end of a step is taken.
    pub rule: Rule,
    /// Eigenvalues of X up to `cut` times the largest of their block count as zero.
    pub cut: f64,
    /// Most reductions from the relaxation's point, with other seeds where the rule is random.
    pub attempts: usize,
}

/// Solves the relaxation and reduces the rank of its solution by `rule`, once.
///
/// # Errors
/// As [`reduce_repeatedly`].
pub fn reduce_relaxation(
    problem: &Problem,
    tolerance: f64,
    rule: Rule,
    cut: f64,
    meter: &mut Meter,
) -> Result<Answer, Halt> {
    reduce_repeatedly(problem, &Pipeline { tolerance, rule, cut, attempts: 1 }, meter)
}

/// Solves the relaxation and reduces the rank of its solution, up to `attempts` times while a rank bound is not met;
/// the result of least excess over the bounds is kept.
///
/// The reduced point keeps its constraints up to what the cut drops; Newton steps on the factors at
/// the reached rank restore them.
///
/// # Errors
/// What the interior-point engine and the meter return.
pub fn reduce_repeatedly(
    problem: &Problem,
    pipeline: &Pipeline,
    meter: &mut Meter,
) -> Result<Answer, Halt> {
    let (tolerance, cut) = (pipeline.tolerance, pipeline.cut);
    let solution = relaxation(problem, tolerance, meter)?;
    let info = solution.info;
    let op = Operator::with_storage(problem, Storage::Factored);
    let mut params = Params { rule: pipeline.rule, cut, null: 1e-7 };
    let mut start = Spectral::of(&solution.points, &solution.orthant, cut, meter)?;
    settle(problem, &op, &mut start, &solution, meter)?;
    let test = uniqueness(problem, &op, &solution.slacks, &start, &params, meter)?;
    let mut best: Option<(usize, super::Info, Spectral)> = None;
    let mut made = 0;
    for attempt in 0..pipeline.attempts.max(1) {
        if let Rule::Random { combinations, seed } = pipeline.rule {
            params.rule = Rule::Random { combinations, seed: seed.wrapping_add(attempt as u64) };
        }
        let mut point = start.clone();
        let reduced = match reduce(problem, &op, &mut point, &params, meter) {
            Ok(reduced) => reduced,
            Err(Halt::TimeLimit) => super::Info { ranks: Vec::new(), free_directions: 0 },
            Err(other) => return Err(other),
        };
        made += 1;
        let excess = point.excess(problem);
        if best.as_ref().is_none_or(|(least, _, _)| excess < *least) {
            best = Some((excess, reduced, point));
        }
        if best.as_ref().is_some_and(|(least, _, _)| *least == 0) || meter.check().is_err() {
            break;
        }
    }
    let (_, reduced, point) = best.expect("one attempt was made");
    let (factors, orthant) = restored(problem, &op, &point, &solution, meter);
    let unique = if test.unseen == 0 { "unique" } else { "not unique" };
    let ranks: Vec<String> = reduced.ranks.iter().map(usize::to_string).collect();
    let attempts = if made > 1 { format!("; {made} attempts") } else { String::new() };
    Ok(Answer {
        point: Point { blocks: factors.into_iter().map(BlockPoint::Factor).collect(), orthant },
        multipliers: Some(solution.multipliers),
        stop: match meter.check() {
            Err(Halt::TimeLimit) => StopReason::TimeLimit,
            Err(halt) => return Err(halt),
            Ok(()) => info.outcome.stop_reason(),
        },
        note: format!(
            "rank {}; rank bound {}; optimum {unique} (kernel of S {}, unseen {}); free directions left {}{attempts}",
            ranks.join(" -> "),
            problem.rank_bound(),
            test.kernel,
            test.unseen,
            reduced.free_directions
        ),
    })
}

/// Solves the relaxation by the interior-point engine.
pub(super) fn relaxation(
    problem: &Problem,
    tolerance: f64,
    meter: &mut Meter,
) -> Result<ipm::Solution, Halt> {
    let params = ipm::Params { tolerance, ..ipm::Params::default() };
    let solution = ipm::solve(problem, &params, None, meter)?;
    let outcome = solution.info.outcome;
    if matches!(outcome, ipm::Outcome::PrimalInfeasible | ipm::Outcome::DualInfeasible) {
        let word = outcome.stop_reason().word();
        return Err(Halt::Failed(format!("the relaxation is {word}")));
    }
    Ok(solution)
}

/// Moves the truncated interior-point solution onto the optimal face by Newton steps on its factors:
/// the interior point is off the face by the order of the gap, and reduction would magnify that. The
/// point is kept as it is when the steps do not restore the constraints.
pub(super) fn settle(
    problem: &Problem,
    op: &Operator,
    point: &mut Spectral,
    solution: &ipm::Solution,
    meter: &mut Meter,
) -> Result<(), Halt> {
    let mut factors: Vec<Factor> = point.parts.iter().map(super::Part::factor).collect();
    if factors.iter().any(|factor| factor.width == 0) {
        return Ok(());
    }
    let mut orthant = point.orthant.clone();
    let mut y = solution.multipliers.clone();
    let newton = NewtonParams { steps: 10, ..NewtonParams::default() };
    let info = polish(op, problem, &mut factors, &mut orthant, &mut y, &newton, meter);
    let value = solution.info.primal_value;
    let change = (op.cost_of_factors(&factors, &orthant) - value).abs();
    if info.feasibility <= RESTORED && change <= SAME_VALUE * (1.0 + value.abs()) {
        *point = Spectral::of_factors(&factors, &orthant)?;
    }
    Ok(())
}

/// Cuts tried for the last truncation, from bold to the least that changes nothing.
const LAST_CUTS: [f64; 4] = [1e-3, 1e-4, 1e-5, 0.0];
/// A bolder cut is kept when Newton steps restore `||A(X)-b|| <= 1e-9 (1+||b||)` and the value stays
/// within 1e-7 of the relaxation's, relative.
const RESTORED: f64 = 1e-9;
const SAME_VALUE: f64 = 1e-7;

/// Truncates small eigenvalues that the arithmetic left behind and restores the constraints by Newton
/// steps on the factors; the boldest cut that keeps value and constraints is taken.
fn restored(
    problem: &Problem,
    op: &Operator,
    point: &Spectral,
    solution: &ipm::Solution,
    meter: &mut Meter,
) -> (Vec<Factor>, Vec<f64>) {
    let newton = NewtonParams { steps: 10, ..NewtonParams::default() };
    let value = solution.info.primal_value;
    let mut last = None;
    for cut in LAST_CUTS {
        let widths: Vec<usize> = point
            .parts
            .iter()
            .map(|part| {
                let top = part.values.last().copied().unwrap_or(0.0);
                part.values.iter().filter(|v| **v > cut * top).count()
            })
            .collect();
        if widths.contains(&0) || (cut > 0.0 && last.as_ref() == Some(&widths)) {
            continue;
        }
        let mut factors: Vec<Factor> =
            point.parts.iter().zip(&widths).map(|(part, w)| part.leading_factor(*w)).collect();
        let mut orthant = point.orthant.clone();
        let mut y = solution.multipliers.clone();
        let info = polish(op, problem, &mut factors, &mut orthant, &mut y, &newton, meter);
        let change = (op.cost_of_factors(&factors, &orthant) - value).abs();
        if info.feasibility <= RESTORED && change <= SAME_VALUE * (1.0 + value.abs()) {
            return (factors, orthant);
        }
        last = Some(widths);
    }
    (point.parts.iter().map(super::Part::factor).collect(), point.orthant.clone())
}
