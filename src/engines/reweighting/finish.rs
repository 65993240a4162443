//! Ends of attempts: truncation to the target ranks, Newton steps with the given cost, comparison.

use super::{Measured, Polish};
use crate::budget::Meter;
use crate::engines::newton::{NewtonParams, polish};
use crate::linalg::eigen::{SymmetricEigen, flops};
use crate::linalg::project::factor_of_rank;
use crate::linalg::vector::norm2;
use crate::problem::{Factor, Operator, Problem};

/// A point is feasible for the choice between ends when its relative residual is at most this.
const FEASIBLE: f64 = 1e-7;
/// A point of this relative residual and a value within this of the relaxation's cannot be bettered.
const MET: f64 = 1e-7;
/// Newton steps at most.
const STEPS: usize = 20;

/// A finished end.
#[derive(Clone, Debug)]
pub(super) struct Candidate {
    pub factors: Vec<Factor>,
    pub orthant: Vec<f64>,
    /// Tail ratio before the truncation.
    pub tail: f64,
    feasibility: f64,
    objective: f64,
}

impl Candidate {
    /// Truncates and finishes a point; blocks without a bound keep all positive eigenvalues.
    pub fn of(
        problem: &Problem,
        op: &Operator,
        at: &Measured,
        multipliers: &[f64],
        how: Polish,
        meter: &mut Meter,
    ) -> Self {
        let mut factors: Vec<Factor> = problem
            .blocks()
            .iter()
            .zip(&at.points)
            .map(|(block, point)| {
                let mut eigen = SymmetricEigen::new(block.order);
                let rank = block.rank.unwrap_or(block.order);
                meter.effort.eigendecompositions += 1;
                meter.effort.flops += flops::eigen(block.order);
                match eigen.decompose(point.as_ref()) {
                    Ok(()) => rows_of(&factor_of_rank(&eigen, rank)),
                    Err(_) => Factor::zeros(block.order, rank),
                }
            })
            .collect();
        let mut orthant = at.orthant.clone();
        let bounded = at.ranks.iter().any(Option::is_some);
        if how == Polish::Newton && bounded && meter.check().is_ok() {
            let mut y = multipliers.to_vec();
            let params = NewtonParams { steps: STEPS, ..NewtonParams::default() };
            polish(op, problem, &mut factors, &mut orthant, &mut y, &params, meter);
        }
        let mut image = vec![0.0; op.constraints()];
        op.apply_factors(&factors, &orthant, &mut image);
        image.iter_mut().zip(problem.rhs()).for_each(|(a, b)| *a -= b);
        meter.effort.operator_products += 1;
        Candidate {
            objective: op.cost_of_factors(&factors, &orthant),
            feasibility: norm2(&image) / (1.0 + norm2(problem.rhs())),
            factors,
            orthant,
            tail: at.tail,
        }
    }

    /// Whether the point is feasible with the relaxation's value.
    pub fn meets(&self, value: f64) -> bool {
        self.feasibility <= MET && self.objective <= value + MET * (1.0 + value.abs())
    }

    /// A feasible point beats an infeasible one; then the lower objective wins.
    pub fn betters(&self, other: &Candidate) -> bool {
        match (self.feasibility <= FEASIBLE, other.feasibility <= FEASIBLE) {
            (true, false) => true,
            (false, true) => false,
            (true, true) => self.objective < other.objective,
            (false, false) => self.feasibility < other.feasibility,
        }
    }
}

fn rows_of(columns: &crate::linalg::Mat<f64>) -> Factor {
    let columns: Vec<Vec<f64>> =
        (0..columns.ncols()).map(|j| columns.col_as_slice(j).to_vec()).collect();
    Factor::from_columns(columns.first().map_or(0, Vec::len), &columns)
}
