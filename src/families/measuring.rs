//! What the families of measurements share: bell-shaped whole numbers, the number of measurements, and planting a
//! measured point under the objectives that need no dual certificate. No family lives here.

use super::PlantError;
use super::assembly::{IntegerCoefficient, PairDraft};
use crate::card::{DefaultSetting, Kind};
use crate::card::{Setting, SettingSpec, Settings};
use crate::problem::certificate::{Certificate, IntegerFactor, Planted, PlantedPoint};
use crate::problem::{Coefficient, Functional, Problem, SparseSymmetric};
use crate::seed::Stream;

/// Bits of the narrower bell: variance 4.
pub(super) const NARROW: u32 = 16;
/// Bits of the wider bell: variance 8.
pub(super) const WIDE: u32 = 32;

/// The parameter `objective` of every family here.
pub(super) const OBJECTIVE: SettingSpec = SettingSpec {
    name: "objective",
    kind: Kind::Word(&["proved-trace", "trace", "zero"]),
    default: DefaultSetting::Word("proved-trace"),
    meaning: "`proved-trace`: C is a multiple of I and one measurement is made for a dual pair, so the relaxation is tight \
        at any number of measurements. `trace`: C = I and every measurement is random: whether the relaxation recovers \
        the point depends on their number, and nothing is proved but that the point is feasible. `zero`: C = 0 with \
        the same measurements: every feasible point of the target rank is optimal, value 0.",
};

/// The parameter `measurements` of every family here.
pub(super) const MEASUREMENTS: SettingSpec = SettingSpec {
    name: "measurements",
    kind: Kind::WordOrInteger { words: &["auto"], least: 1, most: 100_000 },
    default: DefaultSetting::Word("auto"),
    meaning: "Number m of measurements, which is the number of constraints; `auto` takes three times the n r - r(r-1)/2 \
        degrees of freedom of a matrix of rank r, at most n(n+1)/2. Under `trace`, few measurements let the \
        relaxation miss the point.",
};

/// Draws the number of ones among `bits` fair bits, less half of them: mean 0, variance bits/4, a whole number for even
/// `bits` of at most 64.
pub(super) fn bell(stream: &mut Stream, bits: u32) -> i64 {
    debug_assert!(bits.is_multiple_of(2) && (2..=64).contains(&bits));
    let drawn = stream.bits() >> (64 - bits);
    i64::from(drawn.count_ones()) - i64::from(bits / 2)
}

/// Draws a vector of narrow bells, not all zero.
pub(super) fn bell_vector(stream: &mut Stream, order: usize) -> Vec<(usize, i64)> {
    loop {
        let drawn = (0..order).map(|i| (i, bell(stream, NARROW)));
        let entries: Vec<(usize, i64)> = drawn.filter(|entry| entry.1 != 0).collect();
        if !entries.is_empty() {
            return entries;
        }
    }
}

/// Returns the number of measurements, between `least` and n(n+1)/2.
///
/// # Errors
/// A number outside, with the nearest possible one.
pub(super) fn count(
    parameters: &Settings,
    order: usize,
    rank: usize,
    least: usize,
) -> Result<usize, PlantError> {
    let all = order * (order + 1) / 2;
    let measurements = match parameters.get("measurements") {
        Some(Setting::Integer(_)) => parameters.size("measurements"),
        _ => (3 * (order * rank - rank * (rank - 1) / 2)).clamp(least, all),
    };
    if (least..=all).contains(&measurements) {
        return Ok(measurements);
    }
    Err(PlantError::Parameters(format!(
        "measurements = {measurements} lies outside {least}..={all} for order = {order} and rank = {rank}; the nearest \
         possible value is {}",
        measurements.clamp(least, all)
    )))
}

/// Plants the point V V' of rank r behind measurements, under the objective `trace` or `zero`.
///
/// With C = 0 the multipliers y = 0 and the slack S = 0 are a dual pair for any feasible point. With C = I the point is
/// planted without a proof; its value is the trace |V|^2.
///
/// # Errors
/// A defect of the family.
pub(super) fn plant_measured(
    objective: &str,
    factor: IntegerFactor,
    constraints: Vec<IntegerCoefficient>,
) -> Result<Planted, PlantError> {
    let order = factor.order;
    let zero = PairDraft {
        rank: factor.width,
        factor: factor.clone(),
        slack: Vec::new(),
        weights: Vec::new(),
        multipliers: vec![0; constraints.len()],
        constraints,
    };
    let planted = zero.plant()?;
    if objective == "zero" {
        return Ok(planted);
    }
    let identity = SparseSymmetric::gather(order, (0..order).map(|i| (i, i, 1.0)).collect());
    let cost = Functional::on_block(0, Coefficient::Sparse(identity));
    let problem = &planted.problem;
    let problem = Problem::new(
        problem.blocks().to_vec(),
        0,
        cost,
        problem.constraints().to_vec(),
        problem.rhs().to_vec(),
    )
    .expect("only the cost has been changed");
    let point = PlantedPoint { factors: vec![factor], orthant: Vec::new() };
    Ok(Planted::prove(problem, Certificate::NoProof(point))?)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Counts 40,000 draws against the binomial distribution of 16 bits: shares C(16, 8 + k) / 2^16.
    #[test]
    fn bells_are_binomial() {
        let mut stream = Stream::named(5, &["bell"]);
        let mut counts = [0u32; 17];
        let total = 40_000;
        for _ in 0..total {
            counts[(bell(&mut stream, NARROW) + 8) as usize] += 1;
        }
        let mut ways = 1.0;
        for (k, &count) in counts.iter().enumerate() {
            let share = ways / 65_536.0;
            let deviation = (f64::from(total) * share * (1.0 - share)).sqrt();
            let excess = (f64::from(count) - f64::from(total) * share).abs();
            assert!(excess <= 5.0 * deviation + 1.0, "{k}: {count}");
            ways *= (16 - k) as f64 / (k + 1) as f64;
        }
    }

    #[test]
    fn the_wide_bell_has_twice_the_variance() {
        let mut stream = Stream::named(6, &["bell"]);
        let mut square = |bits| {
            (0..40_000).map(|_| bell(&mut stream, bits).pow(2)).sum::<i64>() as f64 / 40_000.0
        };
        // Six standard deviations: a squared binomial of variance v has the variance below 2 v^2.
        let (narrow, wide) = (square(NARROW), square(WIDE));
        assert!((narrow - 4.0).abs() < 6.0 * 4.0 * (2.0f64 / 40_000.0).sqrt(), "{narrow}");
        assert!((wide - 8.0).abs() < 6.0 * 8.0 * (2.0f64 / 40_000.0).sqrt(), "{wide}");
    }
}
