//! A and its adjoint on dense points, with scratch of their own: nothing is allocated after the start.
//!
//! The operator itself makes room for the products with long outer vectors at every call; loops that call it
//! thousands of times go through here. It is not for factors.

use crate::linalg::Mat;
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::vector::{axpy, dot};
use crate::problem::operator::{CostPart, Entries, OuterBatch};
use crate::problem::{BlockOperator, Operator, Slack};

/// The maps of one problem.
pub struct DenseMaps<'a> {
    op: &'a Operator,
    parts: Vec<Part<'a>>,
    orthant: Vec<f64>,
}

/// One block: its sparse constraints, and its long outer products with room for their images.
struct Part<'a> {
    plain: Plain<'a>,
    outer: Option<(&'a OuterBatch, Mat<f64>)>,
    slack: Slack,
}

/// The block without its long outer products.
enum Plain<'a> {
    Whole(&'a BlockOperator),
    Stripped(Box<BlockOperator>),
}

impl Plain<'_> {
    fn get(&self) -> &BlockOperator {
        match self {
            Plain::Whole(block) => block,
            Plain::Stripped(block) => block,
        }
    }
}

impl<'a> DenseMaps<'a> {
    /// Takes the scratch: one slack a block, and order x count numbers for `count` long outer products.
    pub fn new(op: &'a Operator) -> Self {
        let parts = op
            .blocks
            .iter()
            .map(|block| {
                let plain = match &block.outer {
                    None => Plain::Whole(block),
                    Some(_) => Plain::Stripped(Box::new(BlockOperator {
                        order: block.order,
                        entries: block.entries.clone(),
                        outer: None,
                        cost: CostPart::Sparse(Entries::default()),
                        pattern: block.pattern.clone(),
                    })),
                };
                let room = |outer: &OuterBatch| Mat::zeros(block.order, outer.ids.len());
                let outer = block.outer.as_ref().map(|outer| (outer, room(outer)));
                Part { slack: plain.get().slack(), plain, outer }
            })
            .collect();
        DenseMaps { op, parts, orthant: vec![0.0; op.orthant_cost.len()] }
    }

    /// Writes A(X) + a(x) into `out`.
    #[track_caller]
    pub fn apply(&mut self, points: &[Mat<f64>], x: &[f64], out: &mut [f64]) {
        assert_eq!(points.len(), self.parts.len(), "one matrix a block");
        self.op.apply_orthant(x, out);
        for (part, point) in self.parts.iter_mut().zip(points) {
            part.plain.get().add_dense(point.as_ref(), out);
            let Some((outer, images)) = &mut part.outer else { continue };
            let (replace, vectors) = (Accumulate::Replace, outer.vectors.as_ref());
            dense::gemm(images.as_mut(), replace, 1.0, point.as_ref(), vectors);
            for (k, &id) in outer.ids.iter().enumerate() {
                let image = dot(images.col_as_slice(k), outer.vectors.col_as_slice(k));
                out[id as usize] += outer.weights[k] * image;
            }
        }
    }

    /// Adds `scale * A*(y)` to `points` and `scale * a*(y)` to `x`.
    #[track_caller]
    pub fn add_adjoint(&mut self, y: &[f64], scale: f64, points: &mut [Mat<f64>], x: &mut [f64]) {
        assert_eq!(points.len(), self.parts.len(), "one matrix a block");
        for (part, point) in self.parts.iter_mut().zip(points) {
            // A slack without its cost is -A*(y).
            let block = part.plain.get();
            block.fill_slack(y, 0.0, &mut part.slack);
            block.add_slack_to(&part.slack, -scale, point);
            let Some((outer, scaled)) = &mut part.outer else { continue };
            for (k, &id) in outer.ids.iter().enumerate() {
                let weight = scale * (outer.weights[k] * y[id as usize]);
                let column = scaled.col_as_slice_mut(k);
                for (to, from) in column.iter_mut().zip(outer.vectors.col_as_slice(k)) {
                    *to = weight * from;
                }
            }
            let (add, vectors_t) = (Accumulate::Add, outer.vectors.transpose());
            dense::gemm(point.as_mut(), add, 1.0, scaled.as_ref(), vectors_t);
        }
        self.op.orthant_slack(y, 0.0, &mut self.orthant);
        axpy(-scale, &self.orthant, x);
    }

    /// Returns the flops of one application of A or of its adjoint, by the leading terms.
    pub fn flops(&self) -> u64 {
        let block = |b: &BlockOperator| match &b.outer {
            Some(outer) => 2 * (b.order * b.order * outer.ids.len()) as u64,
            None => 0,
        };
        let entries: u64 = self.op.blocks.iter().map(|b| 4 * b.entries.values.len() as u64).sum();
        entries + self.op.blocks.iter().map(block).sum::<u64>()
    }
}

/// Writes C and c as dense matrices and a vector.
pub fn dense_cost(op: &Operator) -> (Vec<Mat<f64>>, Vec<f64>) {
    let zero = vec![0.0; op.constraints()];
    let blocks = op
        .blocks
        .iter()
        .map(|block| {
            let mut cost = Mat::zeros(block.order, block.order);
            let mut slack = block.slack();
            block.fill_slack(&zero, 1.0, &mut slack);
            slack.outer_weights.fill(0.0);
            block.add_slack_to(&slack, 1.0, &mut cost);
            cost
        })
        .collect();
    (blocks, op.orthant_cost.clone())
}
