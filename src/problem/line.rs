//! The operator along a line R + t D of factors: everything an exact line search on
//! `A((R + tD)(R + tD)')` needs, in one pass over the data and without allocation.
//!
//! Rows are flat slices (n rows of `width` numbers), so that an engine may hold all blocks in one
//! vector. Values here are plain products and sums; the referee has its own.

use super::operator::{BlockOperator, CostPart, Entries, Operator, OuterBatch, Slack, SlackStore};
use super::point::Factor;
use crate::linalg::vector::dot;
use crate::linalg::{Mat, MatMut, MatRef, dense};

/// Scratch memory of the line products on one block at one width.
#[derive(Clone, Debug)]
pub struct LineScratch {
    first: Vec<f64>,
    second: Vec<f64>,
    product: Mat<f64>,
    left: Mat<f64>,
    right: Mat<f64>,
}

impl LineScratch {
    /// Makes the scratch for `block` and factors of `width` columns.
    pub fn new(block: &BlockOperator, width: usize) -> Self {
        let slots = block.pattern.as_ref().map_or(0, |pattern| pattern.stored());
        let side = if block.pattern.is_some() { 0 } else { block.order };
        let outer = block.outer.as_ref().map_or(0, |outer| outer.ids.len());
        LineScratch {
            first: vec![0.0; slots],
            second: vec![0.0; slots],
            product: Mat::zeros(side, side),
            left: Mat::zeros(width, outer),
            right: Mat::zeros(width, outer),
        }
    }
}

impl Operator {
    /// Computes `<C, V V'> + c'x` for factors.
    #[track_caller]
    pub fn cost_of_factors(&self, factors: &[Factor], x: &[f64]) -> f64 {
        assert_eq!(factors.len(), self.blocks.len(), "one factor a block");
        let mut unused = vec![0.0; self.constraints()];
        let blocks: f64 = self
            .blocks
            .iter()
            .zip(factors)
            .map(|(block, factor)| {
                let mut scratch = LineScratch::new(block, factor.width);
                block.add_square(&factor.data, factor.width, &mut scratch, &mut unused)
            })
            .sum();
        blocks + dot(&self.orthant_cost, x)
    }
}

impl BlockOperator {
    /// Adds `<A_i, R R'>` to `out[i]` and returns `<C, R R'>`.
    #[track_caller]
    pub fn add_square(
        &self,
        r: &[f64],
        width: usize,
        scratch: &mut LineScratch,
        out: &mut [f64],
    ) -> f64 {
        assert_eq!(r.len(), self.order * width, "rows of the block");
        if let Some(outer) = &self.outer {
            project(r, width, outer, &mut scratch.left);
            for (k, &id) in outer.ids.iter().enumerate() {
                let column = scratch.left.col_as_slice(k);
                out[id as usize] += outer.weights[k] * dot(column, column);
            }
        }
        match &self.pattern {
            Some(pattern) => {
                pattern.square_values(r, width, &mut scratch.first);
                gather(&self.entries, &scratch.first, out);
                self.cost_of(&scratch.first)
            }
            None => {
                outer_product(r, r, width, self.order, &mut scratch.product);
                gather_dense(&self.entries, &scratch.product, 1.0, out);
                self.cost_of_dense(&scratch.product, 1.0)
            }
        }
    }

    /// Adds `<A_i, R D' + D R'>` to `first[i]` and `<A_i, D D'>` to `second[i]`; returns
    /// `<C, R D' + D R'>` and `<C, D D'>`.
    #[track_caller]
    pub fn add_line(
        &self,
        r: &[f64],
        d: &[f64],
        width: usize,
        scratch: &mut LineScratch,
        first: &mut [f64],
        second: &mut [f64],
    ) -> (f64, f64) {
        assert!(r.len() == self.order * width && d.len() == r.len(), "rows of the block");
        if let Some(outer) = &self.outer {
            project(r, width, outer, &mut scratch.left);
            project(d, width, outer, &mut scratch.right);
            for (k, &id) in outer.ids.iter().enumerate() {
                let (a, b) = (scratch.left.col_as_slice(k), scratch.right.col_as_slice(k));
                first[id as usize] += 2.0 * outer.weights[k] * dot(a, b);
                second[id as usize] += outer.weights[k] * dot(b, b);
            }
        }
        match &self.pattern {
            Some(pattern) => {
                pattern.line_values(r, d, width, &mut scratch.first, &mut scratch.second);
                gather(&self.entries, &scratch.first, first);
                gather(&self.entries, &scratch.second, second);
                (self.cost_of(&scratch.first), self.cost_of(&scratch.second))
            }
            None => {
                outer_product(r, d, width, self.order, &mut scratch.product);
                gather_dense(&self.entries, &scratch.product, 2.0, first);
                let linear = self.cost_of_dense(&scratch.product, 2.0);
                outer_product(d, d, width, self.order, &mut scratch.product);
                gather_dense(&self.entries, &scratch.product, 1.0, second);
                (linear, self.cost_of_dense(&scratch.product, 1.0))
            }
        }
    }

    /// Computes `out = S V` for flat rows V, without allocation.
    #[track_caller]
    pub fn slack_rows(
        &self,
        slack: &Slack,
        v: &[f64],
        width: usize,
        scratch: &mut LineScratch,
        out: &mut [f64],
    ) {
        assert!(v.len() == self.order * width && out.len() == v.len(), "rows of the block");
        match &slack.store {
            SlackStore::Sparse { pattern, values } => pattern.multiply_rows(values, v, width, out),
            SlackStore::Dense(matrix) => {
                let v_t = MatRef::from_column_major_slice(v, width, self.order);
                let out_t = MatMut::from_column_major_slice_mut(&mut *out, width, self.order);
                dense::gemm(out_t, dense::Accumulate::Replace, 1.0, v_t, matrix.as_ref());
            }
        }
        if let Some(outer) = &self.outer {
            project(v, width, outer, &mut scratch.left);
            for k in 0..outer.ids.len() {
                let weight = slack.outer_weights[k];
                scratch.left.col_as_slice_mut(k).iter_mut().for_each(|value| *value *= weight);
            }
            let out_t = MatMut::from_column_major_slice_mut(out, width, self.order);
            let (left, vectors) = (scratch.left.as_ref(), outer.vectors.transpose());
            dense::gemm(out_t, dense::Accumulate::Add, 1.0, left, vectors);
        }
    }

    /// Returns the diagonal of S.
    pub fn slack_diagonal(&self, slack: &Slack) -> Vec<f64> {
        let mut diagonal: Vec<f64> = match &slack.store {
            SlackStore::Sparse { pattern, values } => (0..self.order)
                .map(|i| values[pattern.slot(i, i).expect("a pattern holds its diagonal")])
                .collect(),
            SlackStore::Dense(matrix) => (0..self.order).map(|i| matrix[(i, i)]).collect(),
        };
        if let Some(outer) = &self.outer {
            for (k, weight) in slack.outer_weights.iter().enumerate() {
                for (d, a) in diagonal.iter_mut().zip(outer.vectors.col_as_slice(k)) {
                    *d += weight * a * a;
                }
            }
        }
        diagonal
    }

    /// Returns the flops of one gradient and one line pass at `width`, by their leading terms.
    pub fn flops_line(&self, width: usize) -> u64 {
        let (n, w) = (self.order as u64, width as u64);
        let body = match &self.pattern {
            Some(pattern) => 10 * pattern.stored() as u64 * w,
            None => 6 * n * n * w,
        };
        let outer = self.outer.as_ref().map_or(0, |outer| 8 * n * outer.ids.len() as u64 * w);
        body + outer + 6 * self.entries.values.len() as u64
    }

    fn cost_of(&self, slots: &[f64]) -> f64 {
        match &self.cost {
            CostPart::Sparse(cost) => {
                cost.slots.iter().zip(&cost.values).map(|(&slot, v)| v * slots[slot as usize]).sum()
            }
            CostPart::Dense(_) => unreachable!("a block with a pattern has a sparse cost"),
        }
    }

    fn cost_of_dense(&self, product: &Mat<f64>, scale: f64) -> f64 {
        match &self.cost {
            CostPart::Dense(cost) => scale * dense::dot_symmetric(cost.as_ref(), product.as_ref()),
            CostPart::Sparse(cost) => {
                scale * (0..cost.values.len()).map(|k| entry_value(cost, k, product)).sum::<f64>()
            }
        }
    }
}

/// Computes `A_ij G_ij`, or `A_ij (G_ij + G_ji)` off the diagonal, for entry k.
#[inline]
fn entry_value(entries: &Entries, k: usize, product: &Mat<f64>) -> f64 {
    let (i, j) = (entries.rows[k] as usize, entries.columns[k] as usize);
    let both = if i == j { product[(i, i)] } else { product[(i, j)] + product[(j, i)] };
    entries.values[k] * both
}

fn gather(entries: &Entries, slots: &[f64], out: &mut [f64]) {
    for (g, &id) in entries.ids.iter().enumerate() {
        let range = entries.range(g);
        let sum: f64 = entries.slots[range.clone()]
            .iter()
            .zip(&entries.values[range])
            .map(|(&slot, value)| value * slots[slot as usize])
            .sum();
        out[id as usize] += sum;
    }
}

fn gather_dense(entries: &Entries, product: &Mat<f64>, scale: f64, out: &mut [f64]) {
    for (g, &id) in entries.ids.iter().enumerate() {
        let sum: f64 = entries.range(g).map(|k| entry_value(entries, k, product)).sum();
        out[id as usize] += scale * sum;
    }
}

/// Computes the n x n product A B' of two factors given by rows.
fn outer_product(a: &[f64], b: &[f64], width: usize, order: usize, out: &mut Mat<f64>) {
    let a_t = MatRef::from_column_major_slice(a, width, order);
    let b_t = MatRef::from_column_major_slice(b, width, order);
    dense::gemm(out.as_mut(), dense::Accumulate::Replace, 1.0, a_t.transpose(), b_t);
}

/// Computes V' vectors, width x count.
fn project(v: &[f64], width: usize, outer: &OuterBatch, out: &mut Mat<f64>) {
    let order = outer.vectors.nrows();
    let v_t = MatRef::from_column_major_slice(v, width, order);
    let vectors = outer.vectors.as_ref();
    dense::gemm(out.as_mut(), dense::Accumulate::Replace, 1.0, v_t, vectors);
}
