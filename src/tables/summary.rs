//! The few numbers that sum up a sample some of whose values are missing.

pub(super) use crate::stats::summary::shifted_geometric_mean;

/// Returns the median; a value that is missing counts as infinite, so that failures cannot improve
/// it. None for an empty sample or when the median is infinite.
pub(super) fn median(values: impl IntoIterator<Item = Option<f64>>) -> Option<f64> {
    let counted: Vec<f64> =
        values.into_iter().map(|value| value.unwrap_or(f64::INFINITY)).collect();
    crate::stats::summary::median(&counted).filter(|median| median.is_finite())
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
}
