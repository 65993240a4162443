//! Hadamard matrices: square matrices H with entries 1 and -1 and H'H = nI.
//!
//! Three constructions: Paley's two (R. Paley, Journal of Mathematics and Physics 12:311-320, 1933), here
//! over prime fields only, and Sylvester's doubling. They give the orders 1, 2, 4, 8, 12, 16, 20, 24, 28,
//! 32, 36, 40, 44, 48; 52 is the first multiple of four that is missing.

/// Builds a Hadamard matrix of the given order by rows, or none when the constructions do not reach it.
pub(super) fn hadamard(order: usize) -> Option<Vec<Vec<i64>>> {
    match order {
        1 => return Some(vec![vec![1]]),
        2 => return Some(vec![vec![1, 1], vec![1, -1]]),
        _ if order == 0 || !order.is_multiple_of(4) => return None,
        _ => {}
    }
    // A multiple of four less one is 3 modulo 4, as Paley's first construction asks.
    if is_prime(order - 1) {
        return Some(paley_first(order - 1));
    }
    let q = order / 2 - 1;
    if q % 4 == 1 && is_prime(q) {
        return Some(paley_second(q));
    }
    let half = hadamard(order / 2)?;
    Some(kronecker(&half, &[[1, 1], [1, -1]]))
}

/// Returns the order nearest to `order` that [`hadamard`] reaches within `least..=most`.
pub(super) fn nearest_order(order: usize, least: usize, most: usize) -> usize {
    (least..=most)
        .filter(|&candidate| hadamard(candidate).is_some())
        .min_by_key(|candidate| candidate.abs_diff(order))
        .expect("the range holds a power of two")
}

fn is_prime(q: usize) -> bool {
    q >= 2 && (2..).take_while(|d| d * d <= q).all(|d| !q.is_multiple_of(d))
}

/// Returns the quadratic character modulo the prime q: 1 for nonzero squares, -1 for nonsquares.
fn character(q: usize) -> Vec<i64> {
    let mut values = vec![-1; q];
    values[0] = 0;
    for a in 1..q {
        values[a * a % q] = 1;
    }
    values
}

/// Returns the matrix with a border of ones, `border` times that on the left, and the characters of
/// the differences inside.
fn bordered(q: usize, border: i64) -> Vec<Vec<i64>> {
    let chi = character(q);
    let mut matrix = vec![vec![0; q + 1]; q + 1];
    for j in 0..q {
        matrix[0][j + 1] = 1;
        matrix[j + 1][0] = border;
        for i in 0..q {
            matrix[i + 1][j + 1] = chi[(j + q - i) % q];
        }
    }
    matrix
}

/// I + S with the skew conference matrix S of a prime q = 3 (mod 4); order q + 1.
fn paley_first(q: usize) -> Vec<Vec<i64>> {
    let mut matrix = bordered(q, -1);
    for i in 0..=q {
        matrix[i][i] += 1;
    }
    matrix
}

/// The symmetric conference matrix of a prime q = 1 (mod 4), entries replaced by 2 x 2 blocks; order
/// 2(q + 1).
fn paley_second(q: usize) -> Vec<Vec<i64>> {
    let conference = bordered(q, 1);
    let mut matrix = kronecker(&conference, &[[1, 1], [1, -1]]);
    for i in 0..=q {
        matrix[2 * i][2 * i] += 1;
        matrix[2 * i][2 * i + 1] -= 1;
        matrix[2 * i + 1][2 * i] -= 1;
        matrix[2 * i + 1][2 * i + 1] -= 1;
    }
    matrix
}

fn kronecker(left: &[Vec<i64>], right: &[[i64; 2]; 2]) -> Vec<Vec<i64>> {
    let order = 2 * left.len();
    let entry = |i: usize, j: usize| left[i / 2][j / 2] * right[i % 2][j % 2];
    (0..order).map(|i| (0..order).map(|j| entry(i, j)).collect()).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_matrix_obeys_the_hadamard_identity() {
        let mut reached = Vec::new();
        for order in 1..=128 {
            let Some(matrix) = hadamard(order) else {
                continue;
            };
            reached.push(order);
            assert_eq!(matrix.len(), order);
            for (i, left) in matrix.iter().enumerate() {
                assert!(left.iter().all(|value| value.abs() == 1), "order {order}");
                for (j, right) in matrix.iter().enumerate() {
                    let dot: i64 = left.iter().zip(right).map(|(a, b)| a * b).sum();
                    assert_eq!(dot, if i == j { order as i64 } else { 0 }, "order {order}");
                }
            }
        }
        // Sylvester and Paley: all multiples of four to 48; 52 needs the field of 25 elements.
        assert!(reached.starts_with(&[1, 2, 4, 8, 12, 16, 20, 24, 28, 32, 36, 40, 44, 48, 56]));
    }

    #[test]
    fn the_nearest_order_is_found() {
        assert_eq!(nearest_order(13, 4, 128), 12);
        assert_eq!(nearest_order(52, 4, 128), 48);
        assert_eq!(nearest_order(3, 4, 128), 4);
    }
}
