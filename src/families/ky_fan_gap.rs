//! `ky-fan-gap`: a planted rank-r optimum of any rank above a strictly lower relaxation.

use super::assembly::{IntegerCoefficient, TriangleSum, draw_nonzero, draw_sparse, float, problem};
use super::hadamard::{hadamard, nearest_order};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, Setting, SettingSpec, Settings};
use crate::problem::certificate::{Certificate, IntegerFactor, Planted, RankBound, RelaxationFact};
use crate::problem::{Block, Coefficient, Functional, SparseSymmetric};
use crate::seed::Stream;

/// The family `ky-fan-gap`.
#[derive(Clone, Copy, Debug)]
pub struct KyFanGap;

/// Entries drawn for each coupling constraint.
const ENTRIES: usize = 4;

/// Draws of a whole instance before the family gives up.
const TRIES: usize = 50;

const LEAST_ORDER: usize = 4;
const MOST_ORDER: usize = 128;

static CARD: FamilyCard = FamilyCard {
    id: "ky-fan-gap",
    title: "Rank-r optimum at the Ky Fan bound of 0 <= X <= nI, above the relaxation",
    formula: "min <C,X> s.t. <A_i,X> = b_i (i = 1..m0), X + Z = nI entry by entry, X and Z PSD, \
        rank X <= r",
    construction: "H a Hadamard matrix with rows and columns permuted and signed; S = sum l_j h_j h_j' \
        with r leading negatives l, q further negatives and the rest from {0, 1, 2}; A_i sparse, \
        X* = sum_{j<=r} h_j h_j', b = A(X*), C = A*(y) + S",
    optimum: "b'y + n^2 (l_1 + .. + l_r), attained by X* of rank r only",
    relaxation: Relaxation::Gap,
    certificate: "rank bound, exact; that the relaxation is strictly lower by a rank modulo 2^61 - 1",
    source: "own construction on K. Fan, Proceedings of the National Academy of Sciences 35:652-655, 1949 (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: LEAST_ORDER as i64, most: MOST_ORDER as i64 },
            default: DefaultSetting::Integer(12),
            meaning: "Order n of X, a Hadamard order: 4, 8, 12, .., 48 and many multiples of 4 above.",
        },
        SettingSpec {
            name: "rank",
            kind: Kind::Integer { least: 1, most: 127 },
            default: DefaultSetting::Integer(2),
            meaning: "Rank r of the planted point and rank bound of X.",
        },
        SettingSpec {
            name: "negatives",
            kind: Kind::Integer { least: 1, most: 127 },
            default: DefaultSetting::Integer(2),
            meaning: "Further negative eigenvalues q of S, r + q <= n: what the relaxation gains by rank.",
        },
        SettingSpec {
            name: "couplings",
            kind: Kind::WordOrInteger { words: &["auto"], least: 0, most: 4096 },
            default: DefaultSetting::Word("auto"),
            meaning: "Constraints m0 on X alone, at most r(n - r); `auto` takes min(n, r(n - r)).",
        },
    ],
};

struct Sizes {
    order: usize,
    rank: usize,
    negatives: usize,
    couplings: usize,
}

impl Family for KyFanGap {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let sizes = sizes(parameters)?;
        let columns = draw_columns(&sizes, stream)?;
        for _ in 0..TRIES {
            let planted = draw(&sizes, &columns, stream)?;
            if planted.proof.relaxation == RelaxationFact::StrictlyLower {
                return Ok(planted);
            }
        }
        Err(PlantError::Parameters(format!(
            "{TRIES} draws of ky-fan-gap with order = {}, rank = {} and couplings = {} were degenerate; \
             fewer couplings are easier to draw",
            sizes.order, sizes.rank, sizes.couplings
        )))
    }
}

fn sizes(parameters: &Settings) -> Result<Sizes, PlantError> {
    let order = parameters.size("order");
    let (rank, negatives) = (parameters.size("rank"), parameters.size("negatives"));
    let refuse = |what: &str, found: usize, why: String, nearest: usize| {
        Err(PlantError::Parameters(format!(
            "{what} = {found} {why}; the nearest possible value is {nearest}"
        )))
    };
    if hadamard(order).is_none() {
        let nearest = nearest_order(order, LEAST_ORDER, MOST_ORDER);
        return refuse("order", order, "is no order of a known matrix here".to_owned(), nearest);
    }
    if rank >= order {
        let nearest = order - negatives.min(order - 1);
        return refuse("rank", rank, format!("is not below order = {order}"), nearest);
    }
    if rank + negatives > order {
        let why = format!("exceeds order - rank = {}", order - rank);
        return refuse("negatives", negatives, why, order - rank);
    }
    let most = rank * (order - rank);
    let couplings = match parameters.get("couplings") {
        Some(Setting::Integer(_)) => parameters.size("couplings"),
        _ => order.min(most),
    };
    if couplings > most {
        return refuse("couplings", couplings, format!("exceeds r(n - r) = {most}"), most);
    }
    Ok(Sizes { order, rank, negatives, couplings })
}

/// Draws a Hadamard matrix by columns, with rows and columns permuted and signed.
fn draw_columns(sizes: &Sizes, stream: &mut Stream) -> Result<Vec<Vec<i64>>, PlantError> {
    let order = sizes.order;
    let matrix = hadamard(order)
        .ok_or_else(|| PlantError::Parameters(format!("order = {order} has no matrix here")))?;
    let (rows, columns) = (stream.permutation(order), stream.permutation(order));
    let row_signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
    let column_signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
    let entry = |i: usize, j: usize| matrix[rows[i]][columns[j]] * row_signs[i] * column_signs[j];
    Ok((0..order).map(|j| (0..order).map(|i| entry(i, j)).collect()).collect())
}

fn draw(sizes: &Sizes, columns: &[Vec<i64>], stream: &mut Stream) -> Result<Planted, PlantError> {
    let (n, r) = (sizes.order, sizes.rank);
    let mut spectrum: Vec<i64> = (0..n)
        .map(|j| match j {
            j if j < r => stream.between(-4, -3),
            j if j < r + sizes.negatives => stream.between(-2, -1),
            _ => stream.between(0, 2),
        })
        .collect();
    spectrum.sort_unstable();
    let rows = (0..n).flat_map(|i| columns[..r].iter().map(move |h| h[i])).collect();
    let point = IntegerFactor { order: n, width: r, rows };
    let mut cost = TriangleSum::new(n);
    for (h, &eigenvalue) in columns.iter().zip(&spectrum) {
        for j in 0..n {
            for i in 0..=j {
                cost.add(i, j, i128::from(eigenvalue * h[i] * h[j]));
            }
        }
    }
    let (mut constraints, mut rhs, mut multipliers) = (Vec::new(), Vec::new(), Vec::new());
    for _ in 0..sizes.couplings {
        let drawn = draw_sparse(stream, n, ENTRIES);
        let y = draw_nonzero(stream, 2);
        let IntegerCoefficient::Sparse(entries) = &drawn else {
            unreachable!("draw_sparse draws sparse coefficients");
        };
        entries.iter().for_each(|&(i, j, value)| cost.add(i, j, i128::from(value * y)));
        rhs.push(float(drawn.value(&point, &vec![1; r]))?);
        let entries = entries.iter().map(|&(i, j, value)| (i, j, value as f64)).collect();
        let part = Coefficient::Sparse(SparseSymmetric::gather(n, entries));
        constraints.push(Functional::on_block(0, part));
        multipliers.push(y);
    }
    for j in 0..n {
        for i in 0..=j {
            let entry = Coefficient::Sparse(SparseSymmetric::gather(n, vec![(i, j, 1.0)]));
            let parts = vec![(0, entry.clone()), (1, entry)];
            constraints.push(Functional { parts, ..Functional::default() });
            rhs.push(if i == j { n as f64 } else { 0.0 });
        }
    }
    let blocks = vec![Block { order: n, rank: Some(r) }, Block { order: n, rank: None }];
    let cost = Functional::on_block(0, cost.floats()?);
    let problem = problem(blocks, cost, constraints, rhs)?;
    let bound = RankBound { rank: r, columns: columns.to_vec(), spectrum, multipliers };
    Ok(Planted::prove(problem, Certificate::RankBound(bound))?)
}
