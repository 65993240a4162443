//! A Cholesky factorisation whose completion proves that a matrix of whole numbers is positive definite.
//!
//! This is the one place among the certificates where numbers round. The loops are plain and in a fixed order, so
//! that the outcome is the same on every machine with IEEE 754 arithmetic; it is no kernel for solving anything.
//!
//! Theorem (S. Rump, "Verification of positive definiteness", BIT Numerical Mathematics 46:433-452, 2006, from memory;
//! the proof below rests on the textbook error bound alone). Let A be symmetric of order n <= 32,768 with whole entries
//! of modulus at most 2^53 and positive diagonal, u = 2^-53, and let c be a power of two with
//! c >= 4 (n + 2) u tr A. If the Cholesky factorisation of B = A - cI in floating point, rounding to nearest, runs to
//! its end with positive pivots, then A is positive definite.
//!
//! Proof. B is formed without rounding: a_ii and c are multiples of min(1, c), and |a_ii - c| is at most 2^53 times
//! that, since c >= 4 (n + 2) u a_ii. Let R be the computed factor. Without underflow, R'R = B + E with
//! |e_ij| <= g (|R|'|R|)_ij, g = (n + 1) u / (1 - (n + 1) u), in whatever order the sums are taken (N. Higham, Accuracy
//! and Stability of Numerical Algorithms, 2nd edition, Theorem 10.3, from memory). The diagonal gives
//! (1 - g) |r_i|^2 <= b_ii for the columns r_i of R, so |e_ij| <= h (b_ii b_jj)^(1/2) with h = g / (1 - g), and
//! ||E|| <= h tr B <= h tr A. Underflow adds to an entry at most 2^-1075 a product or quotient, times at most 2^27 for
//! the pivot that multiplies a quotient: less than 2^-900 in ||E||. R'R is PSD, so the least eigenvalue of A is at
//! least c - h tr A - 2^-900. Since h tr A < 1.01 (n + 1) u tr A < c / 2 (the sum of the trace in floats included)
//! and c >= 2^-53, this is positive. QED.

/// Largest order for which the theorem is stated.
pub(super) const MOST_ORDER: usize = 1 << 15;

/// Says at which column, from 0, the factorisation stopped; nothing is known of the matrix then.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Stopped(pub usize);

/// Proves that a symmetric matrix is positive definite, by the module's theorem.
///
/// `columns` holds the lower triangle, column after column, n(n+1)/2 whole numbers of modulus at most 2^53; it is
/// overwritten.
///
/// # Errors
/// [`Stopped`]: there is no proof.
#[track_caller]
pub(super) fn prove_positive_definite(order: usize, columns: &mut [f64]) -> Result<(), Stopped> {
    assert!(order <= MOST_ORDER, "the error bound is stated up to order {MOST_ORDER}");
    assert_eq!(columns.len(), order * (order + 1) / 2, "a packed lower triangle");
    let starts = starts(order);
    let mut trace = 0.0;
    for (j, &start) in starts.iter().enumerate() {
        if columns[start] <= 0.0 {
            return Err(Stopped(j));
        }
        trace += columns[start];
    }
    let shift = power_of_two_above(4.0 * (order + 2) as f64 * (f64::EPSILON / 2.0) * trace);
    for &start in &starts {
        columns[start] -= shift;
    }
    for j in 0..order {
        let (done, rest) = columns.split_at_mut(starts[j]);
        let column = &mut rest[..order - j];
        for k in 0..j {
            let earlier = &done[starts[k] + j - k..starts[k] + order - k];
            let factor = earlier[0];
            if factor != 0.0 {
                for (target, value) in column.iter_mut().zip(earlier) {
                    *target -= factor * value;
                }
            }
        }
        // The negation also stops at a NaN.
        if !(column[0] > 0.0 && column[0].is_finite()) {
            return Err(Stopped(j));
        }
        let pivot = column[0].sqrt();
        column[0] = pivot;
        for value in &mut column[1..] {
            *value /= pivot;
        }
    }
    Ok(())
}

/// Returns where each column of a packed lower triangle starts.
fn starts(order: usize) -> Vec<usize> {
    (0..order).map(|j| j * order - j * j.saturating_sub(1) / 2).collect()
}

/// Returns the least power of two at or above a positive normal number.
fn power_of_two_above(value: f64) -> f64 {
    const FRACTION: u64 = (1 << 52) - 1;
    f64::from_bits((value.to_bits() + FRACTION) & !FRACTION)
}

#[cfg(test)]
mod tests {
    use super::*;
    use num_bigint::BigInt;
    use proptest::prelude::*;

    fn packed(order: usize, entry: impl Fn(usize, usize) -> f64) -> Vec<f64> {
        (0..order).flat_map(|j| (j..order).map(move |i| (i, j))).map(|(i, j)| entry(i, j)).collect()
    }

    #[test]
    fn powers_of_two_are_the_next_ones() {
        for (value, power) in [(1.0, 1.0), (1.5, 2.0), (3e-9, 2f64.powi(-28)), (1025.0, 2048.0)] {
            assert_eq!(power_of_two_above(value), power);
        }
    }

    #[test]
    fn columns_start_where_they_are_packed() {
        assert_eq!(starts(4), [0, 4, 7, 9]);
    }

    /// The second difference matrix tridiag(-1, 2, -1) is positive definite with least eigenvalue 2 - 2 cos(pi / (n+1));
    /// with its last corner at 1 - 1 = 0 less, it stays so until the corner n/(n+1) is taken away, where it is singular.
    #[test]
    fn definiteness_is_told_on_both_sides_of_singularity() {
        for n in [2usize, 7, 50, 300] {
            // Scaled by n: the singular corner is 2n - (n + 1) = n - 1.
            let matrix = |corner: f64| {
                packed(n, |i, j| match i - j {
                    0 if i == n - 1 => corner,
                    0 => 2.0 * n as f64,
                    1 => -(n as f64),
                    _ => 0.0,
                })
            };
            assert!(prove_positive_definite(n, &mut matrix(n as f64)).is_ok(), "order {n}");
            for corner in [n as f64 - 1.0, n as f64 - 2.0] {
                assert!(prove_positive_definite(n, &mut matrix(corner)).is_err(), "order {n}");
            }
        }
    }

    /// Determinants of the leading minors by fraction-free elimination, in big integers.
    fn is_definite(n: usize, lower: &[f64]) -> bool {
        let starts = starts(n);
        let at =
            |i: usize, j: usize| BigInt::from(lower[starts[j.min(i)] + i.max(j) - i.min(j)] as i64);
        let mut m: Vec<Vec<BigInt>> = (0..n).map(|i| (0..n).map(|j| at(i, j)).collect()).collect();
        let mut previous = BigInt::from(1);
        for k in 0..n {
            if m[k][k] <= BigInt::from(0) {
                return false;
            }
            for i in k + 1..n {
                for j in k + 1..n {
                    m[i][j] = (&m[i][j] * &m[k][k] - &m[i][k] * &m[k][j]) / &previous;
                }
            }
            previous = m[k][k].clone();
        }
        true
    }

    proptest! {
        /// G'G + dI for small whole G and d in {-1, 0, 1}: at the edge of definiteness, where a wrong bound would show.
        #[test]
        fn what_is_proved_is_definite(
            n in 1usize..7,
            entries in proptest::collection::vec(-9i64..10, 36),
            shift in -1i64..2,
        ) {
            let entries = &entries;
            let product = |i: usize, j: usize| (0..n.max(2) - 1).map(move |k| entries[6 * k + i] * entries[6 * k + j]);
            let matrix = packed(n, |i, j| {
                (product(i, j).sum::<i64>() + if i == j { shift } else { 0 }) as f64
            });
            let exact = is_definite(n, &matrix);
            let proved = prove_positive_definite(n, &mut matrix.clone()).is_ok();
            prop_assert!(exact || !proved);
            // Whole matrices this small are far from singular in float terms, so nothing is missed either.
            prop_assert_eq!(exact, proved);
        }
    }
}
