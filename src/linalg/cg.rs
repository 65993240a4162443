//! Preconditioned conjugate gradients for symmetric positive semidefinite systems given as operators.
//!
//! Source: Hestenes and Stiefel, J. Res. Nat. Bur. Standards 49:409-436 (1952). Singular systems are solved when they are
//! consistent (b in the range of A): from a zero start the iterates then stay in the range. Indefinite operators are detected when a
//! direction of non-positive curvature is met, not before.

use super::lanczos::LinearOperator;
use super::vector::{axpby, axpy, dot, norm2, sub_into};

/// Times the residual may be computed anew without falling to half before the run counts as stagnated.
const FUTILE_REFRESHES: usize = 2;

/// Stop rule of a conjugate gradient run.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Params {
    /// Stops when ||b - A x||_2 <= tolerance * ||b||_2, the residual being computed from its definition.
    pub tolerance: f64,
    /// Most applications of A within the iteration.
    pub max_steps: usize,
}

/// Why a conjugate gradient run ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Outcome {
    /// The residual meets the tolerance.
    Converged,
    /// The step limit was reached.
    StepLimit,
    /// The true residual no longer falls although the recurrence claims convergence: rounding, or an inconsistent system.
    Stagnated,
    /// A direction p with p'Ap <= 0 or a residual r with r'M^-1 r <= 0 was met: A or the preconditioner is not positive definite there.
    NotPositive,
    /// A number that is not finite appeared.
    NonFinite,
}

/// What a conjugate gradient run did.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Info {
    /// Steps made.
    pub steps: usize,
    /// ||b - A x||_2 of the returned x, from its definition.
    pub residual: f64,
    /// Why the run ended.
    pub outcome: Outcome,
}

/// Vectors of a conjugate gradient run, kept between runs.
#[derive(Clone, Debug, Default)]
pub struct CgWorkspace {
    residual: Vec<f64>,
    preconditioned: Vec<f64>,
    direction: Vec<f64>,
    image: Vec<f64>,
}

impl CgWorkspace {
    /// Creates an empty workspace; the first run allocates.
    pub fn new() -> Self {
        Self::default()
    }

    fn resize(&mut self, n: usize) {
        for v in
            [&mut self.residual, &mut self.preconditioned, &mut self.direction, &mut self.image]
        {
            v.resize(n, 0.0);
        }
    }
}

/// The operator that changes nothing, for runs without a preconditioner.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Identity {
    /// Length of the vectors.
    pub order: usize,
}

impl LinearOperator for Identity {
    fn order(&self) -> usize {
        self.order
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        y.copy_from_slice(x);
    }
}

/// Multiplication by a diagonal; with inverse diagonal entries of A it is the Jacobi preconditioner.
#[derive(Clone, Debug, PartialEq)]
pub struct Diagonal {
    /// The diagonal entries.
    pub entries: Vec<f64>,
}

impl LinearOperator for Diagonal {
    fn order(&self) -> usize {
        self.entries.len()
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        super::vector::multiply_into(&self.entries, x, y);
    }
}

/// Solves A x = b from the start in `x`, without a preconditioner. See [`solve_preconditioned`].
#[track_caller]
pub fn solve<A: LinearOperator + ?Sized>(
    a: &mut A,
    b: &[f64],
    x: &mut [f64],
    params: &Params,
    ws: &mut CgWorkspace,
) -> Info {
    solve_preconditioned(a, &mut Identity { order: b.len() }, b, x, params, ws)
}

/// Solves A x = b from the start in `x`, `inverse` applying an approximation of A^-1 that must be symmetric positive definite.
///
/// When the recurrence claims convergence the residual is computed anew and the iteration goes on from it if it is too large, so
/// `Converged` is never claimed on the recurrence alone. Panics when a length or an order differs from that of `b`.
#[track_caller]
pub fn solve_preconditioned<A: LinearOperator + ?Sized, M: LinearOperator + ?Sized>(
    a: &mut A,
    inverse: &mut M,
    b: &[f64],
    x: &mut [f64],
    params: &Params,
    ws: &mut CgWorkspace,
) -> Info {
    let n = b.len();
    assert!(
        x.len() == n && a.order() == n && inverse.order() == n,
        "system of order {} and preconditioner of order {} with vectors of length {n} and {}",
        a.order(),
        inverse.order(),
        x.len()
    );
    ws.resize(n);
    let limit = params.tolerance * norm2(b);
    let mut residual_norm = refresh_residual(a, b, x, ws);
    let mut last_refreshed = residual_norm;
    let mut futile = 0;
    let mut steps = 0;
    let outcome = 'restart: loop {
        if !residual_norm.is_finite() {
            break Outcome::NonFinite;
        }
        if residual_norm <= limit {
            break Outcome::Converged;
        }
        inverse.apply(&ws.residual, &mut ws.preconditioned);
        ws.direction.copy_from_slice(&ws.preconditioned);
        let mut rho = dot(&ws.residual, &ws.preconditioned);
        loop {
            if steps >= params.max_steps {
                break 'restart Outcome::StepLimit;
            }
            a.apply(&ws.direction, &mut ws.image);
            steps += 1;
            let curvature = dot(&ws.direction, &ws.image);
            if !(curvature.is_finite() && rho.is_finite()) {
                break 'restart Outcome::NonFinite;
            }
            if curvature <= 0.0 || rho <= 0.0 {
                break 'restart Outcome::NotPositive;
            }
            let length = rho / curvature;
            axpy(length, &ws.direction, x);
            axpy(-length, &ws.image, &mut ws.residual);
            if norm2(&ws.residual) <= limit {
                residual_norm = refresh_residual(a, b, x, ws);
                futile = if residual_norm <= 0.5 * last_refreshed { 0 } else { futile + 1 };
                last_refreshed = residual_norm;
                if futile >= FUTILE_REFRESHES && residual_norm > limit {
                    break 'restart Outcome::Stagnated;
                }
                continue 'restart;
            }
            inverse.apply(&ws.residual, &mut ws.preconditioned);
            let next = dot(&ws.residual, &ws.preconditioned);
            axpby(1.0, &ws.preconditioned, next / rho, &mut ws.direction);
            rho = next;
        }
    };
    let residual = match outcome {
        Outcome::Converged | Outcome::Stagnated => residual_norm,
        _ => refresh_residual(a, b, x, ws),
    };
    Info { steps, residual, outcome }
}

/// Sets the residual to b - A x and returns its norm.
fn refresh_residual<A: LinearOperator + ?Sized>(
    a: &mut A,
    b: &[f64],
    x: &[f64],
    ws: &mut CgWorkspace,
) -> f64 {
    a.apply(x, &mut ws.image);
    sub_into(b, &ws.image, &mut ws.residual);
    norm2(&ws.residual)
}
