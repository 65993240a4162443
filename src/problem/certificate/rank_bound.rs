//! Rank bounds: a planted rank-r optimum that attains the Ky Fan bound, with a relaxation that is
//! strictly lower.
//!
//! The problem has two blocks of order n, X with the rank bound r and Z with a free rank, constraints
//! on X alone `<A_i, X> = b_i` (i = 1..m0), and after them `X_ij + Z_ij = n delta_ij` for all i <= j,
//! that is `0 <= X <= nI`. The cost acts on X alone.
//!
//! Theorem. Let `H = [h_1 .. h_n]` be a whole-number matrix with `H'H = nI`,
//! `C = sum_i y_i A_i + S` with `S = sum_j l_j h_j h_j'`, `l_1 <= .. <= l_n` and `l_r < 0`, and
//! `b_i = <A_i, X*>` with `X* = sum_{j<=r} h_j h_j'`. Then `b'y + n^2 sum_{j<=r} l_j` is the optimum of
//! the rank-constrained problem, and X* attains it. If moreover `l_r < l_{r+1}`, X* is the only
//! optimum.
//!
//! Proof. The eigenvalues of S are `n l_j`. A feasible X of rank at most r has at most r nonzero
//! eigenvalues `mu_1 >= .. >= mu_r`, all in [0, n], so by von Neumann's trace inequality
//! `<S, X> >= sum_{j<=r} mu_j n l_j >= n^2 sum_{j<=r} l_j` (K. Fan, Proceedings of the National Academy of
//! Sciences 35:652-655, 1949, for the sums of extreme eigenvalues), and `<C, X> = b'y + <S, X>`. X* is
//! n times the projector on span(h_1..h_r), so it is feasible (Z* is n times the other projector) and
//! attains the bound. Equality needs `mu_j = n` for all j <= r, since `l_j < 0`; then X/n is a
//! projector of rank r with `<S, X/n>` the sum of the r least eigenvalues of S, and with
//! `l_r < l_{r+1}` only one projector has this. QED.
//!
//! Gap theorem. Let in addition `l_{r+1} < 0` and let `dy -> H_1' A*(dy) H_2` be injective, H_1 the first
//! r columns of H and H_2 the others. Then the relaxation's optimum is strictly lower. Proof. The
//! injectivity gives a Slater point near X* (shift X* inwards by a small multiple of H_2H_2' -
//! H_1H_1' and correct `A(X) = b` in the off-diagonal block), so if X* were optimal for the relaxation
//! there would be y~ for which X* minimises `<C - A*(y~), X>` over 0 <= X <= nI. Then C - A*(y~) maps
//! span H_1 to itself and is PSD on span H_2. With dy = y~ - y the first gives
//! `H_1' A*(dy) H_2 = 0`, so dy = 0; but S is negative at h_{r+1}. QED. Injectivity is proved by a
//! rank modulo the prime 2^61 - 1.

use serde::{Deserialize, Serialize};

use super::entries::{EntrySum, value_on_factor, whole};
use super::nondegeneracy::product;
use super::{
    CertificateError, IntegerFactor, Proof, RelaxationFact, Stop, Uniqueness, expect_size, settle,
};
use crate::problem::exact::{ResidueColumns, Whole, multiply, residue};
use crate::problem::{Coefficient, Factor, Functional, Problem};

/// A rank-r point that attains the Ky Fan bound over 0 <= X <= nI.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct RankBound {
    /// The rank r of the planted point.
    pub rank: usize,
    /// Columns h_1..h_n, each of length n.
    pub columns: Vec<Vec<i64>>,
    /// l_1..l_n in ascending order.
    pub spectrum: Vec<i64>,
    /// Multipliers y of the constraints on X alone.
    pub multipliers: Vec<i64>,
}

impl RankBound {
    /// Checks the certificate against `problem` exactly; see the module's theorems.
    ///
    /// # Errors
    /// The first identity or condition that fails.
    pub fn check(&self, problem: &Problem) -> Result<Proof, CertificateError> {
        let rank = self.rank;
        self.check_form(problem)?;
        self.check_spectrum()?;
        let optimum = settle(self.identities::<i128>(problem), || self.identities(problem))?;
        let next = self.spectrum.get(rank).copied();
        let uniqueness = match next {
            Some(next) if self.spectrum[rank - 1] == next => Uniqueness::NotProved,
            _ => Uniqueness::Proved,
        };
        let gap = next.is_some_and(|next| next < 0) && self.transversal(problem);
        let relaxation =
            if gap { RelaxationFact::StrictlyLower } else { RelaxationFact::NotProved };
        let tail = if gap { "; the relaxation's optimum is strictly lower" } else { "" };
        let statement = format!(
            "the problem with rank X <= {rank} has the optimum {optimum}, attained by the planted \
             point (Ky Fan bound){tail}"
        );
        let dual_uniqueness = Uniqueness::NotProved;
        Ok(Proof { optimum, uniqueness, dual_uniqueness, relaxation, statement })
    }

    /// Returns the planted factors of X* and Z*.
    pub(super) fn point(&self) -> Vec<Factor> {
        let rank = self.rank;
        let float = |columns: &[Vec<i64>]| {
            let columns: Vec<Vec<f64>> =
                columns.iter().map(|h| h.iter().map(|&v| v as f64).collect()).collect();
            Factor::from_columns(self.columns.len(), &columns)
        };
        vec![float(&self.columns[..rank]), float(&self.columns[rank..])]
    }

    fn check_form(&self, problem: &Problem) -> Result<(), CertificateError> {
        let form = |reason: String| Err(CertificateError::Form(reason));
        let [x, z] = problem.blocks() else {
            return form(format!("it must have two blocks, not {}", problem.blocks().len()));
        };
        if x.order != z.order || z.rank.is_some() || problem.orthant() != 0 {
            return form(
                "its blocks must have one order, the second a free rank, and no scalars".to_owned(),
            );
        }
        let n = x.order;
        if self.rank == 0 || self.rank >= n || x.rank != Some(self.rank) {
            return form(format!("the rank bound {:?} is not {} < {n}", x.rank, self.rank));
        }
        expect_size("the spectrum", n, self.spectrum.len())?;
        expect_size("the list of columns of H", n, self.columns.len())?;
        for (j, column) in self.columns.iter().enumerate() {
            expect_size(&format!("column {} of H", j + 1), n, column.len())?;
        }
        let couplings = self.multipliers.len();
        let expected = couplings + n * (n + 1) / 2;
        expect_size("the list of constraints", expected, problem.constraints().len())?;
        if problem.cost().part(1).is_some() {
            return form("the cost must act on the first block only".to_owned());
        }
        for (index, constraint) in problem.constraints()[..couplings].iter().enumerate() {
            if !matches!(constraint.parts.as_slice(), [(0, _)]) {
                return form(format!("constraint {} must act on the first block only", index + 1));
            }
        }
        let mut places = (0..n).flat_map(|j| (0..=j).map(move |i| (i, j)));
        for index in couplings..expected {
            let (i, j) = places.next().expect("n(n+1)/2 places");
            let rhs = if i == j { n as f64 } else { 0.0 };
            if !is_sum_entry(&problem.constraints()[index], i, j) || problem.rhs()[index] != rhs {
                return form(format!(
                    "constraint {} is not X_ij + Z_ij = {rhs} at ({}, {})",
                    index + 1,
                    i + 1,
                    j + 1
                ));
            }
        }
        Ok(())
    }

    fn check_spectrum(&self) -> Result<(), CertificateError> {
        let fail = |condition, j: usize| {
            let (place, value) = (format!("l_{}", j + 1), self.spectrum[j].to_string());
            Err(CertificateError::Condition { condition, place, value })
        };
        if let Some(j) = (1..self.spectrum.len()).find(|&j| self.spectrum[j] < self.spectrum[j - 1])
        {
            return fail("the spectrum must ascend", j);
        }
        if self.spectrum[self.rank - 1] >= 0 {
            return fail("l_1 .. l_r must be negative", self.rank - 1);
        }
        Ok(())
    }

    /// Checks H'H = nI, the cost and the right sides; returns the optimum.
    fn identities<W: Whole>(&self, problem: &Problem) -> Result<W, Stop> {
        let n = self.columns.len();
        let unequal = |identity, place: String, left: &W, right: &W| {
            let (left, right) = (left.to_string(), right.to_string());
            Stop::Fails(CertificateError::Identity { identity, place, left, right })
        };
        for (j, right) in self.columns.iter().enumerate() {
            for (i, left) in self.columns[..=j].iter().enumerate() {
                let mut dot = W::of(0);
                for (a, b) in left.iter().zip(right) {
                    dot.increase(&W::of(*a).times(&W::of(*b))?)?;
                }
                let expected = W::of(if i == j { n as i64 } else { 0 });
                if dot != expected {
                    let place = format!("entry ({}, {})", i + 1, j + 1);
                    return Err(unequal("H'H = nI", place, &dot, &expected));
                }
            }
        }
        let mut sum = EntrySum::<W>::new(n);
        if let Some(part) = problem.cost().part(0) {
            sum.add_coefficient(part, &W::of(-1), || "cost".to_owned())?;
        }
        for (column, &weight) in self.columns.iter().zip(&self.spectrum) {
            let vector: Vec<(usize, W)> =
                column.iter().enumerate().map(|(i, &value)| (i, W::of(value))).collect();
            sum.add_outer(&vector, &W::of(weight))?;
        }
        let point = self.leading_rows();
        let mut optimum = W::of(0);
        for (index, &y) in self.multipliers.iter().enumerate() {
            let place = || format!("constraint {}", index + 1);
            let part = &problem.constraints()[index].parts[0].1;
            sum.add_coefficient(part, &W::of(y), place)?;
            let value: W = value_on_factor(part, &point.rows, self.rank, place)?;
            let rhs: W = whole(problem.rhs()[index], || format!("right side {}", index + 1))?;
            if value != rhs {
                return Err(unequal("<A_i, X*> = b_i", place(), &value, &rhs));
            }
            optimum.increase(&rhs.times(&W::of(y))?)?;
        }
        if let Some((i, j, excess)) = sum.first_nonzero()? {
            let place = format!("entry ({}, {})", i + 1, j + 1);
            return Err(unequal("A*(y) + H L H' - C = 0", place, &excess, &W::of(0)));
        }
        let square = W::of(n as i64).times(&W::of(n as i64))?;
        for &eigenvalue in &self.spectrum[..self.rank] {
            optimum.increase(&square.times(&W::of(eigenvalue))?)?;
        }
        Ok(optimum)
    }

    /// Returns H_1 by rows.
    fn leading_rows(&self) -> IntegerFactor {
        let order = self.columns.len();
        let rows = (0..order).flat_map(|i| self.columns[..self.rank].iter().map(move |h| h[i]));
        IntegerFactor { order, width: self.rank, rows: rows.collect() }
    }

    /// Tests whether `dy -> H_1' A*(dy) H_2` is injective.
    fn transversal(&self, problem: &Problem) -> bool {
        let others = self.columns.len() - self.rank;
        let count = self.multipliers.len();
        if count > self.rank * others {
            return false;
        }
        let point = self.leading_rows();
        let mut images = ResidueColumns::new(self.rank * others);
        for constraint in &problem.constraints()[..count] {
            let mut entries = Vec::new();
            product(&constraint.parts[0].1, &point, &mut |i, p, value| {
                for (q, column) in self.columns[self.rank..].iter().enumerate() {
                    entries.push((p * others + q, multiply(value, residue(column[i]))));
                }
            });
            images.push(entries);
        }
        images.rank_up_to(count) == count
    }
}

/// Returns whether the functional is X_ij + Z_ij, or twice that off the diagonal, where the stored
/// entry 1 stands for both triangles; the right side is zero there, so the factor does not matter.
fn is_sum_entry(functional: &Functional, i: usize, j: usize) -> bool {
    let [(0, first), (1, second)] = functional.parts.as_slice() else {
        return false;
    };
    let single = |part: &Coefficient| {
        let matrix = part.to_sparse();
        let mut entries = matrix.iter();
        entries.next() == Some((i, j, 1.0)) && entries.next().is_none()
    };
    functional.orthant.is_empty() && single(first) && single(second)
}
