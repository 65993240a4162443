//! Ranks of sparse whole-number matrices modulo the prime 2^61 - 1.
//!
//! A minor that does not vanish modulo a prime does not vanish over the rationals, so the rank
//! modulo the prime is a proved lower bound of the rank. Every shortcut here keeps that property:
//! whatever [`ResidueColumns::rank_up_to`] returns is a lower bound of the rational rank.

use super::modular::{add, inverse, multiply, residue, subtract};

/// Largest number of residues that a dense elimination may hold (256 MiB).
const DENSE_LIMIT: usize = 1 << 25;

/// Rows or columns that folding keeps beyond the smaller side of a dense remainder.
const FOLD_SURPLUS: usize = 16;

/// A sparse matrix modulo the prime, by columns.
#[derive(Clone, Debug)]
pub struct ResidueColumns {
    rows: usize,
    starts: Vec<usize>,
    indices: Vec<u32>,
    values: Vec<u64>,
}

impl ResidueColumns {
    /// Makes a matrix with `rows` rows and no column.
    #[track_caller]
    pub fn new(rows: usize) -> Self {
        assert!(u32::try_from(rows).is_ok(), "{rows} rows do not fit 32-bit indices");
        ResidueColumns { rows, starts: vec![0], indices: Vec::new(), values: Vec::new() }
    }

    /// Returns the number of columns.
    pub fn len(&self) -> usize {
        self.starts.len() - 1
    }

    /// Returns whether there is no column.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// Appends a column of residues; equal rows are added, zeros dropped.
    #[track_caller]
    pub fn push(&mut self, mut entries: Vec<(usize, u64)>) {
        entries.sort_unstable_by_key(|entry| entry.0);
        let mut position = 0;
        while position < entries.len() {
            let row = entries[position].0;
            assert!(row < self.rows, "row {row} of {}", self.rows);
            let mut sum = 0;
            while position < entries.len() && entries[position].0 == row {
                sum = add(sum, entries[position].1);
                position += 1;
            }
            if sum != 0 {
                self.indices.push(row as u32);
                self.values.push(sum);
            }
        }
        self.starts.push(self.indices.len());
    }

    /// Appends a column of machine integers.
    #[track_caller]
    pub fn push_integers(&mut self, entries: impl IntoIterator<Item = (usize, i64)>) {
        self.push(entries.into_iter().map(|(row, value)| (row, residue(value))).collect());
    }

    fn column(&self, j: usize) -> (&[u32], &[u64]) {
        let range = self.starts[j]..self.starts[j + 1];
        (&self.indices[range.clone()], &self.values[range])
    }

    /// Returns a proved lower bound of the rank, no larger than `enough`.
    ///
    /// It equals `min(enough, rank modulo the prime)` unless a remainder of more than 2^25 residues
    /// would have to be eliminated densely; then the columns counted so far are the bound. Columns
    /// with at most two nonzeros cost near-linear time; otherwise rows with a single nonzero are
    /// peeled off first, in linear time, and the rest is eliminated densely.
    pub fn rank_up_to(&self, enough: usize) -> usize {
        let all: Vec<usize> = (0..self.len()).collect();
        if self.is_graphic(&all) {
            return self.graphic_rank(&all).min(enough);
        }
        let (peeled, core) = self.peel();
        if peeled >= enough || core.is_empty() {
            return peeled.min(enough);
        }
        let rest = if self.is_graphic(&core) {
            self.graphic_rank(&core)
        } else {
            self.dense_rank(&core, enough - peeled)
        };
        (peeled + rest).min(enough)
    }

    /// Returns a proved lower bound of the rank; see [`Self::rank_up_to`].
    pub fn rank(&self) -> usize {
        self.rank_up_to(self.rows.min(self.len()))
    }

    fn is_graphic(&self, columns: &[usize]) -> bool {
        columns.iter().all(|&j| self.starts[j + 1] - self.starts[j] <= 2)
    }

    /// Returns the rank of columns with at most two nonzeros: each is an edge of a gain graph, and
    /// the rank is the number of touched vertices less the number of balanced components (Zaslavsky,
    /// "Biased graphs", Journal of Combinatorial Theory B 47, 1989: the frame matroid).
    fn graphic_rank(&self, columns: &[usize]) -> usize {
        let mut forest = GainForest::new(self.rows);
        for &j in columns {
            match self.column(j) {
                ([i], [_]) => forest.fix(*i as usize),
                ([i, k], [a, b]) => {
                    // A left null vector x obeys a x_i + b x_k = 0, so x_i = -(b/a) x_k.
                    let ratio = subtract(0, multiply(*b, inverse(*a)));
                    forest.join(*i as usize, *k as usize, ratio);
                }
                _ => {}
            }
        }
        forest.rank
    }

    /// Takes off, again and again, a row that has one nonzero among the columns left, with that
    /// column: it is independent of the others. Returns how many columns went and the others that
    /// are not empty.
    fn peel(&self) -> (usize, Vec<usize>) {
        let mut degree = vec![0u32; self.rows];
        // The exclusive or of the columns left in a row is the column itself when only one is left.
        let mut trace = vec![0usize; self.rows];
        for j in 0..self.len() {
            for &i in self.column(j).0 {
                degree[i as usize] += 1;
                trace[i as usize] ^= j;
            }
        }
        let mut gone = vec![false; self.len()];
        let mut queue: Vec<usize> = (0..self.rows).filter(|&i| degree[i] == 1).collect();
        let mut peeled = 0;
        while let Some(row) = queue.pop() {
            if degree[row] != 1 {
                continue;
            }
            let j = trace[row];
            gone[j] = true;
            peeled += 1;
            for &i in self.column(j).0 {
                let i = i as usize;
                degree[i] -= 1;
                trace[i] ^= j;
                if degree[i] == 1 {
                    queue.push(i);
                }
            }
        }
        let core = (0..self.len()).filter(|&j| !gone[j] && !self.column(j).0.is_empty()).collect();
        (peeled, core)
    }

    /// Returns the rank of the named columns by dense elimination, stopping at `enough`.
    fn dense_rank(&self, columns: &[usize], enough: usize) -> usize {
        let mut place = vec![u32::MAX; self.rows];
        let mut used = 0usize;
        for &j in columns {
            for &i in self.column(j).0 {
                if place[i as usize] == u32::MAX {
                    place[i as usize] = used as u32;
                    used += 1;
                }
            }
        }
        let enough = enough.min(used).min(columns.len());
        // A matrix much longer one way is folded first: a fixed combination of its rows, or of its
        // columns, cannot raise the rank, so reaching `enough` on the folded matrix proves it.
        let side = enough + FOLD_SURPLUS;
        let (height, width) = (used.min(side), columns.len().min(side));
        if height < used || width < columns.len() {
            if height * width > DENSE_LIMIT {
                return 0;
            }
            let folded = self.gather(columns, &place, height, width);
            let bound = eliminate(folded, height, enough);
            if bound >= enough || used.saturating_mul(columns.len()) > DENSE_LIMIT {
                return bound;
            }
        }
        if used.saturating_mul(columns.len()) > DENSE_LIMIT {
            return 0;
        }
        eliminate(self.gather(columns, &place, used, columns.len()), used, enough)
    }

    /// Writes the named columns densely, column after column of `height` residues; when `height` or
    /// `width` is short, rows or columns are added together with fixed odd-looking multipliers.
    fn gather(&self, columns: &[usize], place: &[u32], height: usize, width: usize) -> Vec<u64> {
        let mut dense = vec![0u64; height * width];
        for (position, &j) in columns.iter().enumerate() {
            let across = if position < width { 1 } else { scramble(position as u64, 1) };
            let target = &mut dense[position % width * height..][..height];
            let (indices, values) = self.column(j);
            for (&i, &value) in indices.iter().zip(values) {
                let row = place[i as usize] as usize;
                let down = if row < height { 1 } else { scramble(row as u64, 2) };
                let term = multiply(value, multiply(across, down));
                target[row % height] = add(target[row % height], term);
            }
        }
        dense
    }
}

/// Returns a fixed residue that looks random (the finaliser of SplitMix64; G. Steele, D. Lea,
/// C. Flood, "Fast splittable pseudorandom number generators", OOPSLA 2014).
fn scramble(index: u64, salt: u64) -> u64 {
    let mut z = index.wrapping_add(salt << 40).wrapping_add(1).wrapping_mul(0x9e37_79b9_7f4a_7c15);
    z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    (z ^ (z >> 31)) % super::modular::PRIME
}

/// Returns the rank of dense columns of length `height`, stopping at `enough`.
fn eliminate(mut dense: Vec<u64>, height: usize, enough: usize) -> usize {
    let mut rank = 0;
    let mut rest: &mut [u64] = &mut dense;
    while !rest.is_empty() && rank < enough {
        let (pivot, others) = rest.split_at_mut(height);
        if let Some(lead) = pivot.iter().position(|&value| value != 0) {
            rank += 1;
            let scale = subtract(0, inverse(pivot[lead]));
            for other in others.chunks_exact_mut(height) {
                if other[lead] != 0 {
                    let factor = multiply(scale, other[lead]);
                    for (target, &source) in other[lead..].iter_mut().zip(&pivot[lead..]) {
                        *target = add(*target, multiply(factor, source));
                    }
                }
            }
        }
        rest = others;
    }
    rank
}

/// A growing set of linearly independent vectors modulo the prime.
#[derive(Clone, Debug)]
pub struct Echelon {
    length: usize,
    /// Reduced vectors, each with 1 at its lead and 0 at the leads before it.
    vectors: Vec<(usize, Vec<u64>)>,
}

impl Echelon {
    /// Makes the empty set of vectors of one length.
    pub fn new(length: usize) -> Self {
        Echelon { length, vectors: Vec::new() }
    }

    /// Returns the number of vectors, which is their rank.
    pub fn rank(&self) -> usize {
        self.vectors.len()
    }

    /// Takes a vector of residues in and returns true if it is independent of the set modulo the
    /// prime; leaves the set alone and returns false otherwise.
    #[track_caller]
    pub fn admit(&mut self, mut vector: Vec<u64>) -> bool {
        assert_eq!(vector.len(), self.length, "the vectors of a set have one length");
        for (lead, known) in &self.vectors {
            if vector[*lead] != 0 {
                let factor = subtract(0, vector[*lead]);
                for (target, &source) in vector.iter_mut().zip(known) {
                    *target = add(*target, multiply(factor, source));
                }
            }
        }
        let Some(lead) = vector.iter().position(|&value| value != 0) else {
            return false;
        };
        let scale = inverse(vector[lead]);
        for value in &mut vector {
            *value = multiply(*value, scale);
        }
        self.vectors.push((lead, vector));
        true
    }
}

/// A union-find structure whose vertices carry ratios: `x_i = gain_i * x_root`.
struct GainForest {
    parent: Vec<u32>,
    gain: Vec<u64>,
    size: Vec<u32>,
    /// Whether the component of a root is fixed to zero (it holds an unbalanced cycle).
    fixed: Vec<bool>,
    rank: usize,
}

impl GainForest {
    fn new(vertices: usize) -> Self {
        GainForest {
            parent: (0..vertices as u32).collect(),
            gain: vec![1; vertices],
            size: vec![1; vertices],
            fixed: vec![false; vertices],
            rank: 0,
        }
    }

    /// Returns the root of `vertex` and the ratio of the vertex to it; halves the path on its way.
    fn find(&mut self, vertex: usize) -> (usize, u64) {
        let mut current = vertex;
        let mut ratio = 1;
        while self.parent[current] as usize != current {
            let up = self.parent[current] as usize;
            if self.parent[up] as usize != up {
                self.gain[current] = multiply(self.gain[current], self.gain[up]);
                self.parent[current] = self.parent[up];
            }
            ratio = multiply(ratio, self.gain[current]);
            current = self.parent[current] as usize;
        }
        (current, ratio)
    }

    /// Demands `x_vertex = 0`.
    fn fix(&mut self, vertex: usize) {
        let (root, _) = self.find(vertex);
        if !self.fixed[root] {
            self.fixed[root] = true;
            self.rank += 1;
        }
    }

    /// Demands `x_i = ratio * x_k`.
    fn join(&mut self, i: usize, k: usize, ratio: u64) {
        let (root_i, gain_i) = self.find(i);
        let (root_k, gain_k) = self.find(k);
        if root_i == root_k {
            if gain_i != multiply(ratio, gain_k) {
                self.fix(root_i);
            }
            return;
        }
        // gain_i x_root_i = ratio gain_k x_root_k.
        if self.fixed[root_i] && self.fixed[root_k] {
            return;
        }
        self.rank += 1;
        let (child, root, child_gain, root_gain) = if self.size[root_i] <= self.size[root_k] {
            (root_i, root_k, gain_i, multiply(ratio, gain_k))
        } else {
            (root_k, root_i, multiply(ratio, gain_k), gain_i)
        };
        self.parent[child] = root as u32;
        self.gain[child] = multiply(root_gain, inverse(child_gain));
        self.size[root] += self.size[child];
        self.fixed[root] |= self.fixed[child];
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use num_bigint::BigInt;
    use num_traits::Zero;
    use proptest::prelude::*;

    /// Rank over the rationals by fraction-free elimination in big integers.
    fn rational_rank(rows: usize, columns: &[Vec<(usize, i64)>]) -> usize {
        let mut matrix: Vec<Vec<BigInt>> = columns
            .iter()
            .map(|column| {
                let mut dense = vec![BigInt::zero(); rows];
                for (i, value) in column {
                    dense[*i] += *value;
                }
                dense
            })
            .collect();
        let mut rank = 0;
        for row in 0..rows {
            let Some(pivot) = (rank..matrix.len()).find(|&j| !matrix[j][row].is_zero()) else {
                continue;
            };
            matrix.swap(rank, pivot);
            for j in rank + 1..matrix.len() {
                let (a, b) = (matrix[rank][row].clone(), matrix[j][row].clone());
                for i in 0..rows {
                    matrix[j][i] = &matrix[j][i] * &a - &matrix[rank][i] * &b;
                }
            }
            rank += 1;
        }
        rank
    }

    fn residues(rows: usize, columns: &[Vec<(usize, i64)>]) -> ResidueColumns {
        let mut matrix = ResidueColumns::new(rows);
        for column in columns {
            matrix.push_integers(column.iter().copied());
        }
        matrix
    }

    fn columns(
        rows: usize,
        most: usize,
        count: std::ops::Range<usize>,
    ) -> impl Strategy<Value = Vec<Vec<(usize, i64)>>> {
        let entry = (0..rows, -2i64..=2);
        proptest::collection::vec(proptest::collection::vec(entry, 0..=most), count)
    }

    // A minor of these small matrices is far below the prime (Hadamard's inequality), so the rank
    // modulo the prime is the rational rank.
    proptest! {
        #[test]
        fn graphic_ranks_agree_with_rational_elimination(columns in columns(9, 2, 0..14)) {
            prop_assert_eq!(residues(9, &columns).rank(), rational_rank(9, &columns));
        }

        #[test]
        fn sparse_ranks_agree_with_rational_elimination(columns in columns(8, 4, 0..12)) {
            prop_assert_eq!(residues(8, &columns).rank(), rational_rank(8, &columns));
        }

        #[test]
        fn tall_and_wide_ranks_agree_with_rational_elimination(
            tall in columns(60, 30, 1..6), wide in columns(4, 6, 30..60)
        ) {
            prop_assert_eq!(residues(60, &tall).rank(), rational_rank(60, &tall));
            prop_assert_eq!(residues(4, &wide).rank(), rational_rank(4, &wide));
        }

        #[test]
        fn an_echelon_admits_as_many_columns_as_the_rank(columns in columns(8, 5, 0..12)) {
            let mut set = Echelon::new(8);
            for (count, column) in columns.iter().enumerate() {
                let mut dense = vec![0u64; 8];
                for (i, value) in column {
                    dense[*i] = add(dense[*i], residue(*value));
                }
                let before = rational_rank(8, &columns[..count]);
                let after = rational_rank(8, &columns[..=count]);
                prop_assert_eq!(set.admit(dense), after > before);
                prop_assert_eq!(set.rank(), after);
            }
        }

        #[test]
        fn a_bound_stops_the_count(columns in columns(8, 4, 0..12), enough in 0usize..6) {
            let rank = rational_rank(8, &columns);
            prop_assert_eq!(residues(8, &columns).rank_up_to(enough), rank.min(enough));
        }
    }

    #[test]
    fn a_signed_cycle_loses_one_rank_only_when_it_is_balanced() {
        let cycle =
            |last: i64| vec![vec![(0, 1), (1, -1)], vec![(1, 3), (2, -3)], vec![(0, last), (2, 2)]];
        assert_eq!(residues(3, &cycle(-2)).rank(), 2);
        assert_eq!(residues(3, &cycle(2)).rank(), 3);
    }

    #[test]
    fn a_long_path_has_full_rank_in_near_linear_time() {
        let length = 200_000;
        let mut matrix = ResidueColumns::new(length);
        for i in 1..length {
            matrix.push_integers([(i - 1, 5), (i, -7)]);
        }
        assert_eq!(matrix.rank(), length - 1);
    }
}
