//! Uniqueness of both halves of a dual pair, by ranks modulo a prime.
//!
//! Write X* = V V' with V of full column rank, S* = W D W' with D > 0 and `V'W = 0`.
//!
//! - Primal uniqueness. Let N_k be a basis of null(S*_k) and Z the nonnegative scalars with z = 0.
//!   Every optimal point has the form (N_k U_k N_k', u on Z), because `<S*, X> + z'x` vanishes there.
//!   If `(U, u) -> (sum_k <N_k'A_ik N_k, U_k> + sum_{j in Z} a_ij u_j)_i` is injective, the point is
//!   therefore the only optimum (A. Lemon, A. So, Y. Ye, "Low-rank semidefinite programming: theory
//!   and applications", Foundations and Trends in Optimization 2, 2016, from memory; the proof is the
//!   sentence above). When rank W_k = n_k - r_k, the columns of V_k are such a basis. The condition
//!   is dual nondegeneracy (F. Alizadeh, J.-P. Haeberly, M. Overton, "Complementarity and
//!   nondegeneracy in semidefinite programming", Mathematical Programming 77:111-128, 1997).
//! - Dual uniqueness. If the `A_i V` (with the coefficients of the scalars x_j > 0) are linearly
//!   independent over i, the multipliers are unique: two optimal slacks satisfy S V = 0, so the
//!   difference of their multipliers satisfies A*(dy) V = 0. This is primal nondegeneracy.
//!
//! Both ranks are lower bounds modulo 2^61 - 1; reaching full rank proves full rank over the
//! rationals. Missing it proves nothing, and the answer is then `NotProved`.

use super::Uniqueness;
use super::dual_pair::{DualPair, IntegerFactor};
use crate::problem::exact::{ResidueColumns, add, multiply, residue, residue_of_f64};
use crate::problem::{Coefficient, Functional, Problem};

impl DualPair {
    /// Tests primal uniqueness; the pair has been checked against `problem`.
    pub(super) fn primal_uniqueness(&self, problem: &Problem) -> Uniqueness {
        for pair in &self.blocks {
            let (order, width) = (pair.factor.order, pair.factor.width);
            if width > order || width + pair.slack.len() < order {
                return Uniqueness::NotProved;
            }
            let mut slack = ResidueColumns::new(order);
            for column in &pair.slack {
                slack.push_integers(column.iter());
            }
            if slack.rank_up_to(order - width) < order - width {
                return Uniqueness::NotProved;
            }
        }
        self.face_is_a_point(problem)
    }

    /// Tests the second condition of primal uniqueness alone: that the map of the module's first item is injective
    /// with N_k = V_k. It proves uniqueness where range(V_k) is known to be the whole null space of each S*_k.
    pub(super) fn face_is_a_point(&self, problem: &Problem) -> Uniqueness {
        let starts = offsets(self.blocks.iter().map(|pair| triangle(pair.factor.width)));
        let free = (0..self.orthant.len()).filter(|&j| self.orthant_slack[j] == 0);
        let places = scatter(self.orthant.len(), free);
        let unknowns = starts[self.blocks.len()] + places.1;
        if unknowns > problem.constraints().len() {
            return Uniqueness::NotProved;
        }
        let mut images = ResidueColumns::new(unknowns);
        for constraint in problem.constraints() {
            let mut entries = orthant_entries(constraint, &places.0, starts[self.blocks.len()]);
            for (k, part) in &constraint.parts {
                let factor = &self.blocks[*k].factor;
                compress(part, factor, starts[*k], &mut entries);
            }
            images.push(entries);
        }
        verdict(images.rank_up_to(unknowns) == unknowns)
    }

    /// Tests dual uniqueness; the pair has been checked against `problem`.
    pub(super) fn dual_uniqueness(&self, problem: &Problem) -> Uniqueness {
        let starts = offsets(self.blocks.iter().map(|pair| pair.factor.order * pair.factor.width));
        let positive = (0..self.orthant.len()).filter(|&j| self.orthant[j] > 0);
        let places = scatter(self.orthant.len(), positive);
        let coordinates = starts[self.blocks.len()] + places.1;
        let count = problem.constraints().len();
        if count > coordinates || u32::try_from(coordinates).is_err() {
            return Uniqueness::NotProved;
        }
        let mut images = ResidueColumns::new(coordinates);
        for constraint in problem.constraints() {
            let mut entries = orthant_entries(constraint, &places.0, starts[self.blocks.len()]);
            for (k, part) in &constraint.parts {
                let factor = &self.blocks[*k].factor;
                product(part, factor, &mut |i, p, value| {
                    entries.push((starts[*k] + i * factor.width + p, value));
                });
            }
            images.push(entries);
        }
        verdict(images.rank_up_to(count) == count)
    }
}

/// Returns a proved lower bound, at most `enough`, of the rank of the matrices V'A_i V over the first
/// block (their upper triangles as vectors). With r columns in V it is at most r(r+1)/2; what is
/// missing to that is the dimension of the symmetric U with `<V'A_iV, U> = 0` for all i.
///
/// Panics when a constraint holds a number that is not whole.
pub fn compressed_rank(constraints: &[Functional], factor: &IntegerFactor, enough: usize) -> usize {
    let mut images = ResidueColumns::new(triangle(factor.width));
    for constraint in constraints {
        let mut entries = Vec::new();
        if let Some(part) = constraint.part(0) {
            compress(part, factor, 0, &mut entries);
        }
        images.push(entries);
    }
    images.rank_up_to(enough)
}

/// Returns a proved lower bound, at most `enough`, of the rank of the matrices A_i V over the first
/// block. Panics when a constraint holds a number that is not whole.
pub fn image_rank(constraints: &[Functional], factor: &IntegerFactor, enough: usize) -> usize {
    let mut images = ResidueColumns::new(factor.order * factor.width);
    for constraint in constraints {
        let mut entries = Vec::new();
        if let Some(part) = constraint.part(0) {
            product(part, factor, &mut |i, p, value| entries.push((i * factor.width + p, value)));
        }
        images.push(entries);
    }
    images.rank_up_to(enough)
}

fn verdict(proved: bool) -> Uniqueness {
    if proved { Uniqueness::Proved } else { Uniqueness::NotProved }
}

fn triangle(r: usize) -> usize {
    r * (r + 1) / 2
}

/// Returns the running sums of `sizes`, beginning with zero.
fn offsets(sizes: impl Iterator<Item = usize>) -> Vec<usize> {
    let mut sums = vec![0];
    for size in sizes {
        sums.push(sums[sums.len() - 1] + size);
    }
    sums
}

/// Numbers the chosen scalars; returns the number of each, or none, and how many were chosen.
fn scatter(length: usize, chosen: impl Iterator<Item = usize>) -> (Vec<Option<usize>>, usize) {
    let mut places = vec![None; length];
    let mut count = 0;
    for j in chosen {
        places[j] = Some(count);
        count += 1;
    }
    (places, count)
}

fn orthant_entries(
    functional: &Functional,
    places: &[Option<usize>],
    start: usize,
) -> Vec<(usize, u64)> {
    functional
        .orthant
        .iter()
        .filter_map(|(j, value)| places[j].map(|place| (start + place, read(value))))
        .collect()
}

/// Reads a number of a problem whose certificate has been checked.
fn read(value: f64) -> u64 {
    residue_of_f64(value).expect("a checked problem holds whole numbers")
}

/// Visits the terms of A V modulo the prime: `visit(i, p, value)` adds `value` at row i, column p.
pub(super) fn product(
    coefficient: &Coefficient,
    factor: &IntegerFactor,
    visit: &mut impl FnMut(usize, usize, u64),
) {
    match coefficient {
        Coefficient::Sparse(matrix) => {
            for (i, j, value) in matrix.iter() {
                let value = read(value);
                for (p, &v) in factor.row(j).iter().enumerate() {
                    visit(i, p, multiply(value, residue(v)));
                }
                if i != j {
                    for (p, &v) in factor.row(i).iter().enumerate() {
                        visit(j, p, multiply(value, residue(v)));
                    }
                }
            }
        }
        Coefficient::Outer(sum) => {
            for term in &sum.terms {
                for p in 0..factor.width {
                    let mut dot = 0;
                    for (i, value) in term.vector.iter() {
                        dot = add(dot, multiply(read(value), residue(factor.row(i)[p])));
                    }
                    let scaled = multiply(dot, read(term.weight));
                    for (i, value) in term.vector.iter() {
                        visit(i, p, multiply(scaled, read(value)));
                    }
                }
            }
        }
    }
}

/// Appends the upper triangle of V'A V, packed from `start`; off-diagonal entries stand for both
/// triangles, which scales a coordinate by 2 and leaves the rank alone.
fn compress(
    coefficient: &Coefficient,
    factor: &IntegerFactor,
    start: usize,
    entries: &mut Vec<(usize, u64)>,
) {
    let mut packed = vec![0u64; triangle(factor.width)];
    product(coefficient, factor, &mut |i, p, value| {
        for (q, &v) in factor.row(i)[..=p].iter().enumerate() {
            let place = triangle(p) + q;
            packed[place] = add(packed[place], multiply(value, residue(v)));
        }
    });
    entries.extend(packed.into_iter().enumerate().map(|(place, value)| (start + place, value)));
}
