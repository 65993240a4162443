//! Compensated sums against exact integer arithmetic.

use crate::linalg::compensated::*;
use crate::linalg::vector::fill_pseudo_random;
use num_bigint::BigInt;
use num_traits::{Signed, Zero};
use proptest::prelude::*;

/// Exponent of the fixed point in which every product of two doubles is an integer.
const POINT: i32 = 2 * 1074;

/// `x` * 2^POINT as an integer.
fn fixed(x: f64) -> BigInt {
    let bits = x.to_bits();
    let field = ((bits >> 52) & 0x7ff) as i32;
    let fraction = bits & ((1 << 52) - 1);
    let (mantissa, exponent) =
        if field == 0 { (fraction, -1074) } else { (fraction | 1 << 52, field - 1075) };
    let magnitude = BigInt::from(mantissa) << (exponent + POINT);
    if x.is_sign_negative() { -magnitude } else { magnitude }
}

/// x * y * 2^POINT as an integer.
fn fixed_product(x: f64, y: f64) -> BigInt {
    (fixed(x) * fixed(y)) >> POINT
}

fn exact_dot(x: &[f64], y: &[f64]) -> BigInt {
    x.iter().zip(y).map(|(&a, &b)| fixed_product(a, b)).sum()
}

/// The nearest double, to about one unit in the last place.
fn rounded(x: &BigInt) -> f64 {
    let bits = x.bits() as i64;
    let shift = (bits - 60).max(0);
    let top = i64::try_from(x >> shift).unwrap() as f64;
    let exponent = shift as i32 - POINT;
    top * 2f64.powi(exponent / 2) * 2f64.powi(exponent - exponent / 2)
}

/// Vectors whose products cancel to about 2^-`cancelled` of their size (after algorithm GenDot of Ogita, Rump, Oishi 2005).
fn ill_conditioned(n: usize, cancelled: i32, seed: u64) -> (Vec<f64>, Vec<f64>) {
    let mut noise = vec![0.0; 4 * n];
    fill_pseudo_random(seed, &mut noise);
    let half = n / 2;
    let (mut x, mut y) = (Vec::new(), Vec::new());
    let mut exact = BigInt::zero();
    for i in 0..n {
        let spread = if i < half {
            if i == 0 {
                cancelled / 2
            } else {
                (noise[2 * i].abs() * f64::from(cancelled) / 2.0) as i32
            }
        } else {
            cancelled / 2 * (n - 1 - i) as i32 / half.max(1) as i32
        };
        x.push((noise[2 * n + i] + 1.5) * 2f64.powi(spread));
        let raw = noise[3 * n + i] * 2f64.powi(spread);
        y.push(if i < half { raw } else { (raw - rounded(&exact)) / x[i] });
        exact += fixed_product(x[i], y[i]);
    }
    (x, y)
}

#[test]
fn dot2_meets_its_bound_where_a_plain_sum_is_worthless() {
    let mut plain_failed = 0;
    for n in [2, 3, 10, 100, 1000] {
        for cancelled in [0, 20, 50, 80, 100] {
            for seed in 0..5 {
                let (x, y) = ill_conditioned(n, cancelled, seed);
                let exact = exact_dot(&x, &y);
                let gamma = n as f64 * UNIT_ROUNDOFF / (1.0 - n as f64 * UNIT_ROUNDOFF);
                let absolute: f64 = x.iter().zip(&y).map(|(a, b)| (a * b).abs()).sum();
                // The factor covers the rounding of this bound itself.
                let bound = (UNIT_ROUNDOFF * rounded(&exact).abs() + gamma * gamma * absolute)
                    * (1.0 + 1e-9);
                let result = dot2(&x, &y);
                let error = rounded(&(fixed(result) - &exact)).abs();
                assert!(error <= bound, "n {n}, {cancelled} bits: error {error:e} above {bound:e}");
                let mut accumulator = Accumulator::new();
                accumulator.add_dot(&x, &y);
                assert_eq!(accumulator.value(), result);
                assert!(error <= accumulator.error_bound());
                assert_eq!(accumulator.terms(), n as u64);
                let plain: f64 = x.iter().zip(&y).map(|(a, b)| a * b).sum();
                plain_failed += usize::from(rounded(&(fixed(plain) - &exact)).abs() > bound);
            }
        }
    }
    assert!(
        plain_failed > 30,
        "the data are not ill-conditioned: plain sums failed {plain_failed} times only"
    );
}

#[test]
fn sum2_recovers_what_cancellation_hides() {
    // 1 is lost beside 1e100 in a plain sum.
    assert_eq!(sum2(&[1.0, 1e100, 1.0, -1e100]), 2.0);
    assert_eq!(sum2(&[]), 0.0);
    let mut x = vec![0.0; 4001];
    fill_pseudo_random(5, &mut x);
    for i in 0..2000 {
        x[4000 - i] = -x[i] * (1.0 + 1e-13);
    }
    let exact: BigInt = x.iter().map(|&v| fixed(v)).sum();
    let error = rounded(&(fixed(sum2(&x)) - &exact)).abs();
    let gamma = 4000.0 * UNIT_ROUNDOFF * (1.0 + 1e-9);
    let absolute: f64 = x.iter().map(|v| v.abs()).sum();
    assert!(
        error <= UNIT_ROUNDOFF * rounded(&exact).abs() * (1.0 + 1e-9) + gamma * gamma * absolute
    );
}

#[test]
fn the_error_bound_is_small_and_turns_infinite_when_it_must() {
    let (x, y) = ill_conditioned(1000, 50, 1);
    let mut accumulator = Accumulator::new();
    accumulator.add_dot(&x, &y);
    assert!(
        accumulator.error_bound()
            <= 1e-24 * accumulator.absolute_sum() + 1.2e-16 * accumulator.value().abs()
    );
    for value in [f64::NAN, f64::INFINITY, 1e308] {
        let mut broken = Accumulator::new();
        broken.add_product(value, value);
        assert_eq!(broken.error_bound(), f64::INFINITY);
    }
}

fn doubles() -> impl Strategy<Value = f64> {
    (-1.0..1.0f64, -200i32..200).prop_map(|(m, e)| m * 2f64.powi(e))
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn transformations_are_free_of_error(a in doubles(), b in doubles()) {
        let (s, e) = two_sum(a, b);
        prop_assert_eq!(s, a + b);
        prop_assert_eq!(fixed(s) + fixed(e), fixed(a) + fixed(b));
        let (p, e) = two_product(a, b);
        prop_assert_eq!(p, a * b);
        prop_assert!((fixed(p) + fixed(e) - fixed_product(a, b)).is_zero());
        let (high, low) = split(a);
        prop_assert_eq!(fixed(high) + fixed(low), fixed(a));
    }

    #[test]
    fn the_error_bound_holds_for_mixed_terms(terms in proptest::collection::vec((doubles(), doubles(), proptest::bool::ANY), 0..40)) {
        let mut accumulator = Accumulator::new();
        let mut exact = BigInt::zero();
        for (a, b, product) in terms {
            if product {
                accumulator.add_product(a, b);
                exact += fixed_product(a, b);
            } else {
                accumulator.add(a);
                exact += fixed(a);
            }
        }
        let error = (fixed(accumulator.value()) - exact).abs();
        prop_assert!(error <= fixed(accumulator.error_bound()));
    }
}
