//! `high-width-trap`: a local minimum of the factored problem at width n/2, far above the optimum.
//!
//! Before it is hidden by signs and a permutation, n = 2p, X_ii = 1 and C = [[M, M], [M, M]] with the whole
//! p x p matrix M = (2p - 1) I - 2 11' (2p - 3 on the diagonal, -2 off it).
//!
//! Optimum. With s_i = e_i + e_{p+i} and d_i = e_i - e_{p+i}, `C + 2I = 2 sum_{i<j} (s_i - s_j)(s_i - s_j)' +
//! sum_i d_i d_i'`: the diagonal is 2(p - 1) + 1 = (2p - 3) + 2, entry (i, p + i) is 2(p - 1) - 1 = 2p - 3 and all
//! others are -2. So y = -2 for all constraints gives S = C + 2I, PSD with S 1 = 0; its columns vanish together on
//! multiples of 1 only, so rank S = n - 1, 11' is the only optimum, and the value is -2n = -4p.
//!
//! Trap. Y = [I; -I] of width p has C Y = 0, so it is critical with value 0, all multipliers being 0. Let Y' = rows
//! y_i, y_i' of unit length near Y and u_i = y_i + y_{p+i}. Then `<C, Y'Y''> = <M, U U'> = (2p - 1)|U|^2 -
//! 2|sum_i u_i|^2`, and u_i is orthogonal to y_i - y_{p+i}, which is near 2 e_i. Were u_i orthogonal to e_i itself,
//! each coordinate c of sum u_i would have p - 1 terms, so |sum u_i|^2 <= (p - 1)|U|^2 and the value would be at
//! least |U|^2. By continuity it is at least |U|^2/2 near Y: Y is a local minimum with value 0. It is not strict: all
//! points with U = 0 have the value 0. The width p = n/2 exceeds the least p with p(p+1)/2 > m = n from n = 8 on.
//!
//! The trap is no part of the certificate; a test here checks it on the planted instance. Methods meet it when they
//! start near Y, rarely from random starts.

use super::assembly::{PairDraft, column, unit_diagonal};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `high-width-trap`.
#[derive(Clone, Copy, Debug)]
pub struct HighWidthTrap;

static CARD: FamilyCard = FamilyCard {
    id: "high-width-trap",
    title: "Local minimum of the factored problem at width n/2, above the rank bound",
    formula: "min <C,X> s.t. X_ii = 1, X PSD, rank X <= 1",
    construction: "C = [[M,M],[M,M]] with M = (n-1) I - 2 11' of order n/2, hidden by signs t and a permutation; \
        [I;-I] of width n/2, hidden alike, is a local minimum of <C,YY'> with value 0",
    optimum: "-2n, attained by tt' only",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: S = C + 2I of rank n - 1, y = -2; the trap by the proof in the module",
    source: "after L. O'Carroll, V. Srinivas, A. Vijayaraghavan, The Burer-Monteiro SDP method can fail even above \
        the Barvinok-Pataki bound, NeurIPS 2022, arXiv:2211.12389; the whole-number M and its certificate: own",
    parameters: &[SettingSpec {
        name: "order",
        kind: Kind::Integer { least: 8, most: 400 },
        default: DefaultSetting::Integer(20),
        meaning: "Order n of the matrix variable, even.",
    }],
};

impl Family for HighWidthTrap {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let order = parameters.size("order");
        if !order.is_multiple_of(2) {
            return Err(PlantError::Parameters(format!(
                "order = {order} is odd; the nearest possible value is {}",
                order - 1
            )));
        }
        let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
        let places = stream.permutation(order);
        draft(&signs, &places).plant()
    }
}

/// Makes the pair with index i of the plain form at `places[i]`.
fn draft(signs: &[i64], places: &[usize]) -> PairDraft {
    let order = signs.len();
    let half = order / 2;
    let signed = |plain: &[(usize, i64)]| {
        let entries = plain.iter().map(|&(i, value)| (places[i], value * signs[places[i]]));
        column(entries.collect())
    };
    let mut slack = Vec::with_capacity(half * (half + 1) / 2);
    let mut weights = Vec::with_capacity(slack.capacity());
    for j in 0..half {
        slack.push(signed(&[(j, 1), (half + j, -1)]));
        weights.push(1);
        for i in 0..j {
            slack.push(signed(&[(i, 1), (half + i, 1), (j, -1), (half + j, -1)]));
            weights.push(2);
        }
    }
    PairDraft {
        rank: 1,
        factor: IntegerFactor { order, width: 1, rows: signs.to_vec() },
        slack,
        weights,
        constraints: unit_diagonal(order),
        multipliers: vec![-2; order],
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Checks what the module's proof says of the planted cost: C Y = 0 for the hidden Y = [I; -I], and
    /// `<C, ZZ'> >= |U|^2` on tangent rows.
    #[test]
    fn the_trap_is_critical_with_a_form_that_is_not_negative() {
        for order in [8, 14, 20] {
            let half = order / 2;
            let mut stream = Stream::named(3, &["high-width-trap"]);
            let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
            let places = stream.permutation(order);
            let planted = draft(&signs, &places).plant().unwrap();
            let mut cost = vec![vec![0i64; order]; order];
            for (i, j, value) in planted.problem.cost().part(0).unwrap().to_sparse().iter() {
                cost[i][j] = value as i64;
                cost[j][i] = value as i64;
            }
            // The trap's row of plain index i is plus or minus e_{i mod p}.
            let trap = |i: usize| if i < half { signs[places[i]] } else { -signs[places[i]] };
            for row in &cost {
                for axis in 0..half {
                    let sum: i64 =
                        [axis, half + axis].iter().map(|&i| row[places[i]] * trap(i)).sum();
                    assert_eq!(sum, 0);
                }
            }
            for _ in 0..200 {
                // A tangent row has a zero on its own axis.
                let rows: Vec<Vec<i64>> = (0..order)
                    .map(|i| {
                        let entry = |c: usize, s: &mut Stream| {
                            if c == i % half { 0 } else { s.between(-9, 9) }
                        };
                        (0..half).map(|c| entry(c, &mut stream)).collect()
                    })
                    .collect();
                let dot = |a: &[i64], b: &[i64]| a.iter().zip(b).map(|(x, y)| x * y).sum::<i64>();
                let mut form = 0;
                for i in 0..order {
                    for j in 0..order {
                        form += cost[places[i]][places[j]] * dot(&rows[i], &rows[j]);
                    }
                }
                let joined: i64 = (0..half)
                    .flat_map(|i| (0..half).map(move |c| (i, c)))
                    .map(|(i, c)| {
                        let [above, below] = [i, half + i].map(|k| signs[places[k]] * rows[k][c]);
                        (above + below).pow(2)
                    })
                    .sum();
                assert!(form >= joined, "order {order}: {form} below {joined}");
            }
        }
    }
}
