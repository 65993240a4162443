//! A trust-region Newton method on a product of unit spheres, minimising f(Q) = <C, QQ'>/2.
//!
//! With y_i = q_i.(CQ)_i and S = C - Diag(y): the gradient is S Q and the Hessian form along tangent D is
//! <D, S D> (projected). The subproblem is solved by truncated conjugate gradients with the diagonal of S as
//! preconditioner (T. Steihaug, SIAM Journal on Numerical Analysis 20:626-637, 1983; P.-A. Absil, C. Baker, K.
//! Gallivan, Foundations of Computational Mathematics 7:303-330, 2007; both from memory), the retraction
//! normalises rows. The change of f is summed as <Q+ - Q, S Q+ + S Q>/2 with the old y, which is exact
//! because rows keep their length and which does not cancel near a solution.

use super::cost::SphereBlock;
use crate::budget::{Halt, Meter};
use crate::linalg::vector::{axpy, dot, norm2};

/// Accepts a step when the fall is at least this share of the predicted one.
const ACCEPT: f64 = 0.05;
/// Residual of the subproblem relative to its start: min(this, |g| relative to the first gradient).
const FORCING: f64 = 0.1;

/// Settings of a run.
#[derive(Clone, Copy, Debug)]
pub struct TrustParams {
    /// Stops when ||S Q||_F <= tolerance * ||y||_2.
    pub tolerance: f64,
    /// Most outer steps.
    pub outer: usize,
    /// Most products in one subproblem.
    pub inner: usize,
}

/// How a run ended.
#[derive(Clone, Debug, PartialEq)]
pub enum TrustEnd {
    /// The tolerance is met.
    Converged,
    /// The outer limit was reached.
    Limit,
    /// Steps no longer change the point.
    Stalled,
    /// The budget ended.
    Halted(Halt),
}

/// Vectors of a run, kept between runs.
#[derive(Clone, Debug, Default)]
pub struct TrustWorkspace {
    image: Vec<f64>,
    gradient: Vec<f64>,
    eta: Vec<f64>,
    image_eta: Vec<f64>,
    residual: Vec<f64>,
    direction: Vec<f64>,
    image_direction: Vec<f64>,
    trial: Vec<f64>,
    trial_image: Vec<f64>,
    /// Row products y_i.
    pub y: Vec<f64>,
    weights: Vec<f64>,
}

impl TrustWorkspace {
    fn resize(&mut self, order: usize, width: usize) {
        for v in [
            &mut self.image,
            &mut self.gradient,
            &mut self.eta,
            &mut self.image_eta,
            &mut self.residual,
            &mut self.direction,
            &mut self.image_direction,
            &mut self.trial,
            &mut self.trial_image,
        ] {
            v.resize(order * width, 0.0);
        }
        self.y.resize(order, 0.0);
        self.weights.resize(order, 0.0);
    }
}

/// Minimises f from the unit rows in `q`; afterwards `ws.y` holds the row products.
pub fn minimise(
    block: &SphereBlock,
    q: &mut [f64],
    width: usize,
    params: &TrustParams,
    ws: &mut TrustWorkspace,
    meter: &mut Meter,
) -> TrustEnd {
    ws.resize(block.order, width);
    block.product(q, width, &mut ws.image);
    let mut size = refresh(q, width, ws);
    let first = size;
    let scale: f64 = ws.weights.iter().sum::<f64>().sqrt();
    let (mut radius, largest) = (0.5 * scale, 2.0 * scale);
    let mut rejected = 0;
    for _ in 0..params.outer {
        if size <= params.tolerance * norm2(&ws.y) {
            return TrustEnd::Converged;
        }
        // 1. Step.
        let forcing = FORCING.min(size / first.max(f64::MIN_POSITIVE)).max(1e-8);
        let model = match truncated_gradients(block, q, width, radius, forcing, params.inner, ws, meter) {
            Ok(model) => model,
            Err(halt) => return TrustEnd::Halted(halt),
        };
        // 2. Trial point and its image.
        for (i, (t, (row, step))) in ws
            .trial
            .chunks_exact_mut(width)
            .zip(q.chunks_exact(width).zip(ws.eta.chunks_exact(width)))
            .enumerate()
        {
            debug_assert!(i < block.order);
            let mut square = 0.0;
            for k in 0..width {
                t[k] = row[k] + step[k];
                square += t[k] * t[k];
            }
            let inverse = 1.0 / square.sqrt();
            t.iter_mut().for_each(|value| *value *= inverse);
        }
        block.product(&ws.trial, width, &mut ws.trial_image);
        meter.effort.operator_products += 1;
        meter.effort.inner_steps += 1;
        meter.effort.flops += block.flops(width) + 12 * (block.order * width) as u64;
        // 3. Actual against predicted change.
        let actual = change(q, width, ws);
        let noise = 1e-15 * norm2(&ws.y) * norm2(&ws.eta);
        let ratio = (actual - noise) / (model.change - noise);
        let accept = ratio > ACCEPT && actual <= noise;
        if ratio < 0.25 || !ratio.is_finite() {
            radius = 0.25 * radius.min(model.length);
        } else if ratio > 0.75 && model.reach == Reach::Boundary {
            radius = (2.0 * radius).min(largest);
        }
        if accept {
            q.copy_from_slice(&ws.trial);
            std::mem::swap(&mut ws.image, &mut ws.trial_image);
            size = refresh(q, width, ws);
            rejected = 0;
        } else {
            rejected += 1;
            if rejected > 12 || norm2(&ws.eta) <= 1e-15 * norm2(q) {
                return TrustEnd::Stalled;
            }
        }
    }
    TrustEnd::Limit
}

/// Computes y, the gradient and the preconditioner from the image and returns the gradient's norm.
fn refresh(q: &[f64], width: usize, ws: &mut TrustWorkspace) -> f64 {
    let mut mean = 0.0;
    for (i, (row, image)) in q.chunks_exact(width).zip(ws.image.chunks_exact(width)).enumerate() {
        let y: f64 = row.iter().zip(image).map(|(a, b)| a * b).sum();
        ws.y[i] = y;
        mean += y.abs();
        let gradient = &mut ws.gradient[i * width..][..width];
        for k in 0..width {
            gradient[k] = image[k] - y * row[k];
        }
    }
    let floor = 1e-2 * mean / ws.y.len() as f64 + f64::MIN_POSITIVE;
    for (weight, y) in ws.weights.iter_mut().zip(&ws.y) {
        *weight = (-y).max(floor);
    }
    norm2(&ws.gradient)
}

/// Returns f(trial) - f(q), with the old y.
fn change(q: &[f64], width: usize, ws: &TrustWorkspace) -> f64 {
    let mut sum = 0.0;
    for (i, row) in q.chunks_exact(width).enumerate() {
        let at = i * width;
        for k in 0..width {
            let step = ws.trial[at + k] - row[k];
            let images = ws.trial_image[at + k] - ws.y[i] * ws.trial[at + k] + ws.gradient[at + k];
            sum += step * images;
        }
    }
    0.5 * sum
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Reach {
    Inside,
    Boundary,
}

struct Model {
    change: f64,
    length: f64,
    reach: Reach,
}

/// Truncated conjugate gradients for the step `ws.eta`.
fn truncated_gradients(
    block: &SphereBlock,
    q: &[f64],
    width: usize,
    radius: f64,
    forcing: f64,
    limit: usize,
    ws: &mut TrustWorkspace,
    meter: &mut Meter,
) -> Result<Model, Halt> {
    ws.eta.fill(0.0);
    ws.image_eta.fill(0.0);
    ws.residual.copy_from_slice(&ws.gradient);
    let mut rho = precondition(&ws.residual, &ws.weights, width, 0.0, &mut ws.direction);
    let start = norm2(&ws.residual);
    // Squared lengths in the norm of the preconditioner: of eta, of eta with the direction, of the direction.
    let (mut ee, mut ed, mut dd) = (0.0, 0.0, rho);
    let mut reach = Reach::Inside;
    for _ in 0..limit {
        meter.check()?;
        block.product(&ws.direction, width, &mut ws.image_direction);
        meter.effort.operator_products += 1;
        meter.effort.flops += block.flops(width) + 20 * (block.order * width) as u64;
        let curvature = project_image(q, width, &ws.y, &ws.direction, &mut ws.image_direction);
        let alpha = rho / curvature;
        let longer = ee + alpha * (2.0 * ed + alpha * dd);
        if !(curvature > 0.0) || longer >= radius * radius {
            let left = (radius * radius - ee).max(0.0);
            let tau = left / (ed + (ed * ed + dd * left).sqrt());
            if tau.is_finite() {
                axpy(tau, &ws.direction, &mut ws.eta);
                axpy(tau, &ws.image_direction, &mut ws.image_eta);
                ee = radius * radius;
            }
            reach = Reach::Boundary;
            break;
        }
        ee = longer;
        axpy(alpha, &ws.direction, &mut ws.eta);
        axpy(alpha, &ws.image_direction, &mut ws.image_eta);
        axpy(alpha, &ws.image_direction, &mut ws.residual);
        if norm2(&ws.residual) <= forcing * start {
            break;
        }
        let next = weighted_square(&ws.residual, &ws.weights, width);
        let beta = next / rho;
        precondition(&ws.residual, &ws.weights, width, beta, &mut ws.direction);
        ed = beta * (ed + alpha * dd);
        dd = next + beta * beta * dd;
        rho = next;
    }
    let change = dot(&ws.gradient, &ws.eta) + 0.5 * dot(&ws.eta, &ws.image_eta);
    Ok(Model { change, length: ee.sqrt(), reach })
}

/// Sets `direction = beta direction - M^-1 residual` and returns residual' M^-1 residual.
fn precondition(
    residual: &[f64],
    weights: &[f64],
    width: usize,
    beta: f64,
    direction: &mut [f64],
) -> f64 {
    let mut sum = 0.0;
    for (i, weight) in weights.iter().enumerate() {
        let inverse = 1.0 / weight;
        let range = i * width..(i + 1) * width;
        for (d, r) in direction[range.clone()].iter_mut().zip(&residual[range]) {
            let kept = if beta == 0.0 { 0.0 } else { beta * *d };
            *d = kept - inverse * r;
            sum += inverse * r * r;
        }
    }
    sum
}

fn weighted_square(residual: &[f64], weights: &[f64], width: usize) -> f64 {
    residual
        .chunks_exact(width)
        .zip(weights)
        .map(|(row, weight)| row.iter().map(|r| r * r).sum::<f64>() / weight)
        .sum()
}

/// Turns C d into the tangential part of S d and returns <d, S d>.
fn project_image(q: &[f64], width: usize, y: &[f64], d: &[f64], image: &mut [f64]) -> f64 {
    let mut curvature = 0.0;
    for (i, (row, out)) in q.chunks_exact(width).zip(image.chunks_exact_mut(width)).enumerate() {
        let d = &d[i * width..][..width];
        let mut radial = 0.0;
        for k in 0..width {
            out[k] -= y[i] * d[k];
            radial += out[k] * row[k];
        }
        for k in 0..width {
            out[k] -= radial * row[k];
            curvature += out[k] * d[k];
        }
    }
    curvature
}
