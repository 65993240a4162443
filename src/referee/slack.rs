//! The slack S = C - A*(y), block by block, entry by entry, each entry with a bound of its error.

use crate::linalg::compensated::{Accumulator, UNIT_ROUNDOFF, two_product};
use crate::problem::{Coefficient, Problem, SparseSymmetric};

/// Largest order of a block that is accumulated in a full triangle when its data are dense.
const FULL_ORDER: usize = 2000;

/// Most terms that are gathered for one block otherwise.
const MOST_TERMS: usize = 1 << 25;

/// One entry of the upper triangle of S: the true entry differs from `value` by at most `radius`.
#[derive(Clone, Copy, Debug)]
pub(super) struct Entry {
    pub row: usize,
    pub column: usize,
    pub value: f64,
    pub radius: f64,
}

/// One block of S. Entries that are not listed are exactly zero.
#[derive(Clone, Debug)]
pub(super) struct SlackBlock {
    pub order: usize,
    pub entries: Vec<Entry>,
}

/// One term `coefficient * multiplier` of an entry; the coefficient is off by at most `slack / |multiplier|`.
struct Term {
    key: u64,
    coefficient: f64,
    multiplier: f64,
    slack: f64,
}

/// Evaluates block `block` of S = C - sum_i y_i A_i with error bounds.
///
/// Data that hold at least n(n+1)/2 terms are accumulated in a full triangle, sparser ones are gathered
/// and sorted; none comes back when that would take too much memory (an order above 2000 or more than
/// 2^25 terms).
pub(super) fn block(problem: &Problem, y: &[f64], block: usize) -> Option<SlackBlock> {
    let order = problem.blocks()[block].order;
    let parts: Vec<(&Coefficient, f64)> = std::iter::once((problem.cost(), 1.0))
        .chain(problem.constraints().iter().zip(y.iter().map(|value| -value)))
        .filter(|(_, multiplier)| *multiplier != 0.0)
        .filter_map(|(functional, multiplier)| {
            functional.part(block).map(|part| (part, multiplier))
        })
        .collect();
    let terms: usize =
        parts.iter().map(|(part, _)| term_count(part)).fold(0, usize::saturating_add);
    if order <= FULL_ORDER && terms >= order * (order + 1) / 2 {
        Some(accumulate(order, &parts))
    } else if terms <= MOST_TERMS {
        Some(gather(order, &parts))
    } else {
        None
    }
}

fn term_count(coefficient: &Coefficient) -> usize {
    match coefficient {
        Coefficient::Sparse(matrix) => matrix.stored(),
        Coefficient::Outer(sum) => {
            let pairs = |n: usize| n.saturating_mul(n + 1) / 2;
            sum.terms.iter().map(|term| pairs(term.vector.len())).fold(0, usize::saturating_add)
        }
    }
}

/// Calls `visit(i, j, value, error)` with i <= j for every term of a coefficient: the true term is
/// within `error` of `value`.
fn visit_terms(coefficient: &Coefficient, mut visit: impl FnMut(usize, usize, f64, f64)) {
    let sparse = |matrix: &SparseSymmetric, visit: &mut dyn FnMut(usize, usize, f64, f64)| {
        matrix.iter().for_each(|(i, j, value)| visit(i, j, value, 0.0));
    };
    match coefficient {
        Coefficient::Sparse(matrix) => sparse(matrix, &mut visit),
        Coefficient::Outer(sum) => {
            for term in &sum.terms {
                for (position, (i, a)) in term.vector.iter().enumerate() {
                    let (weighted, first) = two_product(term.weight, a);
                    for (j, b) in term.vector.iter().skip(position) {
                        let (value, second) = two_product(weighted, b);
                        visit(i, j, value, product_error(value, first, second));
                    }
                }
            }
        }
    }
}

/// Bounds the error of a product of three numbers whose two roundings left `first` and `second`: none
/// when both are zero; else two relative errors u of the result, and what underflow can add.
fn product_error(value: f64, first: f64, second: f64) -> f64 {
    if first == 0.0 && second == 0.0 {
        0.0
    } else {
        3.0 * UNIT_ROUNDOFF * value.abs() + f64::MIN_POSITIVE
    }
}

/// Closes the accumulated value of an entry.
fn close(row: usize, column: usize, sum: &Accumulator, slack: f64) -> Entry {
    // The slack is a sum of rounded nonnegative numbers: one part in 2^20 covers its rounding.
    let radius = (sum.error_bound() + slack) * (1.0 + 1.0 / 1048576.0);
    Entry { row, column, value: sum.value(), radius }
}

fn accumulate(order: usize, parts: &[(&Coefficient, f64)]) -> SlackBlock {
    let mut sums = vec![(Accumulator::new(), 0.0); order * (order + 1) / 2];
    for (coefficient, multiplier) in parts {
        visit_terms(coefficient, |i, j, value, error| {
            let (sum, slack) = &mut sums[j * (j + 1) / 2 + i];
            sum.add_product(value, *multiplier);
            *slack += error * multiplier.abs();
        });
    }
    let mut entries = Vec::with_capacity(sums.len());
    let mut position = 0;
    for column in 0..order {
        for row in 0..=column {
            let (sum, slack) = &sums[position];
            position += 1;
            if sum.terms() > 0 {
                entries.push(close(row, column, sum, *slack));
            }
        }
    }
    SlackBlock { order, entries }
}

fn gather(order: usize, parts: &[(&Coefficient, f64)]) -> SlackBlock {
    let mut terms = Vec::new();
    for (coefficient, multiplier) in parts {
        visit_terms(coefficient, |i, j, value, error| {
            terms.push(Term {
                key: (j as u64) << 32 | i as u64,
                coefficient: value,
                multiplier: *multiplier,
                slack: error * multiplier.abs(),
            });
        });
    }
    terms.sort_by_key(|term| term.key);
    let mut entries = Vec::new();
    for group in terms.chunk_by(|a, b| a.key == b.key) {
        let mut sum = Accumulator::new();
        let mut slack = 0.0;
        for term in group {
            sum.add_product(term.coefficient, term.multiplier);
            slack += term.slack;
        }
        let key = group[0].key;
        entries.push(close((key & 0xffff_ffff) as usize, (key >> 32) as usize, &sum, slack));
    }
    SlackBlock { order, entries }
}

/// Evaluates the nonnegative part of the slack: values and error bounds.
pub(super) fn orthant(problem: &Problem, y: &[f64]) -> Vec<(f64, f64)> {
    let mut sums = vec![Accumulator::new(); problem.orthant()];
    for (i, value) in problem.cost().orthant.iter() {
        sums[i].add(value);
    }
    for (constraint, multiplier) in problem.constraints().iter().zip(y) {
        for (i, value) in constraint.orthant.iter() {
            sums[i].add_product(value, -multiplier);
        }
    }
    sums.iter().map(|sum| (sum.value(), sum.error_bound())).collect()
}
