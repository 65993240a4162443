//! The mean of differences between paired instances, with an interval.

use serde::Serialize;
use statrs::distribution::{ContinuousCDF, Normal};

use crate::stats::Interval;
use crate::stats::bootstrap::{Resampling, bca};

/// Resamples of the bootstrap.
const RESAMPLES: u32 = 2000;

/// Seed of the bootstrap: a report made twice is the same.
const SEED: u64 = 20_261_201;

/// Most instances that are drawn anew one by one; beyond, the normal interval tells the same and takes
/// linear time.
const MOST_DRAWN: usize = 2000;

/// How an interval of a mean was made.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Making {
    /// Bias-corrected and accelerated bootstrap, 2000 resamples.
    Bca,
    /// Normal, from the variances within the families; for more than 2000 instances.
    Normal,
}

impl Making {
    /// Returns the word for it.
    pub fn word(self) -> &'static str {
        match self {
            Making::Bca => "BCa",
            Making::Normal => "normal",
        }
    }
}

/// Returns the mean over all groups.
pub(super) fn mean(values: &[f64]) -> f64 {
    values.iter().sum::<f64>() / values.len() as f64
}

/// Returns the interval of the mean when instances are drawn anew within each group; none when no group
/// has two.
pub(super) fn within_groups(groups: &[Vec<f64>], confidence: f64) -> Option<(Interval, Making)> {
    let count: usize = groups.iter().map(Vec::len).sum();
    if count <= MOST_DRAWN {
        let ends = bca(groups, &mean, Resampling::WithinGroups, RESAMPLES, confidence, SEED)?;
        return Some((ends, Making::Bca));
    }
    // Var(mean) = sum over groups of (n_g / n)^2 s_g^2 / n_g.
    let variance: f64 = groups
        .iter()
        .filter(|group| group.len() > 1)
        .map(|group| {
            let (size, centre) = (group.len() as f64, mean(group));
            let squares: f64 = group.iter().map(|value| (value - centre).powi(2)).sum();
            size * squares / (size - 1.0)
        })
        .sum::<f64>()
        / (count as f64).powi(2);
    let centre = groups.iter().flatten().sum::<f64>() / count as f64;
    let reach = Normal::standard().inverse_cdf(0.5 * (1.0 + confidence)) * variance.sqrt();
    Some((Interval { low: centre - reach, high: centre + reach }, Making::Normal))
}

/// Returns the BCa interval of the mean when whole groups are drawn anew; none for fewer than two.
pub(super) fn over_groups(groups: &[Vec<f64>], confidence: f64) -> Option<Interval> {
    bca(groups, &mean, Resampling::Groups, RESAMPLES, confidence, SEED)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_normal_interval_continues_the_bootstrap() {
        let wave = |size: usize| -> Vec<Vec<f64>> {
            (0..4)
                .map(|group| {
                    (0..size / 4).map(|at| group as f64 + ((at * 37 % 101) as f64) / 50.0).collect()
                })
                .collect()
        };
        let (drawn, making) = within_groups(&wave(2000), 0.9).unwrap();
        assert_eq!(making, Making::Bca);
        let (normal, making) = within_groups(&wave(2004), 0.9).unwrap();
        assert_eq!(making, Making::Normal);
        let width = drawn.high - drawn.low;
        // The end of a bootstrap interval from 2000 resamples strays by about 4 % of the half-width.
        assert!((drawn.low - normal.low).abs() < 0.1 * width, "{drawn:?} {normal:?}");
        assert!((drawn.high - normal.high).abs() < 0.1 * width, "{drawn:?} {normal:?}");
    }
}
