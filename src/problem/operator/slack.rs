//! Slacks S = C - A*(y): filling them, multiplying factors by them, adding them up.

use super::super::Factor;
use super::super::pattern::Pattern;
use super::{BlockOperator, CostPart, add_both, transposed_products};
use crate::linalg::vector::axpy;
use crate::linalg::{Mat, MatMut, MatRef, dense};
use std::sync::Arc;

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

impl BlockOperator {
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
                let out_t = MatMut::from_column_major_slice_mut(&mut out.data, width, self.order);
                dense::gemm(out_t, dense::Accumulate::Replace, 1.0, v_t, matrix.as_ref());
            }
        }
        if let Some(outer) = &self.outer {
            let mut coefficients = transposed_products(v, &outer.vectors);
            for k in 0..outer.ids.len() {
                let weight = slack.outer_weights[k];
                coefficients.col_as_slice_mut(k).iter_mut().for_each(|value| *value *= weight);
            }
            let out_t = MatMut::from_column_major_slice_mut(&mut out.data, width, self.order);
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
}
