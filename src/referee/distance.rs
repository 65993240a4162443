//! Distance of two points given by factors, without anything of size n x n in memory.

use super::truncate::plain_dot;
use crate::linalg::compensated::Accumulator;
use crate::problem::Factor;

/// Most row-pair products for which the distance is summed entry by entry.
const PAIR_WORK: u64 = 1 << 29;

/// Computes `||X - X*||_F / (1 + ||X*||_F)` over all blocks, `X = R R'`, `X* = V V'`.
///
/// Summed entry by entry, `r_i'r_j - v_i'v_j` for each pair, as long as n^2 (p + q) summed over the
/// blocks is at most 2^29; the result is then accurate to about 2^-52. Beyond, the identity
/// `||R R' - V V'||^2 = ||R'R||^2 + ||V'V||^2 - 2 ||V'R||^2` is used, whose cancellation leaves an error
/// of about 1e-8: smaller distances of such large points are not resolved.
pub(super) fn relative(found: &[Factor], known: &[Factor]) -> f64 {
    let mut squared = 0.0;
    let mut known_squared = 0.0;
    let work: u64 = found
        .iter()
        .zip(known)
        .map(|(r, v)| (r.order as u64).pow(2).saturating_mul((r.width + v.width) as u64))
        .fold(0, u64::saturating_add);
    for (r, v) in found.iter().zip(known) {
        assert_eq!(r.order, v.order, "the known point has another order");
        let size = cross_squared(v, v);
        known_squared += size;
        squared += if work <= PAIR_WORK {
            entrywise_squared(r, v)
        } else {
            cross_squared(r, r) + size - 2.0 * cross_squared(v, r)
        };
    }
    squared.max(0.0).sqrt() / (1.0 + known_squared.sqrt())
}

fn entrywise_squared(r: &Factor, v: &Factor) -> f64 {
    let mut total = Accumulator::new();
    for i in 0..r.order {
        let mut row = 0.0;
        for j in 0..i {
            let difference = plain_dot(r.row(i), r.row(j)) - plain_dot(v.row(i), v.row(j));
            row += difference * difference;
        }
        let difference = plain_dot(r.row(i), r.row(i)) - plain_dot(v.row(i), v.row(i));
        total.add(2.0 * row + difference * difference);
    }
    total.value()
}

/// Computes `||V'R||_F^2` with compensated sums.
fn cross_squared(v: &Factor, r: &Factor) -> f64 {
    let mut sums = vec![Accumulator::new(); v.width * r.width];
    for i in 0..r.order {
        for (a, x) in v.row(i).iter().enumerate() {
            for (b, y) in r.row(i).iter().enumerate() {
                sums[a * r.width + b].add_product(*x, *y);
            }
        }
    }
    let mut total = Accumulator::new();
    sums.iter().for_each(|sum| total.add_product(sum.value(), sum.value()));
    total.value()
}
