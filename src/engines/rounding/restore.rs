//! Moves factors onto A(X) + a(x) = b without regard to the objective: damped Gauss-Newton steps in factor form.
//!
//! X_k = R_k R_k', x = u o u, all in one vector z as in [`crate::engines::alm::lagrangian`]; with v = A(z) - b and J its
//! Jacobian a step solves (J'J + lambda I) d = -J'v by conjugate gradients, lambda = 1e-3 ||v|| in scaled data, and goes to
//! the least of ||v||^2 along d, a quartic, exactly. Without the term lambda this is the step of least norm onto the linearised
//! constraints (K. Levenberg, Quarterly of Applied Mathematics 2:164-168, 1944; D. Marquardt, Journal of SIAM 11:431-441,
//! 1963; from memory). Entries of u that are 0 stay 0.
//!
//! It is for factors; dense points have [`crate::engines::affine`].

use crate::budget::{Halt, Meter};
use crate::engines::alm::lagrangian::Lagrangian;
use crate::engines::alm::quartic::least_step;
use crate::linalg::cg::{self, CgWorkspace};
use crate::linalg::lanczos::LinearOperator;
use crate::linalg::vector::{axpy, norm2, scale};
use crate::problem::{Factor, Operator, Problem};

/// lambda over ||v||.
const DAMPING: f64 = 1e-3;
/// A step that keeps more than this share of ||v|| is poor; this many in a row end the run.
const POOR: f64 = 0.9;
/// See [`POOR`].
const POOR_STEPS: usize = 5;

/// Settings of a restoration.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RestoreParams {
    /// Stops when ||A(X) - b||_2 <= tolerance (1 + ||b||_2).
    pub tolerance: f64,
    /// Most steps.
    pub steps: usize,
    /// Most products in one conjugate gradient run.
    pub products: usize,
}

impl Default for RestoreParams {
    fn default() -> Self {
        RestoreParams { tolerance: 1e-13, steps: 40, products: 300 }
    }
}

/// What a restoration did.
#[derive(Clone, Debug, PartialEq)]
pub struct RestoreInfo {
    /// ||A(X) - b||_2 / (1 + ||b||_2) at the start.
    pub before: f64,
    /// The same at the end; never above that of the start.
    pub after: f64,
    /// Steps made.
    pub steps: usize,
    /// Why it ended early, if it did.
    pub halt: Option<Halt>,
}

/// A restorer for factors of fixed widths, with all memory it needs.
pub struct Restorer<'a> {
    problem: &'a Problem,
    l: Lagrangian<'a>,
    zero: Vec<f64>,
    right: Vec<f64>,
    step: Vec<f64>,
    workspace: CgWorkspace,
}

impl<'a> Restorer<'a> {
    /// Takes memory for factors of the given widths.
    pub fn new(problem: &'a Problem, op: &'a Operator, widths: &[usize]) -> Self {
        let mut l = Lagrangian::new(problem, op, widths);
        // The objective plays no part.
        l.scaling.cost = 0.0;
        let length = l.layout.length();
        Restorer {
            problem,
            zero: vec![0.0; op.constraints()],
            right: vec![0.0; length],
            step: vec![0.0; length],
            workspace: CgWorkspace::new(),
            l,
        }
    }

    /// Restores the constraints as far as the steps lead.
    #[track_caller]
    pub fn restore(
        &mut self,
        factors: &mut [Factor],
        orthant: &mut [f64],
        params: &RestoreParams,
        meter: &mut Meter,
    ) -> RestoreInfo {
        self.l.import(factors, orthant, &self.zero);
        let before = self.l.feasibility(self.problem);
        let mut info = RestoreInfo { before, after: before, steps: 0, halt: None };
        let mut poor = 0;
        while info.steps < params.steps && info.after > params.tolerance && poor < POOR_STEPS {
            if let Err(halt) = meter.check() {
                info.halt = Some(halt);
                break;
            }
            let size = norm2(&self.l.residual);
            self.direction(size, params.products, meter);
            self.plain();
            let Some(a) = least_step(self.l.line(&self.step)) else { break };
            self.l.advance(a, &self.step);
            self.l.refresh();
            if norm2(&self.l.residual) > POOR * size {
                poor += 1;
            } else {
                poor = 0;
            }
            info.steps += 1;
            meter.effort.inner_steps += 1;
            info.after = self.l.feasibility(self.problem);
        }
        if info.steps > 0 {
            self.export(factors, orthant);
        }
        info
    }

    /// Makes the Lagrangian ||v||^2/2.
    fn plain(&mut self) {
        self.l.y.fill(0.0);
        self.l.sigma = 1.0;
    }

    fn direction(&mut self, size: f64, products: usize, meter: &mut Meter) {
        self.plain();
        self.l.compute_gradient();
        self.right.copy_from_slice(&self.l.gradient);
        scale(-1.0, &mut self.right);
        self.step.fill(0.0);
        let tolerance = (0.1 * size).clamp(1e-10, 1e-2);
        let params = cg::Params { tolerance, max_steps: products };
        let mut normal = Normal { l: &mut self.l, damping: DAMPING * size };
        let info =
            cg::solve(&mut normal, &self.right, &mut self.step, &params, &mut self.workspace);
        meter.effort.operator_products += 2 * info.steps as u64 + 3;
        meter.effort.flops += (info.steps as u64 + 2) * self.l.flops();
    }

    fn export(&self, factors: &mut [Factor], orthant: &mut [f64]) {
        let root = self.l.scaling.variable.sqrt();
        for (factor, range) in factors.iter_mut().zip(&self.l.layout.ranges) {
            for (out, value) in factor.data.iter_mut().zip(&self.l.z[range.clone()]) {
                *out = root * value;
            }
        }
        for (x, u) in orthant.iter_mut().zip(&self.l.z[self.l.layout.orthant.clone()]) {
            *x = self.l.scaling.variable * u * u;
        }
    }
}

/// d -> (J'J + damping I) d.
struct Normal<'l, 'a> {
    l: &'l mut Lagrangian<'a>,
    damping: f64,
}

impl LinearOperator for Normal<'_, '_> {
    fn order(&self) -> usize {
        self.l.z.len()
    }

    fn apply(&mut self, d: &[f64], out: &mut [f64]) {
        self.l.line(d);
        // With penalty 0 and multipliers -w the gradient is J'w.
        self.l.sigma = 0.0;
        self.l.take_first_as_multipliers(-1.0);
        self.l.compute_gradient();
        out.copy_from_slice(&self.l.gradient);
        axpy(self.damping, d, out);
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::engines::alm::tests::mixed;
    use crate::seed::Stream;

    #[test]
    fn a_disturbed_feasible_point_is_brought_back_at_the_rate_of_newton() {
        let (problem, mut factors, mut x) = mixed("restore");
        let op = Operator::new(&problem);
        let mut draw = Stream::named(4, &["restore"]);
        for factor in &mut factors {
            factor.data.iter_mut().for_each(|value| *value += 1e-2 * draw.normal());
        }
        x.iter_mut().for_each(|value| *value += 1e-2 * draw.uniform());
        let away = factors.clone();
        let mut meter = Meter::unlimited();
        let mut restorer = Restorer::new(&problem, &op, &[3, 2]);
        let info = restorer.restore(&mut factors, &mut x, &RestoreParams::default(), &mut meter);
        assert!(info.before > 1e-4 && info.after <= 1e-12, "{info:?}");
        assert!(info.steps <= 6, "{info:?}");
        // The measured residual is that of the factors returned.
        let mut values = vec![0.0; op.constraints()];
        op.apply_factors(&factors, &x, &mut values);
        axpy(-1.0, problem.rhs(), &mut values);
        assert!(norm2(&values) <= 1e-11 * (1.0 + norm2(problem.rhs())));
        // It is a near point, not just any.
        let moved: f64 = factors
            .iter()
            .zip(&away)
            .map(|(a, b)| crate::linalg::vector::distance(&a.data, &b.data))
            .sum();
        assert!(moved < 1.0, "{moved}");
    }

    #[test]
    fn an_infeasible_set_leaves_the_residual_no_worse_than_before() {
        // Two contradictory values of one entry.
        use crate::problem::{Block, Coefficient, Functional, SparseSymmetric};
        let entry = || {
            Functional::on_block(
                0,
                Coefficient::Sparse(SparseSymmetric::gather(2, vec![(0, 0, 1.0)])),
            )
        };
        let blocks = vec![Block { order: 2, rank: Some(1) }];
        let cost = Functional::default();
        let problem =
            Problem::new(blocks, 0, cost, vec![entry(), entry()], vec![1.0, 2.0]).unwrap();
        let op = Operator::new(&problem);
        let mut factors = vec![Factor { order: 2, width: 1, data: vec![3.0, 1.0] }];
        let mut meter = Meter::unlimited();
        let mut restorer = Restorer::new(&problem, &op, &[1]);
        let info = restorer.restore(&mut factors, &mut [], &RestoreParams::default(), &mut meter);
        assert!(info.after < info.before, "{info:?}");
        // The least-squares value of the entry is 3/2.
        assert!((factors[0].data[0].powi(2) - 1.5).abs() < 1e-6, "{factors:?}");
    }
}
