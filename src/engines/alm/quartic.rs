//! The exact line search: the least value of a quartic on the positive half-line.

/// Returns the step a > 0 at which `q1 a + q2 a^2 + q3 a^3 + q4 a^4` is least among its stationary
/// points, or none when it has none there (the derivative does not rise to zero) or is not finite.
///
/// `q = [q1, q2, q3, q4]`, q1 < 0. The derivative is split at its own stationary points into monotone pieces
/// and each sign change is refined by Newton steps kept inside the bracket, to a relative width of 2^-50.
pub fn least_step(q: [f64; 4]) -> Option<f64> {
    let slope = [q[0], 2.0 * q[1], 3.0 * q[2], 4.0 * q[3]];
    if slope[0] >= 0.0 || q.iter().any(|c| !c.is_finite()) {
        return None;
    }
    let value = |a: f64| a * (q[0] + a * (q[1] + a * (q[2] + a * q[3])));
    let mut best: Option<f64> = None;
    let mut left = 0.0;
    let turns = turning_points(slope);
    for right in turns.into_iter().flatten().chain(std::iter::once(f64::INFINITY)) {
        if let Some(root) = root_between(slope, left, right)
            && best.is_none_or(|a| value(root) < value(a))
        {
            best = Some(root);
        }
        left = right;
    }
    best
}

fn cubic(c: [f64; 4], a: f64) -> f64 {
    c[0] + a * (c[1] + a * (c[2] + a * c[3]))
}

/// Returns the positive stationary points of the cubic, ascending.
fn turning_points(c: [f64; 4]) -> [Option<f64>; 2] {
    let (p, half, r) = (3.0 * c[3], c[2], c[1]);
    let discriminant = half * half - p * r;
    if discriminant < 0.0 || discriminant.is_nan() {
        return [None, None];
    }
    // p a^2 + 2 half a + r = 0 without cancellation.
    let t = -(half + discriminant.sqrt().copysign(half));
    let roots = [t / p, r / t].map(|a| (a > 0.0 && a.is_finite()).then_some(a));
    match roots {
        [Some(a), Some(b)] if a > b => [Some(b), Some(a)],
        other => other,
    }
}

/// Finds where the cubic rises through zero between `left` (where it is taken as it is) and `right`; it is
/// monotone there.
fn root_between(c: [f64; 4], left: f64, right: f64) -> Option<f64> {
    let (mut low, mut high) = (left, right);
    let start = cubic(c, low);
    if start >= 0.0 || start.is_nan() {
        return None;
    }
    if high.is_infinite() {
        high = if low > 0.0 { 2.0 * low } else { 1.0 };
        while cubic(c, high) < 0.0 || cubic(c, high).is_nan() {
            low = high;
            high *= 4.0;
            if high > 1e100 {
                return None;
            }
        }
    } else if cubic(c, high) < 0.0 || cubic(c, high).is_nan() {
        return None;
    }
    let mut a = 0.5 * (low + high);
    for _ in 0..200 {
        let g = cubic(c, a);
        if g < 0.0 {
            low = a;
        } else {
            high = a;
        }
        if high - low <= high * f64::EPSILON * 4.0 {
            break;
        }
        let bend = c[1] + a * (2.0 * c[2] + a * 3.0 * c[3]);
        let newton = a - g / bend;
        let inside = newton > low && newton < high;
        let next = if inside { newton } else { 0.5 * (low + high) };
        if next == a {
            break;
        }
        a = next;
    }
    (a > 0.0).then_some(a)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_step_of_a_double_well_is_the_deeper_one() {
        // q' = (a - 1)(a - 2)(a - 4) = a^3 - 7 a^2 + 14 a - 8; wells at 1 and 4, q(4) < q(1).
        let step = least_step([-8.0, 7.0, -7.0 / 3.0, 0.25]).unwrap();
        assert!((step - 4.0).abs() < 1e-12, "{step}");
        // q' = (a - 1)(a - 3)(a - 3.5): now the first well is deeper.
        let (s1, s2, s3) = (7.5, 17.0, 10.5);
        let step = least_step([-s3, s2 / 2.0, -s1 / 3.0, 0.25]).unwrap();
        assert!((step - 1.0).abs() < 1e-12, "{step}");
    }

    #[test]
    fn lower_degrees_and_hopeless_rays_are_seen() {
        assert!((least_step([-2.0, 0.5, 0.0, 0.0]).unwrap() - 2.0).abs() < 1e-14);
        assert_eq!(least_step([-2.0, -0.5, 0.0, 0.0]), None);
        assert_eq!(least_step([1.0, 1.0, 0.0, 1.0]), None);
        assert_eq!(least_step([-1.0, f64::NAN, 0.0, 1.0]), None);
        let step = least_step([-4e-12, 0.0, 0.0, 1e-12]).unwrap();
        assert!((step - 1.0).abs() < 1e-12, "{step}");
    }

    #[test]
    fn the_slope_vanishes_at_the_step_for_pseudo_random_quartics() {
        let mut state = 17u64;
        let mut draw = || {
            state = state.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
            ((state >> 33) as f64 / (1u64 << 31) as f64 - 0.5) * 10f64.powi((state % 13) as i32 - 6)
        };
        for _ in 0..2000 {
            let q = [-draw().abs(), draw(), draw(), draw().abs()];
            let Some(a) = least_step(q) else { continue };
            let terms = [q[0], 2.0 * q[1] * a, 3.0 * q[2] * a * a, 4.0 * q[3] * a * a * a];
            let size = terms.iter().fold(0.0_f64, |m, t| m.max(t.abs()));
            let slope: f64 = terms.iter().sum();
            assert!(slope.abs() < 1e-13 * size, "{q:?} at {a}: slope {slope}");
            // No stationary point beyond a grid of the half-line is lower.
            let value = |a: f64| a * (q[0] + a * (q[1] + a * (q[2] + a * q[3])));
            for k in -60..60 {
                let other = a * 1.2f64.powi(k);
                assert!(
                    value(a) <= value(other) + 1e-12 * value(a).abs(),
                    "{q:?}: {a} and {other}"
                );
            }
        }
    }
}
