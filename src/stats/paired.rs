//! Two methods on the same instances, each outcome solved or not: McNemar's test, the interval of the difference and
//! the number of instances a comparison needs.
//!
//! Only discordant pairs (one method solves, the other does not) carry evidence in the tests. Not for costs:
//! see `signed_rank`.

use super::Interval;
use super::special::{
    binomial_cdf, binomial_pmf, check_confidence, fair, normal_quantile, two_sided_quantile,
};

/// Largest number of pairs [`sample_size`] considers.
const MOST_PAIRS: u64 = 1_000_000;

/// Counts of paired binary outcomes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Discordance {
    /// All pairs, discordant or not.
    pub pairs: u64,
    /// Pairs only the challenger solves.
    pub gained: u64,
    /// Pairs only the incumbent solves.
    pub lost: u64,
}

impl Discordance {
    /// Computes the difference of the solve rates, (gained - lost) / pairs; 0 without pairs.
    pub fn difference(self) -> f64 {
        if self.pairs == 0 {
            return 0.0;
        }
        (self.gained as f64 - self.lost as f64) / self.pairs as f64
    }

    /// Panics unless the discordant pairs fit into the pairs.
    #[track_caller]
    fn check(self) {
        assert!(
            self.gained.checked_add(self.lost).is_some_and(|n| n <= self.pairs),
            "{} gained and {} lost of {} pairs are impossible",
            self.gained,
            self.lost,
            self.pairs
        );
    }
}

/// P-values of McNemar's exact test.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct McNemar {
    /// Exact two-sided p, min(1, 2 P(X <= min(gained, lost))).
    pub two_sided: f64,
    /// Mid-p: the doubled tail less the chance of the observed split; 1 when gained = lost.
    pub mid_p: f64,
    /// One-sided exact p, P(X >= gained): small when the challenger gains.
    pub gain: f64,
    /// One-sided exact p, P(X >= lost): small when the challenger loses.
    pub loss: f64,
}

/// Tests whether gains and losses are equally likely, given their number N: X is binomial with N fair trials.
///
/// Exact for every N (integers up to N = 120, relative error at most 1e-10 beyond, to N = 10^6). Without
/// discordant pairs all p-values are 1. The mid-p is min(1, 2 P(X <= m) - P(X = m)) with m = min(gained, lost).
///
/// Source: Q. McNemar, Psychometrika 12:153-157, 1947 (from memory); mid-p: M. Fagerland, S. Lydersen, P.
/// Laake, BMC Medical Research Methodology 13:91, 2013 (from memory).
///
/// # Panics
/// When gained + lost exceeds pairs.
#[track_caller]
pub fn mcnemar(counts: Discordance) -> McNemar {
    counts.check();
    let Discordance { gained, lost, .. } = counts;
    let discordant = gained + lost;
    if discordant == 0 {
        return McNemar { two_sided: 1.0, mid_p: 1.0, gain: 1.0, loss: 1.0 };
    }
    let (point, tail) = fair(gained.min(lost), discordant);
    let mid_p = if gained == lost { 1.0 } else { (2.0 * tail - point).min(1.0) };
    McNemar {
        two_sided: (2.0 * tail).min(1.0),
        mid_p,
        gain: fair(lost, discordant).1,
        loss: fair(gained, discordant).1,
    }
}

/// Computes the score statistic of the hypothesis that the difference of rates is `d`; falls as `d` grows.
///
/// (b - c - n d) / sqrt(n (2q + d(1-d))) with b gained, c lost and q the most likely rate of losses under the
/// hypothesis, the larger root of 2n q^2 - (b + c + (b - c - 2n) d) q - c d (1-d) = 0. Negative `d` swaps b and
/// c.
fn score(counts: Discordance, d: f64) -> f64 {
    if d < 0.0 {
        let swapped = Discordance { gained: counts.lost, lost: counts.gained, ..counts };
        return -score(swapped, -d);
    }
    let (n, b, c) = (counts.pairs as f64, counts.gained as f64, counts.lost as f64);
    let half = b + c + (b - c - 2.0 * n) * d;
    let root = (half * half + 8.0 * n * c * d * (1.0 - d)).sqrt();
    let q = if half >= 0.0 {
        (half + root) / (4.0 * n)
    } else {
        2.0 * c * d * (1.0 - d) / (root - half)
    };
    let gap = b - c - n * d;
    let variance = n * (2.0 * q + d * (1.0 - d));
    if gap == 0.0 { 0.0 } else { gap / variance.max(0.0).sqrt() }
}

/// Computes the score interval of the difference of two paired solve rates, gained minus lost per pair.
///
/// The interval holds every difference whose score statistic lies in [-z, z], z the two-sided normal quantile;
/// its ends are found by bisection down to neighbouring numbers. Without discordant pairs the ends are -+ z^2 /
/// (n + z^2); without pairs they are -1 and 1. Coverage is close to nominal, not guaranteed (see the
/// enumeration in the tests).
///
/// Source: T. Tango, Statistics in Medicine 17:891-908, 1998 (from memory; the tests hold the constrained estimate
/// against a direct search).
///
/// # Panics
/// When gained + lost exceeds pairs or `confidence` is not in (0, 1).
#[track_caller]
pub fn difference_interval(counts: Discordance, confidence: f64) -> Interval {
    counts.check();
    check_confidence(confidence);
    if counts.pairs == 0 {
        return Interval { low: -1.0, high: 1.0 };
    }
    let z = two_sided_quantile(confidence);
    let swapped = Discordance { gained: counts.lost, lost: counts.gained, ..counts };
    Interval { low: -upper_end(swapped, z), high: upper_end(counts, z) }
}

/// Finds the largest difference whose score statistic is at least -`z`.
fn upper_end(counts: Discordance, z: f64) -> f64 {
    let (mut low, mut high) = (counts.difference(), 1.0);
    loop {
        let middle = 0.5 * (low + high);
        if middle <= low || middle >= high {
            return high;
        }
        if score(counts, middle) >= -z {
            low = middle;
        } else {
            high = middle;
        }
    }
}

/// Computes Connor's number of pairs for McNemar's test, by the normal approximation and rounded up.
///
/// n = (z_(alpha/2) sqrt(psi) + z_beta sqrt(psi - d^2))^2 / d^2 with psi = `discordant` the rate of discordant
/// pairs, d = `difference` the difference of the rates, 1 - beta = `power` and `alpha` two-sided.
///
/// Source: R. Connor, Biometrics 43:207-211, 1987.
///
/// # Panics
/// Unless 0 < |difference| <= discordant <= 1 and `power` and `alpha` are in (0, 1).
#[track_caller]
pub fn connor_sample_size(discordant: f64, difference: f64, power: f64, alpha: f64) -> u64 {
    assert!(
        difference != 0.0 && difference.abs() <= discordant && discordant <= 1.0,
        "the difference {difference} is not between 0 and the discordant rate {discordant} <= 1"
    );
    check_level(power, "power");
    check_level(alpha, "level");
    let test = -normal_quantile(0.5 * alpha) * discordant.sqrt();
    let miss = normal_quantile(power) * (discordant - difference * difference).sqrt();
    ((test + miss).powi(2) / (difference * difference)).ceil() as u64
}

/// Panics unless `value` lies strictly between 0 and 1.
#[track_caller]
fn check_level(value: f64, what: &str) {
    assert!(value > 0.0 && value < 1.0, "the {what} {value} is not in (0, 1)");
}

/// Panics unless the two rates are possible.
#[track_caller]
fn check_rates(gained: f64, lost: f64) {
    assert!(
        gained >= 0.0 && lost >= 0.0 && gained + lost <= 1.0 + 1e-12,
        "the rates {gained} and {lost} are not non-negative with a sum of at most 1"
    );
}

/// The rejection bounds of McNemar's exact two-sided test: for each number of discordant pairs the most pairs of the
/// rarer kind at which it still rejects.
struct Bounds {
    alpha: f64,
    /// Number of rejecting counts (the bound plus one, 0 when the test never rejects) for 0, 1, 2, ...
    /// discordant pairs.
    counts: Vec<u64>,
    /// P(X = counts) and P(X <= counts) at the last entry, the first count that does not reject.
    point: f64,
    tail: f64,
}

impl Bounds {
    /// Starts with no discordant pair, which never rejects.
    fn new(alpha: f64) -> Self {
        Bounds { alpha, counts: vec![0], point: 1.0, tail: 1.0 }
    }

    /// Extends the table to `discordant` pairs. From one number to the next the bound stays or grows by one.
    fn extend(&mut self, discordant: u64) {
        while (self.counts.len() as u64) <= discordant {
            let n = self.counts.len() as u64;
            let first = self.counts[n as usize - 1];
            let (point, tail) = self.chances(first, n);
            if (2.0 * tail).min(1.0) <= self.alpha {
                self.counts.push(first + 1);
                self.point = point * (n - first) as f64 / (first + 1) as f64;
                self.tail = tail + self.point;
            } else {
                self.counts.push(first);
                (self.point, self.tail) = (point, tail);
            }
        }
    }

    /// Computes P(X = k) and P(X <= k) for `n` fair trials: exactly when `n` is small or a multiple of 1024,
    /// else from those of `n` - 1.
    fn chances(&self, k: u64, n: u64) -> (f64, f64) {
        if n <= 120 || n.is_multiple_of(1024) {
            return fair(k, n);
        }
        let point = self.point * n as f64 / (2.0 * (n - k) as f64);
        (point, self.tail - 0.5 * self.point)
    }

    /// Computes the chance that the test rejects in favour of the commoner kind, when each of `pairs` pairs is of the
    /// commoner kind with chance `common` and of the rarer one with chance `rare`.
    fn power(&mut self, pairs: u64, common: f64, rare: f64) -> f64 {
        let rate = (common + rare).min(1.0);
        if rate <= 0.0 || pairs == 0 {
            return 0.0;
        }
        let (first, last) = spread(pairs, rate);
        self.extend(last);
        let q = (rare / rate).clamp(0.0, 1.0);
        let mut power = 0.0;
        let mut state: Option<(u64, f64, f64)> = None;
        for n in first..=last {
            let count = self.counts[n as usize];
            if count == 0 {
                continue;
            }
            let next = advance(state, count - 1, n, q);
            power += binomial_pmf(n, pairs, rate) * next.2;
            state = Some(next);
        }
        power.clamp(0.0, 1.0)
    }
}

/// Carries (k, P(X = k), P(X <= k)) of a binomial law of chance `q` from `n` - 1 trials to `n` trials and the
/// count `k`.
fn advance(state: Option<(u64, f64, f64)>, k: u64, n: u64, q: f64) -> (u64, f64, f64) {
    let Some((old, point, tail)) = state else {
        return (k, binomial_pmf(k, n, q), binomial_cdf(k, n, q));
    };
    let kept = point * (1.0 - q) * n as f64 / (n - old) as f64;
    let tail = tail - q * point;
    if k == old {
        return (k, kept, tail);
    }
    let raised = binomial_pmf(k, n, q);
    (k, raised, (tail + raised).min(1.0))
}

/// Finds the numbers of discordant pairs whose binomial chance matters: those outside have chance below 1e-20 each.
fn spread(pairs: u64, rate: f64) -> (u64, u64) {
    let mean = pairs as f64 * rate;
    let half = 10.0 * (mean * (1.0 - rate)).sqrt() + 40.0;
    ((mean - half).max(0.0).floor() as u64, ((mean + half).ceil() as u64).min(pairs))
}

/// Computes the chance that McNemar's exact two-sided test at level `alpha` rejects in the right direction.
///
/// Of `pairs` pairs each is gained with chance `gained` and lost with chance `lost`; the number of discordant
/// pairs is binomial and the sum over it is exact up to terms below 1e-20 each. The right direction is that of
/// the larger rate; for equal rates it is the gains, so that the value is half the size of the test.
///
/// # Panics
/// When a rate is negative or NaN, the rates sum to more than 1, or `alpha` is not in (0, 1).
#[track_caller]
pub fn exact_power(pairs: u64, gained: f64, lost: f64, alpha: f64) -> f64 {
    check_rates(gained, lost);
    check_level(alpha, "level");
    Bounds::new(alpha).power(pairs, gained.max(lost), gained.min(lost))
}

/// Finds the least number of pairs from which on [`exact_power`] stays at least `power`.
///
/// Exact power rises in saw teeth; the answer n is such that the power reaches the target at n and at every
/// later size looked at, which are 16 / |gained - lost| sizes (at least five teeth), or 16 sizes when the
/// number of discordant pairs has a standard deviation of at least 4, which smooths the teeth away. `None` when
/// the rates are equal or more than 10^6 pairs are needed.
///
/// # Panics
/// When a rate is negative or NaN, the rates sum to more than 1, or `power` or `alpha` is not in (0, 1).
#[track_caller]
pub fn sample_size(gained: f64, lost: f64, power: f64, alpha: f64) -> Option<u64> {
    check_rates(gained, lost);
    check_level(power, "power");
    check_level(alpha, "level");
    let (common, rare) = (gained.max(lost), gained.min(lost));
    if common == rare {
        return None;
    }
    let mut bounds = Bounds::new(alpha);
    let mut reaches = |pairs: u64| bounds.power(pairs, common, rare) >= power;
    let (mut low, mut high) = (0, 16);
    while !reaches(high) {
        low = high;
        high *= 2;
        if low >= MOST_PAIRS {
            return None;
        }
    }
    while high - low > 1 {
        let middle = low + (high - low) / 2;
        if reaches(middle) {
            high = middle;
        } else {
            low = middle;
        }
    }
    let rate = common + rare;
    let smooth = high as f64 * rate * (1.0 - rate) >= 16.0;
    let window = if smooth { 16 } else { (16.0 / (common - rare)).ceil() as u64 };
    let mut last_miss = low;
    let mut size = high;
    while size <= last_miss + window {
        if !reaches(size) {
            last_miss = size;
        }
        size += 1;
    }
    (last_miss < MOST_PAIRS).then_some(last_miss + 1)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn bounds_are_those_of_the_test() {
        // Every number of pairs up to 3000 against probabilities found afresh, for levels with and without
        // exact ties.
        for alpha in [0.05, 0.0625, 0.01, 0.2] {
            let mut bounds = Bounds::new(alpha);
            bounds.extend(3000);
            for n in (0..=400).chain([1023, 1024, 1025, 2999, 3000]) {
                let count = bounds.counts[n as usize];
                let rejects = |k: u64| (2.0 * fair(k, n).1).min(1.0) <= alpha;
                assert!(count == 0 || rejects(count - 1), "{n} pairs at {alpha}: {count}");
                assert!(!rejects(count), "{n} pairs at {alpha}: {count}");
            }
        }
    }

    #[test]
    fn running_probabilities_stay_exact() {
        let mut bounds = Bounds::new(0.05);
        bounds.extend(200_000);
        let count = bounds.counts[200_000];
        let (point, tail) = fair(count, 200_000);
        assert!((bounds.point / point - 1.0).abs() <= 1e-9, "{} {point}", bounds.point);
        assert!((bounds.tail / tail - 1.0).abs() <= 1e-9, "{} {tail}", bounds.tail);
    }

    /// Finds the largest log likelihood over the loss rate q, with gain rate q + d, by ternary search.
    fn likeliest(counts: Discordance, d: f64) -> f64 {
        let (b, c) = (counts.gained as f64, counts.lost as f64);
        let a = counts.pairs as f64 - b - c;
        let term = |times: f64, rate: f64| if times == 0.0 { 0.0 } else { times * rate.ln() };
        let value = |q: f64| term(b, q + d) + term(c, q) + term(a, 1.0 - 2.0 * q - d);
        let (mut low, mut high) = (0.0_f64.max(-d), 0.5 * (1.0 - d));
        for _ in 0..200 {
            let (left, right) = ((2.0 * low + high) / 3.0, (low + 2.0 * high) / 3.0);
            if value(left) < value(right) {
                low = left;
            } else {
                high = right;
            }
        }
        0.5 * (low + high)
    }

    #[test]
    fn score_uses_the_constrained_maximum_of_the_likelihood() {
        for (pairs, gained, lost) in
            [(20, 5, 2), (20, 0, 3), (50, 9, 0), (12, 6, 6), (9, 9, 0), (7, 0, 0)]
        {
            let counts = Discordance { pairs, gained, lost };
            for d in [-0.9, -0.4, -0.05, 0.02, 0.3, 0.7] {
                let q = likeliest(counts, d);
                let n = pairs as f64;
                let gap = gained as f64 - lost as f64 - n * d;
                let direct = gap / (n * (2.0 * q + d - d * d)).sqrt();
                let ours = score(counts, d);
                // The search finds a flat maximum to about the square root of the machine precision.
                assert!(
                    (ours - direct).abs() <= 1e-5 * (1.0 + direct.abs()),
                    "{counts:?} {d}: {ours} {direct}"
                );
            }
        }
    }

    #[test]
    fn ends_have_the_score_of_the_quantile() {
        for (pairs, gained, lost) in
            [(20, 5, 2), (20, 0, 3), (50, 9, 0), (300, 40, 41), (7, 0, 0), (10, 9, 1)]
        {
            let counts = Discordance { pairs, gained, lost };
            for confidence in [0.8, 0.95, 0.999] {
                let z = two_sided_quantile(confidence);
                let interval = difference_interval(counts, confidence);
                for (end, expected) in [(interval.low, z), (interval.high, -z)] {
                    let value = score(counts, end);
                    assert!(
                        (value - expected).abs() <= 1e-9,
                        "{counts:?} {end}: {value} for {expected}"
                    );
                }
            }
        }
    }

    #[test]
    fn score_falls() {
        for (pairs, gained, lost) in [(20, 5, 2), (20, 0, 3), (50, 9, 0), (12, 6, 6), (9, 9, 0)] {
            let counts = Discordance { pairs, gained, lost };
            let values: Vec<f64> =
                (-99..100).map(|i| score(counts, f64::from(i) / 100.0)).collect();
            assert!(values.windows(2).all(|pair| pair[1] < pair[0]), "{counts:?}");
        }
    }
}
