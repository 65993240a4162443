//! Products, triangles, vector kernels, norms and packed storage.

use super::*;
use crate::linalg::dense::{self, Accumulate};
use crate::linalg::{norms, packed, vector};

#[test]
fn vector_kernels_agree_with_plain_loops_at_every_length() {
    for n in 0..=200 {
        let data = random(n, 3, n as u64);
        let (x, y) = (dense::column(data.as_ref(), 0), dense::column(data.as_ref(), 1));
        let plain: f64 = (0..n).map(|i| x[i] * y[i]).sum();
        let magnitude: f64 = (0..n).map(|i| (x[i] * y[i]).abs()).sum();
        assert!(
            (vector::dot(x, y) - plain).abs() <= n as f64 * f64::EPSILON * magnitude,
            "dot {n}"
        );
        let mut z = y.to_vec();
        vector::axpy(-0.75, x, &mut z);
        for i in 0..n {
            assert!((z[i] - (y[i] - 0.75 * x[i])).abs() <= 2.0 * f64::EPSILON, "axpy {n}, {i}");
        }
        let mut z = y.to_vec();
        vector::axpby(2.0, x, 0.5, &mut z);
        let (mut sum, mut difference, mut entrywise) = (vec![0.0; n], vec![0.0; n], vec![0.0; n]);
        vector::add_into(x, y, &mut sum);
        vector::sub_into(x, y, &mut difference);
        vector::multiply_into(x, y, &mut entrywise);
        for i in 0..n {
            assert!(
                (z[i] - (2.0 * x[i] + 0.5 * y[i])).abs() <= 4.0 * f64::EPSILON,
                "axpby {n}, {i}"
            );
            assert_eq!(
                (sum[i], difference[i], entrywise[i]),
                (x[i] + y[i], x[i] - y[i], x[i] * y[i])
            );
        }
        let squares: f64 = difference.iter().map(|d| d * d).sum();
        let near = |a: f64, b: f64| (a - b).abs() <= (n + 1) as f64 * f64::EPSILON * b.abs();
        assert!(near(vector::distance(x, y), squares.sqrt()), "distance {n}");
        assert!(near(vector::norm1(x), x.iter().map(|v| v.abs()).sum()), "norm1 {n}");
        assert!(
            (vector::sum(x) - x.iter().sum::<f64>()).abs()
                <= n as f64 * f64::EPSILON * vector::norm1(x)
        );
        assert_eq!(
            vector::norm_max(x),
            x.iter().fold(0.0, |m: f64, v| m.max(v.abs())),
            "norm_max {n}"
        );
        let mut unit = x.to_vec();
        let norm = vector::normalise(&mut unit);
        assert!(near(norm, x.iter().map(|v| v * v).sum::<f64>().sqrt()), "norm {n}");
        assert!(n == 0 || (vector::norm2(&unit) - 1.0).abs() <= (n + 4) as f64 * f64::EPSILON);
    }
}

#[test]
fn norms_survive_extreme_magnitudes_and_report_nan() {
    for n in [1, 4, 16, 40] {
        for magnitude in [1e-320, 1e-300, 1e-200, 1.0, 1e200, 1e300, 1e307] {
            let x = vec![magnitude; n];
            let expected = magnitude * (n as f64).sqrt();
            // A subnormal entry carries few digits, so its rounding alone is a large share.
            let allowed = (1e-14 * expected).max(f64::from_bits(4));
            assert!(
                (vector::norm2(&x) - expected).abs() <= allowed,
                "{n} of {magnitude:e}: {:e}",
                vector::norm2(&x)
            );
            let a = Mat::from_fn(n, 1, |i, _| x[i]);
            assert!(
                (norms::frobenius(a.as_ref()) - expected).abs() <= allowed,
                "{n} of {magnitude:e}"
            );
        }
        for place in 0..n {
            let mut x = vec![1.0; n];
            x[place] = f64::NAN;
            let a = Mat::from_fn(n, 2, |i, j| if j == 0 { x[i] } else { 2.0 });
            assert!(vector::norm_max(&x).is_nan() && vector::norm2(&x).is_nan());
            assert!(norms::max_abs(a.as_ref()).is_nan() && norms::frobenius(a.as_ref()).is_nan());
            assert!(norms::one_norm(a.as_ref()).is_nan());
            x[place] = f64::INFINITY;
            assert_eq!((vector::norm_max(&x), vector::norm2(&x)), (f64::INFINITY, f64::INFINITY));
        }
    }
    assert_eq!(vector::norm2(&[0.0; 30]), 0.0);
    assert_eq!(vector::normalise(&mut [0.0; 30]), 0.0);
}

#[test]
fn matrix_norms_of_a_small_matrix_are_exact() {
    let a = Mat::from_fn(2, 3, |i, j| [[1.0, -2.0, 3.0], [-4.0, 5.0, -6.0]][i][j]);
    assert_eq!(norms::max_abs(a.as_ref()), 6.0);
    assert_eq!(norms::one_norm(a.as_ref()), 9.0);
    assert!((norms::frobenius(a.as_ref()) - 91f64.sqrt()).abs() < 1e-15);
    assert_eq!(norms::max_abs(Mat::<f64>::zeros(0, 0).as_ref()), 0.0);
}

#[test]
fn products_agree_with_plain_loops() {
    for (m, n, k) in [(1, 1, 1), (2, 3, 5), (17, 1, 9), (50, 17, 3), (33, 64, 120), (5, 5, 0)] {
        let (a, b, c) = (random(m, k, 1), random(k, n, 2), random(m, n, 3));
        let expected = product(a.as_ref(), b.as_ref());
        let norm = frobenius(a.as_ref()) * frobenius(b.as_ref());
        let mut replaced = Mat::from_fn(m, n, |_, _| f64::NAN);
        dense::gemm(replaced.as_mut(), Accumulate::Replace, 2.0, a.as_ref(), b.as_ref());
        let doubled = Mat::from_fn(m, n, |i, j| 2.0 * expected[(i, j)]);
        assert_ratio(
            difference(replaced.as_ref(), doubled.as_ref()),
            k,
            2.0 * norm,
            "gemm replace",
        );
        let mut added = c.clone();
        dense::gemm(added.as_mut(), Accumulate::Add, -1.0, a.as_ref(), b.as_ref());
        let sum = Mat::from_fn(m, n, |i, j| c[(i, j)] - expected[(i, j)]);
        assert_ratio(
            difference(added.as_ref(), sum.as_ref()),
            k + 1,
            norm + frobenius(c.as_ref()),
            "gemm add",
        );
        let mut y = vec![f64::NAN; m];
        let x: Vec<f64> = (0..k).map(|i| b[(i, 0)]).collect();
        dense::gemv(&mut y, Accumulate::Replace, 1.0, a.as_ref(), &x);
        for i in 0..m {
            assert_ratio((y[i] - expected[(i, 0)]).abs(), k, norm, "gemv");
        }
    }
}

#[test]
fn rank_k_updates_leave_the_strict_upper_triangle_alone() {
    for n in ORDERS {
        let a = random(n, 7, n as u64);
        let expected = product(a.as_ref(), a.transpose());
        let mut c = Mat::from_fn(n, n, |_, _| f64::NAN);
        dense::syrk_lower(c.as_mut(), Accumulate::Replace, 1.0, a.as_ref());
        for j in 0..n {
            for i in 0..n {
                if i < j {
                    assert!(c[(i, j)].is_nan(), "({i}, {j}) of order {n} was written");
                }
            }
        }
        dense::mirror_lower(c.as_mut());
        assert_ratio(
            difference(c.as_ref(), expected.as_ref()),
            n,
            frobenius(expected.as_ref()),
            "syrk",
        );
    }
}

#[test]
fn triangles_are_mirrored_and_averaged_across_tile_edges() {
    for n in [0, 1, 2, 31, 32, 33, 64, 65, 100] {
        let a = random(n, n, 5);
        let (mut mirrored, mut averaged) = (a.clone(), a.clone());
        dense::mirror_lower(mirrored.as_mut());
        dense::symmetrise(averaged.as_mut());
        for j in 0..n {
            for i in 0..n {
                assert_eq!(mirrored[(i, j)], a[(i.max(j), i.min(j))]);
                let mean = if i == j { a[(i, i)] } else { 0.5 * (a[(i, j)] + a[(j, i)]) };
                assert_eq!(averaged[(i, j)], mean);
            }
        }
    }
}

#[test]
fn elementwise_operations_work_on_sub_matrices() {
    let a = random(9, 9, 1);
    let part = a.as_ref().submatrix(2, 3, 5, 4);
    let mut b = Mat::zeros(5, 4);
    dense::copy_into(part, b.as_mut());
    dense::axpy_matrix(2.0, part, b.as_mut());
    dense::scale(0.5, b.as_mut());
    let mut inner = 0.0;
    for j in 0..4 {
        for i in 0..5 {
            assert!((b[(i, j)] - 1.5 * a[(i + 2, j + 3)]).abs() <= 4.0 * f64::EPSILON);
            inner += b[(i, j)] * a[(i + 2, j + 3)];
        }
    }
    assert!(
        (dense::dot_symmetric(part, b.as_ref()) - inner).abs() <= 40.0 * f64::EPSILON * inner.abs()
    );
    dense::fill(3.0, b.as_mut());
    assert_eq!(norms::max_abs(b.as_ref()), 3.0);
}

#[test]
#[should_panic(expected = "gemm: (2 x 2) from (2 x 3)(2 x 2)")]
fn a_product_of_wrong_shape_panics_with_the_shapes() {
    let (a, b) = (random(2, 3, 1), random(2, 2, 1));
    let mut c = Mat::zeros(2, 2);
    dense::gemm(c.as_mut(), Accumulate::Replace, 1.0, a.as_ref(), b.as_ref());
}

#[test]
fn packed_indices_are_a_bijection() {
    for n in 0..=12 {
        let mut next = 0;
        for j in 0..n {
            for i in j..n {
                assert_eq!(packed::packed_index(n, i, j), next);
                assert_eq!(packed::packed_index(n, j, i), next);
                assert_eq!(packed::packed_position(n, next), (i, j));
                next += 1;
            }
        }
        assert_eq!(packed::packed_len(n), next);
        assert_eq!(packed::order_of_packed_len(next), Some(n));
    }
    let valid: Vec<usize> = (0..30).filter(|&l| packed::order_of_packed_len(l).is_some()).collect();
    assert_eq!(valid, [0, 1, 3, 6, 10, 15, 21, 28]);
}

#[test]
fn packing_keeps_inner_products_and_is_undone() {
    for n in ORDERS {
        let (a, b) = (random_symmetric(n, 1), random_symmetric(n, 2));
        let length = packed::packed_len(n);
        let (mut p, mut q) = (vec![0.0; length], vec![0.0; length]);
        packed::svec(poison_upper(&a).as_ref(), &mut p);
        packed::svec(b.as_ref(), &mut q);
        let inner: f64 =
            (0..n).flat_map(|i| (0..n).map(move |j| (i, j))).map(|e| a[e] * b[e]).sum();
        let norm = frobenius(a.as_ref()) * frobenius(b.as_ref());
        assert_ratio((vector::dot(&p, &q) - inner).abs(), n, norm, "packed inner product");
        let mut back = Mat::zeros(n, n);
        packed::smat(&p, back.as_mut());
        for j in 0..n {
            assert_eq!(back[(j, j)], a[(j, j)]);
            for i in 0..n {
                assert!((back[(i, j)] - a[(i, j)]).abs() <= 2.0 * f64::EPSILON * a[(i, j)].abs());
            }
        }
    }
}
