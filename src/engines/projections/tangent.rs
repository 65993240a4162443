//! Tangent spaces of the rank set, and the constraints (with an objective cut as one more row) restricted to them.
//!
//! At Y = Q L Q' of rank s the tangent space of the matrices of rank s is {Z : Q2'ZQ2 = 0}, Q2 spanning the complement
//! of Q; the projection on it is Z - Q2 Q2' Z Q2 Q2' = Q M' + M Q' with M = ZQ - Q (Q'ZQ)/2. Blocks without a rank bound
//! and the nonnegative part are convex and are not linearised: their tangent space is the whole space. It is not for
//! factors: points are dense.

use super::RankSet;
use super::point::DensePoint;
use crate::engines::affine::maps::{DenseMaps, dense_cost};
use crate::linalg::cg::{self, CgWorkspace};
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::lanczos::LinearOperator;
use crate::linalg::vector::{axpy, dot, norm2};
use crate::linalg::{Mat, MatRef};
use crate::problem::{Operator, Problem};

/// The tangent space of the rank set at a point.
pub struct Tangent {
    parts: Vec<Option<Part>>,
}

/// A block with a rank bound.
struct Part {
    /// Most columns used.
    rank: usize,
    basis: Mat<f64>,
    image: Mat<f64>,
    core: Mat<f64>,
    width: usize,
}

impl Tangent {
    /// Takes the memory: two order x rank matrices for each block with a bound.
    pub fn new(problem: &Problem) -> Self {
        let part = |order: usize, rank: usize| Part {
            rank,
            basis: Mat::zeros(order, rank),
            image: Mat::zeros(order, rank),
            core: Mat::zeros(rank, rank),
            width: 0,
        };
        let parts = problem
            .blocks()
            .iter()
            .map(|b| b.rank.filter(|rank| *rank < b.order).map(|rank| part(b.order, rank)));
        Tangent { parts: parts.collect() }
    }

    /// Moves to the point that `set` projected on last. A point of lower rank than the bound is taken with
    /// eigenvectors of eigenvalue zero added, so that its rank may rise.
    pub fn at(&mut self, set: &RankSet) {
        for (k, part) in self.parts.iter_mut().enumerate() {
            let Some(part) = part else { continue };
            let eigen = set.eigen(k);
            let n = eigen.order();
            part.width = part.rank;
            let from = eigen.vectors().subcols(n - part.width, part.width);
            dense::copy_into(from, part.basis.as_mut());
        }
    }

    /// Projects `point` on the space.
    pub fn project(&mut self, point: &mut DensePoint) {
        for (part, matrix) in self.parts.iter_mut().zip(&mut point.blocks) {
            let Some(part) = part else { continue };
            let (q, m) = (part.basis.as_ref(), part.image.as_mut());
            dense::gemm(m, Accumulate::Replace, 1.0, matrix.as_ref(), q);
            let core = part.core.as_mut();
            dense::gemm(core, Accumulate::Replace, 1.0, q.transpose(), part.image.as_ref());
            dense::gemm(part.image.as_mut(), Accumulate::Add, -0.5, q, part.core.as_ref());
            let m: MatRef<'_, f64> = part.image.as_ref();
            dense::product_lower(matrix.as_mut(), Accumulate::Replace, 1.0, q, m.transpose());
            dense::product_lower(matrix.as_mut(), Accumulate::Add, 1.0, m, q.transpose());
            dense::mirror_lower(matrix.as_mut());
        }
    }

    /// Returns the flops of one projection, by the leading terms.
    pub fn flops(&self) -> u64 {
        let part = |part: &Part| 4 * (part.basis.nrows().pow(2) * part.rank) as u64;
        self.parts.iter().flatten().map(part).sum()
    }
}

/// The rows A_i (of the problem as it is given) and, while the cut is active, C/||C|| as one more.
pub struct Rows<'a> {
    maps: DenseMaps<'a>,
    rhs: &'a [f64],
    cost: DensePoint,
    cost_norm: f64,
    residual: Vec<f64>,
    excess: f64,
    image: Vec<f64>,
    cut_image: f64,
}

impl<'a> Rows<'a> {
    /// Makes the rows of a problem.
    pub fn new(problem: &'a Problem, op: &'a Operator) -> Self {
        let (blocks, x) = dense_cost(op);
        let mut cost = DensePoint { blocks, x };
        let cost_norm = cost.norm();
        if cost_norm > 0.0 {
            cost.scale(1.0 / cost_norm);
        }
        Rows {
            maps: DenseMaps::new(op),
            rhs: problem.rhs(),
            cost,
            cost_norm,
            residual: vec![0.0; op.constraints()],
            excess: 0.0,
            image: vec![0.0; op.constraints()],
            cut_image: 0.0,
        }
    }

    /// Returns <C, X> + c'x.
    pub fn value(&self, point: &DensePoint) -> f64 {
        self.cost_norm * inner(&self.cost, point)
    }

    /// Keeps the residual r = (A(X) - b, max(0, <C, X> - gamma)/||C||) of a point and returns ||r||_2.
    pub fn measure(&mut self, point: &DensePoint, gamma: f64) -> f64 {
        self.maps.apply(&point.blocks, &point.x, &mut self.residual);
        axpy(-1.0, self.rhs, &mut self.residual);
        self.excess = 0.0;
        if gamma.is_finite() && self.cost_norm > 0.0 {
            self.excess = ((self.value(point) - gamma) / self.cost_norm).max(0.0);
        }
        norm2(&self.residual).hypot(self.excess)
    }

    /// Writes J'r of the residual kept, J being the rows (with the cut only while r has its part).
    pub fn gradient(&mut self, out: &mut DensePoint) {
        out.clear();
        self.maps.add_adjoint(&self.residual, 1.0, &mut out.blocks, &mut out.x);
        if self.excess > 0.0 {
            out.add(self.excess, &self.cost);
        }
    }

    /// Returns ||J D||_2 for a direction and keeps J D.
    pub fn image(&mut self, direction: &DensePoint) -> f64 {
        self.maps.apply(&direction.blocks, &direction.x, &mut self.image);
        self.cut_image = if self.excess > 0.0 { inner(&self.cost, direction) } else { 0.0 };
        norm2(&self.image).hypot(self.cut_image)
    }

    /// Writes J'J D for the direction given to [`Self::image`] last.
    fn back(&mut self, out: &mut DensePoint) {
        out.clear();
        self.maps.add_adjoint(&self.image, 1.0, &mut out.blocks, &mut out.x);
        if self.excess > 0.0 {
            out.add(self.cut_image, &self.cost);
        }
    }

    /// Returns the flops of one application of the rows or of their adjoint.
    pub fn flops(&self) -> u64 {
        self.maps.flops()
    }
}

/// Returns the inner product of two points.
pub fn inner(a: &DensePoint, b: &DensePoint) -> f64 {
    let pairs = a.blocks.iter().zip(&b.blocks);
    let blocks: f64 = pairs.map(|(x, y)| dense::dot_symmetric(x.as_ref(), y.as_ref())).sum();
    blocks + dot(&a.x, &b.x)
}

/// The least-squares step in a tangent space: the shortest D of the space that minimises ||r + J D||.
pub struct TangentStep {
    direction: DensePoint,
    image: DensePoint,
    right: Vec<f64>,
    solution: Vec<f64>,
    workspace: CgWorkspace,
}

/// D -> P_T J'J D on flat points of the space.
struct Normal<'a, 'b> {
    tangent: &'a mut Tangent,
    rows: &'a mut Rows<'b>,
    direction: &'a mut DensePoint,
    image: &'a mut DensePoint,
}

impl LinearOperator for Normal<'_, '_> {
    fn order(&self) -> usize {
        self.direction.length()
    }

    fn apply(&mut self, x: &[f64], y: &mut [f64]) {
        self.direction.read_flat(x);
        self.rows.image(self.direction);
        self.rows.back(self.image);
        self.tangent.project(self.image);
        self.image.write_flat(y);
    }
}

impl TangentStep {
    /// Takes the memory: two points and six flat vectors.
    pub fn new(problem: &Problem) -> Self {
        let zero = DensePoint::zeros(problem);
        TangentStep {
            right: vec![0.0; zero.length()],
            solution: vec![0.0; zero.length()],
            direction: zero.clone(),
            image: zero,
            workspace: CgWorkspace::new(),
        }
    }

    /// Solves for the residual that `rows` keeps, by conjugate gradients on the normal equations from zero, and adds
    /// the step to `point`; returns the steps of conjugate gradients.
    pub fn take(
        &mut self,
        tangent: &mut Tangent,
        rows: &mut Rows<'_>,
        params: &cg::Params,
        point: &mut DensePoint,
    ) -> usize {
        rows.gradient(&mut self.image);
        tangent.project(&mut self.image);
        self.image.write_flat(&mut self.right);
        self.solution.fill(0.0);
        let (direction, image) = (&mut self.direction, &mut self.image);
        let mut normal = Normal { tangent, rows, direction, image };
        let (right, solution) = (&self.right, &mut self.solution);
        let info = cg::solve(&mut normal, right, solution, params, &mut self.workspace);
        self.direction.read_flat(&self.solution);
        point.add(-1.0, &self.direction);
        info.steps
    }
}
