//! What the families share: whole-number draws of factors and slacks, and the assembly of a problem
//! from a dual pair. No family lives here.

use std::collections::BTreeMap;

use super::PlantError;
use crate::problem::certificate::{
    BlockPair, Certificate, CertificateError, DualPair, IntegerColumn, IntegerFactor, Planted,
    PlantedPoint, VerifiedPair,
};
use crate::problem::{
    Block, Coefficient, Functional, OuterSum, OuterTerm, Problem, SparseSymmetric, SparseVector,
};
use crate::seed::Stream;

/// A symmetric coefficient in whole numbers, before it becomes floats.
#[derive(Clone, Debug, PartialEq)]
pub(super) enum IntegerCoefficient {
    /// Entries `(i, j, value)` with i <= j, each position once; both triangles are meant.
    Sparse(Vec<(usize, usize, i64)>),
    /// `a a'` for a sparse vector a.
    Outer(Vec<(usize, i64)>),
}

impl IntegerCoefficient {
    /// Returns the identity.
    pub(super) fn identity(order: usize) -> Self {
        IntegerCoefficient::Sparse((0..order).map(|i| (i, i, 1)).collect())
    }

    /// Adds up entries at equal positions, drops zeros and sorts by (column, row).
    pub(super) fn gather(mut entries: Vec<(usize, usize, i64)>) -> Self {
        for entry in &mut entries {
            if entry.0 > entry.1 {
                std::mem::swap(&mut entry.0, &mut entry.1);
            }
        }
        entries.sort_by_key(|&(i, j, _)| (j, i));
        let mut out: Vec<(usize, usize, i64)> = Vec::with_capacity(entries.len());
        for (i, j, value) in entries {
            match out.last_mut() {
                Some(last) if (last.0, last.1) == (i, j) => last.2 += value,
                _ => out.push((i, j, value)),
            }
        }
        out.retain(|entry| entry.2 != 0);
        IntegerCoefficient::Sparse(out)
    }

    /// Returns `<A, V G V'>` for a diagonal G, V by rows.
    pub(super) fn value(&self, factor: &IntegerFactor, diagonal: &[i64]) -> i128 {
        let weigh = |left: &[i64], right: &[i64]| -> i128 {
            let terms = left.iter().zip(right).zip(diagonal);
            terms.map(|((&a, &b), &g)| i128::from(a) * i128::from(b) * i128::from(g)).sum()
        };
        match self {
            IntegerCoefficient::Sparse(entries) => entries
                .iter()
                .map(|&(i, j, value)| {
                    let copies = if i == j { 1 } else { 2 };
                    copies * i128::from(value) * weigh(factor.row(i), factor.row(j))
                })
                .sum(),
            IntegerCoefficient::Outer(vector) => {
                let image: Vec<i64> = (0..factor.width)
                    .map(|p| vector.iter().map(|&(i, value)| value * factor.row(i)[p]).sum())
                    .collect();
                weigh(&image, &image)
            }
        }
    }

    /// Returns the upper triangle of V'A V, packed by columns. The coefficient is sparse.
    pub(super) fn compressed(&self, factor: &IntegerFactor) -> Vec<i64> {
        let IntegerCoefficient::Sparse(entries) = self else {
            unreachable!("only sparse coefficients are compressed");
        };
        let mut packed = Vec::with_capacity(factor.width * (factor.width + 1) / 2);
        for q in 0..factor.width {
            for p in 0..=q {
                let term = |&(i, j, value): &(usize, usize, i64)| {
                    let (left, right) = (factor.row(i), factor.row(j));
                    let mirrored = if i == j { 0 } else { right[p] * left[q] };
                    value * (left[p] * right[q] + mirrored)
                };
                packed.push(entries.iter().map(term).sum());
            }
        }
        packed
    }

    /// Returns whether A V = 0.
    pub(super) fn annihilates(&self, factor: &IntegerFactor) -> bool {
        let image = match self {
            IntegerCoefficient::Sparse(entries) => {
                let mut terms = Vec::with_capacity(2 * entries.len());
                for &(i, j, value) in entries {
                    terms.push((i, j, value));
                    if i != j {
                        terms.push((j, i, value));
                    }
                }
                terms
            }
            // a a'V = 0 if and only if V'a = 0: one row suffices.
            IntegerCoefficient::Outer(vector) => {
                vector.iter().map(|&(j, value)| (0, j, value)).collect()
            }
        };
        let mut rows: BTreeMap<usize, Vec<i64>> = BTreeMap::new();
        for (i, j, value) in image {
            let row = rows.entry(i).or_insert_with(|| vec![0; factor.width]);
            for (sum, v) in row.iter_mut().zip(factor.row(j)) {
                *sum += value * v;
            }
        }
        rows.values().flatten().all(|&value| value == 0)
    }

    /// Visits the entries of the upper triangle as `(i, j, value)`.
    fn visit(&self, visit: &mut impl FnMut(usize, usize, i128)) {
        match self {
            IntegerCoefficient::Sparse(entries) => {
                for &(i, j, value) in entries {
                    visit(i, j, i128::from(value));
                }
            }
            IntegerCoefficient::Outer(vector) => visit_outer(vector, 1, visit),
        }
    }

    fn floats(&self, order: usize) -> Result<Coefficient, PlantError> {
        Ok(match self {
            IntegerCoefficient::Sparse(entries) => {
                let mut floats = Vec::with_capacity(entries.len());
                for &(i, j, value) in entries {
                    floats.push((i, j, float(i128::from(value))?));
                }
                Coefficient::Sparse(SparseSymmetric::gather(order, floats))
            }
            IntegerCoefficient::Outer(vector) => {
                let mut floats = Vec::with_capacity(vector.len());
                for &(i, value) in vector {
                    floats.push((i as u32, float(i128::from(value))?));
                }
                let vector = SparseVector::gather(floats);
                Coefficient::Outer(OuterSum {
                    order,
                    terms: vec![OuterTerm { weight: 1.0, vector }],
                })
            }
        })
    }
}

fn visit_outer(vector: &[(usize, i64)], weight: i64, visit: &mut impl FnMut(usize, usize, i128)) {
    for (position, &(j, right)) in vector.iter().enumerate() {
        for &(i, left) in &vector[..=position] {
            visit(i, j, i128::from(left) * i128::from(right) * i128::from(weight));
        }
    }
}

/// Converts a whole number to the float that equals it.
///
/// # Errors
/// [`PlantError::Range`] when its modulus exceeds 2^53.
pub(super) fn float(value: i128) -> Result<f64, PlantError> {
    if value.unsigned_abs() > 1 << 53 {
        return Err(PlantError::Range(format!("{value} exceeds 2^53; take smaller parameters")));
    }
    Ok(value as f64)
}

/// A one-block dual pair in whole numbers, from which the problem follows.
#[derive(Clone, Debug)]
pub(super) struct PairDraft {
    /// The rank bound of the block.
    pub rank: usize,
    /// V of the planted point.
    pub factor: IntegerFactor,
    /// Columns of W.
    pub slack: Vec<IntegerColumn>,
    /// Diagonal of D.
    pub weights: Vec<i64>,
    /// Constraints A_i.
    pub constraints: Vec<IntegerCoefficient>,
    /// Multipliers y.
    pub multipliers: Vec<i64>,
}

impl PairDraft {
    /// Builds `C = A*(y) + W D W'` and `b = A(V V')` and proves the pair.
    ///
    /// # Errors
    /// A number beyond 2^53, or (a defect of the family) a certificate that does not hold.
    pub(super) fn plant(self) -> Result<Planted, PlantError> {
        let order = self.factor.order;
        let cost = self.cost()?;
        let ones = vec![1; self.factor.width];
        let mut rhs = Vec::with_capacity(self.constraints.len());
        let mut constraints = Vec::with_capacity(self.constraints.len());
        for constraint in &self.constraints {
            rhs.push(float(constraint.value(&self.factor, &ones))?);
            constraints.push(Functional::on_block(0, constraint.floats(order)?));
        }
        let blocks = vec![Block { order, rank: Some(self.rank) }];
        let problem = problem(blocks, Functional::on_block(0, cost), constraints, rhs)?;
        let pair = DualPair {
            blocks: vec![BlockPair {
                factor: self.factor,
                slack: self.slack,
                weights: self.weights,
            }],
            multipliers: self.multipliers,
            orthant: Vec::new(),
            orthant_slack: Vec::new(),
        };
        Ok(Planted::prove(problem, Certificate::DualPair(pair))?)
    }

    fn cost(&self) -> Result<Coefficient, PlantError> {
        let mut sum = TriangleSum::new(self.factor.order);
        for (constraint, &y) in self.constraints.iter().zip(&self.multipliers) {
            constraint.visit(&mut |i, j, value| sum.add(i, j, value * i128::from(y)));
        }
        for (column, &weight) in self.slack.iter().zip(&self.weights) {
            let vector: Vec<(usize, i64)> = column.iter().collect();
            visit_outer(&vector, weight, &mut |i, j, value| sum.add(i, j, value));
        }
        sum.floats()
    }
}

/// Sums the upper triangles of whole-number matrices: a list, or a dense triangle once the list would
/// be as long.
pub(super) struct TriangleSum {
    order: usize,
    list: Vec<(usize, usize, i128)>,
    dense: Vec<i128>,
}

impl TriangleSum {
    pub(super) fn new(order: usize) -> Self {
        TriangleSum { order, list: Vec::new(), dense: Vec::new() }
    }

    /// Adds `value` at (i, j) and (j, i).
    pub(super) fn add(&mut self, i: usize, j: usize, value: i128) {
        let (i, j) = if i <= j { (i, j) } else { (j, i) };
        let size = self.order * (self.order + 1) / 2;
        if self.dense.is_empty() {
            self.list.push((i, j, value));
            if self.list.len() < size {
                return;
            }
            self.dense = vec![0; size];
            for (i, j, value) in std::mem::take(&mut self.list) {
                self.dense[j * (j + 1) / 2 + i] += value;
            }
            return;
        }
        self.dense[j * (j + 1) / 2 + i] += value;
    }

    /// Returns the sum as floats.
    ///
    /// # Errors
    /// [`PlantError::Range`] when an entry exceeds 2^53.
    pub(super) fn floats(mut self) -> Result<Coefficient, PlantError> {
        let mut entries = Vec::new();
        if self.dense.is_empty() {
            self.list.sort_by_key(|&(i, j, _)| (j, i));
            let mut position = 0;
            while position < self.list.len() {
                let (i, j, mut value) = self.list[position];
                position += 1;
                while position < self.list.len()
                    && (self.list[position].0, self.list[position].1) == (i, j)
                {
                    value += self.list[position].2;
                    position += 1;
                }
                if value != 0 {
                    entries.push((i, j, float(value)?));
                }
            }
        } else {
            let mut values = self.dense.iter();
            for j in 0..self.order {
                for i in 0..=j {
                    let value = *values.next().expect("n(n+1)/2 values");
                    if value != 0 {
                        entries.push((i, j, float(value)?));
                    }
                }
            }
        }
        Ok(Coefficient::Sparse(SparseSymmetric::gather(self.order, entries)))
    }
}

/// Makes a problem that a family has put together, without a nonnegative part.
///
/// # Errors
/// A defect of the family.
pub(super) fn problem(
    blocks: Vec<Block>,
    cost: Functional,
    constraints: Vec<Functional>,
    rhs: Vec<f64>,
) -> Result<Problem, PlantError> {
    problem_with_orthant(blocks, 0, cost, constraints, rhs)
}

/// Makes a problem that a family has put together, with `orthant` nonnegative scalars.
///
/// # Errors
/// A defect of the family.
pub(super) fn problem_with_orthant(
    blocks: Vec<Block>,
    orthant: usize,
    cost: Functional,
    constraints: Vec<Functional>,
    rhs: Vec<f64>,
) -> Result<Problem, PlantError> {
    Problem::new(blocks, orthant, cost, constraints, rhs)
        .map_err(|error| PlantError::Certificate(CertificateError::Form(error.to_string())))
}

/// Makes the problem `min <C, X>` subject to `X_ii = 1`, X PSD of rank one.
///
/// # Errors
/// A defect of the family.
pub(super) fn sign_problem(cost: Coefficient) -> Result<Problem, PlantError> {
    let order = cost.order();
    let unit = |i: usize| {
        let entry = SparseSymmetric::gather(order, vec![(i, i, 1.0)]);
        Functional::on_block(0, Coefficient::Sparse(entry))
    };
    let blocks = vec![Block { order, rank: Some(1) }];
    let cost = Functional::on_block(0, cost);
    problem(blocks, cost, (0..order).map(unit).collect(), vec![1.0; order])
}

/// Proves a pair whose slack is tested in floating point. Where only that test fails, the instance is planted all the
/// same, without a proof.
///
/// # Errors
/// A defect of the family: any other condition that fails.
pub(super) fn plant_verified(problem: Problem, pair: VerifiedPair) -> Result<Planted, PlantError> {
    let point = PlantedPoint { factors: pair.factors.clone(), orthant: pair.orthant.clone() };
    match Planted::prove(problem.clone(), Certificate::VerifiedPair(pair)) {
        Err(CertificateError::Definiteness { .. }) => {
            Ok(Planted::prove(problem, Certificate::NoProof(point))?)
        }
        other => Ok(other?),
    }
}

/// Returns `X_ii = 1` for i = 0..order.
pub(super) fn unit_diagonal(order: usize) -> Vec<IntegerCoefficient> {
    (0..order).map(|i| IntegerCoefficient::Sparse(vec![(i, i, 1)])).collect()
}

/// A pair of complementary bases: V = P [I; B] and W = P [-B'; I], so that V'W = 0 for any B and any
/// permutation P.
#[derive(Clone, Debug)]
pub(super) struct Bases {
    /// V, n x k.
    pub range: IntegerFactor,
    /// The n - k columns of W, at most k + 1 nonzeros each.
    pub slack: Vec<IntegerColumn>,
}

/// Builds the bases from the rows of B (n - k rows of length k) and a permutation of 0..n.
#[track_caller]
pub(super) fn bases(rows_of_b: &[Vec<i64>], width: usize, permutation: &[usize]) -> Bases {
    let order = permutation.len();
    assert_eq!(rows_of_b.len() + width, order, "B must have n - k rows");
    let mut range = IntegerFactor { order, width, rows: vec![0; order * width] };
    for p in 0..width {
        range.rows[permutation[p] * width + p] = 1;
    }
    let mut slack = Vec::with_capacity(rows_of_b.len());
    for (q, row) in rows_of_b.iter().enumerate() {
        let place = permutation[width + q];
        range.rows[place * width..(place + 1) * width].copy_from_slice(row);
        let mut entries: Vec<(usize, i64)> = row
            .iter()
            .enumerate()
            .filter(|(_, value)| **value != 0)
            .map(|(p, value)| (permutation[p], -value))
            .collect();
        entries.push((place, 1));
        slack.push(column(entries));
    }
    Bases { range, slack }
}

/// Sorts entries with different indices into a column.
pub(super) fn column(mut entries: Vec<(usize, i64)>) -> IntegerColumn {
    entries.sort_unstable_by_key(|entry| entry.0);
    IntegerColumn {
        indices: entries.iter().map(|entry| entry.0 as u32).collect(),
        values: entries.iter().map(|entry| entry.1).collect(),
    }
}

/// Returns V T, T by rows (k x r).
#[track_caller]
pub(super) fn multiply(factor: &IntegerFactor, transform: &[Vec<i64>]) -> IntegerFactor {
    assert_eq!(factor.width, transform.len(), "the inner sizes differ");
    let width = transform.first().map_or(0, Vec::len);
    let mut rows = Vec::with_capacity(factor.order * width);
    for i in 0..factor.order {
        for p in 0..width {
            rows.push(factor.row(i).iter().zip(transform).map(|(v, t)| v * t[p]).sum());
        }
    }
    IntegerFactor { order: factor.order, width, rows }
}

/// Draws B with entries in {-1, 0, 1}.
pub(super) fn draw_b(stream: &mut Stream, rows: usize, width: usize) -> Vec<Vec<i64>> {
    (0..rows).map(|_| (0..width).map(|_| stream.between(-1, 1)).collect()).collect()
}

/// Draws numbers in {-most..-1, 1..most}.
pub(super) fn draw_nonzero(stream: &mut Stream, most: i64) -> i64 {
    stream.sign() * stream.between(1, most)
}

/// Draws a sparse symmetric matrix of about `count` entries in {-2, -1, 1, 2}, at least one of them
/// off the diagonal when the order allows.
pub(super) fn draw_sparse(stream: &mut Stream, order: usize, count: usize) -> IntegerCoefficient {
    let entries = (0..count)
        .map(|position| {
            let i = stream.index(order);
            let j = if position == 0 && order > 1 {
                (i + 1 + stream.index(order - 1)) % order
            } else {
                stream.index(order)
            };
            (i, j, draw_nonzero(stream, 2))
        })
        .collect();
    IntegerCoefficient::gather(entries)
}
