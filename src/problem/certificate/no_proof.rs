//! Planted points without a proof: all that is known is that the point is feasible.
//!
//! A family whose proof did not go through says so with this kind instead of a certificate. Its value is an upper bound
//! of the optimum and nothing else: whoever reads an instance of this kind treats the optimum as unknown.

use serde::{Deserialize, Serialize};

use super::dual_pair::DualPair;
use super::entries::{value_on_factor, value_on_orthant};
use super::{CertificateError, IntegerFactor, Proof, RelaxationFact, Stop, Uniqueness, settle};
use crate::problem::exact::Whole;
use crate::problem::{Factor, Problem};

/// A feasible point X* = V V', x of the target ranks, with no claim that it is optimal.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct PlantedPoint {
    /// V of each block, n_k x r_k.
    pub factors: Vec<IntegerFactor>,
    /// Nonnegative part x of the point.
    pub orthant: Vec<i64>,
}

impl PlantedPoint {
    /// Checks that the point is feasible for `problem`, in whole numbers.
    ///
    /// The `optimum` of what is returned is the value of the point, an upper bound of the optimum.
    ///
    /// # Errors
    /// The first identity or condition that fails.
    pub fn check(&self, problem: &Problem) -> Result<Proof, CertificateError> {
        let pair = self.pair(problem.constraints().len());
        pair.check_shapes(problem)?;
        pair.check_signs()?;
        let value = settle(self.value::<i128>(&pair, problem), || self.value(&pair, problem))?;
        let statement = format!(
            "no proof: the planted point is feasible with the value {value}, which bounds the optimum from above; \
             the optimum is not known"
        );
        Ok(Proof {
            optimum: value,
            uniqueness: Uniqueness::NotProved,
            dual_uniqueness: Uniqueness::NotProved,
            relaxation: RelaxationFact::NotProved,
            statement,
        })
    }

    /// Returns the planted factors as floats.
    pub(super) fn point(&self) -> Result<Vec<Factor>, CertificateError> {
        self.pair(0).point()
    }

    fn pair(&self, constraints: usize) -> DualPair {
        let zeros = vec![0; self.orthant.len()];
        DualPair::without_slack(&self.factors, &vec![0; constraints], &self.orthant, &zeros)
    }

    /// Checks `A(X*) = b` and returns <C, X*>.
    fn value<W: Whole>(&self, pair: &DualPair, problem: &Problem) -> Result<W, Stop> {
        pair.value_at_point::<W>(problem)?;
        let place = || "cost".to_owned();
        let mut value = value_on_orthant::<W>(problem.cost(), &self.orthant, place)?;
        for (k, part) in &problem.cost().parts {
            let factor = &self.factors[*k];
            value.increase(&value_on_factor(part, &factor.rows, factor.width, place)?)?;
        }
        Ok(value)
    }
}
