//! Vector kernels that use the widest vector instructions of the machine they run on.
//!
//! The instruction set is chosen at run time (AVX-512, AVX2 with FMA, or plain code), so a result is the same from run to run on
//! one machine but may differ in its last bits between machines. Sums are plain sums with several accumulators; the error of a
//! dot product is at most gamma_n |x|'|y|. Use [`super::compensated`] where that is not enough.

use pulp::{Arch, Simd, WithSimd};

/// Length up to which the kernels run as plain inlined loops: choosing the instruction set would cost more than the work.
const SHORT: usize = 16;

struct Dot<'a> {
    x: &'a [f64],
    y: &'a [f64],
}

impl WithSimd for Dot<'_> {
    type Output = f64;

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) -> f64 {
        dot_kernel(simd, self.x, self.y)
    }
}

/// Sums `x[i] * y[i]` in four vector accumulators; both slices must have the same length.
#[inline(always)]
pub(super) fn dot_kernel<S: Simd>(simd: S, x: &[f64], y: &[f64]) -> f64 {
    let (x_vectors, x_tail) = S::as_simd_f64s(x);
    let (y_vectors, y_tail) = S::as_simd_f64s(y);
    let (x_fours, x_rest) = pulp::as_arrays::<4, _>(x_vectors);
    let (y_fours, y_rest) = pulp::as_arrays::<4, _>(y_vectors);
    let zero = simd.splat_f64s(0.0);
    let (mut s0, mut s1, mut s2, mut s3) = (zero, zero, zero, zero);
    for ([x0, x1, x2, x3], [y0, y1, y2, y3]) in x_fours.iter().zip(y_fours) {
        s0 = simd.mul_add_e_f64s(*x0, *y0, s0);
        s1 = simd.mul_add_e_f64s(*x1, *y1, s1);
        s2 = simd.mul_add_e_f64s(*x2, *y2, s2);
        s3 = simd.mul_add_e_f64s(*x3, *y3, s3);
    }
    for (x0, y0) in x_rest.iter().zip(y_rest) {
        s0 = simd.mul_add_e_f64s(*x0, *y0, s0);
    }
    if !x_tail.is_empty() {
        s1 =
            simd.mul_add_e_f64s(simd.partial_load_f64s(x_tail), simd.partial_load_f64s(y_tail), s1);
    }
    simd.reduce_sum_f64s(simd.add_f64s(simd.add_f64s(s0, s1), simd.add_f64s(s2, s3)))
}

struct Axpy<'a> {
    alpha: f64,
    x: &'a [f64],
    y: &'a mut [f64],
}

impl WithSimd for Axpy<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        axpy_kernel(simd, self.alpha, self.x, self.y);
    }
}

/// Adds `alpha * x` to `y`; both slices must have the same length.
#[inline(always)]
pub(super) fn axpy_kernel<S: Simd>(simd: S, alpha: f64, x: &[f64], y: &mut [f64]) {
    let (x_vectors, x_tail) = S::as_simd_f64s(x);
    let (y_vectors, y_tail) = S::as_mut_simd_f64s(y);
    let factor = simd.splat_f64s(alpha);
    for (x0, y0) in x_vectors.iter().zip(y_vectors) {
        *y0 = simd.mul_add_e_f64s(factor, *x0, *y0);
    }
    if !x_tail.is_empty() {
        let sum = simd.mul_add_e_f64s(
            factor,
            simd.partial_load_f64s(x_tail),
            simd.partial_load_f64s(y_tail),
        );
        simd.partial_store_f64s(y_tail, sum);
    }
}

/// Computes x'y. Panics when the lengths differ.
#[inline]
#[track_caller]
pub fn dot(x: &[f64], y: &[f64]) -> f64 {
    assert_eq!(x.len(), y.len(), "dot: vectors of different length");
    if x.len() <= SHORT {
        return x.iter().zip(y).map(|(a, b)| a * b).sum();
    }
    Arch::new().dispatch(Dot { x, y })
}

/// Adds `alpha * x` to `y`. Panics when the lengths differ.
#[inline]
#[track_caller]
pub fn axpy(alpha: f64, x: &[f64], y: &mut [f64]) {
    assert_eq!(x.len(), y.len(), "axpy: vectors of different length");
    if x.len() <= SHORT {
        for (b, a) in y.iter_mut().zip(x) {
            *b += alpha * a;
        }
        return;
    }
    Arch::new().dispatch(Axpy { alpha, x, y });
}

/// Replaces `y` by `alpha * x + beta * y`. Panics when the lengths differ.
#[inline]
#[track_caller]
pub fn axpby(alpha: f64, x: &[f64], beta: f64, y: &mut [f64]) {
    assert_eq!(x.len(), y.len(), "axpby: vectors of different length");
    dispatch_elementwise(x.len(), || {
        for (b, a) in y.iter_mut().zip(x) {
            *b = alpha * a + beta * *b;
        }
    });
}

/// Multiplies `x` by `alpha`.
#[inline]
pub fn scale(alpha: f64, x: &mut [f64]) {
    dispatch_elementwise(x.len(), || {
        for a in x.iter_mut() {
            *a *= alpha;
        }
    });
}

/// Writes `a - b` into `out`. Panics when the lengths differ.
#[inline]
#[track_caller]
pub fn sub_into(a: &[f64], b: &[f64], out: &mut [f64]) {
    assert!(a.len() == b.len() && a.len() == out.len(), "sub_into: vectors of different length");
    dispatch_elementwise(a.len(), || {
        for ((o, x), y) in out.iter_mut().zip(a).zip(b) {
            *o = x - y;
        }
    });
}

/// Writes `a + b` into `out`. Panics when the lengths differ.
#[inline]
#[track_caller]
pub fn add_into(a: &[f64], b: &[f64], out: &mut [f64]) {
    assert!(a.len() == b.len() && a.len() == out.len(), "add_into: vectors of different length");
    dispatch_elementwise(a.len(), || {
        for ((o, x), y) in out.iter_mut().zip(a).zip(b) {
            *o = x + y;
        }
    });
}

/// Writes the elementwise product of `a` and `b` into `out`. Panics when the lengths differ.
#[inline]
#[track_caller]
pub fn multiply_into(a: &[f64], b: &[f64], out: &mut [f64]) {
    assert!(
        a.len() == b.len() && a.len() == out.len(),
        "multiply_into: vectors of different length"
    );
    dispatch_elementwise(a.len(), || {
        for ((o, x), y) in out.iter_mut().zip(a).zip(b) {
            *o = x * y;
        }
    });
}

/// Computes the Euclidean norm of `x`, without overflow or harmful underflow; a NaN or an infinity in `x` gives a result that is not finite.
#[inline]
pub fn norm2(x: &[f64]) -> f64 {
    let squared = dot(x, x);
    // Between these limits neither overflow nor the loss of squares below the least normal number can matter.
    if (1e-280..=f64::MAX).contains(&squared) || squared.is_nan() {
        return squared.sqrt();
    }
    scaled_norm(x)
}

#[cold]
fn scaled_norm(x: &[f64]) -> f64 {
    let largest = norm_max(x);
    if largest == 0.0 || !largest.is_finite() {
        return largest;
    }
    // A power of two scales without rounding, in two steps because its reciprocal may overflow.
    let half = 2f64.powi(-(largest.log2() as i32) / 2);
    let sum: f64 = x.iter().map(|a| (a * half * half).powi(2)).sum();
    sum.sqrt() / half / half
}

/// Computes the sum of squares of `x`, which may overflow or underflow.
#[inline]
pub fn norm2_squared(x: &[f64]) -> f64 {
    dot(x, x)
}

/// Computes the Euclidean norm of `a - b` (which may overflow beyond 1e154). Panics when the lengths differ.
#[inline]
#[track_caller]
pub fn distance(a: &[f64], b: &[f64]) -> f64 {
    assert_eq!(a.len(), b.len(), "distance: vectors of different length");
    let mut sums = [0.0f64; 8];
    dispatch_elementwise(a.len(), || {
        let (a_eights, a_rest) = a.as_chunks::<8>();
        let (b_eights, b_rest) = b.as_chunks::<8>();
        for (x, y) in a_eights.iter().zip(b_eights) {
            for lane in 0..8 {
                let d = x[lane] - y[lane];
                sums[lane] += d * d;
            }
        }
        for (x, y) in a_rest.iter().zip(b_rest) {
            sums[0] += (x - y) * (x - y);
        }
    });
    sums.iter().sum::<f64>().sqrt()
}

/// Computes the largest absolute entry of `x` (0 for an empty vector); a NaN in `x` gives NaN.
#[inline]
pub fn norm_max(x: &[f64]) -> f64 {
    let mut largest = [0.0f64; 8];
    let mut poison = [0.0f64; 8];
    dispatch_elementwise(x.len(), || {
        let (eights, rest) = x.as_chunks::<8>();
        for chunk in eights {
            for lane in 0..8 {
                let a = chunk[lane].abs();
                largest[lane] = if a > largest[lane] { a } else { largest[lane] };
                // NaN is lost by the comparison; this stays 0 unless a NaN comes by.
                poison[lane] = if chunk[lane].is_nan() { f64::NAN } else { poison[lane] };
            }
        }
        for a in rest {
            largest[0] = if a.abs() > largest[0] { a.abs() } else { largest[0] };
            poison[0] = if a.is_nan() { f64::NAN } else { poison[0] };
        }
    });
    largest.iter().fold(0.0, |m: f64, a| m.max(*a)) + poison.iter().sum::<f64>()
}

/// Computes the sum of absolute entries of `x`.
#[inline]
pub fn norm1(x: &[f64]) -> f64 {
    let mut sums = [0.0f64; 8];
    dispatch_elementwise(x.len(), || {
        let (eights, rest) = x.as_chunks::<8>();
        for chunk in eights {
            for lane in 0..8 {
                sums[lane] += chunk[lane].abs();
            }
        }
        for a in rest {
            sums[0] += a.abs();
        }
    });
    sums.iter().sum()
}

/// Computes the sum of the entries of `x`.
#[inline]
pub fn sum(x: &[f64]) -> f64 {
    let mut sums = [0.0f64; 8];
    dispatch_elementwise(x.len(), || {
        let (eights, rest) = x.as_chunks::<8>();
        for chunk in eights {
            for lane in 0..8 {
                sums[lane] += chunk[lane];
            }
        }
        for a in rest {
            sums[0] += a;
        }
    });
    sums.iter().sum()
}

/// Divides `x` by its Euclidean norm and returns that norm; a vector whose norm is zero or not finite is left as it is.
pub fn normalise(x: &mut [f64]) -> f64 {
    let norm = norm2(x);
    if norm > 0.0 && norm.is_finite() {
        let inverse = norm.recip();
        if inverse.is_finite() {
            scale(inverse, x);
        } else {
            x.iter_mut().for_each(|a| *a /= norm);
        }
    }
    norm
}

/// Fills `x` with values in [-1, 1) that depend on `seed` and the position only (SplitMix64; Steele, Lea, Flood, OOPSLA 2014).
///
/// Meant for start vectors of iterations, not for planting instances.
pub fn fill_pseudo_random(seed: u64, x: &mut [f64]) {
    let mut state = seed;
    for a in x {
        state = state.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = state;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        z ^= z >> 31;
        *a = (z >> 11) as f64 * 2f64.powi(-52) - 1.0;
    }
}

/// Runs `work` compiled for the widest instruction set at hand, or inline when `length` is short.
#[inline(always)]
fn dispatch_elementwise(length: usize, work: impl FnOnce()) {
    if length <= SHORT {
        work();
    } else {
        Arch::new().dispatch(work);
    }
}
