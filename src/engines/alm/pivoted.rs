//! Rank decrease of a factor by QR with pivoting.
//!
//! The rows of R span a space of dimension k when RR' has rank k. Gram-Schmidt with row pivoting (QR with column pivoting
//! of R') finds an orthonormal basis Q of it: rows in the order of what is left of them, until the longest remainder is
//! at most `share` times the longest row. Then R Q, of k columns, has (RQ)(RQ)' = RR' up to remainders of that length. S.
//! Burer and C. Choi, Optimization Methods and Software 21:493-512, 2006, decrease the rank in this way (from memory).

use crate::linalg::vector::{axpy, dot, norm2, scale};
use crate::problem::Factor;

/// Returns the factor R Q of the fewest columns, at least one, such that every row of R lies within `share` times the
/// longest row of the span of Q; R itself when no column is saved.
pub fn decreased(factor: &Factor, share: f64) -> Factor {
    let (n, width) = (factor.order, factor.width);
    let mut rest = factor.data.clone();
    let mut basis: Vec<f64> = Vec::with_capacity(width * width);
    let mut longest = None;
    while basis.len() < width * width {
        let norms = rest.chunks_exact(width).map(norm2).enumerate();
        let Some((row, norm)) = norms.max_by(|a, b| a.1.total_cmp(&b.1)) else { break };
        let first = *longest.get_or_insert(norm);
        if norm <= share * first && !basis.is_empty() {
            break;
        }
        if norm <= 0.0 || norm.is_nan() {
            break;
        }
        // The remainder is orthogonal to the basis up to rounding; once more makes it so.
        let mut next = rest[row * width..][..width].to_vec();
        for q in basis.chunks_exact(width) {
            axpy(-dot(q, &next), q, &mut next);
        }
        scale(1.0 / norm2(&next), &mut next);
        for r in rest.chunks_exact_mut(width) {
            let along = dot(&next, r);
            axpy(-along, &next, r);
        }
        basis.extend(next);
    }
    let kept = basis.len() / width.max(1);
    if kept == width || kept == 0 {
        return factor.clone();
    }
    let mut out = Factor::zeros(n, kept);
    for i in 0..n {
        for (value, q) in out.row_mut(i).iter_mut().zip(basis.chunks_exact(width)) {
            *value = dot(factor.row(i), q);
        }
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::seed::Stream;

    fn product(factor: &Factor, i: usize, j: usize) -> f64 {
        dot(factor.row(i), factor.row(j))
    }

    #[test]
    fn a_factor_of_hidden_low_rank_loses_its_spare_columns_and_keeps_its_product() {
        let mut draw = Stream::named(2, &["pivoted"]);
        let mut narrow = Factor::zeros(30, 3);
        narrow.data.iter_mut().for_each(|value| *value = draw.normal());
        let turn: Vec<f64> = (0..21).map(|_| draw.normal()).collect();
        let mut wide = Factor::zeros(30, 7);
        for i in 0..30 {
            for (value, row) in narrow.row(i).to_vec().iter().zip(turn.chunks_exact(7)) {
                axpy(*value, row, wide.row_mut(i));
            }
        }
        let noise = 1e-9;
        wide.data.iter_mut().for_each(|value| *value += noise * draw.normal());
        let out = decreased(&wide, 1e-6);
        assert_eq!(out.width, 3);
        for i in 0..30 {
            for j in 0..30 {
                assert!((product(&out, i, j) - product(&wide, i, j)).abs() < 1e-7);
            }
        }
        // A cut below the noise keeps all columns.
        assert_eq!(decreased(&wide, 1e-12).width, 7);
    }

    #[test]
    fn zeros_and_full_ranks_stay() {
        assert_eq!(decreased(&Factor::zeros(4, 2), 1e-6), Factor::zeros(4, 2));
        let identity = Factor { order: 2, width: 2, data: vec![1.0, 0.0, 0.0, 1.0] };
        assert_eq!(decreased(&identity, 1e-6), identity);
    }
}
