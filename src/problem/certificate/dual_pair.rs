//! Dual pairs: a point X* = V V', multipliers y and a slack S* = W D W' in whole numbers.
//!
//! Theorem (weak duality). Let `A(X*) = b`, `C = A*(y) + S*` on every block and `c = A_l'y + z` on
//! the nonnegative part, with D > 0 diagonal, `V'W = 0`, `x, z >= 0` and `x_i z_i = 0`. For every
//! feasible (X, x~): `<C, X> + c'x~ = b'y + <S*, X> + z'x~ >= b'y`, with equality at the planted
//! point. So `b'y` is the optimum of the relaxation; if each V has at most r_k columns, the planted
//! point obeys the rank bounds and `b'y` is the optimum of the rank-constrained problem too.
//!
//! Uniqueness (see `nondegeneracy`) is proved by ranks modulo a prime.

use serde::{Deserialize, Serialize};

use super::entries::{EntrySum, value_on_factor, value_on_orthant, whole};
use super::{
    CertificateError, Proof, RelaxationFact, Stop, Uniqueness, exact_float, expect_size, settle,
};
use crate::problem::exact::Whole;
use crate::problem::{Factor, Problem};

/// A factor of whole numbers, by rows.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct IntegerFactor {
    /// Number of rows n.
    pub order: usize,
    /// Number of columns r.
    pub width: usize,
    /// Rows one after another, `order * width` numbers.
    pub rows: Vec<i64>,
}

impl IntegerFactor {
    /// Returns row i.
    pub fn row(&self, i: usize) -> &[i64] {
        &self.rows[i * self.width..(i + 1) * self.width]
    }
}

/// A sparse column of whole numbers.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct IntegerColumn {
    /// Strictly ascending indices, from 0.
    pub indices: Vec<u32>,
    /// Values, as many as indices.
    pub values: Vec<i64>,
}

impl IntegerColumn {
    /// Iterates over (index, value).
    pub fn iter(&self) -> impl Iterator<Item = (usize, i64)> {
        self.indices.iter().zip(&self.values).map(|(&i, &value)| (i as usize, value))
    }
}

/// The dual pair on one PSD block: X* = V V', S* = W D W'.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct BlockPair {
    /// V, n x r.
    pub factor: IntegerFactor,
    /// Columns of W.
    pub slack: Vec<IntegerColumn>,
    /// Diagonal of D, one positive number a column of W.
    pub weights: Vec<i64>,
}

/// A primal point, multipliers and a slack that prove each other optimal.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct DualPair {
    /// One pair a block.
    pub blocks: Vec<BlockPair>,
    /// Multipliers y, one a constraint.
    pub multipliers: Vec<i64>,
    /// Nonnegative part x of the point.
    pub orthant: Vec<i64>,
    /// Nonnegative part z of the slack.
    pub orthant_slack: Vec<i64>,
}

impl DualPair {
    /// Makes a pair that states no slack on its blocks, for the checks that need none.
    pub(super) fn without_slack(
        factors: &[IntegerFactor],
        multipliers: &[i64],
        orthant: &[i64],
        orthant_slack: &[i64],
    ) -> Self {
        let bare = |factor: &IntegerFactor| BlockPair {
            factor: factor.clone(),
            slack: Vec::new(),
            weights: Vec::new(),
        };
        DualPair {
            blocks: factors.iter().map(bare).collect(),
            multipliers: multipliers.to_vec(),
            orthant: orthant.to_vec(),
            orthant_slack: orthant_slack.to_vec(),
        }
    }

    /// Checks the pair against `problem` exactly; see the module's theorem.
    ///
    /// # Errors
    /// The first identity or condition that fails.
    pub fn check(&self, problem: &Problem) -> Result<Proof, CertificateError> {
        self.check_shapes(problem)?;
        self.check_signs()?;
        let optimum = settle(self.identities::<i128>(problem), || self.identities(problem))?;
        let uniqueness = self.primal_uniqueness(problem);
        let dual_uniqueness = self.dual_uniqueness(problem);
        let ranks: Vec<String> =
            self.blocks.iter().map(|block| block.factor.width.to_string()).collect();
        let only = match uniqueness {
            Uniqueness::Proved => ", attained by the planted point only",
            Uniqueness::NotProved => ", attained by the planted point",
        };
        let statement = format!(
            "the relaxation and the rank-constrained problem have the optimum {optimum}{only} \
             (rank {}; dual pair)",
            ranks.join(", ")
        );
        let relaxation = RelaxationFact::SameOptimum;
        Ok(Proof { optimum, uniqueness, dual_uniqueness, relaxation, statement })
    }

    /// Returns the planted factors as floats.
    pub(super) fn point(&self) -> Result<Vec<Factor>, CertificateError> {
        let convert = |(k, block): (usize, &BlockPair)| {
            let mut factor = Factor::zeros(block.factor.order, block.factor.width);
            for (target, value) in factor.data.iter_mut().zip(&block.factor.rows) {
                *target = exact_float(i128::from(*value), || format!("V of block {}", k + 1))?;
            }
            Ok(factor)
        };
        self.blocks.iter().enumerate().map(convert).collect()
    }

    pub(super) fn check_shapes(&self, problem: &Problem) -> Result<(), CertificateError> {
        expect_size("the list of blocks", problem.blocks().len(), self.blocks.len())?;
        expect_size("y", problem.constraints().len(), self.multipliers.len())?;
        expect_size("x", problem.orthant(), self.orthant.len())?;
        expect_size("z", problem.orthant(), self.orthant_slack.len())?;
        for (k, (pair, block)) in self.blocks.iter().zip(problem.blocks()).enumerate() {
            let named = |what: &str| format!("{what} of block {}", k + 1);
            expect_size(&named("V"), block.order, pair.factor.order)?;
            let entries = pair.factor.order.saturating_mul(pair.factor.width);
            expect_size(&named("the entry list of V"), entries, pair.factor.rows.len())?;
            expect_size(&named("D"), pair.slack.len(), pair.weights.len())?;
            if block.rank.is_some_and(|rank| pair.factor.width > rank) {
                return Err(CertificateError::Condition {
                    condition: "the rank bound of the block is smaller",
                    place: named("the width of V"),
                    value: pair.factor.width.to_string(),
                });
            }
            for (j, column) in pair.slack.iter().enumerate() {
                let named = format!("column {} of W of block {}", j + 1, k + 1);
                expect_size(&named, column.indices.len(), column.values.len())?;
                let ascends = column.indices.windows(2).all(|pair| pair[0] < pair[1]);
                let last = column.indices.last().map_or(0, |&i| i as usize);
                if !ascends || last >= block.order {
                    return Err(CertificateError::Condition {
                        condition: "indices must ascend strictly and lie within the block",
                        place: named,
                        value: last.to_string(),
                    });
                }
            }
        }
        Ok(())
    }

    pub(super) fn check_signs(&self) -> Result<(), CertificateError> {
        let fail = |condition, place: String, value: i64| {
            Err(CertificateError::Condition { condition, place, value: value.to_string() })
        };
        for (k, pair) in self.blocks.iter().enumerate() {
            if let Some(j) = pair.weights.iter().position(|&weight| weight <= 0) {
                let place = format!("weight {} of D of block {}", j + 1, k + 1);
                return fail("a weight must be positive", place, pair.weights[j]);
            }
        }
        for (i, (&x, &z)) in self.orthant.iter().zip(&self.orthant_slack).enumerate() {
            if x < 0 {
                return fail("x must not be negative", format!("x_{}", i + 1), x);
            }
            if z < 0 {
                return fail("z must not be negative", format!("z_{}", i + 1), z);
            }
            if x != 0 && z != 0 {
                return fail("x_i z_i must be zero", format!("z_{}", i + 1), z);
            }
        }
        Ok(())
    }

    /// Checks every equation and returns b'y.
    fn identities<W: Whole>(&self, problem: &Problem) -> Result<W, Stop> {
        for (k, pair) in self.blocks.iter().enumerate() {
            check_orthogonality::<W>(k, pair)?;
            self.check_cost_block::<W>(k, problem)?;
        }
        self.check_cost_orthant::<W>(problem)?;
        self.value_at_point(problem)
    }

    /// Checks that the point satisfies every constraint and returns b'y.
    pub(super) fn value_at_point<W: Whole>(&self, problem: &Problem) -> Result<W, Stop> {
        let mut optimum = W::of(0);
        for (i, constraint) in problem.constraints().iter().enumerate() {
            let place = || format!("constraint {}", i + 1);
            let mut value = value_on_orthant::<W>(constraint, &self.orthant, place)?;
            for (k, part) in &constraint.parts {
                let factor = &self.blocks[*k].factor;
                value.increase(&value_on_factor(part, &factor.rows, factor.width, place)?)?;
            }
            let rhs: W = whole(problem.rhs()[i], || format!("right side {}", i + 1))?;
            if value != rhs {
                return Err(unequal("<A_i, X*> = b_i", place(), &value, &rhs));
            }
            optimum.increase(&rhs.times(&W::of(self.multipliers[i]))?)?;
        }
        Ok(optimum)
    }

    /// Checks `C_k = sum_i y_i A_ik + W D W'`.
    fn check_cost_block<W: Whole>(&self, k: usize, problem: &Problem) -> Result<(), Stop> {
        let pair = &self.blocks[k];
        let mut sum = EntrySum::<W>::new(pair.factor.order);
        if let Some(part) = problem.cost().part(k) {
            sum.add_coefficient(part, &W::of(-1), || "cost".to_owned())?;
        }
        for (i, constraint) in problem.constraints().iter().enumerate() {
            if let Some(part) = constraint.part(k) {
                let factor = W::of(self.multipliers[i]);
                sum.add_coefficient(part, &factor, || format!("constraint {}", i + 1))?;
            }
        }
        for (column, &weight) in pair.slack.iter().zip(&pair.weights) {
            let vector: Vec<(usize, W)> =
                column.iter().map(|(i, value)| (i, W::of(value))).collect();
            sum.add_outer(&vector, &W::of(weight))?;
        }
        if let Some((i, j, excess)) = sum.first_nonzero()? {
            let place = format!("block {}, entry ({}, {})", k + 1, i + 1, j + 1);
            return Err(unequal("A*(y) + W D W' - C = 0", place, &excess, &W::of(0)));
        }
        Ok(())
    }

    /// Checks `c = A_l'y + z`.
    pub(super) fn check_cost_orthant<W: Whole>(&self, problem: &Problem) -> Result<(), Stop> {
        let mut sum = vec![W::of(0); problem.orthant()];
        for (i, &z) in self.orthant_slack.iter().enumerate() {
            sum[i].increase(&W::of(z))?;
        }
        for (i, value) in problem.cost().orthant.iter() {
            let value: W = whole(value, || "cost".to_owned())?;
            sum[i].increase(&value.times(&W::of(-1))?)?;
        }
        for (index, constraint) in problem.constraints().iter().enumerate() {
            let factor = W::of(self.multipliers[index]);
            for (i, value) in constraint.orthant.iter() {
                let value: W = whole(value, || format!("constraint {}", index + 1))?;
                sum[i].increase(&value.times(&factor)?)?;
            }
        }
        match sum.iter().position(|value| !value.is_nought()) {
            None => Ok(()),
            Some(i) => {
                let place = format!("nonnegative scalar {}", i + 1);
                Err(unequal("A_l'y + z - c = 0", place, &sum[i], &W::of(0)))
            }
        }
    }
}

/// Checks `V'W = 0`.
fn check_orthogonality<W: Whole>(k: usize, pair: &BlockPair) -> Result<(), Stop> {
    let width = pair.factor.width;
    for (j, column) in pair.slack.iter().enumerate() {
        let mut products = vec![W::of(0); width];
        for (i, value) in column.iter() {
            let value = W::of(value);
            for (product, &v) in products.iter_mut().zip(pair.factor.row(i)) {
                product.increase(&value.times(&W::of(v))?)?;
            }
        }
        if let Some(p) = products.iter().position(|product| !product.is_nought()) {
            let place = format!("block {}, columns {} of V and {} of W", k + 1, p + 1, j + 1);
            return Err(unequal("V'W = 0", place, &products[p], &W::of(0)));
        }
    }
    Ok(())
}

pub(super) fn unequal<W: Whole>(
    identity: &'static str,
    place: String,
    left: &W,
    right: &W,
) -> Stop {
    let (left, right) = (left.to_string(), right.to_string());
    Stop::Fails(CertificateError::Identity { identity, place, left, right })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::{
        Block, Coefficient, Functional, OuterSum, OuterTerm, SparseSymmetric, SparseVector,
    };

    fn sparse(entries: &[(usize, usize, f64)]) -> Coefficient {
        Coefficient::Sparse(SparseSymmetric::gather(2, entries.to_vec()))
    }

    fn with_orthant(part: Coefficient, orthant: &[(u32, f64)]) -> Functional {
        let mut functional = Functional::on_block(0, part);
        functional.orthant = SparseVector::gather(orthant.to_vec());
        functional
    }

    fn pair(v: i64, multipliers: Vec<i64>, orthant: Vec<i64>, orthant_slack: Vec<i64>) -> DualPair {
        let slack = vec![IntegerColumn { indices: vec![0, 1], values: vec![1, -1] }];
        let factor = IntegerFactor { order: 2, width: 1, rows: vec![v, v] };
        let blocks = vec![BlockPair { factor, slack, weights: vec![4] }];
        DualPair { blocks, multipliers, orthant, orthant_slack }
    }

    fn blocks() -> Vec<Block> {
        vec![Block { order: 2, rank: Some(1) }]
    }

    /// X* = 11', x* = (2, 0, 0), y = (1, -2), S* = 4 (1,-1)'(1,-1), z = (0, 3, 1), worked by hand.
    fn mixed() -> (Problem, DualPair) {
        let outer = Coefficient::Outer(OuterSum {
            order: 2,
            terms: vec![OuterTerm { weight: 1.0, vector: SparseVector::gather(vec![(1, 1.0)]) }],
        });
        let constraints = vec![
            with_orthant(sparse(&[(0, 0, 1.0)]), &[(0, 1.0)]),
            with_orthant(outer, &[(0, 2.0), (1, -1.0)]),
        ];
        let cost = with_orthant(
            sparse(&[(0, 0, 5.0), (0, 1, -4.0), (1, 1, 2.0)]),
            &[(0, -3.0), (1, 5.0), (2, 1.0)],
        );
        let problem = Problem::new(blocks(), 3, cost, constraints, vec![3.0, 5.0]).unwrap();
        (problem, pair(1, vec![1, -2], vec![2, 0, 0], vec![0, 3, 1]))
    }

    #[test]
    fn a_pair_with_a_nonnegative_part_is_proved() {
        let (problem, pair) = mixed();
        let proof = pair.check(&problem).unwrap();
        assert_eq!(proof.optimum, -7);
        assert_eq!(proof.uniqueness, Uniqueness::Proved);
        assert_eq!(proof.dual_uniqueness, Uniqueness::Proved);
    }

    #[test]
    fn a_unit_in_the_nonnegative_part_is_rejected() {
        let (problem, pair) = mixed();
        for i in 0..3 {
            for step in [-1, 1] {
                let mut other = pair.clone();
                other.orthant[i] += step;
                // x_3 meets no constraint, so only z_3 > 0 keeps it at zero.
                assert!(other.check(&problem).is_err(), "x_{} {step:+}", i + 1);
                let mut other = pair.clone();
                other.orthant_slack[i] += step;
                assert!(other.check(&problem).is_err(), "z_{} {step:+}", i + 1);
            }
        }
    }

    #[test]
    fn a_scalar_that_may_move_takes_uniqueness_away() {
        let (problem, mut pair) = mixed();
        // Without its slack the third scalar may grow at no cost.
        let mut cost = problem.cost().clone();
        cost.orthant = SparseVector::gather(vec![(0, -3.0), (1, 5.0)]);
        pair.orthant_slack[2] = 0;
        let constraints = problem.constraints().to_vec();
        let problem = Problem::new(blocks(), 3, cost, constraints, vec![3.0, 5.0]).unwrap();
        assert_eq!(pair.check(&problem).unwrap().uniqueness, Uniqueness::NotProved);
    }

    #[test]
    fn failures_name_the_identity_and_the_place() {
        let (problem, pair) = mixed();
        let mut other = pair.clone();
        other.blocks[0].weights[0] = 5;
        let message = other.check(&problem).unwrap_err().to_string();
        assert_eq!(message, "A*(y) + W D W' - C = 0 fails at block 1, entry (1, 1): 1 against 0");
        let mut other = pair.clone();
        other.blocks[0].slack[0].values[1] = 1;
        let message = other.check(&problem).unwrap_err().to_string();
        assert_eq!(message, "V'W = 0 fails at block 1, columns 1 of V and 1 of W: 2 against 0");
        let rhs = vec![3.0, 5.5];
        let constraints = problem.constraints().to_vec();
        let half = Problem::new(blocks(), 3, problem.cost().clone(), constraints, rhs).unwrap();
        let message = pair.check(&half).unwrap_err().to_string();
        assert_eq!(message, "right side 2 holds 5.5, which is no whole number");
    }

    #[test]
    fn big_integers_take_over_after_an_overflow() {
        let big = (1u64 << 50) as f64;
        let problem = |last: f64| {
            let constraint = Functional::on_block(0, sparse(&[(0, 0, big), (1, 1, last)]));
            let cost = sparse(&[(0, 0, big + 4.0), (0, 1, -4.0), (1, 1, last + 4.0)]);
            let cost = Functional::on_block(0, cost);
            Problem::new(blocks(), 0, cost, vec![constraint], vec![0.0]).unwrap()
        };
        let pair = pair(1 << 50, vec![1], Vec::new(), Vec::new());
        assert!(matches!(pair.identities::<i128>(&problem(-big)), Err(Stop::Overflow)));
        assert_eq!(pair.check(&problem(-big)).unwrap().optimum, 0);
        let error = pair.check(&problem(1.0 - big)).unwrap_err();
        assert!(matches!(error, CertificateError::Identity { .. }), "{error}");
    }
}
