//! A symmetric sparsity pattern: upper-triangle slots, and both triangles by rows for products.

/// A symmetric pattern of order n that holds the whole diagonal.
#[derive(Clone, Debug, PartialEq)]
pub struct Pattern {
    order: usize,
    column_starts: Vec<u32>,
    rows: Vec<u32>,
    full_starts: Vec<u32>,
    full_columns: Vec<u32>,
    full_slots: Vec<u32>,
}

impl Pattern {
    /// Makes a pattern from strictly ascending `(column, row)` pairs with `row <= column`.
    #[track_caller]
    pub fn new(order: usize, positions: &[(u32, u32)]) -> Self {
        assert!(positions.is_sorted_by(|a, b| a < b), "positions ascend strictly");
        let mut column_starts = vec![0u32; order + 1];
        let mut counts = vec![0u32; order];
        for &(j, i) in positions {
            assert!(i <= j && (j as usize) < order, "position ({i}, {j}) is not in the upper triangle");
            column_starts[j as usize + 1] += 1;
            counts[i as usize] += 1;
            counts[j as usize] += u32::from(i != j);
        }
        for j in 0..order {
            column_starts[j + 1] += column_starts[j];
        }
        let mut full_starts = vec![0u32; order + 1];
        for i in 0..order {
            full_starts[i + 1] = full_starts[i] + counts[i];
        }
        let total = full_starts[order] as usize;
        let mut full_columns = vec![0u32; total];
        let mut full_slots = vec![0u32; total];
        let mut next = full_starts.clone();
        for (slot, &(j, i)) in positions.iter().enumerate() {
            for (row, column) in [(i, j), (j, i)].into_iter().take(if i == j { 1 } else { 2 }) {
                let place = next[row as usize] as usize;
                full_columns[place] = column;
                full_slots[place] = slot as u32;
                next[row as usize] += 1;
            }
        }
        let rows = positions.iter().map(|&(_, i)| i).collect();
        Pattern { order, column_starts, rows, full_starts, full_columns, full_slots }
    }

    /// Returns the order.
    pub fn order(&self) -> usize {
        self.order
    }

    /// Returns the number of upper-triangle slots.
    pub fn stored(&self) -> usize {
        self.rows.len()
    }

    /// Iterates over the positions `(row, column)` of the slots, in slot order.
    pub fn upper(&self) -> impl Iterator<Item = (usize, usize)> {
        (0..self.order).flat_map(move |j| {
            let range = self.column_starts[j] as usize..self.column_starts[j + 1] as usize;
            self.rows[range].iter().map(move |&i| (i as usize, j))
        })
    }

    /// Returns the slot of position `(i, j)` with `i <= j`, if the pattern holds it.
    pub fn slot(&self, i: usize, j: usize) -> Option<usize> {
        let start = self.column_starts[j] as usize;
        let end = self.column_starts[j + 1] as usize;
        self.rows[start..end].binary_search(&(i as u32)).ok().map(|offset| start + offset)
    }

    /// Iterates over `(column, slot)` of row i, both triangles.
    pub fn row(&self, i: usize) -> impl Iterator<Item = (usize, usize)> {
        let range = self.full_starts[i] as usize..self.full_starts[i + 1] as usize;
        self.full_columns[range.clone()]
            .iter()
            .zip(&self.full_slots[range])
            .map(|(&column, &slot)| (column as usize, slot as usize))
    }

    /// Computes `out = M V` for `values` on the pattern and V of n rows of `width` numbers.
    #[track_caller]
    pub fn multiply_rows(&self, values: &[f64], v: &[f64], width: usize, out: &mut [f64]) {
        assert!(v.len() == self.order * width && out.len() == v.len() && values.len() == self.stored());
        match width {
            1 => self.multiply_narrow::<1>(values, v, out),
            2 => self.multiply_narrow::<2>(values, v, out),
            3 => self.multiply_narrow::<3>(values, v, out),
            4 => self.multiply_narrow::<4>(values, v, out),
            _ => {
                for i in 0..self.order {
                    let target = &mut out[i * width..(i + 1) * width];
                    target.fill(0.0);
                    for (column, slot) in self.row(i) {
                        let source = &v[column * width..(column + 1) * width];
                        let value = values[slot];
                        for (t, s) in target.iter_mut().zip(source) {
                            *t += value * s;
                        }
                    }
                }
            }
        }
    }

    fn multiply_narrow<const W: usize>(&self, values: &[f64], v: &[f64], out: &mut [f64]) {
        let (v, _) = v.as_chunks::<W>();
        let (out, _) = out.as_chunks_mut::<W>();
        for (i, target) in out.iter_mut().enumerate() {
            let mut sum = [0.0; W];
            for (column, slot) in self.row(i) {
                let value = values[slot];
                for (s, x) in sum.iter_mut().zip(&v[column]) {
                    *s += value * x;
                }
            }
            *target = sum;
        }
    }
}
