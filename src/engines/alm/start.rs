//! Starting points: random ones at the size the constraints ask for, and truncations of wider ones.

use super::lagrangian::Lagrangian;
use crate::linalg::eigen::SymmetricEigen;
use crate::linalg::vector::{dot, scale};
use crate::linalg::{Mat, MatRef, dense};
use crate::problem::Factor;
use crate::seed::Stream;

/// Draws a Gaussian point, scaled so that A(X) is as near to b as one factor allows.
pub fn random(l: &mut Lagrangian<'_>, stream: &mut Stream) {
    for k in 0..l.layout.ranges.len() {
        let (order, width) = l.layout.shapes[k];
        let weight = 1.0 / ((order * width) as f64).sqrt();
        for value in &mut l.z[l.layout.ranges[k].clone()] {
            *value = weight * stream.normal();
        }
    }
    let range = l.layout.orthant.clone();
    let weight = 1.0 / (range.len().max(1) as f64).sqrt();
    for value in &mut l.z[range] {
        *value = weight * (0.5 + stream.uniform());
    }
    l.y.fill(0.0);
    l.refresh();
    fit_size(l);
}

/// Scales the point so that ||A(X) - b|| is least over multiples of X; the size of b when that is not positive.
fn fit_size(l: &mut Lagrangian<'_>) {
    let residual = l.residual.clone();
    l.z.iter_mut().for_each(|value| *value *= std::f64::consts::SQRT_2);
    l.refresh();
    // A(2X) - b less A(X) - b is A(X); b follows.
    let image: Vec<f64> =
        l.residual.iter().zip(&residual).map(|(twice, once)| twice - once).collect();
    let right: Vec<f64> = image.iter().zip(&residual).map(|(a, v)| a - v).collect();
    let (aa, ab) = (dot(&image, &image), dot(&image, &right));
    let factor = if ab > 0.0 && aa > 0.0 {
        ab / aa
    } else if aa > 0.0 && l.rhs_norm() > 0.0 {
        l.rhs_norm() / aa.sqrt()
    } else {
        1.0
    };
    scale((0.5 * factor).sqrt(), &mut l.z);
    l.refresh();
}

/// Eigenvalues of V'V, ascending, and the factor turned so that column j has norm^2 value j.
pub fn principal(factor: &Factor) -> Option<(Vec<f64>, Factor)> {
    let (n, width) = (factor.order, factor.width);
    let rows = MatRef::from_column_major_slice(&factor.data, width, n);
    let mut gram = Mat::zeros(width, width);
    dense::syrk_lower(gram.as_mut(), dense::Accumulate::Replace, 1.0, rows);
    let mut eigen = SymmetricEigen::new(width);
    eigen.decompose(gram.as_ref()).ok()?;
    let mut turned = Factor::zeros(n, width);
    let target = crate::linalg::MatMut::from_column_major_slice_mut(&mut turned.data, width, n);
    dense::gemm(target, dense::Accumulate::Replace, 1.0, eigen.vectors().transpose(), rows);
    Some((eigen.values().to_vec(), turned))
}

/// Keeps the `width` leading principal columns of a factor, or appends zero columns.
pub fn resized(factor: &Factor, width: usize) -> Factor {
    if factor.width == width {
        return factor.clone();
    }
    let mut out = Factor::zeros(factor.order, width);
    let turned = if width < factor.width {
        principal(factor).map_or_else(|| factor.clone(), |(_, turned)| turned)
    } else {
        factor.clone()
    };
    let kept = width.min(factor.width);
    let skip = factor.width - kept;
    for i in 0..factor.order {
        out.row_mut(i)[..kept].copy_from_slice(&turned.row(i)[skip..]);
    }
    out
}

/// Counts the eigenvalues of V V' above `share` times the largest.
pub fn numerical_rank(factor: &Factor, share: f64) -> usize {
    match principal(factor) {
        Some((values, _)) => {
            let largest = values.last().copied().unwrap_or(0.0);
            values.iter().filter(|&&value| value > share * largest).count()
        }
        None => factor.width,
    }
}
