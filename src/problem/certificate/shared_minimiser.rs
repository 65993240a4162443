//! Shared minimisers: a cost that is a sum of signed cycles, all minimised by one sign vector.
//!
//! The problem is `min <C, X>` subject to `X_ii = 1`, X PSD of rank one: X = x x' with x a sign
//! vector. Write `E(x) = -sum_{i<j} J_ij x_i x_j` with `C_ij = -J_ij` off the diagonal and `C_ii = 0`,
//! so that `<C, x x'> = 2 E(x)`.
//!
//! Theorem. Let J be the sum of closed cycles, cycle k with nonzero couplings `J_e` on its edges.
//! Call a cycle frustrated when the product of its couplings is negative. On every sign vector its
//! energy is at least `-sum |J_e|`, and at least `-sum |J_e| + 2 min |J_e|` when it is frustrated. If
//! one sign vector t attains all these bounds, t t' is an optimum, of value twice their sum.
//!
//! Proof. Put `s_e = x_i x_j` on an edge. Along a closed cycle every vertex is met twice, so the
//! product of the s_e is 1, and the product of the signs of `J_e s_e` is the sign of the product of
//! the J_e. The energy `-sum J_e s_e` equals `-sum |J_e|` plus twice the magnitudes of the violated
//! edges, those with `J_e s_e < 0`. In a frustrated cycle that product is negative, so an odd number
//! of edges, hence at least one, is violated. A sum is at least the sum of the minima. QED.
//!
//! The bound is well known for planted spin systems (I. Hen et al., Physical Review A 92:042325, 2015;
//! F. Hamze et al., Physical Review E 97:043303, 2018); the proof is given because the program rests
//! on it. Nothing is proved about other minimisers or about the relaxation.

use serde::{Deserialize, Serialize};

use super::entries::EntrySum;
use super::{CertificateError, Proof, RelaxationFact, Stop, Uniqueness, expect_size, settle};
use crate::problem::exact::Whole;
use crate::problem::{Factor, Functional, Problem};

/// A closed cycle with a coupling on each edge.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct SignedCycle {
    /// Different vertices in the order of the cycle, at least three.
    pub vertices: Vec<u32>,
    /// `couplings[k]` joins `vertices[k]` and the next vertex; the last one closes the cycle.
    pub couplings: Vec<i64>,
}

impl SignedCycle {
    /// Iterates over the edges `(i, j, J)`.
    pub fn edges(&self) -> impl Iterator<Item = (usize, usize, i64)> {
        let next = self.vertices.iter().cycle().skip(1);
        self.vertices
            .iter()
            .zip(next)
            .zip(&self.couplings)
            .map(|((&i, &j), &coupling)| (i as usize, j as usize, coupling))
    }

    /// Returns the bound of the theorem on the energy of the cycle.
    fn least_energy<W: Whole>(&self) -> Result<W, Stop> {
        let mut least = W::of(0);
        let mut smallest: Option<W> = None;
        let mut frustrated = false;
        for &coupling in &self.couplings {
            let sign = W::of(-coupling.signum());
            let magnitude = W::of(coupling).times(&W::of(coupling.signum()))?;
            least.increase(&W::of(coupling).times(&sign)?)?;
            frustrated ^= coupling < 0;
            if smallest.as_ref().is_none_or(|known| magnitude < *known) {
                smallest = Some(magnitude);
            }
        }
        if let (true, Some(smallest)) = (frustrated, smallest) {
            least.increase(&smallest.times(&W::of(2))?)?;
        }
        Ok(least)
    }

    /// Returns the energy of the cycle at `signs`.
    fn energy<W: Whole>(&self, signs: &[i64]) -> Result<W, Stop> {
        let mut energy = W::of(0);
        for (i, j, coupling) in self.edges() {
            energy.increase(&W::of(coupling).times(&W::of(-signs[i] * signs[j]))?)?;
        }
        Ok(energy)
    }
}

/// A sign vector that minimises every one of the cycles whose sum is the cost.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct SharedMinimiser {
    /// The planted sign vector t.
    pub signs: Vec<i64>,
    /// The cycles.
    pub cycles: Vec<SignedCycle>,
}

impl SharedMinimiser {
    /// Checks the certificate against `problem` exactly; see the module's theorem.
    ///
    /// # Errors
    /// The first identity or condition that fails.
    pub fn check(&self, problem: &Problem) -> Result<Proof, CertificateError> {
        check_sign_problem(problem)?;
        self.check_parts(problem.blocks()[0].order)?;
        let optimum = settle(self.identities::<i128>(problem), || self.identities(problem))?;
        let statement = format!(
            "the rank-one problem has the optimum {optimum}, attained by the planted sign vector \
             ({} cycles share this minimiser)",
            self.cycles.len()
        );
        Ok(Proof {
            optimum,
            uniqueness: Uniqueness::NotProved,
            dual_uniqueness: Uniqueness::NotProved,
            relaxation: RelaxationFact::NotProved,
            statement,
        })
    }

    /// Returns the planted factor t.
    pub(super) fn point(&self) -> Factor {
        let data = self.signs.iter().map(|&sign| sign as f64).collect();
        Factor { order: self.signs.len(), width: 1, data }
    }

    fn check_parts(&self, order: usize) -> Result<(), CertificateError> {
        expect_size("t", order, self.signs.len())?;
        let fail = |condition, place, value: String| {
            Err(CertificateError::Condition { condition, place, value })
        };
        if let Some(i) = self.signs.iter().position(|&sign| sign != 1 && sign != -1) {
            let place = format!("t_{}", i + 1);
            return fail("a sign is 1 or -1", place, self.signs[i].to_string());
        }
        for (k, cycle) in self.cycles.iter().enumerate() {
            let named = format!("cycle {}", k + 1);
            let length = cycle.vertices.len();
            expect_size(&format!("the coupling list of {named}"), length, cycle.couplings.len())?;
            if length < 3 {
                return fail("a cycle has at least three vertices", named, length.to_string());
            }
            if cycle.couplings.contains(&0) {
                return fail("a coupling must not be zero", named, "0".to_owned());
            }
            let mut sorted = cycle.vertices.clone();
            sorted.sort_unstable();
            if let Some(pair) = sorted.windows(2).find(|pair| pair[0] == pair[1]) {
                return fail("the vertices of a cycle differ", named, (pair[0] + 1).to_string());
            }
            let last = sorted[length - 1];
            if last as usize >= order {
                return fail(
                    "a vertex must lie within the block",
                    named,
                    (u64::from(last) + 1).to_string(),
                );
            }
        }
        Ok(())
    }

    /// Checks that the cycles sum to the cost and that t attains every minimum; returns <C, tt'>.
    fn identities<W: Whole>(&self, problem: &Problem) -> Result<W, Stop> {
        let mut sum = EntrySum::<W>::new(self.signs.len());
        if let Some(part) = problem.cost().part(0) {
            sum.add_coefficient(part, &W::of(1), || "cost".to_owned())?;
        }
        let mut total = W::of(0);
        for (k, cycle) in self.cycles.iter().enumerate() {
            for (i, j, coupling) in cycle.edges() {
                sum.add(i, j, W::of(coupling))?;
            }
            let (energy, least) = (cycle.energy::<W>(&self.signs)?, cycle.least_energy::<W>()?);
            if energy != least {
                return Err(Stop::Fails(CertificateError::Identity {
                    identity: "E_k(t) = min E_k",
                    place: format!("cycle {}", k + 1),
                    left: energy.to_string(),
                    right: least.to_string(),
                }));
            }
            total.increase(&energy.times(&W::of(2))?)?;
        }
        if let Some((i, j, excess)) = sum.first_nonzero()? {
            return Err(Stop::Fails(CertificateError::Identity {
                identity: "C + sum of the cycles' J = 0",
                place: format!("entry ({}, {})", i + 1, j + 1),
                left: excess.to_string(),
                right: "0".to_owned(),
            }));
        }
        Ok(total)
    }
}

/// Checks that the problem is one block of rank one with unit diagonal and nothing else.
pub(super) fn check_sign_problem(problem: &Problem) -> Result<(), CertificateError> {
    let form = |reason: String| Err(CertificateError::Form(reason));
    if problem.blocks().len() != 1 || problem.orthant() != 0 {
        return form("it must have one block and no nonnegative scalar".to_owned());
    }
    let block = problem.blocks()[0];
    if block.rank != Some(1) {
        return form(format!("the rank bound must be 1, not {:?}", block.rank));
    }
    expect_size("the list of constraints", block.order, problem.constraints().len())?;
    let mut seen = vec![false; block.order];
    for (index, constraint) in problem.constraints().iter().enumerate() {
        match unit_diagonal(constraint) {
            Some(i) if !seen[i] => seen[i] = true,
            _ => return form(format!("constraint {} is not X_ii = 1 for a new i", index + 1)),
        }
        let place = || format!("right side {}", index + 1);
        if problem.rhs()[index] != 1.0 {
            let identity = "b_i = 1";
            let (left, right) = (problem.rhs()[index].to_string(), "1".to_owned());
            return Err(CertificateError::Identity { identity, place: place(), left, right });
        }
    }
    Ok(())
}

/// Returns i when the functional is exactly X_ii of the first block.
fn unit_diagonal(functional: &Functional) -> Option<usize> {
    let [(0, part)] = functional.parts.as_slice() else {
        return None;
    };
    let matrix = part.to_sparse();
    let mut entries = matrix.iter();
    match (entries.next(), entries.next(), functional.orthant.is_empty()) {
        (Some((i, j, 1.0)), None, true) if i == j => Some(i),
        _ => None,
    }
}
