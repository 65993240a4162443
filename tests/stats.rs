//! Holds the statistics against published values, identities, brute force and, where Python has SciPy and
//! statsmodels, against those.

#![allow(clippy::print_stderr, reason = "a test says what it skipped")]

use proptest::prelude::*;
use rand_chacha::ChaCha20Rng;
use rand_chacha::rand_core::{Rng, SeedableRng};
use rankassay::stats::Interval;
use rankassay::stats::bootstrap::{Resampling, bca};
use rankassay::stats::friedman::{Level, critical_difference, friedman};
use rankassay::stats::multiple::holm;
use rankassay::stats::paired::{
    Discordance, connor_sample_size, difference_interval, exact_power, mcnemar, sample_size,
};
use rankassay::stats::profiles::{data_profile, performance_profile};
use rankassay::stats::proportion::{clopper_pearson, wilson};
use rankassay::stats::recovery::{feasibility_dimension, statistical_dimension};
use rankassay::stats::sequential::{SprtState, e_value, log_e_value, look_level, sprt};
use rankassay::stats::signed_rank::{
    Exactness, Zeros, critical_value, hodges_lehmann, signed_rank,
};
use rankassay::stats::summary::{median, penalised_mean, quantile, shifted_geometric_mean};
use serde_json::{Value, json};
use std::cell::RefCell;
use std::f64::consts::PI;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::Path;
use std::process::Command;

/// Compares within an absolute tolerance.
#[track_caller]
fn near(found: f64, expected: f64, tolerance: f64) {
    assert!((found - expected).abs() <= tolerance, "{found} instead of {expected}");
}

#[track_caller]
fn interval_near(found: Interval, low: f64, high: f64, tolerance: f64) {
    near(found.low, low, tolerance);
    near(found.high, high, tolerance);
}

/// Runs `action`, which must panic, and returns its message.
#[track_caller]
fn message<T>(action: impl FnOnce() -> T) -> String {
    let Err(cause) = catch_unwind(AssertUnwindSafe(action)) else { panic!("no panic") };
    cause.downcast_ref::<String>().cloned().unwrap_or_else(|| {
        (*cause.downcast_ref::<&str>().expect("a panic with a message")).to_owned()
    })
}

/// A seeded source of random cases.
struct Cases(ChaCha20Rng);

impl Cases {
    fn new(seed: u64) -> Self {
        Cases(ChaCha20Rng::seed_from_u64(seed))
    }

    fn below(&mut self, bound: u64) -> u64 {
        self.0.next_u64() % bound
    }

    /// Draws a number in [-1, 1) with 53 bits.
    fn real(&mut self) -> f64 {
        (self.0.next_u64() >> 11) as f64 / 4_503_599_627_370_496.0 - 1.0
    }

    fn reals(&mut self, count: u64) -> Vec<f64> {
        (0..count).map(|_| self.real()).collect()
    }
}

// ---- proportions ----

#[test]
fn clopper_pearson_has_the_published_values() {
    // NIST/SEMATECH e-Handbook of Statistical Methods: N = 20, 4 defects, 90 %.
    interval_near(clopper_pearson(4, 20, 0.90), 0.071354, 0.401029, 1e-5);
    // Values computed with general statistical software for the reference notes of this project, six digits.
    for (successes, trials, low, high) in [
        (0, 10, 0.0, 0.308497),
        (5, 10, 0.187086, 0.812914),
        (27, 30, 0.734712, 0.978883),
        (95, 100, 0.887165, 0.983568),
    ] {
        interval_near(clopper_pearson(successes, trials, 0.95), low, high, 5.1e-7);
    }
}

#[test]
fn wilson_has_the_published_values() {
    // Values computed with general statistical software for the reference notes of this project, six digits; 81
    // of 263 is an example of R. Newcombe, Statistics in Medicine 17:857-872, 1998 (from memory).
    for (successes, trials, low, high) in [
        (0, 10, 0.0, 0.277533),
        (1, 10, 0.017876, 0.404150),
        (27, 30, 0.743789, 0.965400),
        (81, 263, 0.255289, 0.366210),
    ] {
        interval_near(wilson(successes, trials, 0.95), low, high, 5.1e-7);
    }
}

#[test]
fn proportions_have_exact_edges() {
    for interval in [wilson, clopper_pearson] {
        assert_eq!(interval(0, 0, 0.95), Interval { low: 0.0, high: 1.0 });
        assert_eq!(interval(0, 7, 0.95).low, 0.0);
        assert_eq!(interval(7, 7, 0.95).high, 1.0);
        assert!(message(|| interval(8, 7, 0.95)).contains("8 successes in 7 trials"));
        for confidence in [0.0, 1.0, f64::NAN] {
            assert!(message(|| interval(1, 2, confidence)).contains(&confidence.to_string()));
        }
    }
    // No success: Clopper-Pearson's upper end is 1 - (alpha/2)^(1/n).
    near(clopper_pearson(0, 12, 0.95).high, 1.0 - 0.025_f64.powf(1.0 / 12.0), 1e-14);
}

proptest! {
    #[test]
    fn proportions_are_symmetric_and_nested(trials in 1_u64..400, share in 0.0..=1.0_f64, confidence in 0.5..0.999_f64) {
        let successes = (share * trials as f64).round() as u64;
        let rate = successes as f64 / trials as f64;
        for interval in [wilson, clopper_pearson] {
            let found = interval(successes, trials, confidence);
            let mirrored = interval(trials - successes, trials, confidence);
            near(found.low, 1.0 - mirrored.high, 1e-12);
            near(found.high, 1.0 - mirrored.low, 1e-12);
            prop_assert!(0.0 <= found.low && found.low <= rate && rate <= found.high && found.high <= 1.0);
            let wider = interval(successes, trials, 0.5 + 0.5 * confidence);
            prop_assert!(wider.low <= found.low && found.high <= wider.high);
            if successes < trials {
                let next = interval(successes + 1, trials, confidence);
                prop_assert!(next.low > found.low && next.high > found.high || next.high == 1.0);
            }
        }
    }

    #[test]
    fn clopper_pearson_covers(trials in 1_u64..60, chance in 0.01..0.99_f64) {
        // Its coverage is at least nominal for every chance; here it is summed exactly.
        let mut term = (1.0 - chance).powi(trials as i32);
        let mut covered = 0.0;
        for k in 0..=trials {
            let interval = clopper_pearson(k, trials, 0.9);
            if interval.low <= chance && chance <= interval.high {
                covered += term;
            }
            term *= (trials - k) as f64 / (k + 1) as f64 * chance / (1.0 - chance);
        }
        prop_assert!(covered >= 0.9 - 1e-12, "{}", covered);
    }
}

// ---- paired outcomes ----

fn pairs(pairs: u64, gained: u64, lost: u64) -> Discordance {
    Discordance { pairs, gained, lost }
}

#[test]
fn mcnemar_agrees_with_hand_calculation() {
    // 8 and 1 of 9: tail (1 + 9)/512.
    let found = mcnemar(pairs(20, 8, 1));
    assert_eq!(found.two_sided, 20.0 / 512.0);
    assert_eq!(found.mid_p, 11.0 / 512.0);
    assert_eq!(found.gain, 10.0 / 512.0);
    assert_eq!(found.loss, 511.0 / 512.0);
    let none = mcnemar(pairs(9, 0, 0));
    assert_eq!([none.two_sided, none.mid_p, none.gain, none.loss], [1.0; 4]);
    let even = mcnemar(pairs(4, 2, 2));
    assert_eq!([even.two_sided, even.mid_p], [1.0; 2]);
    assert_eq!([even.gain, even.loss], [11.0 / 16.0; 2]);
    assert!(message(|| mcnemar(pairs(3, 2, 2))).contains("2 gained and 2 lost of 3 pairs"));
    assert!(message(|| mcnemar(pairs(3, u64::MAX, 1))).contains("of 3 pairs"));
    assert_eq!(pairs(0, 0, 0).difference(), 0.0);
    assert_eq!(pairs(8, 1, 3).difference(), -0.25);
}

proptest! {
    #[test]
    fn mcnemar_is_symmetric_and_monotone(gained in 0_u64..300, lost in 0_u64..300) {
        let found = mcnemar(pairs(600, gained, lost));
        let swapped = mcnemar(pairs(600, lost, gained));
        prop_assert_eq!(found.two_sided, swapped.two_sided);
        prop_assert_eq!(found.gain, swapped.loss);
        prop_assert!(found.mid_p <= found.two_sided);
        if gained + lost > 0 {
            // The two tails overlap in the observed split: gain + loss = 1 + P(X = gained).
            let ln_choose: f64 = (1..=gained).map(|j| ((lost + j) as f64 / j as f64).ln()).sum();
            let point = (ln_choose - (gained + lost) as f64 * std::f64::consts::LN_2).exp();
            near(found.gain + found.loss, 1.0 + point, 1e-11);
            let more = mcnemar(pairs(601, gained + 1, lost));
            // Near 1 both are rounded to the same number.
            prop_assert!(more.gain < found.gain || found.gain > 1.0 - 1e-15);
        }
    }

    #[test]
    fn difference_interval_is_antisymmetric_and_nested(
        all in 1_u64..200, a in 0.0..1.0_f64, b in 0.0..1.0_f64, confidence in 0.5..0.99_f64,
    ) {
        let gained = (a * all as f64) as u64;
        let lost = (b * (all - gained) as f64) as u64;
        let counts = pairs(all, gained, lost);
        let found = difference_interval(counts, confidence);
        let swapped = difference_interval(pairs(all, lost, gained), confidence);
        prop_assert_eq!(found.low, -swapped.high);
        prop_assert_eq!(found.high, -swapped.low);
        prop_assert!(-1.0 <= found.low && found.low <= counts.difference());
        prop_assert!(counts.difference() <= found.high && found.high <= 1.0);
        let wider = difference_interval(counts, 0.5 + 0.5 * confidence);
        prop_assert!(wider.low <= found.low && found.high <= wider.high);
    }
}

#[test]
fn difference_interval_has_its_closed_forms() {
    let square = 1.959_963_984_540_054_f64.powi(2);
    for n in [1, 5, 30, 400] {
        // Without discordant pairs the statistic at d is -sqrt(n d / (1 - d)).
        let half = square / (n as f64 + square);
        interval_near(difference_interval(pairs(n, 0, 0), 0.95), -half, half, 1e-12);
        // Only gains, all pairs: the statistic at d is sqrt(n (1 - d) / (1 + d)) for q = (1 - d)/2.
        let low = (n as f64 - square) / (n as f64 + square);
        interval_near(difference_interval(pairs(n, n, 0), 0.95), low, 1.0, 1e-12);
    }
    assert_eq!(difference_interval(pairs(0, 0, 0), 0.95), Interval { low: -1.0, high: 1.0 });
}

/// Sums the chance that the 95 % interval covers, over all outcomes of `n` pairs with discordant rate `psi` and
/// difference `d`.
fn coverage(n: u64, psi: f64, d: f64) -> f64 {
    let (gain, loss) = (0.5 * (psi + d), 0.5 * (psi - d));
    let factorials: Vec<f64> = (0..=n)
        .scan(0.0, |sum, i| {
            *sum += (i.max(1) as f64).ln();
            Some(*sum)
        })
        .collect();
    let ln = |k: u64| factorials[k as usize];
    let term = |k: u64, rate: f64| if k == 0 { 0.0 } else { k as f64 * rate.ln() };
    let mut covered = 0.0;
    for b in 0..=n {
        for c in 0..=n - b {
            let interval = difference_interval(pairs(n, b, c), 0.95);
            if interval.low <= d && d <= interval.high {
                let rest = n - b - c;
                let powers = term(b, gain) + term(c, loss) + term(rest, 1.0 - psi);
                covered += (ln(n) - ln(b) - ln(c) - ln(rest) + powers).exp();
            }
        }
    }
    covered
}

#[test]
fn difference_interval_covers_close_to_nominal() {
    // Exact coverage at nominal 95 %, as this code found it; the band asked for is 94 % to 97 %.
    for (n, psi, d, known) in [
        (20, 0.2, 0.0, 0.9556),
        (20, 0.3, 0.1, 0.9567),
        (30, 0.2, 0.1, 0.9612),
        (50, 0.1, 0.05, 0.9623),
        (50, 0.4, 0.2, 0.9533),
    ] {
        let covered = coverage(n, psi, d);
        assert!((0.94..=0.97).contains(&covered), "{n} {psi} {d}: {covered}");
        near(covered, known, 5.1e-5);
    }
}

/// Sums the power of McNemar's test over all outcomes, with the test itself as the referee.
fn power_by_enumeration(n: u64, gained: f64, lost: f64, alpha: f64) -> f64 {
    let mut power = 0.0;
    for b in 0..=n {
        for c in 0..=n - b {
            let rejects = mcnemar(pairs(n, b, c)).two_sided <= alpha;
            let right = if gained >= lost { b > c } else { c > b };
            if rejects && right {
                let ways: f64 = (1..=b).map(|j| (n - b + j) as f64 / j as f64).product::<f64>()
                    * (1..=c).map(|j| (n - b - c + j) as f64 / j as f64).product::<f64>();
                let rest = (1.0 - gained - lost).max(0.0).powi((n - b - c) as i32);
                power += ways * gained.powi(b as i32) * lost.powi(c as i32) * rest;
            }
        }
    }
    power
}

#[test]
fn exact_power_agrees_with_enumeration() {
    for n in [1, 5, 6, 20, 57] {
        for (gained, lost) in
            [(0.3, 0.1), (0.05, 0.4), (0.2, 0.2), (0.5, 0.0), (0.7, 0.3), (1.0, 0.0)]
        {
            for alpha in [0.05, 0.0625, 0.2] {
                let expected = power_by_enumeration(n, gained, lost, alpha);
                near(exact_power(n, gained, lost, alpha), expected, 1e-12);
            }
        }
    }
    assert_eq!(exact_power(0, 0.3, 0.1, 0.05), 0.0);
    assert_eq!(exact_power(50, 0.0, 0.0, 0.05), 0.0);
    // Only gains, and six of them reject at 5 % (2/64), five do not (2/32): P(Bin(10, 1/2) >= 6) = 386/1024.
    near(exact_power(10, 0.5, 0.0, 0.05), 386.0 / 1024.0, 1e-14);
    assert!(message(|| exact_power(5, 0.7, 0.4, 0.05)).contains("0.7 and 0.4"));
    assert!(message(|| exact_power(5, f64::NAN, 0.4, 0.05)).contains("NaN"));
    assert!(message(|| exact_power(5, 0.1, 0.4, 1.0)).contains("level 1"));
}

#[test]
fn exact_power_of_equal_rates_is_half_the_size() {
    for n in [10, 100, 3000] {
        let half = exact_power(n, 0.15, 0.15, 0.05);
        assert!(half <= 0.025 && half > 0.0, "{n}: {half}");
    }
}

#[test]
fn connor_has_its_published_example() {
    // R. Connor, Biometrics 43:207-211, 1987.
    assert_eq!(connor_sample_size(0.2, 0.1, 0.8, 0.05), 155);
    assert_eq!(connor_sample_size(0.2, -0.1, 0.8, 0.05), 155);
    assert!(message(|| connor_sample_size(0.2, 0.0, 0.8, 0.05)).contains("difference 0"));
    assert!(message(|| connor_sample_size(0.1, 0.2, 0.8, 0.05)).contains("difference 0.2"));
}

#[test]
fn sample_size_is_the_least_that_lasts() {
    for (gained, lost, power) in [
        (0.15, 0.05, 0.8),
        (0.5, 0.0, 0.9),
        (0.65, 0.35, 0.8),
        (0.02, 0.0, 0.8),
        (0.3, 0.7, 0.9),
        (0.055, 0.045, 0.8),
    ] {
        let n = sample_size(gained, lost, power, 0.05).expect("a size");
        assert!(exact_power(n - 1, gained, lost, 0.05) < power, "{gained} {lost}: {n}");
        let later = (n..n + 300).find(|&m| exact_power(m, gained, lost, 0.05) < power);
        assert_eq!(later, None, "{gained} {lost}: {n}");
    }
    // With every pair discordant the power has saw teeth: a smaller size reaches the target, but not lastingly.
    let n = sample_size(0.65, 0.35, 0.8, 0.05).unwrap();
    assert!((1..n).any(|m| exact_power(m, 0.65, 0.35, 0.05) >= 0.8));
    assert_eq!(sample_size(0.1, 0.1, 0.8, 0.05), None);
    assert_eq!(sample_size(0.1001, 0.1, 0.8, 0.05), None);
    assert_eq!(sample_size(0.05, 0.15, 0.8, 0.05), sample_size(0.15, 0.05, 0.8, 0.05));
    // Large sizes: the normal approximation is close, and a correction for discreteness asks for somewhat more.
    let (exact, normal) =
        (sample_size(0.055, 0.045, 0.8, 0.05).unwrap(), connor_sample_size(0.1, 0.01, 0.8, 0.05));
    assert!(exact > normal && (exact as f64) < 1.05 * normal as f64, "{exact} {normal}");
}

// ---- signed ranks ----

#[test]
fn signed_rank_has_its_critical_values() {
    // One-sided .05 / .025 / .01 / .005; exact counting (reference notes of this project), the .025 column is
    // OEIS A226330.
    for (n, values) in [
        (6, [Some(2), Some(0), None, None]),
        (8, [Some(5), Some(3), Some(1), Some(0)]),
        (10, [Some(10), Some(8), Some(5), Some(3)]),
        (12, [Some(17), Some(13), Some(9), Some(7)]),
        (15, [Some(30), Some(25), Some(19), Some(15)]),
        (20, [Some(60), Some(52), Some(43), Some(37)]),
        (25, [Some(100), Some(89), Some(76), Some(68)]),
        (30, [Some(151), Some(137), Some(120), Some(109)]),
    ] {
        let found = [0.05, 0.025, 0.01, 0.005].map(|level| critical_value(n, level));
        assert_eq!(found, values, "{n} differences");
    }
    assert_eq!(critical_value(0, 0.05), None);
    assert!(message(|| critical_value(6, 0.0)).contains("level 0"));
}

#[test]
fn critical_values_beyond_fifty_are_close() {
    for n in [51_usize, 70, 120] {
        // The law of the rank sum by halving probabilities, rank by rank.
        let mut law = vec![0.0; n * (n + 1) / 2 + 1];
        law[0] = 1.0;
        for rank in 1..=n {
            for sum in (0..law.len()).rev() {
                law[sum] = 0.5 * (law[sum] + if sum >= rank { law[sum - rank] } else { 0.0 });
            }
        }
        for level in [0.05, 0.025, 0.005] {
            let mut tail = 0.0;
            let beyond = law.iter().position(|chance| {
                tail += chance;
                tail > level
            });
            let exact = beyond.unwrap() as u64 - 1;
            let found = critical_value(n as u64, level).unwrap();
            assert!(found.abs_diff(exact) <= 1, "{n} at {level}: {found} {exact}");
        }
    }
}

#[test]
fn darwins_maize_has_its_worked_value() {
    // C. Darwin's fifteen pairs of maize (R. Fisher, The Design of Experiments, 1935): differences in eighths
    // of an inch.
    let differences = [49., -67., 8., 16., 6., 23., 28., 41., 14., 29., 56., 24., 75., 60., -48.];
    let found = signed_rank(&differences, Zeros::Drop);
    assert_eq!(found.minus, 24.0);
    assert_eq!(found.plus, 96.0);
    assert_eq!(found.two_sided, 0.041259765625);
    assert_eq!((found.used, found.zeros, found.exact), (15, 0, Exactness::Exact));
}

/// Lists all sign patterns: the chances that the rank sum of the positive differences is at most and at least
/// the observed one.
fn tails_by_enumeration(differences: &[f64], zeros: Zeros) -> (f64, f64) {
    let kept: Vec<f64> =
        differences.iter().copied().filter(|&d| d != 0.0 || zeros == Zeros::Pratt).collect();
    let rank = |d: f64| -> f64 {
        let below = kept.iter().filter(|e| e.abs() < d.abs()).count() as f64;
        let equal = kept.iter().filter(|e| e.abs() == d.abs()).count() as f64;
        below + 0.5 * (equal + 1.0)
    };
    let ranks: Vec<f64> = kept.iter().filter(|&&d| d != 0.0).map(|&d| rank(d)).collect();
    let observed: f64 = kept.iter().filter(|&&d| d > 0.0).map(|&d| rank(d)).sum();
    let (mut less, mut greater) = (0_u32, 0_u32);
    for pattern in 0_u32..1 << ranks.len() {
        let sum: f64 = ranks.iter().enumerate().map(|(i, r)| f64::from(pattern >> i & 1) * r).sum();
        less += u32::from(sum <= observed);
        greater += u32::from(sum >= observed);
    }
    let all = f64::from(1_u32 << ranks.len());
    (f64::from(less) / all, f64::from(greater) / all)
}

proptest! {
    #[test]
    fn signed_rank_agrees_with_enumeration(steps in prop::collection::vec(-5_i32..=5, 0..11)) {
        let differences: Vec<f64> = steps.iter().map(|&s| f64::from(s)).collect();
        for zeros in [Zeros::Drop, Zeros::Pratt] {
            let found = signed_rank(&differences, zeros);
            let (less, greater) = tails_by_enumeration(&differences, zeros);
            prop_assert_eq!((found.less, found.greater), (less, greater));
            prop_assert_eq!(found.two_sided, (2.0 * less.min(greater)).min(1.0));
            prop_assert_eq!(found.zeros, steps.iter().filter(|&&s| s == 0).count() as u64);
            prop_assert_eq!(found.used + found.zeros, steps.len() as u64);
        }
    }

    #[test]
    fn signed_rank_is_symmetric(seed: u64, count in 1_u64..90) {
        let differences = Cases::new(seed).reals(count);
        let negated: Vec<f64> = differences.iter().map(|d| -d).collect();
        let (found, mirrored) = (signed_rank(&differences, Zeros::Drop), signed_rank(&negated, Zeros::Drop));
        prop_assert_eq!(found.plus, mirrored.minus);
        prop_assert_eq!(found.less, mirrored.greater);
        prop_assert_eq!(found.two_sided, mirrored.two_sided);
        near(found.plus + found.minus, (count * (count + 1) / 2) as f64, 0.0);
        let exact = if count <= 50 { Exactness::Exact } else { Exactness::Normal };
        prop_assert_eq!(found.exact, exact);
    }
}

#[test]
fn signed_rank_approximation_follows_its_formula() {
    // z = (W - N(N+1)/4) / sqrt(N(N+1)(2N+1)/24 - sum(t^3 - t)/48), t the sizes of the ties (F. Wilcoxon 1945, tie
    // correction as in common practice).
    let mut cases = Cases::new(11);
    for _ in 0..20 {
        let count = 70 + cases.below(60);
        let differences: Vec<f64> =
            cases.reals(count).iter().map(|d| (12.0 * d + 1.0).round()).collect();
        let found = signed_rank(&differences, Zeros::Drop);
        assert_eq!(found.exact, Exactness::Normal);
        let n = found.used as f64;
        let ties: f64 = (1..=20)
            .map(|size| differences.iter().filter(|d| d.abs() == f64::from(size)).count() as f64)
            .map(|t| t * t * t - t)
            .sum();
        let variance = n * (n + 1.0) * (2.0 * n + 1.0) / 24.0 - ties / 48.0;
        let z = (found.plus - n * (n + 1.0) / 4.0) / variance.sqrt();
        near(found.less, 0.5 * (1.0 + error_function(z / 2.0_f64.sqrt())), 1e-12);
        near(found.greater, 1.0 - found.less, 1e-12);
    }
}

/// Computes the error function by its Taylor series.
fn error_function(x: f64) -> f64 {
    let mut term = x;
    let mut sum = x;
    for k in 1..200 {
        term *= -x * x / f64::from(k);
        sum += term / f64::from(2 * k + 1);
    }
    2.0 / PI.sqrt() * sum
}

#[test]
fn signed_rank_has_exact_edges() {
    for zeros in [Zeros::Drop, Zeros::Pratt] {
        for differences in [&[][..], &[0.0, -0.0]] {
            let found = signed_rank(differences, zeros);
            assert_eq!([found.two_sided, found.less, found.greater], [1.0; 3]);
            assert_eq!((found.used, found.plus, found.minus), (0, 0.0, 0.0));
        }
    }
    // All tied and positive: every rank is 2.5, one pattern of sixteen is as large.
    let tied = signed_rank(&[3.0; 4], Zeros::Drop);
    assert_eq!(
        (tied.greater, tied.less, tied.two_sided, tied.plus),
        (1.0 / 16.0, 1.0, 1.0 / 8.0, 10.0)
    );
    // Infinite differences tie at the top.
    let infinite = signed_rank(&[f64::INFINITY, f64::NEG_INFINITY, 1.0], Zeros::Drop);
    assert_eq!((infinite.plus, infinite.minus), (3.5, 2.5));
    // Fifty equal signs: one pattern of 2^50, exactly.
    let most: Vec<f64> = (1..=50).map(f64::from).collect();
    assert_eq!(signed_rank(&most, Zeros::Drop).greater, 0.5_f64.powi(50));
    assert!(message(|| signed_rank(&[1.0, f64::NAN], Zeros::Drop)).contains("index 1 is NaN"));
}

/// Lists and sorts all Walsh averages.
fn walsh_averages(differences: &[f64]) -> Vec<f64> {
    let mut averages = Vec::new();
    for (i, a) in differences.iter().enumerate() {
        averages.extend(differences[..=i].iter().map(|b| 0.5 * a + 0.5 * b));
    }
    averages.sort_by(f64::total_cmp);
    averages
}

proptest! {
    #[test]
    fn hodges_lehmann_agrees_with_the_list(seed: u64, count in 1_u64..80, coarse: bool) {
        let mut differences = Cases::new(seed).reals(count);
        if coarse {
            differences.iter_mut().for_each(|d| *d = (*d * 4.0).round());
        }
        let averages = walsh_averages(&differences);
        let found = hodges_lehmann(&differences, 0.95).unwrap();
        near(found.estimate, median(&averages).unwrap(), 1e-15);
        match critical_value(count, 0.025) {
            None => prop_assert_eq!(found.interval, Interval { low: f64::NEG_INFINITY, high: f64::INFINITY }),
            Some(t) => {
                prop_assert_eq!(found.interval.low, averages[t as usize]);
                prop_assert_eq!(found.interval.high, averages[averages.len() - 1 - t as usize]);
            }
        }
    }

    #[test]
    fn hodges_lehmann_inverts_the_test(seed: u64, count in 6_u64..40) {
        // A shift strictly inside the interval is not rejected, one strictly outside is.
        let differences = Cases::new(seed).reals(count);
        let found = hodges_lehmann(&differences, 0.95).unwrap().interval;
        let p = |shift: f64| {
            let moved: Vec<f64> = differences.iter().map(|d| d - shift).collect();
            signed_rank(&moved, Zeros::Drop).two_sided
        };
        prop_assert!(p(found.low + 1e-9) > 0.05 && p(found.high - 1e-9) > 0.05);
        prop_assert!(p(found.low - 1e-9) <= 0.05 && p(found.high + 1e-9) <= 0.05);
    }

    #[test]
    fn hodges_lehmann_moves_with_the_data(seed: u64, count in 1_u64..60, steps in -40_i32..40) {
        // Multiples of 1/64 make shifting exact.
        let shift = f64::from(steps) / 8.0;
        let differences: Vec<f64> = Cases::new(seed).reals(count).iter().map(|d| (d * 64.0).round() / 64.0).collect();
        let moved: Vec<f64> = differences.iter().map(|d| d + shift).collect();
        let (a, b) = (hodges_lehmann(&differences, 0.9).unwrap(), hodges_lehmann(&moved, 0.9).unwrap());
        prop_assert_eq!(a.estimate + shift, b.estimate);
        prop_assert_eq!(a.interval.low + shift, b.interval.low);
        prop_assert_eq!(a.interval.high + shift, b.interval.high);
    }
}

#[test]
fn hodges_lehmann_manages_twenty_thousand() {
    // 1 to 20,000, shuffled: the averages are symmetric about 10,000.5.
    let mut differences: Vec<f64> = (1..=20_000).map(f64::from).collect();
    let mut cases = Cases::new(5);
    for i in (1..differences.len()).rev() {
        differences.swap(i, cases.below(i as u64 + 1) as usize);
    }
    let found = hodges_lehmann(&differences, 0.95).unwrap();
    assert_eq!(found.estimate, 10_000.5);
    near(found.interval.low + found.interval.high, 20_001.0, 0.0);
    // The (T+1)-th smallest average of 1..n: sums s = i + j with i <= j number floor(s/2) for s <= n + 1.
    let place = critical_value(20_000, 0.025).unwrap() + 1;
    let mut passed = 0;
    let sum = (2_u64..).find(|&s| {
        passed += if s <= 20_001 { s / 2 } else { 20_000 - s.div_ceil(2) + 1 };
        passed >= place
    });
    assert_eq!(found.interval.low, sum.unwrap() as f64 / 2.0);
}

#[test]
fn hodges_lehmann_has_exact_edges() {
    assert_eq!(hodges_lehmann(&[], 0.95), None);
    let single = hodges_lehmann(&[3.0], 0.95).unwrap();
    assert_eq!(single.estimate, 3.0);
    assert_eq!(single.interval, Interval { low: f64::NEG_INFINITY, high: f64::INFINITY });
    let equal = hodges_lehmann(&[-2.5; 9], 0.95).unwrap();
    assert_eq!((equal.estimate, equal.interval), (-2.5, Interval { low: -2.5, high: -2.5 }));
    // Averages of -inf, 0, inf: -inf, -inf, 0, 0, inf, inf.
    let infinite = hodges_lehmann(&[f64::INFINITY, 0.0, f64::NEG_INFINITY], 0.5).unwrap();
    assert_eq!(infinite.estimate, 0.0);
    let huge = hodges_lehmann(&[f64::MAX, f64::MAX], 0.5).unwrap();
    assert_eq!(huge.estimate, f64::MAX);
    assert!(message(|| hodges_lehmann(&[f64::NAN], 0.95)).contains("index 0 is NaN"));
}

// ---- bootstrap ----

fn mean(values: &[f64]) -> f64 {
    values.iter().sum::<f64>() / values.len() as f64
}

/// Computes the variance with divisor n.
fn variance(values: &[f64]) -> f64 {
    let centre = mean(values);
    values.iter().map(|x| (x - centre).powi(2)).sum::<f64>() / values.len() as f64
}

#[test]
fn bca_has_the_published_interval() {
    // Spatial test, 26 children: B. Efron, R. Tibshirani, An Introduction to the Bootstrap, 1993, table 14.2
    // (from memory): variance 171.5, 90 % interval 115.8 to 259.6 from 2000 resamples. The ends of such an
    // interval scatter by about 3 at that number.
    let sample = [
        48., 36., 20., 29., 42., 42., 20., 42., 22., 41., 45., 14., 6., 0., 33., 28., 34., 4., 32.,
        24., 47., 41., 24., 26., 30., 41.,
    ];
    near(variance(&sample), 171.5, 0.05);
    let found =
        bca(&[sample.to_vec()], &variance, Resampling::WithinGroups, 20_000, 0.90, 1).unwrap();
    interval_near(found, 115.8, 259.6, 6.0);
    let groups: Vec<Vec<f64>> = sample.iter().map(|&x| vec![x]).collect();
    let whole = bca(&groups, &variance, Resampling::Groups, 20_000, 0.90, 1).unwrap();
    // One value a group, drawn as groups, is the same experiment with the same draws.
    assert_eq!(found, whole);
}

#[test]
fn bca_follows_its_formula() {
    // Every value the statistic gave is recorded: the sample, seven leave-one-out values, 2000 resamples.
    let sample = [0.3, 1.2, 1.93, 4.4, 6.1, 7.77, 19.0];
    let seen = RefCell::new(Vec::new());
    let statistic = |x: &[f64]| {
        let value = variance(x);
        seen.borrow_mut().push((x.len(), value));
        value
    };
    let found =
        bca(&[sample.to_vec()], &statistic, Resampling::WithinGroups, 2000, 0.9, 7).unwrap();
    let seen = seen.into_inner();
    let theta = variance(&sample);
    let left: Vec<f64> = seen.iter().filter(|(n, _)| *n == 6).map(|&(_, v)| v).collect();
    let mut drawn: Vec<f64> = seen.iter().filter(|(n, _)| *n == 7).map(|&(_, v)| v).collect();
    drawn.swap_remove(drawn.iter().position(|&v| v == theta).unwrap());
    drawn.sort_by(f64::total_cmp);
    assert_eq!((left.len(), drawn.len()), (7, 2000));
    let centre = mean(&left);
    let cubes: f64 = left.iter().map(|l| (centre - l).powi(3)).sum();
    let squares: f64 = left.iter().map(|l| (centre - l).powi(2)).sum();
    let a = cubes / (6.0 * squares.powf(1.5));
    let below = drawn.iter().filter(|&&v| v < theta).count() as f64;
    let equal = drawn.iter().filter(|&&v| v == theta).count() as f64;
    assert!(equal > 0.0, "the case must hold ties with the sample");
    let cdf = |z: f64| 0.5 * (1.0 + error_function(z / 2.0_f64.sqrt()));
    let share = (below + 0.5 * equal) / 2000.0;
    let (mut low, mut high) = (-5.0, 5.0);
    for _ in 0..100 {
        let middle = 0.5 * (low + high);
        if cdf(middle) < share { low = middle } else { high = middle }
    }
    let bias = low;
    // 1.644853626951472: the normal quantile of 95 % (standard tables, from memory).
    for (z, end) in [(-1.644_853_626_951_472, found.low), (1.644_853_626_951_472, found.high)] {
        let level = cdf(bias + (bias + z) / (1.0 - a * (bias + z)));
        let place = 2001.0 * level - 1.0;
        let (floor, weight) = (place.floor() as usize, place - place.floor());
        near(end, (1.0 - weight) * drawn[floor] + weight * drawn[floor + 1], 1e-9);
    }
}

#[test]
fn bca_has_exact_edges() {
    let run = |groups: &[Vec<f64>], how| bca(groups, &mean, how, 2000, 0.95, 3);
    let both = [Resampling::WithinGroups, Resampling::Groups];
    for how in both {
        assert_eq!(run(&[], how), None);
        assert_eq!(run(&[vec![], vec![1.0]], how), None);
        // 0.1 is not a binary fraction: its mean must be reproduced to the last bit.
        let point = mean(&[0.1; 8]);
        let constant = [vec![0.1; 4], vec![0.1; 4]];
        assert_eq!(run(&constant, how), Some(Interval { low: point, high: point }));
    }
    assert_eq!(run(&[vec![1.0], vec![2.0]], Resampling::WithinGroups), None);
    assert!(run(&[vec![1.0], vec![2.0]], Resampling::Groups).is_some());
    assert_eq!(run(&[vec![1.0, 2.0]], Resampling::Groups), None);
    let groups = [vec![1.0, 5.0, 2.0], vec![0.5, 7.0], vec![3.0, 3.5, 9.0]];
    for how in both {
        assert_eq!(run(&groups, how), run(&groups, how));
        assert_ne!(run(&groups, how), bca(&groups, &mean, how, 2000, 0.95, 4));
        let found = run(&groups, how).unwrap();
        let pooled = mean(&groups.concat());
        assert!(found.low < pooled && pooled < found.high);
        assert_eq!(bca(&groups, &|_| f64::INFINITY, how, 2000, 0.95, 3), None);
    }
    let few = || bca(&groups, &mean, Resampling::Groups, 1999, 0.95, 3);
    assert!(message(few).contains("1999 resamples"));
    assert!(message(|| run(&[vec![f64::NAN]], Resampling::Groups)).contains("group 0 at index 0"));
}

#[test]
fn bca_within_groups_ignores_differences_between_groups() {
    // Groups far apart: fixed group sizes keep the spread between groups out, drawing groups lets it in.
    let groups: Vec<Vec<f64>> =
        (0..6).map(|g| (0..8).map(|i| 100.0 * f64::from(g) + f64::from(i)).collect()).collect();
    let width = |how| {
        let found = bca(&groups, &mean, how, 4000, 0.95, 9).unwrap();
        found.high - found.low
    };
    // Standard deviations of the mean: sqrt(63/12/48) = 0.331 within, sqrt(35/12/6) 100 = 69.7 between.
    near(width(Resampling::WithinGroups), 2.0 * 1.96 * 0.331, 0.1);
    near(width(Resampling::Groups), 2.0 * 1.96 * 69.7, 15.0);
}

// ---- several tests, several methods ----

#[test]
fn holm_has_its_worked_example() {
    // S. Holm's rule by hand (reference notes of this project): two rejections at 5 %.
    let adjusted = holm(&[0.01, 0.04, 0.03, 0.005]);
    for (found, expected) in adjusted.iter().zip([0.03, 0.06, 0.06, 0.02]) {
        near(*found, expected, 1e-15);
    }
    assert_eq!(adjusted.iter().filter(|&&p| p <= 0.05).count(), 2);
    assert_eq!(holm(&[]), Vec::<f64>::new());
    assert_eq!(holm(&[0.4]), vec![0.4]);
    assert_eq!(holm(&[1.0, 1.0]), vec![1.0, 1.0]);
    assert!(message(|| holm(&[0.1, f64::NAN])).contains("p-value NaN at index 1"));
    assert!(message(|| holm(&[1.1])).contains("p-value 1.1 at index 0"));
}

proptest! {
    #[test]
    fn holm_rejects_what_the_step_down_rejects(p in prop::collection::vec(0.0..=1.0_f64, 1..12), alpha in 0.01..0.5_f64) {
        let adjusted = holm(&p);
        let mut sorted = p.clone();
        sorted.sort_by(f64::total_cmp);
        let rejected = sorted.iter().enumerate().take_while(|(i, v)| **v * (p.len() - i) as f64 <= alpha).count();
        prop_assert_eq!(adjusted.iter().filter(|&&a| a <= alpha).count(), rejected);
        for (a, v) in adjusted.iter().zip(&p) {
            prop_assert!(a >= v && *a <= 1.0 && *a <= p.len() as f64 * v);
        }
    }
}

#[test]
fn critical_difference_uses_the_published_quantiles() {
    // J. Demsar, JMLR 7:1-30, 2006, table 5.
    let five = [1.960, 2.344, 2.569, 2.728, 2.850, 2.948, 3.031, 3.102, 3.164];
    let ten = [1.645, 2.052, 2.291, 2.460, 2.589, 2.693, 2.780, 2.855, 2.920];
    for (i, (five, ten)) in five.into_iter().zip(ten).enumerate() {
        let k = (i + 2) as f64;
        let scale = (k * (k + 1.0) / (6.0 * 14.0)).sqrt();
        near(critical_difference(i + 2, 14, Level::FivePercent).unwrap(), five * scale, 1e-15);
        near(critical_difference(i + 2, 14, Level::TenPercent).unwrap(), ten * scale, 1e-15);
    }
    // The worked example of the same article: 4 methods, 14 data sets, 5 %: CD = 1.25 (from memory).
    near(critical_difference(4, 14, Level::FivePercent).unwrap(), 1.25, 5.1e-3);
    for (methods, blocks) in [(0, 5), (1, 5), (11, 5), (3, 0)] {
        assert_eq!(critical_difference(methods, blocks, Level::FivePercent), None);
    }
}

#[test]
fn friedman_agrees_with_a_worked_example() {
    // Mean ranks 3.143, 2.000, 2.893, 1.964 on 14 data sets give chi-square 9.28 and F = 3.69 in J. Demsar,
    // JMLR 7:1-30, 2006 (from memory). Rank sums 44, 28, 40.5, 27.5 need ties in one row only, which the
    // article's formula leaves uncorrected.
    let sums = [44.0, 28.0, 40.5, 27.5];
    let chi: f64 =
        12.0 * 14.0 / 20.0 * (sums.iter().map(|s| (s / 14.0_f64).powi(2)).sum::<f64>() - 25.0);
    near(chi, 9.28, 5.1e-3);
    near(13.0 * chi / (14.0 * 3.0 - chi), 3.69, 5.1e-3);
    // Three rows without ties, by hand: rank sums 4, 5, 9.
    let found =
        friedman(&[vec![1., 2., 3.], vec![1., 2., 3.], vec![5., 4., f64::INFINITY]]).unwrap();
    assert_eq!(found.mean_ranks, vec![4.0 / 3.0, 5.0 / 3.0, 3.0]);
    near(found.chi_square, 14.0 / 3.0, 1e-14);
    near(found.f, 2.0 * (14.0 / 3.0) / (6.0 - 14.0 / 3.0), 1e-13);
    near(found.chi_square_p, (-7.0 / 3.0_f64).exp(), 1e-12);
    // F with 2 and 4 degrees of freedom: (1 + x/2)^-2.
    near(found.f_p, (1.0 + 3.5_f64).powi(-2), 1e-12);
    assert_eq!(found.blocks, 3);
}

#[test]
fn friedman_has_exact_edges() {
    assert_eq!(friedman(&[]), None);
    assert_eq!(friedman(&[vec![1.0, 2.0]]), None);
    assert_eq!(friedman(&[vec![1.0], vec![2.0]]), None);
    let tied = friedman(&[vec![f64::INFINITY; 3], vec![2.0; 3]]).unwrap();
    assert_eq!((tied.chi_square, tied.f, tied.chi_square_p, tied.f_p), (0.0, 0.0, 1.0, 1.0));
    let alike = friedman(&[vec![1.0, 2.0], vec![3.0, 4.0]]).unwrap();
    assert_eq!((alike.chi_square, alike.f, alike.f_p), (2.0, f64::INFINITY, 0.0));
    assert!(message(|| friedman(&[vec![1.0, 2.0], vec![1.0]])).contains("row 1 has 1 values"));
    assert!(message(|| friedman(&[vec![1.0, f64::NAN]])).contains("row 0 at index 1 is NaN"));
}

proptest! {
    #[test]
    fn friedman_of_two_methods_is_the_sign_test(rows in prop::collection::vec((0_i32..4, 0_i32..4), 2..40)) {
        // With ties corrected, chi-square is (wins - losses)^2 / (rows without a tie).
        let blocks: Vec<Vec<f64>> = rows.iter().map(|&(a, b)| vec![f64::from(a), f64::from(b)]).collect();
        let wins = rows.iter().filter(|(a, b)| a < b).count() as f64;
        let losses = rows.iter().filter(|(a, b)| a > b).count() as f64;
        let found = friedman(&blocks).unwrap();
        let expected = if wins + losses > 0.0 { (wins - losses).powi(2) / (wins + losses) } else { 0.0 };
        near(found.chi_square, expected, 1e-12);
        near(found.mean_ranks.iter().sum::<f64>(), 3.0, 1e-12);
    }
}

// ---- summaries and profiles ----

#[test]
fn shifted_geometric_mean_has_its_values() {
    // exp(mean ln(t + s)) - s, computed independently for the reference notes of this project, six decimals.
    for (shift, expected) in [(10.0, 60.312766), (1.0, 37.618423), (0.0, 31.622777)] {
        let found = shifted_geometric_mean(&[1.0, 10.0, 100.0, 1000.0], shift).unwrap();
        near(found, expected, 5.1e-7);
    }
    assert_eq!(shifted_geometric_mean(&[], 1.0), None);
    assert_eq!(shifted_geometric_mean(&[0.0, 5.0], 0.0), Some(0.0));
    assert_eq!(shifted_geometric_mean(&[0.0, f64::INFINITY], 0.0), Some(f64::INFINITY));
    assert!(message(|| shifted_geometric_mean(&[1.0, -3.0], 1.0)).contains("value -3 at index 1"));
    assert!(message(|| shifted_geometric_mean(&[1.0], -1.0)).contains("shift -1"));
    assert!(message(|| shifted_geometric_mean(&[f64::NAN], 1.0)).contains("index 0 is NaN"));
}

#[test]
fn medians_and_quantiles_interpolate() {
    assert_eq!(median(&[]), None);
    assert_eq!(median(&[3.0, 1.0, 2.0]), Some(2.0));
    assert_eq!(median(&[4.0, 1.0, 2.0, 3.0]), Some(2.5));
    assert_eq!(median(&[1.0, f64::INFINITY]), Some(f64::INFINITY));
    assert_eq!(median(&[1.0, f64::INFINITY, 2.0]), Some(2.0));
    assert_eq!(median(&[f64::INFINITY; 2]), Some(f64::INFINITY));
    assert_eq!(quantile(&[10.0, 20.0, 40.0], 0.25), Some(15.0));
    assert_eq!(quantile(&[10.0, 20.0, 40.0], 1.0), Some(40.0));
    assert_eq!(quantile(&[10.0, 20.0, 40.0], 0.0), Some(10.0));
    assert!(message(|| quantile(&[1.0], 1.5)).contains("share 1.5"));
    assert!(message(|| median(&[1.0, f64::NAN])).contains("index 1 is NaN"));
}

#[test]
fn penalised_mean_counts_failures() {
    assert_eq!(penalised_mean(&[], 60.0, 10.0), None);
    assert_eq!(penalised_mean(&[Some(4.0), None], 60.0, 10.0), Some(302.0));
    assert_eq!(penalised_mean(&[Some(4.0), Some(6.0)], 60.0, 10.0), Some(5.0));
    assert!(message(|| penalised_mean(&[Some(f64::NAN)], 60.0, 10.0)).contains("index 0 is NaN"));
    assert!(message(|| penalised_mean(&[None], f64::INFINITY, 10.0)).contains("limit inf"));
}

#[test]
fn performance_profile_agrees_with_hand_calculation() {
    let costs = [
        vec![Some(1.0), Some(3.0)],
        vec![Some(4.0), Some(2.0)],
        vec![Some(5.0), None],
        vec![None, None],
        vec![Some(0.001), Some(0.05)],
    ];
    let curves = performance_profile(&costs, 0.1);
    let read = |curve: usize| [0.99, 1.0, 1.99, 2.0, 3.0, 1e9].map(|x| curves[curve].value(x));
    assert_eq!(read(0), [0.0, 0.6, 0.6, 0.8, 0.8, 0.8]);
    assert_eq!(read(1), [0.0, 0.4, 0.4, 0.4, 0.6, 0.6]);
    assert_eq!((curves[0].limit, curves[1].limit), (0.8, 0.6));
    assert_eq!(curves[0].steps.len(), 2);
    assert_eq!(performance_profile(&[], 0.1), vec![]);
    let none = performance_profile(&[vec![None]], 0.1);
    assert_eq!((none[0].steps.len(), none[0].limit), (0, 0.0));
    assert!(message(|| performance_profile(&costs, 0.0)).contains("floor 0"));
    assert!(
        message(|| performance_profile(&[vec![Some(f64::NAN)]], 1.0))
            .contains("NaN in row 0, column 0")
    );
    assert!(
        message(|| performance_profile(&[vec![None], vec![]], 1.0)).contains("row 1 has 0 costs")
    );
}

#[test]
fn data_profile_agrees_with_hand_calculation() {
    let costs = [vec![Some(6.0), Some(1.0)], vec![Some(6.0), None]];
    let curves = data_profile(&costs, &[2.0, 3.0]);
    assert_eq!([1.9, 2.0, 2.9, 3.0].map(|x| curves[0].value(x)), [0.0, 0.5, 0.5, 1.0]);
    assert_eq!([0.4, 0.5, 9.0].map(|x| curves[1].value(x)), [0.0, 0.5, 0.5]);
    assert!(message(|| data_profile(&costs, &[1.0])).contains("1 units for 2 rows"));
    assert!(message(|| data_profile(&costs, &[1.0, 0.0])).contains("unit 0 of row 1"));
}

/// Draws a table of costs, some missing, some equal.
fn cost_table() -> impl Strategy<Value = Vec<Vec<Option<f64>>>> {
    (1_usize..5).prop_flat_map(|methods| {
        let cost = prop::option::weighted(0.8, (1_i32..30).prop_map(|c| f64::from(c) / 4.0));
        prop::collection::vec(prop::collection::vec(cost, methods), 1..25)
    })
}

proptest! {
    #[test]
    fn profiles_keep_their_properties(costs in cost_table(), scale in 0.1..10.0_f64) {
        let rows = costs.len() as f64;
        let methods = costs[0].len();
        let ratios = performance_profile(&costs, 0.5);
        let units: Vec<f64> = (0..costs.len()).map(|i| 1.0 + i as f64).collect();
        let data = data_profile(&costs, &units);
        prop_assert_eq!((ratios.len(), data.len()), (methods, methods));
        for j in 0..methods {
            let solved = costs.iter().filter(|row| row[j].is_some()).count() as f64 / rows;
            let floored = |cost: &Option<f64>| cost.map(|c| c.max(0.5));
            let won = costs.iter().filter(|row| {
                let best = row.iter().filter_map(floored).fold(f64::INFINITY, f64::min);
                floored(&row[j]) == Some(best)
            });
            near(ratios[j].value(1.0), won.count() as f64 / rows, 1e-12);
            prop_assert!(ratios[j].steps.iter().all(|step| step.at >= 1.0));
            for curve in [&ratios[j], &data[j]] {
                near(curve.limit, solved, 1e-12);
                prop_assert_eq!(curve.value(f64::INFINITY), curve.limit);
                prop_assert!(curve.steps.windows(2).all(|p| p[0].at < p[1].at && p[0].share < p[1].share));
                prop_assert!(curve.steps.iter().all(|step| step.share > 0.0 && step.share <= 1.0));
            }
            for at in [0.3, 1.0, 2.5] {
                let within = costs.iter().zip(&units).filter(|(row, unit)| row[j].is_some_and(|c| c / **unit <= at));
                near(data[j].value(at), within.count() as f64 / rows, 1e-12);
            }
        }
        // Every instance that some method solves is won by someone.
        let someone = costs.iter().filter(|row| row.iter().any(Option::is_some)).count() as f64 / rows;
        prop_assert!(ratios.iter().map(|c| c.value(1.0)).sum::<f64>() >= someone - 1e-12);
        // Ratios do not depend on the unit of cost, when the floor moves along.
        let scaled: Vec<Vec<Option<f64>>> =
            costs.iter().map(|row| row.iter().map(|c| c.map(|c| c * scale)).collect()).collect();
        for (a, b) in ratios.iter().zip(performance_profile(&scaled, 0.5 * scale)) {
            near(a.value(1.0 + 1e-9), b.value(1.0 + 1e-9), 1e-12);
            near(a.limit, b.limit, 0.0);
        }
    }

    #[test]
    fn quantiles_rise(values in prop::collection::vec(-1e3..1e3_f64, 1..30), a in 0.0..=1.0_f64, b in 0.0..=1.0_f64) {
        let (low, high) = (quantile(&values, a.min(b)).unwrap(), quantile(&values, a.max(b)).unwrap());
        prop_assert!(low <= high + 1e-12);
        let mirrored: Vec<f64> = values.iter().map(|v| -v).collect();
        near(quantile(&mirrored, 1.0 - a).unwrap(), -quantile(&values, a).unwrap(), 1e-9);
    }
}

// ---- sequential ----

/// Computes e-values by the betting recurrence E(w+1, l) = E(w, l) 2 (w + 1/2) / (w + l + 1).
fn e_table(most: usize) -> Vec<Vec<f64>> {
    let mut table = vec![vec![1.0; most + 1]; most + 1];
    for w in 0..=most {
        for l in 0..=most - w {
            let n = (w + l) as f64;
            if w > 0 {
                table[w][l] = table[w - 1][l] * 2.0 * (w as f64 - 0.5) / n;
            } else if l > 0 {
                table[w][l] = table[w][l - 1] * 2.0 * (l as f64 - 0.5) / n;
            }
        }
    }
    table
}

#[test]
fn e_values_are_bets_and_keep_villes_bound() {
    const MOST: usize = 400;
    let table = e_table(MOST);
    // alive[w]: chance under fair coins to be at w gains after n pairs without E ever having reached 20.
    let mut alive = vec![1.0];
    let mut stopped = 0.0;
    for n in 0..MOST {
        let mut next = vec![0.0; n + 2];
        for (w, chance) in alive.iter().enumerate() {
            let here = e_value(w as u64, (n - w) as u64);
            near(here / table[w][n - w], 1.0, 1e-11);
            // A martingale: the mean of the two successors is the value.
            let ahead =
                e_value(w as u64 + 1, (n - w) as u64) + e_value(w as u64, (n - w) as u64 + 1);
            near(0.5 * ahead / here, 1.0, 1e-11);
            next[w] += 0.5 * chance;
            next[w + 1] += 0.5 * chance;
        }
        for (w, chance) in next.iter_mut().enumerate() {
            if e_value(w as u64, (n + 1 - w) as u64) >= 20.0 {
                stopped += *chance;
                *chance = 0.0;
            }
        }
        alive = next;
    }
    near(stopped + alive.iter().sum::<f64>(), 1.0, 1e-12);
    assert!(stopped <= 0.05 && stopped > 0.01, "{stopped}");
}

#[test]
fn e_values_have_exact_edges() {
    assert_eq!(e_value(0, 0), 1.0);
    near(e_value(1, 0), 1.0, 1e-14);
    near(e_value(2, 0), 1.5, 1e-14);
    near(e_value(1, 1), 0.5, 1e-14);
    assert_eq!(e_value(40, 3), e_value(3, 40));
    assert_eq!(e_value(5000, 0), f64::INFINITY);
    // 2^N binom(2N, N) / 4^N, about 2^N / sqrt(pi N) (1 - 1/(8N)).
    let n = 5000.0_f64;
    near(log_e_value(5000, 0), n * 2.0_f64.ln() - 0.5 * (PI * n).ln() - 1.0 / (8.0 * n), 1e-9);
}

#[test]
fn look_levels_sum_to_the_level() {
    let sum: f64 = (1..=200_000).map(|look| look_level(look, 0.05)).sum();
    // The rest of the series beyond m is about alpha 6 / (pi^2 m).
    near(sum + 0.05 * 6.0 / (PI * PI * 200_000.5), 0.05, 1e-13);
    near(look_level(1, 0.05) / look_level(3, 0.05), 9.0, 1e-12);
    assert!(message(|| look_level(0, 0.05)).contains("from 1"));
    assert!(message(|| look_level(1, f64::NAN)).contains("level NaN"));
}

#[test]
fn sprt_stops_at_walds_bounds_and_keeps_its_errors() {
    // A. Wald 1945: with 3/4 against 1/2 and 5 % errors, gains alone stop at ln 19 / ln 1.5 = 7.26, losses
    // alone at -ln 19 / ln 0.5 = 4.25.
    let ask = |gained, lost| sprt(gained, lost, 0.75, 0.05, 0.05);
    assert_eq!((ask(7, 0), ask(8, 0)), (SprtState::Continue, SprtState::Reject));
    assert_eq!((ask(0, 4), ask(0, 5)), (SprtState::Continue, SprtState::AcceptNull));
    assert_eq!(ask(0, 0), SprtState::Continue);
    assert_eq!(sprt(0, 8, 0.25, 0.05, 0.05), SprtState::Reject);
    // Exact error rates by stepping the chances to 2000 pairs: Wald's bounds are alpha/(1 - beta) and beta/(1 -
    // alpha).
    for (chance, wrong) in [(0.5, SprtState::Reject), (0.75, SprtState::AcceptNull)] {
        let mut alive = vec![1.0];
        let mut error = 0.0;
        for n in 1_u64..=2000 {
            let mut next = vec![0.0; n as usize + 1];
            for (w, here) in alive.iter().enumerate() {
                next[w] += (1.0 - chance) * here;
                next[w + 1] += chance * here;
            }
            for (w, here) in next.iter_mut().enumerate().filter(|(_, here)| **here > 0.0) {
                let state = ask(w as u64, n - w as u64);
                if state != SprtState::Continue {
                    error += if state == wrong { *here } else { 0.0 };
                    *here = 0.0;
                }
            }
            alive = next;
        }
        assert!(error <= 0.05 / 0.95 && error > 0.02, "{chance}: {error}");
    }
    for alternative in [0.5, 0.0, 1.0, f64::NAN] {
        let text = message(|| sprt(1, 1, alternative, 0.05, 0.05));
        assert!(text.contains(&format!("alternative {alternative} ")), "{text}");
    }
    assert!(message(|| sprt(1, 1, 0.7, 0.6, 0.5)).contains("0.6 and 0.5"));
}

// ---- recovery ----

#[test]
fn statistical_dimension_agrees_with_the_notes() {
    // D. Amelunxen, M. Lotz, M. McCoy, J. Tropp, Information and Inference 3:224-294, 2014, applied to the
    // semidefinite cone. The numbers were computed for the reference notes of this project and carry the error
    // of sampling: 5e-3 relative. Sharper checks stand in the next test.
    for (order, rank, expected) in
        [(10, 1, 17.2), (20, 1, 38.6), (20, 2, 65.7), (30, 1, 61.1), (30, 3, 145.4), (50, 1, 108.9)]
    {
        near(statistical_dimension(order, rank) / expected, 1.0, 5e-3);
    }
}

/// Computes the least over tau of `fixed` + r tau^2 + the mean of sum (lambda - tau)_+^2, the mean given by the
/// eigenvalues (with density) listed.
fn least(fixed: f64, rank: f64, law: &[(f64, f64)]) -> f64 {
    let value = |tau: f64| {
        fixed
            + rank * tau * tau
            + law.iter().map(|(x, w)| w * (x - tau).max(0.0).powi(2)).sum::<f64>()
    };
    let (mut low, mut high) = (0.0, 5.0);
    for _ in 0..100 {
        let (left, right) = ((2.0 * low + high) / 3.0, (low + 2.0 * high) / 3.0);
        if value(left) > value(right) { low = left } else { high = right }
    }
    value(low)
}

#[test]
fn statistical_dimension_agrees_with_small_cases() {
    let width = 0.002;
    // A block of order 1: one standard normal number.
    let single: Vec<(f64, f64)> = (-4500..4500)
        .map(|i| (f64::from(i) + 0.5) * width)
        .map(|x| (x, width * (-0.5 * x * x).exp() / (2.0 * PI).sqrt()))
        .collect();
    for (order, rank) in [(2_u64, 1_u64), (5, 4), (9, 8)] {
        let r = rank as f64;
        let expected = least(0.5 * r * (r + 1.0) + r, r, &single);
        near(statistical_dimension(order, rank), expected, 1e-5);
    }
    // A block of order 2: eigenvalues s/sqrt2 -+ rho with s standard normal and rho^2 = ((a-b)/2)^2 + c^2, a
    // Rayleigh number: (a-b)/2 and c have variance 1/2.
    let mut double = Vec::new();
    for i in -400..400 {
        let s = (f64::from(i) + 0.5) * 0.02;
        for j in 0..300 {
            let rho = (f64::from(j) + 0.5) * 0.02;
            let weight = 4e-4 * (-0.5 * s * s - rho * rho).exp() / (2.0 * PI).sqrt() * 2.0 * rho;
            double.extend([-rho, rho].map(|shift| (s / 2.0_f64.sqrt() + shift, weight)));
        }
    }
    for (order, rank) in [(3_u64, 1_u64), (6, 4)] {
        let r = rank as f64;
        let expected = least(0.5 * r * (r + 1.0) + 2.0 * r, r, &double);
        near(statistical_dimension(order, rank), expected, 2e-3);
    }
}

#[test]
fn dimensions_have_their_limits() {
    // n(n+1)/2 - (n-r)(n-r+1)/4 by hand.
    assert_eq!(feasibility_dimension(10, 1), 55.0 - 22.5);
    assert_eq!(feasibility_dimension(3, 3), 6.0);
    assert_eq!(feasibility_dimension(3, 0), 3.0);
    assert_eq!(statistical_dimension(7, 0), 0.0);
    assert_eq!(statistical_dimension(7, 7), 28.0);
    assert_eq!(statistical_dimension(0, 0), 0.0);
    for order in [4, 9, 14] {
        for rank in 1..order {
            let value = statistical_dimension(order, rank);
            let (n, r) = (order as f64, rank as f64);
            // More than the free parameters of the rank, less than what feasibility alone needs; growing with
            // the rank.
            assert!(value > n * r - 0.5 * r * (r - 1.0), "{order} {rank}: {value}");
            assert!(value < feasibility_dimension(order, rank), "{order} {rank}: {value}");
            assert!(value > statistical_dimension(order, rank - 1), "{order} {rank}: {value}");
        }
    }
    assert!(message(|| statistical_dimension(3, 4)).contains("rank 4 exceeds the order 3"));
    assert!(message(|| feasibility_dimension(3, 4)).contains("rank 4 exceeds the order 3"));
}

// ---- cross-check against SciPy and statsmodels ----

/// Finds a Python that has SciPy and statsmodels.
fn python() -> Option<&'static str> {
    ["python3", "/usr/bin/python3"].into_iter().find(|name| {
        let tried = Command::new(name)
            .args(["-c", "import scipy.stats, statsmodels.stats.multitest"])
            .output();
        tried.is_ok_and(|output| output.status.success())
    })
}

fn signed_rank_case(differences: &[f64], zeros: Zeros) -> Value {
    let found = signed_rank(differences, zeros);
    let shift = hodges_lehmann(differences, 0.9).unwrap();
    json!({
        "differences": differences,
        "zeros": if zeros == Zeros::Drop { "wilcox" } else { "pratt" },
        "exact": found.exact == Exactness::Exact,
        "plus": found.plus, "minus": found.minus,
        "two_sided": found.two_sided, "less": found.less, "greater": found.greater,
        "shift": shift.estimate,
    })
}

fn cases(seed: u64) -> Value {
    let mut draw = Cases::new(seed);
    let mut signed = Vec::new();
    for round in 0..60 {
        let count = 1 + draw.below(49);
        signed.push(signed_rank_case(&draw.reals(count), Zeros::Drop));
        // More than fifty with ties and zeros: the normal approximation.
        let count = 150 + draw.below(100);
        let tied: Vec<f64> = draw.reals(count).iter().map(|d| (20.0 * d + 1.0).round()).collect();
        signed
            .push(signed_rank_case(&tied, if round % 2 == 0 { Zeros::Drop } else { Zeros::Pratt }));
    }
    let proportions: Vec<Value> = (0..60)
        .map(|_| {
            let trials = 1 + draw.below(500);
            let successes = draw.below(trials + 1);
            let confidence = 0.745 + 0.25 * draw.real();
            let (exact, score) = (
                clopper_pearson(successes, trials, confidence),
                wilson(successes, trials, confidence),
            );
            json!({
                "successes": successes, "trials": trials, "confidence": confidence,
                "exact": [exact.low, exact.high], "wilson": [score.low, score.high],
            })
        })
        .collect();
    let discordances: Vec<Value> = (0..80)
        .map(|round| {
            let bound = if round < 50 { 60 } else { 4000 };
            let (gained, lost) = (draw.below(bound), draw.below(bound));
            let found = mcnemar(pairs(gained + lost + 7, gained, lost));
            json!({
                "gained": gained, "lost": lost, "two_sided": found.two_sided, "mid_p": found.mid_p,
                "gain": found.gain, "loss": found.loss, "log_e_value": log_e_value(gained, lost),
            })
        })
        .collect();
    let adjustments: Vec<Value> = (0..40)
        .map(|_| {
            let count = 1 + draw.below(12);
            let p: Vec<f64> = draw.reals(count).iter().map(|x| x * x * x * x).collect();
            json!({ "p": p, "adjusted": holm(&p) })
        })
        .collect();
    let rankings: Vec<Value> = (0..40)
        .map(|round| {
            let methods = 3 + draw.below(6);
            let rows = 2 + draw.below(30);
            let blocks: Vec<Vec<f64>> = (0..rows)
                .map(|_| {
                    let row = draw.reals(methods);
                    if round % 2 == 0 { row } else { row.iter().map(|x| (3.0 * x).round()).collect() }
                })
                .collect();
            let found = friedman(&blocks).unwrap();
            json!({
                "blocks": blocks, "chi_square": found.chi_square, "chi_square_p": found.chi_square_p,
                "f": if found.f.is_finite() { found.f } else { -1.0 }, "f_p": found.f_p,
            })
        })
        .collect();
    let powers: Vec<Value> = (0..30)
        .map(|_| {
            let n = 1 + draw.below(2000);
            let gained = 0.25 + 0.25 * draw.real();
            let lost = 0.25 + 0.25 * draw.real();
            let power = exact_power(n, gained, lost, 0.05);
            json!({ "pairs": n, "gained": gained, "lost": lost, "alpha": 0.05, "power": power })
        })
        .collect();
    let differences: Vec<f64> = (2..=10)
        .flat_map(|k| {
            [Level::FivePercent, Level::TenPercent]
                .map(|level| critical_difference(k, 1, level).unwrap())
        })
        .collect();
    let values = draw.reals(37);
    let shares = [0.0, 0.1, 0.37, 0.5, 0.99, 1.0];
    let read = shares.map(|share| quantile(&values, share).unwrap());
    json!({
        "signed_rank": signed, "proportions": proportions, "mcnemar": discordances, "holm": adjustments,
        "friedman": rankings, "power": powers, "critical_differences": differences,
        "quantiles": { "values": values, "shares": shares,
            "found": read },
    })
}

#[test]
fn python_agrees() {
    let Some(python) = python() else {
        let text = "skipped: neither python3 nor /usr/bin/python3 can import scipy and statsmodels";
        let required = std::env::var("RANKASSAY_REQUIRE")
            .is_ok_and(|list| list.split([',', ' ']).any(|word| word == "python"));
        assert!(!required, "{text}, but RANKASSAY_REQUIRE asks for python");
        eprintln!("{text}");
        return;
    };
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("cases.json");
    std::fs::write(&file, serde_json::to_vec(&cases(2026)).unwrap()).unwrap();
    let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/reference/statistics.py");
    let output = Command::new(python).arg(script).arg(&file).output().unwrap();
    let text = String::from_utf8_lossy(&output.stdout).into_owned();
    assert!(output.status.success(), "{text}\n{}", String::from_utf8_lossy(&output.stderr));
    assert!(text.contains("values agree"), "{text}");
    eprintln!("{}", text.trim_end());
}
