//! `phase`: a real vector from the squares of linear measurements, lifted to rank one, by the least trace.
//!
//! b_i = (a_i'x)^2 = <a_i a_i', xx'>: the signs of the measurements are lost. Entries of a_i are whole and bell-shaped
//! (ones among 16 fair bits less 8: mean 0, variance 4), those of x whole and not zero.
//!
//! What is proved, by objective:
//!
//! - `proved-trace`: all measurements are squares, one of them made. Let K be the four measurements with the least
//!   |a_k'x| > 0 (all of these where there are fewer), `M = I + sum_{k in K} a_k a_k'`, `g = M x` and `d = x'M x`.
//!   The last measurement is g, and C = d I. With multipliers -d on K, 0 on the others and 1 on g the slack is
//!   `S = d I + d sum_K a_k a_k' - g g' = d M - g g'`. Write M as the sum of `m m'` over the vectors m of e_1..e_n and of K, and p = m'x, so that g = sum p m and d = sum p^2.
//!   Then (Lagrange's identity) `S = sum over pairs of (p_l m_k - p_k m_l)(p_l m_k - p_k m_l)'`: PSD, with S x = 0
//!   term by term, and of rank n - 1 because the pairs of e_j alone span the complement of x. So xx' is the only
//!   optimum, for any number of measurements; the value is d |x|^2. (Up to the scale d the multipliers are -1, 0 and
//!   1/d: the problem is as well scaled as the unscaled one.)
//! - `trace`: C = I, every measurement random. The point is feasible; nothing else is proved. The relaxation recovers it
//!   from about 3n to 6n measurements on (E. Candes, T. Strohmer, V. Voroninski, Communications on Pure and Applied
//!   Mathematics 66:1241-1274, 2013, for Gaussian vectors; the range is from memory).
//! - `zero`: C = 0, a feasibility problem: y = 0 and S = 0 are an exact dual pair.
//!
//! Measured under `trace`, the share of 20 draws in which the interior-point relaxation, truncated to rank 1, was feasible
//! to 1e-6: n = 10 with 20, 25, 30, 40 measurements 0.85, 1, 1, 1; n = 20 with 40, 50, 60, 80 measurements 0.60, 0.95, 1, 1.

use super::assembly::{IntegerCoefficient, PairDraft, column, draw_nonzero};
use super::measuring::{MEASUREMENTS, OBJECTIVE, bell_vector, count, plant_measured};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerColumn, IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `phase`.
#[derive(Clone, Copy, Debug)]
pub struct Phase;

/// Most measurements that the made one mixes. Those with small images keep it of the size of the others.
const MIXED: usize = 4;

static CARD: FamilyCard = FamilyCard {
    id: "phase",
    title: "A real vector from the squares of linear measurements, by the least trace",
    formula: "min tr X (times d, or 0) s.t. a_i'X a_i = (a_i'x)^2, i = 1..m, X PSD of order n, rank X <= 1",
    construction: "whole x without zeros; a_i of centred binomial numbers, variance 4; under `proved-trace` the last is \
        g = Mx with M = I + the sum of a a' over the four a with the least |a'x| > 0, and the cost is d I with d = x'Mx",
    optimum: "`proved-trace`: d|x|^2, attained by xx' only. `trace`: at most |x|^2, not proved. `zero`: 0, attained by every \
        feasible point of rank 1",
    relaxation: Relaxation::GapToTight,
    certificate: "`proved-trace`: dual pair, exact: S = d M - g g' as a sum of squares of whole vectors, of rank n - 1. \
        `trace`: none, the planted point is feasible. `zero`: dual pair with y = 0, S = 0",
    source: "lifting: E. Candes, T. Strohmer, V. Voroninski, Communications on Pure and Applied Mathematics \
        66:1241-1274, 2013 (citation from memory); the made measurement: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 2, most: 200 },
            default: DefaultSetting::Integer(20),
            meaning: "Length n of x, which is the order of the matrix variable.",
        },
        MEASUREMENTS,
        SettingSpec {
            name: "size",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Entries of x are drawn from {-size..size} without 0; a larger size spreads them over more scales.",
        },
        OBJECTIVE,
    ],
};

impl Family for Phase {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let order = parameters.size("order");
        let measurements = count(parameters, order, 1, 1)?;
        let size = parameters.integer("size");
        let x: Vec<i64> = (0..order).map(|_| draw_nonzero(stream, size)).collect();
        let objective = parameters.word("objective");
        let made = usize::from(objective == "proved-trace");
        let vectors: Vec<Vec<(usize, i64)>> =
            (made..measurements).map(|_| bell_vector(stream, order)).collect();
        if made == 1 {
            return draft(x, vectors).plant();
        }
        let constraints = vectors.into_iter().map(IntegerCoefficient::Outer).collect();
        plant_measured(objective, IntegerFactor { order, width: 1, rows: x }, constraints)
    }
}

/// Builds the dual pair around x and all measurements but the made one.
fn draft(x: Vec<i64>, vectors: Vec<Vec<(usize, i64)>>) -> PairDraft {
    let order = x.len();
    let image = |m: &[(usize, i64)]| m.iter().map(|&(i, value)| value * x[i]).sum::<i64>();
    let mut mixed: Vec<usize> = (0..vectors.len()).filter(|&k| image(&vectors[k]) != 0).collect();
    mixed.sort_by_key(|&k| image(&vectors[k]).abs());
    mixed.truncate(MIXED);
    let units = (0..order).map(|i| vec![(i, 1)]);
    let squares: Vec<Vec<(usize, i64)>> =
        units.chain(mixed.iter().map(|&k| vectors[k].clone())).collect();
    let images: Vec<i64> = squares.iter().map(|m| image(m)).collect();
    let mut made = vec![0i64; order];
    for (square, p) in squares.iter().zip(&images) {
        for &(i, value) in square {
            made[i] += p * value;
        }
    }
    let scale: i64 = images.iter().map(|p| p * p).sum();
    let mut slack = Vec::with_capacity(squares.len() * (squares.len() - 1) / 2);
    for l in 1..squares.len() {
        for k in 0..l {
            let column = combine(order, &squares[k], images[l], &squares[l], -images[k]);
            if !column.indices.is_empty() {
                slack.push(column);
            }
        }
    }
    let mut multipliers = vec![0; vectors.len()];
    mixed.iter().for_each(|&k| multipliers[k] = -scale);
    multipliers.push(1);
    let last = made.into_iter().enumerate().filter(|entry| entry.1 != 0).collect();
    let constraints = vectors.into_iter().chain([last]).map(IntegerCoefficient::Outer).collect();
    PairDraft {
        rank: 1,
        factor: IntegerFactor { order, width: 1, rows: x },
        weights: vec![1; slack.len()],
        slack,
        constraints,
        multipliers,
    }
}

/// Returns `a left + b right`.
fn combine(
    order: usize,
    left: &[(usize, i64)],
    a: i64,
    right: &[(usize, i64)],
    b: i64,
) -> IntegerColumn {
    let mut sum = vec![0i64; order];
    for (vector, factor) in [(left, a), (right, b)] {
        for &(i, value) in vector {
            sum[i] += factor * value;
        }
    }
    column(sum.into_iter().enumerate().filter(|entry| entry.1 != 0).collect())
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::BTreeMap;

    use crate::card::Setting;
    use crate::problem::Coefficient;
    use crate::problem::certificate::Uniqueness;

    fn plant(seed: u64, pairs: &[(&str, Setting)]) -> Planted {
        let given: BTreeMap<String, Setting> =
            pairs.iter().map(|(name, value)| ((*name).to_owned(), value.clone())).collect();
        let settings = Settings::resolve(CARD.parameters, &given).unwrap();
        Phase.plant(&settings, &mut Stream::named(seed, &["phase"])).unwrap()
    }

    /// Every constraint is one square with its right side (a'x)^2, also the made one, and the cost is d I.
    #[test]
    fn all_measurements_are_squares() {
        for (m, objective) in
            [(1, "proved-trace"), (5, "proved-trace"), (40, "proved-trace"), (40, "trace")]
        {
            let pairs = [
                ("order", Setting::Integer(9)),
                ("measurements", Setting::Integer(m)),
                ("objective", Setting::Word(objective.to_owned())),
            ];
            let planted = plant(2, &pairs);
            let x = &planted.point[0].data;
            let problem = &planted.problem;
            assert_eq!(problem.constraints().len(), m as usize);
            for (constraint, rhs) in problem.constraints().iter().zip(problem.rhs()) {
                let Some(Coefficient::Outer(sum)) = constraint.part(0) else {
                    panic!("a measurement is an outer product");
                };
                assert_eq!((sum.terms.len(), sum.terms[0].weight), (1, 1.0));
                let image: f64 = sum.terms[0].vector.iter().map(|(i, a)| a * x[i]).sum();
                assert_eq!(image * image, *rhs);
            }
            let square: f64 = x.iter().map(|v| v * v).sum();
            let cost = problem.cost().part(0).unwrap().to_sparse();
            let scale = planted.optimum / square;
            assert!(cost.iter().all(|(i, j, value)| i == j && value == scale));
            assert_eq!(cost.stored(), 9);
            assert_eq!(planted.uniqueness == Uniqueness::Proved, objective == "proved-trace");
        }
    }
}
