//! Eigenvalues of a small symmetric tridiagonal matrix with the last components of its eigenvectors.
//!
//! Implicit QL with Wilkinson's shift; only the last row of the eigenvector matrix is carried along, as Golub and Welsch do with the
//! first (Math. Comp. 23:221-230, 1969), so k values cost O(k^2).

/// Most QL sweeps for one eigenvalue; in practice two or three are enough.
const MAX_SWEEPS: usize = 60;

/// Replaces `diagonal` by the eigenvalues (in no order) and `last` by the last components of the orthonormal eigenvectors.
///
/// `off` holds the k - 1 off-diagonal entries in front and one entry of scratch behind; it is destroyed. Returns false when the
/// iteration does not converge or meets a number that is not finite.
pub(super) fn eigen_with_last_row(diagonal: &mut [f64], off: &mut [f64], last: &mut [f64]) -> bool {
    let k = diagonal.len();
    last.fill(0.0);
    last[k - 1] = 1.0;
    off[k - 1] = 0.0;
    for l in 0..k {
        let mut sweeps = 0;
        loop {
            let split = (l..k - 1)
                .find(|&i| {
                    off[i].abs() <= f64::EPSILON * (diagonal[i].abs() + diagonal[i + 1].abs())
                })
                .unwrap_or(k - 1);
            if split == l {
                break;
            }
            sweeps += 1;
            if sweeps > MAX_SWEEPS {
                return false;
            }
            sweep(diagonal, off, last, l, split);
        }
    }
    diagonal.iter().all(|v| v.is_finite())
}

/// Makes one implicit QL sweep on rows `l` to `end` of an unreduced block.
fn sweep(diagonal: &mut [f64], off: &mut [f64], last: &mut [f64], l: usize, end: usize) {
    let half = (diagonal[l + 1] - diagonal[l]) / (2.0 * off[l]);
    let radius = half.hypot(1.0);
    let mut g = diagonal[end] - diagonal[l] + off[l] / (half + radius.copysign(half));
    let (mut sine, mut cosine, mut p) = (1.0, 1.0, 0.0);
    for i in (l..end).rev() {
        let f = sine * off[i];
        let b = cosine * off[i];
        let r = f.hypot(g);
        off[i + 1] = r;
        if r == 0.0 {
            // The block splits here: undo the pending shift and let the caller find the split.
            diagonal[i + 1] -= p;
            off[end] = 0.0;
            return;
        }
        sine = f / r;
        cosine = g / r;
        g = diagonal[i + 1] - p;
        let t = (diagonal[i] - g) * sine + 2.0 * cosine * b;
        p = sine * t;
        diagonal[i + 1] = g + p;
        g = cosine * t - b;
        let z = last[i + 1];
        last[i + 1] = sine * last[i] + cosine * z;
        last[i] = cosine * last[i] - sine * z;
    }
    diagonal[l] -= p;
    off[l] = g;
    off[end] = 0.0;
}
