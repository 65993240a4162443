//! Whole vectors that balance hidden signs.

use crate::seed::Stream;

/// Draws w in {-most..most}^n with w't = 0.
pub(super) fn balanced(stream: &mut Stream, signs: &[i64], most: i64) -> Vec<i64> {
    let mut column: Vec<i64> = signs.iter().map(|_| stream.between(-most, most)).collect();
    let mut sum: i64 = column.iter().zip(signs).map(|(w, t)| w * t).sum();
    // Steps of up to a 64th of the range first, so that their number does not grow with the range.
    let mut step = (most / 64).max(1);
    while sum != 0 {
        step = step.min(sum.abs());
        let i = stream.index(signs.len());
        let next = column[i] - sum.signum() * signs[i] * step;
        if next.abs() <= most {
            column[i] = next;
            sum -= sum.signum() * step;
        }
    }
    column
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn columns_balance_within_their_range() {
        let mut stream = Stream::named(2, &["balanced"]);
        for (order, most) in [(6, 1), (20, 10), (50, 1_000_000)] {
            let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
            for _ in 0..50 {
                let drawn = balanced(&mut stream, &signs, most);
                assert_eq!(drawn.iter().zip(&signs).map(|(w, t)| w * t).sum::<i64>(), 0);
                assert!(drawn.iter().all(|w| w.abs() <= most));
            }
        }
    }
}
