//! Products of a matrix on a symmetric pattern with factors stored by rows: the hot loops of every
//! factored engine. Rows are short (the width of a factor), so they are taken in register tiles and
//! the whole loop, not each row, is compiled for the processor at hand.

use super::Pattern;
use pulp::Arch;

/// Entries of a row that are summed at a time.
const TILE: usize = 16;
/// Independent partial sums of an inner product of two rows.
const LANES: usize = 8;

impl Pattern {
    /// Computes `out = M V` for `values` on the pattern and V of n rows of `width` numbers.
    #[track_caller]
    pub fn multiply_rows(&self, values: &[f64], v: &[f64], width: usize, out: &mut [f64]) {
        assert!(v.len() == self.order() * width && out.len() == v.len());
        assert_eq!(values.len(), self.stored(), "one value a slot");
        match width {
            0 => {}
            1 => self.multiply_tile::<1>(values, v, 1, 0, out),
            2 => self.multiply_tile::<2>(values, v, 2, 0, out),
            3 => self.multiply_tile::<3>(values, v, 3, 0, out),
            4 => self.multiply_tile::<4>(values, v, 4, 0, out),
            _ => Arch::new().dispatch(
                #[inline(always)]
                || self.multiply_wide(values, v, width, out),
            ),
        }
    }

    #[inline(always)]
    fn multiply_wide(&self, values: &[f64], v: &[f64], width: usize, out: &mut [f64]) {
        for i in 0..self.order() {
            let mut first = 0;
            while first + TILE <= width {
                self.row_tile::<TILE>(i, values, v, width, first, out);
                first += TILE;
            }
            while first + 4 <= width {
                self.row_tile::<4>(i, values, v, width, first, out);
                first += 4;
            }
            while first < width {
                self.row_tile::<1>(i, values, v, width, first, out);
                first += 1;
            }
        }
    }

    fn multiply_tile<const W: usize>(
        &self,
        values: &[f64],
        v: &[f64],
        width: usize,
        first: usize,
        out: &mut [f64],
    ) {
        for i in 0..self.order() {
            self.row_tile::<W>(i, values, v, width, first, out);
        }
    }

    #[inline(always)]
    fn row_tile<const W: usize>(
        &self,
        i: usize,
        values: &[f64],
        v: &[f64],
        width: usize,
        first: usize,
        out: &mut [f64],
    ) {
        let range = self.full_starts[i] as usize..self.full_starts[i + 1] as usize;
        let mut sum = [0.0; W];
        for (&column, &slot) in self.full_columns[range.clone()].iter().zip(&self.full_slots[range])
        {
            let value = values[slot as usize];
            let source = &v[column as usize * width + first..][..W];
            for k in 0..W {
                sum[k] += value * source[k];
            }
        }
        out[i * width + first..][..W].copy_from_slice(&sum);
    }

    /// Computes for each slot (i, j) the entry of R R' times the number of triangles it stands for:
    /// `r_i . r_j` on the diagonal and twice that off it.
    #[track_caller]
    pub fn square_values(&self, r: &[f64], width: usize, out: &mut [f64]) {
        assert!(r.len() == self.order() * width && out.len() == self.stored());
        Arch::new().dispatch(
            #[inline(always)]
            || {
                self.each_slot(|slot, i, j| {
                    let (ri, rj) = (&r[i * width..][..width], &r[j * width..][..width]);
                    let weight = if i == j { 1.0 } else { 2.0 };
                    out[slot] = weight * inner(ri, rj);
                });
            },
        );
    }

    /// Computes for each slot (i, j), times the number of triangles it stands for, the entries of
    /// R D' + D R' (`first`) and of D D' (`second`).
    #[track_caller]
    pub fn line_values(
        &self,
        r: &[f64],
        d: &[f64],
        width: usize,
        first: &mut [f64],
        second: &mut [f64],
    ) {
        assert!(r.len() == self.order() * width && d.len() == r.len());
        assert!(first.len() == self.stored() && second.len() == self.stored());
        match width {
            1 => self.line_narrow::<1>(r, d, first, second),
            2 => self.line_narrow::<2>(r, d, first, second),
            3 => self.line_narrow::<3>(r, d, first, second),
            4 => self.line_narrow::<4>(r, d, first, second),
            _ => Arch::new().dispatch(
                #[inline(always)]
                || {
                    self.each_slot(|slot, i, j| {
                        let rows = [i, j].map(|k| k * width..(k + 1) * width);
                        let (a, b) = inner_line(
                            &r[rows[0].clone()],
                            &r[rows[1].clone()],
                            &d[rows[0].clone()],
                            &d[rows[1].clone()],
                        );
                        let weight = if i == j { 1.0 } else { 2.0 };
                        first[slot] = weight * a;
                        second[slot] = weight * b;
                    });
                },
            ),
        }
    }

    fn line_narrow<const W: usize>(
        &self,
        r: &[f64],
        d: &[f64],
        first: &mut [f64],
        second: &mut [f64],
    ) {
        let (r, _) = r.as_chunks::<W>();
        let (d, _) = d.as_chunks::<W>();
        self.each_slot(|slot, i, j| {
            let (ri, rj, di, dj) = (&r[i], &r[j], &d[i], &d[j]);
            let (mut a, mut b) = (0.0, 0.0);
            for k in 0..W {
                a += ri[k] * dj[k] + rj[k] * di[k];
                b += di[k] * dj[k];
            }
            let weight = if i == j { 1.0 } else { 2.0 };
            first[slot] = weight * a;
            second[slot] = weight * b;
        });
    }

    #[inline(always)]
    fn each_slot(&self, mut visit: impl FnMut(usize, usize, usize)) {
        for j in 0..self.order() {
            let range = self.column_starts[j] as usize..self.column_starts[j + 1] as usize;
            for slot in range {
                visit(slot, self.rows[slot] as usize, j);
            }
        }
    }
}

/// Computes a'b with independent partial sums.
#[inline(always)]
pub(super) fn inner(a: &[f64], b: &[f64]) -> f64 {
    let (a_lanes, a_rest) = a.as_chunks::<LANES>();
    let (b_lanes, b_rest) = b.as_chunks::<LANES>();
    let mut sums = [0.0; LANES];
    for (x, y) in a_lanes.iter().zip(b_lanes) {
        for k in 0..LANES {
            sums[k] += x[k] * y[k];
        }
    }
    let rest: f64 = a_rest.iter().zip(b_rest).map(|(x, y)| x * y).sum();
    total(&sums) + rest
}

/// Computes `ri.dj + rj.di` and `di.dj`.
#[inline(always)]
fn inner_line(ri: &[f64], rj: &[f64], di: &[f64], dj: &[f64]) -> (f64, f64) {
    let (ri_lanes, ri_rest) = ri.as_chunks::<LANES>();
    let (rj_lanes, rj_rest) = rj.as_chunks::<LANES>();
    let (di_lanes, di_rest) = di.as_chunks::<LANES>();
    let (dj_lanes, dj_rest) = dj.as_chunks::<LANES>();
    let (mut a, mut b) = ([0.0; LANES], [0.0; LANES]);
    for (((x, y), s), t) in ri_lanes.iter().zip(rj_lanes).zip(di_lanes).zip(dj_lanes) {
        for k in 0..LANES {
            a[k] += x[k] * t[k] + y[k] * s[k];
            b[k] += s[k] * t[k];
        }
    }
    let (mut first, mut second) = (total(&a), total(&b));
    for k in 0..ri_rest.len() {
        first += ri_rest[k] * dj_rest[k] + rj_rest[k] * di_rest[k];
        second += di_rest[k] * dj_rest[k];
    }
    (first, second)
}

#[inline(always)]
fn total(sums: &[f64; LANES]) -> f64 {
    let [a, b, c, d, e, f, g, h] = *sums;
    ((a + e) + (c + g)) + ((b + f) + (d + h))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn pattern() -> Pattern {
        // Upper triangle by (column, row): a path of six with one chord, whole diagonal.
        let positions = [
            (0, 0),
            (1, 0),
            (1, 1),
            (2, 1),
            (2, 2),
            (3, 2),
            (3, 3),
            (4, 0),
            (4, 3),
            (4, 4),
            (5, 4),
            (5, 5),
        ];
        Pattern::new(6, &positions)
    }

    fn numbers(seed: u64, length: usize) -> Vec<f64> {
        let mut stream = seed;
        (0..length)
            .map(|_| {
                stream = stream.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
                (stream >> 33) as f64 / (1u64 << 31) as f64 - 0.5
            })
            .collect()
    }

    #[test]
    fn products_with_rows_match_the_entrywise_sums_at_every_width() {
        let pattern = pattern();
        let values = numbers(3, pattern.stored());
        for width in [1, 2, 3, 4, 5, 7, 8, 15, 16, 17, 23, 40] {
            let (r, d) = (numbers(1, 6 * width), numbers(2, 6 * width));
            let mut out = vec![0.0; 6 * width];
            pattern.multiply_rows(&values, &r, width, &mut out);
            let mut expected = vec![0.0; 6 * width];
            for (slot, (i, j)) in pattern.upper().enumerate() {
                for k in 0..width {
                    expected[i * width + k] += values[slot] * r[j * width + k];
                    if i != j {
                        expected[j * width + k] += values[slot] * r[i * width + k];
                    }
                }
            }
            for (a, b) in out.iter().zip(&expected) {
                assert!((a - b).abs() < 1e-14, "width {width}: {a} and {b}");
            }
            let mut first = vec![0.0; pattern.stored()];
            let mut second = first.clone();
            let mut square = first.clone();
            pattern.line_values(&r, &d, width, &mut first, &mut second);
            pattern.square_values(&d, width, &mut square);
            let plain = |a: &[f64], b: &[f64], i: usize, j: usize| -> f64 {
                (0..width).map(|k| a[i * width + k] * b[j * width + k]).sum()
            };
            for (slot, (i, j)) in pattern.upper().enumerate() {
                let weight = if i == j { 1.0 } else { 2.0 };
                let a = weight * (plain(&r, &d, i, j) + plain(&d, &r, i, j));
                let b = weight * plain(&d, &d, i, j);
                assert!((first[slot] - a).abs() < 1e-14 && (second[slot] - b).abs() < 1e-14);
                assert!((square[slot] - b).abs() < 1e-14);
            }
        }
    }
}
