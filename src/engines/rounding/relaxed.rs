//! The relaxation of problems with a fixed diagonal, by the factored solver, in the form roundings take.

use crate::budget::{Halt, Meter};
use crate::engines::alm::spheres::cost::{SphereBlock, recognise};
use crate::engines::alm::spheres::{Whole, rank_bound, stretched};
use crate::engines::alm::{AlmError, AlmParams, solve};
use crate::linalg::vector::dot;
use crate::problem::{Factor, Operator, Problem, StopReason};
use crate::seed::Stream;

/// A solved relaxation with unit rows.
#[derive(Clone, Debug)]
pub struct UnitRelaxation {
    /// The blocks.
    pub blocks: Vec<SphereBlock>,
    /// Unit rows of each block's factor.
    pub rows: Vec<Factor>,
    /// Lower bound of each block's objective: `sum_i s_i^2 a_i y_i + sum_i s_i^2 min(0, lambda_min(S))`, with the
    /// least eigenvalue over all blocks; minus infinity when the budget ended before there was one.
    pub bounds: Vec<f64>,
    /// Multipliers y.
    pub multipliers: Vec<f64>,
    /// Objective of the relaxation's point.
    pub objective: f64,
    /// Greatest width used.
    pub widest: usize,
    /// Why the solver stopped.
    pub stop: StopReason,
}

impl UnitRelaxation {
    /// Solves the relaxation at the rank bound of each block.
    ///
    /// # Errors
    /// `Refused` when the constraints are not one positive value for each diagonal entry and nothing else;
    /// `Interrupted`. A time limit is no error: the rows are then the ones reached.
    pub fn solve(
        problem: &Problem,
        op: &Operator,
        stream: &mut Stream,
        meter: &mut Meter,
    ) -> Result<Self, Halt> {
        let Some(blocks) = recognise(problem, &op.blocks) else {
            return Err(Halt::Refused(
                "rounds factors with a fixed diagonal only: expected one constraint for each diagonal entry, at a \
                 positive value, no other constraint and no nonnegative part"
                    .to_owned(),
            ));
        };
        let widths = blocks.iter().map(|block| rank_bound(block.order)).collect();
        let params = AlmParams::with_widths(widths);
        let solution = solve(problem, op, &params, stream, meter).map_err(|error| match error {
            AlmError::Halted(halt) => halt,
            other => Halt::Failed(other.to_string()),
        })?;
        let least = solution.info.certificate.as_ref().map(|found| found.least.min(0.0));
        let y = &solution.multipliers;
        let bounds = blocks
            .iter()
            .map(|block| {
                let squares: Vec<f64> = block.radii.iter().map(|s| s * s).collect();
                let weights: Vec<f64> =
                    block.ids.iter().zip(&block.coefficients).map(|(id, a)| a * y[*id]).collect();
                let trace: f64 = squares.iter().sum();
                least.map_or(f64::NEG_INFINITY, |least| dot(&squares, &weights) + trace * least)
            })
            .collect();
        let mut rows = solution.factors;
        for (factor, block) in rows.iter_mut().zip(&blocks) {
            for (i, radius) in block.radii.iter().enumerate() {
                factor.row_mut(i).iter_mut().for_each(|value| *value /= radius);
            }
        }
        Ok(UnitRelaxation {
            blocks,
            rows,
            bounds,
            multipliers: solution.multipliers,
            objective: solution.info.objective,
            widest: solution.info.widest,
            stop: solution.info.stop,
        })
    }

    /// Returns the factors with their rows at full length.
    pub fn factors(&self) -> Vec<Factor> {
        let stretch = |(rows, block): (&Factor, &SphereBlock)| stretched(rows.clone(), block);
        self.rows.iter().zip(&self.blocks).map(stretch).collect()
    }

    /// Returns whether the only block is the whole problem.
    pub fn whole(&self) -> Whole {
        if self.blocks.len() == 1 { Whole::Yes } else { Whole::No }
    }
}
