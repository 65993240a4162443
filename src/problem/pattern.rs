//! A symmetric sparsity pattern: upper-triangle slots, and both triangles by rows for products.

/// A symmetric pattern of order n that holds the whole diagonal.
#[derive(Clone, Debug, PartialEq)]
pub struct Pattern {
    order: usize,
    pub(super) column_starts: Vec<u32>,
    pub(super) rows: Vec<u32>,
    pub(super) full_starts: Vec<u32>,
    pub(super) full_columns: Vec<u32>,
    pub(super) full_slots: Vec<u32>,
}

impl Pattern {
    /// Makes a pattern from strictly ascending `(column, row)` pairs with `row <= column`.
    #[track_caller]
    pub fn new(order: usize, positions: &[(u32, u32)]) -> Self {
        assert!(positions.is_sorted_by(|a, b| a < b), "positions ascend strictly");
        let mut column_starts = vec![0u32; order + 1];
        let mut counts = vec![0u32; order];
        for &(j, i) in positions {
            assert!(
                i <= j && (j as usize) < order,
                "position ({i}, {j}) is not in the upper triangle"
            );
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
}
