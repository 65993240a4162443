//! Correction for several tests at once.

/// Adjusts p-values for multiple tests by Holm's step-down rule and returns them in the given order.
///
/// With the p-values sorted, the i-th adjusted one is max over j <= i of min(1, (m-j+1) p_(j)); rejecting
/// adjusted values <= alpha keeps the chance of any false rejection at most alpha under every dependence. An
/// empty slice gives an empty list.
///
/// Source: S. Holm, Scandinavian Journal of Statistics 6:65-70, 1979 (pages from memory).
///
/// # Panics
/// When a value is NaN or outside [0, 1].
#[track_caller]
pub fn holm(p: &[f64]) -> Vec<f64> {
    for (place, &value) in p.iter().enumerate() {
        assert!(
            (0.0..=1.0).contains(&value),
            "the p-value {value} at index {place} is not in [0, 1]"
        );
    }
    let mut order: Vec<usize> = (0..p.len()).collect();
    order.sort_by(|&a, &b| p[a].total_cmp(&p[b]));
    let mut adjusted = vec![0.0; p.len()];
    let mut largest: f64 = 0.0;
    for (done, &place) in order.iter().enumerate() {
        largest = largest.max(((p.len() - done) as f64 * p[place]).min(1.0));
        adjusted[place] = largest;
    }
    adjusted
}
