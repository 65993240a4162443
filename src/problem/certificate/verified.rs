//! Verified pairs: a dual pair whose slack has no whole-number factor, proved PSD by a Cholesky factorisation with a
//! bound of its error.
//!
//! The pair states V, y and the nonnegative parts x, z. The slack is what they leave, `S*_k = C_k - A*(y)_k`, formed in
//! whole numbers like everything else here.
//!
//! Theorem. Let `A(X*) = b` with X* = V V', `c = A_l'y + z`, `x, z >= 0`, `x_i z_i = 0`, and on every block
//! `S*_k V_k = 0` and M_k = S*_k + V_k G_k V_k' positive definite for some diagonal G_k. Then S*_k is PSD with the null
//! space range(V_k), and b'y is the optimum of the relaxation and, V_k having at most r_k columns, of the
//! rank-constrained problem.
//!
//! Proof. S*_k maps range(V_k) to zero, hence also the complement to itself. A w != 0 in the complement has
//! `w'S*_k w = w'M_k w > 0`. So S*_k is PSD and vanishes on range(V_k) only; the rest is weak duality as for dual pairs
//! (see `dual_pair`). QED.
//!
//! G_k is the checker's choice: whole numbers that bring V G V' to the size of the mean eigenvalue of S*_k. The
//! identities are exact; that M_k, a matrix of whole numbers below 2^53, is positive definite is proved in floating
//! point by the theorem of `cholesky`. Because the null space of S*_k is known, strict complementarity holds and
//! uniqueness is proved exactly as in `nondegeneracy`.

use serde::{Deserialize, Serialize};

use super::cholesky::{MOST_ORDER, Stopped, prove_positive_definite};
use super::dual_pair::{DualPair, unequal};
use super::entries::EntrySum;
use super::{
    CertificateError, IntegerFactor, Proof, RelaxationFact, Stop, Uniqueness, exact_float, settle,
};
use crate::problem::exact::Whole;
use crate::problem::{Factor, Problem};

/// A point and multipliers that prove each other optimal as soon as the slack they leave is PSD.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct VerifiedPair {
    /// V of each block, n_k x r_k.
    pub factors: Vec<IntegerFactor>,
    /// Multipliers y, one a constraint.
    pub multipliers: Vec<i64>,
    /// Nonnegative part x of the point.
    pub orthant: Vec<i64>,
    /// Nonnegative part z of the slack.
    pub orthant_slack: Vec<i64>,
}

impl VerifiedPair {
    /// Checks the pair against `problem`; see the module's theorem.
    ///
    /// # Errors
    /// The first identity or condition that fails; [`CertificateError::Definiteness`] when everything else holds and
    /// only the factorisation stopped.
    pub fn check(&self, problem: &Problem) -> Result<Proof, CertificateError> {
        let pair = self.pair();
        pair.check_shapes(problem)?;
        pair.check_signs()?;
        let optimum = settle(self.identities::<i128>(problem), || self.identities(problem))?;
        let uniqueness = pair.face_is_a_point(problem);
        let dual_uniqueness = pair.dual_uniqueness(problem);
        let ranks: Vec<String> = self.factors.iter().map(|v| v.width.to_string()).collect();
        let only = match uniqueness {
            Uniqueness::Proved => ", attained by the planted point only",
            Uniqueness::NotProved => ", attained by the planted point",
        };
        let statement = format!(
            "the relaxation and the rank-constrained problem have the optimum {optimum}{only} (rank {}; \
             verified pair: the slack is proved PSD in floating point with a bound of the error)",
            ranks.join(", ")
        );
        let relaxation = RelaxationFact::SameOptimum;
        Ok(Proof { optimum, uniqueness, dual_uniqueness, relaxation, statement })
    }

    /// Returns the planted factors as floats.
    pub(super) fn point(&self) -> Result<Vec<Factor>, CertificateError> {
        self.pair().point()
    }

    fn pair(&self) -> DualPair {
        let VerifiedPair { factors, multipliers, orthant, orthant_slack } = self;
        DualPair::without_slack(factors, multipliers, orthant, orthant_slack)
    }

    /// Checks every equation, then the definiteness; returns b'y.
    fn identities<W: Whole>(&self, problem: &Problem) -> Result<W, Stop> {
        let pair = self.pair();
        pair.check_cost_orthant::<W>(problem)?;
        let optimum = pair.value_at_point(problem)?;
        let mut slacks = Vec::with_capacity(self.factors.len());
        for (k, factor) in self.factors.iter().enumerate() {
            let slack = self.slack::<W>(k, problem)?;
            check_null_space(k, &slack, factor)?;
            slacks.push(slack);
        }
        // Only now: whoever gets `Definiteness` may rely on every equation.
        for (k, (slack, factor)) in slacks.into_iter().zip(&self.factors).enumerate() {
            prove_complement(k, slack, factor)?;
        }
        Ok(optimum)
    }

    /// Returns the upper triangle of `C_k - sum_i y_i A_ik`, packed by columns.
    fn slack<W: Whole>(&self, k: usize, problem: &Problem) -> Result<Vec<W>, Stop> {
        let order = problem.blocks()[k].order;
        if order > MOST_ORDER {
            let reason = format!("block {} has order {order}, above {MOST_ORDER}", k + 1);
            return Err(CertificateError::Form(reason).into());
        }
        let mut sum = EntrySum::<W>::new(order);
        if let Some(part) = problem.cost().part(k) {
            sum.add_coefficient(part, &W::of(1), || "cost".to_owned())?;
        }
        for (i, constraint) in problem.constraints().iter().enumerate() {
            if let Some(part) = constraint.part(k) {
                let factor = W::of(self.multipliers[i]).times(&W::of(-1))?;
                sum.add_coefficient(part, &factor, || format!("constraint {}", i + 1))?;
            }
        }
        sum.packed()
    }
}

/// Checks `S V = 0` for a packed upper triangle.
fn check_null_space<W: Whole>(k: usize, slack: &[W], factor: &IntegerFactor) -> Result<(), Stop> {
    let width = factor.width;
    let mut image = vec![W::of(0); factor.order * width];
    let mut entries = slack.iter();
    for j in 0..factor.order {
        for i in 0..=j {
            let entry = entries.next().expect("n(n+1)/2 entries");
            if entry.is_nought() {
                continue;
            }
            for p in 0..width {
                image[i * width + p].increase(&entry.times(&W::of(factor.row(j)[p]))?)?;
                if i != j {
                    image[j * width + p].increase(&entry.times(&W::of(factor.row(i)[p]))?)?;
                }
            }
        }
    }
    match image.iter().position(|value| !value.is_nought()) {
        None => Ok(()),
        Some(place) => {
            let (row, column) = (place / width + 1, place % width + 1);
            let at = format!("block {}, row {row} of S and column {column} of V", k + 1);
            Err(unequal("S V = 0 with S = C - A*(y)", at, &image[place], &W::of(0)))
        }
    }
}

/// Proves that S + V G V' is positive definite.
fn prove_complement<W: Whole>(
    k: usize,
    mut slack: Vec<W>,
    factor: &IntegerFactor,
) -> Result<(), Stop> {
    let order = factor.order;
    let weights = weights(k, &slack, factor)?;
    let mut entries = slack.iter_mut();
    for j in 0..order {
        for i in 0..=j {
            let entry = entries.next().expect("n(n+1)/2 entries");
            for (p, weight) in weights.iter().enumerate() {
                let (left, right) = (W::of(factor.row(i)[p]), W::of(factor.row(j)[p]));
                entry.increase(&left.times(&right)?.times(&W::of(*weight))?)?;
            }
        }
    }
    // Column j of the lower triangle is row j of the upper one.
    let mut columns = Vec::with_capacity(slack.len());
    for j in 0..order {
        for i in j..order {
            let what = || format!("entry ({}, {}) of S + V G V' of block {}", j + 1, i + 1, k + 1);
            let entry = slack[i * (i + 1) / 2 + j].narrow();
            let entry = entry.ok_or_else(|| CertificateError::Range { what: what() })?;
            let float = exact_float(entry, what)?;
            if float.abs() > 9_007_199_254_740_992.0 {
                return Err(CertificateError::Range { what: what() }.into());
            }
            columns.push(float);
        }
    }
    prove_positive_definite(order, &mut columns).map_err(|Stopped(column)| {
        CertificateError::Definiteness { block: k + 1, column: column + 1 }.into()
    })
}

/// Returns the diagonal of G: for column v of V the least whole number g >= 1 with g |v|^2 >= tr S / n.
fn weights<W: Whole>(k: usize, slack: &[W], factor: &IntegerFactor) -> Result<Vec<i64>, Stop> {
    let range = || CertificateError::Range { what: format!("the trace of S of block {}", k + 1) };
    let mut trace = W::of(0);
    for j in 0..factor.order {
        trace.increase(&slack[j * (j + 3) / 2])?;
    }
    let trace = trace.narrow().ok_or_else(range)?;
    let mut weights = Vec::with_capacity(factor.width);
    for p in 0..factor.width {
        let square = |i: usize| i128::from(factor.row(i)[p]).pow(2);
        let square: i128 = (0..factor.order).map(square).sum();
        let unit = square.max(1).saturating_mul(factor.order as i128);
        let weight = trace.max(1).saturating_add(unit - 1) / unit;
        weights.push(i64::try_from(weight).map_err(|_| range())?);
    }
    Ok(weights)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::{Block, Coefficient, Functional, SparseSymmetric};

    /// Signs (1, -1, 1) on a triangle with weights w12, w13, w23: S is the signed Laplacian.
    fn triangle(weights: [i64; 3]) -> (Problem, VerifiedPair) {
        let x = [1i64, -1, 1];
        let pairs = [(0usize, 1usize), (0, 2), (1, 2)];
        let mut degree = [0i64; 3];
        let mut entries = Vec::new();
        for (&(i, j), w) in pairs.iter().zip(weights) {
            degree[i] += w;
            degree[j] += w;
            entries.push((i, j, (-w * x[i] * x[j]) as f64));
        }
        let cost = Coefficient::Sparse(SparseSymmetric::gather(3, entries));
        let unit = |i: usize| {
            let entry = SparseSymmetric::gather(3, vec![(i, i, 1.0)]);
            Functional::on_block(0, Coefficient::Sparse(entry))
        };
        let problem = Problem::new(
            vec![Block { order: 3, rank: Some(1) }],
            0,
            Functional::on_block(0, cost),
            (0..3).map(unit).collect(),
            vec![1.0; 3],
        );
        let pair = VerifiedPair {
            factors: vec![IntegerFactor { order: 3, width: 1, rows: x.to_vec() }],
            multipliers: degree.iter().map(|d| -d).collect(),
            orthant: Vec::new(),
            orthant_slack: Vec::new(),
        };
        (problem.unwrap(), pair)
    }

    /// The Laplacian with weights a, b, c is PSD of rank 2 exactly when ab + bc + ca > 0 and a + b + c > 0
    /// (its principal minors; the matrix-tree theorem).
    #[test]
    fn a_triangle_is_proved_exactly_when_its_laplacian_is_semidefinite() {
        for a in -3..=3i64 {
            for b in -3..=3 {
                for c in -3..=3 {
                    let (problem, pair) = triangle([a, b, c]);
                    let expected = a * b + b * c + c * a > 0 && a + b + c > 0;
                    match pair.check(&problem) {
                        Ok(proof) => {
                            assert!(expected, "{a} {b} {c}");
                            assert_eq!(proof.optimum, i128::from(-2 * (a + b + c)));
                            assert_eq!(proof.uniqueness, Uniqueness::Proved);
                            assert_eq!(proof.dual_uniqueness, Uniqueness::Proved);
                        }
                        Err(CertificateError::Definiteness { block: 1, .. }) => {
                            assert!(!expected, "{a} {b} {c}");
                        }
                        Err(other) => panic!("{other}"),
                    }
                }
            }
        }
    }

    #[test]
    fn a_unit_in_any_field_is_rejected_by_an_equation() {
        let (problem, pair) = triangle([3, 1, 2]);
        assert!(pair.check(&problem).is_ok());
        for i in 0..3 {
            for step in [-1, 1] {
                let mut other = pair.clone();
                other.multipliers[i] += step;
                let error = other.check(&problem).unwrap_err();
                assert!(matches!(error, CertificateError::Identity { .. }), "{error}");
                let mut other = pair.clone();
                other.factors[0].rows[i] += step;
                let error = other.check(&problem).unwrap_err();
                assert!(matches!(error, CertificateError::Identity { .. }), "{error}");
            }
        }
    }

    #[test]
    fn numbers_beyond_two_to_the_53_are_refused() {
        let (problem, pair) = triangle([1 << 52, 1 << 52, 1 << 52]);
        let error = pair.check(&problem).unwrap_err();
        assert!(matches!(error, CertificateError::Range { .. }), "{error}");
    }
}
