//! The constraint operator A, its adjoint and the slack S = C - A*(y), compiled once from a problem.
//!
//! Three views are served: dense points X, factors V with X = V V' (X is never formed), and slacks on
//! the aggregate sparsity pattern of C and all A_i. A block whose aggregate pattern is dense is held
//! dense. Outer products over long vectors are never multiplied out: they are kept as the columns of
//! one matrix and applied by matrix products.

mod compile;
mod slack;

pub use slack::{Slack, SlackStore};

use super::pattern::Pattern;
use super::{Factor, Problem, SparseSymmetric};
use crate::linalg::vector::dot;
use crate::linalg::{Mat, MatRef, dense};
use std::sync::Arc;

/// Outer products `weight * a a'` over long vectors, the vectors as columns.
#[derive(Clone, Debug)]
pub struct OuterBatch {
    /// Constraint of each column.
    pub ids: Vec<u32>,
    /// Weight of each column.
    pub weights: Vec<f64>,
    /// Vectors, order x count.
    pub vectors: Mat<f64>,
}

/// Sparse entries of all constraints in one block, grouped by constraint.
#[derive(Clone, Debug, Default)]
pub struct Entries {
    /// Constraint of each group, ascending.
    pub ids: Vec<u32>,
    /// Start of each group in the arrays below, with one closing end.
    pub starts: Vec<u32>,
    /// Row of each upper-triangle entry.
    pub rows: Vec<u32>,
    /// Column of each entry, `row <= column`.
    pub columns: Vec<u32>,
    /// Value of each entry.
    pub values: Vec<f64>,
    /// Place of each entry in the block's pattern; empty when the block is dense.
    pub slots: Vec<u32>,
}

impl Entries {
    /// Returns the range of group `g` in the entry arrays.
    pub fn range(&self, g: usize) -> std::ops::Range<usize> {
        self.starts[g] as usize..self.starts[g + 1] as usize
    }

    fn push_group(&mut self, id: usize, matrix: &SparseSymmetric) {
        if self.starts.is_empty() {
            self.starts.push(0);
        }
        for (i, j, value) in matrix.iter() {
            self.rows.push(i as u32);
            self.columns.push(j as u32);
            self.values.push(value);
        }
        self.ids.push(id as u32);
        self.starts.push(self.values.len() as u32);
    }
}

/// The cost of one block.
#[derive(Clone, Debug)]
pub enum CostPart {
    /// By upper-triangle entries.
    Sparse(Entries),
    /// As a full matrix.
    Dense(Mat<f64>),
}

/// The operator on one PSD block.
#[derive(Clone, Debug)]
pub struct BlockOperator {
    /// Order of the block.
    pub order: usize,
    /// Sparse parts of the constraints.
    pub entries: Entries,
    /// Long outer products of the constraints.
    pub outer: Option<OuterBatch>,
    /// Cost; long outer products of the cost are multiplied out.
    pub cost: CostPart,
    /// Aggregate pattern of cost, sparse constraint parts and the diagonal; none when dense.
    pub pattern: Option<Arc<Pattern>>,
}

/// The compiled operator.
#[derive(Clone, Debug)]
pub struct Operator {
    /// One operator per PSD block.
    pub blocks: Vec<BlockOperator>,
    /// Nonnegative part: for each constraint its sparse row.
    pub orthant_rows: Vec<super::SparseVector>,
    /// Cost of the nonnegative part, dense.
    pub orthant_cost: Vec<f64>,
    constraints: usize,
}

/// How blocks are to be held.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Storage {
    /// Sparse where the aggregate pattern is sparse and no long outer product occurs.
    Automatic,
    /// Dense throughout.
    Dense,
    /// Sparse where the aggregate pattern is sparse; long outer products are applied, never formed.
    Factored,
}

impl Operator {
    /// Compiles the operator of a problem for work on factors.
    pub fn new(problem: &Problem) -> Self {
        Operator::with_storage(problem, Storage::Factored)
    }

    /// Compiles the operator of a problem with the given storage of blocks.
    pub fn with_storage(problem: &Problem, storage: Storage) -> Self {
        let blocks = (0..problem.blocks().len())
            .map(|index| compile::compile_block(problem, index, storage))
            .collect();
        let mut orthant_cost = vec![0.0; problem.orthant()];
        for (index, value) in problem.cost().orthant.iter() {
            orthant_cost[index] += value;
        }
        let orthant_rows =
            problem.constraints().iter().map(|functional| functional.orthant.clone()).collect();
        Operator { blocks, orthant_rows, orthant_cost, constraints: problem.constraints().len() }
    }

    /// Returns the number of constraints m.
    pub fn constraints(&self) -> usize {
        self.constraints
    }

    /// Computes A(X) for dense blocks `points` (both triangles) and the nonnegative part `x`.
    #[track_caller]
    pub fn apply_dense(&self, points: &[Mat<f64>], x: &[f64], out: &mut [f64]) {
        assert_eq!(points.len(), self.blocks.len(), "one matrix a block");
        self.apply_orthant(x, out);
        for (block, point) in self.blocks.iter().zip(points) {
            block.add_dense(point.as_ref(), out);
        }
    }

    /// Computes the contribution of the nonnegative part, replacing `out`.
    pub fn apply_orthant(&self, x: &[f64], out: &mut [f64]) {
        for (row, value) in self.orthant_rows.iter().zip(out.iter_mut()) {
            *value = row.iter().map(|(index, coefficient)| coefficient * x[index]).sum();
        }
    }

    /// Computes `cost_scale * c - sum_i y_i a_i`, the slack of the nonnegative part.
    pub fn orthant_slack(&self, y: &[f64], cost_scale: f64, out: &mut [f64]) {
        for (s, c) in out.iter_mut().zip(&self.orthant_cost) {
            *s = cost_scale * c;
        }
        for (row, multiplier) in self.orthant_rows.iter().zip(y) {
            for (index, coefficient) in row.iter() {
                out[index] -= multiplier * coefficient;
            }
        }
    }

    /// Computes `<C, X> + c'x` for dense blocks.
    pub fn cost_dense(&self, points: &[Mat<f64>], x: &[f64]) -> f64 {
        let blocks: f64 = self
            .blocks
            .iter()
            .zip(points)
            .map(|(block, point)| block.cost_with_dense(point.as_ref()))
            .sum();
        blocks + plain_dot(&self.orthant_cost, x)
    }

    /// Computes A(V V') for factors and the nonnegative part `x`.
    #[track_caller]
    pub fn apply_factors(&self, factors: &[Factor], x: &[f64], out: &mut [f64]) {
        assert_eq!(factors.len(), self.blocks.len(), "one factor a block");
        self.apply_orthant(x, out);
        for (block, factor) in self.blocks.iter().zip(factors) {
            block.add_pair(factor, factor, 1.0, out);
        }
    }

    /// Returns the flops of one application to factors, or of one slack product, by its leading terms.
    pub fn flops_factors(&self, factors: &[Factor]) -> u64 {
        self.blocks
            .iter()
            .zip(factors)
            .map(|(block, factor)| block.flops_per_column() * factor.width as u64)
            .sum()
    }
}

impl BlockOperator {
    /// Adds `<A_i, X>` to `out[i]` for a dense symmetric X.
    pub fn add_dense(&self, point: MatRef<'_, f64>, out: &mut [f64]) {
        let entries = &self.entries;
        for (g, &id) in entries.ids.iter().enumerate() {
            let mut sum = 0.0;
            for k in entries.range(g) {
                let (i, j) = (entries.rows[k] as usize, entries.columns[k] as usize);
                let value = entries.values[k] * point[(i, j)];
                sum += if i == j { value } else { 2.0 * value };
            }
            out[id as usize] += sum;
        }
        if let Some(outer) = &self.outer {
            let mut product = Mat::zeros(self.order, outer.ids.len());
            dense::gemm(
                product.as_mut(),
                dense::Accumulate::Replace,
                1.0,
                point,
                outer.vectors.as_ref(),
            );
            for (k, &id) in outer.ids.iter().enumerate() {
                let column = product.col_as_slice(k);
                out[id as usize] += outer.weights[k] * dot(column, outer.vectors.col_as_slice(k));
            }
        }
    }

    /// Computes `<C, X>` for a dense symmetric X.
    pub fn cost_with_dense(&self, point: MatRef<'_, f64>) -> f64 {
        match &self.cost {
            CostPart::Dense(cost) => dense::dot_symmetric(cost.as_ref(), point),
            CostPart::Sparse(entries) => (0..entries.values.len())
                .map(|k| {
                    let (i, j) = (entries.rows[k] as usize, entries.columns[k] as usize);
                    let value = entries.values[k] * point[(i, j)];
                    if i == j { value } else { 2.0 * value }
                })
                .sum(),
        }
    }

    /// Adds `scale * <A_i, (V U' + U V')/2>` to `out[i]`: with U = V this is A(V V'), and with
    /// `scale = 2` it is A(V U' + U V').
    #[track_caller]
    pub fn add_pair(&self, v: &Factor, u: &Factor, scale: f64, out: &mut [f64]) {
        assert!(v.order == self.order && u.order == self.order && u.width == v.width);
        let entries = &self.entries;
        let same = std::ptr::eq(v, u);
        for (g, &id) in entries.ids.iter().enumerate() {
            let mut sum = 0.0;
            for k in entries.range(g) {
                let (i, j) = (entries.rows[k] as usize, entries.columns[k] as usize);
                if i == j {
                    sum += entries.values[k] * dot(v.row(i), u.row(i));
                } else if same {
                    sum += 2.0 * entries.values[k] * dot(v.row(i), v.row(j));
                } else {
                    let both = dot(v.row(i), u.row(j)) + dot(u.row(i), v.row(j));
                    sum += entries.values[k] * both;
                }
            }
            out[id as usize] += scale * sum;
        }
        if let Some(outer) = &self.outer {
            let left = transposed_products(v, &outer.vectors);
            let right = if same { None } else { Some(transposed_products(u, &outer.vectors)) };
            for (k, &id) in outer.ids.iter().enumerate() {
                let a = left.col_as_slice(k);
                let b = right.as_ref().map_or(a, |right| right.col_as_slice(k));
                out[id as usize] += scale * outer.weights[k] * dot(a, b);
            }
        }
    }

    /// Returns the flops of applying the operator and the slack to one column of a factor.
    pub fn flops_per_column(&self) -> u64 {
        let pattern = match &self.pattern {
            Some(pattern) => 4 * pattern.stored() as u64,
            None => 2 * (self.order * self.order) as u64,
        };
        let outer =
            self.outer.as_ref().map_or(0, |outer| 4 * (self.order * outer.ids.len()) as u64);
        pattern + outer + 4 * self.entries.values.len() as u64
    }
}

fn add_both(matrix: &mut Mat<f64>, i: u32, j: u32, value: f64) {
    matrix[(i as usize, j as usize)] += value;
    if i != j {
        matrix[(j as usize, i as usize)] += value;
    }
}

fn plain_dot(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(x, y)| x * y).sum()
}

/// Computes V' vectors, width x count.
fn transposed_products(v: &Factor, vectors: &Mat<f64>) -> Mat<f64> {
    let mut out = Mat::zeros(v.width, vectors.ncols());
    let v_t = MatRef::from_column_major_slice(&v.data, v.width, v.order);
    dense::gemm(out.as_mut(), dense::Accumulate::Replace, 1.0, v_t, vectors.as_ref());
    out
}
