//! Dense points: one symmetric matrix a block and the nonnegative part, with the vector operations loops need.

use crate::linalg::vector::{axpy, norm2, scale};
use crate::linalg::{Mat, dense};
use crate::problem::Problem;

/// A dense point.
#[derive(Clone, Debug)]
pub struct DensePoint {
    /// Matrices, both triangles.
    pub blocks: Vec<Mat<f64>>,
    /// Nonnegative part.
    pub x: Vec<f64>,
}

impl DensePoint {
    /// Makes a zero point of a problem's shape.
    pub fn zeros(problem: &Problem) -> Self {
        DensePoint {
            blocks: problem.blocks().iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
            x: vec![0.0; problem.orthant()],
        }
    }

    /// Sets every number to zero.
    pub fn clear(&mut self) {
        self.blocks.iter_mut().for_each(|block| dense::fill(0.0, block.as_mut()));
        self.x.fill(0.0);
    }

    /// Copies `other`, which has the same shape.
    pub fn copy_from(&mut self, other: &DensePoint) {
        for (to, from) in self.blocks.iter_mut().zip(&other.blocks) {
            dense::copy_into(from.as_ref(), to.as_mut());
        }
        self.x.copy_from_slice(&other.x);
    }

    /// Adds `alpha * other`.
    pub fn add(&mut self, alpha: f64, other: &DensePoint) {
        for (to, from) in self.blocks.iter_mut().zip(&other.blocks) {
            dense::axpy_matrix(alpha, from.as_ref(), to.as_mut());
        }
        axpy(alpha, &other.x, &mut self.x);
    }

    /// Multiplies by `alpha`.
    pub fn scale(&mut self, alpha: f64) {
        self.blocks.iter_mut().for_each(|block| dense::scale(alpha, block.as_mut()));
        scale(alpha, &mut self.x);
    }

    /// Returns the Euclidean distance to `other`.
    pub fn distance(&self, other: &DensePoint) -> f64 {
        let mut square = 0.0;
        for (a, b) in self.blocks.iter().zip(&other.blocks) {
            for j in 0..a.ncols() {
                let pairs = a.col_as_slice(j).iter().zip(b.col_as_slice(j));
                square += pairs.map(|(x, y)| (x - y) * (x - y)).sum::<f64>();
            }
        }
        square += self.x.iter().zip(&other.x).map(|(a, b)| (a - b) * (a - b)).sum::<f64>();
        square.sqrt()
    }

    /// Returns the Euclidean norm.
    pub fn norm(&self) -> f64 {
        let blocks: f64 = self.blocks.iter().map(|b| dense::frobenius(b.as_ref()).powi(2)).sum();
        (blocks + norm2(&self.x).powi(2)).sqrt()
    }

    /// Writes all numbers one after another.
    pub fn write_flat(&self, out: &mut [f64]) {
        let mut place = 0;
        let columns = self.blocks.iter().flat_map(|b| (0..b.ncols()).map(|j| b.col_as_slice(j)));
        for column in columns.chain(std::iter::once(self.x.as_slice())) {
            out[place..place + column.len()].copy_from_slice(column);
            place += column.len();
        }
    }

    /// Reads what [`Self::write_flat`] wrote.
    pub fn read_flat(&mut self, from: &[f64]) {
        let mut place = 0;
        for block in &mut self.blocks {
            for j in 0..block.ncols() {
                let column = block.col_as_slice_mut(j);
                column.copy_from_slice(&from[place..place + column.len()]);
                place += column.len();
            }
        }
        self.x.copy_from_slice(&from[place..]);
    }

    /// Returns the number of numbers.
    pub fn length(&self) -> usize {
        self.blocks.iter().map(|b| b.nrows() * b.ncols()).sum::<usize>() + self.x.len()
    }
}
