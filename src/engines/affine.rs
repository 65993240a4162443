//! Projection onto {A(X) + a(x) = b}, and onto its part with <C, X> + c'x <= gamma, for dense points.
//!
//! P(Z) = Z - A*(w) with AA* w = A(Z) - b; `gram` solves with AA*. The intersection with the half-space is projected on
//! in closed form: with C' = C - A*(h), AA* h = A(C), the nearest point to Z is P(Z), or
//! P(Z) - t C', t = (<C, P(Z)> - gamma)/||C'||^2, when P(Z) lies beyond. In the same way the minimiser of
//! <C, X> + ||X - Z||^2/(2 t) on the set is P(Z) - t C'.
//!
//! It is for dense points: factors have their own restoration by Newton steps.

pub mod gram;
pub mod maps;
mod sparse;

use crate::budget::Meter;
use crate::linalg::vector::{axpy, dot, norm2};
use crate::linalg::{Mat, dense};
use crate::problem::{Operator, Problem};
use gram::GramSolver;
use maps::{DenseMaps, dense_cost};

pub use gram::DIRECT_LIMIT;

/// A projected cost below this share of the cost counts as zero.
const CONSTANT_COST: f64 = 1e-10;

/// Why a projector cannot be made.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum AffineError {
    /// AA* could not be factored although it was shifted.
    #[error(
        "the matrix of inner products of the {constraints} constraints is not positive: pivot {pivot}"
    )]
    NotPositive {
        /// Number of constraints.
        constraints: usize,
        /// Pivot that failed.
        pivot: usize,
    },
}

/// Whether a half-space cuts the affine set.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Cut {
    /// The objective varies over the affine set, so that the cut works.
    Works,
    /// The objective is constant over it (or zero): the cut says nothing.
    Constant,
}

/// The projector of one problem.
pub struct AffineProjector<'a> {
    op: &'a Operator,
    rhs: &'a [f64],
    solver: GramSolver<'a>,
    maps: DenseMaps<'a>,
    weights: Vec<f64>,
    residual: Vec<f64>,
    cost: Vec<Mat<f64>>,
    cost_orthant: Vec<f64>,
    cost_square: f64,
    cut: Cut,
}

impl<'a> AffineProjector<'a> {
    /// Forms and factors AA* and projects the cost.
    ///
    /// # Errors
    /// [`AffineError::NotPositive`], when the shifted matrix is not positive definite (a number that is not finite).
    pub fn new(
        problem: &'a Problem,
        op: &'a Operator,
        meter: &mut Meter,
    ) -> Result<Self, AffineError> {
        let (cost, cost_orthant) = dense_cost(op);
        let mut projector = AffineProjector {
            op,
            rhs: problem.rhs(),
            solver: GramSolver::new(problem, op, meter)?,
            maps: DenseMaps::new(op),
            weights: vec![0.0; op.constraints()],
            residual: vec![0.0; op.constraints()],
            cost,
            cost_orthant,
            cost_square: 0.0,
            cut: Cut::Constant,
        };
        projector.project_cost(problem, meter);
        Ok(projector)
    }

    /// Returns whether the objective varies over the affine set.
    pub fn cut(&self) -> Cut {
        self.cut
    }

    /// Replaces `points` and `x` by their projection onto {A(X) + a(x) = b} and returns
    /// ||A(X) + a(x) - b||_2 of the result, by one more evaluation.
    #[track_caller]
    pub fn project(&mut self, points: &mut [Mat<f64>], x: &mut [f64], meter: &mut Meter) -> f64 {
        self.measure(points, x, meter);
        self.solve(meter);
        self.subtract_adjoint(points, x);
        self.measure(points, x, meter);
        norm2(&self.residual)
    }

    /// Replaces `points` and `x` by their projection onto the part of the affine set with objective at most
    /// `gamma`; without effect beyond [`Self::project`] when the objective is constant there.
    #[track_caller]
    pub fn project_cut(
        &mut self,
        points: &mut [Mat<f64>],
        x: &mut [f64],
        gamma: f64,
        meter: &mut Meter,
    ) -> f64 {
        self.measure(points, x, meter);
        self.solve(meter);
        self.subtract_adjoint(points, x);
        let beyond = self.op.cost_dense(points, x) - gamma;
        if self.cut == Cut::Works && beyond > 0.0 {
            self.descend(beyond / self.cost_square, points, x);
        }
        self.measure(points, x, meter);
        norm2(&self.residual)
    }

    /// Replaces `points` and `x` by the minimiser of <C, X> + c'x + ||X - Z||^2/(2 t) on the affine set, Z being
    /// what they hold, and returns ||A(X) + a(x) - b||_2 of the result.
    #[track_caller]
    pub fn project_tilted(
        &mut self,
        points: &mut [Mat<f64>],
        x: &mut [f64],
        t: f64,
        meter: &mut Meter,
    ) -> f64 {
        self.measure(points, x, meter);
        self.solve(meter);
        self.subtract_adjoint(points, x);
        if self.cut == Cut::Works {
            self.descend(t, points, x);
        }
        self.measure(points, x, meter);
        norm2(&self.residual)
    }

    /// Returns ||C'||, the norm of the projected cost.
    pub fn cost_norm(&self) -> f64 {
        self.cost_square.sqrt()
    }

    /// Subtracts t C'.
    fn descend(&self, t: f64, points: &mut [Mat<f64>], x: &mut [f64]) {
        for (point, cost) in points.iter_mut().zip(&self.cost) {
            dense::axpy_matrix(-t, cost.as_ref(), point.as_mut());
        }
        axpy(-t, &self.cost_orthant, x);
    }

    fn measure(&mut self, points: &[Mat<f64>], x: &[f64], meter: &mut Meter) {
        self.maps.apply(points, x, &mut self.residual);
        axpy(-1.0, self.rhs, &mut self.residual);
        meter.effort.operator_products += 1;
        meter.effort.flops +=
            self.op.blocks.iter().map(|block| block.flops_per_column()).sum::<u64>();
    }

    /// Solves AA* w = residual.
    fn solve(&mut self, meter: &mut Meter) {
        self.solver.solve(&self.residual, &mut self.weights, meter);
    }

    /// Subtracts A*(w).
    fn subtract_adjoint(&mut self, points: &mut [Mat<f64>], x: &mut [f64]) {
        self.maps.add_adjoint(&self.weights, -1.0, points, x);
    }

    /// Computes C' = C - A*(h) with AA* h = A(C).
    fn project_cost(&mut self, problem: &Problem, meter: &mut Meter) {
        let mut cost = std::mem::take(&mut self.cost);
        let mut orthant = std::mem::take(&mut self.cost_orthant);
        for _ in 0..2 {
            self.maps.apply(&cost, &orthant, &mut self.residual);
            self.solve(meter);
            self.subtract_adjoint(&mut cost, &mut orthant);
        }
        let blocks: f64 = cost.iter().map(|c| dense::dot_symmetric(c.as_ref(), c.as_ref())).sum();
        self.cost_square = blocks + dot(&orthant, &orthant);
        let whole = problem.cost().norm();
        if self.cost_square.sqrt() > CONSTANT_COST * whole && whole > 0.0 {
            self.cut = Cut::Works;
        }
        self.cost = cost;
        self.cost_orthant = orthant;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::engines::alm::tests::mixed;
    use crate::seed::Stream;

    fn random_points(op: &Operator, label: &str) -> (Vec<Mat<f64>>, Vec<f64>) {
        let mut draw = Stream::named(3, &["affine", label]);
        let points = op
            .blocks
            .iter()
            .map(|block| {
                let mut point = Mat::zeros(block.order, block.order);
                for j in 0..block.order {
                    for i in 0..=j {
                        let value = draw.normal();
                        point[(i, j)] = value;
                        point[(j, i)] = value;
                    }
                }
                point
            })
            .collect();
        (points, vec![draw.normal(), draw.normal(), draw.normal()])
    }

    fn inner(a: &(Vec<Mat<f64>>, Vec<f64>), b: &(Vec<Mat<f64>>, Vec<f64>)) -> f64 {
        let blocks: f64 =
            a.0.iter().zip(&b.0).map(|(x, y)| dense::dot_symmetric(x.as_ref(), y.as_ref())).sum();
        blocks + dot(&a.1, &b.1)
    }

    fn minus(
        a: &(Vec<Mat<f64>>, Vec<f64>),
        b: &(Vec<Mat<f64>>, Vec<f64>),
    ) -> (Vec<Mat<f64>>, Vec<f64>) {
        let blocks = a.0.iter().zip(&b.0).map(|(x, y)| x - y).collect();
        (blocks, a.1.iter().zip(&b.1).map(|(x, y)| x - y).collect())
    }

    #[test]
    fn a_projection_is_feasible_idempotent_and_orthogonal_to_the_set() {
        let (problem, _, _) = mixed("affine");
        let op = Operator::new(&problem);
        let mut meter = Meter::unlimited();
        let mut projector = AffineProjector::new(&problem, &op, &mut meter).unwrap();
        let start = random_points(&op, "start");
        let mut once = start.clone();
        let scale = 1.0 + norm2(problem.rhs());
        assert!(projector.project(&mut once.0, &mut once.1, &mut meter) < 1e-12 * scale);
        let mut twice = once.clone();
        projector.project(&mut twice.0, &mut twice.1, &mut meter);
        let change = minus(&twice, &once);
        assert!(inner(&change, &change).sqrt() < 1e-12 * scale);
        let mut other = random_points(&op, "other");
        projector.project(&mut other.0, &mut other.1, &mut meter);
        let angle = inner(&minus(&start, &once), &minus(&other, &once));
        assert!(angle.abs() < 1e-9 * scale, "{angle}");
    }

    #[test]
    fn a_cut_projection_obeys_both_and_is_the_nearest_point() {
        let (problem, _, _) = mixed("affine");
        let op = Operator::new(&problem);
        let mut meter = Meter::unlimited();
        let mut projector = AffineProjector::new(&problem, &op, &mut meter).unwrap();
        assert_eq!(projector.cut(), Cut::Works);
        let start = random_points(&op, "start");
        let mut plain = start.clone();
        projector.project(&mut plain.0, &mut plain.1, &mut meter);
        let gamma = op.cost_dense(&plain.0, &plain.1) - 7.0;
        let mut cut = start.clone();
        let residual = projector.project_cut(&mut cut.0, &mut cut.1, gamma, &mut meter);
        assert!(residual < 1e-10, "{residual}");
        assert!((op.cost_dense(&cut.0, &cut.1) - gamma).abs() < 1e-9);
        // Variational inequality: <start - cut, other - cut> <= 0 for every other point of the set.
        for label in ["a", "b", "c"] {
            let mut other = random_points(&op, label);
            projector.project_cut(&mut other.0, &mut other.1, gamma - 1.0, &mut meter);
            let angle = inner(&minus(&start, &cut), &minus(&other, &cut));
            assert!(angle < 1e-8, "{angle}");
        }
        // A cut that does not bind changes nothing.
        let mut loose = start.clone();
        projector.project_cut(&mut loose.0, &mut loose.1, gamma + 100.0, &mut meter);
        let change = minus(&loose, &plain);
        assert!(inner(&change, &change).sqrt() < 1e-11);
    }

    #[test]
    fn dependent_rows_and_the_iterative_solver_give_the_same_point() {
        let (problem, _, _) = mixed("affine");
        let mut constraints = problem.constraints().to_vec();
        let mut rhs = problem.rhs().to_vec();
        constraints.push(constraints[0].clone());
        rhs.push(rhs[0]);
        let doubled = Problem::new(
            problem.blocks().to_vec(),
            problem.orthant(),
            problem.cost().clone(),
            constraints,
            rhs,
        )
        .unwrap();
        let (op, op_doubled) = (Operator::new(&problem), Operator::new(&doubled));
        let mut meter = Meter::unlimited();
        let mut projector = AffineProjector::new(&problem, &op, &mut meter).unwrap();
        let mut dependent = AffineProjector::new(&doubled, &op_doubled, &mut meter).unwrap();
        let start = random_points(&op, "start");
        let mut expected = start.clone();
        projector.project(&mut expected.0, &mut expected.1, &mut meter);
        let mut found = start.clone();
        dependent.project(&mut found.0, &mut found.1, &mut meter);
        let change = minus(&found, &expected);
        assert!(inner(&change, &change).sqrt() < 1e-8);
        dependent.solver = GramSolver::iterative(&doubled, &op_doubled);
        let mut found = start;
        dependent.project(&mut found.0, &mut found.1, &mut meter);
        let change = minus(&found, &expected);
        assert!(inner(&change, &change).sqrt() < 1e-9);
    }
}
