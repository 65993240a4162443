//! The constraint operator A, its adjoint and the slack S = C - A*(y), compiled once from a problem.
//!
//! Three views are served: dense points X, factors V with X = V V' (X is never formed), and slacks on
//! the aggregate sparsity pattern of C and all A_i. A block whose aggregate pattern is dense is held
//! dense. Outer products over long vectors are never multiplied out: they are kept as the columns of
//! one matrix and applied by matrix products.

use super::pattern::Pattern;
use super::{Coefficient, Factor, Functional, OuterTerm, Problem, SparseSymmetric};
use crate::linalg::vector::{axpy, dot};
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

/// A symmetric matrix on the aggregate pattern of a block, or dense, plus weighted long outer
/// products that are applied and never formed.
#[derive(Clone, Debug)]
pub struct Slack {
    /// Order.
    pub order: usize,
    /// Values on the pattern, or the full matrix.
    pub store: SlackStore,
    /// Weights of the columns of the block's outer batch: the matrix is
    /// `store + vectors diag(outer_weights) vectors'`.
    pub outer_weights: Vec<f64>,
}

/// Storage of a [`Slack`].
#[derive(Clone, Debug)]
pub enum SlackStore {
    /// Values on a pattern.
    Sparse {
        /// The pattern.
        pattern: Arc<Pattern>,
        /// One value per upper-triangle slot.
        values: Vec<f64>,
    },
    /// Full matrix, both triangles.
    Dense(Mat<f64>),
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

/// A vector is long when its outer product has more than this many entries per row of the block.
const LONG_ENTRIES_PER_ROW: usize = 4;
/// A block is held dense when its pattern fills more than this share of the matrix.
const DENSE_SHARE: f64 = 0.25;
/// Blocks up to this order are held dense.
const SMALL_ORDER: usize = 24;

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
            .map(|index| compile_block(problem, index, storage))
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

    /// Makes an empty slack of this block's storage.
    pub fn slack(&self) -> Slack {
        let store = match &self.pattern {
            Some(pattern) => SlackStore::Sparse {
                pattern: Arc::clone(pattern),
                values: vec![0.0; pattern.stored()],
            },
            None => SlackStore::Dense(Mat::zeros(self.order, self.order)),
        };
        let outer_weights = vec![0.0; self.outer.as_ref().map_or(0, |outer| outer.ids.len())];
        Slack { order: self.order, store, outer_weights }
    }

    /// Fills `slack` with `cost_scale * C - A*(y)`.
    pub fn fill_slack(&self, y: &[f64], cost_scale: f64, slack: &mut Slack) {
        match &mut slack.store {
            SlackStore::Sparse { values, .. } => {
                values.fill(0.0);
                if let CostPart::Sparse(cost) = &self.cost
                    && cost_scale != 0.0
                {
                    for (slot, value) in cost.slots.iter().zip(&cost.values) {
                        values[*slot as usize] += cost_scale * value;
                    }
                }
                for (g, &id) in self.entries.ids.iter().enumerate() {
                    let multiplier = y[id as usize];
                    for k in self.entries.range(g) {
                        values[self.entries.slots[k] as usize] -=
                            multiplier * self.entries.values[k];
                    }
                }
            }
            SlackStore::Dense(matrix) => self.fill_dense(y, cost_scale, matrix),
        }
        if let Some(outer) = &self.outer {
            for (k, &id) in outer.ids.iter().enumerate() {
                slack.outer_weights[k] = -outer.weights[k] * y[id as usize];
            }
        }
    }

    fn fill_dense(&self, y: &[f64], cost_scale: f64, matrix: &mut Mat<f64>) {
        match &self.cost {
            CostPart::Dense(cost) if cost_scale == 1.0 => matrix.copy_from(cost),
            CostPart::Dense(cost) if cost_scale != 0.0 => {
                for j in 0..self.order {
                    let target = matrix.col_as_slice_mut(j);
                    for (value, source) in target.iter_mut().zip(cost.col_as_slice(j)) {
                        *value = cost_scale * source;
                    }
                }
            }
            _ => matrix.fill(0.0),
        }
        if let CostPart::Sparse(cost) = &self.cost {
            for k in 0..cost.values.len() {
                add_both(matrix, cost.rows[k], cost.columns[k], cost_scale * cost.values[k]);
            }
        }
        for (g, &id) in self.entries.ids.iter().enumerate() {
            let multiplier = y[id as usize];
            for k in self.entries.range(g) {
                let (i, j) = (self.entries.rows[k], self.entries.columns[k]);
                add_both(matrix, i, j, -multiplier * self.entries.values[k]);
            }
        }
    }

    /// Computes `out = S V` for a factor V.
    #[track_caller]
    pub fn slack_times(&self, slack: &Slack, v: &Factor, out: &mut Factor) {
        assert!(v.order == self.order && out.order == v.order && out.width == v.width);
        let width = v.width;
        match &slack.store {
            SlackStore::Sparse { pattern, values } => {
                pattern.multiply_rows(values, &v.data, width, &mut out.data);
            }
            SlackStore::Dense(matrix) => {
                let v_t = MatRef::from_column_major_slice(&v.data, width, self.order);
                let out_t = crate::linalg::MatMut::from_column_major_slice_mut(
                    &mut out.data,
                    width,
                    self.order,
                );
                dense::gemm(out_t, dense::Accumulate::Replace, 1.0, v_t, matrix.as_ref());
            }
        }
        if let Some(outer) = &self.outer {
            let mut coefficients = transposed_products(v, &outer.vectors);
            for k in 0..outer.ids.len() {
                let weight = slack.outer_weights[k];
                coefficients.col_as_slice_mut(k).iter_mut().for_each(|value| *value *= weight);
            }
            let out_t = crate::linalg::MatMut::from_column_major_slice_mut(
                &mut out.data,
                width,
                self.order,
            );
            dense::gemm(
                out_t,
                dense::Accumulate::Add,
                1.0,
                coefficients.as_ref(),
                outer.vectors.transpose(),
            );
        }
    }

    /// Adds `scale * S` into a full dense matrix, both triangles.
    pub fn add_slack_to(&self, slack: &Slack, scale: f64, target: &mut Mat<f64>) {
        match &slack.store {
            SlackStore::Sparse { pattern, values } => {
                for (slot, (i, j)) in pattern.upper().enumerate() {
                    add_both(target, i as u32, j as u32, scale * values[slot]);
                }
            }
            SlackStore::Dense(matrix) => {
                for j in 0..self.order {
                    axpy(scale, matrix.col_as_slice(j), target.col_as_slice_mut(j));
                }
            }
        }
        if let Some(outer) = &self.outer {
            let mut scaled = outer.vectors.clone();
            for k in 0..outer.ids.len() {
                let weight = scale * slack.outer_weights[k];
                scaled.col_as_slice_mut(k).iter_mut().for_each(|value| *value *= weight);
            }
            dense::gemm(
                target.as_mut(),
                dense::Accumulate::Add,
                1.0,
                scaled.as_ref(),
                outer.vectors.transpose(),
            );
        }
    }

    /// Returns the flops of applying the operator and the slack to one column of a factor.
    pub fn flops_per_column(&self) -> u64 {
        let pattern = match &self.pattern {
            Some(pattern) => 4 * pattern.stored() as u64,
            None => 2 * (self.order * self.order) as u64,
        };
        let outer = self.outer.as_ref().map_or(0, |outer| 4 * (self.order * outer.ids.len()) as u64);
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

fn is_long(term: &OuterTerm, order: usize) -> bool {
    term.vector.len() * term.vector.len() > 2 * LONG_ENTRIES_PER_ROW * order.max(SMALL_ORDER)
}

fn split(coefficient: &Coefficient) -> (Option<SparseSymmetric>, Vec<&OuterTerm>) {
    match coefficient {
        Coefficient::Sparse(matrix) => (Some(matrix.clone()), Vec::new()),
        Coefficient::Outer(sum) => {
            let (long, short): (Vec<&OuterTerm>, Vec<&OuterTerm>) =
                sum.terms.iter().partition(|term| is_long(term, sum.order));
            let sparse = (!short.is_empty()).then(|| {
                let terms = short.into_iter().cloned().collect();
                Coefficient::Outer(super::OuterSum { order: sum.order, terms }).to_sparse()
            });
            (sparse, long)
        }
    }
}

fn compile_block(problem: &Problem, index: usize, storage: Storage) -> BlockOperator {
    let order = problem.blocks()[index].order;
    let mut entries = Entries::default();
    let mut outer: Vec<(usize, &OuterTerm)> = Vec::new();
    for (id, functional) in problem.constraints().iter().enumerate() {
        let Some(part) = functional.part(index) else { continue };
        let (sparse, long) = split(part);
        if let Some(matrix) = sparse {
            entries.push_group(id, &matrix);
        }
        outer.extend(long.into_iter().map(|term| (id, term)));
    }
    if entries.starts.is_empty() {
        entries.starts.push(0);
    }
    let cost = cost_entries(problem.cost(), index, order);
    let hold_dense = match storage {
        Storage::Automatic => !outer.is_empty(),
        Storage::Dense => true,
        Storage::Factored => false,
    };
    let pattern = if hold_dense { None } else { aggregate(order, &entries, &cost) };
    if let Some(pattern) = &pattern {
        entries.slots = slots_of(pattern, &entries);
    }
    let cost = match &pattern {
        Some(pattern) => {
            let slots = slots_of(pattern, &cost);
            CostPart::Sparse(Entries { slots, ..cost })
        }
        None if cost.values.len() as f64 > DENSE_SHARE * 0.5 * (order * order) as f64 => {
            let mut matrix = Mat::zeros(order, order);
            for k in 0..cost.values.len() {
                add_both(&mut matrix, cost.rows[k], cost.columns[k], cost.values[k]);
            }
            CostPart::Dense(matrix)
        }
        None => CostPart::Sparse(cost),
    };
    BlockOperator { order, entries, outer: batch(order, &outer), cost, pattern }
}

fn cost_entries(cost: &Functional, index: usize, order: usize) -> Entries {
    let mut entries = Entries::default();
    match cost.part(index) {
        Some(part) => entries.push_group(0, &part.to_sparse()),
        None => entries.push_group(0, &SparseSymmetric::gather(order, Vec::new())),
    }
    entries
}

fn aggregate(order: usize, entries: &Entries, cost: &Entries) -> Option<Arc<Pattern>> {
    if order <= SMALL_ORDER {
        return None;
    }
    let positions = |list: &Entries| -> Vec<(u32, u32)> {
        list.columns.iter().copied().zip(list.rows.iter().copied()).collect()
    };
    let mut all = positions(entries);
    all.extend(positions(cost));
    all.extend((0..order as u32).map(|i| (i, i)));
    all.sort_unstable();
    all.dedup();
    let full = (2 * all.len() - order) as f64;
    if full > DENSE_SHARE * (order * order) as f64 {
        return None;
    }
    Some(Arc::new(Pattern::new(order, &all)))
}

fn slots_of(pattern: &Pattern, entries: &Entries) -> Vec<u32> {
    entries
        .rows
        .iter()
        .zip(&entries.columns)
        .map(|(&i, &j)| pattern.slot(i as usize, j as usize).expect("entry of the aggregate") as u32)
        .collect()
}

fn batch(order: usize, terms: &[(usize, &OuterTerm)]) -> Option<OuterBatch> {
    if terms.is_empty() {
        return None;
    }
    let mut vectors = Mat::zeros(order, terms.len());
    for (k, (_, term)) in terms.iter().enumerate() {
        for (i, value) in term.vector.iter() {
            vectors[(i, k)] = value;
        }
    }
    Some(OuterBatch {
        ids: terms.iter().map(|(id, _)| *id as u32).collect(),
        weights: terms.iter().map(|(_, term)| term.weight).collect(),
        vectors,
    })
}
