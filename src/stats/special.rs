//! The special functions the statistics stand on: normal and beta quantiles, binomial probabilities, tail areas.
//!
//! Not a library of distributions: only what `stats` needs, each with the accuracy it was tested to.

use statrs::function::beta::beta_reg;
use statrs::function::erf::erfc_inv;
use statrs::function::gamma::gamma_ur;
use std::f64::consts::{PI, SQRT_2};

/// Largest number of trials whose binomial counts at chance 1/2 are summed in 128-bit integers.
const INTEGER_TRIALS: u64 = 120;

/// Where the normal tail changes from the series to the continued fraction.
const SERIES_END: f64 = 2.0;

/// Computes the standard normal density.
fn normal_density(z: f64) -> f64 {
    (-0.5 * z * z).exp() / (2.0 * PI).sqrt()
}

/// Computes the standard normal distribution function, with a relative error of at most 1e-13 also in the lower tail.
///
/// Near the centre 1/2 + density * (z + z^3/3 + z^5/(3 5) + ...), all terms of one sign (G. Marsaglia, Journal
/// of Statistical Software 11(4), 2004, from memory), beyond 2 the continued fraction of Mills' ratio. The
/// complementary error function of `statrs` 0.18 is off by up to 1e-10 relative and serves only for starting
/// values.
pub(super) fn normal_cdf(z: f64) -> f64 {
    if z > SERIES_END {
        return 1.0 - normal_cdf(-z);
    }
    if z == f64::NEG_INFINITY {
        return 0.0;
    }
    if z < -SERIES_END {
        let mills = (1..=150).rev().fold(-z, |below, k| -z + f64::from(k) / below);
        return normal_density(z) / mills;
    }
    let (mut term, mut sum, mut odd) = (z, z, 1.0);
    while term.abs() > 1e-18 {
        odd += 2.0;
        term *= z * z / odd;
        sum += term;
    }
    0.5 + normal_density(z) * sum
}

/// Computes the standard normal quantile for `share` in [0, 1]; the ends give infinities.
///
/// The starting value is refined by two Newton steps on the smaller tail, so that the absolute error is at most
/// 1e-12 for `share` in [1e-300, 1 - 2^-53].
pub(super) fn normal_quantile(share: f64) -> f64 {
    if share > 0.5 {
        return -normal_quantile(1.0 - share);
    }
    if share <= 0.0 {
        return f64::NEG_INFINITY;
    }
    if share == 0.5 {
        return 0.0;
    }
    let mut z = -SQRT_2 * erfc_inv(2.0 * share);
    for _ in 0..2 {
        let step = (normal_cdf(z) - share) / normal_density(z);
        if step.is_finite() {
            z -= step;
        }
    }
    z
}

/// Computes the two-sided normal quantile: z with P(|Z| <= z) = `confidence`.
pub(super) fn two_sided_quantile(confidence: f64) -> f64 {
    -normal_quantile(0.5 * (1.0 - confidence))
}

/// Computes the quantile of the Beta(a, b) law at `share` by bisection on its distribution function.
///
/// `a` and `b` must be positive. Bisection ends at neighbouring floating-point numbers; the error is that of the
/// distribution function.
pub(super) fn beta_quantile(share: f64, a: f64, b: f64) -> f64 {
    let (mut low, mut high) = (0.0, 1.0);
    loop {
        let middle = 0.5 * (low + high);
        if middle <= low || middle >= high {
            return middle;
        }
        if beta_reg(a, b, middle) < share {
            low = middle;
        } else {
            high = middle;
        }
    }
}

/// Computes the upper tail of the chi-square law with `freedom` degrees of freedom.
pub(super) fn chi_square_tail(x: f64, freedom: f64) -> f64 {
    if x <= 0.0 { 1.0 } else { gamma_ur(0.5 * freedom, 0.5 * x) }
}

/// Computes the upper tail of the F law with `first` and `second` degrees of freedom; `x` may be infinite.
pub(super) fn f_tail(x: f64, first: f64, second: f64) -> f64 {
    if x <= 0.0 {
        return 1.0;
    }
    beta_reg(0.5 * second, 0.5 * first, second / (second + first * x))
}

/// Computes ln(n!) less Stirling's main term, for `n` >= 1.
fn stirling_error(n: f64) -> f64 {
    if n < 16.0 {
        let factorial: f64 = (1..=n as u64).map(|i| i as f64).product();
        return factorial.ln() - (n + 0.5) * n.ln() + n - 0.5 * (2.0 * PI).ln();
    }
    let square = n * n;
    let tail = 1.0 / 1260.0 - (1.0 / 1680.0 - 1.0 / 1188.0 / square) / square;
    (1.0 / 12.0 - (1.0 / 360.0 - tail / square) / square) / n
}

/// Computes x ln(x / m) + m - x without cancellation, for positive `x` and `m`.
fn deviance(x: f64, m: f64) -> f64 {
    let gap = x - m;
    if gap.abs() >= 0.1 * (x + m) {
        return x * (x / m).ln() - gap;
    }
    let v = gap / (x + m);
    let mut sum = gap * v;
    let mut power = 2.0 * x * v;
    let mut odd = 1.0;
    loop {
        power *= v * v;
        odd += 2.0;
        let next = sum + power / odd;
        if next == sum {
            return sum;
        }
        sum = next;
    }
}

/// Computes the probability of `k` successes in `n` trials of chance `p` by the saddle-point form.
///
/// Source: C. Loader, Fast and accurate computation of binomial probabilities, 2000 (from memory).
pub(super) fn binomial_pmf(k: u64, n: u64, p: f64) -> f64 {
    if k > n {
        return 0.0;
    }
    let (x, total) = (k as f64, n as f64);
    if k == 0 {
        return if n == 0 { 1.0 } else { (total * (-p).ln_1p()).exp() };
    }
    if k == n {
        return p.powf(total);
    }
    if p <= 0.0 || p >= 1.0 {
        return 0.0;
    }
    let rest = total - x;
    let exponent = stirling_error(total)
        - stirling_error(x)
        - stirling_error(rest)
        - deviance(x, total * p)
        - deviance(rest, total * (1.0 - p));
    (total / (2.0 * PI * x * rest)).sqrt() * exponent.exp()
}

/// Computes P(X <= k) for X binomial with `n` trials of chance `p`, by summing terms downwards from `k` or upwards
/// from `k + 1`, whichever tail is the smaller.
pub(super) fn binomial_cdf(k: u64, n: u64, p: f64) -> f64 {
    if k >= n || p <= 0.0 {
        return 1.0;
    }
    if p >= 1.0 {
        return 0.0;
    }
    if (k as f64) < n as f64 * p {
        let odds = (1.0 - p) / p;
        return lower_sum(k, n, binomial_pmf(k, n, p), odds).min(1.0);
    }
    let odds = p / (1.0 - p);
    let upper = lower_sum(n - k - 1, n, binomial_pmf(k + 1, n, p), odds);
    (1.0 - upper).max(0.0)
}

/// Sums the terms of a binomial law downwards from the term at `k`, whose value is `term`.
fn lower_sum(k: u64, n: u64, mut term: f64, odds: f64) -> f64 {
    let mut sum = term;
    for j in (1..=k).rev() {
        term *= odds * j as f64 / (n - j + 1) as f64;
        let next = sum + term;
        if next == sum {
            break;
        }
        sum = next;
    }
    sum
}

/// Computes P(X = k) and P(X <= k) for X binomial with `n` fair trials.
///
/// Up to 120 trials the counts are summed in integers and only the quotient is rounded.
pub(super) fn fair(k: u64, n: u64) -> (f64, f64) {
    if k > n {
        return (0.0, 1.0);
    }
    if n > INTEGER_TRIALS {
        return (binomial_pmf(k, n, 0.5), binomial_cdf(k, n, 0.5));
    }
    let mut choose: u128 = 1;
    let mut sum: u128 = 1;
    for j in 1..=k {
        choose = exact_step(choose, n - j + 1, j);
        sum += choose;
    }
    let scale = 0.5_f64.powi(n as i32);
    (choose as f64 * scale, sum as f64 * scale)
}

/// Multiplies a binomial coefficient by `up / down`, an exact step, without overflow up to 120 trials.
fn exact_step(choose: u128, up: u64, down: u64) -> u128 {
    let (up, down) = (u128::from(up), u128::from(down));
    let (whole, rest) = (choose / down, choose % down);
    whole * up + rest * up / down
}

/// Panics unless `confidence` lies strictly between 0 and 1.
#[track_caller]
pub(super) fn check_confidence(confidence: f64) {
    assert!(confidence > 0.0 && confidence < 1.0, "the confidence {confidence} is not in (0, 1)");
}

/// Panics when `values` holds a NaN, naming its place.
#[track_caller]
pub(super) fn check_numbers(values: &[f64], what: &str) {
    if let Some(place) = values.iter().position(|v| v.is_nan()) {
        panic!("the {what} at index {place} is NaN");
    }
}

/// Finds average ranks (from 1) of `values` in ascending order, ties sharing the mean of their places, as doubled
/// integers, so that they are exact.
pub(super) fn doubled_ranks(values: &[f64]) -> Vec<u64> {
    let mut order: Vec<usize> = (0..values.len()).collect();
    order.sort_by(|&a, &b| values[a].total_cmp(&values[b]));
    let mut ranks = vec![0; values.len()];
    let mut start = 0;
    while start < order.len() {
        let mut end = start + 1;
        while end < order.len() && values[order[end]] == values[order[start]] {
            end += 1;
        }
        for &place in &order[start..end] {
            ranks[place] = (start + 1 + end) as u64;
        }
        start = end;
    }
    ranks
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Integrates the normal density beyond `z` >= 0 by Simpson's rule, after taking out its value at `z`.
    fn tail_by_quadrature(z: f64) -> f64 {
        let points = 20_000;
        let width = 45.0 / (z + 4.5) / f64::from(points);
        let sum: f64 = (0..=points)
            .map(|i| {
                let t = width * f64::from(i);
                let weight = if i == 0 || i == points { 1.0 } else { f64::from(2 + 2 * (i % 2)) };
                weight * (-z * t - 0.5 * t * t).exp()
            })
            .sum();
        sum * width / 3.0 * (-0.5 * z * z).exp() / (2.0 * PI).sqrt()
    }

    #[test]
    fn normal_tail_agrees_with_its_integral() {
        for z in [0.0, 0.3, 1.0, 1.96, 3.7, 6.0, 12.0, 30.0] {
            let (ours, theirs) = (normal_cdf(-z), tail_by_quadrature(z));
            assert!((ours - theirs).abs() <= 1e-13 * theirs, "{z}: {ours} {theirs}");
        }
    }

    #[test]
    fn normal_quantile_inverts_the_integral() {
        for share in [1e-300, 1e-100, 1e-20, 1e-7, 0.005, 0.025, 0.05, 0.2, 0.49, 0.5] {
            let z = normal_quantile(share);
            let slope = (-0.5 * z * z).exp() / (2.0 * PI).sqrt();
            let error = (tail_by_quadrature(-z) - share) / slope;
            assert!(error.abs() <= 1e-12, "{share}: {z} is off by {error}");
        }
        for share in [0.025, 0.2, 0.4] {
            assert!((normal_quantile(share) + normal_quantile(1.0 - share)).abs() <= 1e-12);
        }
        assert_eq!(normal_quantile(0.0), f64::NEG_INFINITY);
        assert_eq!(normal_quantile(1.0), f64::INFINITY);
        // Two-sided 95 %: 1.959963984540054 (standard tables, from memory).
        assert!((two_sided_quantile(0.95) - 1.959_963_984_540_054).abs() <= 1e-14);
    }

    #[test]
    fn beta_quantile_inverts_the_binomial_tail() {
        // P(Beta(k, n-k+1) <= x) = P(Bin(n, x) >= k), summed here term by term.
        for (k, n) in [(1, 1), (1, 20), (5, 20), (20, 20), (90, 100), (300, 10_000)] {
            for share in [0.005, 0.05, 0.5, 0.975] {
                let x = beta_quantile(share, k as f64, (n - k + 1) as f64);
                let tail: f64 = (k..=n).map(|j| binomial_pmf(j, n, x)).sum();
                let slope = k as f64 * binomial_pmf(k, n, x) / x;
                assert!(((tail - share) / slope).abs() <= 1e-12, "{k} of {n} at {share}: {x}");
            }
        }
    }

    #[test]
    fn binomial_probabilities_agree_with_integers() {
        for n in [1, 2, 7, 30, 31, 64, 119, 120] {
            for k in 0..=n {
                let (point, tail) = fair(k, n);
                assert!((binomial_pmf(k, n, 0.5) / point - 1.0).abs() <= 1e-13, "{k} of {n}");
                assert!((binomial_cdf(k, n, 0.5) - tail).abs() <= 1e-13 * tail, "{k} of {n}");
            }
            assert_eq!(fair(n, n).1, 1.0);
        }
    }

    #[test]
    fn binomial_probabilities_sum_to_one() {
        for (n, p) in [(5, 0.3), (200, 0.01), (5_000, 0.999), (100_000, 0.2), (1_000_000, 0.5)] {
            let sum: f64 = (0..=n).map(|k| binomial_pmf(k, n, p)).sum();
            assert!((sum - 1.0).abs() <= 1e-12, "{n} trials of chance {p}: {sum}");
        }
        assert_eq!(binomial_pmf(0, 0, 0.3), 1.0);
        assert_eq!(binomial_pmf(0, 4, 1.0), 0.0);
        assert_eq!(binomial_pmf(4, 4, 1.0), 1.0);
        assert_eq!(binomial_pmf(0, 4, 0.0), 1.0);
        assert_eq!(binomial_pmf(2, 4, 0.0), 0.0);
        assert_eq!(binomial_cdf(2, 4, 1.0), 0.0);
    }

    #[test]
    fn tails_agree_with_closed_forms() {
        // Two degrees of freedom: exp(-x/2). F with 2 and m: (1 + 2x/m)^(-m/2).
        for x in [0.1, 1.0, 5.991, 40.0] {
            assert!((chi_square_tail(x, 2.0) / (-0.5 * x).exp() - 1.0).abs() <= 1e-12);
            for m in [1.0, 2.0, 7.0, 60.0] {
                let closed = (1.0 + 2.0 * x / m).powf(-0.5 * m);
                assert!((f_tail(x, 2.0, m) / closed - 1.0).abs() <= 1e-11, "{x} {m}");
            }
        }
        assert_eq!(f_tail(f64::INFINITY, 2.0, 5.0), 0.0);
        assert_eq!(f_tail(0.0, 2.0, 5.0), 1.0);
        assert_eq!(chi_square_tail(0.0, 3.0), 1.0);
    }

    #[test]
    fn ranks_share_their_mean_in_ties() {
        assert_eq!(doubled_ranks(&[3.0, 1.0, 3.0, f64::INFINITY, 3.0]), vec![6, 2, 6, 10, 6]);
        assert_eq!(doubled_ranks(&[0.0, -0.0]), vec![3, 3]);
        assert_eq!(doubled_ranks(&[]), Vec::<u64>::new());
    }
}
