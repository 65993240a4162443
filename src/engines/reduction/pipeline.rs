//! From a problem to a reduced answer: interior point, reduction, restoration, and the report of
//! rank bound and uniqueness.

use super::{Params, Rule, Spectral, reduce, uniqueness};
use crate::budget::{Halt, Meter};
use crate::engines::ipm;
use crate::engines::newton::{NewtonParams, polish};
use crate::problem::operator::Storage;
use crate::problem::{Answer, BlockPoint, Factor, Operator, Point, Problem, StopReason};

/// Solves the relaxation and reduces the rank of its solution by `rule`.
///
/// The reduced point keeps its constraints up to what the cut drops; Newton steps on the factors at
/// the reached rank restore them.
///
/// # Errors
/// What the interior-point engine and the meter return.
pub fn reduce_relaxation(
    problem: &Problem,
    tolerance: f64,
    rule: Rule,
    cut: f64,
    meter: &mut Meter,
) -> Result<Answer, Halt> {
    let ipm_params = ipm::Params { tolerance, ..ipm::Params::default() };
    let solution = ipm::solve(problem, &ipm_params, None, meter)?;
    let info = solution.info;
    if matches!(info.outcome, ipm::Outcome::PrimalInfeasible | ipm::Outcome::DualInfeasible) {
        let word = info.outcome.stop_reason().word();
        return Err(Halt::Failed(format!("the relaxation is {word}")));
    }
    let op = Operator::with_storage(problem, Storage::Factored);
    let params = Params { rule, cut, null: 1e-7 };
    let mut point = Spectral::of(&solution.points, &solution.orthant, cut, meter)?;
    let test = uniqueness(problem, &op, &solution.slacks, &point, &params, meter)?;
    let reduced = match reduce(problem, &op, &mut point, &params, meter) {
        Ok(reduced) => reduced,
        Err(Halt::TimeLimit) => super::Info { ranks: Vec::new(), free_directions: 0 },
        Err(other) => return Err(other),
    };
    let mut factors: Vec<Factor> = point.parts.iter().map(super::Part::factor).collect();
    let mut orthant = point.orthant.clone();
    let mut y = solution.multipliers.clone();
    let newton = NewtonParams { steps: 8, ..NewtonParams::default() };
    if factors.iter().all(|factor| factor.width > 0) {
        polish(&op, problem, &mut factors, &mut orthant, &mut y, &newton, meter);
    }
    let unique = if test.unseen == 0 { "unique" } else { "not unique" };
    let ranks: Vec<String> = reduced.ranks.iter().map(usize::to_string).collect();
    Ok(Answer {
        point: Point { blocks: factors.into_iter().map(BlockPoint::Factor).collect(), orthant },
        multipliers: Some(solution.multipliers),
        stop: match meter.check() {
            Err(Halt::TimeLimit) => StopReason::TimeLimit,
            Err(halt) => return Err(halt),
            Ok(()) => info.outcome.stop_reason(),
        },
        note: format!(
            "rank {}; rank bound {}; optimum {unique} (kernel of S {}, unseen {}); free directions left {}",
            ranks.join(" -> "),
            problem.rank_bound(),
            test.kernel,
            test.unseen,
            reduced.free_directions
        ),
    })
}
