//! Packed storage of symmetric matrices that keeps inner products: the lower triangle column by column, off-diagonal entries times sqrt 2.
//!
//! With this scaling `svec(A)'svec(B)` is the Frobenius inner product of A and B. The packed order is
//! (0,0), (1,0), .., (n-1,0), (1,1), (2,1), ..

use super::dense::column;
use faer::{MatMut, MatRef};
use std::f64::consts::{FRAC_1_SQRT_2, SQRT_2};

/// Returns the length n (n + 1) / 2 of a packed matrix of order `n`.
pub fn packed_len(n: usize) -> usize {
    n * (n + 1) / 2
}

/// Returns the order whose packed length is `length`, or nothing when no order has it.
pub fn order_of_packed_len(length: usize) -> Option<usize> {
    let mut n = ((2.0 * length as f64).sqrt()) as usize;
    while packed_len(n) > length {
        n -= 1;
    }
    while packed_len(n + 1) <= length {
        n += 1;
    }
    (packed_len(n) == length).then_some(n)
}

/// Returns the packed index of entry (`row`, `column`) or, equally, of its mirror image.
///
/// Panics when an index is not below `n`.
#[track_caller]
pub fn packed_index(n: usize, row: usize, column: usize) -> usize {
    let (i, j) = (row.max(column), row.min(column));
    assert!(i < n, "entry ({row}, {column}) of a matrix of order {n}");
    column_start(n, j) + i - j
}

/// Returns (row, column), row >= column, of packed index `index`. Panics when the index is not below the packed length.
#[track_caller]
pub fn packed_position(n: usize, index: usize) -> (usize, usize) {
    assert!(index < packed_len(n), "packed index {index} of a matrix of order {n}");
    let mut column = 0;
    let mut size = n;
    let mut start = 0;
    while index >= start + size {
        start += size;
        size -= 1;
        column += 1;
    }
    (column + index - start, column)
}

/// Packs the lower triangle of `a` into `out`. Panics when `a` is not square or `out` has not its packed length.
#[track_caller]
pub fn svec(a: MatRef<'_, f64>, out: &mut [f64]) {
    let n = a.nrows();
    assert!(
        a.ncols() == n && out.len() == packed_len(n),
        "packing {n} x {} into {}",
        a.ncols(),
        out.len()
    );
    for j in 0..n {
        let start = column_start(n, j);
        let from = &column(a, j)[j..];
        out[start] = from[0];
        for (o, v) in out[start + 1..start + n - j].iter_mut().zip(&from[1..]) {
            *o = SQRT_2 * v;
        }
    }
}

/// Unpacks `packed` into both triangles of `out`. Panics when `out` is not square or `packed` has not its packed length.
///
/// Packing and unpacking restore the diagonal exactly and the rest within two roundings.
#[track_caller]
pub fn smat(packed: &[f64], mut out: MatMut<'_, f64>) {
    let n = out.nrows();
    assert!(
        out.ncols() == n && packed.len() == packed_len(n),
        "unpacking {} into {n} x {}",
        packed.len(),
        out.ncols()
    );
    for j in 0..n {
        let start = column_start(n, j);
        out[(j, j)] = packed[start];
        for i in j + 1..n {
            out[(i, j)] = FRAC_1_SQRT_2 * packed[start + i - j];
        }
    }
    super::dense::mirror_lower(out);
}

fn column_start(n: usize, column: usize) -> usize {
    // Columns before this one have n, n - 1, .. entries.
    column * n - column * column.saturating_sub(1) / 2
}
