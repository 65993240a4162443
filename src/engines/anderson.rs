//! Anderson acceleration of a fixed-point iteration x <- T(x) on flat vectors.
//!
//! With f(x) = T(x) - x and the last differences dX, dF of points and f, the next point is
//! `x + f - (dX + dF) g`, g minimising ||f - dF g||_2. Source: D. Anderson, Journal of the ACM 12:547-560, 1965,
//! 10.1145/321296.321305; H. Walker and P. Ni, SIAM Journal on Numerical Analysis 49:1715-1735, 2011,
//! 10.1137/10078356X (both from memory). The least-squares problem is solved by its normal equations with a
//! relative shift of 1e-12. There is no safeguard here: the caller rejects what does not help and clears.

use crate::linalg::vector::{axpy, dot};
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, cholesky};

/// Share of the largest diagonal entry added to the normal equations.
const SHIFT: f64 = 1e-12;

/// The differences of the last steps, all preallocated.
pub struct Anderson {
    window: usize,
    count: usize,
    next: usize,
    started: bool,
    last_x: Vec<f64>,
    last_f: Vec<f64>,
    points: Vec<Vec<f64>>,
    images: Vec<Vec<f64>>,
    gram: Mat<f64>,
    weights: Vec<f64>,
    workspace: Workspace,
}

impl Anderson {
    /// Takes memory for vectors of `length` numbers and a window of `window` differences.
    #[track_caller]
    pub fn new(length: usize, window: usize) -> Self {
        assert!(window > 0, "a window of no differences");
        Anderson {
            window,
            count: 0,
            next: 0,
            started: false,
            last_x: vec![0.0; length],
            last_f: vec![0.0; length],
            points: vec![vec![0.0; length]; window],
            images: vec![vec![0.0; length]; window],
            gram: Mat::zeros(window, window),
            weights: vec![0.0; window],
            workspace: Workspace::new(),
        }
    }

    /// Forgets all differences.
    pub fn clear(&mut self) {
        self.count = 0;
        self.next = 0;
        self.started = false;
    }

    /// Takes the point `x` and `f = T(x) - x` and writes the next point; the plain step when the memory is
    /// empty or the normal equations cannot be solved.
    #[track_caller]
    pub fn step(&mut self, x: &[f64], f: &[f64], out: &mut [f64]) {
        assert!(x.len() == self.last_x.len() && f.len() == x.len() && out.len() == x.len());
        if self.started {
            let (point, image) = (&mut self.points[self.next], &mut self.images[self.next]);
            for k in 0..x.len() {
                point[k] = x[k] - self.last_x[k];
                image[k] = f[k] - self.last_f[k];
            }
            self.next = (self.next + 1) % self.window;
            self.count = (self.count + 1).min(self.window);
        }
        self.started = true;
        self.last_x.copy_from_slice(x);
        self.last_f.copy_from_slice(f);
        for k in 0..x.len() {
            out[k] = x[k] + f[k];
        }
        let count = self.count;
        if count == 0 {
            return;
        }
        let mut largest = f64::MIN_POSITIVE;
        for i in 0..count {
            for j in 0..=i {
                self.gram[(i, j)] = dot(&self.images[i], &self.images[j]);
            }
            largest = largest.max(self.gram[(i, i)]);
            self.weights[i] = dot(&self.images[i], f);
        }
        for i in 0..count {
            self.gram[(i, i)] += SHIFT * largest;
        }
        let mut gram = self.gram.as_mut().submatrix_mut(0, 0, count, count);
        if cholesky::factor_in_place(gram.as_mut(), &mut self.workspace).is_err() {
            self.clear();
            return;
        }
        let weights = &mut self.weights[..count];
        cholesky::solve_vector(gram.as_ref(), weights);
        for (i, weight) in weights.iter().enumerate() {
            axpy(-weight, &self.points[i], out);
            axpy(-weight, &self.images[i], out);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_linear_iteration_in_three_variables_ends_after_four_steps() {
        // On x <- Bx + c with window n the iterates are those of GMRES (Walker and Ni): n + 1 evaluations.
        let rates = [0.9, 0.5, -0.7];
        let offset = [1.0, 2.0, 3.0];
        let mut x = vec![0.0; 3];
        let mut memory = Anderson::new(3, 3);
        let mut next = vec![0.0; 3];
        for _ in 0..4 {
            let f: Vec<f64> = (0..3).map(|k| rates[k] * x[k] + offset[k] - x[k]).collect();
            memory.step(&x, &f, &mut next);
            x.copy_from_slice(&next);
        }
        for k in 0..3 {
            let exact = offset[k] / (1.0 - rates[k]);
            assert!((x[k] - exact).abs() < 1e-6 * exact.abs(), "{x:?}");
        }
    }
}
