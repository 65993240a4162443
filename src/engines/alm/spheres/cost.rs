//! The cost of one block whose rows are unit vectors: products with factors and Gauss-Seidel sweeps.

use crate::linalg::vector::norm2;
use crate::linalg::{Mat, MatMut, MatRef, dense};
use crate::problem::operator::CostPart;
use crate::problem::{BlockOperator, Problem};
use pulp::Arch;

/// Widths up to this one have loops of their own.
const TILE: usize = 16;

/// One block with a fixed diagonal, scaled so that the rows of the factor are unit vectors.
#[derive(Clone, Debug)]
pub struct SphereBlock {
    /// Order n.
    pub order: usize,
    /// Length s_i of row i of the factor in the problem's units: s_i^2 = b_i / a_i.
    pub radii: Vec<f64>,
    /// Constraint of each row.
    pub ids: Vec<usize>,
    /// Coefficient a_i of that constraint.
    pub coefficients: Vec<f64>,
    /// Diagonal of the cost, in the problem's units.
    pub diagonal: Vec<f64>,
    /// Off-diagonal cost s_i C_ij s_j.
    rows: Rows,
    scale: f64,
}

#[derive(Clone, Debug)]
enum Rows {
    Sparse { starts: Vec<u32>, columns: Vec<u32>, values: Vec<f64> },
    Dense(Mat<f64>),
}

/// Recognises problems whose constraints fix each diagonal entry of each block, once, at a positive value,
/// and nothing else; returns one description a block.
pub fn recognise(problem: &Problem, blocks: &[BlockOperator]) -> Option<Vec<SphereBlock>> {
    if problem.orthant() > 0 {
        return None;
    }
    let mut fixed: Vec<Vec<Option<(usize, f64, f64)>>> =
        problem.blocks().iter().map(|block| vec![None; block.order]).collect();
    for (id, functional) in problem.constraints().iter().enumerate() {
        let [(block, part)] = functional.parts.as_slice() else {
            return None;
        };
        if !functional.orthant.is_empty() {
            return None;
        }
        let matrix = match part {
            crate::problem::Coefficient::Sparse(matrix) if matrix.stored() == 1 => matrix.clone(),
            crate::problem::Coefficient::Outer(sum)
                if sum.terms.len() == 1 && sum.terms[0].vector.len() == 1 =>
            {
                part.to_sparse()
            }
            _ => return None,
        };
        let (i, j, a) = matrix.iter().next()?;
        let square = problem.rhs()[id] / a;
        if i != j || fixed[*block][i].is_some() || square <= 0.0 || square.is_nan() {
            return None;
        }
        fixed[*block][i] = Some((id, a, square.sqrt()));
    }
    blocks.iter().zip(fixed).map(|(block, rows)| SphereBlock::new(block, rows)).collect()
}

impl SphereBlock {
    fn new(block: &BlockOperator, rows: Vec<Option<(usize, f64, f64)>>) -> Option<Self> {
        let rows: Vec<(usize, f64, f64)> = rows.into_iter().collect::<Option<_>>()?;
        let n = block.order;
        let radii: Vec<f64> = rows.iter().map(|row| row.2).collect();
        let mut diagonal = vec![0.0; n];
        let store = match &block.cost {
            CostPart::Dense(cost) => {
                let mut scaled = Mat::zeros(n, n);
                for j in 0..n {
                    diagonal[j] = cost[(j, j)];
                    for i in 0..n {
                        let value = radii[i] * cost[(i, j)] * radii[j];
                        scaled[(i, j)] = if i == j { 0.0 } else { value };
                    }
                }
                Rows::Dense(scaled)
            }
            CostPart::Sparse(entries) => {
                let mut counts = vec![0u32; n + 1];
                for (&i, &j) in entries.rows.iter().zip(&entries.columns).filter(|(i, j)| i != j) {
                    counts[i as usize + 1] += 1;
                    counts[j as usize + 1] += 1;
                }
                for i in 0..n {
                    counts[i + 1] += counts[i];
                }
                let total = counts[n] as usize;
                let (mut columns, mut values) = (vec![0u32; total], vec![0.0; total]);
                let mut next = counts.clone();
                for k in 0..entries.values.len() {
                    let (i, j) = (entries.rows[k] as usize, entries.columns[k] as usize);
                    if i == j {
                        diagonal[i] += entries.values[k];
                        continue;
                    }
                    let value = radii[i] * entries.values[k] * radii[j];
                    for (row, column) in [(i, j), (j, i)] {
                        let place = next[row] as usize;
                        columns[place] = column as u32;
                        values[place] = value;
                        next[row] += 1;
                    }
                }
                Rows::Sparse { starts: counts, columns, values }
            }
        };
        Some(SphereBlock {
            order: n,
            radii,
            ids: rows.iter().map(|row| row.0).collect(),
            coefficients: rows.iter().map(|row| row.1).collect(),
            diagonal,
            scale: store.scale(n),
            rows: store,
        })
    }

    /// Returns the constant `sum_i s_i^2 C_ii` of the objective.
    pub fn constant(&self) -> f64 {
        self.diagonal.iter().zip(&self.radii).map(|(c, s)| c * s * s).sum()
    }

    /// Returns the sum of the Euclidean norms of the rows of the off-diagonal cost, the size of an objective.
    pub fn scale(&self) -> f64 {
        self.scale
    }

    /// Returns the flops of one product or sweep at `width`.
    pub fn flops(&self, width: usize) -> u64 {
        let stored = match &self.rows {
            Rows::Sparse { values, .. } => values.len(),
            Rows::Dense(_) => self.order * self.order,
        };
        (2 * stored + 3 * self.order) as u64 * width as u64
    }

    /// Computes `out = C Q` without the diagonal of C.
    #[track_caller]
    pub fn product(&self, q: &[f64], width: usize, out: &mut [f64]) {
        assert!(q.len() == self.order * width && out.len() == q.len(), "rows of the block");
        match &self.rows {
            Rows::Dense(matrix) => {
                let q_t = MatRef::from_column_major_slice(q, width, self.order);
                let out_t = MatMut::from_column_major_slice_mut(out, width, self.order);
                dense::gemm(out_t, dense::Accumulate::Replace, 1.0, q_t, matrix.as_ref());
            }
            Rows::Sparse { starts, columns, values } => Arch::new().dispatch(
                #[inline(always)]
                || {
                    for i in 0..self.order {
                        let range = starts[i] as usize..starts[i + 1] as usize;
                        let target = &mut out[i * width..][..width];
                        row_image(&columns[range.clone()], &values[range], q, width, target);
                    }
                },
            ),
        }
    }

    /// Calls `visit(j, s_i C_ij s_j)` for the entries of row i off the diagonal: those stored, or all of a dense row.
    #[inline]
    pub fn each_in_row(&self, i: usize, mut visit: impl FnMut(usize, f64)) {
        match &self.rows {
            Rows::Sparse { starts, columns, values } => {
                let range = starts[i] as usize..starts[i + 1] as usize;
                for (&j, value) in columns[range.clone()].iter().zip(&values[range]) {
                    visit(j as usize, *value);
                }
            }
            Rows::Dense(matrix) => {
                for (j, value) in matrix.col_as_slice(i).iter().enumerate().filter(|(j, _)| *j != i)
                {
                    visit(j, *value);
                }
            }
        }
    }

    /// Replaces each unit row in turn by the one that is best with all others held, `-g/|g|` with
    /// `g = sum_j C_ij q_j`, and returns by how much `<C, Q Q'>` fell. At width 1 this is the descent by
    /// single flips. `image` holds one row.
    #[track_caller]
    pub fn sweep(&self, q: &mut [f64], width: usize, image: &mut [f64]) -> f64 {
        assert!(q.len() == self.order * width && image.len() == width, "rows of the block");
        let mut fall = 0.0;
        match &self.rows {
            Rows::Dense(matrix) => {
                for i in 0..self.order {
                    let q_t = MatRef::from_column_major_slice(q, width, self.order);
                    dense::gemv(
                        image,
                        dense::Accumulate::Replace,
                        1.0,
                        q_t,
                        matrix.col_as_slice(i),
                    );
                    fall += reply(image, &mut q[i * width..][..width]);
                }
            }
            Rows::Sparse { starts, columns, values } => Arch::new().dispatch(
                #[inline(always)]
                || {
                    for i in 0..self.order {
                        let range = starts[i] as usize..starts[i + 1] as usize;
                        row_image(&columns[range.clone()], &values[range], q, width, image);
                        fall += reply(image, &mut q[i * width..][..width]);
                    }
                },
            ),
        }
        fall
    }
}

impl Rows {
    fn scale(&self, order: usize) -> f64 {
        (0..order)
            .map(|i| match self {
                Rows::Sparse { starts, values, .. } => {
                    norm2(&values[starts[i] as usize..starts[i + 1] as usize])
                }
                Rows::Dense(matrix) => norm2(matrix.col_as_slice(i)),
            })
            .sum()
    }
}

/// Sets `row` to the best reply to `image` and returns the fall of the objective, `2 (|g| + g.row)`.
#[inline(always)]
fn reply(image: &[f64], row: &mut [f64]) -> f64 {
    let (mut square, mut along) = (0.0, 0.0);
    for (g, r) in image.iter().zip(row.iter()) {
        square += g * g;
        along += g * r;
    }
    let norm = square.sqrt();
    if norm <= 0.0 || norm.is_nan() {
        return 0.0;
    }
    let factor = -1.0 / norm;
    for (g, r) in image.iter().zip(row.iter_mut()) {
        *r = factor * g;
    }
    2.0 * (norm + along).max(0.0)
}

#[inline(always)]
fn row_image(columns: &[u32], values: &[f64], q: &[f64], width: usize, out: &mut [f64]) {
    let mut first = 0;
    while first + TILE <= width {
        row_tile::<TILE>(columns, values, q, width, first, out);
        first += TILE;
    }
    while first + 4 <= width {
        row_tile::<4>(columns, values, q, width, first, out);
        first += 4;
    }
    match width - first {
        1 => row_tile::<1>(columns, values, q, width, first, out),
        2 => row_tile::<2>(columns, values, q, width, first, out),
        3 => row_tile::<3>(columns, values, q, width, first, out),
        _ => {}
    }
}

#[inline(always)]
fn row_tile<const W: usize>(
    columns: &[u32],
    values: &[f64],
    q: &[f64],
    width: usize,
    first: usize,
    out: &mut [f64],
) {
    let mut sum = [0.0; W];
    for (&column, value) in columns.iter().zip(values) {
        let source = &q[column as usize * width + first..][..W];
        for k in 0..W {
            sum[k] += value * source[k];
        }
    }
    out[first..first + W].copy_from_slice(&sum);
}
