//! Schur complement M_kl = <A_k, X A_l S^-1> of the HKM direction.
//!
//! The cheapest formation is chosen for each constraint and block, in the spirit of Fujisawa, Kojima,
//! Nakata, Math. Program. 79:235-253 (1997): constraints are sorted by falling numbers of entries,
//! and the column of constraint k serves all constraints after it. Three formations are used:
//!
//! - *pairs*: a double loop over the entries of A_k and A_l, for a few entries;
//! - *thin*: U = X[:,P] (A_k S^-1)[P,:] over the support rows P of A_k by one thin matrix product,
//!   then one pass over the entries of the later constraints;
//! - *full*: the same with A_k multiplied as a dense matrix.
//!
//! Long outer products a a' use M_kl = w_k w_l (a_k'X a_l)(a_k'S^-1 a_l), by matrix products.
//! The formation that evaluates single entries of U by dots (F2 of the source) is left out: thin
//! products run at the rate of matrix multiplication and leave it no range worth having.

use crate::linalg::dense::{self, Accumulate};
use crate::linalg::vector::axpy;
use crate::linalg::{Mat, MatRef};
use crate::problem::operator::OuterBatch;
use crate::problem::{BlockOperator, Operator, SparseVector};

/// Nanoseconds of the parts of a column, of one machine of 2026; they only steer the choice.
const PAIR_NS: f64 = 2.5;
const GATHER_NS: f64 = 1.8;
const AXPY_NS: f64 = 0.25;
const PRODUCT_NS: f64 = 0.03;
const CALL_NS: f64 = 1500.0;

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Formation {
    Pairs,
    Thin,
    Full,
}

/// Entries of one block's constraints, sorted by falling number of entries.
#[derive(Debug)]
struct BlockPlan {
    ids: Vec<u32>,
    starts: Vec<u32>,
    rows: Vec<u32>,
    columns: Vec<u32>,
    values: Vec<f64>,
    formations: Vec<Formation>,
    supports: Vec<Vec<u32>>,
    place: Vec<u32>,
    left: Mat<f64>,
    right: Mat<f64>,
    product: Mat<f64>,
    dense: Mat<f64>,
}

/// The chosen formations and their workspace.
#[derive(Debug)]
pub(super) struct SchurPlan {
    blocks: Vec<BlockPlan>,
    orthant_columns: Vec<SparseVector>,
    /// Flops of one formation, by the leading terms of the chosen columns.
    pub flops: u64,
}

impl SchurPlan {
    /// Chooses the formations for an operator.
    pub fn new(op: &Operator, orthant: usize) -> Self {
        let mut flops = 0;
        let blocks = op.blocks.iter().map(|block| BlockPlan::new(block, &mut flops)).collect();
        let mut columns: Vec<Vec<(u32, f64)>> = vec![Vec::new(); orthant];
        for (id, row) in op.orthant_rows.iter().enumerate() {
            for (index, value) in row.iter() {
                columns[index].push((id as u32, value));
            }
        }
        let orthant_columns: Vec<SparseVector> =
            columns.into_iter().map(SparseVector::gather).collect();
        flops += orthant_columns.iter().map(|c| (c.len() * c.len()) as u64).sum::<u64>();
        SchurPlan { blocks, orthant_columns, flops }
    }

    /// Forms the lower triangle of M from X, S^-1 by block and the ratios x/z.
    pub fn form(
        &mut self,
        op: &Operator,
        points: &[&Mat<f64>],
        inverses: &[&Mat<f64>],
        ratios: &[f64],
        m: &mut Mat<f64>,
    ) {
        m.fill(0.0);
        for (column, ratio) in self.orthant_columns.iter().zip(ratios) {
            for (position, (k, a)) in column.iter().enumerate() {
                for (l, b) in column.iter().skip(position) {
                    m[(l, k)] += a * ratio * b;
                }
            }
        }
        for (index, plan) in self.blocks.iter_mut().enumerate() {
            let (x, si) = (points[index].as_ref(), inverses[index].as_ref());
            for k in 0..plan.ids.len() {
                plan.form_column(k, x, si, m);
            }
            if let Some(outer) = &op.blocks[index].outer {
                form_outer(plan, outer, x, si, m);
            }
        }
    }
}

impl BlockPlan {
    fn new(block: &BlockOperator, flops: &mut u64) -> Self {
        let n = block.order;
        let entries = &block.entries;
        let mut order: Vec<usize> = (0..entries.ids.len()).collect();
        order.sort_by_key(|&g| (std::cmp::Reverse(entries.range(g).len()), g));
        let mut plan = BlockPlan {
            ids: order.iter().map(|&g| entries.ids[g]).collect(),
            starts: vec![0],
            rows: Vec::with_capacity(entries.rows.len()),
            columns: Vec::with_capacity(entries.rows.len()),
            values: Vec::with_capacity(entries.rows.len()),
            formations: Vec::new(),
            supports: Vec::new(),
            place: vec![0; n],
            left: Mat::new(),
            right: Mat::new(),
            product: Mat::new(),
            dense: Mat::new(),
        };
        for &g in &order {
            let range = entries.range(g);
            plan.rows.extend_from_slice(&entries.rows[range.clone()]);
            plan.columns.extend_from_slice(&entries.columns[range.clone()]);
            plan.values.extend_from_slice(&entries.values[range]);
            plan.starts.push(plan.values.len() as u32);
        }
        plan.choose(n, flops);
        plan
    }

    fn choose(&mut self, n: usize, flops: &mut u64) {
        let total = self.values.len();
        let mut widest = 0;
        let mut any_full = false;
        for k in 0..self.ids.len() {
            let (start, end) = (self.starts[k] as usize, self.starts[k + 1] as usize);
            let mut support: Vec<u32> =
                self.rows[start..end].iter().chain(&self.columns[start..end]).copied().collect();
            support.sort_unstable();
            support.dedup();
            let (own, later, s) =
                ((end - start) as f64, (total - start) as f64, support.len() as f64);
            let size = n as f64;
            let pairs = PAIR_NS * own * later;
            let gather = GATHER_NS * later;
            let thin = CALL_NS + 2.0 * AXPY_NS * own * size + PRODUCT_NS * size * size * s + gather;
            let full = 2.0 * CALL_NS + 2.0 * PRODUCT_NS * size.powi(3) + gather + size * size;
            let (formation, work) = if pairs <= thin && pairs <= full {
                (Formation::Pairs, 8.0 * own * later)
            } else if thin <= full {
                (Formation::Thin, 4.0 * own * size + 2.0 * size * size * s + 3.0 * later)
            } else {
                (Formation::Full, 4.0 * size.powi(3) + 3.0 * later)
            };
            *flops += work as u64;
            if formation == Formation::Thin {
                widest = widest.max(support.len());
            }
            any_full |= formation == Formation::Full;
            self.formations.push(formation);
            self.supports.push(if formation == Formation::Thin { support } else { Vec::new() });
        }
        if widest > 0 {
            self.left = Mat::zeros(n, widest);
            self.right = Mat::zeros(n, widest);
        }
        if any_full {
            self.dense = Mat::zeros(n, n);
            self.right = Mat::zeros(n, n);
        }
        if widest > 0 || any_full {
            self.product = Mat::zeros(n, n);
        }
    }

    fn form_column(&mut self, k: usize, x: MatRef<'_, f64>, si: MatRef<'_, f64>, m: &mut Mat<f64>) {
        match self.formations[k] {
            Formation::Pairs => self.form_by_pairs(k, x, si, m),
            Formation::Thin => {
                self.thin_product(k, x, si);
                self.gather(k, m);
            }
            Formation::Full => {
                self.full_product(k, x, si);
                self.gather(k, m);
            }
        }
    }

    fn range(&self, k: usize) -> std::ops::Range<usize> {
        self.starts[k] as usize..self.starts[k + 1] as usize
    }

    fn form_by_pairs(&self, k: usize, x: MatRef<'_, f64>, si: MatRef<'_, f64>, m: &mut Mat<f64>) {
        for l in k..self.ids.len() {
            let mut sum = 0.0;
            for p in self.range(k) {
                let (g, h) = (self.rows[p] as usize, self.columns[p] as usize);
                let (xg, xh) = (dense::column(x, g), dense::column(x, h));
                let (sg, sh) = (dense::column(si, g), dense::column(si, h));
                let mut part = 0.0;
                for q in self.range(l) {
                    let (a, b) = (self.rows[q] as usize, self.columns[q] as usize);
                    let mut value = xg[a] * sh[b];
                    if g != h {
                        value += xh[a] * sg[b];
                    }
                    if a != b {
                        value += xg[b] * sh[a];
                        if g != h {
                            value += xh[b] * sg[a];
                        }
                    }
                    part += self.values[q] * value;
                }
                sum += self.values[p] * part;
            }
            add_lower(m, self.ids[k], self.ids[l], sum);
        }
    }

    fn thin_product(&mut self, k: usize, x: MatRef<'_, f64>, si: MatRef<'_, f64>) {
        let support = &self.supports[k];
        for (position, &g) in support.iter().enumerate() {
            self.place[g as usize] = position as u32;
            self.left.col_as_slice_mut(position).copy_from_slice(dense::column(x, g as usize));
            self.right.col_as_slice_mut(position).fill(0.0);
        }
        for p in self.range(k) {
            let (g, h) = (self.rows[p] as usize, self.columns[p] as usize);
            let (pg, ph) = (self.place[g] as usize, self.place[h] as usize);
            let value = self.values[p];
            axpy(value, dense::column(si, h), self.right.col_as_slice_mut(pg));
            if g != h {
                axpy(value, dense::column(si, g), self.right.col_as_slice_mut(ph));
            }
        }
        let s = self.supports[k].len();
        dense::gemm(
            self.product.as_mut(),
            Accumulate::Replace,
            1.0,
            self.left.as_ref().subcols(0, s),
            self.right.as_ref().subcols(0, s).transpose(),
        );
    }

    fn full_product(&mut self, k: usize, x: MatRef<'_, f64>, si: MatRef<'_, f64>) {
        self.dense.fill(0.0);
        for p in self.range(k) {
            let (g, h) = (self.rows[p] as usize, self.columns[p] as usize);
            self.dense[(g, h)] = self.values[p];
            self.dense[(h, g)] = self.values[p];
        }
        let n = x.nrows();
        let half = self.right.as_mut().subcols_mut(0, n);
        dense::gemm(half, Accumulate::Replace, 1.0, self.dense.as_ref(), si);
        let half = self.right.as_ref().subcols(0, n);
        dense::gemm(self.product.as_mut(), Accumulate::Replace, 1.0, x, half);
    }

    /// Adds <A_l, U> for the constraints l at or after k.
    fn gather(&self, k: usize, m: &mut Mat<f64>) {
        let u = self.product.as_ref();
        for l in k..self.ids.len() {
            let mut sum = 0.0;
            for q in self.range(l) {
                let (a, b) = (self.rows[q] as usize, self.columns[q] as usize);
                let value = if a == b { u[(a, a)] } else { u[(a, b)] + u[(b, a)] };
                sum += self.values[q] * value;
            }
            add_lower(m, self.ids[k], self.ids[l], sum);
        }
    }
}

fn add_lower(m: &mut Mat<f64>, k: u32, l: u32, value: f64) {
    let (row, column) = if k >= l { (k, l) } else { (l, k) };
    m[(row as usize, column as usize)] += value;
}

/// Adds the pairs in which at least one side is a long outer product.
fn form_outer(
    plan: &BlockPlan,
    outer: &OuterBatch,
    x: MatRef<'_, f64>,
    si: MatRef<'_, f64>,
    m: &mut Mat<f64>,
) {
    let (n, q) = (outer.vectors.nrows(), outer.ids.len());
    let vectors_t = outer.vectors.transpose();
    let mut xa = Mat::zeros(q, n);
    let mut sa = Mat::zeros(q, n);
    dense::gemm(xa.as_mut(), Accumulate::Replace, 1.0, vectors_t, x);
    dense::gemm(sa.as_mut(), Accumulate::Replace, 1.0, vectors_t, si);
    let mut gx = Mat::zeros(q, q);
    let mut gs = Mat::zeros(q, q);
    dense::gemm(gx.as_mut(), Accumulate::Replace, 1.0, xa.as_ref(), outer.vectors.as_ref());
    dense::gemm(gs.as_mut(), Accumulate::Replace, 1.0, sa.as_ref(), outer.vectors.as_ref());
    for d in 0..q {
        for c in d..q {
            let weight = outer.weights[c] * outer.weights[d];
            let twice = if c != d && outer.ids[c] == outer.ids[d] { 2.0 } else { 1.0 };
            add_lower(m, outer.ids[c], outer.ids[d], twice * weight * gx[(c, d)] * gs[(c, d)]);
        }
    }
    let mut sums = vec![0.0; q];
    for k in 0..plan.ids.len() {
        sums.fill(0.0);
        for p in plan.range(k) {
            let (g, h) = (plan.rows[p] as usize, plan.columns[p] as usize);
            let (xg, sh) = (xa.col_as_slice(g), sa.col_as_slice(h));
            let (xh, sg) = (xa.col_as_slice(h), sa.col_as_slice(g));
            let other = if g == h { 0.0 } else { 1.0 };
            for d in 0..q {
                sums[d] += plan.values[p] * (xg[d] * sh[d] + other * xh[d] * sg[d]);
            }
        }
        for d in 0..q {
            let twice = if outer.ids[d] == plan.ids[k] { 2.0 } else { 1.0 };
            add_lower(m, outer.ids[d], plan.ids[k], twice * outer.weights[d] * sums[d]);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::{
        Block, Coefficient, Functional, OuterSum, OuterTerm, Problem, SparseSymmetric,
    };
    use crate::seed::Stream;

    fn random_spd(n: usize, stream: &mut Stream) -> Mat<f64> {
        let a = Mat::from_fn(n, n, |_, _| stream.normal());
        let mut out = Mat::zeros(n, n);
        dense::gemm(out.as_mut(), Accumulate::Replace, 1.0 / n as f64, a.as_ref(), a.transpose());
        for i in 0..n {
            out[(i, i)] += 0.5;
        }
        out
    }

    fn dense_of(coefficient: &Coefficient) -> Mat<f64> {
        let n = coefficient.order();
        let mut out = Mat::zeros(n, n);
        for (i, j, value) in coefficient.to_sparse().iter() {
            out[(i, j)] = value;
            out[(j, i)] = value;
        }
        out
    }

    /// Every formation must agree with the trace formula tr(A_k X A_l S^-1) evaluated densely.
    #[test]
    fn all_formations_agree_with_the_trace_formula() {
        let mut stream = Stream::named(5, &["schur"]);
        for n in [5usize, 30, 60] {
            let mut constraints = Vec::new();
            for k in 0..12 {
                let count = [1, 2, 6, 40, n * n][k % 5];
                let entries = (0..count)
                    .map(|_| (stream.index(n), stream.index(n), stream.normal()))
                    .collect();
                constraints.push(Coefficient::Sparse(SparseSymmetric::gather(n, entries)));
            }
            for k in 0..6 {
                let length = if k % 2 == 0 { n } else { 2 };
                let mut terms = Vec::new();
                for _ in 0..=(k % 3) {
                    let mut indices = stream.sample(n, length);
                    indices.sort_unstable();
                    let pairs = indices.iter().map(|&i| (i as u32, stream.normal())).collect();
                    let vector = SparseVector::gather(pairs);
                    terms.push(OuterTerm { weight: stream.normal(), vector });
                }
                constraints.push(Coefficient::Outer(OuterSum { order: n, terms }));
            }
            let dense_list: Vec<Mat<f64>> = constraints.iter().map(dense_of).collect();
            let m = constraints.len();
            let problem = Problem::new(
                vec![Block { order: n, rank: None }],
                0,
                Functional::default(),
                constraints.into_iter().map(|c| Functional::on_block(0, c)).collect(),
                vec![0.0; m],
            )
            .unwrap();
            let op = Operator::new(&problem);
            let (x, si) = (random_spd(n, &mut stream), random_spd(n, &mut stream));
            let mut plan = SchurPlan::new(&op, 0);
            let mut schur = Mat::zeros(m, m);
            plan.form(&op, &[&x], &[&si], &[], &mut schur);
            for k in 0..m {
                for l in 0..=k {
                    let product = &(&(&dense_list[k] * &x) * &dense_list[l]) * &si;
                    let exact: f64 = (0..n).map(|i| product[(i, i)]).sum();
                    let scale = dense_list[k].norm_l2() * dense_list[l].norm_l2();
                    let ratio = (schur[(k, l)] - exact).abs() / (n as f64 * scale * f64::EPSILON);
                    assert!(ratio < 100.0, "n = {n}, ({k}, {l}): {} {exact}", schur[(k, l)]);
                }
            }
        }
    }
}
