//! `relax-admm`: the relaxation by the dual alternating direction method, truncated to the target rank.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::admm::{AdmmParams, solve};
use crate::problem::{
    Answer, BlockPoint, Coefficient, Functional, Point, Problem, SparseSymmetric, SparseVector,
};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct RelaxAdmm;

static CARD: MethodCard = MethodCard {
    id: "relax-admm",
    title: "Dual alternating direction method for the relaxation, truncated to the target rank",
    class: MethodClass::Relaxation,
    reference: "Z. Wen, D. Goldfarb, W. Yin, Alternating direction augmented Lagrangian methods for semidefinite \
programming, Mathematical Programming Computation 2:203-230, 2010, 10.1007/s12532-010-0017-1; at step 1 it is the \
boundary point method of J. Povh, F. Rendl, A. Wiegele, Computing 78:277-286, 2006, 10.1007/s00607-006-0182-2. The \
penalty rule has the source's form and its gamma = 0.5, eta1 = eta2 = 1; its h4 and mu0, which depend on how data are \
scaled, the range of mu (1e-6 to 1e6) and the patience of the stagnation stop (100, 250, 750 iterations at 10, 100, \
1000 times the tolerance) are our choice for rows of norm 1 and C, b of norm at most 1. Bibliographic data from \
memory.",
    needs: "Any blocks that fit in memory densely (about 14 matrices a block), nonnegative part, sparse, dense or rank-one constraints. Meant for \
orders of a few hundred, where an interior-point iteration with its m x m system is dear.",
    cost: "An iteration: one full eigendecomposition of each block (9 n^3), the smaller of its two parts (n^2 k), three \
passes over the constraints and one solve with AA*, factored once: sparse where its factor is sparse, dense up to 1500 \
constraints, conjugate gradients beyond. Nothing is allocated inside iterations.",
    guarantees: "Converges to an optimum of the relaxation for fixed mu and step below 1.618, if both sides attain \
equal optima; no rate. X and S are PSD and XS = 0 at every iteration; the residuals ||A(X)-b|| and ||C-A*(y)-S|| are what \
is iterated. The truncation is optimal when the relaxation has a unique optimum of the target rank.",
    failures: "Low accuracy: 1e-5 to 1e-7 is usual, less without strict complementarity or with badly scaled or \
degenerate data. Does not converge where the dual optimum \
is not attained (localisation). Does not recognise infeasible problems. As every relaxation it does not find the low-rank point on a face \
of optima or across a gap.",
    options: &[
        SettingSpec {
            name: "tolerance",
            kind: Kind::Decimal { least: 1e-12, most: 1e-2 },
            default: DefaultSetting::Decimal(1e-8),
            meaning: "Stop when max(||A(X)-b||/(1+||b||), ||C-A*(y)-S||_F/(1+||C||_F), |b'y-<C,X>|/(1+|b'y|+|<C,X>|)) \
is at most this, the first two in scaled data (the source stops at 1e-6).",
        },
        SettingSpec {
            name: "iterations",
            kind: Kind::Integer { least: 1, most: 10_000_000 },
            default: DefaultSetting::Integer(10_000),
            meaning: "Most iterations.",
        },
        SettingSpec {
            name: "step",
            kind: Kind::Decimal { least: 0.1, most: 1.618 },
            default: DefaultSetting::Decimal(1.6),
            meaning: "Step length rho of the update of X; the source's 1.6.",
        },
        SettingSpec {
            name: "penalty",
            kind: Kind::Decimal { least: 1e-6, most: 1e6 },
            default: DefaultSetting::Decimal(1.0),
            meaning: "First mu, in scaled data (the source has 5 in its own).",
        },
        SettingSpec {
            name: "patience",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(20),
            meaning: "Iterations h4 in a row in which the same residual is the larger one after which mu is halved (dual \
residual lags) or doubled (primal residual lags); the source has 50 to 100.",
        },
        SettingSpec {
            name: "zero-objective",
            kind: Kind::Word(&["trace", "keep"]),
            default: DefaultSetting::Word("trace"),
            meaning: "For a problem whose cost is zero: `trace` minimises the trace of all blocks and the sum of the \
nonnegative part in its stead, which favours low rank, and returns y = 0; `keep` solves it as it is.",
        },
    ],
};

impl Method for RelaxAdmm {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let params = AdmmParams {
            tolerance: trial.options.decimal("tolerance"),
            max_iterations: trial.options.size("iterations"),
            step: trial.options.decimal("step"),
            mu: trial.options.decimal("penalty"),
            patience: trial.options.size("patience"),
            ..AdmmParams::default()
        };
        let replaced =
            problem.cost().norm() == 0.0 && trial.options.word("zero-objective") == "trace";
        let solution = if replaced {
            let mut solution = solve(&with_trace(problem), &params, &mut trial.meter)?;
            solution.multipliers.fill(0.0);
            solution
        } else {
            solve(problem, &params, &mut trial.meter)?
        };
        let residuals = solution.residuals;
        Ok(Answer {
            point: Point {
                blocks: solution.point.blocks.into_iter().map(BlockPoint::Dense).collect(),
                orthant: solution.point.x,
            },
            multipliers: Some(solution.multipliers),
            stop: solution.stop,
            note: format!(
                "{} iterations, residuals {:.1e} and {:.1e}, values {:.9e} and {:.9e}{}",
                solution.iterations,
                residuals.primal,
                residuals.dual,
                residuals.primal_value,
                residuals.dual_value,
                if replaced { " of the trace" } else { "" }
            ),
        })
    }
}

/// Puts the trace and the sum of the nonnegative part in the place of the cost.
fn with_trace(problem: &Problem) -> Problem {
    let identity =
        |order: usize| SparseSymmetric::gather(order, (0..order).map(|i| (i, i, 1.0)).collect());
    let parts = problem
        .blocks()
        .iter()
        .enumerate()
        .map(|(k, block)| (k, Coefficient::Sparse(identity(block.order))))
        .collect();
    let ones = (0..problem.orthant() as u32).map(|j| (j, 1.0)).collect();
    Problem::new(
        problem.blocks().to_vec(),
        problem.orthant(),
        Functional { parts, orthant: SparseVector::gather(ones) },
        problem.constraints().to_vec(),
        problem.rhs().to_vec(),
    )
    .expect("the trace keeps shapes and finiteness")
}
