//! Confidence intervals of one proportion: how many instances of a class a method solves.
//!
//! Not for differences between methods on the same instances: those are paired, see `paired`.

use super::Interval;
use super::special::{beta_quantile, check_confidence, two_sided_quantile};

/// Panics unless the counts and the confidence are possible.
#[track_caller]
fn check(successes: u64, trials: u64, confidence: f64) {
    assert!(successes <= trials, "{successes} successes in {trials} trials are impossible");
    check_confidence(confidence);
}

/// Computes Wilson's score interval of a success probability.
///
/// With p = successes / n and z the two-sided normal quantile the ends are
/// (p + z^2/2n -+ z sqrt(p(1-p)/n + z^2/4n^2)) / (1 + z^2/n), cut to [0, 1]. No trial gives [0, 1]; no success gives
/// the low end 0 and no failure the high end 1, both exactly.
///
/// Source: E. B. Wilson, J. Amer. Statist. Assoc. 22:209-212, 1927 (from memory).
///
/// # Panics
/// When `successes > trials` or `confidence` is not in (0, 1).
#[track_caller]
pub fn wilson(successes: u64, trials: u64, confidence: f64) -> Interval {
    check(successes, trials, confidence);
    if trials == 0 {
        return Interval { low: 0.0, high: 1.0 };
    }
    let z = two_sided_quantile(confidence);
    let high = wilson_high(successes, trials, z);
    let low = 1.0 - wilson_high(trials - successes, trials, z);
    Interval { low: if successes == 0 { 0.0 } else { low.max(0.0) }, high }
}

/// Computes the upper end of Wilson's interval.
fn wilson_high(successes: u64, trials: u64, z: f64) -> f64 {
    if successes == trials {
        return 1.0;
    }
    let n = trials as f64;
    let p = successes as f64 / n;
    let middle = p + z * z / (2.0 * n);
    let half = z * (p * (1.0 - p) / n + z * z / (4.0 * n * n)).sqrt();
    ((middle + half) / (1.0 + z * z / n)).min(1.0)
}

/// Computes the exact interval of Clopper and Pearson of a success probability.
///
/// The ends are beta quantiles: low = Beta(k, n-k+1) at (1-confidence)/2, high = Beta(k+1, n-k) at
/// (1+confidence)/2. No success gives the low end 0, no failure the high end 1, no trial [0, 1]. The ends are
/// found by bisection down to neighbouring numbers; their error is at most 1e-12 for up to 10,000 trials.
///
/// Source: C. Clopper, E. Pearson, Biometrika 26:404-413, 1934 (from memory).
///
/// # Panics
/// When `successes > trials` or `confidence` is not in (0, 1).
#[track_caller]
pub fn clopper_pearson(successes: u64, trials: u64, confidence: f64) -> Interval {
    check(successes, trials, confidence);
    let (k, n) = (successes as f64, trials as f64);
    let tail = 0.5 * (1.0 - confidence);
    let low = if successes == 0 { 0.0 } else { beta_quantile(tail, k, n - k + 1.0) };
    // The upper end by symmetry, so that both ends are lower quantiles.
    let high = if successes == trials { 1.0 } else { 1.0 - beta_quantile(tail, n - k, k + 1.0) };
    Interval { low, high }
}
