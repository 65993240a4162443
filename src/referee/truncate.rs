//! Truncation of a point to its target ranks.
//!
//! Every block becomes a factor R, so that R R' is PSD and of the target rank whatever rounding does.
//!
//! - A dense block is symmetrised and decomposed; the r largest eigenvalues are kept, negative ones
//!   never. By Eckart-Young-Mirsky this is the nearest PSD matrix of rank at most r.
//! - A factor V (n x p) with p <= r is kept as it is. Otherwise V'V = U diag(l) U' is decomposed (p x p,
//!   never n x n) and R = V U_r: its columns are orthogonal and R R' is the truncation of V V'. When
//!   p > n the block is decomposed as a dense one, which is then the smaller.
//! - A block of free rank keeps all its nonnegative eigenvalues (dense) or itself (factor).
//! - Entries of the nonnegative part are clipped at 0.

use super::spectral;
use crate::problem::{BlockPoint, Factor, Point, Problem};
use faer::Mat;

/// A point of the target ranks, and what the spectra of the original say.
pub(super) struct Truncated {
    /// A factor for each block.
    pub factors: Vec<Factor>,
    /// The nonnegative part, clipped at 0.
    pub orthant: Vec<f64>,
    /// Eigenvalues of the original blocks, descending; those of a factor without its surplus zeros.
    pub spectra: Vec<Vec<f64>>,
    /// Least eigenvalue of the original blocks and least entry of its nonnegative part. A factored
    /// block counts as 0, exactly.
    pub least_eigenvalue: f64,
}

/// Truncates `point`, whose shapes have been checked, to the target ranks of `problem`.
pub(super) fn truncate(problem: &Problem, point: &Point) -> Result<Truncated, String> {
    let mut out = Truncated {
        factors: Vec::with_capacity(point.blocks.len()),
        orthant: point.orthant.iter().map(|value| value.max(0.0)).collect(),
        spectra: Vec::with_capacity(point.blocks.len()),
        least_eigenvalue: point.orthant.iter().copied().fold(f64::INFINITY, f64::min),
    };
    for (block, rank) in point.blocks.iter().zip(problem.target_ranks()) {
        let (factor, spectrum, least) = match block {
            BlockPoint::Dense(matrix) => {
                let (factor, spectrum) = truncate_dense(&symmetrised(matrix), rank)?;
                let least = spectrum.last().copied().unwrap_or(0.0);
                (factor, spectrum, least)
            }
            BlockPoint::Factor(factor) => {
                let (factor, spectrum) = truncate_factor(factor, rank)?;
                (factor, spectrum, 0.0)
            }
        };
        out.factors.push(factor);
        out.spectra.push(spectrum);
        out.least_eigenvalue = out.least_eigenvalue.min(least);
    }
    Ok(out)
}

/// Returns (X + X')/2.
fn symmetrised(matrix: &Mat<f64>) -> Mat<f64> {
    let n = matrix.nrows();
    Mat::from_fn(n, n, |i, j| 0.5 * matrix[(i, j)] + 0.5 * matrix[(j, i)])
}

fn truncate_dense(matrix: &Mat<f64>, rank: usize) -> Result<(Factor, Vec<f64>), String> {
    let spectrum = spectral::decompose(matrix)?;
    let order = matrix.nrows();
    let width = spectrum.values.iter().take(rank).filter(|value| **value > 0.0).count();
    let mut factor = Factor::zeros(order, width);
    for column in 0..width {
        let root = spectrum.values[column].sqrt();
        for i in 0..order {
            factor.row_mut(i)[column] = root * spectrum.vectors[(i, column)];
        }
    }
    Ok((factor, spectrum.values))
}

fn truncate_factor(factor: &Factor, rank: usize) -> Result<(Factor, Vec<f64>), String> {
    let (order, width) = (factor.order, factor.width);
    if width > order {
        let product = Mat::from_fn(order, order, |i, j| plain_dot(factor.row(i), factor.row(j)));
        let (truncated, values) = truncate_dense(&product, rank)?;
        return Ok((truncated, values.into_iter().map(|value| value.max(0.0)).collect()));
    }
    let spectrum = spectral::decompose(&gram(factor))?;
    // V'V is PSD: what rounding leaves below zero is no eigenvalue of V V'.
    let values: Vec<f64> = spectrum.values.iter().map(|value| value.max(0.0)).collect();
    if width <= rank {
        return Ok((factor.clone(), values));
    }
    let mut truncated = Factor::zeros(order, rank);
    for i in 0..order {
        for column in 0..rank {
            let sum = (0..width).map(|k| factor.row(i)[k] * spectrum.vectors[(k, column)]).sum();
            truncated.row_mut(i)[column] = sum;
        }
    }
    Ok((truncated, values))
}

/// Computes V'V by rows of V, in plain arithmetic: relative error about n u of its trace, far below
/// the smallest rank cut-off.
fn gram(factor: &Factor) -> Mat<f64> {
    let width = factor.width;
    let mut lower = vec![0.0; width * width];
    for i in 0..factor.order {
        let row = factor.row(i);
        for a in 0..width {
            let target = &mut lower[a * width..a * width + a + 1];
            for (sum, value) in target.iter_mut().zip(row) {
                *sum += row[a] * value;
            }
        }
    }
    Mat::from_fn(width, width, |a, b| lower[a.max(b) * width + a.min(b)])
}

pub(super) fn plain_dot(x: &[f64], y: &[f64]) -> f64 {
    x.iter().zip(y).map(|(a, b)| a * b).sum()
}

/// Counts eigenvalues above `cut` times the largest.
pub(super) fn rank_at(spectrum: &[f64], cut: f64) -> usize {
    let largest = spectrum.first().copied().unwrap_or(0.0);
    if largest <= 0.0 {
        return 0;
    }
    spectrum.iter().filter(|value| **value > cut * largest).count()
}

/// Computes the share of the nonnegative spectrum that lies behind the first `rank` values.
pub(super) fn tail_share(spectrum: &[f64], rank: usize) -> f64 {
    let positive = |values: &[f64]| values.iter().map(|value| value.max(0.0)).sum::<f64>();
    let total = positive(spectrum);
    if total <= 0.0 { 0.0 } else { positive(&spectrum[rank.min(spectrum.len())..]) / total }
}
