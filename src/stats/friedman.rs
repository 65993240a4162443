//! Several methods on the same instances: Friedman's rank test and the critical difference of mean ranks.

use super::special::{check_numbers, chi_square_tail, doubled_ranks, f_tail};

/// Mean ranks of the methods and the tests of their equality.
#[derive(Clone, Debug, PartialEq)]
pub struct Friedman {
    /// Mean rank of each method (from 1, smaller is better).
    pub mean_ranks: Vec<f64>,
    /// Number of instances.
    pub blocks: u64,
    /// Friedman's chi-square with tie correction.
    pub chi_square: f64,
    /// Upper tail of the chi-square law with k - 1 degrees of freedom.
    pub chi_square_p: f64,
    /// The F form of the statistic (infinite when every instance ranks the methods alike).
    pub f: f64,
    /// Upper tail of the F law with k - 1 and (k-1)(N-1) degrees of freedom.
    pub f_p: f64,
}

/// Tests whether k methods rank alike on N instances; `None` for fewer than two methods or two instances.
///
/// One row of `blocks` is an instance, one column a method; smaller is better; ties share average ranks;
/// infinities are allowed and tie with each other. With S_j the rank sums and r the single ranks the statistic is
/// chi2 = (k-1) sum_j (S_j - N(k+1)/2)^2 / (sum r^2 - N k (k+1)^2/4), which without ties is the usual
/// 12N/(k(k+1)) (sum R_j^2 - k(k+1)^2/4) with R_j the mean ranks; F = (N-1) chi2 / (N(k-1) - chi2). When every
/// instance ties all methods, both statistics are 0 and both p-values 1.
///
/// Source: J. Demsar, JMLR 7:1-30, 2006; tie correction: W. Conover, Practical Nonparametric Statistics (from
/// memory).
///
/// # Panics
/// When rows differ in length or a value is NaN.
#[track_caller]
pub fn friedman(blocks: &[Vec<f64>]) -> Option<Friedman> {
    let methods = blocks.first()?.len();
    for (row, block) in blocks.iter().enumerate() {
        assert!(
            block.len() == methods,
            "row {row} has {} values, row 0 has {methods}",
            block.len()
        );
        check_numbers(block, &format!("value of row {row}"));
    }
    if methods < 2 || blocks.len() < 2 {
        return None;
    }
    // Doubled ranks keep every sum an integer.
    let mut sums = vec![0_i128; methods];
    let mut squares = 0_i128;
    for block in blocks {
        for (sum, rank) in sums.iter_mut().zip(doubled_ranks(block)) {
            *sum += i128::from(rank);
            squares += i128::from(rank) * i128::from(rank);
        }
    }
    let (count, k) = (blocks.len() as i128, methods as i128);
    let between: i128 = sums.iter().map(|s| (s - count * (k + 1)).pow(2)).sum();
    let within = squares - count * k * (k + 1) * (k + 1);
    let (n, freedom) = (count as f64, (k - 1) as f64);
    let (chi_square, f) = if within == 0 {
        (0.0, 0.0)
    } else {
        let rest = (count * within - between) as f64;
        (freedom * between as f64 / within as f64, (n - 1.0) * between as f64 / rest)
    };
    Some(Friedman {
        mean_ranks: sums.iter().map(|&s| s as f64 / (2.0 * n)).collect(),
        blocks: blocks.len() as u64,
        chi_square,
        chi_square_p: chi_square_tail(chi_square, freedom),
        f,
        f_p: f_tail(f, freedom, freedom * (n - 1.0)),
    })
}

/// The level of the critical difference.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Level {
    /// Five in a hundred.
    FivePercent,
    /// Ten in a hundred.
    TenPercent,
}

/// Quantiles for 2 to 10 methods at 5 % (J. Demsar, JMLR 7:1-30, 2006).
const FIVE: [f64; 9] = [1.960, 2.344, 2.569, 2.728, 2.850, 2.948, 3.031, 3.102, 3.164];
/// Quantiles for 2 to 10 methods at 10 % (same source).
const TEN: [f64; 9] = [1.645, 2.052, 2.291, 2.460, 2.589, 2.693, 2.780, 2.855, 2.920];

/// Computes Nemenyi's critical difference of mean ranks, q sqrt(k(k+1)/(6N)); `None` unless 2 <= `methods` <=
/// 10 and `blocks` >= 1.
///
/// Source: J. Demsar, JMLR 7:1-30, 2006 (the quantiles have its three decimals).
pub fn critical_difference(methods: usize, blocks: u64, level: Level) -> Option<f64> {
    let table = match level {
        Level::FivePercent => &FIVE,
        Level::TenPercent => &TEN,
    };
    let q = table.get(methods.checked_sub(2)?)?;
    let k = methods as f64;
    (blocks > 0).then(|| q * (k * (k + 1.0) / (6.0 * blocks as f64)).sqrt())
}
