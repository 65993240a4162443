//! The saddle system at a point: products with H, J, J' and G, merit and trial steps.

use crate::engines::alm::lagrangian::Lagrangian;
use crate::linalg::vector::{axpy, norm2, scale};
use crate::linalg::{Mat, MatMut, MatRef, dense};
use crate::problem::{LineScratch, Operator, Slack};

/// Weight of the gauge term; data are scaled to norm 1.
const GAUGE: f64 = 1.0;
/// Most halvings of a step.
const HALVINGS: usize = 7;

/// The system at the point of a Lagrangian with penalty 0.
pub struct System<'a> {
    op: &'a Operator,
    l: Lagrangian<'a>,
    adjoint: Vec<Slack>,
    scratch: Vec<LineScratch>,
    weights: Vec<f64>,
    squares: Vec<f64>,
    gram: Vec<Mat<f64>>,
    image: Vec<f64>,
    saved_z: Vec<f64>,
    saved_y: Vec<f64>,
}

impl<'a> System<'a> {
    /// Takes over a Lagrangian; its penalty becomes 0.
    pub fn new(op: &'a Operator, mut l: Lagrangian<'a>) -> Self {
        l.sigma = 0.0;
        let shapes = l.layout.shapes.clone();
        System {
            op,
            adjoint: op.blocks.iter().map(|block| block.slack()).collect(),
            scratch: op.blocks.iter().zip(&shapes).map(|(b, s)| LineScratch::new(b, s.1)).collect(),
            weights: vec![0.0; op.constraints()],
            squares: vec![0.0; l.layout.orthant.len()],
            gram: shapes.iter().map(|&(_, width)| Mat::zeros(width, width)).collect(),
            image: vec![0.0; l.z.len()],
            saved_z: l.z.clone(),
            saved_y: l.y.clone(),
            l,
        }
    }

    /// Returns the number of unknowns of R and u.
    pub fn unknowns(&self) -> usize {
        self.l.layout.length()
    }

    /// Returns the Lagrangian.
    pub fn lagrangian(&self) -> &Lagrangian<'a> {
        &self.l
    }

    /// Returns the gradient g.
    pub fn gradient(&self) -> &[f64] {
        &self.l.gradient
    }

    /// Returns the residual v.
    pub fn residual(&self) -> &[f64] {
        &self.l.residual
    }

    /// Returns ||g|| / (1 + ||z||).
    pub fn stationarity(&self) -> f64 {
        norm2(&self.l.gradient) / (1.0 + norm2(&self.l.z))
    }

    /// Evaluates residual and gradient and returns the merit.
    pub fn evaluate(&mut self) -> f64 {
        self.l.refresh();
        self.l.compute_gradient();
        let violation = norm2(&self.l.residual) / (1.0 + self.l.rhs_norm());
        self.stationarity().hypot(violation)
    }

    /// Moves by the largest of 1, 1/2, ... that lowers the merit to `(1 - 1e-4 a) merit`; stays when none does.
    pub fn try_step(&mut self, step: &[f64], merit: f64) -> Option<f64> {
        let (dz, dy) = step.split_at(self.unknowns());
        self.saved_z.copy_from_slice(&self.l.z);
        self.saved_y.copy_from_slice(&self.l.y);
        let mut a = 1.0;
        for _ in 0..HALVINGS {
            axpy(a, dz, &mut self.l.z);
            axpy(a, dy, &mut self.l.y);
            let new = self.evaluate();
            if new <= (1.0 - 1e-4 * a) * merit {
                return Some(new);
            }
            self.l.z.copy_from_slice(&self.saved_z);
            self.l.y.copy_from_slice(&self.saved_y);
            a *= 0.5;
        }
        self.evaluate();
        None
    }

    /// Adds `H d` to `out`.
    pub fn add_hessian(&mut self, d: &[f64], out: &mut [f64]) {
        for (k, block) in self.op.blocks.iter().enumerate() {
            let range = self.l.layout.ranges[k].clone();
            let width = self.l.layout.shapes[k].1;
            let image = &mut self.image[range.clone()];
            let slack = self.l.slack(k);
            block.slack_rows(slack, &d[range.clone()], width, &mut self.scratch[k], image);
            axpy(2.0, image, &mut out[range]);
        }
        let range = self.l.layout.orthant.clone();
        let slack = self.l.orthant_slack();
        for ((o, d), s) in out[range.clone()].iter_mut().zip(&d[range]).zip(slack) {
            *o += 2.0 * s * d;
        }
    }

    /// Adds `gamma G d` to `out`.
    pub fn add_gauge(&mut self, d: &[f64], out: &mut [f64]) {
        for (k, &(order, width)) in self.l.layout.shapes.iter().enumerate() {
            if width < 2 {
                continue;
            }
            let range = self.l.layout.ranges[k].clone();
            let r_t = MatRef::from_column_major_slice(&self.l.z[range.clone()], width, order);
            let d_t = MatRef::from_column_major_slice(&d[range.clone()], width, order);
            let gram = &mut self.gram[k];
            dense::gemm(gram.as_mut(), dense::Accumulate::Replace, 1.0, r_t, d_t.transpose());
            for i in 0..width {
                for j in 0..i {
                    let skew = gram[(i, j)] - gram[(j, i)];
                    gram[(i, j)] = skew;
                    gram[(j, i)] = -skew;
                }
                gram[(i, i)] = 0.0;
            }
            let target = MatMut::from_column_major_slice_mut(&mut out[range], width, order);
            // Rows of R times the skew matrix, transposed.
            dense::gemm(target, dense::Accumulate::Add, GAUGE, gram.as_ref().transpose(), r_t);
        }
    }

    /// Computes `out = J d`.
    pub fn jacobian_times(&mut self, d: &[f64], out: &mut [f64]) {
        self.l.line(d);
        out.copy_from_slice(self.l.first());
    }

    /// Computes `out = J' w`.
    pub fn adjoint_times(&mut self, w: &[f64], out: &mut [f64]) {
        for i in 0..w.len() {
            self.weights[i] = -self.l.scaling.rows[i] * w[i];
        }
        for (k, block) in self.op.blocks.iter().enumerate() {
            block.fill_slack(&self.weights, 0.0, &mut self.adjoint[k]);
            let range = self.l.layout.ranges[k].clone();
            let width = self.l.layout.shapes[k].1;
            let rows = &self.l.z[range.clone()];
            let target = &mut out[range];
            block.slack_rows(&self.adjoint[k], rows, width, &mut self.scratch[k], target);
            scale(2.0, target);
        }
        self.op.orthant_slack(&self.weights, 0.0, &mut self.squares);
        let range = self.l.layout.orthant.clone();
        for ((o, u), a) in out[range.clone()].iter_mut().zip(&self.l.z[range]).zip(&self.squares) {
            *o = 2.0 * u * a;
        }
    }

    /// Writes J' (unknowns x m) in full.
    pub fn fill_jacobian(&self, out: &mut Mat<f64>) {
        out.fill(0.0);
        for (k, block) in self.op.blocks.iter().enumerate() {
            let start = self.l.layout.ranges[k].start;
            let (order, width) = self.l.layout.shapes[k];
            let rows = &self.l.z[self.l.layout.ranges[k].clone()];
            let entries = &block.entries;
            for (g, &id) in entries.ids.iter().enumerate() {
                let weight = 2.0 * self.l.scaling.rows[id as usize];
                let target = &mut dense::column_mut(out.as_mut(), id as usize)[start..];
                for e in entries.range(g) {
                    let (i, j) = (entries.rows[e] as usize, entries.columns[e] as usize);
                    let value = weight * entries.values[e];
                    axpy(value, &rows[j * width..][..width], &mut target[i * width..][..width]);
                    if i != j {
                        axpy(value, &rows[i * width..][..width], &mut target[j * width..][..width]);
                    }
                }
            }
            let Some(outer) = &block.outer else { continue };
            let r_t = MatRef::from_column_major_slice(rows, width, order);
            let mut images = Mat::zeros(width, outer.ids.len());
            let replace = dense::Accumulate::Replace;
            dense::gemm(images.as_mut(), replace, 1.0, r_t, outer.vectors.as_ref());
            for (c, &id) in outer.ids.iter().enumerate() {
                let weight = 2.0 * self.l.scaling.rows[id as usize] * outer.weights[c];
                let target = &mut dense::column_mut(out.as_mut(), id as usize)[start..];
                for (i, a) in outer.vectors.col_as_slice(c).iter().enumerate() {
                    axpy(weight * a, images.col_as_slice(c), &mut target[i * width..][..width]);
                }
            }
        }
        let range = self.l.layout.orthant.clone();
        for (id, row) in self.op.orthant_rows.iter().enumerate() {
            for (index, a) in row.iter() {
                let place = range.start + index;
                out[(place, id)] += 2.0 * self.l.scaling.rows[id] * a * self.l.z[place];
            }
        }
    }

    /// Writes the lower triangle of `H + gamma G` in full; `slack` is scratch.
    pub fn fill_hessian(&self, out: &mut Mat<f64>) {
        out.fill(0.0);
        for (k, block) in self.op.blocks.iter().enumerate() {
            let start = self.l.layout.ranges[k].start;
            let (order, width) = self.l.layout.shapes[k];
            let mut slack = Mat::zeros(order, order);
            block.add_slack_to(self.l.slack(k), 2.0, &mut slack);
            for j in 0..order {
                for i in j..order {
                    for c in 0..width {
                        out[(start + i * width + c, start + j * width + c)] = slack[(i, j)];
                    }
                }
            }
            self.add_gauge_columns(k, out);
        }
        let range = self.l.layout.orthant.clone();
        for (place, s) in range.zip(self.l.orthant_slack()) {
            out[(place, place)] = 2.0 * s;
        }
    }

    /// Adds the gauge term of block k, a sum of outer products of one vector for each pair of columns.
    fn add_gauge_columns(&self, k: usize, out: &mut Mat<f64>) {
        let range = self.l.layout.ranges[k].clone();
        let (order, width) = self.l.layout.shapes[k];
        let pairs = width * width.saturating_sub(1) / 2;
        if pairs == 0 {
            return;
        }
        let rows = &self.l.z[range.clone()];
        let mut vectors = Mat::zeros(order * width, pairs);
        let mut pair = 0;
        for a in 0..width {
            for b in a + 1..width {
                for i in 0..order {
                    vectors[(i * width + b, pair)] = rows[i * width + a];
                    vectors[(i * width + a, pair)] = -rows[i * width + b];
                }
                pair += 1;
            }
        }
        let target = out.as_mut().submatrix_mut(range.start, range.start, range.len(), range.len());
        dense::syrk_lower(target, dense::Accumulate::Add, GAUGE, vectors.as_ref());
    }

    /// Writes the diagonals of a positive definite block-diagonal preconditioner: `|H| + J'J + lambda` for
    /// the unknowns and `J diag^-1 J'` for the multipliers.
    pub fn fill_preconditioner(&mut self, lambda: f64, out: &mut [f64]) {
        let (unknowns, m) = (self.unknowns(), self.op.constraints());
        let (diagonal, multipliers) = out.split_at_mut(unknowns);
        for (k, block) in self.op.blocks.iter().enumerate() {
            let (order, width) = self.l.layout.shapes[k];
            let start = self.l.layout.ranges[k].start;
            let slack = block.slack_diagonal(self.l.slack(k));
            for i in 0..order {
                let value = 2.0 * slack[i].abs() + lambda + 1e-3;
                diagonal[start + i * width..][..width].fill(value);
            }
        }
        for (place, s) in self.l.layout.orthant.clone().zip(self.l.orthant_slack()) {
            diagonal[place] = 2.0 * s.abs() + lambda + 1e-3;
        }
        let mut squares = vec![0.0; unknowns];
        self.each_jacobian_entry(|_, place, value| squares[place] += value * value);
        for (d, s) in diagonal.iter_mut().zip(&squares) {
            *d += s;
        }
        multipliers[..m].fill(1e-12);
        self.each_jacobian_entry(|id, place, value| {
            multipliers[id] += value * value / diagonal[place]
        });
    }

    /// Visits the entries (constraint, unknown, value) of J; a place may be visited more than once for
    /// constraints with several entries in one row, which the preconditioner tolerates.
    fn each_jacobian_entry(&self, mut visit: impl FnMut(usize, usize, f64)) {
        for (k, block) in self.op.blocks.iter().enumerate() {
            let start = self.l.layout.ranges[k].start;
            let width = self.l.layout.shapes[k].1;
            let rows = &self.l.z[self.l.layout.ranges[k].clone()];
            let entries = &block.entries;
            for (g, &id) in entries.ids.iter().enumerate() {
                let weight = 2.0 * self.l.scaling.rows[id as usize];
                for e in entries.range(g) {
                    let (i, j) = (entries.rows[e] as usize, entries.columns[e] as usize);
                    for c in 0..width {
                        let value = weight * entries.values[e];
                        visit(id as usize, start + i * width + c, value * rows[j * width + c]);
                        if i != j {
                            visit(id as usize, start + j * width + c, value * rows[i * width + c]);
                        }
                    }
                }
            }
        }
        let range = self.l.layout.orthant.clone();
        for (id, row) in self.op.orthant_rows.iter().enumerate() {
            for (index, a) in row.iter() {
                let place = range.start + index;
                visit(id, place, 2.0 * self.l.scaling.rows[id] * a * self.l.z[place]);
            }
        }
    }
}
