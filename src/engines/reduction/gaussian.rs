//! From a problem to a Gaussian projection of the interior-point solution of its relaxation.

use super::pipeline::{relaxation, settle};
use super::{Part, Spectral};
use crate::budget::{Halt, Meter};
use crate::engines::alm::stop_of;
use crate::engines::rounding::gaussian::{GaussianParams, Onto, count_semidefinite, round};
use crate::engines::rounding::restore::RestoreParams;
use crate::problem::operator::Storage;
use crate::problem::{Answer, BlockPoint, Factor, Operator, Point, Problem, StopReason};
use crate::seed::Stream;

/// Settings of the projection.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct GaussianReduction {
    /// Tolerance of the interior-point engine.
    pub tolerance: f64,
    /// Eigenvalues of X up to `cut` times the largest of their block count as zero.
    pub cut: f64,
    /// Draws.
    pub draws: usize,
}

/// Solves the relaxation, projects its solution to the rank bounds and brings the draws back onto the constraints.
///
/// # Errors
/// What the interior-point engine and the meter return, and `Failed` when a block of the solution is zero.
pub fn project_relaxation(
    problem: &Problem,
    params: &GaussianReduction,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<Answer, Halt> {
    let op = Operator::with_storage(problem, Storage::Factored);
    let relaxed = relaxed_factors(problem, &op, params.tolerance, params.cut, meter)?;
    let ranks: Vec<String> = relaxed.factors.iter().map(|f| f.width.to_string()).collect();
    let (factors, x) = (&relaxed.factors, &relaxed.orthant);
    let onto = Onto::Constraints(RestoreParams::default());
    let settings = GaussianParams { draws: params.draws, onto };
    let found = round(problem, &op, factors, x, &settings, stream, meter);
    let stop = match found.halt.or_else(|| meter.check().err()) {
        Some(halt) => stop_of(&halt)?,
        None => relaxed.stop,
    };
    let semidefinite = count_semidefinite(problem);
    let all = problem.constraints().len();
    Ok(Answer {
        point: Point {
            blocks: found.factors.into_iter().map(BlockPoint::Factor).collect(),
            orthant: found.orthant,
        },
        multipliers: Some(relaxed.multipliers),
        stop,
        note: format!(
            "rank {} of the relaxation; {} draws, {} within the bounds of the source, {semidefinite} of {all} constraints \
             semidefinite{}",
            ranks.join(", "),
            found.draws,
            found.within,
            if semidefinite == all { "" } else { ", so that the source proves nothing" }
        ),
    })
}

/// The interior-point solution of a relaxation, by factors.
#[derive(Clone, Debug)]
pub struct RelaxedFactors {
    /// One factor a block, of the numerical rank of the solution.
    pub factors: Vec<Factor>,
    /// Nonnegative part.
    pub orthant: Vec<f64>,
    /// Multipliers.
    pub multipliers: Vec<f64>,
    /// Objective of the interior-point solution.
    pub objective: f64,
    /// Why the interior-point engine stopped.
    pub stop: StopReason,
}

/// Solves the relaxation by the interior-point engine to `tolerance`, cuts eigenvalues up to `cut` times the largest of
/// their block, and moves the rest onto the optimal face by Newton steps where these lead there.
///
/// # Errors
/// What the interior-point engine and the meter return, and `Failed` when a block of the solution is zero.
pub fn relaxed_factors(
    problem: &Problem,
    op: &Operator,
    tolerance: f64,
    cut: f64,
    meter: &mut Meter,
) -> Result<RelaxedFactors, Halt> {
    let solution = relaxation(problem, tolerance, meter)?;
    let mut point = Spectral::of(&solution.points, &solution.orthant, cut, meter)?;
    settle(problem, op, &mut point, &solution, meter)?;
    if let Some(block) = point.parts.iter().position(|part| part.values.is_empty()) {
        return Err(Halt::Failed(format!(
            "block {} of the relaxation's solution is zero",
            block + 1
        )));
    }
    Ok(RelaxedFactors {
        factors: point.parts.iter().map(Part::factor).collect(),
        orthant: point.orthant,
        multipliers: solution.multipliers,
        objective: solution.info.primal_value,
        stop: solution.info.outcome.stop_reason(),
    })
}
