//! Values of functionals on points, by loops over the stored entries with compensated sums.
//!
//! An entry of X = R R' is the dot product of two rows: compensated up to [`COMPENSATED_WIDTH`]
//! columns, plain beyond (relative error at most about `width * 2^-53` of the product of the row
//! norms). Nothing of size n x n is formed unless the data themselves hold at least n(n+1)/2 entries for
//! the block.

use super::truncate::plain_dot;
use crate::linalg::compensated::{Accumulator, dot2};
use crate::problem::{BlockPoint, Coefficient, Factor, Functional, OuterTerm, Problem};
use faer::Mat;

/// Widest factor whose entries are computed with compensated dot products.
pub(super) const COMPENSATED_WIDTH: usize = 64;

/// The upper triangle of a symmetric matrix, column by column.
pub(super) struct Packed {
    values: Vec<f64>,
}

impl Packed {
    fn of_dense(matrix: &Mat<f64>) -> Self {
        let n = matrix.nrows();
        let mut values = Vec::with_capacity(n * (n + 1) / 2);
        for j in 0..n {
            for i in 0..=j {
                values.push(0.5 * matrix[(i, j)] + 0.5 * matrix[(j, i)]);
            }
        }
        Packed { values }
    }

    fn of_factor(factor: &Factor) -> Self {
        let n = factor.order;
        let mut values = Vec::with_capacity(n * (n + 1) / 2);
        for j in 0..n {
            for i in 0..=j {
                values.push(row_dot(factor, i, j));
            }
        }
        Packed { values }
    }

    fn entry(&self, i: usize, j: usize) -> f64 {
        self.values[j * (j + 1) / 2 + i]
    }
}

/// A block as it is evaluated: by its factor, by its entries, or by whichever is cheaper.
struct Held<'a> {
    factor: Option<&'a Factor>,
    packed: Option<Packed>,
}

/// A point held for evaluation.
pub(super) struct View<'a> {
    blocks: Vec<Held<'a>>,
    orthant: &'a [f64],
}

impl<'a> View<'a> {
    /// Holds a point of any kind.
    pub fn of_point(problem: &Problem, blocks: &'a [BlockPoint], orthant: &'a [f64]) -> Self {
        let visits = sparse_visits(problem);
        let blocks = blocks
            .iter()
            .zip(visits)
            .map(|(block, visits)| match block {
                BlockPoint::Factor(factor) => hold_factor(factor, visits),
                BlockPoint::Dense(matrix) => {
                    Held { factor: None, packed: Some(Packed::of_dense(matrix)) }
                }
            })
            .collect();
        View { blocks, orthant }
    }

    /// Holds a point given by factors.
    pub fn of_factors(problem: &Problem, factors: &'a [Factor], orthant: &'a [f64]) -> Self {
        let visits = sparse_visits(problem);
        let blocks = factors
            .iter()
            .zip(visits)
            .map(|(factor, visits)| hold_factor(factor, visits))
            .collect();
        View { blocks, orthant }
    }

    /// Computes the value of a functional.
    pub fn value(&self, functional: &Functional) -> f64 {
        let mut sum = Accumulator::new();
        for (block, coefficient) in &functional.parts {
            self.blocks[*block].add_value(&mut sum, coefficient);
        }
        for (index, value) in functional.orthant.iter() {
            sum.add_product(value, self.orthant[index]);
        }
        sum.value()
    }

    /// Computes b - A(X).
    pub fn residual(&self, problem: &Problem) -> Vec<f64> {
        let pairs = problem.constraints().iter().zip(problem.rhs());
        pairs.map(|(constraint, rhs)| rhs - self.value(constraint)).collect()
    }
}

/// Counts the sparse entries that all functionals together have in each block.
fn sparse_visits(problem: &Problem) -> Vec<usize> {
    let mut visits = vec![0; problem.blocks().len()];
    for functional in problem.constraints().iter().chain([problem.cost()]) {
        for (block, coefficient) in &functional.parts {
            if let Coefficient::Sparse(matrix) = coefficient {
                visits[*block] += matrix.stored();
            }
        }
    }
    visits
}

fn hold_factor(factor: &Factor, visits: usize) -> Held<'_> {
    let triangle = factor.order.saturating_mul(factor.order + 1) / 2;
    let packed = (factor.width > 1 && visits >= triangle).then(|| Packed::of_factor(factor));
    Held { factor: Some(factor), packed }
}

fn row_dot(factor: &Factor, i: usize, j: usize) -> f64 {
    let (x, y) = (factor.row(i), factor.row(j));
    if factor.width <= COMPENSATED_WIDTH { dot2(x, y) } else { plain_dot(x, y) }
}

impl Held<'_> {
    fn entry(&self, i: usize, j: usize) -> f64 {
        match (&self.packed, self.factor) {
            (Some(packed), _) => packed.entry(i, j),
            (None, Some(factor)) => row_dot(factor, i, j),
            (None, None) => unreachable!("a block is held in one form at least"),
        }
    }

    fn add_value(&self, sum: &mut Accumulator, coefficient: &Coefficient) {
        match coefficient {
            Coefficient::Sparse(matrix) => {
                for (i, j, value) in matrix.iter() {
                    let weight = if i == j { value } else { 2.0 * value };
                    sum.add_product(weight, self.entry(i, j));
                }
            }
            Coefficient::Outer(outer) => {
                for term in &outer.terms {
                    match self.factor {
                        Some(factor) => add_outer_on_factor(sum, term, factor),
                        None => self.add_outer_on_entries(sum, term),
                    }
                }
            }
        }
    }

    fn add_outer_on_entries(&self, sum: &mut Accumulator, term: &OuterTerm) {
        for (position, (i, a)) in term.vector.iter().enumerate() {
            let mut row = Accumulator::new();
            row.add_product(a, self.entry(i, i));
            for (j, b) in term.vector.iter().skip(position + 1) {
                row.add_product(2.0 * b, self.entry(i, j));
            }
            sum.add_product(term.weight * a, row.value());
        }
    }
}

/// Adds `weight * |V'a|^2`.
fn add_outer_on_factor(sum: &mut Accumulator, term: &OuterTerm, factor: &Factor) {
    for column in 0..factor.width {
        let mut image = Accumulator::new();
        for (i, a) in term.vector.iter() {
            image.add_product(a, factor.row(i)[column]);
        }
        sum.add_product(term.weight * image.value(), image.value());
    }
}

/// Bounds `sum |F_ij| |x_ij|` of a functional on factors from above, up to rounding, by row norms:
/// the size that relative rounding errors of [`View::value`] refer to.
pub(super) fn scale(functional: &Functional, row_norms: &[Vec<f64>], orthant: &[f64]) -> f64 {
    let mut sum = 0.0;
    for (block, coefficient) in &functional.parts {
        let norms = &row_norms[*block];
        match coefficient {
            Coefficient::Sparse(matrix) => {
                for (i, j, value) in matrix.iter() {
                    let weight = if i == j { 1.0 } else { 2.0 };
                    sum += weight * value.abs() * norms[i] * norms[j];
                }
            }
            Coefficient::Outer(outer) => {
                for term in &outer.terms {
                    let image: f64 = term.vector.iter().map(|(i, a)| a.abs() * norms[i]).sum();
                    sum += term.weight.abs() * image * image;
                }
            }
        }
    }
    sum + functional.orthant.iter().map(|(i, value)| value.abs() * orthant[i]).sum::<f64>()
}

/// Computes the Euclidean norms of the rows of each factor.
pub(super) fn row_norms(factors: &[Factor]) -> Vec<Vec<f64>> {
    factors
        .iter()
        .map(|factor| {
            (0..factor.order).map(|i| plain_dot(factor.row(i), factor.row(i)).sqrt()).collect()
        })
        .collect()
}
