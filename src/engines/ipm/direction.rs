//! Newton system of one iteration: right sides, multipliers, directions and step lengths.

use super::iterate::{
    BlockState, add_product_by_entries, add_scaled, fill_full, inner, slack_times_dense,
};
use super::nt::scaled_or;
use super::schur::SchurPlan;
use crate::budget::Effort;
use crate::linalg::cholesky;
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::eigen::flops;
use crate::linalg::vector::{dot, norm2};
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, MatRef};
use crate::problem::{BlockOperator, Operator, SlackStore};

/// The iterate, its residuals and all workspace of the loop, in scaled data.
#[derive(Debug)]
pub(super) struct State {
    pub op: Operator,
    pub b: Vec<f64>,
    pub blocks: Vec<BlockState>,
    pub y: Vec<f64>,
    /// Nonnegative part: x, slack z, directions and dual residual.
    pub x: Vec<f64>,
    pub z: Vec<f64>,
    pub dx: Vec<f64>,
    pub dz: Vec<f64>,
    pub rdz: Vec<f64>,
    /// Primal residual b - A(X).
    pub rp: Vec<f64>,
    pub dy: Vec<f64>,
    pub mu: f64,
    plan: SchurPlan,
    schur: Mat<f64>,
    factor: Mat<f64>,
    base: Vec<f64>,
    rhs: Vec<f64>,
    image: Vec<f64>,
    correction: Vec<f64>,
    by_entries: Vec<bool>,
    ratios: Vec<f64>,
    second: Vec<f64>,
    pub ws: Workspace,
    /// Whether the Schur factor was perturbed in this iteration.
    perturbed: bool,
    reach_calls: u64,
}

/// Steps of a direction to the boundary of the cones.
#[derive(Clone, Copy, Debug)]
pub(super) struct Reach {
    pub primal: f64,
    pub dual: f64,
}

impl State {
    /// Takes the memory; the iterate is set by `Run::begin`.
    pub fn new(op: Operator, b: Vec<f64>, blocks: Vec<BlockState>, orthant: usize) -> Self {
        let m = b.len();
        let by_entries = op.blocks.iter().map(single_entries_are_cheaper).collect();
        State {
            plan: SchurPlan::new(&op, orthant),
            schur: Mat::zeros(m, m),
            factor: Mat::zeros(m, m),
            base: vec![0.0; m],
            rhs: vec![0.0; m],
            image: vec![0.0; m],
            correction: vec![0.0; m],
            by_entries,
            ratios: vec![0.0; orthant],
            second: vec![0.0; orthant],
            ws: Workspace::new(),
            perturbed: false,
            reach_calls: 0,
            y: vec![0.0; m],
            x: vec![0.0; orthant],
            z: vec![0.0; orthant],
            dx: vec![0.0; orthant],
            dz: vec![0.0; orthant],
            rdz: vec![0.0; orthant],
            rp: b.clone(),
            dy: vec![0.0; m],
            mu: 0.0,
            op,
            b,
            blocks,
        }
    }

    /// Returns the number of complementarity pairs.
    pub fn pairs(&self) -> f64 {
        (self.blocks.iter().map(|block| block.order).sum::<usize>() + self.x.len()) as f64
    }

    /// Returns <X, S> + x'z.
    pub fn complementarity(&self) -> f64 {
        let blocks: f64 = self.blocks.iter().map(|block| inner(&block.x, &block.s)).sum();
        blocks + dot(&self.x, &self.z)
    }

    /// Recomputes r_p and R_d.
    pub fn residuals(&mut self) {
        self.op.apply_orthant(&self.x, &mut self.image);
        for (block, state) in self.op.blocks.iter().zip(&self.blocks) {
            block.add_dense(state.x.as_ref(), &mut self.image);
        }
        for ((r, b), image) in self.rp.iter_mut().zip(&self.b).zip(&self.image) {
            *r = b - image;
        }
        for (block, state) in self.op.blocks.iter().zip(&mut self.blocks) {
            fill_full(block, &self.y, 1.0, &mut state.rd, &mut state.outer_scratch);
            add_scaled(-1.0, &state.s, &mut state.rd);
            if let (Some(weight), SlackStore::Dense(matrix)) = (&state.weight, &mut state.rd.store)
            {
                dense::axpy_matrix(1.0, weight.as_ref(), matrix.as_mut());
            }
        }
        self.rdz.copy_from_slice(&self.op.orthant_cost);
        for (row, y) in self.op.orthant_rows.iter().zip(&self.y) {
            for (index, value) in row.iter() {
                self.rdz[index] -= value * y;
            }
        }
        for (r, z) in self.rdz.iter_mut().zip(&self.z) {
            *r -= z;
        }
    }

    /// Forms and factors the Schur complement; false when it cannot be factored even perturbed.
    pub fn factor_schur(&mut self, effort: &mut Effort) -> bool {
        for state in &mut self.blocks {
            match &mut state.nt {
                Some(nt) => {
                    if !nt.update(&state.x, &state.ls) {
                        return false;
                    }
                    effort.eigendecompositions += 1;
                    effort.flops += nt.flops_update();
                }
                None => {
                    state.invert_s(&mut self.ws);
                    effort.flops += flops::inverse_from_factor(state.order);
                }
            }
        }
        for ((ratio, x), z) in self.ratios.iter_mut().zip(&self.x).zip(&self.z) {
            *ratio = x / z;
        }
        let points: Vec<&Mat<f64>> =
            self.blocks.iter().map(|state| scaled_or(&state.nt, &state.x)).collect();
        let inverses: Vec<&Mat<f64>> =
            self.blocks.iter().map(|state| scaled_or(&state.nt, &state.si)).collect();
        self.plan.form(&self.op, &points, &inverses, &self.ratios, &mut self.schur);
        dense::mirror_lower(self.schur.as_mut());
        effort.flops += self.plan.flops + flops::cholesky(self.b.len());
        effort.factorisations += 1;
        let m = self.b.len();
        // A constraint that fixes X on its own range to zero leaves a diagonal entry that is rounding
        // noise, of either sign: it is shifted by a share of the largest entry.
        let top = (0..m).fold(0.0_f64, |t, i| t.max(self.schur[(i, i)]));
        let mut shift = 0.0;
        for _ in 0..12 {
            dense::copy_into(self.schur.as_ref(), self.factor.as_mut());
            if shift > 0.0 {
                for i in 0..m {
                    self.factor[(i, i)] += shift * self.schur[(i, i)].abs().max(1e-12 * top);
                }
            }
            if cholesky::factor_in_place(self.factor.as_mut(), &mut self.ws).is_ok() {
                self.perturbed = shift > 0.0;
                return true;
            }
            shift = if shift == 0.0 { 1e-15 } else { shift * 30.0 };
        }
        false
    }

    /// Solves M dy = rhs with the factor, refined against M itself.
    fn solve_schur(&mut self) {
        let m = self.b.len();
        self.dy.copy_from_slice(&self.rhs);
        cholesky::solve_vector(self.factor.as_ref(), &mut self.dy);
        let scale = norm2(&self.rhs);
        if m == 0 || scale == 0.0 {
            return;
        }
        // A perturbed factor needs more steps, and each must still pay.
        let steps = if self.perturbed { 12 } else { 3 };
        let mut last = f64::INFINITY;
        for _ in 0..steps {
            self.correction.copy_from_slice(&self.rhs);
            dense::gemv(&mut self.correction, Accumulate::Add, -1.0, self.schur.as_ref(), &self.dy);
            let size = norm2(&self.correction);
            if size <= 1e-15 * scale || size > 0.5 * last {
                return;
            }
            last = size;
            cholesky::solve_vector(self.factor.as_ref(), &mut self.correction);
            for (value, change) in self.dy.iter_mut().zip(&self.correction) {
                *value += change;
            }
        }
    }

    /// Computes the part of the right sides that predictor and corrector share:
    /// `b + A(X R_d S^-1) + A_l (x/z R_dl)`.
    fn shared_rhs(&mut self, dual_residual: f64) {
        self.base.copy_from_slice(&self.b);
        if dual_residual < 1e-14 {
            return;
        }
        for (index, state) in self.blocks.iter_mut().enumerate() {
            let left = scaled_or(&state.nt, &state.x);
            slack_times_dense(&state.rd, left, Accumulate::Replace, &mut state.t);
            let block = &self.op.blocks[index];
            add_product(block, state, self.by_entries[index], 1.0, &mut self.base);
        }
        for (row, value) in self.op.orthant_rows.iter().zip(self.base.iter_mut()) {
            *value += row.iter().map(|(j, a)| a * self.ratios[j] * self.rdz[j]).sum::<f64>();
        }
    }

    /// Computes the predictor (affine) direction.
    pub fn predictor(&mut self, dual_residual: f64, effort: &mut Effort) {
        self.shared_rhs(dual_residual);
        self.rhs.copy_from_slice(&self.base);
        self.solve_schur();
        self.dual_directions();
        for state in &mut self.blocks {
            let left = scaled_or(&state.nt, &state.x);
            slack_times_dense(&state.ds, left, Accumulate::Replace, &mut state.t);
            close_direction(state);
        }
        for j in 0..self.x.len() {
            self.dx[j] = -self.x[j] - self.ratios[j] * self.dz[j];
        }
        self.count_products(effort);
    }

    /// Computes the corrector direction for the target `sigma_mu`, from the predictor's directions.
    pub fn corrector(&mut self, sigma_mu: f64, effort: &mut Effort) {
        self.rhs.copy_from_slice(&self.base);
        for index in 0..self.blocks.len() {
            let block = &self.op.blocks[index];
            let state = &mut self.blocks[index];
            let (target, share) = match &mut state.nt {
                Some(nt) => {
                    nt.second_order(&state.dx, &state.ds, sigma_mu);
                    effort.flops += nt.flops_second_order();
                    (&nt.second, 1.0)
                }
                None => (&state.si, sigma_mu),
            };
            self.image.fill(0.0);
            block.add_dense(target.as_ref(), &mut self.image);
            for (value, image) in self.rhs.iter_mut().zip(&self.image) {
                *value -= share * image;
            }
            if state.nt.is_none() {
                slack_times_dense(&state.ds, &state.dx, Accumulate::Replace, &mut state.t);
                add_product(block, state, self.by_entries[index], 1.0, &mut self.rhs);
            }
        }
        for j in 0..self.x.len() {
            self.second[j] = (sigma_mu - self.dx[j] * self.dz[j]) / self.z[j];
        }
        let second = &self.second;
        for (row, value) in self.op.orthant_rows.iter().zip(self.rhs.iter_mut()) {
            *value -= row.iter().map(|(j, a)| a * second[j]).sum::<f64>();
        }
        self.solve_schur();
        self.dual_directions();
        for state in &mut self.blocks {
            // Of HKM, T holds the second-order product already.
            let beta = if state.nt.is_some() { Accumulate::Replace } else { Accumulate::Add };
            let left = scaled_or(&state.nt, &state.x);
            slack_times_dense(&state.ds, left, beta, &mut state.t);
            close_direction(state);
            let (target, share) = match &state.nt {
                Some(nt) => (&nt.second, 1.0),
                None => (&state.si, sigma_mu),
            };
            dense::axpy_matrix(share, target.as_ref(), state.dx.as_mut());
        }
        for j in 0..self.x.len() {
            self.dx[j] = self.second[j] - self.x[j] - self.ratios[j] * self.dz[j];
        }
        self.count_products(effort);
    }

    /// Refines (dX, dy, dS) so that A(dX) = r_p: rounding in dX grows like 1/mu and would otherwise
    /// feed the primal residual. The correction solves the same system for the residual as measured
    /// on dX itself. Uses R_d as workspace.
    pub fn refine(&mut self, floor: f64, effort: &mut Effort) {
        let mut last = f64::INFINITY;
        for _ in 0..3 {
            self.op.apply_orthant(&self.dx, &mut self.image);
            for (block, state) in self.op.blocks.iter().zip(&self.blocks) {
                block.add_dense(state.dx.as_ref(), &mut self.image);
            }
            for ((r, rp), image) in self.rhs.iter_mut().zip(&self.rp).zip(&self.image) {
                *r = rp - image;
            }
            let size = norm2(&self.rhs);
            if size <= floor.max(1e-3 * norm2(&self.rp)) || size > 0.5 * last {
                return;
            }
            last = size;
            self.base.copy_from_slice(&self.dy);
            self.solve_schur();
            for (block, state) in self.op.blocks.iter().zip(&mut self.blocks) {
                fill_full(block, &self.dy, 0.0, &mut state.rd, &mut state.outer_scratch);
                add_scaled(1.0, &state.rd, &mut state.ds);
                let left = scaled_or(&state.nt, &state.x);
                slack_times_dense(&state.rd, left, Accumulate::Replace, &mut state.t);
                let (t, right) = (state.t.transpose(), scaled_or(&state.nt, &state.si));
                dense::gemm(state.p.as_mut(), Accumulate::Replace, -1.0, t, right.as_ref());
                dense::symmetrise(state.p.as_mut());
                dense::axpy_matrix(1.0, state.p.as_ref(), state.dx.as_mut());
            }
            for (row, dy) in self.op.orthant_rows.iter().zip(&self.dy) {
                for (index, value) in row.iter() {
                    self.dz[index] -= value * dy;
                    self.dx[index] += self.ratios[index] * value * dy;
                }
            }
            for (dy, base) in self.dy.iter_mut().zip(&self.base) {
                *dy += base;
            }
            self.count_products(effort);
        }
    }

    /// Sets dS = R_d - A*(dy) in every block and the nonnegative part.
    fn dual_directions(&mut self) {
        for (block, state) in self.op.blocks.iter().zip(&mut self.blocks) {
            fill_full(block, &self.dy, 0.0, &mut state.ds, &mut state.outer_scratch);
            add_scaled(1.0, &state.rd, &mut state.ds);
        }
        self.dz.copy_from_slice(&self.rdz);
        for (row, dy) in self.op.orthant_rows.iter().zip(&self.dy) {
            for (index, value) in row.iter() {
                self.dz[index] -= value * dy;
            }
        }
    }

    /// Returns the steps to the boundary of the current directions.
    pub fn reach(&mut self, effort: &mut Effort) -> Reach {
        let mut reach = Reach { primal: f64::INFINITY, dual: f64::INFINITY };
        for state in &mut self.blocks {
            self.reach_calls += 2;
            reach.primal = reach.primal.min(state.reach_x(self.reach_calls));
            reach.dual = reach.dual.min(state.reach_s(self.reach_calls + 1));
            effort.flops += 8 * 20 * (state.order * state.order) as u64;
        }
        reach.primal = reach.primal.min(orthant_reach(&self.x, &self.dx));
        reach.dual = reach.dual.min(orthant_reach(&self.z, &self.dz));
        reach
    }

    /// Returns <X + a dX, S + b dS> + (x + a dx)'(z + b dz).
    pub fn trial_complementarity(&self, a: f64, b: f64) -> f64 {
        let mut total = 0.0;
        for state in &self.blocks {
            total += inner(&state.x, &state.s) + a * inner(&state.dx, &state.s);
            total += b * (inner(&state.x, &state.ds) + a * inner(&state.dx, &state.ds));
        }
        total
            + (0..self.x.len())
                .map(|j| (self.x[j] + a * self.dx[j]) * (self.z[j] + b * self.dz[j]))
                .sum::<f64>()
    }

    /// Moves by the given steps, shortened until X and S factor; returns the steps taken, or none
    /// when no positive step keeps the cone.
    pub fn advance(&mut self, mut a: f64, mut b: f64, effort: &mut Effort) -> Option<(f64, f64)> {
        for state in &mut self.blocks {
            dense::axpy_matrix(a, state.dx.as_ref(), state.x.as_mut());
            add_scaled(b, &state.ds, &mut state.s);
            effort.flops += 2 * flops::cholesky(state.order);
            effort.factorisations += 2;
        }
        let mut taken = None;
        for _ in 0..12 {
            let primal = self.blocks.iter_mut().all(|state| state.factor_x(&mut self.ws));
            let dual = self.blocks.iter_mut().all(|state| state.factor_s(&mut self.ws));
            if primal && dual {
                taken = Some((a, b));
                break;
            }
            if !primal {
                let shorter = 0.7 * a;
                for state in &mut self.blocks {
                    dense::axpy_matrix(shorter - a, state.dx.as_ref(), state.x.as_mut());
                }
                a = shorter;
            }
            if !dual {
                let shorter = 0.7 * b;
                for state in &mut self.blocks {
                    add_scaled(shorter - b, &state.ds, &mut state.s);
                }
                b = shorter;
            }
        }
        if taken.is_none() {
            // No positive step was found: back to the iterate and its factors.
            for state in &mut self.blocks {
                dense::axpy_matrix(-a, state.dx.as_ref(), state.x.as_mut());
                add_scaled(-b, &state.ds, &mut state.s);
                state.factor_x(&mut self.ws);
                state.factor_s(&mut self.ws);
            }
            return None;
        }
        for j in 0..self.x.len() {
            self.x[j] += a * self.dx[j];
            self.z[j] += b * self.dz[j];
        }
        for (y, dy) in self.y.iter_mut().zip(&self.dy) {
            *y += b * dy;
        }
        taken
    }

    fn count_products(&self, effort: &mut Effort) {
        effort.operator_products += 2;
        effort.flops += self
            .blocks
            .iter()
            .map(|state| 2 * flops::gemm(state.order, state.order, state.order))
            .sum::<u64>();
        effort.flops += 4 * (self.b.len() * self.b.len()) as u64;
    }
}

/// Sets dX = -X - sym(T' S^-1), with W in the place of S^-1 for the NT direction.
fn close_direction(state: &mut BlockState) {
    let right = scaled_or(&state.nt, &state.si);
    let (t, dx) = (state.t.transpose(), &mut state.dx);
    dense::gemm(dx.as_mut(), Accumulate::Replace, -1.0, t, right.as_ref());
    dense::symmetrise(dx.as_mut());
    dense::axpy_matrix(-1.0, state.x.as_ref(), dx.as_mut());
}

/// Adds `scale * <A_i, T' S^-1>` to `out[i]`, with W in the place of S^-1 for the NT direction.
fn add_product(
    block: &BlockOperator,
    state: &mut BlockState,
    by_entries: bool,
    scale: f64,
    out: &mut [f64],
) {
    let right = scaled_or(&state.nt, &state.si);
    if by_entries {
        add_product_by_entries(block, &state.t, right, scale, out);
        return;
    }
    let t: MatRef<'_, f64> = state.t.transpose();
    dense::gemm(state.p.as_mut(), Accumulate::Replace, scale, t, right.as_ref());
    dense::symmetrise(state.p.as_mut());
    block.add_dense(state.p.as_ref(), out);
}

/// Whether <A_i, T'S^-1> is cheaper by one dot per entry than by a full product: the product costs
/// 2 n^3 flops at about ten times the rate of the dots.
fn single_entries_are_cheaper(block: &BlockOperator) -> bool {
    let n = block.order;
    block.outer.is_none() && 10 * 4 * block.entries.values.len() < 2 * n * n
}

fn orthant_reach(x: &[f64], dx: &[f64]) -> f64 {
    x.iter()
        .zip(dx)
        .filter(|(_, step)| **step < 0.0)
        .map(|(value, step)| -value / step)
        .fold(f64::INFINITY, f64::min)
}
