//! Error-free transformations and compensated sums: results as if computed in twice the working precision and then rounded.
//!
//! Source: Ogita, Rump, Oishi, Accurate sum and dot product, SIAM J. Sci. Comput. 26:1955-1988 (2005). Sum2 and Dot2 satisfy
//! |result - exact| <= u |exact| + gamma_n^2 sum |terms|, with u = 2^-53 and gamma_n = n u / (1 - n u) (Propositions 4.5 and 5.5,
//! numbers from memory; [`Accumulator::error_bound`] derives its own bound). No fused operation is used, so results are the same on
//! every machine that rounds to nearest in IEEE double precision.
//!
//! Not exact for products beyond about 2^996 (the split overflows) and only up to a few least numbers in the subnormal range.

/// Unit roundoff 2^-53 of round-to-nearest double precision.
pub const UNIT_ROUNDOFF: f64 = f64::EPSILON / 2.0;

/// Splits the sum a + b exactly into its rounding s and the error e (Knuth), unless a + b overflows.
#[inline]
pub fn two_sum(a: f64, b: f64) -> (f64, f64) {
    let s = a + b;
    let virtual_b = s - a;
    let e = (a - (s - virtual_b)) + (b - virtual_b);
    (s, e)
}

/// Splits `a` exactly into two parts of at most 26 significant bits each (Veltkamp), for |a| below 2^996.
#[inline]
pub fn split(a: f64) -> (f64, f64) {
    // 2^27 + 1
    let c = 134_217_729.0 * a;
    let high = c - (c - a);
    (high, a - high)
}

/// Splits the product a b exactly into its rounding p and the error e (Dekker), for magnitudes without overflow or underflow.
#[inline]
pub fn two_product(a: f64, b: f64) -> (f64, f64) {
    let p = a * b;
    let (a_high, a_low) = split(a);
    let (b_high, b_low) = split(b);
    let e = a_low * b_low - (((p - a_high * b_high) - a_low * b_high) - a_high * b_low);
    (p, e)
}

/// Sums `x` as if in twice the working precision (algorithm Sum2).
pub fn sum2(x: &[f64]) -> f64 {
    let mut accumulator = Accumulator::new();
    x.iter().for_each(|&v| accumulator.add(v));
    accumulator.value()
}

/// Computes x'y as if in twice the working precision (algorithm Dot2). Panics when the lengths differ.
#[track_caller]
pub fn dot2(x: &[f64], y: &[f64]) -> f64 {
    assert_eq!(x.len(), y.len(), "dot2: vectors of different length");
    let mut sum = 0.0;
    let mut compensation = 0.0;
    for (&a, &b) in x.iter().zip(y) {
        let (p, product_error) = two_product(a, b);
        let (s, sum_error) = two_sum(sum, p);
        sum = s;
        compensation += sum_error + product_error;
    }
    sum + compensation
}

/// A running compensated sum of numbers and products that knows a bound of its own error.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Accumulator {
    sum: f64,
    compensation: f64,
    absolute: f64,
    terms: u64,
}

impl Accumulator {
    /// Creates an empty sum.
    pub fn new() -> Self {
        Self::default()
    }

    /// Adds `x`.
    #[inline]
    pub fn add(&mut self, x: f64) {
        let (s, e) = two_sum(self.sum, x);
        self.sum = s;
        self.compensation += e;
        self.absolute += x.abs();
        self.terms += 1;
    }

    /// Adds the product of `a` and `b`.
    #[inline]
    pub fn add_product(&mut self, a: f64, b: f64) {
        let (p, product_error) = two_product(a, b);
        let (s, sum_error) = two_sum(self.sum, p);
        self.sum = s;
        self.compensation += sum_error + product_error;
        self.absolute += p.abs();
        self.terms += 1;
    }

    /// Adds x'y. Panics when the lengths differ.
    #[track_caller]
    pub fn add_dot(&mut self, x: &[f64], y: &[f64]) {
        assert_eq!(x.len(), y.len(), "add_dot: vectors of different length");
        for (&a, &b) in x.iter().zip(y) {
            self.add_product(a, b);
        }
    }

    /// Returns the sum so far.
    pub fn value(&self) -> f64 {
        self.sum + self.compensation
    }

    /// Returns the plain sum of absolute values of the terms.
    pub fn absolute_sum(&self) -> f64 {
        self.absolute
    }

    /// Returns the number of terms, a product counting as one.
    pub fn terms(&self) -> u64 {
        self.terms
    }

    /// Returns a bound of |value - exact sum|: u |value| + gamma^2 sum |terms| (+ what underflow can add), gamma = N u / (1 - N u), N = 2 terms + 4.
    ///
    /// Every term sends at most two errors into the compensation: one of its addition, at most u times a partial sum, and one of
    /// its product, at most u times itself. Their absolute sum is at most gamma_n + u times the sum of the terms, and adding them
    /// up costs at most gamma_2n of that. Two more roundings in N cover the evaluation of the bound itself. Infinite when the sum
    /// is not finite.
    pub fn error_bound(&self) -> f64 {
        let scaled = (2 * self.terms + 4) as f64 * UNIT_ROUNDOFF;
        let gamma = scaled / (1.0 - scaled);
        // Twice 5 times the least subnormal number for each product (Ogita, Rump, Oishi, section 5, from memory).
        let underflow = self.terms as f64 * 10.0 * f64::from_bits(1);
        let bound = UNIT_ROUNDOFF * self.value().abs() + gamma * gamma * self.absolute + underflow;
        if bound.is_finite() { bound } else { f64::INFINITY }
    }
}
