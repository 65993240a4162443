//! Rank reduction: from an optimum of the relaxation to an extreme point of its optimal face.
//!
//! With X = Q D Q' (Q orthonormal, D positive) and a symmetric M with <Q'A_iQ, M> = 0 for all i, the
//! points Q (D - t M) Q' meet the same constraints, and have the same cost when X is optimal. Moving t
//! to an end of the interval on which D - t M stays PSD lowers the rank by at least one. The step ends
//! with r(r+1)/2 <= m, summed over the blocks (Barvinok 1995; Pataki 1998).
//!
//! The published rule (Lemon, So, Ye, Found. Trends Optim. 2(1-2):1-156, 2016,
//! doi:10.1561/2400000009) writes X = V V' and takes Delta = D^-1/2 M D^-1/2 and the end 1/lambda with
//! lambda its eigenvalue of largest modulus. That end is the nearer one, and from an analytic centre
//! it is the end at which fewer eigenvalues vanish; [`Rule::BothEnds`] looks at both, [`Rule::Random`] at random
//! directions, and [`Rule::Tail`] goes where the eigenvalues beyond the rank bounds fall fastest.
//!
//! A Gaussian projection of the relaxation's solution ([`project_relaxation`]) is the randomised, approximate way.
//!
//! Eigenvalues of X are cut, never the columns of a square root, which would hide 1e-8 as 1e-4; all
//! below the cut go at once.

mod gaussian;
mod pipeline;
mod rules;

pub use gaussian::{GaussianReduction, RelaxedFactors, project_relaxation, relaxed_factors};
pub use pipeline::{Pipeline, reduce_relaxation, reduce_repeatedly};

use crate::budget::{Halt, Meter};
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::eigen::{SymmetricEigen, flops};
use crate::linalg::null_space::null_space;
use crate::linalg::{Mat, MatRef, packed};
use crate::problem::{BlockOperator, Factor, Operator, Problem};
use crate::seed::Stream;

/// Which end of the step is taken.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Rule {
    /// The published one: the eigenvalue of largest modulus, for one direction of the null space.
    Largest,
    /// Both ends of every basis direction; the one that leaves the lowest total rank.
    BothEnds,
    /// Both ends of random combinations of the basis; the one that leaves the lowest total rank.
    Random {
        /// Combinations tried in a step.
        combinations: usize,
        /// Names the random stream.
        seed: u64,
    },
    /// The end with the least eigenvalue sum beyond the rank bounds, along the direction over the face in which that
    /// sum falls fastest and along those found by linearising it at the ends reached.
    Tail,
}

/// Settings of the reduction.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Params {
    /// Which end is taken.
    pub rule: Rule,
    /// Eigenvalues of X up to `cut` times the largest of their block count as zero.
    pub cut: f64,
    /// Singular values up to `null` times the largest count as zero when the null space is taken.
    pub null: f64,
}

/// What a reduction did.
#[derive(Clone, Debug, PartialEq)]
pub struct Info {
    /// Total rank (sum over blocks, plus positive nonnegative scalars) before the first and after each step.
    pub ranks: Vec<usize>,
    /// Dimension of the null space when the reduction stopped; zero at an extreme point.
    pub free_directions: usize,
}

/// A point by eigenpairs.
#[derive(Clone, Debug)]
pub struct Spectral {
    /// One part per block.
    pub parts: Vec<Part>,
    /// Nonnegative part; entries at zero stay there.
    pub orthant: Vec<f64>,
}

/// The range and the positive eigenvalues of one block.
#[derive(Clone, Debug)]
pub struct Part {
    /// Orthonormal basis of the range, order x rank.
    pub basis: Mat<f64>,
    /// Eigenvalues, positive, ascending.
    pub values: Vec<f64>,
}

impl Part {
    fn rank(&self) -> usize {
        self.values.len()
    }

    /// Returns the factor Q D^1/2.
    pub fn factor(&self) -> Factor {
        self.leading_factor(self.rank())
    }

    /// Returns the factor of the `width` largest eigenpairs; columns beyond the rank are zero.
    pub fn leading_factor(&self, width: usize) -> Factor {
        let (n, r) = (self.basis.nrows(), self.rank());
        let mut factor = Factor::zeros(n, width);
        for j in 0..r.min(width) {
            let source = r - 1 - j;
            let root = self.values[source].max(0.0).sqrt();
            for i in 0..n {
                factor.data[i * width + j] = root * self.basis[(i, source)];
            }
        }
        factor
    }
}

impl Spectral {
    /// Takes the eigenpairs of dense blocks above the cut.
    ///
    /// # Errors
    /// `Failed` when an eigendecomposition fails.
    pub fn of(
        points: &[Mat<f64>],
        orthant: &[f64],
        cut: f64,
        meter: &mut Meter,
    ) -> Result<Self, Halt> {
        let mut parts = Vec::new();
        for point in points {
            let n = point.nrows();
            let mut eigen = SymmetricEigen::new(n);
            eigen.decompose(point.as_ref()).map_err(|e| Halt::Failed(e.to_string()))?;
            meter.effort.eigendecompositions += 1;
            meter.effort.flops += flops::eigen(n);
            let top = eigen.values().last().copied().unwrap_or(0.0).max(0.0);
            let kept = eigen.values().iter().filter(|value| **value > cut * top).count();
            parts.push(Part {
                basis: eigen.vectors().subcols(n - kept, kept).to_owned(),
                values: eigen.values()[n - kept..].to_vec(),
            });
        }
        let top = orthant.iter().fold(0.0_f64, |m, v| m.max(*v));
        let orthant = orthant.iter().map(|v| if *v > cut * top { *v } else { 0.0 }).collect();
        Ok(Spectral { parts, orthant })
    }

    /// Takes the eigenpairs of X_k = V_k V_k' from factors of full column rank, without forming X_k.
    ///
    /// # Errors
    /// `Failed` when an eigendecomposition fails.
    pub fn of_factors(factors: &[Factor], orthant: &[f64]) -> Result<Self, Halt> {
        let mut parts = Vec::new();
        for factor in factors {
            let (n, r) = (factor.order, factor.width);
            let v_t = MatRef::from_column_major_slice(&factor.data, r, n);
            let mut gram = Mat::zeros(r, r);
            dense::gemm(gram.as_mut(), Accumulate::Replace, 1.0, v_t, v_t.transpose());
            let mut eigen = SymmetricEigen::new(r);
            eigen.decompose(gram.as_ref()).map_err(|e| Halt::Failed(e.to_string()))?;
            let mut basis = Mat::zeros(n, r);
            let turn = eigen.vectors();
            dense::gemm(basis.as_mut(), Accumulate::Replace, 1.0, v_t.transpose(), turn);
            for j in 0..r {
                let root = eigen.values()[j].max(f64::MIN_POSITIVE).sqrt();
                basis.col_as_slice_mut(j).iter_mut().for_each(|value| *value /= root);
            }
            parts.push(Part { basis, values: eigen.values().to_vec() });
        }
        Ok(Spectral { parts, orthant: orthant.to_vec() })
    }

    /// Returns the number of eigenvalues above `cut` times the largest of their block, and of
    /// positive scalars.
    fn rank_above(&self, cut: f64) -> usize {
        let above = |part: &Part| {
            let top = part.values.last().copied().unwrap_or(0.0);
            part.values.iter().filter(|value| **value > cut * top).count()
        };
        self.parts.iter().map(above).sum::<usize>() + self.active().count()
    }

    /// Returns the sum of the block ranks and the number of positive scalars.
    pub fn total_rank(&self) -> usize {
        self.parts.iter().map(Part::rank).sum::<usize>() + self.active().count()
    }

    fn active(&self) -> impl Iterator<Item = usize> {
        (0..self.orthant.len()).filter(|&j| self.orthant[j] > 0.0)
    }

    fn unknowns(&self) -> usize {
        let blocks: usize = self.parts.iter().map(|part| packed::packed_len(part.rank())).sum();
        blocks + self.active().count()
    }
}

/// Reduces the rank of `point` in place until no direction is left.
///
/// # Errors
/// A limit of the meter, or `Failed` when a decomposition fails.
pub fn reduce(
    problem: &Problem,
    op: &Operator,
    point: &mut Spectral,
    params: &Params,
    meter: &mut Meter,
) -> Result<Info, Halt> {
    let mut info = Info { ranks: vec![point.total_rank()], free_directions: 0 };
    let seed = if let Rule::Random { seed, .. } = params.rule { seed } else { 0 };
    let mut stream = Stream::named(seed, &["reduction"]);
    loop {
        meter.check()?;
        let system = face_system(problem, op, point);
        let (m, k) = (system.nrows() as u64, system.ncols() as u64);
        meter.effort.flops += 4 * m * k * k.min(m);
        meter.effort.factorisations += 1;
        meter.effort.inner_steps += 1;
        let space =
            null_space(system.as_ref(), params.null).map_err(|e| Halt::Failed(e.to_string()))?;
        info.free_directions = space.basis.ncols();
        if info.free_directions == 0 {
            return Ok(info);
        }
        let before = point.total_rank();
        let next = match params.rule {
            Rule::Largest => {
                let direction = space.basis.col_as_slice(space.basis.ncols() - 1);
                let (low, high) = range(point, direction)?;
                let t = if high.abs() <= low.abs() { high } else { low };
                moved(point, direction, t, params.cut)?
            }
            Rule::BothEnds => rules::best_end(point, &space.basis, params.cut)?,
            Rule::Random { combinations, .. } => {
                let drawn = rules::combinations(&space.basis, combinations, &mut stream);
                rules::best_end(point, &drawn, params.cut)?
            }
            Rule::Tail => rules::tail_end(problem, point, &space.basis, params.cut)?,
        };
        let Some(next) = next.filter(|next| next.total_rank() < before) else {
            return Ok(info);
        };
        *point = next;
        info.ranks.push(point.total_rank());
    }
}

/// Builds the m x k matrix whose rows are svec(Q'A_iQ) / ||A_i|| over all blocks, and the entries of
/// the active scalars: directions M with zero image keep every constraint.
fn face_system(problem: &Problem, op: &Operator, point: &Spectral) -> Mat<f64> {
    let m = op.constraints();
    let mut system = Mat::zeros(m, point.unknowns());
    let mut offset = 0;
    for (block, part) in op.blocks.iter().zip(&point.parts) {
        compress(block, part, offset, &mut system);
        offset += packed::packed_len(part.rank());
    }
    for j in point.active() {
        for (i, row) in op.orthant_rows.iter().enumerate() {
            if let Some((_, value)) = row.iter().find(|(index, _)| *index == j) {
                system[(i, offset)] = value;
            }
        }
        offset += 1;
    }
    for (i, functional) in problem.constraints().iter().enumerate() {
        let norm = functional.norm();
        if norm > 0.0 {
            for j in 0..system.ncols() {
                system[(i, j)] /= norm;
            }
        }
    }
    system
}

fn compress(block: &BlockOperator, part: &Part, offset: usize, system: &mut Mat<f64>) {
    let r = part.rank();
    let rows: Vec<Vec<f64>> =
        (0..block.order).map(|i| (0..r).map(|k| part.basis[(i, k)]).collect()).collect();
    let mut add = |id: usize, u: &[f64], v: &[f64], value: f64| {
        let mut place = offset;
        for column in 0..r {
            system[(id, place)] += value * u[column] * v[column];
            place += 1;
            for row in column + 1..r {
                let pair = u[row] * v[column] + u[column] * v[row];
                system[(id, place)] += value * std::f64::consts::FRAC_1_SQRT_2 * pair;
                place += 1;
            }
        }
    };
    let entries = &block.entries;
    for (g, &id) in entries.ids.iter().enumerate() {
        for k in entries.range(g) {
            let (i, j) = (entries.rows[k] as usize, entries.columns[k] as usize);
            let value = if i == j { entries.values[k] } else { 2.0 * entries.values[k] };
            add(id as usize, &rows[i], &rows[j], value);
        }
    }
    if let Some(outer) = &block.outer {
        let mut products = Mat::zeros(r, outer.ids.len());
        let (basis_t, vectors) = (part.basis.transpose(), outer.vectors.as_ref());
        dense::gemm(products.as_mut(), Accumulate::Replace, 1.0, basis_t, vectors);
        for (k, &id) in outer.ids.iter().enumerate() {
            let z = products.col_as_slice(k);
            add(id as usize, z, z, outer.weights[k]);
        }
    }
}

/// Unpacks a direction into one symmetric matrix per block and one number per active scalar.
fn unpack(point: &Spectral, direction: &[f64]) -> (Vec<Mat<f64>>, Vec<f64>) {
    let mut offset = 0;
    let mut blocks = Vec::new();
    for part in &point.parts {
        let r = part.rank();
        let mut matrix = Mat::zeros(r, r);
        let length = packed::packed_len(r);
        packed::smat(&direction[offset..offset + length], matrix.as_mut());
        offset += length;
        blocks.push(matrix);
    }
    (blocks, direction[offset..].to_vec())
}

/// Returns the ends (low <= 0 <= high) of the interval of t on which D - t M is PSD; an end may be
/// infinite.
fn range(point: &Spectral, direction: &[f64]) -> Result<(f64, f64), Halt> {
    let (blocks, scalars) = unpack(point, direction);
    let (mut least, mut most) = (0.0_f64, 0.0_f64);
    for (part, m) in point.parts.iter().zip(&blocks) {
        let r = part.rank();
        if r == 0 {
            continue;
        }
        let mut delta = m.clone();
        for j in 0..r {
            for i in 0..r {
                delta[(i, j)] /= (part.values[i] * part.values[j]).sqrt();
            }
        }
        let mut eigen = SymmetricEigen::new(r);
        eigen.decompose_values_only(delta.as_ref()).map_err(|e| Halt::Failed(e.to_string()))?;
        least = least.min(eigen.values()[0]);
        most = most.max(eigen.values()[r - 1]);
    }
    for (j, value) in point.active().zip(&scalars) {
        least = least.min(value / point.orthant[j]);
        most = most.max(value / point.orthant[j]);
    }
    Ok((1.0 / least, 1.0 / most))
}

/// Returns the point D - t M with all eigenvalues up to the cut dropped, or none when t is not finite.
fn moved(point: &Spectral, direction: &[f64], t: f64, cut: f64) -> Result<Option<Spectral>, Halt> {
    if !t.is_finite() {
        return Ok(None);
    }
    let (blocks, scalars) = unpack(point, direction);
    let mut next = point.clone();
    for (part, mut m) in next.parts.iter_mut().zip(blocks) {
        let r = part.rank();
        if r == 0 {
            continue;
        }
        dense::scale(-t, m.as_mut());
        for i in 0..r {
            m[(i, i)] += part.values[i];
        }
        let mut eigen = SymmetricEigen::new(r);
        eigen.decompose(m.as_ref()).map_err(|e| Halt::Failed(e.to_string()))?;
        let top = eigen.values()[r - 1];
        let kept = eigen.values().iter().filter(|value| **value > cut * top).count();
        let mut basis = Mat::zeros(part.basis.nrows(), kept);
        let turn = eigen.vectors().subcols(r - kept, kept);
        dense::gemm(basis.as_mut(), Accumulate::Replace, 1.0, part.basis.as_ref(), turn);
        *part = Part { basis, values: eigen.values()[r - kept..].to_vec() };
    }
    let active: Vec<usize> = point.active().collect();
    for (j, value) in active.into_iter().zip(&scalars) {
        let moved = point.orthant[j] - t * value;
        next.orthant[j] = if moved > cut * point.orthant[j] { moved } else { 0.0 };
    }
    Ok(Some(next))
}

/// Outcome of the uniqueness test.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct UniquenessTest {
    /// Dimension of the numerical null space of S over all blocks (and active scalars).
    pub kernel: usize,
    /// Dimension of the symmetric matrices on that null space that no constraint sees; zero means
    /// that X is the only optimum (methods after Alizadeh, Haeberly, Overton 1997: U -> <N'A_iN, U>
    /// is injective), as far as the numerical null space is the true one.
    pub unseen: usize,
}

/// Tests uniqueness of the optimum from the slack: a basis N of the numerical null space of S, and the
/// injectivity of U -> (<N'A_iN, U>)_i.
///
/// An eigenvalue of S counts as zero when it is at most `cut` times the largest.
///
/// # Errors
/// `Failed` when a decomposition fails.
pub fn uniqueness(
    problem: &Problem,
    op: &Operator,
    slacks: &[Mat<f64>],
    point: &Spectral,
    params: &Params,
    meter: &mut Meter,
) -> Result<UniquenessTest, Halt> {
    let mut kernel = Spectral { parts: Vec::new(), orthant: point.orthant.clone() };
    for slack in slacks {
        let n = slack.nrows();
        let mut eigen = SymmetricEigen::new(n);
        eigen.decompose(slack.as_ref()).map_err(|e| Halt::Failed(e.to_string()))?;
        meter.effort.eigendecompositions += 1;
        meter.effort.flops += flops::eigen(n);
        let top = eigen.values()[n - 1].max(0.0);
        let null = eigen.values().iter().filter(|value| **value <= params.cut * top).count();
        let basis = eigen.vectors().subcols(0, null).to_owned();
        kernel.parts.push(Part { basis, values: vec![1.0; null] });
    }
    let system = face_system(problem, op, &kernel);
    let space =
        null_space(system.as_ref(), params.null).map_err(|e| Halt::Failed(e.to_string()))?;
    Ok(UniquenessTest { kernel: kernel.total_rank(), unseen: space.basis.ncols() })
}
