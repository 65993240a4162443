//! Where the loop starts: multiples of the identity of the size of the data.

use crate::linalg::vector::norm2;
use crate::problem::{Coefficient, Functional, Operator, Problem, SparseVector};

/// Multiples of the identity to start from, and their sizes, to recognise divergence.
#[derive(Clone, Debug)]
pub(super) struct Start {
    /// `(xi, eta)` of each block: X = xi I, S = eta I.
    pub blocks: Vec<(f64, f64)>,
    /// The same of the nonnegative part.
    pub orthant: (f64, f64),
    pub x_norm: f64,
    pub s_norm: f64,
}

impl Start {
    /// Takes the multiples from the norms of a scaled problem.
    pub fn of(problem: &Problem, op: &Operator) -> Self {
        let block_norm = |functional: &Functional, index: usize| {
            functional.part(index).map_or(0.0, Coefficient::norm)
        };
        let mut blocks = Vec::new();
        let (mut x_norm, mut s_norm) = (0.0, 0.0);
        for (index, block) in op.blocks.iter().enumerate() {
            let n = block.order as f64;
            let mut xi: f64 = 10.0_f64.max(n.sqrt());
            let mut eta: f64 = 10.0_f64.max(n.sqrt()).max(1.0 + block_norm(problem.cost(), index));
            for (functional, b) in problem.constraints().iter().zip(problem.rhs()) {
                let norm = block_norm(functional, index);
                if norm > 0.0 {
                    xi = xi.max(n * (1.0 + b.abs()) / (1.0 + norm));
                    eta = eta.max(1.0 + norm);
                }
            }
            x_norm += xi * n;
            s_norm += eta * n;
            blocks.push((xi, eta));
        }
        let size = problem.orthant() as f64;
        let row_norm = |row: &SparseVector| norm2(&row.values);
        let mut xi: f64 = 10.0_f64.max(size.sqrt());
        let mut eta: f64 = 10.0_f64.max(size.sqrt()).max(1.0 + norm2(&op.orthant_cost));
        for (row, b) in op.orthant_rows.iter().zip(problem.rhs()) {
            if !row.is_empty() {
                xi = xi.max(size.sqrt() * (1.0 + b.abs()) / (1.0 + row_norm(row)));
                eta = eta.max(1.0 + row_norm(row));
            }
        }
        x_norm += xi * size;
        s_norm += eta * size;
        Start { blocks, orthant: (xi, eta), x_norm, s_norm }
    }
}
