//! The saddle system solved densely, with a test of its inertia.
//!
//! K = H + lambda I + gamma G + sigma J'J is factored by Cholesky: with sigma large enough that succeeds if
//! and only if the Hessian is positive definite on the null space of J, so a failure means that the step
//! would not lead to a minimiser, and lambda must grow. Adding sigma J'J does not change the solution.
//! The multipliers follow from the Schur complement J K^-1 J' + delta I, delta being its largest diagonal entry
//! times the merit (within bounds), which tolerates dependent constraints and multipliers that are not unique;
//! refinement removes the trace of delta where J K^-1 J' is positive.

use super::system::System;
use crate::budget::Meter;
use crate::linalg::eigen::flops;
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, MatMut, cholesky, dense};

/// Weight of J'J in K, in scaled data.
const SIGMA: f64 = 10.0;
/// Least and greatest share of the largest diagonal entry that regularises the Schur complement; between them
/// it is the merit, so that multipliers which the constraints leave open move by no more than the error.
const DELTA: (f64, f64) = (1e-12, 1e-3);
/// Solutions of the Schur complement in one step: the first and refinements that take delta out again.
const ROUNDS: usize = 3;

/// Matrices of the dense solution, kept between steps.
pub struct DenseSolver {
    unknowns: usize,
    constraints: usize,
    k: Mat<f64>,
    half: Mat<f64>,
    schur: Mat<f64>,
    jacobian: Mat<f64>,
    work: Vec<f64>,
    right: Vec<f64>,
    workspace: Workspace,
}

impl DenseSolver {
    /// Takes memory for the given numbers of unknowns and constraints.
    pub fn new(unknowns: usize, constraints: usize) -> Self {
        DenseSolver {
            unknowns,
            constraints,
            k: Mat::zeros(unknowns, unknowns),
            half: Mat::zeros(unknowns, constraints),
            schur: Mat::zeros(constraints, constraints),
            jacobian: Mat::zeros(unknowns, constraints),
            work: vec![0.0; unknowns],
            right: vec![0.0; constraints],
            workspace: Workspace::new(),
        }
    }

    /// Computes the step (dz, dy); false when K or the Schur complement is not positive definite.
    pub fn solve(
        &mut self,
        system: &mut System<'_>,
        lambda: f64,
        merit: f64,
        step: &mut [f64],
        meter: &mut Meter,
    ) -> bool {
        let (n, m) = (self.unknowns, self.constraints);
        // 1. K and its factor.
        system.fill_jacobian(&mut self.jacobian);
        system.fill_hessian(&mut self.k);
        dense::syrk_lower(self.k.as_mut(), dense::Accumulate::Add, SIGMA, self.jacobian.as_ref());
        for i in 0..n {
            self.k[(i, i)] += lambda;
        }
        meter.effort.factorisations += 2;
        meter.effort.flops += flops::cholesky(n)
            + flops::cholesky(m)
            + flops::gemm(n, n, m) / 2
            + flops::triangular_solve(n, m)
            + flops::gemm(m, m, n) / 2;
        if cholesky::factor_in_place(self.k.as_mut(), &mut self.workspace).is_err() {
            return false;
        }
        // 2. Schur complement.
        self.half.copy_from(&self.jacobian);
        cholesky::solve_lower_matrix(self.k.as_ref(), self.half.as_mut());
        let half_t = self.half.as_ref().transpose();
        dense::syrk_lower(self.schur.as_mut(), dense::Accumulate::Replace, 1.0, half_t);
        let delta = merit.clamp(DELTA.0, DELTA.1);
        let largest = (0..m).fold(0.0_f64, |s, i| s.max(self.schur[(i, i)]));
        for i in 0..m {
            self.schur[(i, i)] += delta * largest + f64::MIN_POSITIVE;
        }
        if m > 0 && cholesky::factor_in_place(self.schur.as_mut(), &mut self.workspace).is_err() {
            return false;
        }
        // 3. dz0 = K^-1 (-g - sigma J'v), then dy from J dz = -v, with refinements of that equation.
        let (dz, dy) = step.split_at_mut(n);
        let gradient = system.gradient();
        for i in 0..n {
            dz[i] = -gradient[i];
        }
        dense::gemv(dz, dense::Accumulate::Add, -SIGMA, self.jacobian.as_ref(), system.residual());
        cholesky::solve_vector(self.k.as_ref(), dz);
        dy.fill(0.0);
        for _ in 0..ROUNDS {
            for i in 0..m {
                self.right[i] = -system.residual()[i];
            }
            let transposed = self.jacobian.as_ref().transpose();
            dense::gemv(&mut self.right, dense::Accumulate::Add, -1.0, transposed, dz);
            cholesky::solve_vector(self.schur.as_ref(), &mut self.right);
            crate::linalg::vector::axpy(1.0, &self.right, dy);
            let image = MatMut::from_column_major_slice_mut(&mut self.work, n, 1);
            let right = crate::linalg::MatRef::from_column_major_slice(&self.right, m, 1);
            dense::gemm(image, dense::Accumulate::Replace, 1.0, self.jacobian.as_ref(), right);
            cholesky::solve_vector(self.k.as_ref(), &mut self.work);
            crate::linalg::vector::axpy(1.0, &self.work, dz);
        }
        step.iter().all(|value| value.is_finite())
    }
}
