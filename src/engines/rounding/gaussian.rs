//! Random projection of a relaxation's factor to fewer columns: X0 = V G G'V', G Gaussian with variance 1/d.
//!
//! Source: A. So, Y. Ye, J. Zhang, Mathematics of Operations Research 33:910-920, 2008, 10.1287/moor.1080.0326
//! (bibliographic data from memory). When all A_i are positive semidefinite, a draw keeps every <A_i, X0> within
//! [`bounds`] times <A_i, X> with probability at least 1/4; for indefinite A_i nothing is proved. The draws are then
//! brought back onto A(X) = b: by the length of rows where the diagonal is fixed and nothing else, by
//! [`super::restore`] in general. (The source stops before that, its constraints being approximate.)

use super::restore::{RestoreParams, Restorer};
use crate::budget::{Halt, Meter, TracePoint};
use crate::engines::alm::spheres::cost::SphereBlock;
use crate::engines::alm::spheres::{normalise_rows, projected, stretched};
use crate::engines::alm::start::{numerical_rank, resized};
use crate::linalg::Mat;
use crate::linalg::eigen::SymmetricEigen;
use crate::linalg::vector::{distance, norm2, scale};
use crate::problem::{Coefficient, Factor, Operator, Problem};
use crate::seed::Stream;

/// A factor whose eigenvalues beyond the target are at most this share of the largest needs no projection.
const LOW: f64 = 1e-9;
/// See [`Quality`].
const FEASIBLE: f64 = 1e-7;
/// Size of the entries in columns added to a factor without rank bound, relative to its own.
const NOISE: f64 = 0.1;
/// Support up to which a constraint's definiteness is looked at.
const SUPPORT: usize = 200;

/// Returns (beta, alpha) of the source for m constraints on matrices of order n and a projection to d columns:
///
/// ```text
/// alpha = 1 + 12 ln(4mn)/d        for d <= 12 ln(4mn), else 1 + sqrt(12 ln(4mn)/d)
/// beta  = 1/(e (2m)^(2/d))        for d <= 4 ln(2m),   else the greater of that and 1 - sqrt(4 ln(2m)/d)
/// ```
///
/// (The constants are from memory and were derived anew from tail bounds of the chi-square distribution.)
#[track_caller]
pub fn bounds(m: usize, n: usize, d: usize) -> (f64, f64) {
    assert!(m > 0 && n > 0 && d > 0, "bounds of {m} constraints, order {n}, {d} columns");
    let (m, n, d) = (m as f64, n as f64, d as f64);
    let upper = 12.0 * (4.0 * m * n).ln() / d;
    let alpha = 1.0 + if upper >= 1.0 { upper } else { upper.sqrt() };
    let lower = 4.0 * (2.0 * m).ln() / d;
    let weak = 1.0 / (std::f64::consts::E * (2.0 * m).powf(2.0 / d));
    let beta = if lower >= 1.0 { weak } else { weak.max(1.0 - lower.sqrt()) };
    (beta, alpha)
}

/// Projects a factor: returns V G, G of `width` columns with independent normal entries of variance 1/width.
pub fn project(factor: &Factor, width: usize, stream: &mut Stream) -> Factor {
    let mut out = projected(factor, width, stream);
    scale(1.0 / (width as f64).sqrt(), &mut out.data);
    out
}

/// Counts the constraints that are seen to be positive semidefinite on all blocks with a rank bound: sums of outer
/// products with weights >= 0, and sparse matrices on at most 200 indices with least eigenvalue at least -1e-12 times
/// the largest modulus.
pub fn count_semidefinite(problem: &Problem) -> usize {
    let bounded = |block: usize| problem.blocks()[block].rank.is_some();
    problem
        .constraints()
        .iter()
        .filter(|a| a.parts.iter().all(|(block, part)| !bounded(*block) || semidefinite(part)))
        .count()
}

fn semidefinite(part: &Coefficient) -> bool {
    if let Coefficient::Outer(sum) = part
        && sum.terms.iter().all(|term| term.weight >= 0.0)
    {
        return true;
    }
    let entries = part.to_sparse();
    let mut support: Vec<usize> = entries.iter().flat_map(|(i, j, _)| [i, j]).collect();
    support.sort_unstable();
    support.dedup();
    if support.is_empty() {
        return true;
    }
    if support.len() > SUPPORT {
        return false;
    }
    let place = |i: usize| support.binary_search(&i).expect("an index of the support");
    let mut matrix = Mat::zeros(support.len(), support.len());
    for (i, j, value) in entries.iter() {
        matrix[(place(i), place(j))] = value;
        matrix[(place(j), place(i))] = value;
    }
    let mut eigen = SymmetricEigen::new(support.len());
    eigen.decompose_values_only(matrix.as_ref()).is_ok_and(|()| {
        let largest = eigen.values().iter().fold(0.0_f64, |m, v| m.max(v.abs()));
        eigen.values()[0] >= -1e-12 * largest
    })
}

/// What points are compared by.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Quality {
    /// Objective.
    pub objective: f64,
    /// ||A(X) - b||_2 / (1 + ||b||_2).
    pub feasibility: f64,
}

impl Quality {
    /// Tells whether this is the better one: a feasible point (at most 1e-7) before one that is not, then the lower objective, or
    /// the smaller residual.
    pub fn better_than(&self, other: &Quality) -> bool {
        match (self.feasibility <= FEASIBLE, other.feasibility <= FEASIBLE) {
            (true, true) => self.objective < other.objective,
            (false, false) => self.feasibility < other.feasibility,
            (now, _) => now,
        }
    }
}

/// How draws are brought back onto the constraints.
#[derive(Clone, Copy, Debug)]
pub enum Onto<'a> {
    /// By the length of rows: the constraints fix the diagonal of these blocks and nothing else.
    Rows(&'a [SphereBlock]),
    /// By Gauss-Newton steps.
    Constraints(RestoreParams),
}

/// Settings of a rounding.
#[derive(Clone, Copy, Debug)]
pub struct GaussianParams<'a> {
    /// Draws.
    pub draws: usize,
    /// How they are brought back.
    pub onto: Onto<'a>,
}

/// What a rounding found.
#[derive(Clone, Debug)]
pub struct GaussianOutcome {
    /// Factors of the best draw.
    pub factors: Vec<Factor>,
    /// Nonnegative part of the best draw.
    pub orthant: Vec<f64>,
    /// Its objective and residual.
    pub quality: Quality,
    /// Draws made; none when every factor had its target width already, and then the point is the relaxation's.
    pub draws: usize,
    /// Draws that kept every <A_i, X0> within [`bounds`] times <A_i, X>, before they were brought back.
    pub within: usize,
    /// Why it ended early, if it did.
    pub halt: Option<Halt>,
}

/// Projects the relaxation's factors to the rank bounds, several times, and keeps the best draw: feasible before
/// infeasible, then the lower objective, or the smaller residual.
///
/// Blocks whose factor has the target rank already keep it. So do blocks without a rank bound, but when others are
/// projected they get columns of small Gaussian entries up to the rank bound of the whole problem plus one: they have
/// to make up for what changes elsewhere. The first draw is made even when the budget has ended.
pub fn round(
    problem: &Problem,
    op: &Operator,
    factors: &[Factor],
    orthant: &[f64],
    params: &GaussianParams<'_>,
    stream: &mut Stream,
    meter: &mut Meter,
) -> GaussianOutcome {
    let low = |factor: &Factor, rank: Option<usize>| {
        rank.is_none_or(|rank| factor.width <= rank || numerical_rank(factor, LOW) <= rank)
    };
    // 1. What stays as it is, and the widths of the result.
    let ranks: Vec<Option<usize>> = problem.blocks().iter().map(|block| block.rank).collect();
    let kept: Vec<bool> = factors.iter().zip(&ranks).map(|(f, r)| low(f, *r)).collect();
    let draws = if kept.iter().all(|kept| *kept) { 0 } else { params.draws.max(1) };
    let free = if draws > 0 { problem.rank_bound() + 1 } else { 0 };
    let widths: Vec<usize> = factors
        .iter()
        .zip(&ranks)
        .map(|(f, r)| r.unwrap_or(free.min(f.order).max(f.width)))
        .collect();
    let mut work: Vec<Factor> = factors.iter().zip(&widths).map(|(f, w)| resized(f, *w)).collect();
    let mut x = orthant.to_vec();
    let mut values = vec![0.0; op.constraints()];
    let mut best = GaussianOutcome {
        quality: quality(problem, op, &work, orthant, &mut values),
        factors: work.clone(),
        orthant: orthant.to_vec(),
        draws: 0,
        within: 0,
        halt: None,
    };
    let mut restorer = match params.onto {
        Onto::Rows(_) => None,
        Onto::Constraints(settings) => Some((Restorer::new(problem, op, &widths), settings)),
    };
    let test = Closeness::new(problem, op, factors, &kept, &widths);
    while best.draws < draws && best.halt.is_none() {
        // 2. Project.
        x.copy_from_slice(orthant);
        for k in (0..work.len()).filter(|k| !kept[*k]) {
            work[k] = project(&factors[k], widths[k], stream);
        }
        for k in (0..work.len()).filter(|k| factors[*k].width < widths[*k] && kept[*k]) {
            work[k] = resized(&factors[k], widths[k]);
            fill_columns(&mut work[k], factors[k].width, stream);
        }
        best.within += usize::from(test.holds(op, &work, &mut values));
        meter.effort.operator_products += 2;
        meter.effort.flops += 2 * op.flops_factors(&work);
        // 3. Bring back onto the constraints.
        match (&mut restorer, params.onto) {
            (Some((restorer, settings)), _) => {
                best.halt = restorer.restore(&mut work, &mut x, settings, meter).halt;
            }
            (None, Onto::Rows(blocks)) => {
                for (factor, block) in work.iter_mut().zip(blocks) {
                    normalise_rows(factor, stream);
                    *factor = stretched(std::mem::replace(factor, Factor::zeros(0, 0)), block);
                }
            }
            (None, Onto::Constraints(_)) => unreachable!("a restorer was made"),
        }
        // 4. Keep the best.
        let now = quality(problem, op, &work, &x, &mut values);
        // The start is the truncated relaxation, no draw: the first draw takes its place.
        if now.better_than(&best.quality) || best.draws == 0 {
            best.factors.clone_from_slice(&work);
            best.orthant.copy_from_slice(&x);
            best.quality = now;
        }
        best.draws += 1;
        best.halt = best.halt.or_else(|| meter.check().err());
        let (objective, residual) = (Some(best.quality.objective), Some(best.quality.feasibility));
        meter.trace(TracePoint { objective, residual, tail: Some(0.0), ..TracePoint::default() });
    }
    best
}

/// Measures objective and residual of a point.
fn quality(
    problem: &Problem,
    op: &Operator,
    factors: &[Factor],
    x: &[f64],
    values: &mut [f64],
) -> Quality {
    op.apply_factors(factors, x, values);
    let feasibility = distance(values, problem.rhs()) / (1.0 + norm2(problem.rhs()));
    Quality { objective: op.cost_of_factors(factors, x), feasibility }
}

/// Fills the columns from `first` on with small Gaussian entries.
fn fill_columns(factor: &mut Factor, first: usize, stream: &mut Stream) {
    let entries = (factor.order * first.max(1)) as f64;
    let size = NOISE * norm2(&factor.data) / entries.sqrt();
    for i in 0..factor.order {
        factor.row_mut(i)[first..].iter_mut().for_each(|value| *value = size * stream.normal());
    }
}

/// The test of a draw against the source's bounds.
struct Closeness {
    /// <A_i, X> of the relaxation's point over the PSD blocks.
    targets: Vec<f64>,
    bounds: (f64, f64),
}

impl Closeness {
    fn new(
        problem: &Problem,
        op: &Operator,
        factors: &[Factor],
        kept: &[bool],
        widths: &[usize],
    ) -> Self {
        let mut targets = vec![0.0; op.constraints()];
        op.apply_factors(factors, &vec![0.0; problem.orthant()], &mut targets);
        let drawn = || (0..kept.len()).filter(|k| !kept[*k]);
        let least = drawn().map(|k| widths[k]).min().unwrap_or(1).max(1);
        let order = drawn().map(|k| factors[k].order).sum::<usize>().max(1);
        Closeness { targets, bounds: bounds(op.constraints().max(1), order, least) }
    }

    fn holds(&self, op: &Operator, factors: &[Factor], values: &mut [f64]) -> bool {
        values.fill(0.0);
        for (block, factor) in op.blocks.iter().zip(factors) {
            block.add_pair(factor, factor, 1.0, values);
        }
        let (beta, alpha) = self.bounds;
        let slack = 1e-12 * (1.0 + self.targets.iter().fold(0.0_f64, |m, t| m.max(t.abs())));
        self.targets
            .iter()
            .zip(values.iter())
            .all(|(t, v)| *v >= beta * t - slack && *v <= alpha * t + slack)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::{Block, Functional, OuterSum, OuterTerm, SparseVector};

    /// Random constraints of rank one or two with weights > 0 and a random X of rank 8: (problem, factor of X).
    fn instance(m: usize, n: usize, draw: &mut Stream) -> (Problem, Factor) {
        let constraints: Vec<Functional> = (0..m)
            .map(|k| {
                let terms = (0..1 + k % 2)
                    .map(|_| OuterTerm {
                        weight: 0.5 + draw.uniform(),
                        vector: SparseVector::gather(
                            (0..n).map(|i| (i as u32, draw.normal())).collect(),
                        ),
                    })
                    .collect();
                Functional::on_block(0, Coefficient::Outer(OuterSum { order: n, terms }))
            })
            .collect();
        let data = (0..n * 8).map(|_| draw.normal()).collect();
        let factor = Factor { order: n, width: 8, data };
        let blocks = vec![Block { order: n, rank: Some(1) }];
        let cost = Functional::default();
        (Problem::new(blocks, 0, cost, constraints, vec![1.0; m]).unwrap(), factor)
    }

    /// So, Ye and Zhang 2008, main theorem: a draw is within the bounds with probability at least 1/4. A one-sided
    /// binomial test over 400 draws: fewer than 73 successes have probability below 1e-3 at 1/4.
    #[test]
    fn a_draw_is_within_the_bounds_at_least_a_quarter_of_the_time() {
        let mut draw = Stream::named(8, &["so-ye-zhang"]);
        for d in [1, 2, 5] {
            let (problem, factor) = instance(30, 20, &mut draw);
            let op = Operator::new(&problem);
            let test = Closeness::new(&problem, &op, std::slice::from_ref(&factor), &[false], &[d]);
            let mut values = vec![0.0; 30];
            let hits = (0..400)
                .filter(|_| test.holds(&op, &[project(&factor, d, &mut draw)], &mut values))
                .count();
            assert!(hits >= 73, "{hits} of 400 at d = {d}");
        }
    }

    /// The mean of V G G'V' is V V': the mean of <A, X0> over 4000 draws is within five standard errors.
    #[test]
    fn a_projection_keeps_the_mean() {
        let mut draw = Stream::named(9, &["mean"]);
        let (problem, factor) = instance(3, 10, &mut draw);
        let op = Operator::new(&problem);
        let mut target = vec![0.0; 3];
        op.apply_factors(std::slice::from_ref(&factor), &[], &mut target);
        let (mut sums, mut squares) = ([0.0; 3], [0.0; 3]);
        let mut values = vec![0.0; 3];
        let count = 4000.0;
        for _ in 0..4000 {
            op.apply_factors(&[project(&factor, 3, &mut draw)], &[], &mut values);
            for k in 0..3 {
                sums[k] += values[k];
                squares[k] += values[k] * values[k];
            }
        }
        for k in 0..3 {
            let mean = sums[k] / count;
            let error = ((squares[k] / count - mean * mean) / count).sqrt();
            assert!((mean - target[k]).abs() < 5.0 * error, "{mean} {} {error}", target[k]);
            // A projection that forgot its scale would be off by a factor of 3.
            assert!(error < 0.1 * target[k]);
        }
    }

    #[test]
    fn the_formulas_of_the_bounds_at_hand_computed_places() {
        // d = 1: beta = 1/(e (2m)^2), alpha = 1 + 12 ln(4mn).
        let (beta, alpha) = bounds(5, 10, 1);
        assert!((beta - (-1.0_f64).exp() / 100.0).abs() < 1e-15);
        assert!((alpha - (1.0 + 12.0 * 200.0_f64.ln())).abs() < 1e-12);
        // Large d: both tend to 1.
        let (beta, alpha) = bounds(5, 10, 100_000);
        assert!((beta - (1.0 - (4.0 * 10.0_f64.ln() / 1e5).sqrt())).abs() < 1e-12);
        assert!((alpha - (1.0 + (12.0 * 200.0_f64.ln() / 1e5).sqrt())).abs() < 1e-12);
    }

    #[test]
    fn definiteness_is_seen() {
        use crate::problem::SparseSymmetric;
        let sparse = |entries: Vec<(usize, usize, f64)>| {
            Coefficient::Sparse(SparseSymmetric::gather(4, entries))
        };
        assert!(semidefinite(&sparse(vec![(1, 1, 1.0), (1, 3, -1.0), (3, 3, 1.0)])));
        assert!(!semidefinite(&sparse(vec![(1, 3, 1.0)])));
        let term = |weight: f64| OuterTerm {
            weight,
            vector: SparseVector::gather(vec![(0, 1.0), (2, 1.0)]),
        };
        let outer =
            |weight: f64| Coefficient::Outer(OuterSum { order: 4, terms: vec![term(weight)] });
        assert!(semidefinite(&outer(2.0)) && !semidefinite(&outer(-2.0)));
    }
}
