//! The weight that counts the tail: T = I - U U', U the leading eigenvectors of X to the target rank.

use super::{BlockView, Measured, Stage, WeightRule};
use crate::linalg::Mat;
use crate::linalg::dense::{self, Accumulate};

/// T = I - U U' minimises `<X, W>` over `0 <= W <= I`, `tr W = n - r`, and I - U U' is a supergradient of the
/// tail `tr X - sum of the r largest eigenvalues`, which is concave: p(X) = tail.
#[derive(Clone, Copy, Debug, Default)]
pub struct TailProjector;

impl WeightRule for TailProjector {
    fn stage(&mut self, _: Stage, _: &Measured) {}

    fn weigh(&mut self, at: BlockView<'_>, weight: &mut Mat<f64>) {
        let n = at.values.len();
        let top = at.vectors.subcols(n - at.rank, at.rank);
        dense::gemm(weight.as_mut(), Accumulate::Replace, -1.0, top, top.transpose());
        dense::symmetrise(weight.as_mut());
        (0..n).for_each(|i| weight[(i, i)] += 1.0);
    }

    fn penalty(&self, at: BlockView<'_>) -> f64 {
        at.values[..at.values.len() - at.rank].iter().sum()
    }
}
