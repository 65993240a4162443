//! Limited-memory BFGS directions on flat vectors: the two-loop recursion with all pairs preallocated.
//!
//! Source: J. Nocedal, Updating quasi-Newton matrices with limited storage, Mathematics of Computation
//! 35:773-782 (1980), 10.1090/S0025-5718-1980-0572855-7 (from memory). It holds no line search and no
//! stop rule: those are the caller's.

use crate::linalg::vector::{axpy, dot, scale};

/// A pair is kept only when `s't > CURVATURE * ||s|| ||t||`.
const CURVATURE: f64 = 1e-12;

/// The pairs of the last steps.
#[derive(Clone, Debug)]
pub struct Lbfgs {
    length: usize,
    capacity: usize,
    count: usize,
    next: usize,
    steps: Vec<f64>,
    changes: Vec<f64>,
    inverse_curvatures: Vec<f64>,
    coefficients: Vec<f64>,
    initial: f64,
}

/// Whether a pair was kept.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kept {
    /// It was.
    Yes,
    /// Its curvature was not positive enough.
    No,
}

impl Lbfgs {
    /// Makes an empty memory of `capacity` pairs of vectors of `length` numbers.
    #[track_caller]
    pub fn new(length: usize, capacity: usize) -> Self {
        assert!(capacity > 0, "a memory of no pairs");
        Lbfgs {
            length,
            capacity,
            count: 0,
            next: 0,
            steps: vec![0.0; length * capacity],
            changes: vec![0.0; length * capacity],
            inverse_curvatures: vec![0.0; capacity],
            coefficients: vec![0.0; capacity],
            initial: 1.0,
        }
    }

    /// Forgets all pairs.
    pub fn clear(&mut self) {
        self.count = 0;
        self.next = 0;
        self.initial = 1.0;
    }

    /// Returns the number of pairs held.
    pub fn pairs(&self) -> usize {
        self.count
    }

    /// Stores the pair of a step `s = alpha * direction` and the change `t = new - old` of the gradient, unless
    /// `s't <= 1e-12 ||s|| ||t||`.
    #[track_caller]
    pub fn push(&mut self, alpha: f64, direction: &[f64], old: &[f64], new: &[f64]) -> Kept {
        let lengths = [direction.len(), old.len(), new.len()];
        assert!(lengths.iter().all(|&l| l == self.length), "vectors of the memory's length");
        let range = self.next * self.length..(self.next + 1) * self.length;
        let step = &mut self.steps[range.clone()];
        let change = &mut self.changes[range];
        for k in 0..step.len() {
            step[k] = alpha * direction[k];
            change[k] = new[k] - old[k];
        }
        let curvature = dot(step, change);
        let (ss, tt) = (dot(step, step), dot(change, change));
        if curvature <= CURVATURE * (ss * tt).sqrt() || curvature.is_nan() {
            return Kept::No;
        }
        self.inverse_curvatures[self.next] = 1.0 / curvature;
        self.initial = curvature / tt;
        self.next = (self.next + 1) % self.capacity;
        self.count = (self.count + 1).min(self.capacity);
        Kept::Yes
    }

    /// Computes `out = -H gradient`, H being the inverse Hessian estimate (the identity when empty).
    #[track_caller]
    pub fn direction(&mut self, gradient: &[f64], out: &mut [f64]) {
        assert!(gradient.len() == self.length && out.len() == self.length);
        for (o, g) in out.iter_mut().zip(gradient) {
            *o = -g;
        }
        for back in 0..self.count {
            let k = (self.next + self.capacity - 1 - back) % self.capacity;
            let range = k * self.length..(k + 1) * self.length;
            let c = self.inverse_curvatures[k] * dot(&self.steps[range.clone()], out);
            self.coefficients[k] = c;
            axpy(-c, &self.changes[range], out);
        }
        scale(self.initial, out);
        for back in (0..self.count).rev() {
            let k = (self.next + self.capacity - 1 - back) % self.capacity;
            let range = k * self.length..(k + 1) * self.length;
            let c = self.inverse_curvatures[k] * dot(&self.changes[range.clone()], out);
            axpy(self.coefficients[k] - c, &self.steps[range], out);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn exact_steps_on_a_quadratic_of_four_variables_end_after_four_of_them() {
        // Nocedal: with exact line searches BFGS on a quadratic in n variables ends after n steps.
        let curvature = [1.0, 3.0, 10.0, 40.0];
        let mut x = vec![1.0, -2.0, 0.5, 3.0];
        let gradient =
            |x: &[f64]| -> Vec<f64> { x.iter().zip(curvature).map(|(x, c)| c * x).collect() };
        let mut memory = Lbfgs::new(4, 4);
        let mut d = vec![0.0; 4];
        let mut g = gradient(&x);
        for _ in 0..4 {
            memory.direction(&g, &mut d);
            let bend: f64 = d.iter().zip(curvature).map(|(d, c)| c * d * d).sum();
            let alpha = -dot(&g, &d) / bend;
            axpy(alpha, &d, &mut x);
            let new = gradient(&x);
            assert_eq!(memory.push(alpha, &d, &g, &new), Kept::Yes);
            g = new;
        }
        assert!(dot(&g, &g).sqrt() < 1e-12, "{g:?}");
    }

    #[test]
    fn a_pair_of_negative_curvature_is_refused_and_leaves_the_direction_alone() {
        let mut memory = Lbfgs::new(2, 3);
        assert_eq!(memory.push(1.0, &[1.0, 0.0], &[0.0, 0.0], &[-1.0, 0.0]), Kept::No);
        let mut d = vec![0.0; 2];
        memory.direction(&[2.0, 3.0], &mut d);
        assert_eq!(d, vec![-2.0, -3.0]);
    }
}
