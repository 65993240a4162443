//! A trust-region Newton method on a product of unit spheres, minimising f(Q) = <C, QQ'>/2.
//!
//! With y_i = q_i.(CQ)_i and S = C - Diag(y): the gradient is S Q and the Hessian form along tangent D is
//! <D, S D> (projected). The subproblem is solved by truncated conjugate gradients with the diagonal of S as
//! preconditioner (T. Steihaug, SIAM Journal on Numerical Analysis 20:626-637, 1983; P.-A. Absil, C. Baker, K.
//! Gallivan, Foundations of Computational Mathematics 7:303-330, 2007; both from memory), the retraction
//! normalises rows. The change of f is summed as <Q+ - Q, S Q+ + S Q>/2 with the old y, which is exact
//! because rows keep their length and which does not cancel near a solution.

use super::cost::SphereBlock;
use crate::budget::{Halt, Meter, TracePoint};
use crate::linalg::vector::{axpy, dot, norm2};
use pulp::Arch;

/// Accepts a step when the fall is at least this share of the predicted one.
const ACCEPT: f64 = 0.05;
/// Residual of the subproblem relative to its start: min(this, |g| relative to the first gradient).
const FORCING: f64 = 0.1;

/// Most quarterings of a step.
const SHORTENINGS: usize = 14;
/// Curvature of a direction d below this times d'Md counts as none: rotations of Q have none.
const FLAT: f64 = 1e-11;

/// Settings of a run.
#[derive(Clone, Copy, Debug)]
pub struct TrustParams {
    /// Stops when ||S Q||_F <= tolerance * ||y||_2.
    pub tolerance: f64,
    /// Most outer steps.
    pub outer: usize,
    /// Most products in one subproblem.
    pub inner: usize,
    /// Added to <C, Q Q'> to give the objective of the trace; no trace is kept when there is none.
    pub constant: Option<f64>,
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
    let (mut radius, largest) = (0.25 * scale, 2.0 * scale);
    for _ in 0..params.outer {
        if let Some(constant) = params.constant {
            let objective = Some(dot(q, &ws.image) + constant);
            meter.trace(TracePoint { objective, residual: Some(0.0), ..TracePoint::default() });
        }
        let goal = params.tolerance * norm2(&ws.y);
        if size <= goal {
            return TrustEnd::Converged;
        }
        // 1. Step. Its residual need not be far below the final tolerance.
        let forcing = FORCING.min(size / first.max(f64::MIN_POSITIVE)).max(0.1 * goal / size);
        let model =
            match truncated_gradients(block, q, width, radius, forcing, params.inner, ws, meter) {
                Ok(model) => model,
                Err(halt) => return TrustEnd::Halted(halt),
            };
        meter.effort.inner_steps += 1;
        // 2. Shorten it until the function falls as the model says: cheaper than a new subproblem.
        let slope = dot(&ws.gradient, &ws.eta);
        let bend = 2.0 * (model.change - slope);
        let noise = 1e-15 * norm2(&ws.y) * norm2(&ws.eta);
        let mut t = 1.0;
        let mut accepted = false;
        for _ in 0..SHORTENINGS {
            retract(q, width, t, ws);
            block.product(&ws.trial, width, &mut ws.trial_image);
            meter.effort.operator_products += 1;
            meter.effort.flops += block.flops(width) + 12 * (block.order * width) as u64;
            let actual = change(q, width, ws);
            let ratio = (actual - noise) / (t * slope + 0.5 * t * t * bend - noise);
            if ratio > ACCEPT && actual <= noise {
                accepted = true;
                if ratio > 0.75 && model.reach == Reach::Boundary {
                    radius = (2.0 * radius).min(largest);
                }
                break;
            }
            t *= 0.25;
            radius = t * model.length;
        }
        if !accepted {
            return TrustEnd::Stalled;
        }
        q.copy_from_slice(&ws.trial);
        std::mem::swap(&mut ws.image, &mut ws.trial_image);
        size = refresh(q, width, ws);
    }
    TrustEnd::Limit
}

/// Sets the trial point to q + t eta with rows normalised.
fn retract(q: &[f64], width: usize, t: f64, ws: &mut TrustWorkspace) {
    let rows = q.chunks_exact(width).zip(ws.eta.chunks_exact(width));
    for (out, (row, step)) in ws.trial.chunks_exact_mut(width).zip(rows) {
        let mut square = 0.0;
        for k in 0..width {
            out[k] = row[k] + t * step[k];
            square += out[k] * out[k];
        }
        let inverse = 1.0 / square.sqrt();
        out.iter_mut().for_each(|value| *value *= inverse);
    }
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
    ws.residual.copy_from_slice(&ws.gradient);
    let mut rho = precondition(&ws.residual, &ws.weights, width, 0.0, &mut ws.direction);
    let start = norm2(&ws.residual);
    // Squared lengths in the norm of the preconditioner: of eta, of eta with the direction, of the direction.
    let (mut ee, mut ed, mut dd) = (0.0, 0.0, rho);
    // Change of the model: every full step gains alpha rho / 2.
    let mut change = 0.0;
    let mut reach = Reach::Inside;
    for _ in 0..limit {
        meter.check()?;
        block.product(&ws.direction, width, &mut ws.image_direction);
        meter.effort.operator_products += 1;
        meter.effort.flops += block.flops(width) + 20 * (block.order * width) as u64;
        let curvature = project_image(q, width, &ws.y, &ws.direction, &mut ws.image_direction);
        if curvature.abs() <= FLAT * dd {
            break;
        }
        let alpha = rho / curvature;
        let longer = ee + alpha * (2.0 * ed + alpha * dd);
        if curvature <= 0.0 || curvature.is_nan() || longer >= radius * radius {
            let left = (radius * radius - ee).max(0.0);
            let tau = left / (ed + (ed * ed + dd * left).sqrt());
            if tau.is_finite() {
                axpy(tau, &ws.direction, &mut ws.eta);
                change += tau * (0.5 * tau * curvature - rho);
                ee = radius * radius;
            }
            reach = Reach::Boundary;
            break;
        }
        change -= 0.5 * alpha * rho;
        ee = longer;
        let (next, square) = advance(
            alpha,
            &ws.direction,
            &ws.image_direction,
            &ws.weights,
            width,
            &mut ws.eta,
            &mut ws.residual,
        );
        if square.sqrt() <= forcing * start {
            break;
        }
        let beta = next / rho;
        precondition(&ws.residual, &ws.weights, width, beta, &mut ws.direction);
        ed = beta * (ed + alpha * dd);
        dd = next + beta * beta * dd;
        rho = next;
    }
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
    Arch::new().dispatch(
        #[inline(always)]
        || {
            let mut sum = 0.0;
            for (i, weight) in weights.iter().enumerate() {
                let inverse = 1.0 / weight;
                let range = i * width..(i + 1) * width;
                let row = &residual[range.clone()];
                let target = &mut direction[range];
                if beta == 0.0 {
                    target.fill(0.0);
                }
                for (d, r) in target.iter_mut().zip(row) {
                    *d = beta * *d - inverse * r;
                }
                sum += inverse * inner(row, row);
            }
            sum
        },
    )
}

/// Turns C d into the tangential part of S d and returns <d, S d>.
fn project_image(q: &[f64], width: usize, y: &[f64], d: &[f64], image: &mut [f64]) -> f64 {
    Arch::new().dispatch(
        #[inline(always)]
        || {
            let mut curvature = 0.0;
            for (i, y) in y.iter().enumerate() {
                let range = i * width..(i + 1) * width;
                let (row, d) = (&q[range.clone()], &d[range.clone()]);
                let out = &mut image[range];
                // d is tangential, so q.(Cd - y d) = q.Cd.
                let radial = inner(out, row);
                for k in 0..width {
                    out[k] -= y * d[k] + radial * row[k];
                }
                curvature += inner(out, d);
            }
            curvature
        },
    )
}

/// Moves step and residual along the direction and returns residual' M^-1 residual and |residual|^2.
fn advance(
    alpha: f64,
    direction: &[f64],
    image: &[f64],
    weights: &[f64],
    width: usize,
    eta: &mut [f64],
    residual: &mut [f64],
) -> (f64, f64) {
    Arch::new().dispatch(
        #[inline(always)]
        || {
            let (mut weighted, mut plain) = (0.0, 0.0);
            for (i, weight) in weights.iter().enumerate() {
                let range = i * width..(i + 1) * width;
                let (d, hd) = (&direction[range.clone()], &image[range.clone()]);
                let (e, r) = (&mut eta[range.clone()], &mut residual[range]);
                for k in 0..width {
                    e[k] += alpha * d[k];
                    r[k] += alpha * hd[k];
                }
                let square = inner(r, r);
                plain += square;
                weighted += square / weight;
            }
            (weighted, plain)
        },
    )
}

/// Computes a'b with four independent partial sums.
#[inline(always)]
fn inner(a: &[f64], b: &[f64]) -> f64 {
    let (a4, a_rest) = a.as_chunks::<4>();
    let (b4, b_rest) = b.as_chunks::<4>();
    let mut sums = [0.0; 4];
    for (x, y) in a4.iter().zip(b4) {
        for k in 0..4 {
            sums[k] += x[k] * y[k];
        }
    }
    let mut rest = 0.0;
    for (x, y) in a_rest.iter().zip(b_rest) {
        rest += x * y;
    }
    (sums[0] + sums[1]) + (sums[2] + sums[3]) + rest
}
