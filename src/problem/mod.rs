//! The problem model: blocks, symmetric coefficients, the constraint operator, points and exact
//! certificates. Nothing here solves or judges.

pub mod canonical;
pub mod certificate;
pub mod exact;
pub mod line;
pub mod network;
pub mod operator;
pub mod pattern;
pub mod point;
mod rows;
pub mod symmetric;

pub use certificate::{Certificate, CertificateError, Planted, Proof, Uniqueness};
pub use line::LineScratch;
pub use operator::{BlockOperator, Operator, Slack, SlackStore};
pub use pattern::Pattern;
pub use point::{Answer, BlockPoint, Factor, Point, StopReason};
pub use symmetric::{Coefficient, OuterSum, OuterTerm, SparseSymmetric, SparseVector};

/// One PSD block of the variable.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Block {
    /// Order n_k of the block.
    pub order: usize,
    /// Rank bound r_k, or none when the block's rank is free.
    pub rank: Option<usize>,
}

/// A linear functional on all blocks and the nonnegative part: `sum_k <F_k, X_k> + f'x`.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Functional {
    /// Coefficients by block, in ascending block order, each block at most once.
    pub parts: Vec<(usize, Coefficient)>,
    /// Coefficients of the nonnegative part.
    pub orthant: SparseVector,
}

impl Functional {
    /// Makes a functional that acts on one block only.
    pub fn on_block(block: usize, coefficient: Coefficient) -> Self {
        Functional { parts: vec![(block, coefficient)], orthant: SparseVector::default() }
    }

    /// Returns the coefficient of `block`, if the functional acts on it.
    pub fn part(&self, block: usize) -> Option<&Coefficient> {
        self.parts.iter().find(|(index, _)| *index == block).map(|(_, part)| part)
    }

    /// Returns the Frobenius norm over all blocks and the nonnegative part.
    pub fn norm(&self) -> f64 {
        let blocks: f64 = self.parts.iter().map(|(_, part)| part.norm().powi(2)).sum();
        let orthant: f64 = self.orthant.values.iter().map(|v| v * v).sum();
        (blocks + orthant).sqrt()
    }

    /// Returns the largest absolute entry over all blocks and the nonnegative part.
    pub fn max_abs(&self) -> f64 {
        let blocks = self.parts.iter().map(|(_, part)| part.max_abs());
        let orthant = self.orthant.values.iter().map(|v| v.abs());
        blocks.chain(orthant).fold(0.0, f64::max)
    }
}

/// A semidefinite program with rank bounds: minimise `cost` subject to `constraints[i] = rhs[i]`.
#[derive(Clone, Debug, PartialEq)]
pub struct Problem {
    blocks: Vec<Block>,
    orthant: usize,
    cost: Functional,
    constraints: Vec<Functional>,
    rhs: Vec<f64>,
}

/// Says why data do not form a problem.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ProblemError {
    /// There is neither a block nor a nonnegative part.
    #[error("the problem has no variable")]
    Empty,
    /// A block has order zero or a rank bound outside `1..=order`.
    #[error("block {block} has order {order} and rank bound {rank:?}; expected 1 <= rank <= order")]
    Block {
        /// Position of the block, from 0.
        block: usize,
        /// Its order.
        order: usize,
        /// Its rank bound.
        rank: Option<usize>,
    },
    /// The numbers of constraints and right sides differ.
    #[error("{constraints} constraints but {rhs} right sides")]
    Count {
        /// Number of constraints.
        constraints: usize,
        /// Number of right sides.
        rhs: usize,
    },
    /// A functional names a block or an entry that does not exist, or blocks out of order.
    #[error("{place} does not fit the variable: {reason}")]
    Shape {
        /// `cost` or `constraint i` (from 1).
        place: String,
        /// What does not fit.
        reason: String,
    },
    /// A number is not finite.
    #[error("{place} holds a number that is not finite")]
    NotFinite {
        /// `cost`, `constraint i` or `right side i` (from 1).
        place: String,
    },
}

impl Problem {
    /// Checks shapes and finiteness and makes a problem.
    ///
    /// # Errors
    /// See [`ProblemError`].
    pub fn new(
        blocks: Vec<Block>,
        orthant: usize,
        cost: Functional,
        constraints: Vec<Functional>,
        rhs: Vec<f64>,
    ) -> Result<Self, ProblemError> {
        if blocks.is_empty() && orthant == 0 {
            return Err(ProblemError::Empty);
        }
        for (index, block) in blocks.iter().enumerate() {
            let rank_fits = block.rank.is_none_or(|rank| (1..=block.order).contains(&rank));
            if block.order == 0 || !rank_fits {
                return Err(ProblemError::Block {
                    block: index,
                    order: block.order,
                    rank: block.rank,
                });
            }
        }
        if constraints.len() != rhs.len() {
            return Err(ProblemError::Count { constraints: constraints.len(), rhs: rhs.len() });
        }
        check_functional(&cost, &blocks, orthant, || "cost".to_owned())?;
        for (index, constraint) in constraints.iter().enumerate() {
            check_functional(constraint, &blocks, orthant, || format!("constraint {}", index + 1))?;
        }
        if let Some(index) = rhs.iter().position(|value| !value.is_finite()) {
            return Err(ProblemError::NotFinite { place: format!("right side {}", index + 1) });
        }
        Ok(Problem { blocks, orthant, cost, constraints, rhs })
    }

    /// Returns the PSD blocks.
    pub fn blocks(&self) -> &[Block] {
        &self.blocks
    }

    /// Returns the number of nonnegative scalars.
    pub fn orthant(&self) -> usize {
        self.orthant
    }

    /// Returns the cost C.
    pub fn cost(&self) -> &Functional {
        &self.cost
    }

    /// Returns the constraints A_i.
    pub fn constraints(&self) -> &[Functional] {
        &self.constraints
    }

    /// Returns the right sides b.
    pub fn rhs(&self) -> &[f64] {
        &self.rhs
    }

    /// Returns the sum of the orders of all blocks and the size of the nonnegative part.
    pub fn total_order(&self) -> usize {
        self.blocks.iter().map(|block| block.order).sum::<usize>() + self.orthant
    }

    /// Returns the rank each block is judged at: its bound, or its order when the rank is free.
    pub fn target_ranks(&self) -> Vec<usize> {
        self.blocks.iter().map(|block| block.rank.unwrap_or(block.order)).collect()
    }

    /// Returns the largest r with r(r+1)/2 <= m: if the relaxation attains its optimum, some optimum
    /// has at most this rank (Barvinok 1995; Pataki 1998).
    pub fn rank_bound(&self) -> usize {
        let m = self.constraints.len() as u64;
        let mut r = 0u64;
        while (r + 1) * (r + 2) / 2 <= m {
            r += 1;
        }
        r as usize
    }
}

fn check_functional(
    functional: &Functional,
    blocks: &[Block],
    orthant: usize,
    place: impl Fn() -> String,
) -> Result<(), ProblemError> {
    let shape = |reason: String| ProblemError::Shape { place: place(), reason };
    let mut previous = None;
    for (index, part) in &functional.parts {
        let Some(block) = blocks.get(*index) else {
            return Err(shape(format!("block {} of {}", index + 1, blocks.len())));
        };
        if previous.is_some_and(|last| last >= *index) {
            return Err(shape("blocks are not in ascending order".to_owned()));
        }
        if part.order() != block.order {
            return Err(shape(format!(
                "order {} in a block of order {}",
                part.order(),
                block.order
            )));
        }
        if !part.is_finite() {
            return Err(ProblemError::NotFinite { place: place() });
        }
        previous = Some(*index);
    }
    if functional.orthant.indices.iter().any(|&index| index as usize >= orthant) {
        return Err(shape(format!("an entry beyond the {orthant} nonnegative scalars")));
    }
    if !functional.orthant.values.iter().all(|value| value.is_finite()) {
        return Err(ProblemError::NotFinite { place: place() });
    }
    Ok(())
}
