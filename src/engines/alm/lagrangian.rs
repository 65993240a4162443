//! The augmented Lagrangian of the factored problem, its gradient and its exact restriction to a line.
//!
//! All factors and the square roots u of the nonnegative part (x = u o u) lie in one flat vector z, so
//! that every case is the same quartic. Data are scaled: rows of A to norm 1, the cost to norm 1, the
//! variable so that the right side has norm 1. With v = A(z) - b, S = C - A*(y - sigma v):
//!
//! ```text
//! L(z)        = cost - y'v + (sigma/2) v'v
//! gradient    = (2 S_k R_k, 2 s o u)
//! L(z + a d)  = L(z) + q1 a + q2 a^2 + q3 a^3 + q4 a^4,      p1 = A'(z)d, p2 = A(d)
//! q1 = c1 - y'p1 + sigma v'p1,   q2 = c2 - y'p2 + sigma (v'p2 + p1'p1/2),
//! q3 = sigma p1'p2,              q4 = (sigma/2) p2'p2
//! ```
//!
//! Source of the formulas: S. Burer and R. Monteiro, Mathematical Programming 95:329-357 (2003),
//! 10.1007/s10107-002-0352-8; re-derived, and checked by finite differences in the tests.

use crate::linalg::vector::{axpy, dot, norm2, scale};
use crate::problem::{Factor, LineScratch, Operator, Problem, Slack};
use std::ops::Range;

/// Where each block's factor lies in the flat vector.
#[derive(Clone, Debug, PartialEq)]
pub struct Layout {
    /// Order and width of each block.
    pub shapes: Vec<(usize, usize)>,
    /// Place of each block's rows.
    pub ranges: Vec<Range<usize>>,
    /// Place of the square roots of the nonnegative part.
    pub orthant: Range<usize>,
}

impl Layout {
    /// Lays out factors of the given widths.
    #[track_caller]
    pub fn new(problem: &Problem, widths: &[usize]) -> Self {
        assert_eq!(widths.len(), problem.blocks().len(), "one width a block");
        let shapes: Vec<(usize, usize)> = problem
            .blocks()
            .iter()
            .zip(widths)
            .map(|(block, &width)| (block.order, width))
            .collect();
        let mut end = 0;
        let ranges = shapes
            .iter()
            .map(|(order, width)| {
                let start = end;
                end += order * width;
                start..end
            })
            .collect();
        Layout { shapes, ranges, orthant: end..end + problem.orthant() }
    }

    /// Returns the length of the flat vector.
    pub fn length(&self) -> usize {
        self.orthant.end
    }
}

/// Scales of rows, cost and variable.
#[derive(Clone, Debug, PartialEq)]
pub struct Scaling {
    /// Factor of each constraint: 1 / ||A_i||_F.
    pub rows: Vec<f64>,
    /// Factor of the cost: 1 / ||C||_F.
    pub cost: f64,
    /// X = variable * X_scaled; the norm of the scaled right side.
    pub variable: f64,
}

impl Scaling {
    /// Chooses the scales of a problem; zero norms are left alone.
    pub fn of(problem: &Problem) -> Self {
        let inverse = |norm: f64| if norm > 0.0 { 1.0 / norm } else { 1.0 };
        let rows: Vec<f64> = problem.constraints().iter().map(|a| inverse(a.norm())).collect();
        let right: f64 = rows.iter().zip(problem.rhs()).map(|(d, b)| (d * b).powi(2)).sum();
        let variable = if right > 0.0 { right.sqrt() } else { 1.0 };
        Scaling { rows, cost: inverse(problem.cost().norm()), variable }
    }
}

/// The augmented Lagrangian at a point, with everything a descent needs, preallocated.
#[derive(Clone, Debug)]
pub struct Lagrangian<'a> {
    op: &'a Operator,
    /// Scales.
    pub scaling: Scaling,
    /// Layout of `z`.
    pub layout: Layout,
    rhs: Vec<f64>,
    /// Scaled multipliers.
    pub y: Vec<f64>,
    /// Penalty.
    pub sigma: f64,
    /// The point.
    pub z: Vec<f64>,
    /// Gradient at the point, when computed.
    pub gradient: Vec<f64>,
    /// Scaled residual v at the point.
    pub residual: Vec<f64>,
    /// Scaled cost at the point.
    pub cost: f64,
    first: Vec<f64>,
    second: Vec<f64>,
    line_cost: (f64, f64),
    weights: Vec<f64>,
    squares: Vec<f64>,
    orthant_slack: Vec<f64>,
    slacks: Vec<Slack>,
    scratch: Vec<LineScratch>,
}

impl<'a> Lagrangian<'a> {
    /// Takes memory for factors of the given widths; the point is zero.
    pub fn new(problem: &Problem, op: &'a Operator, widths: &[usize]) -> Self {
        let layout = Layout::new(problem, widths);
        let scaling = Scaling::of(problem);
        let m = op.constraints();
        let rhs = (0..m).map(|i| scaling.rows[i] * problem.rhs()[i] / scaling.variable).collect();
        Lagrangian {
            op,
            rhs,
            y: vec![0.0; m],
            sigma: 1.0,
            z: vec![0.0; layout.length()],
            gradient: vec![0.0; layout.length()],
            residual: vec![0.0; m],
            cost: 0.0,
            first: vec![0.0; m],
            second: vec![0.0; m],
            line_cost: (0.0, 0.0),
            weights: vec![0.0; m],
            squares: vec![0.0; problem.orthant()],
            orthant_slack: vec![0.0; problem.orthant()],
            slacks: op.blocks.iter().map(|block| block.slack()).collect(),
            scratch: op.blocks.iter().zip(widths).map(|(b, &w)| LineScratch::new(b, w)).collect(),
            scaling,
            layout,
        }
    }

    /// Returns the norm of the scaled right side: 1, or 0 when b = 0.
    pub fn rhs_norm(&self) -> f64 {
        norm2(&self.rhs)
    }

    /// Computes residual and cost of `z` from their definitions.
    pub fn refresh(&mut self) {
        let orthant = &self.z[self.layout.orthant.clone()];
        for (square, u) in self.squares.iter_mut().zip(orthant) {
            *square = u * u;
        }
        self.op.apply_orthant(&self.squares, &mut self.residual);
        let mut cost = dot(&self.op.orthant_cost, &self.squares);
        for (k, block) in self.op.blocks.iter().enumerate() {
            let rows = &self.z[self.layout.ranges[k].clone()];
            let width = self.layout.shapes[k].1;
            cost += block.add_square(rows, width, &mut self.scratch[k], &mut self.residual);
        }
        for i in 0..self.rhs.len() {
            self.residual[i] = self.scaling.rows[i] * self.residual[i] - self.rhs[i];
        }
        self.cost = self.scaling.cost * cost;
    }

    /// Computes the gradient at `z` from the residual held.
    pub fn compute_gradient(&mut self) {
        for i in 0..self.y.len() {
            self.weights[i] = self.scaling.rows[i] * (self.y[i] - self.sigma * self.residual[i]);
        }
        for (k, block) in self.op.blocks.iter().enumerate() {
            block.fill_slack(&self.weights, self.scaling.cost, &mut self.slacks[k]);
            let range = self.layout.ranges[k].clone();
            let width = self.layout.shapes[k].1;
            let out = &mut self.gradient[range.clone()];
            block.slack_rows(&self.slacks[k], &self.z[range], width, &mut self.scratch[k], out);
            scale(2.0, out);
        }
        let range = self.layout.orthant.clone();
        self.op.orthant_slack(&self.weights, self.scaling.cost, &mut self.orthant_slack);
        for ((g, u), s) in
            self.gradient[range.clone()].iter_mut().zip(&self.z[range]).zip(&self.orthant_slack)
        {
            *g = 2.0 * s * u;
        }
    }

    /// Computes the coefficients [q1, q2, q3, q4] along `d` and remembers what [`Self::advance`] needs.
    pub fn line(&mut self, d: &[f64]) -> [f64; 4] {
        let range = self.layout.orthant.clone();
        let mut costs = (0.0, 0.0);
        for j in 0..self.squares.len() {
            self.squares[j] = 2.0 * self.z[range.start + j] * d[range.start + j];
        }
        self.op.apply_orthant(&self.squares, &mut self.first);
        costs.0 += dot(&self.op.orthant_cost, &self.squares);
        for j in 0..self.squares.len() {
            self.squares[j] = d[range.start + j].powi(2);
        }
        self.op.apply_orthant(&self.squares, &mut self.second);
        costs.1 += dot(&self.op.orthant_cost, &self.squares);
        for (k, block) in self.op.blocks.iter().enumerate() {
            let range = self.layout.ranges[k].clone();
            let (linear, square) = block.add_line(
                &self.z[range.clone()],
                &d[range],
                self.layout.shapes[k].1,
                &mut self.scratch[k],
                &mut self.first,
                &mut self.second,
            );
            costs.0 += linear;
            costs.1 += square;
        }
        for i in 0..self.rhs.len() {
            self.first[i] *= self.scaling.rows[i];
            self.second[i] *= self.scaling.rows[i];
        }
        self.line_cost = (self.scaling.cost * costs.0, self.scaling.cost * costs.1);
        let (v, p1, p2, y) = (&self.residual, &self.first, &self.second, &self.y);
        let sigma = self.sigma;
        [
            self.line_cost.0 - dot(y, p1) + sigma * dot(v, p1),
            self.line_cost.1 - dot(y, p2) + sigma * (dot(v, p2) + 0.5 * dot(p1, p1)),
            sigma * dot(p1, p2),
            0.5 * sigma * dot(p2, p2),
        ]
    }

    /// Moves to `z + a d`, d being the argument of the last [`Self::line`]; residual and cost are updated,
    /// not recomputed.
    pub fn advance(&mut self, a: f64, d: &[f64]) {
        axpy(a, d, &mut self.z);
        axpy(a, &self.first, &mut self.residual);
        axpy(a * a, &self.second, &mut self.residual);
        self.cost += a * self.line_cost.0 + a * a * self.line_cost.1;
    }

    /// Computes `out = H d`, H being the Hessian at the last gradient: `(2 S D + 2 sigma A*(J d) R, 2 s o d + 2 sigma
    /// a*(J d) o u)`. `adjoint` holds one slack a block and `image` a vector of the length of z; both are scratch. It
    /// calls [`Self::line`].
    pub fn hessian_times(
        &mut self,
        d: &[f64],
        adjoint: &mut [Slack],
        image: &mut [f64],
        out: &mut [f64],
    ) {
        self.line(d);
        for i in 0..self.first.len() {
            self.weights[i] = -self.sigma * self.scaling.rows[i] * self.first[i];
        }
        for (k, block) in self.op.blocks.iter().enumerate() {
            block.fill_slack(&self.weights, 0.0, &mut adjoint[k]);
            let range = self.layout.ranges[k].clone();
            let width = self.layout.shapes[k].1;
            let (target, image) = (&mut out[range.clone()], &mut image[range.clone()]);
            let scratch = &mut self.scratch[k];
            block.slack_rows(&self.slacks[k], &d[range.clone()], width, scratch, target);
            block.slack_rows(&adjoint[k], &self.z[range], width, scratch, image);
            axpy(1.0, image, target);
            scale(2.0, target);
        }
        self.op.orthant_slack(&self.weights, 0.0, &mut self.squares);
        for (j, place) in self.layout.orthant.clone().enumerate() {
            let both = self.orthant_slack[j] * d[place] + self.squares[j] * self.z[place];
            out[place] = 2.0 * both;
        }
    }

    /// Makes one empty slack a block, for [`Self::hessian_times`].
    pub fn empty_slacks(&self) -> Vec<Slack> {
        self.op.blocks.iter().map(|block| block.slack()).collect()
    }

    /// Returns p1 = J d of the last [`Self::line`], scaled.
    pub fn first(&self) -> &[f64] {
        &self.first
    }

    /// Sets the multipliers to `factor` times p1 of the last [`Self::line`].
    pub fn take_first_as_multipliers(&mut self, factor: f64) {
        for (y, p) in self.y.iter_mut().zip(&self.first) {
            *y = factor * p;
        }
    }

    /// Returns the scaled slack of block k at the last gradient.
    pub fn slack(&self, k: usize) -> &Slack {
        &self.slacks[k]
    }

    /// Returns the scaled slack of the nonnegative part at the last gradient.
    pub fn orthant_slack(&self) -> &[f64] {
        &self.orthant_slack
    }

    /// Returns L at the point.
    pub fn value(&self) -> f64 {
        let v = &self.residual;
        self.cost - dot(&self.y, v) + 0.5 * self.sigma * dot(v, v)
    }

    /// Updates the multipliers, y <- y - sigma v.
    pub fn update_multipliers(&mut self) {
        axpy(-self.sigma, &self.residual, &mut self.y);
    }

    /// Returns ||A(X) - b||_2 / (1 + ||b||_2) in the problem's own units.
    pub fn feasibility(&self, problem: &Problem) -> f64 {
        let variable = self.scaling.variable;
        let squares: f64 = self
            .residual
            .iter()
            .zip(&self.scaling.rows)
            .map(|(v, d)| (v * variable / d).powi(2))
            .sum();
        squares.sqrt() / (1.0 + norm2(problem.rhs()))
    }

    /// Writes factors, nonnegative part and multipliers in the problem's own units.
    pub fn export(&self) -> (Vec<Factor>, Vec<f64>, Vec<f64>) {
        let root = self.scaling.variable.sqrt();
        let factors = self
            .layout
            .shapes
            .iter()
            .zip(&self.layout.ranges)
            .map(|(&(order, width), range)| Factor {
                order,
                width,
                data: self.z[range.clone()].iter().map(|value| root * value).collect(),
            })
            .collect();
        let orthant = self.z[self.layout.orthant.clone()]
            .iter()
            .map(|u| self.scaling.variable * u * u)
            .collect();
        let y =
            self.y.iter().zip(&self.scaling.rows).map(|(y, d)| y * d / self.scaling.cost).collect();
        (factors, orthant, y)
    }

    /// Reads factors, nonnegative part and multipliers in the problem's own units; widths must fit.
    #[track_caller]
    pub fn import(&mut self, factors: &[Factor], orthant: &[f64], y: &[f64]) {
        let root = 1.0 / self.scaling.variable.sqrt();
        for (factor, range) in factors.iter().zip(&self.layout.ranges) {
            let target = &mut self.z[range.clone()];
            assert_eq!(target.len(), factor.data.len(), "factor of another width");
            for (t, value) in target.iter_mut().zip(&factor.data) {
                *t = root * value;
            }
        }
        for (u, x) in self.z[self.layout.orthant.clone()].iter_mut().zip(orthant) {
            *u = root * x.max(0.0).sqrt();
        }
        for i in 0..self.y.len() {
            self.y[i] = y[i] * self.scaling.cost / self.scaling.rows[i];
        }
        self.refresh();
    }

    /// Returns the flops of one gradient and one line pass.
    pub fn flops(&self) -> u64 {
        let blocks: u64 =
            self.op.blocks.iter().zip(&self.layout.shapes).map(|(b, s)| b.flops_line(s.1)).sum();
        blocks + 10 * self.layout.length() as u64 + 12 * self.rhs.len() as u64
    }
}
