//! Arithmetic modulo the prime 2^61 - 1.

/// The prime 2^61 - 1.
pub const PRIME: u64 = (1 << 61) - 1;

/// Returns `a + b` modulo [`PRIME`]; both operands lie below it.
#[inline]
pub fn add(a: u64, b: u64) -> u64 {
    let sum = a + b;
    if sum >= PRIME { sum - PRIME } else { sum }
}

/// Returns `a - b` modulo [`PRIME`]; both operands lie below it.
#[inline]
pub fn subtract(a: u64, b: u64) -> u64 {
    if a >= b { a - b } else { a + PRIME - b }
}

/// Returns `a * b` modulo [`PRIME`]; both operands lie below it.
#[inline]
pub fn multiply(a: u64, b: u64) -> u64 {
    let product = u128::from(a) * u128::from(b);
    // 2^61 = 1 modulo the prime, so the high bits are added to the low ones.
    let folded = (product as u64 & PRIME) + (product >> 61) as u64;
    if folded >= PRIME { folded - PRIME } else { folded }
}

/// Returns the inverse of `a` modulo [`PRIME`]. Panics when `a` is zero.
#[track_caller]
pub fn inverse(a: u64) -> u64 {
    assert!(a != 0, "zero has no inverse");
    if a == 1 || a == PRIME - 1 {
        return a;
    }
    // a^(p-2): the exponent 2^61 - 3 has all bits set but the second.
    let mut power = 1u64;
    let mut square = a;
    let mut exponent = PRIME - 2;
    while exponent > 0 {
        if exponent & 1 == 1 {
            power = multiply(power, square);
        }
        square = multiply(square, square);
        exponent >>= 1;
    }
    power
}

/// Returns a machine integer modulo [`PRIME`].
#[inline]
pub fn residue(value: i64) -> u64 {
    let magnitude = value.unsigned_abs() % PRIME;
    if value < 0 { subtract(0, magnitude) } else { magnitude }
}

/// Returns a float that is a whole number modulo [`PRIME`]; `None` when it is no whole number.
pub fn residue_of_f64(value: f64) -> Option<u64> {
    if !value.is_finite() || value.fract() != 0.0 {
        return None;
    }
    if value.abs() < 9_007_199_254_740_992.0 {
        return Some(residue(value as i64));
    }
    // At 2^53 and above a float is mantissa * 2^exponent with a whole mantissa and exponent >= 0;
    // 2^61 = 1 modulo the prime reduces the exponent.
    let bits = value.to_bits();
    let exponent = ((bits >> 52) & 0x7ff) - 1075;
    let mantissa = (bits & ((1 << 52) - 1)) | (1 << 52);
    let magnitude = multiply(mantissa, (1u64 << (exponent % 61)) % PRIME);
    Some(if value < 0.0 { subtract(0, magnitude) } else { magnitude })
}

#[cfg(test)]
mod tests {
    use super::*;
    use num_bigint::BigInt;
    use num_traits::{FromPrimitive, ToPrimitive};
    use proptest::prelude::*;

    fn modulo(value: BigInt) -> u64 {
        let prime = BigInt::from(PRIME);
        (((value % &prime) + &prime) % &prime).to_u64().unwrap()
    }

    proptest! {
        #[test]
        fn arithmetic_agrees_with_big_integers(a in any::<i64>(), b in any::<i64>()) {
            let (ra, rb) = (residue(a), residue(b));
            prop_assert_eq!(ra, modulo(BigInt::from(a)));
            prop_assert_eq!(add(ra, rb), modulo(BigInt::from(a) + b));
            prop_assert_eq!(subtract(ra, rb), modulo(BigInt::from(a) - b));
            prop_assert_eq!(multiply(ra, rb), modulo(BigInt::from(a) * b));
            if ra != 0 {
                prop_assert_eq!(multiply(ra, inverse(ra)), 1);
            }
        }

        #[test]
        fn large_floats_agree_with_big_integers(mantissa in any::<i64>(), exponent in 0i32..900) {
            let value = (mantissa as f64) * 2f64.powi(exponent);
            prop_assert_eq!(residue_of_f64(value), Some(modulo(BigInt::from_f64(value).unwrap())));
        }
    }

    #[test]
    fn the_extreme_residues_multiply_to_one() {
        assert_eq!(multiply(PRIME - 1, PRIME - 1), 1);
        assert_eq!(residue(i64::MIN), modulo(BigInt::from(i64::MIN)));
        assert_eq!(residue_of_f64(0.25), None);
    }
}
