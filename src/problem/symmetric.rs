//! Symmetric coefficient matrices: sparse upper triangles and sums of weighted outer products.

/// A sparse vector: strictly ascending indices and their values.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct SparseVector {
    /// Strictly ascending indices, from 0.
    pub indices: Vec<u32>,
    /// Values, as many as indices.
    pub values: Vec<f64>,
}

impl SparseVector {
    /// Gathers (index, value) pairs; equal indices are added and zeros dropped.
    pub fn gather(mut pairs: Vec<(u32, f64)>) -> Self {
        pairs.sort_by_key(|pair| pair.0);
        let mut out = SparseVector::default();
        for (index, value) in pairs {
            if out.indices.last() == Some(&index) {
                *out.values.last_mut().expect("as many values as indices") += value;
            } else {
                out.indices.push(index);
                out.values.push(value);
            }
        }
        let keep: Vec<bool> = out.values.iter().map(|value| *value != 0.0).collect();
        let mut flags = keep.iter();
        out.indices.retain(|_| *flags.next().expect("one flag an entry"));
        out.values.retain(|value| *value != 0.0);
        out
    }

    /// Iterates over (index, value).
    pub fn iter(&self) -> impl Iterator<Item = (usize, f64)> {
        self.indices.iter().zip(&self.values).map(|(&index, &value)| (index as usize, value))
    }

    /// Returns the number of stored entries.
    pub fn len(&self) -> usize {
        self.indices.len()
    }

    /// Returns whether no entry is stored.
    pub fn is_empty(&self) -> bool {
        self.indices.is_empty()
    }
}

/// A sparse symmetric matrix by its upper triangle, sorted by (column, row), each entry once.
#[derive(Clone, Debug, PartialEq)]
pub struct SparseSymmetric {
    order: usize,
    rows: Vec<u32>,
    columns: Vec<u32>,
    values: Vec<f64>,
}

impl SparseSymmetric {
    /// Gathers entries `(i, j, value)` of a symmetric matrix, each unordered pair standing for both
    /// triangles; equal positions are added, zeros dropped.
    #[track_caller]
    pub fn gather(order: usize, mut entries: Vec<(usize, usize, f64)>) -> Self {
        for entry in &mut entries {
            assert!(entry.0 < order && entry.1 < order, "entry {entry:?} beyond order {order}");
            if entry.0 > entry.1 {
                std::mem::swap(&mut entry.0, &mut entry.1);
            }
        }
        entries.sort_by_key(|&(i, j, _)| (j, i));
        let mut out =
            SparseSymmetric { order, rows: Vec::new(), columns: Vec::new(), values: Vec::new() };
        let mut pending: Option<(usize, usize, f64)> = None;
        for (i, j, value) in entries {
            match &mut pending {
                Some((pi, pj, sum)) if *pi == i && *pj == j => *sum += value,
                _ => {
                    out.push_nonzero(pending.take());
                    pending = Some((i, j, value));
                }
            }
        }
        out.push_nonzero(pending);
        out
    }

    fn push_nonzero(&mut self, entry: Option<(usize, usize, f64)>) {
        if let Some((i, j, value)) = entry
            && value != 0.0
        {
            self.rows.push(i as u32);
            self.columns.push(j as u32);
            self.values.push(value);
        }
    }

    /// Returns the order.
    pub fn order(&self) -> usize {
        self.order
    }

    /// Returns the number of stored upper-triangle entries.
    pub fn stored(&self) -> usize {
        self.values.len()
    }

    /// Iterates over stored entries `(row, column, value)` with row <= column.
    pub fn iter(&self) -> impl Iterator<Item = (usize, usize, f64)> {
        self.rows
            .iter()
            .zip(&self.columns)
            .zip(&self.values)
            .map(|((&i, &j), &value)| (i as usize, j as usize, value))
    }
}

/// One weighted outer product `weight * a a'`.
#[derive(Clone, Debug, PartialEq)]
pub struct OuterTerm {
    /// Weight.
    pub weight: f64,
    /// Vector a.
    pub vector: SparseVector,
}

/// A sum of weighted outer products.
#[derive(Clone, Debug, PartialEq)]
pub struct OuterSum {
    /// Order of the matrix.
    pub order: usize,
    /// Terms.
    pub terms: Vec<OuterTerm>,
}

/// A symmetric coefficient of one block.
#[derive(Clone, Debug, PartialEq)]
pub enum Coefficient {
    /// Stored entry by entry.
    Sparse(SparseSymmetric),
    /// Stored as outer products.
    Outer(OuterSum),
}

impl Coefficient {
    /// Returns the order.
    pub fn order(&self) -> usize {
        match self {
            Coefficient::Sparse(matrix) => matrix.order,
            Coefficient::Outer(sum) => sum.order,
        }
    }

    /// Returns whether every stored number is finite and every index within the order.
    pub fn is_finite(&self) -> bool {
        match self {
            Coefficient::Sparse(matrix) => matrix.values.iter().all(|value| value.is_finite()),
            Coefficient::Outer(sum) => sum.terms.iter().all(|term| {
                term.weight.is_finite()
                    && term.vector.values.iter().all(|value| value.is_finite())
                    && term.vector.indices.iter().all(|&index| (index as usize) < sum.order)
            }),
        }
    }

    /// Returns the matrix entry by entry; outer products are multiplied out.
    pub fn to_sparse(&self) -> SparseSymmetric {
        match self {
            Coefficient::Sparse(matrix) => matrix.clone(),
            Coefficient::Outer(sum) => {
                let mut entries = Vec::new();
                for term in &sum.terms {
                    for (position, (i, a)) in term.vector.iter().enumerate() {
                        for (j, b) in term.vector.iter().skip(position) {
                            entries.push((i, j, term.weight * a * b));
                        }
                    }
                }
                SparseSymmetric::gather(sum.order, entries)
            }
        }
    }

    /// Returns the Frobenius norm.
    pub fn norm(&self) -> f64 {
        match self {
            Coefficient::Sparse(matrix) => matrix
                .iter()
                .map(|(i, j, value)| if i == j { value * value } else { 2.0 * value * value })
                .sum::<f64>()
                .sqrt(),
            Coefficient::Outer(sum) if sum.terms.len() == 1 => {
                let term = &sum.terms[0];
                term.weight.abs() * term.vector.values.iter().map(|v| v * v).sum::<f64>()
            }
            Coefficient::Outer(_) => Coefficient::Sparse(self.to_sparse()).norm(),
        }
    }

    /// Returns the largest absolute entry.
    pub fn max_abs(&self) -> f64 {
        match self {
            Coefficient::Sparse(matrix) => matrix.values.iter().fold(0.0, |m, v| m.max(v.abs())),
            Coefficient::Outer(sum) if sum.terms.len() == 1 => {
                let term = &sum.terms[0];
                let largest = term.vector.values.iter().fold(0.0_f64, |m, v| m.max(v.abs()));
                term.weight.abs() * largest * largest
            }
            Coefficient::Outer(_) => Coefficient::Sparse(self.to_sparse()).max_abs(),
        }
    }
}
