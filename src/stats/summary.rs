//! One number for many: medians, quantiles and means that suit costs over several orders of magnitude.
//!
//! Infinite values are allowed (a failure counted as infinite cost); NaN is a mistake of the caller and panics.

use super::special::check_numbers;

/// Interpolates between `low` and `high` at `weight` in [0, 1] without making NaN of infinities.
pub(super) fn between(low: f64, high: f64, weight: f64) -> f64 {
    if low == high || weight <= 0.0 {
        return low;
    }
    if weight >= 1.0 {
        return high;
    }
    if low == f64::NEG_INFINITY && high == f64::INFINITY {
        return 0.0;
    }
    (1.0 - weight) * low + weight * high
}

/// Computes the median: the middle value, or the mean of the two middle ones; `None` for no values.
///
/// # Panics
/// When a value is NaN.
#[track_caller]
pub fn median(values: &[f64]) -> Option<f64> {
    quantile(values, 0.5)
}

/// Computes the quantile at `share` by linear interpolation between the values at the places (n-1) share;
/// `None` for no values.
///
/// This is the common default of statistical software (type 7 of R. Hyndman, Y. Fan, The American Statistician
/// 50:361-365, 1996, from memory). Between a finite and an infinite value it is infinite.
///
/// # Panics
/// When a value is NaN or `share` is not in [0, 1].
#[track_caller]
pub fn quantile(values: &[f64], share: f64) -> Option<f64> {
    assert!((0.0..=1.0).contains(&share), "the share {share} is not in [0, 1]");
    check_numbers(values, "value");
    let mut sorted = values.to_vec();
    sorted.sort_by(f64::total_cmp);
    let last = sorted.len().checked_sub(1)?;
    let place = last as f64 * share;
    let below = place.floor() as usize;
    let above = (below + 1).min(last);
    Some(between(sorted[below], sorted[above], place - place.floor()))
}

/// Computes the shifted geometric mean exp(mean of ln(t + shift)) - shift; `None` for no values.
///
/// A value equal to -`shift` makes the mean -`shift`, unless a value is infinite: an infinite value always
/// makes it infinite.
///
/// # Panics
/// When a value is NaN, a value plus `shift` is negative, or `shift` is negative or not finite.
#[track_caller]
pub fn shifted_geometric_mean(values: &[f64], shift: f64) -> Option<f64> {
    assert!(shift >= 0.0 && shift.is_finite(), "the shift {shift} is not a number >= 0");
    check_numbers(values, "value");
    if values.is_empty() {
        return None;
    }
    if values.contains(&f64::INFINITY) {
        return Some(f64::INFINITY);
    }
    let mut sum = 0.0;
    for (place, &value) in values.iter().enumerate() {
        assert!(
            value + shift >= 0.0,
            "the value {value} at index {place} plus {shift} is negative"
        );
        sum += (value + shift).ln();
    }
    Some((sum / values.len() as f64).exp() - shift)
}

/// Computes the penalised mean (PAR-k, k = `factor`): the arithmetic mean of the costs, a failure (`None`) counting
/// `factor * limit`; `None` for no costs.
///
/// # Panics
/// When a cost is NaN or `factor` or `limit` is negative or not finite.
#[track_caller]
pub fn penalised_mean(costs: &[Option<f64>], limit: f64, factor: f64) -> Option<f64> {
    assert!(limit >= 0.0 && limit.is_finite(), "the limit {limit} is not a number >= 0");
    assert!(factor >= 0.0 && factor.is_finite(), "the factor {factor} is not a number >= 0");
    if costs.is_empty() {
        return None;
    }
    let counted: Vec<f64> = costs.iter().map(|cost| cost.unwrap_or(factor * limit)).collect();
    check_numbers(&counted, "cost");
    Some(counted.iter().sum::<f64>() / counted.len() as f64)
}
