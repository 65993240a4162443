//! A dense point with the spectra of the blocks that have a rank bound.

use crate::budget::{Halt, Meter};
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::eigen::{SymmetricEigen, flops};
use crate::linalg::{Mat, MatRef};
use crate::problem::Problem;
use crate::seed::Stream;

/// The point, its spectra and its tail.
#[derive(Debug)]
pub struct Measured {
    /// X by block.
    pub points: Vec<Mat<f64>>,
    /// Nonnegative part.
    pub orthant: Vec<f64>,
    /// Rank bounds below the order; none for other blocks.
    pub ranks: Vec<Option<usize>>,
    /// Eigenvalues beyond the rank bounds over the trace, both over the bounded blocks; 0 without any.
    pub tail: f64,
    /// Trace of the bounded blocks.
    pub trace: f64,
    eigen: Vec<Option<SymmetricEigen>>,
}

/// One bounded block.
#[derive(Clone, Copy, Debug)]
pub struct BlockView<'a> {
    /// Position of the block.
    pub block: usize,
    /// Its rank bound, below the order.
    pub rank: usize,
    /// X.
    pub point: MatRef<'a, f64>,
    /// Eigenvalues, ascending.
    pub values: &'a [f64],
    /// Eigenvectors, by column.
    pub vectors: MatRef<'a, f64>,
}

impl Measured {
    /// Takes the memory for a point of the problem.
    pub fn new(problem: &Problem) -> Self {
        let blocks = problem.blocks();
        let ranks: Vec<Option<usize>> =
            blocks.iter().map(|b| b.rank.filter(|rank| *rank < b.order)).collect();
        Measured {
            points: blocks.iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
            orthant: vec![0.0; problem.orthant()],
            eigen: blocks
                .iter()
                .zip(&ranks)
                .map(|(b, rank)| rank.map(|_| SymmetricEigen::new(b.order)))
                .collect(),
            ranks,
            tail: 0.0,
            trace: 0.0,
        }
    }

    /// Decomposes the bounded blocks and measures the tail.
    ///
    /// # Errors
    /// `Failed` when an eigendecomposition fails.
    pub fn decompose(&mut self, meter: &mut Meter) -> Result<(), Halt> {
        let (mut tail, mut trace) = (0.0, 0.0);
        for (index, eigen) in self.eigen.iter_mut().enumerate() {
            let (Some(eigen), Some(rank)) = (eigen, self.ranks[index]) else { continue };
            eigen
                .decompose(self.points[index].as_ref())
                .map_err(|error| Halt::Failed(format!("block {}: {error}", index + 1)))?;
            meter.effort.eigendecompositions += 1;
            meter.effort.flops += flops::eigen(eigen.order());
            let values = eigen.values();
            tail += values[..values.len() - rank].iter().map(|v| v.max(0.0)).sum::<f64>();
            trace += values.iter().map(|v| v.max(0.0)).sum::<f64>();
        }
        self.trace = trace;
        self.tail = if trace > 0.0 { tail / trace } else { 0.0 };
        Ok(())
    }

    /// Views the bounded blocks. Panics before the first decomposition.
    pub fn bounded(&self) -> impl Iterator<Item = BlockView<'_>> {
        self.eigen.iter().enumerate().filter_map(|(block, eigen)| {
            let (eigen, rank) = (eigen.as_ref()?, self.ranks[block]?);
            let point = self.points[block].as_ref();
            let (values, vectors) = (eigen.values(), eigen.vectors());
            Some(BlockView { block, rank, point, values, vectors })
        })
    }

    /// Replaces the bounded blocks by random points V G G' V' of the target rank, where V V' is the block
    /// of `origin` and G has independent normal entries of variance 1/rank, and decomposes them.
    ///
    /// # Errors
    /// `Failed` when an eigendecomposition fails.
    pub fn draw(
        &mut self,
        origin: &[Mat<f64>],
        stream: &mut Stream,
        meter: &mut Meter,
    ) -> Result<(), Halt> {
        for (point, from) in self.points.iter_mut().zip(origin) {
            dense::copy_into(from.as_ref(), point.as_mut());
        }
        self.decompose(meter)?;
        for (block, eigen) in self.eigen.iter().enumerate() {
            let (Some(eigen), Some(rank)) = (eigen, self.ranks[block]) else { continue };
            let n = eigen.order();
            let deviation = 1.0 / (rank as f64).sqrt();
            let mut g = Mat::zeros(n, rank);
            for j in 0..rank {
                for (value, square) in g.col_as_slice_mut(j).iter_mut().zip(eigen.values()) {
                    *value = deviation * square.max(0.0).sqrt() * stream.normal();
                }
            }
            let mut factor = Mat::zeros(n, rank);
            let replace = Accumulate::Replace;
            dense::gemm(factor.as_mut(), replace, 1.0, eigen.vectors(), g.as_ref());
            let point = self.points[block].as_mut();
            dense::gemm(point, replace, 1.0, factor.as_ref(), factor.transpose());
        }
        self.decompose(meter)
    }
}
