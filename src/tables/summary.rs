//! The few numbers that sum up a sample.

/// Returns the median; a value that is missing counts as infinite, so that failures cannot improve
/// it. None for an empty sample or when the median is infinite.
pub(super) fn median(values: impl IntoIterator<Item = Option<f64>>) -> Option<f64> {
    let mut sorted: Vec<f64> =
        values.into_iter().map(|value| value.unwrap_or(f64::INFINITY)).collect();
    if sorted.is_empty() {
        return None;
    }
    sorted.sort_by(f64::total_cmp);
    let half = sorted.len() / 2;
    let value =
        if sorted.len() % 2 == 1 { sorted[half] } else { (sorted[half - 1] + sorted[half]) / 2.0 };
    value.is_finite().then_some(value)
}

/// Returns the median of those values that are there.
pub(super) fn median_measured(values: impl IntoIterator<Item = Option<f64>>) -> Option<f64> {
    median(values.into_iter().flatten().map(Some))
}

/// Returns the largest of those values that are there.
pub(super) fn largest(values: impl IntoIterator<Item = Option<f64>>) -> Option<f64> {
    values.into_iter().flatten().reduce(f64::max)
}

/// Returns the least of those values that are there.
pub(super) fn least(values: impl IntoIterator<Item = Option<f64>>) -> Option<f64> {
    values.into_iter().flatten().reduce(f64::min)
}

/// Returns the shifted geometric mean `exp(mean(ln(t + shift))) - shift`.
pub(super) fn shifted_geometric_mean(values: &[f64], shift: f64) -> Option<f64> {
    if values.is_empty() {
        return None;
    }
    let mean = values.iter().map(|value| (value + shift).ln()).sum::<f64>() / values.len() as f64;
    Some(mean.exp() - shift)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn medians_count_what_is_missing_as_infinite() {
        assert_eq!(median([Some(3.0), Some(1.0), Some(2.0)]), Some(2.0));
        assert_eq!(median([Some(1.0), Some(2.0), Some(3.0), None]), Some(2.5));
        assert_eq!(median([Some(1.0), None]), None);
        assert_eq!(median([]), None);
        assert_eq!(median_measured([Some(1.0), None]), Some(1.0));
    }

    #[test]
    fn shifted_geometric_mean_of_equal_values_is_the_value() {
        let mean = shifted_geometric_mean(&[7.0, 7.0, 7.0], 1.0).unwrap();
        assert!((mean - 7.0).abs() < 1e-12);
        // (1 + 1)(7 + 1) = 16, whose root is 4.
        let mean = shifted_geometric_mean(&[1.0, 7.0], 1.0).unwrap();
        assert!((mean - 3.0).abs() < 1e-12);
    }
}
