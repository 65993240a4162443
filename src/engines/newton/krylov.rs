//! The saddle system solved by preconditioned MINRES, matrix-free.
//!
//! Source: C. Paige and M. Saunders, SIAM Journal on Numerical Analysis 12:617-629 (1975),
//! 10.1137/0712047 (algorithm from memory; the tests hold it against a dense solution). The preconditioner is
//! diagonal: `|H| + J'J + lambda` for the unknowns, the Schur diagonal for the multipliers.

use super::system::System;
use crate::budget::Meter;
use crate::linalg::vector::{axpy, dot, scale};

/// Settings of one solution.
#[derive(Clone, Copy, Debug)]
pub struct MinresParams {
    /// Stops when the residual norm of the preconditioned system fell by this factor.
    pub tolerance: f64,
    /// Most products with the system.
    pub steps: usize,
    /// Levenberg term.
    pub lambda: f64,
}

/// Vectors of MINRES, kept between runs.
pub struct Minres {
    preconditioner: Vec<f64>,
    older: Vec<f64>,
    old: Vec<f64>,
    new: Vec<f64>,
    image: Vec<f64>,
    v: Vec<f64>,
    w_older: Vec<f64>,
    w_old: Vec<f64>,
    w: Vec<f64>,
}

impl Minres {
    /// Takes memory for a system of `order` unknowns and multipliers.
    pub fn new(order: usize) -> Self {
        let zeros = || vec![0.0; order];
        Minres {
            preconditioner: zeros(),
            older: zeros(),
            old: zeros(),
            new: zeros(),
            image: zeros(),
            v: zeros(),
            w_older: zeros(),
            w_old: zeros(),
            w: zeros(),
        }
    }

    /// Computes the step (dz, dy) and returns the number of products made.
    pub fn solve(
        &mut self,
        system: &mut System<'_>,
        params: &MinresParams,
        step: &mut [f64],
        meter: &mut Meter,
    ) -> usize {
        let n = system.unknowns();
        system.fill_preconditioner(params.lambda, &mut self.preconditioner);
        step.fill(0.0);
        for i in 0..n {
            self.old[i] = -system.gradient()[i];
        }
        for (value, v) in self.old[n..].iter_mut().zip(system.residual()) {
            *value = -v;
        }
        self.older.copy_from_slice(&self.old);
        self.w_old.fill(0.0);
        self.w_older.fill(0.0);
        divide(&self.old, &self.preconditioner, &mut self.new);
        let first = dot(&self.old, &self.new).max(0.0).sqrt();
        if first == 0.0 {
            return 0;
        }
        let (mut beta, mut beta_old) = (first, 0.0);
        let (mut cosine, mut sine) = (-1.0, 0.0);
        let (mut delta_bar, mut epsilon) = (0.0, 0.0);
        let mut phi = first;
        for count in 1..=params.steps {
            // 1. Lanczos: `old` is the residual vector r, `new` is M^-1 r.
            self.v.copy_from_slice(&self.new);
            scale(1.0 / beta, &mut self.v);
            apply(system, params.lambda, &self.v, &mut self.image);
            if count > 1 {
                axpy(-beta / beta_old, &self.older, &mut self.image);
            }
            let alpha = dot(&self.v, &self.image);
            axpy(-alpha / beta, &self.old, &mut self.image);
            std::mem::swap(&mut self.older, &mut self.old);
            self.old.copy_from_slice(&self.image);
            divide(&self.old, &self.preconditioner, &mut self.new);
            beta_old = beta;
            beta = dot(&self.old, &self.new).max(0.0).sqrt();
            // 2. Rotation.
            let epsilon_old = epsilon;
            let delta = cosine * delta_bar + sine * alpha;
            let gamma_bar = sine * delta_bar - cosine * alpha;
            epsilon = sine * beta;
            delta_bar = -cosine * beta;
            let gamma = gamma_bar.hypot(beta).max(f64::MIN_POSITIVE);
            cosine = gamma_bar / gamma;
            sine = beta / gamma;
            let length = cosine * phi;
            phi *= sine;
            // 3. Solution.
            std::mem::swap(&mut self.w_older, &mut self.w_old);
            std::mem::swap(&mut self.w_old, &mut self.w);
            for i in 0..self.w.len() {
                let w = self.v[i] - epsilon_old * self.w_older[i] - delta * self.w_old[i];
                self.w[i] = w / gamma;
                step[i] += length * self.w[i];
            }
            meter.effort.operator_products += 3;
            meter.effort.flops += system.lagrangian().flops() + 30 * self.w.len() as u64;
            if phi <= params.tolerance * first
                || beta <= f64::EPSILON * first
                || meter.check().is_err()
            {
                negate_multipliers(step, n);
                return count;
            }
        }
        negate_multipliers(step, n);
        params.steps
    }
}

/// The symmetric form has +J' where the Newton system has -J', so its multipliers carry the other sign.
fn negate_multipliers(step: &mut [f64], unknowns: usize) {
    scale(-1.0, &mut step[unknowns..]);
}

fn divide(a: &[f64], b: &[f64], out: &mut [f64]) {
    for i in 0..out.len() {
        out[i] = a[i] / b[i];
    }
}

/// Computes the product with `[H + lambda I + gamma G, J'; J, 0]`.
fn apply(system: &mut System<'_>, lambda: f64, x: &[f64], out: &mut [f64]) {
    let n = system.unknowns();
    let (d, w) = x.split_at(n);
    let (top, bottom) = out.split_at_mut(n);
    system.adjoint_times(w, top);
    system.add_hessian(d, top);
    system.add_gauge(d, top);
    axpy(lambda, d, top);
    system.jacobian_times(d, bottom);
}
