//! `low-width-trap`: a strict local minimum of the factored problem at a width below the rank bound.
//!
//! Problem. X_ii = 1, and before it is hidden by signs and a permutation C = n I - 11' + P with P PSD, P 1 = 0 and
//! P Y = 0 for the trap Y (n x p) below. Since n I - 11' = sum_{i<j} (e_i - e_j)(e_i - e_j)', C is PSD with null
//! space spanned by 1: with y = 0 and S = C, 11' is the only optimum, of value 0.
//!
//! Trap. n = 2h, and the rows of Y are h unit vectors v_l and their negatives, so 1'Y = 0 and C Y = n Y: Y is
//! critical, all its multipliers are n and its value is n tr Y'Y = n^2. The lines are the p axes; for
//! each pair j < k of axes a line (3 e_j + 4 e_k)/5 up to signs and order; and more lines of that kind up to
//! h >= p(p+1)/2. Second order: a tangent Z has rows z_i with z_i'y_i = 0. Write Z = 1 a' + Y B + R with R
//! orthogonal to 1 and Y (which are orthogonal to each other). (C - n I) Y = 0, P annihilates 1 and Y, so
//!
//! ```text
//! <C - n I, ZZ'> = -|1'Z|^2 + <P, RR'> >= -n^2 |a|^2 + s |R|^2,
//! ```
//!
//! s the least eigenvalue of P off span{1, Y}. The tangency of the two rows of line l, subtracted, says
//! 2 v_l'a = -v_l'(r_l + r_{-l}), hence (v_l'a)^2 <= (|r_l|^2 + |r_{-l}|^2)/2, and the sum over the axes gives
//! |a|^2 <= |R|^2/2. So the form is at least (s - n^2/2)|R|^2. With s > n^2/2 it vanishes only for R = 0, a = 0,
//! and then v_l'B v_l = 0 on all lines: the axes give B_jj = 0, the pairs B_jk + B_kj = 0, so B is skew and
//! Z = Y B a rotation of Y. Y is a strict local minimiser up to rotations, at n^2 against the optimum 0.
//!
//! P. With s_l = e_l + e_{-l} and f_l = e_l - e_{-l}, `P = c_1 sum_{l<m} (s_l - s_m)(s_l - s_m)' + c_2 sum
//! g_l g_l'` over the lines beyond the axes, g_l = 5 f_l - 5 (v_l)_j f_j - 5 (v_l)_k f_k. Both parts are PSD and
//! annihilate 1 and Y (the first because s_l'Y = 0, the second because Y'f_l = 2 v_l). On span{s_l} less 1 the
//! first has the one eigenvalue c_1 n; the g_l span {f_l} less Y, and the nonzero eigenvalues of sum g_l g_l' are
//! those of the matrix of products g_l'g_m = 50 [l = m] + ..., which exceeds 50 I by a PSD matrix (the part on the
//! axes). So s >= min(c_1 n, 50 c_2), and with c_1 = margin (floor(n/2) + 1), c_2 = margin (floor(n^2/100) + 1) it
//! exceeds margin n^2/2.
//!
//! Widths. h >= p(p+1)/2 says n >= p(p+1), while the rank bound is p(p+1)/2 <= n: the trap's width is below the
//! bound, by a factor up to sqrt 2. Waldspurger and Waters reach p(p+1)/2 + p <= n; their condition is generic,
//! ours explicit. The trap is no part of the certificate: a test here checks the second-order form on planted
//! instances exactly.

use super::assembly::{PairDraft, column, unit_diagonal};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, Setting, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `low-width-trap`.
#[derive(Clone, Copy, Debug)]
pub struct LowWidthTrap;

static CARD: FamilyCard = FamilyCard {
    id: "low-width-trap",
    title: "Strict local minimum of the factored problem at a width below the rank bound",
    formula: "min <C,X> s.t. X_ii = 1, X PSD, rank X <= 1",
    construction: "C = nI - 11' + P, P PSD with P1 = 0 and PY = 0 for Y (n x width) of rational unit rows in antipodal \
        pairs, hidden by signs t and a permutation; Y, hidden alike, is a local minimum of <C,YY'> with value n^2",
    optimum: "0, attained by tt' only",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: S = C of rank n - 1, y = 0; the trap by the proof in the module",
    source: "after I. Waldspurger, A. Waters, Rank optimality for the Burer-Monteiro factorization, SIAM Journal on \
        Optimization 30:2577-2602, 2020, arXiv:1812.03046; this explicit cost and its proof: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 6, most: 300 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n of the matrix variable, even.",
        },
        SettingSpec {
            name: "width",
            kind: Kind::WordOrInteger { words: &["auto"], least: 2, most: 16 },
            default: DefaultSetting::Word("auto"),
            meaning: "Width p of the trap, p(p+1) <= n; `auto` takes the largest.",
        },
        SettingSpec {
            name: "margin",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(4),
            meaning: "Factor of P above what the proof needs; a larger one makes the trap's basin stiffer and the cost \
                worse conditioned.",
        },
    ],
};

/// A line through 5 v: (axis, coordinate), one entry (j, 5) for an axis or two entries of 3 and 4 up to sign.
type Line = Vec<(usize, i64)>;

impl Family for LowWidthTrap {
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
        let most = (2..).take_while(|p| p * (p + 1) <= order).last().expect("order is 6 or more");
        let width = match parameters.get("width") {
            Some(Setting::Integer(_)) => parameters.size("width"),
            _ => most.min(16),
        };
        if width > most {
            return Err(PlantError::Parameters(format!(
                "width = {width} needs order {} or more, not {order}; the nearest possible value is {most}",
                width * (width + 1)
            )));
        }
        let lines = draw_lines(stream, order / 2, width);
        let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
        let places = stream.permutation(order);
        draft(&lines, width, parameters.integer("margin"), &signs, &places).plant()
    }
}

/// Draws h lines: the axes, one of each pair of axes, then pairs at random.
fn draw_lines(stream: &mut Stream, count: usize, width: usize) -> Vec<Line> {
    let mut lines: Vec<Line> = (0..width).map(|j| vec![(j, 5)]).collect();
    let mut pairs = (0..width).flat_map(|k| (0..k).map(move |j| (j, k)));
    while lines.len() < count {
        let (j, k) = pairs.next().unwrap_or_else(|| {
            let j = stream.index(width);
            (j, (j + 1 + stream.index(width - 1)) % width)
        });
        let (left, right) = if stream.sign() > 0 { (3, 4) } else { (4, 3) };
        lines.push(vec![(j, left), (k, stream.sign() * right)]);
    }
    lines
}

/// Makes the pair with the rows of line l at `places[l]` and its negative at `places[h + l]`.
fn draft(lines: &[Line], width: usize, margin: i64, signs: &[i64], places: &[usize]) -> PairDraft {
    let (order, half) = (signs.len(), lines.len());
    let signed = |plain: Vec<(usize, i64)>| {
        let entries = plain.into_iter().map(|(i, value)| (places[i], value * signs[places[i]]));
        column(entries.collect())
    };
    let mut slack = Vec::new();
    let mut weights = Vec::new();
    for j in 0..order {
        for i in 0..j {
            slack.push(signed(vec![(i, 1), (j, -1)]));
            weights.push(1);
        }
    }
    let n = order as i64;
    for m in 0..half {
        for l in 0..m {
            slack.push(signed(vec![(l, 1), (half + l, 1), (m, -1), (half + m, -1)]));
            weights.push(margin * (n / 2 + 1));
        }
    }
    for (l, line) in lines.iter().enumerate().skip(width) {
        let own = [(l, 5), (half + l, -5)];
        let axes = line.iter().flat_map(|&(j, value)| [(j, -value), (half + j, value)]);
        slack.push(signed(own.into_iter().chain(axes).collect()));
        weights.push(margin * (n * n / 100 + 1));
    }
    PairDraft {
        rank: 1,
        factor: IntegerFactor { order, width: 1, rows: signs.to_vec() },
        slack,
        weights,
        constraints: unit_diagonal(order),
        multipliers: vec![0; order],
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use num_bigint::BigInt;

    /// Returns the leading principal minors by fraction-free elimination (E. Bareiss, Mathematics of Computation
    /// 22:565-578, 1968, from memory), up to the first that is zero.
    fn leading_minors(matrix: &[Vec<i64>]) -> Vec<BigInt> {
        let n = matrix.len();
        let mut a: Vec<Vec<BigInt>> =
            matrix.iter().map(|row| row.iter().map(|&v| BigInt::from(v)).collect()).collect();
        let mut previous = BigInt::from(1);
        let mut minors = Vec::new();
        for k in 0..n {
            let pivot = a[k][k].clone();
            minors.push(pivot.clone());
            if pivot == BigInt::from(0) {
                break;
            }
            for i in k + 1..n {
                for j in k + 1..n {
                    a[i][j] = (&a[i][j] * &pivot - &a[i][k] * &a[k][j]) / &previous;
                }
            }
            previous = pivot;
        }
        minors
    }

    fn is_positive_definite(matrix: &[Vec<i64>]) -> bool {
        let minors = leading_minors(matrix);
        minors.len() == matrix.len() && minors.iter().all(|minor| *minor > BigInt::from(0))
    }

    fn dot(a: &[i64], b: &[i64]) -> i64 {
        a.iter().zip(b).map(|(x, y)| x * y).sum()
    }

    /// The vector of the reference notes, section 4.4 (n = 6, p = 2), computed there after I. Waldspurger,
    /// A. Waters, SIAM Journal on Optimization 30:2577-2602, 2020: spurious value 1800 at width 2, optimum 0.
    #[test]
    fn the_vector_of_the_reference_notes_is_a_trap() {
        let cost: Vec<Vec<i64>> = vec![
            vec![631, -92, -65, 169, -308, -335],
            vec![-92, 694, -20, -308, 106, -380],
            vec![-65, -20, 775, -335, -380, 25],
            vec![169, -308, -335, 631, -92, -65],
            vec![-308, 106, -380, -92, 694, -20],
            vec![-335, -380, 25, -65, -20, 775],
        ];
        // Five times the rows of V.
        let rows = [[5, 0], [0, 5], [-3, -4], [-5, 0], [0, -5], [3, 4]];
        assert!(cost.iter().all(|row| row.iter().sum::<i64>() == 0), "C 1 = 0");
        let minors = leading_minors(&cost);
        assert!(minors[..5].iter().all(|minor| *minor > BigInt::from(0)));
        assert_eq!(minors[5], BigInt::from(0));
        for (i, row) in cost.iter().enumerate() {
            for axis in 0..2 {
                let image: i64 = row.iter().zip(&rows).map(|(c, v)| c * v[axis]).sum();
                assert_eq!(image, 300 * rows[i][axis], "C V = 300 V");
            }
        }
        let product = |i: usize, j: usize| dot(&rows[i], &rows[j]);
        let pairs = || (0..6).flat_map(|i| (0..6).map(move |j| (i, j)));
        assert_eq!(pairs().map(|(i, j)| cost[i][j] * product(i, j)).sum::<i64>(), 25 * 1800);
        let entry = |i: usize, j: usize| {
            let value = (cost[i][j] - if i == j { 300 } else { 0 }) * product(i, j);
            assert_eq!(value % 25, 0);
            value / 25
        };
        let hessian: Vec<Vec<i64>> =
            (0..6).map(|i| (0..6).map(|j| entry(i, j)).collect()).collect();
        assert!(hessian.iter().all(|row| row.iter().sum::<i64>() == 0), "H 1 = 0");
        let expected = [331_i64, 130_414, 61_262_640, 10_715_133_600, 1_049_760_000_000, 0];
        assert_eq!(leading_minors(&hessian), expected.map(BigInt::from));
    }

    /// Returns vectors that span the complement of 5 v in R^p, whole.
    fn tangents(line: &Line, width: usize) -> Vec<Vec<i64>> {
        let unit = |j: usize| (0..width).map(|q| i64::from(q == j)).collect::<Vec<i64>>();
        let held: Vec<usize> = line.iter().map(|entry| entry.0).collect();
        let mut out: Vec<Vec<i64>> = (0..width).filter(|j| !held.contains(j)).map(unit).collect();
        if let [(j, a), (k, b)] = line[..] {
            let mut across = vec![0; width];
            across[j] = -b;
            across[k] = a;
            out.push(across);
        }
        out
    }

    /// Proves on the planted cost, in exact arithmetic, that the second-order form of the trap is positive definite on
    /// the tangent space less the rotations: the form plus sum over skew units K of (YK)(YK)' is positive definite.
    #[test]
    fn planted_traps_are_strict_local_minima_up_to_rotations() {
        for (order, width) in [(6, 2), (8, 2), (12, 3), (16, 3), (20, 4)] {
            let mut stream = Stream::named(7, &["low-width-trap"]);
            let lines = draw_lines(&mut stream, order / 2, width);
            let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
            let places = stream.permutation(order);
            let planted = draft(&lines, width, 1, &signs, &places).plant().unwrap();
            let mut cost = vec![vec![0i64; order]; order];
            for (i, j, value) in planted.problem.cost().part(0).unwrap().to_sparse().iter() {
                cost[i][j] = value as i64;
                cost[j][i] = value as i64;
            }
            // Five times the rows of the hidden trap.
            let mut rows = vec![vec![0i64; width]; order];
            let mut tangent = Vec::new();
            for i in 0..order {
                let line = &lines[i % (order / 2)];
                let sign = if i < order / 2 { 1 } else { -1 } * signs[places[i]];
                line.iter().for_each(|&(j, value)| rows[places[i]][j] = sign * value);
                tangent.extend(tangents(line, width).into_iter().map(|z| (places[i], z)));
            }
            let n = order as i64;
            for i in 0..order {
                for axis in 0..width {
                    let image: i64 = (0..order).map(|j| cost[i][j] * rows[j][axis]).sum();
                    assert_eq!(image, n * rows[i][axis], "C Y = n Y");
                }
            }
            let along = |(i, z): &(usize, Vec<i64>), p: usize, q: usize| {
                rows[*i][p] * z[q] - rows[*i][q] * z[p]
            };
            let entry = |a: &(usize, Vec<i64>), b: &(usize, Vec<i64>), rotations: bool| {
                let shift = if a.0 == b.0 { n } else { 0 };
                let mut sum = (cost[a.0][b.0] - shift) * dot(&a.1, &b.1);
                for q in 0..if rotations { width } else { 0 } {
                    for p in 0..q {
                        sum += along(a, p, q) * along(b, p, q);
                    }
                }
                sum
            };
            let form = |rotations: bool| -> Vec<Vec<i64>> {
                tangent
                    .iter()
                    .map(|a| tangent.iter().map(|b| entry(a, b, rotations)).collect())
                    .collect()
            };
            assert!(is_positive_definite(&form(true)), "order {order}, width {width}");
            assert!(!is_positive_definite(&form(false)), "rotations stay in the kernel");
        }
    }
}
