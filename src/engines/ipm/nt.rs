//! Scaling point of the Nesterov-Todd direction, one PSD block.
//!
//! W is the one positive definite matrix with W S W = X. With S = L L' and L' X L = V diag(d^2) V', put
//! G = L^-T V diag(d^1/2); then W = G G' and G^-1 X G^-T = G' S G = diag(d). The direction is the HKM one
//! with W in the place of both X and S^-1, and the second-order term
//! G E G', E_ij = [2 sigma mu delta_ij - (dX~ dS~ + dS~ dX~)_ij] / (d_i + d_j), where
//! dX~ = G^-1 dX G^-T and dS~ = G' dS G are the predictor's directions.
//!
//! Y. Nesterov and M. Todd, Math. Oper. Res. 22:1-42 (1997) and SIAM J. Optim. 8:324-364 (1998); the
//! computation after M. Todd, K. Toh, R. Tutuncu, SIAM J. Optim. 8:769-796 (1998). Bibliographic data
//! from memory.

use super::iterate::slack_times_dense;
use crate::linalg::Mat;
use crate::linalg::cholesky;
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::eigen::{SymmetricEigen, flops};
use crate::problem::Slack;

/// W, its factors and the second-order term.
#[derive(Debug)]
pub(super) struct NtScaling {
    /// W.
    pub w: Mat<f64>,
    /// `G E G'` of the last corrector: what stands beside `-X` in dX.
    pub second: Mat<f64>,
    /// G, and G^-T = L V diag(d^-1/2).
    g: Mat<f64>,
    inverse: Mat<f64>,
    d: Vec<f64>,
    lower: Mat<f64>,
    work: Mat<f64>,
    product: Mat<f64>,
    eigen: SymmetricEigen,
}

/// Returns W when there is one, `plain` otherwise.
pub(super) fn scaled_or<'a>(nt: &'a Option<NtScaling>, plain: &'a Mat<f64>) -> &'a Mat<f64> {
    nt.as_ref().map_or(plain, |nt| &nt.w)
}

impl NtScaling {
    pub fn new(n: usize) -> Self {
        let zero = || Mat::zeros(n, n);
        NtScaling {
            w: zero(),
            second: zero(),
            g: zero(),
            inverse: zero(),
            d: vec![0.0; n],
            lower: zero(),
            work: zero(),
            product: zero(),
            eigen: SymmetricEigen::new(n),
        }
    }

    /// Computes W from X and the Cholesky factor of S; false when L'XL is not positive definite in
    /// floating point.
    pub fn update(&mut self, x: &Mat<f64>, ls: &Mat<f64>) -> bool {
        let n = self.d.len();
        // The strict upper triangle of a factor holds anything.
        self.lower.fill(0.0);
        for j in 0..n {
            self.lower.col_as_slice_mut(j)[j..].copy_from_slice(&ls.col_as_slice(j)[j..]);
        }
        let replace = Accumulate::Replace;
        dense::gemm(self.work.as_mut(), replace, 1.0, x.as_ref(), self.lower.as_ref());
        let lower_t = self.lower.transpose();
        dense::gemm(self.product.as_mut(), replace, 1.0, lower_t, self.work.as_ref());
        dense::symmetrise(self.product.as_mut());
        if self.eigen.decompose(self.product.as_ref()).is_err() || self.eigen.values()[0] <= 0.0 {
            return false;
        }
        for (d, square) in self.d.iter_mut().zip(self.eigen.values()) {
            *d = square.sqrt();
        }
        let vectors = self.eigen.vectors();
        for j in 0..n {
            let root = self.d[j].sqrt();
            let source = dense::column(vectors, j);
            let columns = self.g.col_as_slice_mut(j).iter_mut().zip(self.work.col_as_slice_mut(j));
            for ((g, scaled), v) in columns.zip(source) {
                *g = root * v;
                *scaled = v / root;
            }
        }
        cholesky::solve_lower_transpose_matrix(self.lower.as_ref(), self.g.as_mut());
        let (lower, scaled) = (self.lower.as_ref(), self.work.as_ref());
        dense::gemm(self.inverse.as_mut(), replace, 1.0, lower, scaled);
        dense::syrk_lower(self.w.as_mut(), replace, 1.0, self.g.as_ref());
        dense::mirror_lower(self.w.as_mut());
        true
    }

    /// Computes the second-order term from the predictor's directions.
    pub fn second_order(&mut self, dx: &Mat<f64>, ds: &Slack, sigma_mu: f64) {
        let n = self.d.len();
        let replace = Accumulate::Replace;
        // dX~ into `lower`, which is free between updates, and dS~ into `second`.
        dense::gemm(self.work.as_mut(), replace, 1.0, dx.as_ref(), self.inverse.as_ref());
        let inverse_t = self.inverse.transpose();
        dense::gemm(self.lower.as_mut(), replace, 1.0, inverse_t, self.work.as_ref());
        slack_times_dense(ds, &self.g, replace, &mut self.work);
        let g_t = self.g.transpose();
        dense::gemm(self.second.as_mut(), replace, 1.0, g_t, self.work.as_ref());
        let (left, right) = (self.lower.as_ref(), self.second.as_ref());
        dense::gemm(self.product.as_mut(), replace, 1.0, left, right);
        for j in 0..n {
            for i in j..n {
                let both = self.product[(i, j)] + self.product[(j, i)];
                let target = if i == j { 2.0 * sigma_mu } else { 0.0 };
                let value = (target - both) / (self.d[i] + self.d[j]);
                self.lower[(i, j)] = value;
                self.lower[(j, i)] = value;
            }
        }
        dense::gemm(self.work.as_mut(), replace, 1.0, self.g.as_ref(), self.lower.as_ref());
        dense::gemm(self.second.as_mut(), replace, 1.0, self.work.as_ref(), g_t);
        dense::symmetrise(self.second.as_mut());
    }

    /// Counts the flops of one update.
    pub fn flops_update(&self) -> u64 {
        let n = self.d.len();
        flops::eigen(n) + 4 * flops::gemm(n, n, n) + flops::triangular_solve(n, n)
    }

    /// Counts the flops of one second-order term.
    pub fn flops_second_order(&self) -> u64 {
        let n = self.d.len();
        7 * flops::gemm(n, n, n)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::linalg::workspace::Workspace;
    use crate::seed::Stream;

    fn positive(n: usize, stream: &mut Stream) -> Mat<f64> {
        let a = Mat::from_fn(n, n, |_, _| stream.normal());
        let mut out = Mat::identity(n, n);
        dense::gemm(out.as_mut(), Accumulate::Add, 1.0, a.as_ref(), a.transpose());
        out
    }

    /// The defining equations W S W = X and G^-1 X G^-T = G'SG = diag(d).
    #[test]
    fn the_scaling_point_maps_s_to_x() {
        let mut stream = Stream::named(3, &["nt"]);
        for n in [1, 2, 7, 40] {
            let (x, s) = (positive(n, &mut stream), positive(n, &mut stream));
            let mut factor = s.clone();
            cholesky::factor_in_place(factor.as_mut(), &mut Workspace::new()).unwrap();
            let mut nt = NtScaling::new(n);
            assert!(nt.update(&x, &factor));
            let mapped = &(&nt.w * &s) * &nt.w;
            let error = (&mapped - &x).norm_l2() / x.norm_l2();
            assert!(error <= 1e-12 * n as f64, "order {n}: {error:e}");
            // G^-1 X G^-T = G'SG = diag(d).
            let (left, right) =
                (&(nt.inverse.transpose() * &x) * &nt.inverse, &(nt.g.transpose() * &s) * &nt.g);
            for i in 0..n {
                for j in 0..n {
                    let expected = if i == j { nt.d[i] } else { 0.0 };
                    assert!((left[(i, j)] - expected).abs() <= 1e-10 * nt.d[n - 1], "{i} {j}");
                    assert!((right[(i, j)] - expected).abs() <= 1e-10 * nt.d[n - 1], "{i} {j}");
                }
            }
        }
    }
    /// `diag(d) E + E diag(d) = 2 sigma mu I - (dX~ dS~ + dS~ dX~)`, the linearised `sym(X~ S~) = sigma mu I`.
    #[test]
    fn the_second_order_term_solves_its_equation() {
        let mut stream = Stream::named(4, &["nt"]);
        for n in [1, 3, 12] {
            let (x, s) = (positive(n, &mut stream), positive(n, &mut stream));
            let mut factor = s.clone();
            cholesky::factor_in_place(factor.as_mut(), &mut Workspace::new()).unwrap();
            let mut nt = NtScaling::new(n);
            assert!(nt.update(&x, &factor));
            let (mut dx, mut ds) = (positive(n, &mut stream), positive(n, &mut stream));
            dx[(0, 0)] -= 3.0;
            ds[(n - 1, n - 1)] -= 2.0;
            let slack = Slack {
                order: n,
                store: crate::problem::SlackStore::Dense(ds.clone()),
                outer_weights: Vec::new(),
            };
            nt.second_order(&dx, &slack, 0.7);
            let e = &(nt.inverse.transpose() * &nt.second) * &nt.inverse;
            let a = &(nt.inverse.transpose() * &dx) * &nt.inverse;
            let b = &(nt.g.transpose() * &ds) * &nt.g;
            let (ab, ba) = (&a * &b, &b * &a);
            for i in 0..n {
                for j in 0..n {
                    let target = if i == j { 1.4 } else { 0.0 };
                    let right = target - ab[(i, j)] - ba[(i, j)];
                    let left = (nt.d[i] + nt.d[j]) * e[(i, j)];
                    let size = 1.0 + ab.norm_l2();
                    assert!((left - right).abs() <= 1e-10 * size, "{i} {j}: {left} {right}");
                }
            }
        }
    }
}
