//! Bootstrap intervals of any statistic over instances, drawn within families or by whole families.
//!
//! The unit of analysis is the instance: repeats of one instance must be averaged by the caller first.

use super::Interval;
use super::special::{check_confidence, check_numbers, normal_cdf, normal_quantile};
use super::summary::between;
use rand_chacha::ChaCha20Rng;
use rand_chacha::rand_core::{Rng, SeedableRng};

/// Least number of resamples.
pub const LEAST_RESAMPLES: u32 = 2000;

/// What is drawn anew.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Resampling {
    /// Instances, within each group: the groups and their sizes are fixed.
    WithinGroups,
    /// Whole groups: conclusions reach beyond the families at hand, but need many of them.
    Groups,
}

/// Computes the bias-corrected and accelerated bootstrap interval of `statistic` over the pooled values of `groups`.
///
/// With t the observed statistic and B resamples, z0 is the normal quantile of (#{t* < t} + #{t* = t}/2)/B (cut
/// to [1/2B, 1 - 1/2B]), a = sum l^3 / (6 (sum l^2)^(3/2)) with l = m - t_(i) the jackknife deviations from
/// their mean m, and each end is the quantile of the sorted t* at Phi(z0 + (z0 + z_q)/(1 - a (z0 + z_q))),
/// interpolated between the places (B+1) q. The jackknife leaves out the units that are drawn anew: instances
/// (deviations from the mean of their own group, times (n_g - 1)/n_g; a single group gives the formula above)
/// or groups. A resample presents its values in their given order, so that equal resamples give equal
/// statistics to the last bit. `statistic` never sees an empty slice.
///
/// `None` when no more than one non-empty group (`Groups`) or no group of at least two instances
/// (`WithinGroups`) is there, when the statistic of the sample or of a jackknife sample is not finite, or when
/// a resample gives NaN. When all resamples agree, as for a constant sample, the interval is that one point.
///
/// Source: B. Efron, JASA 82:171-185, 1987; deviations within groups: A. Davison, D. Hinkley, Bootstrap Methods
/// and their Application, 1997 (from memory).
///
/// # Panics
/// When a value is NaN, `resamples` < 2000 or `confidence` is not in (0, 1).
#[track_caller]
pub fn bca(
    groups: &[Vec<f64>],
    statistic: &dyn Fn(&[f64]) -> f64,
    how: Resampling,
    resamples: u32,
    confidence: f64,
    seed: u64,
) -> Option<Interval> {
    check_confidence(confidence);
    assert!(resamples >= LEAST_RESAMPLES, "{resamples} resamples are fewer than {LEAST_RESAMPLES}");
    for (place, group) in groups.iter().enumerate() {
        check_numbers(group, &format!("value of group {place}"));
    }
    let groups: Vec<&[f64]> = groups.iter().map(Vec::as_slice).filter(|g| !g.is_empty()).collect();
    let enough = match how {
        Resampling::WithinGroups => groups.iter().any(|group| group.len() > 1),
        Resampling::Groups => groups.len() > 1,
    };
    if !enough {
        return None;
    }
    let observed = statistic(&groups.concat());
    let acceleration = acceleration(&groups, statistic, how);
    if !observed.is_finite() || !acceleration.is_finite() {
        return None;
    }
    let mut draws = Draws { generator: generator(seed), times: Vec::new(), pooled: Vec::new() };
    let mut values: Vec<f64> =
        (0..resamples).map(|_| statistic(draws.resample(&groups, how))).collect();
    if values.iter().any(|value| value.is_nan()) {
        return None;
    }
    values.sort_by(f64::total_cmp);
    let count = f64::from(resamples);
    let below = values.iter().filter(|&&value| value < observed).count() as f64;
    let equal = values.iter().filter(|&&value| value == observed).count() as f64;
    let share = ((below + 0.5 * equal) / count).clamp(0.5 / count, 1.0 - 0.5 / count);
    let bias = normal_quantile(share);
    let tail = normal_quantile(0.5 * (1.0 - confidence));
    let end = |z: f64| {
        let moved = bias + z;
        let shrink = 1.0 - acceleration * moved;
        let level =
            if shrink > 0.0 { normal_cdf(bias + moved / shrink) } else { f64::from(moved > 0.0) };
        ordered(&values, level)
    };
    Some(Interval { low: end(tail), high: end(-tail) })
}

/// Opens the stream of draws that `seed` names.
fn generator(seed: u64) -> ChaCha20Rng {
    let mut key = [0; 32];
    key[..8].copy_from_slice(&seed.to_le_bytes());
    ChaCha20Rng::from_seed(key)
}

/// Draws resamples into buffers that are used again.
struct Draws {
    generator: ChaCha20Rng,
    times: Vec<u32>,
    pooled: Vec<f64>,
}

impl Draws {
    /// Draws one resample and returns its values in the order of the sample.
    fn resample(&mut self, groups: &[&[f64]], how: Resampling) -> &[f64] {
        self.pooled.clear();
        match how {
            Resampling::WithinGroups => {
                for group in groups {
                    self.count(group.len());
                    for (&value, &times) in group.iter().zip(&self.times) {
                        self.pooled.extend((0..times).map(|_| value));
                    }
                }
            }
            Resampling::Groups => {
                self.count(groups.len());
                for (group, &times) in groups.iter().zip(&self.times) {
                    for _ in 0..times {
                        self.pooled.extend_from_slice(group);
                    }
                }
            }
        }
        &self.pooled
    }

    /// Draws `units` units out of `units` and counts how often each came.
    fn count(&mut self, units: usize) {
        self.times.clear();
        self.times.resize(units, 0);
        for _ in 0..units {
            let unit = self.below(units as u64) as usize;
            self.times[unit] += 1;
        }
    }

    /// Draws a uniform integer below `bound` without bias, by rejection.
    fn below(&mut self, bound: u64) -> u64 {
        let zone = u64::MAX - (u64::MAX % bound + 1) % bound;
        loop {
            let draw = self.generator.next_u64();
            if draw <= zone {
                return draw % bound;
            }
        }
    }
}

/// Computes the acceleration by the jackknife; 0 when no deviation differs from 0, NaN when a statistic is not
/// finite.
fn acceleration(groups: &[&[f64]], statistic: &dyn Fn(&[f64]) -> f64, how: Resampling) -> f64 {
    let mut deviations = Vec::new();
    match how {
        Resampling::Groups => {
            let left: Vec<f64> = (0..groups.len())
                .map(|out| statistic(&[&groups[..out], &groups[out + 1..]].concat().concat()))
                .collect();
            deviate(&left, 1.0, &mut deviations);
        }
        Resampling::WithinGroups => {
            let mut pooled = groups.concat();
            let mut start = 0;
            for group in groups.iter().filter(|g| !g.is_empty()) {
                let size = group.len() as f64;
                let left: Vec<f64> = (start..start + group.len())
                    .filter(|_| group.len() > 1)
                    .map(|out| {
                        let value = pooled.remove(out);
                        let left = statistic(&pooled);
                        pooled.insert(out, value);
                        left
                    })
                    .collect();
                deviate(&left, (size - 1.0) / size, &mut deviations);
                start += group.len();
            }
        }
    }
    let squares: f64 = deviations.iter().map(|l| l * l).sum();
    let cubes: f64 = deviations.iter().map(|l| l * l * l).sum();
    if squares == 0.0 { 0.0 } else { cubes / (6.0 * squares.powf(1.5)) }
}

/// Appends the deviations of `left` from its mean, times `factor`, with the sign of the mean less the value.
fn deviate(left: &[f64], factor: f64, deviations: &mut Vec<f64>) {
    let mean = left.iter().sum::<f64>() / left.len() as f64;
    deviations.extend(left.iter().map(|value| factor * (mean - value)));
}

/// Computes the quantile of sorted resamples at `level`, between the places (B+1) level.
fn ordered(sorted: &[f64], level: f64) -> f64 {
    let place = ((sorted.len() + 1) as f64 * level).clamp(1.0, sorted.len() as f64) - 1.0;
    let below = place.floor() as usize;
    let above = (below + 1).min(sorted.len() - 1);
    between(sorted[below], sorted[above], place - place.floor())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn draws_are_uniform() {
        // 30,000 units drawn: each of 5 comes 6000 times, standard deviation 69; five of them is 346.
        let mut draws = Draws { generator: generator(3), times: Vec::new(), pooled: Vec::new() };
        let mut totals = [0_u32; 5];
        for _ in 0..6000 {
            draws.count(5);
            for (total, times) in totals.iter_mut().zip(&draws.times) {
                *total += times;
            }
        }
        assert_eq!(totals.iter().sum::<u32>(), 30_000);
        assert!(totals.iter().all(|&total| total.abs_diff(6000) < 346), "{totals:?}");
    }

    #[test]
    fn acceleration_of_the_mean_is_its_closed_form() {
        // For the mean a = sum (x - m)^3 / (6 (sum (x - m)^2)^(3/2)) (Efron 1987): leaving x out moves the mean
        // by (m - x)/(n - 1).
        let sample = [1.0, 2.0, 4.0, 4.5, 20.0];
        let mean = 6.3;
        let moment = |power: i32| sample.iter().map(|x: &f64| (x - mean).powi(power)).sum::<f64>();
        let closed = moment(3) / (6.0 * moment(2).powf(1.5));
        let average = |x: &[f64]| x.iter().sum::<f64>() / x.len() as f64;
        let found = acceleration(&[&sample], &average, Resampling::WithinGroups);
        assert!((found - closed).abs() <= 1e-12, "{found} {closed}");
        let singles: Vec<&[f64]> = sample.chunks(1).collect();
        let found = acceleration(&singles, &average, Resampling::Groups);
        assert!((found - closed).abs() <= 1e-12, "{found} {closed}");
    }

    #[test]
    fn acceleration_weighs_groups_by_their_size() {
        // For the pooled mean the deviations are (n_g - 1)/n_g (x - group mean)/(N - 1); the groups have 2 and 3 values.
        let groups: [&[f64]; 3] = [&[0.0, 4.0], &[1.0, 2.0, 9.0], &[70.0]];
        let parts = [(0.5, [-2.0, 2.0, 0.0]), (2.0 / 3.0, [-3.0, -2.0, 5.0])];
        let moment = |power: i32| -> f64 {
            parts.iter().flat_map(|(f, gaps)| gaps.map(|gap: f64| (f * gap).powi(power))).sum()
        };
        let closed = moment(3) / (6.0 * moment(2).powf(1.5));
        let average = |x: &[f64]| x.iter().sum::<f64>() / x.len() as f64;
        let found = acceleration(&groups, &average, Resampling::WithinGroups);
        assert!((found - closed).abs() <= 1e-12, "{found} {closed}");
    }
}
