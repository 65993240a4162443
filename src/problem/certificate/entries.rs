//! Exact reading of a problem's coefficients, and sums of symmetric matrices compared entry by entry.

use super::{CertificateError, Stop};
use crate::problem::exact::Whole;
use crate::problem::{Coefficient, Functional};

/// Reads a float as a whole number.
pub(super) fn whole<W: Whole>(value: f64, place: impl Fn() -> String) -> Result<W, Stop> {
    W::of_f64(value)?.ok_or_else(|| CertificateError::NotWhole { place: place(), value }.into())
}

/// Sums symmetric matrices of one order and tests whether the sum is zero.
///
/// Entries are kept as a list, or in a dense triangle once the list would be as long: the memory is
/// never more than the entries that were added.
pub(super) struct EntrySum<W> {
    order: usize,
    list: Vec<(u64, W)>,
    triangle: Vec<W>,
}

impl<W: Whole> EntrySum<W> {
    pub(super) fn new(order: usize) -> Self {
        EntrySum { order, list: Vec::new(), triangle: Vec::new() }
    }

    fn triangle_size(&self) -> usize {
        self.order * (self.order + 1) / 2
    }

    /// Adds `value` to the entries (i, j) and (j, i).
    #[inline]
    pub(super) fn add(&mut self, i: usize, j: usize, value: W) -> Result<(), Stop> {
        let (row, column) = if i <= j { (i, j) } else { (j, i) };
        let key = column * (column + 1) / 2 + row;
        if !self.triangle.is_empty() {
            self.triangle[key].increase(&value)?;
            return Ok(());
        }
        self.list.push((key as u64, value));
        if self.list.len() >= self.triangle_size() {
            self.triangle = vec![W::of(0); self.triangle_size()];
            for (key, value) in std::mem::take(&mut self.list) {
                self.triangle[key as usize].increase(&value)?;
            }
        }
        Ok(())
    }

    /// Adds `factor * coefficient`.
    pub(super) fn add_coefficient(
        &mut self,
        coefficient: &Coefficient,
        factor: &W,
        place: impl Fn() -> String,
    ) -> Result<(), Stop> {
        match coefficient {
            Coefficient::Sparse(matrix) => {
                for (i, j, value) in matrix.iter() {
                    let value: W = whole(value, &place)?;
                    self.add(i, j, value.times(factor)?)?;
                }
            }
            Coefficient::Outer(sum) => {
                for term in &sum.terms {
                    let weight = whole::<W>(term.weight, &place)?.times(factor)?;
                    let mut vector: Vec<(usize, W)> = Vec::with_capacity(term.vector.len());
                    for (i, value) in term.vector.iter() {
                        vector.push((i, whole(value, &place)?));
                    }
                    self.add_outer(&vector, &weight)?;
                }
            }
        }
        Ok(())
    }

    /// Adds `weight * w w'`.
    pub(super) fn add_outer(&mut self, vector: &[(usize, W)], weight: &W) -> Result<(), Stop> {
        for (position, (j, right)) in vector.iter().enumerate() {
            let scaled = right.times(weight)?;
            for (i, left) in &vector[..=position] {
                self.add(*i, *j, left.times(&scaled)?)?;
            }
        }
        Ok(())
    }

    /// Returns the upper triangle of the sum, packed by columns: n(n+1)/2 numbers.
    pub(super) fn packed(self) -> Result<Vec<W>, Stop> {
        if !self.triangle.is_empty() {
            return Ok(self.triangle);
        }
        let mut packed = vec![W::of(0); self.triangle_size()];
        for (key, value) in &self.list {
            packed[*key as usize].increase(value)?;
        }
        Ok(packed)
    }

    /// Returns the place and the value of an entry of the sum that is not zero, if there is one.
    pub(super) fn first_nonzero(mut self) -> Result<Option<(usize, usize, W)>, Stop> {
        if !self.triangle.is_empty() {
            let found = self.triangle.iter().position(|value| !value.is_nought());
            return Ok(found.map(|key| {
                let (i, j) = unpack(key as u64);
                (i, j, self.triangle[key].clone())
            }));
        }
        self.list.sort_by_key(|entry| entry.0);
        let mut position = 0;
        while position < self.list.len() {
            let key = self.list[position].0;
            let mut sum = W::of(0);
            while position < self.list.len() && self.list[position].0 == key {
                sum.increase(&self.list[position].1)?;
                position += 1;
            }
            if !sum.is_nought() {
                let (i, j) = unpack(key);
                return Ok(Some((i, j, sum)));
            }
        }
        Ok(None)
    }
}

/// Returns row and column of a position in a packed upper triangle.
fn unpack(key: u64) -> (usize, usize) {
    let mut column = (((8 * key + 1).isqrt() - 1) / 2) as usize;
    while (column as u64 + 1) * (column as u64 + 2) / 2 <= key {
        column += 1;
    }
    (key as usize - column * (column + 1) / 2, column)
}

/// Returns `<F, V V'>` over one block, V by rows of `width` integers.
pub(super) fn value_on_factor<W: Whole>(
    coefficient: &Coefficient,
    rows: &[i64],
    width: usize,
    place: impl Fn() -> String,
) -> Result<W, Stop> {
    let row = |i: usize| &rows[i * width..(i + 1) * width];
    let mut total = W::of(0);
    match coefficient {
        Coefficient::Sparse(matrix) => {
            for (i, j, value) in matrix.iter() {
                let mut dot = W::of(0);
                for (a, b) in row(i).iter().zip(row(j)) {
                    dot.increase(&W::of(*a).times(&W::of(*b))?)?;
                }
                let copies = W::of(if i == j { 1 } else { 2 });
                let value: W = whole(value, &place)?;
                total.increase(&dot.times(&value)?.times(&copies)?)?;
            }
        }
        Coefficient::Outer(sum) => {
            for term in &sum.terms {
                let weight: W = whole(term.weight, &place)?;
                for column in 0..width {
                    let mut dot = W::of(0);
                    for (i, value) in term.vector.iter() {
                        let value: W = whole(value, &place)?;
                        dot.increase(&value.times(&W::of(row(i)[column]))?)?;
                    }
                    total.increase(&dot.times(&dot)?.times(&weight)?)?;
                }
            }
        }
    }
    Ok(total)
}

/// Returns `f'x` for the orthant part of a functional.
pub(super) fn value_on_orthant<W: Whole>(
    functional: &Functional,
    x: &[i64],
    place: impl Fn() -> String,
) -> Result<W, Stop> {
    let mut total = W::of(0);
    for (i, value) in functional.orthant.iter() {
        let value: W = whole(value, &place)?;
        total.increase(&value.times(&W::of(x[i]))?)?;
    }
    Ok(total)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn packed_positions_come_back() {
        let mut key = 0;
        for column in 0..60 {
            for row in 0..=column {
                assert_eq!(unpack(key), (row, column));
                key += 1;
            }
        }
        let column = 3_000_000u64;
        assert_eq!(unpack(column * (column + 1) / 2 + 7), (7, column as usize));
    }

    #[test]
    fn list_and_triangle_find_the_same_entry() {
        for copies in [1, 40] {
            let mut sum = EntrySum::<i128>::new(4);
            for _ in 0..copies {
                for (i, j) in [(0, 1), (3, 2), (1, 0)] {
                    let value = if i < j { 5 } else { -5 };
                    assert!(sum.add(i, j, value).is_ok());
                }
            }
            let found = sum.first_nonzero().unwrap_or_else(|_| panic!("no overflow here"));
            assert_eq!(found, Some((2, 3, -5 * copies)));
        }
    }
}
