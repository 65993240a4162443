//! `sensing`: a matrix of low rank from few linear measurements, by the least trace.
//!
//! The measurements are whole and bell-shaped: in the model `gaussian` an entry of A_i off the diagonal is the number of
//! ones among 16 fair bits less 8 (mean 0, variance 4), one on the diagonal the same of 32 bits less 16 (variance 8). As
//! for a symmetric Gaussian matrix, all directions of unit Frobenius norm therefore measure alike in the second moment;
//! higher moments differ from the Gaussian ones by order 1/16. In the model `rank-one`, A_i = a a' with entries of a as
//! those off the diagonal. The point is V V' with V = P [I; B], B in {-1,0,1} and P a permutation, of rank r by its
//! upper part.
//!
//! What is proved, by objective:
//!
//! - `proved-trace`: W = P [-B'; I] has V'W = 0. With D > 0 diagonal, y_i = -1 or 1 for i < m and y_m = 1, the last
//!   measurement `A_m = I - W D W' - sum_{i<m} y_i A_i` makes C = A*(y) + W D W' = I: an exact dual pair, strictly
//!   complementary because rank W = n - r; unique when the V'A_iV span the symmetric matrices of order r (a draw that
//!   misses this is made again). The last measurement is large and of neither model.
//! - `trace`: no dual pair is made. The point is feasible and |V|^2 = tr V V' bounds the optimum. Whether the relaxation
//!   has the point as its only optimum is what the number of measurements decides: for Gaussian measurements in half of
//!   all draws at the statistical dimension of the descent cone of the trace (D. Amelunxen, M. Lotz, M. McCoy, J.
//!   Tropp, Information and Inference 3:224-294, 2014), 17.2, 38.6 and 65.7 for (n, r) = (10, 1), (20, 1) and
//!   (20, 2); see `stats::recovery`.
//!   Measured, the share of 40 draws in which the interior-point relaxation, truncated to rank r, was feasible to 1e-6:
//!   (10, 1) with 13, 15, 17, 19, 21 measurements 0, 0.30, 0.60, 0.70, 0.90; (20, 1) with 33, 36, 39, 42, 45 measurements 0.18,
//!   0.38, 0.73, 0.85, 0.93; (20, 2) with 58, 62, 66, 70, 74 measurements 0.03, 0.28, 0.50, 0.80, 0.95.
//! - `zero`: a feasibility problem; y = 0 and S = 0 are an exact dual pair, and every feasible point of rank at
//!   most r is optimal. The relaxation has many optima unless it has one feasible point only, from about
//!   n(n+1)/2 - (n-r)(n-r+1)/4 measurements on.

use super::assembly::{IntegerCoefficient, PairDraft, bases, draw_b};
use super::measuring::{
    MEASUREMENTS, NARROW, OBJECTIVE, WIDE, bell, bell_vector, count, plant_measured,
};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerColumn, IntegerFactor, Planted, Uniqueness};
use crate::seed::Stream;

/// The family `sensing`.
#[derive(Clone, Copy, Debug)]
pub struct Sensing;

/// Entries of upper triangles that the measurements may have in all.
const ENTRIES: usize = 1 << 22;

/// Draws of a whole instance before the family gives up.
const TRIES: usize = 50;

static CARD: FamilyCard = FamilyCard {
    id: "sensing",
    title: "A matrix of low rank from bell-shaped linear measurements, by the least trace",
    formula: "min tr X (or 0) s.t. <A_i,X> = <A_i,VV'>, i = 1..m, X PSD of order n, rank X <= r",
    construction: "V = P[I;B], B in {-1,0,1}; A_i of centred binomial numbers, variance 4 off and 8 on the diagonal, or a a' \
        with such a; under `proved-trace` the last is A_m = I - W D W' - sum_{i<m} y_i A_i for W = P[-B';I], y_i = -1 or 1",
    optimum: "`proved-trace`: tr VV', attained by VV' only. `trace`: at most tr VV', not proved. `zero`: 0, attained by \
        every feasible point of rank r",
    relaxation: Relaxation::GapToTight,
    certificate: "`proved-trace`: dual pair, exact; unique by ranks modulo 2^61 - 1. `trace`: none, the planted point is \
        feasible. `zero`: dual pair with y = 0, S = 0",
    source: "prescribed cost: own; recovery threshold: D. Amelunxen, M. Lotz, M. McCoy, J. Tropp, Information and Inference \
        3:224-294, 2014; objective: B. Recht, M. Fazel, P. Parrilo, SIAM Review 52:471-501, 2010 (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 2, most: 300 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n of the matrix variable.",
        },
        SettingSpec {
            name: "rank",
            kind: Kind::Integer { least: 1, most: 50 },
            default: DefaultSetting::Integer(1),
            meaning: "Rank r < n of the planted point, which is the rank bound.",
        },
        MEASUREMENTS,
        SettingSpec {
            name: "model",
            kind: Kind::Word(&["gaussian", "rank-one"]),
            default: DefaultSetting::Word("gaussian"),
            meaning: "Form of the measurements: symmetric matrices with all entries drawn, or a a' for a drawn vector a.",
        },
        OBJECTIVE,
    ],
};

impl Family for Sensing {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let sizes = sizes(parameters)?;
        if sizes.objective != "proved-trace" {
            let (factor, _) = draw_point(&sizes, stream);
            let constraints =
                (0..sizes.measurements).map(|_| draw_measurement(&sizes, stream)).collect();
            return plant_measured(sizes.objective, factor, constraints);
        }
        for _ in 0..TRIES {
            let planted = proved(&sizes, stream).plant()?;
            if planted.uniqueness == Uniqueness::Proved {
                return Ok(planted);
            }
        }
        Err(PlantError::Parameters(format!(
            "{TRIES} draws with order = {}, rank = {} and measurements = {} were degenerate; more measurements are \
             easier to draw",
            sizes.order, sizes.rank, sizes.measurements
        )))
    }
}

/// Sizes of an instance after the parameters have been found possible.
struct Sizes<'a> {
    order: usize,
    rank: usize,
    measurements: usize,
    model: &'a str,
    objective: &'a str,
}

fn sizes(parameters: &Settings) -> Result<Sizes<'_>, PlantError> {
    let (order, rank) = (parameters.size("order"), parameters.size("rank"));
    let (model, objective) = (parameters.word("model"), parameters.word("objective"));
    if rank >= order {
        return Err(PlantError::Parameters(format!(
            "rank = {rank} is not below order = {order}; the nearest possible value is {}",
            order - 1
        )));
    }
    let least = if objective == "proved-trace" { rank * (rank + 1) / 2 } else { 1 };
    let measurements = count(parameters, order, rank, least)?;
    let affordable = ENTRIES / (order * (order + 1) / 2);
    if model == "gaussian" && measurements > affordable {
        return Err(PlantError::Parameters(format!(
            "measurements = {measurements} of order {order} would store more than {ENTRIES} entries; the nearest \
             possible value is {affordable}"
        )));
    }
    Ok(Sizes { order, rank, measurements, model, objective })
}

/// Draws V and the columns of W.
fn draw_point(sizes: &Sizes<'_>, stream: &mut Stream) -> (IntegerFactor, Vec<IntegerColumn>) {
    let permutation = stream.permutation(sizes.order);
    let b = draw_b(stream, sizes.order - sizes.rank, sizes.rank);
    let base = bases(&b, sizes.rank, &permutation);
    (base.range, base.slack)
}

fn draw_measurement(sizes: &Sizes<'_>, stream: &mut Stream) -> IntegerCoefficient {
    if sizes.model == "rank-one" {
        return IntegerCoefficient::Outer(bell_vector(stream, sizes.order));
    }
    let mut entries = Vec::with_capacity(sizes.order * (sizes.order + 1) / 2);
    for j in 0..sizes.order {
        for i in 0..=j {
            entries.push((i, j, bell(stream, if i == j { WIDE } else { NARROW })));
        }
    }
    IntegerCoefficient::gather(entries)
}

/// Draws an instance whose last measurement makes the cost the identity.
fn proved(sizes: &Sizes<'_>, stream: &mut Stream) -> PairDraft {
    let (factor, slack) = draw_point(sizes, stream);
    let weights: Vec<i64> = slack.iter().map(|_| stream.between(1, 3)).collect();
    let mut rest: Vec<(usize, usize, i64)> = (0..sizes.order).map(|i| (i, i, 1)).collect();
    for (column, &weight) in slack.iter().zip(&weights) {
        subtract_square(&mut rest, &column.iter().collect::<Vec<_>>(), weight);
    }
    let constraints_but_one = (1..sizes.measurements).map(|_| draw_measurement(sizes, stream));
    let mut constraints: Vec<IntegerCoefficient> = constraints_but_one.collect();
    let mut multipliers: Vec<i64> = constraints.iter().map(|_| stream.sign()).collect();
    for (constraint, &y) in constraints.iter().zip(&multipliers) {
        match constraint {
            IntegerCoefficient::Outer(vector) => subtract_square(&mut rest, vector, y),
            IntegerCoefficient::Sparse(entries) => {
                rest.extend(entries.iter().map(|&(i, j, value)| (i, j, -y * value)));
            }
        }
    }
    constraints.push(IntegerCoefficient::gather(rest));
    multipliers.push(1);
    PairDraft { rank: sizes.rank, factor, slack, weights, constraints, multipliers }
}

/// Appends the upper triangle of `-weight a a'`, the indices of a ascending.
fn subtract_square(rest: &mut Vec<(usize, usize, i64)>, vector: &[(usize, i64)], weight: i64) {
    for (at, &(j, right)) in vector.iter().enumerate() {
        rest.extend(vector[..=at].iter().map(|&(i, left)| (i, j, -weight * left * right)));
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::BTreeMap;

    use crate::card::Setting;
    use crate::problem::certificate::Certificate;

    fn plant(seed: u64, pairs: &[(&str, Setting)]) -> Planted {
        let given: BTreeMap<String, Setting> =
            pairs.iter().map(|(name, value)| ((*name).to_owned(), value.clone())).collect();
        let settings = Settings::resolve(CARD.parameters, &given).unwrap();
        Sensing.plant(&settings, &mut Stream::named(seed, &["sensing"])).unwrap()
    }

    fn word(text: &str) -> Setting {
        Setting::Word(text.to_owned())
    }

    /// The cost is the identity in both trace objectives, and the optimum the squared norm of V.
    #[test]
    fn the_cost_is_the_trace_under_either_objective() {
        for model in ["gaussian", "rank-one"] {
            for objective in ["proved-trace", "trace"] {
                for m in [3, 20, 60] {
                    let pairs = [
                        ("order", Setting::Integer(12)),
                        ("rank", Setting::Integer(2)),
                        ("measurements", Setting::Integer(m)),
                        ("model", word(model)),
                        ("objective", word(objective)),
                    ];
                    let planted = plant(3, &pairs);
                    assert_eq!(planted.problem.constraints().len(), m as usize);
                    let cost = planted.problem.cost().part(0).unwrap().to_sparse();
                    let entries: Vec<(usize, usize, f64)> = cost.iter().collect();
                    let identity: Vec<(usize, usize, f64)> = (0..12).map(|i| (i, i, 1.0)).collect();
                    assert_eq!(entries, identity);
                    let square: f64 = planted.point[0].data.iter().map(|v| v * v).sum();
                    assert_eq!(planted.optimum, square);
                    let proved = objective == "proved-trace";
                    assert_eq!(planted.proved_optimum().is_some(), proved);
                    assert_eq!(planted.uniqueness == Uniqueness::Proved, proved);
                }
            }
        }
    }

    #[test]
    fn a_zero_cost_is_proved_and_shares_the_measurements() {
        let pairs = |objective: &str| [("objective", word(objective))];
        let (zero, trace) = (plant(4, &pairs("zero")), plant(4, &pairs("trace")));
        assert_eq!(zero.proved_optimum(), Some(0.0));
        assert_eq!(zero.problem.rhs(), trace.problem.rhs());
        assert_eq!(zero.problem.constraints(), trace.problem.constraints());
        assert!(matches!(trace.certificate, Certificate::NoProof(_)));
    }
}
