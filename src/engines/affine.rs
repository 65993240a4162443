//! Projection onto {A(X) + a(x) = b}, and onto its part with <C, X> + c'x <= gamma, for dense points.
//!
//! P(Z) = Z - A*(w) with AA* w = A(Z) - b. AA* is formed and factored for up to 1500 constraints; beyond that
//! the system is solved by conjugate gradients with the Jacobi preconditioner diag(||A_i||^2), which also
//! tolerates dependent rows of a consistent system. The intersection with the half-space is projected on in
//! closed form: with C' = C - A*(h), AA* h = A(C), the nearest point to Z is P(Z), or
//! P(Z) - t C', t = (<C, P(Z)> - gamma)/||C'||^2, when P(Z) lies beyond.
//!
//! It is for dense points: factors have their own restoration by Newton steps.

use crate::budget::Meter;
use crate::linalg::cg::{self, CgWorkspace, Diagonal};
use crate::linalg::eigen::flops;
use crate::linalg::lanczos::LinearOperator;
use crate::linalg::vector::{axpy, dot, norm2};
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, cholesky, dense};
use crate::problem::{Operator, Problem, Slack};

/// Most constraints for which AA* is factored.
pub const DIRECT_LIMIT: usize = 1500;
/// Share of the largest diagonal entry of AA* added to its diagonal, so that dependent rows do no harm;
/// refinement takes its effect out again.
const SHIFT: f64 = 1e-12;
/// Refinements of a direct solution.
const REFINEMENTS: usize = 2;
/// Conjugate gradients stop at this relative residual.
const CG_TOLERANCE: f64 = 1e-13;
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
    solver: Solver,
    weights: Vec<f64>,
    residual: Vec<f64>,
    slacks: Vec<Slack>,
    orthant_slack: Vec<f64>,
    cost: Vec<Mat<f64>>,
    cost_orthant: Vec<f64>,
    cost_square: f64,
    cut: Cut,
}

enum Solver {
    Direct { gram: Mat<f64>, factor: Mat<f64>, correction: Vec<f64> },
    Iterative { diagonal: Diagonal, images: Vec<Mat<f64>>, workspace: CgWorkspace },
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
        let m = op.constraints();
        let zeros =
            || op.blocks.iter().map(|b| Mat::zeros(b.order, b.order)).collect::<Vec<Mat<f64>>>();
        let solver = if m <= DIRECT_LIMIT {
            let gram = gram_matrix(problem, op);
            let mut factor = gram.clone();
            let largest = (0..m).fold(f64::MIN_POSITIVE, |s, i| s.max(gram[(i, i)]));
            for i in 0..m {
                factor[(i, i)] += SHIFT * largest;
            }
            cholesky::factor_in_place(factor.as_mut(), &mut Workspace::new())
                .map_err(|error| AffineError::NotPositive { constraints: m, pivot: error.index })?;
            meter.effort.factorisations += 1;
            meter.effort.flops += flops::cholesky(m);
            Solver::Direct { gram, factor, correction: vec![0.0; m] }
        } else {
            let square = |norm: f64| if norm > 0.0 { 1.0 / (norm * norm) } else { 1.0 };
            let entries = problem.constraints().iter().map(|a| square(a.norm())).collect();
            Solver::Iterative {
                diagonal: Diagonal { entries },
                images: zeros(),
                workspace: CgWorkspace::new(),
            }
        };
        let mut projector = AffineProjector {
            op,
            rhs: problem.rhs(),
            solver,
            weights: vec![0.0; m],
            residual: vec![0.0; m],
            slacks: op.blocks.iter().map(|block| block.slack()).collect(),
            orthant_slack: vec![0.0; problem.orthant()],
            cost: zeros(),
            cost_orthant: op.orthant_cost.clone(),
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
            let t = beyond / self.cost_square;
            for (point, cost) in points.iter_mut().zip(&self.cost) {
                dense::axpy_matrix(-t, cost.as_ref(), point.as_mut());
            }
            axpy(-t, &self.cost_orthant, x);
        }
        self.measure(points, x, meter);
        norm2(&self.residual)
    }

    fn measure(&mut self, points: &[Mat<f64>], x: &[f64], meter: &mut Meter) {
        self.op.apply_dense(points, x, &mut self.residual);
        axpy(-1.0, self.rhs, &mut self.residual);
        meter.effort.operator_products += 1;
        meter.effort.flops +=
            self.op.blocks.iter().map(|block| block.flops_per_column()).sum::<u64>();
    }

    /// Solves AA* w = residual.
    fn solve(&mut self, meter: &mut Meter) {
        match &mut self.solver {
            Solver::Direct { gram, factor, correction } => {
                self.weights.fill(0.0);
                correction.copy_from_slice(&self.residual);
                for round in 0..=REFINEMENTS {
                    cholesky::solve_vector(factor.as_ref(), correction);
                    axpy(1.0, correction, &mut self.weights);
                    if round == REFINEMENTS {
                        break;
                    }
                    correction.copy_from_slice(&self.residual);
                    let product = dense::Accumulate::Add;
                    dense::gemv(correction, product, -1.0, gram.as_ref(), &self.weights);
                }
                let m = self.weights.len() as u64;
                meter.effort.flops += (REFINEMENTS as u64 + 1) * 4 * m * m;
            }
            Solver::Iterative { diagonal, images, workspace } => {
                let mut product = Product {
                    op: self.op,
                    slacks: &mut self.slacks,
                    images,
                    x: &mut self.orthant_slack,
                };
                self.weights.fill(0.0);
                let params = cg::Params { tolerance: CG_TOLERANCE, max_steps: 2000 };
                let info = cg::solve_preconditioned(
                    &mut product,
                    diagonal,
                    &self.residual,
                    &mut self.weights,
                    &params,
                    workspace,
                );
                meter.effort.operator_products += 2 * info.steps as u64;
            }
        }
    }

    /// Subtracts A*(w).
    fn subtract_adjoint(&mut self, points: &mut [Mat<f64>], x: &mut [f64]) {
        for (k, block) in self.op.blocks.iter().enumerate() {
            block.fill_slack(&self.weights, 0.0, &mut self.slacks[k]);
            block.add_slack_to(&self.slacks[k], 1.0, &mut points[k]);
        }
        self.op.orthant_slack(&self.weights, 0.0, &mut self.orthant_slack);
        axpy(1.0, &self.orthant_slack, x);
    }

    /// Computes C' = C - A*(h) with AA* h = A(C).
    fn project_cost(&mut self, problem: &Problem, meter: &mut Meter) {
        let zero = vec![0.0; self.op.constraints()];
        let mut cost = std::mem::take(&mut self.cost);
        let mut orthant = std::mem::take(&mut self.cost_orthant);
        for (k, block) in self.op.blocks.iter().enumerate() {
            block.fill_slack(&zero, 1.0, &mut self.slacks[k]);
            block.add_slack_to(&self.slacks[k], 1.0, &mut cost[k]);
        }
        for _ in 0..2 {
            self.op.apply_dense(&cost, &orthant, &mut self.residual);
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

/// w -> A(A*(w)), by way of dense images.
struct Product<'a, 'b> {
    op: &'a Operator,
    slacks: &'b mut [Slack],
    images: &'b mut [Mat<f64>],
    x: &'b mut [f64],
}

impl LinearOperator for Product<'_, '_> {
    fn order(&self) -> usize {
        self.op.constraints()
    }

    fn apply(&mut self, w: &[f64], out: &mut [f64]) {
        for (k, block) in self.op.blocks.iter().enumerate() {
            block.fill_slack(w, 0.0, &mut self.slacks[k]);
            self.images[k].fill(0.0);
            block.add_slack_to(&self.slacks[k], -1.0, &mut self.images[k]);
        }
        self.op.orthant_slack(w, 0.0, self.x);
        self.x.iter_mut().for_each(|value| *value = -*value);
        self.op.apply_dense(self.images, self.x, out);
    }
}

/// Forms AA*, both triangles: inner products of all constraints.
fn gram_matrix(problem: &Problem, op: &Operator) -> Mat<f64> {
    let m = op.constraints();
    let mut gram = Mat::zeros(m, m);
    for block in &op.blocks {
        // 1. Sparse with sparse: constraints that share a place, sorted by place.
        let entries = &block.entries;
        let mut places: Vec<(u32, u32, u32, f64)> = Vec::with_capacity(entries.values.len());
        for (g, &id) in entries.ids.iter().enumerate() {
            places.extend(
                entries
                    .range(g)
                    .map(|k| (entries.columns[k], entries.rows[k], id, entries.values[k])),
            );
        }
        places.sort_by_key(|place| (place.0, place.1, place.2));
        for same in places.chunk_by(|a, b| (a.0, a.1) == (b.0, b.1)) {
            let weight = if same[0].0 == same[0].1 { 1.0 } else { 2.0 };
            for a in same {
                for b in same {
                    gram[(a.2 as usize, b.2 as usize)] += weight * a.3 * b.3;
                }
            }
        }
        // 2. Long outer products with each other and with the sparse parts.
        let Some(outer) = &block.outer else { continue };
        let count = outer.ids.len();
        for k in 0..count {
            let a = outer.vectors.col_as_slice(k);
            let id = outer.ids[k] as usize;
            for l in 0..count {
                let inner = dot(a, outer.vectors.col_as_slice(l));
                gram[(id, outer.ids[l] as usize)] +=
                    outer.weights[k] * outer.weights[l] * inner * inner;
            }
            for (g, &other) in entries.ids.iter().enumerate() {
                let sum: f64 = entries
                    .range(g)
                    .map(|e| {
                        let (i, j) = (entries.rows[e] as usize, entries.columns[e] as usize);
                        let value = entries.values[e] * a[i] * a[j];
                        if i == j { value } else { 2.0 * value }
                    })
                    .sum();
                gram[(id, other as usize)] += outer.weights[k] * sum;
                gram[(other as usize, id)] += outer.weights[k] * sum;
            }
        }
    }
    // 3. The nonnegative part.
    let mut columns: Vec<Vec<(usize, f64)>> = vec![Vec::new(); problem.orthant()];
    for (id, row) in op.orthant_rows.iter().enumerate() {
        row.iter().for_each(|(index, a)| columns[index].push((id, a)));
    }
    for column in columns {
        for &(i, a) in &column {
            for &(j, b) in &column {
                gram[(i, j)] += a * b;
            }
        }
    }
    gram
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
        dependent.solver = Solver::Iterative {
            diagonal: Diagonal {
                entries: doubled.constraints().iter().map(|a| 1.0 / a.norm().powi(2)).collect(),
            },
            images: op.blocks.iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
            workspace: CgWorkspace::new(),
        };
        let mut found = start;
        dependent.project(&mut found.0, &mut found.1, &mut meter);
        let change = minus(&found, &expected);
        assert!(inner(&change, &change).sqrt() < 1e-9);
    }
}
