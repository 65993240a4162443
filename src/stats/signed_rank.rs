//! Two methods on the same instances, outcomes being costs: Wilcoxon's signed-rank test and the Hodges-Lehmann shift.
//!
//! The caller passes differences, commonly of logarithms of cost, so that the shift is the logarithm of a
//! ratio. Not for solved-or-not outcomes: see `paired`.

use super::Interval;
use super::special::{check_confidence, check_numbers, doubled_ranks, normal_cdf, normal_quantile};
use super::summary::between;

/// Largest number of non-zero differences whose distribution is counted exactly.
pub const EXACT_LIMIT: u64 = 50;

/// What becomes of zero differences.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Zeros {
    /// They are dropped before ranking (Wilcoxon).
    Drop,
    /// They are ranked with the others and their ranks dropped afterwards (Pratt).
    Pratt,
}

/// How a p-value was found.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Exactness {
    /// By counting all sign patterns.
    Exact,
    /// By the normal approximation with tie correction, without continuity correction.
    Normal,
}

/// Rank sums and p-values of the signed-rank test.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SignedRank {
    /// Non-zero differences.
    pub used: u64,
    /// Zero differences.
    pub zeros: u64,
    /// Rank sum of the positive differences.
    pub plus: f64,
    /// Rank sum of the negative differences.
    pub minus: f64,
    /// Two-sided p: min(1, 2 min(less, greater)).
    pub two_sided: f64,
    /// P(W <= plus): small when the differences tend to be negative.
    pub less: f64,
    /// P(W >= plus): small when the differences tend to be positive.
    pub greater: f64,
    /// How the p-values were found.
    pub exact: Exactness,
}

/// Tests whether the differences are symmetric about 0.
///
/// Absolute differences get average ranks; W is the rank sum of the positive ones. Up to [`EXACT_LIMIT`]
/// non-zero differences all sign patterns are counted, ties included (over doubled ranks, conditional on the
/// ties); beyond, z = (W - mean)/sd with mean = sum of ranks / 2 and sd^2 = sum of squared ranks / 4, which for
/// dropped zeros is N(N+1)(2N+1)/24 - sum(t^3 - t)/48. No non-zero difference gives p-values of 1. Infinite
/// differences get the highest ranks and tie.
///
/// Source: F. Wilcoxon, Biometrics Bulletin 1:80-83, 1945; J. Pratt, J. Amer. Statist. Assoc. 54:655-667, 1959
/// (both from memory).
///
/// # Panics
/// When a difference is NaN.
#[track_caller]
pub fn signed_rank(differences: &[f64], zeros: Zeros) -> SignedRank {
    check_numbers(differences, "difference");
    let zero_count = differences.iter().filter(|&&d| d == 0.0).count() as u64;
    let ranked: Vec<f64> = match zeros {
        Zeros::Drop => differences.iter().copied().filter(|&d| d != 0.0).collect(),
        Zeros::Pratt => differences.to_vec(),
    };
    let sizes: Vec<f64> = ranked.iter().map(|d| d.abs()).collect();
    let signed: Vec<(f64, u64)> =
        ranked.iter().copied().zip(doubled_ranks(&sizes)).filter(|&(d, _)| d != 0.0).collect();
    let ranks: Vec<u64> = signed.iter().map(|&(_, rank)| rank).collect();
    let total: u64 = ranks.iter().sum();
    let plus: u64 = signed.iter().filter(|&&(d, _)| d > 0.0).map(|&(_, rank)| rank).sum();
    let used = ranks.len() as u64;
    let (less, greater, exact) = if used == 0 {
        (1.0, 1.0, Exactness::Exact)
    } else if used <= EXACT_LIMIT {
        let law = Law::of(&ranks);
        (law.at_most(plus), law.at_most(total - plus), Exactness::Exact)
    } else {
        let squares: f64 = ranks.iter().map(|&rank| (rank as f64).powi(2)).sum();
        let z = (plus as f64 - 0.5 * total as f64) / (0.25 * squares).sqrt();
        (normal_cdf(z), normal_cdf(-z), Exactness::Normal)
    };
    SignedRank {
        used,
        zeros: zero_count,
        plus: 0.5 * plus as f64,
        minus: 0.5 * (total - plus) as f64,
        two_sided: (2.0 * less.min(greater)).min(1.0),
        less,
        greater,
        exact,
    }
}

/// The exact law of a rank sum under random signs, as counts of sign patterns.
struct Law {
    /// Common divisor of the ranks.
    unit: u64,
    /// Number of sign patterns for each sum, in units. At most 2^50 in all, hence exact in 64 bits.
    counts: Vec<u64>,
    patterns: f64,
}

impl Law {
    /// Counts the sign patterns of the given positive integer ranks (at most [`EXACT_LIMIT`] of them).
    fn of(ranks: &[u64]) -> Self {
        let unit = ranks.iter().copied().fold(0, divisor).max(1);
        let total: u64 = ranks.iter().map(|rank| rank / unit).sum();
        let mut counts = vec![0_u64; total as usize + 1];
        counts[0] = 1;
        let mut reach = 0;
        for rank in ranks.iter().map(|rank| (rank / unit) as usize) {
            reach += rank;
            for sum in (rank..=reach).rev() {
                counts[sum] += counts[sum - rank];
            }
        }
        Law { unit, counts, patterns: 2.0_f64.powi(ranks.len() as i32) }
    }

    /// Counts the law of the ranks 1 to `n`.
    fn without_ties(n: u64) -> Self {
        Law::of(&(1..=n).collect::<Vec<u64>>())
    }

    /// Computes the chance that the sum is at most `sum`.
    fn at_most(&self, sum: u64) -> f64 {
        let last = (sum / self.unit) as usize;
        self.counts[..=last.min(self.counts.len() - 1)].iter().sum::<u64>() as f64 / self.patterns
    }

    /// Finds the largest sum whose lower tail is at most `tail`.
    fn critical(&self, tail: f64) -> Option<u64> {
        let mut below = 0;
        let mut answer = None;
        for (sum, count) in self.counts.iter().enumerate() {
            below += count;
            if below as f64 / self.patterns > tail {
                break;
            }
            answer = Some(sum as u64 * self.unit);
        }
        answer
    }
}

/// Computes the greatest common divisor.
fn divisor(a: u64, b: u64) -> u64 {
    if b == 0 { a } else { divisor(b, a % b) }
}

/// Finds the largest T with P(W <= T) <= `one_sided` for `n` differences without ties and zeros; `None` when
/// there is none.
///
/// Exact for `n` <= [`EXACT_LIMIT`]; beyond, the integer part of mean + (z + g (z^3 - 3z)/24) sd - 1/2: the normal
/// approximation with continuity correction and the next term of its expansion (Cornish and Fisher, from memory),
/// z the normal quantile of `one_sided` and g = -(sum of i^4)/(8 sd^4) the excess of the law. For 51 to 120
/// differences and levels of 0.005 to 0.05 it is within one of the exact value.
///
/// # Panics
/// When `one_sided` is not in (0, 1).
#[track_caller]
pub fn critical_value(n: u64, one_sided: f64) -> Option<u64> {
    assert!(one_sided > 0.0 && one_sided < 1.0, "the level {one_sided} is not in (0, 1)");
    if n <= EXACT_LIMIT {
        return Law::without_ties(n).critical(one_sided);
    }
    let n = n as f64;
    let mean = n * (n + 1.0) / 4.0;
    let variance = n * (n + 1.0) * (2.0 * n + 1.0) / 24.0;
    let fourth = n * (n + 1.0) * (2.0 * n + 1.0) * (3.0 * n * n + 3.0 * n - 1.0) / 30.0;
    let excess = -fourth / (8.0 * variance * variance);
    let z = normal_quantile(one_sided);
    let bent = z + excess * (z * z * z - 3.0 * z) / 24.0;
    let value = (mean + bent * variance.sqrt() - 0.5).floor();
    (value >= 0.0).then_some(value as u64)
}

/// A shift with its confidence interval.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Shift {
    /// The median of the Walsh averages.
    pub estimate: f64,
    /// The interval that inverts the signed-rank test.
    pub interval: Interval,
}

/// Estimates the shift of the differences from 0 by the median of all Walsh averages (d_i + d_j)/2, i <= j;
/// `None` for no differences.
///
/// Zeros are kept. The interval runs from the (T+1)-th smallest to the (T+1)-th largest Walsh average, T the
/// critical value of [`critical_value`] at (1 - confidence)/2, so it covers with at least the confidence for up
/// to [`EXACT_LIMIT`] differences from a continuous symmetric law, and approximately beyond; its ends are
/// infinite when there is no critical value. The averages are counted and not listed: the cost is O(n log n)
/// and every end is an actual Walsh average (the estimate may be the midpoint of two). Infinite differences act
/// as equal huge ones: the average of opposite infinities is 0.
///
/// Source: J. Hodges, E. Lehmann, Annals of Mathematical Statistics 34:598-611, 1963 (from memory).
///
/// # Panics
/// When a difference is NaN or `confidence` is not in (0, 1).
#[track_caller]
pub fn hodges_lehmann(differences: &[f64], confidence: f64) -> Option<Shift> {
    check_numbers(differences, "difference");
    check_confidence(confidence);
    if differences.is_empty() {
        return None;
    }
    let mut sorted = differences.to_vec();
    sorted.sort_by(f64::total_cmp);
    let n = sorted.len() as u64;
    let averages = n * (n + 1) / 2;
    let middle = averages.div_ceil(2);
    let lower = walsh(&sorted, middle);
    let upper = if averages.is_multiple_of(2) { walsh(&sorted, middle + 1) } else { lower };
    let interval = match critical_value(n, 0.5 * (1.0 - confidence)) {
        None => Interval { low: f64::NEG_INFINITY, high: f64::INFINITY },
        Some(t) => Interval { low: walsh(&sorted, t + 1), high: walsh(&sorted, averages - t) },
    };
    Some(Shift { estimate: between(lower, upper, 0.5), interval })
}

/// Computes one Walsh average.
fn average(a: f64, b: f64) -> f64 {
    between(a, b, 0.5)
}

/// Finds the `place`-th smallest Walsh average (from 1) of sorted values, by bisection over all floating-point
/// numbers.
fn walsh(sorted: &[f64], place: u64) -> f64 {
    let (mut low, mut high) = (key(f64::NEG_INFINITY), key(f64::INFINITY));
    while low < high {
        let middle = low + (high - low) / 2;
        if walsh_at_most(sorted, number(middle)) >= place {
            high = middle;
        } else {
            low = middle + 1;
        }
    }
    number(low) + 0.0
}

/// Counts the Walsh averages of sorted values that are at most `bound`, with two pointers.
fn walsh_at_most(sorted: &[f64], bound: f64) -> u64 {
    let mut count = 0;
    let mut end = sorted.len();
    for (i, &value) in sorted.iter().enumerate() {
        while end > 0 && average(value, sorted[end - 1]) > bound {
            end -= 1;
        }
        if end <= i {
            break;
        }
        count += (end - i) as u64;
    }
    count
}

/// Maps a number to an integer of the same order.
fn key(value: f64) -> u64 {
    let bits = value.to_bits();
    if bits >> 63 == 0 { bits | (1 << 63) } else { !bits }
}

/// Maps an integer of [`key`] back to its number.
fn number(key: u64) -> f64 {
    f64::from_bits(if key >> 63 == 1 { key & !(1 << 63) } else { !key })
}
