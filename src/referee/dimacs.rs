//! The six DIMACS error measures of an answer with multipliers.
//!
//! As the seventh DIMACS challenge defines them (H. Mittelmann, Math. Program. 95:407-430, 2003), with
//! `|.|` the largest absolute entry and S set to C - A*(y), as for a method that returns no S:
//! err1 = ||A(X) - b||_2 / (1 + |b|), err2 = max(0, -lambda_min(X)) / (1 + |b|), err3 = 0,
//! err4 = max(0, -lambda_min(S)) / (1 + |C|), err5 = (<C,X> - b'y) / (1 + |<C,X>| + |b'y|) with its sign,
//! err6 = <X,S> over the same. They are of the untruncated answer: a relaxation's measures.

use super::{slack, spectral};
use crate::linalg::compensated::Accumulator;
use crate::linalg::norms;
use crate::problem::Problem;
use faer::Mat;

/// Largest order of a block whose slack is decomposed.
const DENSE_ORDER: usize = 800;

/// Computes the measures of an answer with objective `objective`, residual `residual` = b - A(X) and
/// least eigenvalue `least`; none when a block is of an order above 800.
pub(super) fn errors(
    problem: &Problem,
    y: &[f64],
    objective: f64,
    residual: &[f64],
    least: f64,
) -> Option<[f64; 6]> {
    if problem.blocks().iter().any(|block| block.order > DENSE_ORDER) {
        return None;
    }
    let mut slack_least = f64::INFINITY;
    for (index, block) in problem.blocks().iter().enumerate() {
        let slack = slack::block(problem, y, index)?;
        let mut matrix = Mat::zeros(block.order, block.order);
        slack.entries.iter().for_each(|entry| matrix[(entry.column, entry.row)] = entry.value);
        slack_least = slack_least.min(spectral::least(&matrix).ok()?);
    }
    let scalars = slack::orthant(problem, y);
    slack_least = scalars.iter().map(|scalar| scalar.0).fold(slack_least, f64::min);
    let mut dual = Accumulator::new();
    let mut gap = Accumulator::new();
    gap.add(objective);
    for ((rhs, rest), multiplier) in problem.rhs().iter().zip(residual).zip(y) {
        dual.add_product(*rhs, *multiplier);
        // <X,S> = <C,X> - y'A(X), and A(X) = b - residual.
        gap.add_product(-rhs, *multiplier);
        gap.add_product(*rest, *multiplier);
    }
    let size = 1.0 + objective.abs() + dual.value().abs();
    let rhs_size = 1.0 + norms::max_abs_slice(problem.rhs());
    let errors = [
        norms::euclidean(residual) / rhs_size,
        (-least).max(0.0) / rhs_size,
        0.0,
        (-slack_least).max(0.0) / (1.0 + problem.cost().max_abs()),
        (objective - dual.value()) / size,
        gap.value() / size,
    ];
    errors.iter().all(|error| error.is_finite()).then_some(errors)
}
