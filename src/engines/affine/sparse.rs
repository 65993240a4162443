//! Sparse Cholesky factorisation of AA*, ordered by approximate minimum degree.
//!
//! Ordering: quotient-graph elimination with element absorption and the sum of element sizes as the degree
//! (P. Amestoy, T. Davis, I. Duff, SIAM J. Matrix Anal. Appl. 17:886-905, 1996, without their supervariables and
//! mass elimination). Numbers: the up-looking factorisation over elimination-tree reaches (T. Davis, Direct Methods
//! for Sparse Linear Systems, SIAM 2006, chapter 4). Both from memory. It is for a matrix that is factored once and
//! solved with thousands of times, not for refactoring.

use std::cmp::Reverse;
use std::collections::BinaryHeap;

/// A symmetric matrix by the upper triangle of its permuted form, column by column.
#[derive(Clone, Debug)]
pub struct SparseGram {
    /// `order[k]` is the index that comes k-th.
    order: Vec<u32>,
    starts: Vec<usize>,
    rows: Vec<u32>,
    values: Vec<f64>,
}

/// Its Cholesky factor.
#[derive(Clone, Debug)]
pub struct SparseFactor {
    starts: Vec<usize>,
    rows: Vec<u32>,
    values: Vec<f64>,
}

impl SparseGram {
    /// Makes the matrix of order `m` from entries `(row, column, value)`, row <= column, equal places being added,
    /// and chooses its elimination order.
    pub fn new(m: usize, mut entries: Vec<(u32, u32, f64)>) -> Self {
        entries.sort_by_key(|&(i, j, _)| (j, i));
        entries.dedup_by(|next, kept| {
            let same = (next.0, next.1) == (kept.0, kept.1);
            if same {
                kept.2 += next.2;
            }
            same
        });
        let order = minimum_degree(m, &entries);
        let mut place = vec![0u32; m];
        for (k, &index) in order.iter().enumerate() {
            place[index as usize] = k as u32;
        }
        for entry in &mut entries {
            let (a, b) = (place[entry.0 as usize], place[entry.1 as usize]);
            (entry.0, entry.1) = (a.min(b), a.max(b));
        }
        entries.sort_by_key(|&(i, j, _)| (j, i));
        let mut starts = vec![0; m + 1];
        for &(_, j, _) in &entries {
            starts[j as usize + 1] += 1;
        }
        for j in 0..m {
            starts[j + 1] += starts[j];
        }
        SparseGram {
            order,
            starts,
            rows: entries.iter().map(|entry| entry.0).collect(),
            values: entries.iter().map(|entry| entry.2).collect(),
        }
    }

    /// Returns the order of the matrix.
    pub fn order(&self) -> usize {
        self.order.len()
    }

    /// Returns the number of entries of its Cholesky factor, or nothing when there are more than `most`.
    pub fn fill(&self, most: usize) -> Option<usize> {
        let m = self.order();
        let parent = self.tree();
        let (mut mark, mut path) = (vec![usize::MAX; m], Vec::with_capacity(m));
        let mut count = m;
        for k in 0..m {
            self.reach(k, &parent, &mut mark, &mut path);
            count += path.len();
            if count > most {
                return None;
            }
        }
        Some(count)
    }

    /// Factors the matrix with `shift` added to its diagonal.
    ///
    /// # Errors
    /// The pivot that is not a positive number, counted in the original order.
    pub fn factor(&self, shift: f64) -> Result<SparseFactor, usize> {
        let m = self.order();
        let parent = self.tree();
        let (mut mark, mut path) = (vec![usize::MAX; m], Vec::with_capacity(m));
        let mut starts = vec![0; m + 1];
        for k in 0..m {
            self.reach(k, &parent, &mut mark, &mut path);
            starts[k + 1] += 1;
            path.iter().for_each(|&i| starts[i + 1] += 1);
        }
        for j in 0..m {
            starts[j + 1] += starts[j];
        }
        let mut next = starts.clone();
        let (mut rows, mut values) = (vec![0u32; starts[m]], vec![0.0; starts[m]]);
        let mut x = vec![0.0; m];
        mark.fill(usize::MAX);
        for k in 0..m {
            self.reach(k, &parent, &mut mark, &mut path);
            let mut pivot = shift;
            for p in self.starts[k]..self.starts[k + 1] {
                let i = self.rows[p] as usize;
                if i == k {
                    pivot += self.values[p];
                } else {
                    x[i] = self.values[p];
                }
            }
            for &i in &path {
                let entry = x[i] / values[starts[i]];
                x[i] = 0.0;
                for p in starts[i] + 1..next[i] {
                    x[rows[p] as usize] -= values[p] * entry;
                }
                pivot -= entry * entry;
                rows[next[i]] = k as u32;
                values[next[i]] = entry;
                next[i] += 1;
            }
            if !(pivot > 0.0 && pivot.is_finite()) {
                return Err(self.order[k] as usize);
            }
            rows[next[k]] = k as u32;
            values[next[k]] = pivot.sqrt();
            next[k] += 1;
        }
        Ok(SparseFactor { starts, rows, values })
    }

    /// Subtracts the product with `x` from `y`, both in elimination order.
    pub fn subtract_product(&self, x: &[f64], y: &mut [f64]) {
        for j in 0..self.order() {
            for p in self.starts[j]..self.starts[j + 1] {
                let i = self.rows[p] as usize;
                y[i] -= self.values[p] * x[j];
                if i != j {
                    y[j] -= self.values[p] * x[i];
                }
            }
        }
    }

    /// Returns the number of stored entries.
    pub fn stored(&self) -> usize {
        self.values.len()
    }

    /// Returns the largest diagonal entry.
    pub fn largest_diagonal(&self) -> f64 {
        let diagonal = (0..self.order()).filter_map(|j| {
            let range = self.starts[j]..self.starts[j + 1];
            range.last().filter(|&p| self.rows[p] as usize == j).map(|p| self.values[p])
        });
        diagonal.fold(0.0, f64::max)
    }

    /// Writes `from` in elimination order.
    pub fn permute(&self, from: &[f64], to: &mut [f64]) {
        for (target, &index) in to.iter_mut().zip(&self.order) {
            *target = from[index as usize];
        }
    }

    /// Undoes [`Self::permute`].
    pub fn restore(&self, from: &[f64], to: &mut [f64]) {
        for (value, &index) in from.iter().zip(&self.order) {
            to[index as usize] = *value;
        }
    }

    /// Returns the elimination tree; roots are their own parents.
    fn tree(&self) -> Vec<usize> {
        let m = self.order();
        let mut parent: Vec<usize> = (0..m).collect();
        let mut ancestor: Vec<usize> = (0..m).collect();
        for k in 0..m {
            for p in self.starts[k]..self.starts[k + 1] {
                let mut i = self.rows[p] as usize;
                while i != k && i < k {
                    let next = ancestor[i];
                    ancestor[i] = k;
                    if next == i {
                        parent[i] = k;
                        break;
                    }
                    i = next;
                }
            }
        }
        parent
    }

    /// Fills `path` with the columns of row k of the factor, each before its ancestors.
    fn reach(&self, k: usize, parent: &[usize], mark: &mut [usize], path: &mut Vec<usize>) {
        path.clear();
        mark[k] = k;
        for p in self.starts[k]..self.starts[k + 1] {
            let mut i = self.rows[p] as usize;
            while mark[i] != k {
                mark[i] = k;
                path.push(i);
                i = parent[i];
            }
        }
        // Indices grow towards the root.
        path.sort_unstable();
    }
}

impl SparseFactor {
    /// Replaces `x`, in elimination order, by the solution of L L' x = x.
    pub fn solve(&self, x: &mut [f64]) {
        let m = x.len();
        for j in 0..m {
            let (first, end) = (self.starts[j], self.starts[j + 1]);
            x[j] /= self.values[first];
            for p in first + 1..end {
                x[self.rows[p] as usize] -= self.values[p] * x[j];
            }
        }
        for j in (0..m).rev() {
            let (first, end) = (self.starts[j], self.starts[j + 1]);
            let mut sum = x[j];
            for p in first + 1..end {
                sum -= self.values[p] * x[self.rows[p] as usize];
            }
            x[j] = sum / self.values[first];
        }
    }

    /// Returns the number of stored entries.
    pub fn stored(&self) -> usize {
        self.values.len()
    }

    /// Returns the flops of the factorisation: the sum of the squares of the column lengths.
    pub fn flops(&self) -> u64 {
        self.starts.windows(2).map(|pair| ((pair[1] - pair[0]) as u64).pow(2)).sum()
    }
}

/// Orders the indices so that eliminating them fills little in.
fn minimum_degree(m: usize, entries: &[(u32, u32, f64)]) -> Vec<u32> {
    let mut neighbours: Vec<Vec<u32>> = vec![Vec::new(); m];
    for &(i, j, _) in entries {
        if i != j {
            neighbours[i as usize].push(j);
            neighbours[j as usize].push(i);
        }
    }
    // An eliminated index becomes an element: the clique of what was left of its neighbours.
    let mut elements: Vec<Vec<u32>> = vec![Vec::new(); m];
    let mut memberships: Vec<Vec<u32>> = vec![Vec::new(); m];
    let mut eliminated = vec![false; m];
    let mut mark = vec![u32::MAX; m];
    let mut degree: Vec<usize> = neighbours.iter().map(Vec::len).collect();
    let mut queue: BinaryHeap<Reverse<(usize, u32)>> =
        degree.iter().enumerate().map(|(i, &d)| Reverse((d, i as u32))).collect();
    let mut order = Vec::with_capacity(m);
    while let Some(Reverse((d, pivot))) = queue.pop() {
        let p = pivot as usize;
        if eliminated[p] || d != degree[p] {
            continue;
        }
        eliminated[p] = true;
        order.push(pivot);
        mark[p] = pivot;
        let mut clique = Vec::new();
        let absorbed = std::mem::take(&mut memberships[p]);
        let own = std::mem::take(&mut neighbours[p]);
        let around = absorbed.iter().flat_map(|&e| &elements[e as usize]).chain(&own);
        for &i in around {
            if !eliminated[i as usize] && mark[i as usize] != pivot {
                mark[i as usize] = pivot;
                clique.push(i);
            }
        }
        for &e in &absorbed {
            elements[e as usize] = Vec::new();
        }
        for &i in &clique {
            let i = i as usize;
            // What the new element joins needs no edge of its own.
            neighbours[i].retain(|&j| mark[j as usize] != pivot && !eliminated[j as usize]);
            memberships[i].retain(|&e| !elements[e as usize].is_empty());
            memberships[i].push(pivot);
            let others = memberships[i].iter().map(|&e| elements[e as usize].len());
            degree[i] = (neighbours[i].len() + others.sum::<usize>() + clique.len()).min(m);
            queue.push(Reverse((degree[i], i as u32)));
        }
        elements[p] = clique;
    }
    order
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::seed::Stream;

    /// Draws a diagonally dominant matrix with `count` places off the diagonal.
    fn random(m: usize, count: usize, draw: &mut Stream) -> Vec<(u32, u32, f64)> {
        let mut entries: Vec<(u32, u32, f64)> = Vec::new();
        let mut weight = vec![1.0; m];
        for _ in 0..count {
            let (i, j) = (draw.index(m), draw.index(m));
            if i != j {
                let value = draw.normal();
                entries.push((i.min(j) as u32, i.max(j) as u32, value));
                weight[i] += value.abs();
                weight[j] += value.abs();
            }
        }
        entries.extend(weight.iter().enumerate().map(|(i, w)| (i as u32, i as u32, *w)));
        entries
    }

    #[test]
    fn solutions_have_no_residual() {
        let mut draw = Stream::named(2, &["sparse gram"]);
        for (m, count) in [(1, 0), (2, 1), (30, 40), (200, 300), (200, 4000)] {
            let entries = random(m, count, &mut draw);
            let gram = SparseGram::new(m, entries);
            let factor = gram.factor(0.0).unwrap();
            assert_eq!(gram.fill(usize::MAX), Some(factor.stored()));
            let b: Vec<f64> = (0..m).map(|_| draw.normal()).collect();
            let (mut x, mut r) = (vec![0.0; m], vec![0.0; m]);
            gram.permute(&b, &mut x);
            r.copy_from_slice(&x);
            factor.solve(&mut x);
            gram.subtract_product(&x, &mut r);
            let worst = r.iter().fold(0.0_f64, |w, v| w.max(v.abs()));
            assert!(worst < 1e-11, "{m} {count}: {worst:e}");
            let mut back = vec![0.0; m];
            gram.permute(&b, &mut x);
            gram.restore(&x, &mut back);
            assert_eq!(b, back);
        }
    }

    #[test]
    fn an_arrow_and_a_band_fill_nothing_in() {
        // A dense row comes last; a chain is eliminated from its ends.
        let m = 300u32;
        let mut arrow: Vec<(u32, u32, f64)> = (0..m).map(|i| (i, i, 400.0)).collect();
        arrow.extend((1..m).map(|j| (0, j, 1.0)));
        assert_eq!(SparseGram::new(m as usize, arrow).fill(usize::MAX), Some(2 * 300 - 1));
        let mut chain: Vec<(u32, u32, f64)> = (0..m).map(|i| (i, i, 3.0)).collect();
        chain.extend((1..m).map(|j| (j - 1, j, 1.0)));
        assert_eq!(SparseGram::new(m as usize, chain).fill(usize::MAX), Some(2 * 300 - 1));
    }

    #[test]
    fn an_indefinite_matrix_is_refused_with_its_pivot() {
        let entries = vec![(0, 0, 1.0), (0, 1, 2.0), (1, 1, 1.0)];
        assert!(SparseGram::new(2, entries).factor(0.0).is_err());
    }
}
