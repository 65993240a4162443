//! Integer helpers for exact planting: conversion between `f64` and whole numbers, whole-number
//! arithmetic that reports overflow, and ranks modulo a prime.
//!
//! This module is for proofs, not for speed: nothing here rounds. It does not know problems or
//! certificates.

mod definite;
mod modular;
mod rank;

use num_bigint::BigInt;
use num_traits::{FromPrimitive, ToPrimitive, Zero};

pub use definite::is_positive_semidefinite;
pub use modular::{PRIME, add, inverse, multiply, residue, residue_of_f64, subtract};
pub use rank::{Echelon, ResidueColumns};

/// Says that an `i128` computation left its range; the caller repeats it in big integers.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error("a whole number left the range of 128 bits")]
pub struct Overflow;

/// Whole numbers in which identities are evaluated: `i128` with every overflow reported, or
/// big integers.
pub trait Whole: Clone + PartialEq + PartialOrd + std::fmt::Display {
    /// Converts a machine integer.
    fn of(value: i64) -> Self;

    /// Converts a float that is a whole number; `None` when it is not one.
    ///
    /// # Errors
    /// [`Overflow`] when the number does not fit this type.
    fn of_f64(value: f64) -> Result<Option<Self>, Overflow>;

    /// Returns `self * other`.
    ///
    /// # Errors
    /// [`Overflow`] when the product does not fit this type.
    fn times(&self, other: &Self) -> Result<Self, Overflow>;

    /// Adds `other` to `self`.
    ///
    /// # Errors
    /// [`Overflow`] when the sum does not fit this type.
    fn increase(&mut self, other: &Self) -> Result<(), Overflow>;

    /// Returns whether this is zero.
    fn is_nought(&self) -> bool;

    /// Returns the number as `i128` when it fits.
    fn narrow(&self) -> Option<i128>;
}

impl Whole for i128 {
    #[inline]
    fn of(value: i64) -> Self {
        i128::from(value)
    }

    fn of_f64(value: f64) -> Result<Option<Self>, Overflow> {
        if !value.is_finite() || value.fract() != 0.0 {
            return Ok(None);
        }
        i128_of_f64(value).map(Some).ok_or(Overflow)
    }

    #[inline]
    fn times(&self, other: &Self) -> Result<Self, Overflow> {
        if let (Ok(a), Ok(b)) = (i64::try_from(*self), i64::try_from(*other)) {
            // Two 64-bit numbers always fit: the common case needs no overflow test.
            return Ok(i128::from(a) * i128::from(b));
        }
        self.checked_mul(*other).ok_or(Overflow)
    }

    #[inline]
    fn increase(&mut self, other: &Self) -> Result<(), Overflow> {
        *self = self.checked_add(*other).ok_or(Overflow)?;
        Ok(())
    }

    #[inline]
    fn is_nought(&self) -> bool {
        *self == 0
    }

    fn narrow(&self) -> Option<i128> {
        Some(*self)
    }
}

impl Whole for BigInt {
    fn of(value: i64) -> Self {
        BigInt::from(value)
    }

    fn of_f64(value: f64) -> Result<Option<Self>, Overflow> {
        if !value.is_finite() || value.fract() != 0.0 {
            return Ok(None);
        }
        Ok(BigInt::from_f64(value))
    }

    fn times(&self, other: &Self) -> Result<Self, Overflow> {
        Ok(self * other)
    }

    fn increase(&mut self, other: &Self) -> Result<(), Overflow> {
        *self += other;
        Ok(())
    }

    fn is_nought(&self) -> bool {
        self.is_zero()
    }

    fn narrow(&self) -> Option<i128> {
        self.to_i128()
    }
}

/// Converts a float to the whole number it is; `None` when it is no whole number or its modulus
/// is 2^127 or more.
pub fn i128_of_f64(value: f64) -> Option<i128> {
    const LIMIT: f64 = 170_141_183_460_469_231_731_687_303_715_884_105_728.0;
    if value.is_finite() && value.fract() == 0.0 && value.abs() < LIMIT {
        Some(value as i128)
    } else {
        None
    }
}

/// Converts a whole number to the float that equals it; `None` when no float does.
pub fn f64_of_i128(value: i128) -> Option<f64> {
    let float = value as f64;
    (i128_of_f64(float) == Some(value)).then_some(float)
}

/// Returns `sum_i left_i * right_i`.
///
/// # Errors
/// [`Overflow`] when a product or a partial sum leaves 128 bits.
#[track_caller]
pub fn checked_dot(left: &[i128], right: &[i128]) -> Result<i128, Overflow> {
    assert_eq!(left.len(), right.len(), "the operands of a dot product differ in length");
    let mut sum = 0i128;
    for (a, b) in left.iter().zip(right) {
        sum.increase(&a.times(b)?)?;
    }
    Ok(sum)
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn floats_that_are_no_whole_numbers_are_refused() {
        for value in [0.5, f64::NAN, f64::INFINITY, -1e-300, 2f64.powi(127)] {
            assert_eq!(i128_of_f64(value), None, "{value}");
        }
        assert_eq!(i128_of_f64(-(2f64.powi(126))), Some(-(1i128 << 126)));
        assert_eq!(<i128 as Whole>::of_f64(2f64.powi(127)), Err(Overflow));
        assert_eq!(<BigInt as Whole>::of_f64(0.5), Ok(None));
    }

    #[test]
    fn whole_numbers_without_a_float_are_refused() {
        assert_eq!(f64_of_i128((1 << 53) + 1), None);
        assert_eq!(f64_of_i128(-(1 << 53)), Some(-9_007_199_254_740_992.0));
        assert_eq!(f64_of_i128(i128::MAX), None);
    }

    proptest! {
        #[test]
        fn conversion_agrees_with_big_integers(mantissa in any::<i64>(), exponent in 0i32..60) {
            let value = (mantissa as f64) * 2f64.powi(exponent);
            let big = BigInt::from_f64(value).unwrap();
            prop_assert_eq!(BigInt::from(i128_of_f64(value).unwrap()), big.clone());
            prop_assert_eq!(<BigInt as Whole>::of_f64(value).unwrap(), Some(big));
            prop_assert_eq!(f64_of_i128(i128_of_f64(value).unwrap()), Some(value));
        }

        #[test]
        fn dot_products_agree_with_big_integers_or_report_overflow(
            pairs in proptest::collection::vec((any::<i128>(), any::<i64>(), 0u32..127), 1..6)
        ) {
            let left: Vec<i128> = pairs.iter().map(|(a, _, shift)| a >> shift).collect();
            let right: Vec<i128> = pairs.iter().map(|(_, b, _)| i128::from(*b)).collect();
            let mut big = BigInt::of(0);
            let mut fits = true;
            for (a, b) in left.iter().zip(&right) {
                let product = BigInt::from(*a) * BigInt::from(*b);
                fits &= product.narrow().is_some();
                big += product;
                fits &= big.narrow().is_some();
            }
            match checked_dot(&left, &right) {
                Ok(value) => {
                    prop_assert!(fits);
                    prop_assert_eq!(BigInt::from(value), big);
                }
                Err(Overflow) => prop_assert!(!fits),
            }
        }
    }
}
