//! The problem restricted to a subspace, X_k = U_k Z_k U_k', with the violation of its constraints penalised.
//!
//! This is the polishing problem of S. Diamond, R. Takapoui, S. Boyd, Optim. Methods Softw. 33:165-193 (2018): minimise
//! <C, X> + c'x + w ||A(X) + a(x) - b||_1 over Z_k PSD, x >= 0. The sum of absolute values is held by 2 m more
//! nonnegative scalars, so that the restricted problem always has a point. From memory. Blocks without a rank bound
//! keep their order.

use super::RankSet;
use super::point::DensePoint;
use crate::budget::{Halt, Meter};
use crate::engines::ipm;
use crate::linalg::dense::{self, Accumulate, column};
use crate::linalg::{Mat, MatRef};
use crate::problem::{Block, Coefficient, Functional, Problem, SparseSymmetric, SparseVector};

/// Solves the problem restricted to the subspaces of the leading eigenvectors of the point that `set` projected on last
/// and writes its point into `out`; false when the solver did not end with a usable point.
///
/// # Errors
/// A limit of the meter.
pub fn solve_restricted(
    problem: &Problem,
    set: &RankSet,
    weight: f64,
    out: &mut DensePoint,
    meter: &mut Meter,
) -> Result<bool, Halt> {
    let bases: Vec<Option<MatRef<'_, f64>>> = problem
        .blocks()
        .iter()
        .enumerate()
        .map(|(k, block)| {
            let rank = block.rank.filter(|rank| *rank < block.order)?;
            Some(set.eigen(k).vectors().subcols(block.order - rank, rank))
        })
        .collect();
    let restricted = restrict(problem, &bases, weight);
    let params = ipm::Params { tolerance: 1e-10, ..ipm::Params::default() };
    let solution = match ipm::solve(&restricted, &params, None, meter) {
        Ok(solution) => solution,
        Err(Halt::Failed(_) | Halt::Refused(_)) => return Ok(false),
        Err(halt) => return Err(halt),
    };
    for (k, z) in solution.points.iter().enumerate() {
        match &bases[k] {
            None => dense::copy_into(z.as_ref(), out.blocks[k].as_mut()),
            Some(u) => {
                let mut half = Mat::zeros(u.nrows(), u.ncols());
                dense::gemm(half.as_mut(), Accumulate::Replace, 1.0, *u, z.as_ref());
                let target = out.blocks[k].as_mut();
                dense::gemm(target, Accumulate::Replace, 1.0, half.as_ref(), u.transpose());
                dense::symmetrise(out.blocks[k].as_mut());
            }
        }
    }
    out.x.copy_from_slice(&solution.orthant[..problem.orthant()]);
    Ok(true)
}

/// Builds the restricted problem.
fn restrict(problem: &Problem, bases: &[Option<MatRef<'_, f64>>], weight: f64) -> Problem {
    let (m, l) = (problem.constraints().len(), problem.orthant());
    let blocks = problem
        .blocks()
        .iter()
        .zip(bases)
        .map(|(block, basis)| Block { order: basis.map_or(block.order, |u| u.ncols()), rank: None })
        .collect();
    let compress = |functional: &Functional, extra: Vec<(u32, f64)>| {
        let parts = functional.parts.iter().map(|(k, part)| {
            let part = match bases[*k] {
                None => part.clone(),
                Some(u) => Coefficient::Sparse(compressed(part, u)),
            };
            (*k, part)
        });
        let scalars = functional.orthant.iter().map(|(j, v)| (j as u32, v)).chain(extra);
        let orthant = SparseVector::gather(scalars.collect());
        Functional { parts: parts.collect(), orthant }
    };
    let constraints = problem
        .constraints()
        .iter()
        .enumerate()
        .map(|(i, a)| compress(a, vec![((l + i) as u32, 1.0), ((l + m + i) as u32, -1.0)]))
        .collect();
    let penalty = (l..l + 2 * m).map(|j| (j as u32, weight)).collect();
    let cost = compress(problem.cost(), penalty);
    Problem::new(blocks, l + 2 * m, cost, constraints, problem.rhs().to_vec())
        .expect("restriction keeps shapes and finiteness")
}

/// Computes U'AU.
fn compressed(coefficient: &Coefficient, u: MatRef<'_, f64>) -> SparseSymmetric {
    let r = u.ncols();
    let mut sum = Mat::<f64>::zeros(r, r);
    match coefficient {
        Coefficient::Sparse(matrix) => {
            for (i, j, value) in matrix.iter() {
                let value = if i == j { 0.5 * value } else { value };
                for b in 0..r {
                    for a in 0..r {
                        sum[(a, b)] += value * (u[(i, a)] * u[(j, b)] + u[(j, a)] * u[(i, b)]);
                    }
                }
            }
        }
        Coefficient::Outer(outer) => {
            for term in &outer.terms {
                let image = |a: usize| -> f64 {
                    let column = column(u, a);
                    term.vector.iter().map(|(i, value)| value * column[i]).sum()
                };
                let images: Vec<f64> = (0..r).map(image).collect();
                for b in 0..r {
                    for a in 0..r {
                        sum[(a, b)] += term.weight * images[a] * images[b];
                    }
                }
            }
        }
    }
    let entries = (0..r).flat_map(|b| (0..=b).map(move |a| (a, b)));
    SparseSymmetric::gather(r, entries.map(|(a, b)| (a, b, sum[(a, b)])).collect())
}
