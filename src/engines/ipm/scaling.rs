//! Scaling of a problem: unit constraints, cost and right side of norm at most one.

use crate::linalg::vector::norm2;
use crate::problem::{Coefficient, Functional, OuterSum, Problem, SparseSymmetric};

/// Factors between the caller's units and the engine's.
#[derive(Clone, Debug)]
pub struct Scaling {
    /// Norm each constraint was divided by.
    pub rows: Vec<f64>,
    /// What the right side was divided by; X is divided by it too.
    pub rhs: f64,
    /// What the cost was divided by.
    pub cost: f64,
}

impl Scaling {
    /// Takes the factors of a problem and scales it.
    pub fn scale(problem: &Problem) -> (Problem, Scaling) {
        let rows: Vec<f64> = problem
            .constraints()
            .iter()
            .map(|functional| Some(functional.norm()).filter(|norm| *norm > 0.0).unwrap_or(1.0))
            .collect();
        let unit: Vec<f64> = problem.rhs().iter().zip(&rows).map(|(b, row)| b / row).collect();
        let rhs = norm2(&unit).max(1.0);
        let cost = problem.cost().norm().max(1.0);
        let constraints = problem
            .constraints()
            .iter()
            .zip(&rows)
            .map(|(functional, row)| scaled(functional, 1.0 / row))
            .collect();
        let b = unit.iter().map(|value| value / rhs).collect();
        let scaled = Problem::new(
            problem.blocks().to_vec(),
            problem.orthant(),
            scaled(problem.cost(), 1.0 / cost),
            constraints,
            b,
        )
        .expect("scaling keeps shapes and finiteness");
        (scaled, Scaling { rows, rhs, cost })
    }

    /// Turns multipliers of the scaled problem into the caller's.
    pub fn multipliers(&self, y: &[f64]) -> Vec<f64> {
        y.iter().zip(&self.rows).map(|(value, row)| value * self.cost / row).collect()
    }
}

fn scaled(functional: &Functional, factor: f64) -> Functional {
    let mut out = functional.clone();
    for (_, part) in &mut out.parts {
        *part = match &*part {
            Coefficient::Sparse(matrix) => Coefficient::Sparse(SparseSymmetric::gather(
                matrix.order(),
                matrix.iter().map(|(i, j, value)| (i, j, value * factor)).collect(),
            )),
            Coefficient::Outer(sum) => {
                let mut terms = sum.terms.clone();
                terms.iter_mut().for_each(|term| term.weight *= factor);
                Coefficient::Outer(OuterSum { order: sum.order, terms })
            }
        };
    }
    out.orthant.values.iter_mut().for_each(|value| *value *= factor);
    out
}
