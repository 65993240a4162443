//! Known vectors that a Krylov space is kept away from.

use crate::linalg::dense::column;
use crate::linalg::vector::{axpy, dot, norm2, normalise};
use faer::MatRef;

/// Stores an orthonormal basis of the given vectors and returns its size; vectors that depend on earlier ones are dropped.
#[track_caller]
pub(super) fn fill_deflated(
    vectors: Option<MatRef<'_, f64>>,
    n: usize,
    store: &mut Vec<f64>,
) -> usize {
    store.clear();
    let Some(vectors) = vectors else { return 0 };
    assert_eq!(vectors.nrows(), n, "length of the deflated vectors");
    let mut count = 0;
    for j in 0..vectors.ncols() {
        store.extend_from_slice(column(vectors, j));
        let (known, new) = store.split_at_mut(count * n);
        let before = normalise(new);
        for _ in 0..2 {
            remove_components(known, n, new);
        }
        if before > 0.0 && norm2(new) > 1e-10 {
            normalise(new);
            count += 1;
        } else {
            store.truncate(count * n);
        }
    }
    count
}

/// Subtracts from `x` its components along the orthonormal vectors stored one after another in `known`.
pub(super) fn remove_components(known: &[f64], n: usize, x: &mut [f64]) {
    for vector in known.chunks_exact(n) {
        let c = dot(vector, x);
        axpy(-c, vector, x);
    }
}
