//! Restoration of feasibility in factor form, the same for every method.
//!
//! The unknowns are the factors R of all blocks and roots z of the nonnegative part, x = z * z, so that
//! the point stays PSD, nonnegative and of its rank. Each step solves the linearised equations
//! `A(R D' + D R') = b - A(R R')` for the D of least norm: `D = J'u` with `(J J') u` = residual, by
//! conjugate gradients on the m x m normal operator, which is only applied, never formed. At most 20
//! steps are taken (a step that does not reduce the residual is halved up to six times, then
//! restoration ends); the point of least residual is returned. Work is counted, not timed, and bounded,
//! so that the outcome does not depend on the machine. This is no solver: it does not look at the
//! objective, and it moves within the width of the factors it is given: a block truncated to zero
//! stays zero.

use super::measure::View;
use super::truncate::plain_dot;
use crate::problem::{Coefficient, Factor, Functional, Problem};

/// Most steps.
const STEPS: usize = 20;

/// Most halvings of one step.
const HALVINGS: usize = 6;

/// Most conjugate-gradient iterations of one step.
const INNER_STEPS: usize = 300;

/// Residual reduction at which the conjugate gradients of one step stop.
const INNER_REDUCTION: f64 = 1e-9;

/// Restoration ends at `||b - A(X)||_2 <= 1e-14 (1 + ||b||_2)`: rounding rules below.
const ENOUGH: f64 = 1e-14;

/// Restoration ends when a step leaves more than this share of the residual.
const STALL: f64 = 0.99;

/// Most multiplications of all conjugate-gradient iterations together.
const WORK: u64 = 4_000_000_000;

/// The restored point.
pub(super) struct Restored {
    pub factors: Vec<Factor>,
    pub orthant: Vec<f64>,
    /// b - A(X) of it.
    pub residual: Vec<f64>,
}

/// Factors and roots together: a point, a step or a gradient.
#[derive(Clone)]
struct Stacked {
    factors: Vec<Factor>,
    roots: Vec<f64>,
}

impl Stacked {
    fn squares(&self) -> Vec<f64> {
        self.roots.iter().map(|root| root * root).collect()
    }

    fn residual(&self, problem: &Problem) -> Vec<f64> {
        View::of_factors(problem, &self.factors, &self.squares()).residual(problem)
    }

    fn plus(&self, scale: f64, step: &Stacked) -> Stacked {
        let mut out = self.clone();
        for (target, source) in out.factors.iter_mut().zip(&step.factors) {
            target.data.iter_mut().zip(&source.data).for_each(|(t, s)| *t += scale * s);
        }
        out.roots.iter_mut().zip(&step.roots).for_each(|(t, s)| *t += scale * s);
        out
    }

    fn clear(&mut self) {
        self.factors.iter_mut().for_each(|factor| factor.data.fill(0.0));
        self.roots.fill(0.0);
    }
}

/// Restores feasibility from `factors` and `orthant`, whose residual is `residual`.
pub(super) fn restore(
    problem: &Problem,
    factors: &[Factor],
    orthant: &[f64],
    residual: &[f64],
) -> Restored {
    let enough = ENOUGH * (1.0 + norm(problem.rhs()));
    let mut point = Stacked {
        factors: factors.to_vec(),
        roots: orthant.iter().map(|value| value.sqrt()).collect(),
    };
    let mut residual = residual.to_vec();
    let mut step = point.clone();
    let mut moved = false;
    let mut work_left = WORK;
    for _ in 0..STEPS {
        let before = norm(&residual);
        if before <= enough || before.is_nan() || work_left == 0 {
            break;
        }
        least_norm_step(problem, &point, &residual, &mut step, &mut work_left);
        let trials = (0..=HALVINGS).map(|halving| 0.5f64.powi(halving as i32));
        let better = trials
            .map(|scale| point.plus(scale, &step))
            .map(|trial| (trial.residual(problem), trial))
            .find(|(after, _)| norm(after) < before);
        let Some((after, trial)) = better else { break };
        let stalled = norm(&after) > STALL * before;
        (residual, point, moved) = (after, trial, true);
        if stalled {
            break;
        }
    }
    let orthant = if moved { point.squares() } else { orthant.to_vec() };
    Restored { factors: point.factors, orthant, residual }
}

/// Computes the step J'u with (J J')u = `residual` by conjugate gradients.
fn least_norm_step(
    problem: &Problem,
    point: &Stacked,
    residual: &[f64],
    step: &mut Stacked,
    work_left: &mut u64,
) {
    let cost = application_cost(problem, point);
    let m = residual.len();
    let mut u = vec![0.0; m];
    let mut rest = residual.to_vec();
    let mut direction = rest.clone();
    let mut image = vec![0.0; m];
    let mut squared = plain_dot(&rest, &rest);
    let goal = squared * INNER_REDUCTION * INNER_REDUCTION;
    for _ in 0..INNER_STEPS.min(2 * m + 10) {
        if *work_left < cost {
            *work_left = 0;
            break;
        }
        *work_left -= cost;
        adjoint(problem, point, &direction, step);
        forward(problem, point, step, &mut image);
        let curvature = plain_dot(&direction, &image);
        // A direction in the null space of J': the equations are dependent and this is all they give.
        if curvature <= 0.0 || curvature.is_nan() {
            break;
        }
        let length = squared / curvature;
        for i in 0..m {
            u[i] += length * direction[i];
            rest[i] -= length * image[i];
        }
        let next = plain_dot(&rest, &rest);
        if next <= goal || next.is_nan() {
            break;
        }
        let turn = next / squared;
        for i in 0..m {
            direction[i] = rest[i] + turn * direction[i];
        }
        squared = next;
    }
    adjoint(problem, point, &u, step);
}

/// Counts the multiplications of one application of J J'.
fn application_cost(problem: &Problem, point: &Stacked) -> u64 {
    let mut cost = 1;
    for constraint in problem.constraints() {
        for (block, coefficient) in &constraint.parts {
            let width = point.factors[*block].width as u64;
            let stored = match coefficient {
                Coefficient::Sparse(matrix) => 2 * matrix.stored(),
                Coefficient::Outer(sum) => {
                    2 * sum.terms.iter().map(|term| term.vector.len()).sum::<usize>()
                }
            };
            cost += 2 * stored as u64 * width;
        }
        cost += 2 * constraint.orthant.len() as u64;
    }
    cost
}

/// Writes J'u, that is `2 A*(u) R` and `2 A*(u) z`, into `out`.
fn adjoint(problem: &Problem, point: &Stacked, u: &[f64], out: &mut Stacked) {
    out.clear();
    for (constraint, &weight) in problem.constraints().iter().zip(u) {
        for (block, coefficient) in &constraint.parts {
            add_product(
                coefficient,
                2.0 * weight,
                &point.factors[*block],
                &mut out.factors[*block],
            );
        }
        for (i, value) in constraint.orthant.iter() {
            out.roots[i] += 2.0 * weight * value * point.roots[i];
        }
    }
}

/// Adds `weight * A R` to `out`.
fn add_product(coefficient: &Coefficient, weight: f64, factor: &Factor, out: &mut Factor) {
    let mut add = |to: usize, scale: f64, from: &[f64]| {
        out.row_mut(to).iter_mut().zip(from).for_each(|(target, value)| *target += scale * value);
    };
    match coefficient {
        Coefficient::Sparse(matrix) => {
            for (i, j, value) in matrix.iter() {
                add(i, weight * value, factor.row(j));
                if i != j {
                    add(j, weight * value, factor.row(i));
                }
            }
        }
        Coefficient::Outer(sum) => {
            let mut image = vec![0.0; factor.width];
            for term in &sum.terms {
                image_of(&term.vector, factor, &mut image);
                for (i, a) in term.vector.iter() {
                    add(i, weight * term.weight * a, &image);
                }
            }
        }
    }
}

/// Writes V'a into `image`.
fn image_of(vector: &crate::problem::SparseVector, factor: &Factor, image: &mut [f64]) {
    image.fill(0.0);
    for (i, a) in vector.iter() {
        image.iter_mut().zip(factor.row(i)).for_each(|(sum, value)| *sum += a * value);
    }
}

/// Writes J D, that is `A(R D' + D R')` and `2 A(z * d)`, into `out`.
fn forward(problem: &Problem, point: &Stacked, step: &Stacked, out: &mut [f64]) {
    for (constraint, value) in problem.constraints().iter().zip(out) {
        *value = derivative(constraint, point, step);
    }
}

fn derivative(constraint: &Functional, point: &Stacked, step: &Stacked) -> f64 {
    let mut sum = 0.0;
    for (block, coefficient) in &constraint.parts {
        let (factor, change) = (&point.factors[*block], &step.factors[*block]);
        match coefficient {
            Coefficient::Sparse(matrix) => {
                for (i, j, value) in matrix.iter() {
                    let one_way = plain_dot(factor.row(i), change.row(j));
                    let other_way =
                        if i == j { 0.0 } else { plain_dot(factor.row(j), change.row(i)) };
                    sum += value * (one_way + other_way);
                }
            }
            Coefficient::Outer(outer) => {
                let mut here = vec![0.0; factor.width];
                let mut there = vec![0.0; factor.width];
                for term in &outer.terms {
                    image_of(&term.vector, factor, &mut here);
                    image_of(&term.vector, change, &mut there);
                    sum += term.weight * plain_dot(&here, &there);
                }
            }
        }
    }
    for (i, value) in constraint.orthant.iter() {
        sum += value * point.roots[i] * step.roots[i];
    }
    2.0 * sum
}

fn norm(x: &[f64]) -> f64 {
    plain_dot(x, x).sqrt()
}
