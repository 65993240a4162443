//! Semidefiniteness of small matrices of whole numbers, decided exactly.

use num_bigint::{BigInt, Sign};

/// Returns whether a symmetric matrix, given by full rows, is positive semidefinite.
///
/// Fraction-free symmetric elimination (E. Bareiss, Mathematics of Computation 22:565-578, 1968, from memory) with
/// diagonal pivots: with a pivot p > 0 the matrix is PSD exactly when its Schur complement is, which the elimination
/// holds times a positive number; without one it is PSD exactly when it is zero, given that no diagonal entry
/// is negative. The cost is about n^3 / 3 products of numbers of up to n times the digits: for orders of some dozens.
#[track_caller]
pub fn is_positive_semidefinite(mut rows: Vec<Vec<BigInt>>) -> bool {
    let order = rows.len();
    assert!(rows.iter().all(|row| row.len() == order), "a square matrix");
    let mut left: Vec<usize> = (0..order).collect();
    let mut previous = BigInt::from(1);
    loop {
        if left.iter().any(|&i| rows[i][i].sign() == Sign::Minus) {
            return false;
        }
        let Some(at) = left.iter().position(|&i| rows[i][i].sign() == Sign::Plus) else {
            return left.iter().all(|&i| left.iter().all(|&j| rows[i][j].sign() == Sign::NoSign));
        };
        let p = left.swap_remove(at);
        let pivot = rows[p][p].clone();
        for &i in &left {
            for &j in &left {
                rows[i][j] = (&rows[i][j] * &pivot - &rows[i][p] * &rows[p][j]) / &previous;
            }
        }
        previous = pivot;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn matrix(n: usize, entry: impl Fn(usize, usize) -> i64) -> Vec<Vec<BigInt>> {
        (0..n).map(|i| (0..n).map(|j| BigInt::from(entry(i, j))).collect()).collect()
    }

    #[test]
    fn small_matrices_are_told_apart() {
        assert!(is_positive_semidefinite(matrix(3, |_, _| 0)));
        assert!(is_positive_semidefinite(matrix(3, |_, _| 1)));
        assert!(!is_positive_semidefinite(matrix(2, |i, j| i64::from(i != j))));
        // [[0, 1], [1, 5]] has the determinant -1.
        assert!(!is_positive_semidefinite(matrix(2, |i, j| [[0, 1], [1, 5]][i][j])));
        // A Laplacian is PSD and singular; one unit less on the diagonal is not PSD.
        assert!(is_positive_semidefinite(matrix(5, |i, j| if i == j { 4 } else { -1 })));
        assert!(!is_positive_semidefinite(matrix(5, |i, j| if i == j {
            4 - i64::from(i == 2)
        } else {
            -1
        })));
    }

    proptest! {
        #[test]
        fn squares_are_semidefinite_and_their_negative_shifts_are_not(
            n in 2usize..6,
            entries in proptest::collection::vec(-5i64..6, 25),
        ) {
            // n - 1 rows: the product is singular, so taking off the identity makes it indefinite.
            let square = |i: usize, j: usize| {
                (0..n - 1).map(|k| entries[5 * k + i] * entries[5 * k + j]).sum::<i64>()
            };
            prop_assert!(is_positive_semidefinite(matrix(n, square)));
            prop_assert!(!is_positive_semidefinite(matrix(n, |i, j| square(i, j) - i64::from(i == j))));
        }
    }
}
