//! Compiling a problem: which parts of a block are sparse, which are long outer products, and whether
//! the block is held on its aggregate pattern or dense.

use super::super::pattern::Pattern;
use super::super::{Coefficient, Functional, OuterSum, OuterTerm, Problem, SparseSymmetric};
use super::{BlockOperator, CostPart, Entries, OuterBatch, Storage, add_both};
use crate::linalg::Mat;
use std::sync::Arc;

/// A vector is long when its outer product has more than this many entries per row of the block.
const LONG_ENTRIES_PER_ROW: usize = 4;
/// A block is held dense when its pattern fills more than this share of the matrix.
const DENSE_SHARE: f64 = 0.25;
/// Blocks up to this order are held dense.
const SMALL_ORDER: usize = 24;

fn is_long(term: &OuterTerm, order: usize) -> bool {
    term.vector.len() * term.vector.len() > 2 * LONG_ENTRIES_PER_ROW * order.max(SMALL_ORDER)
}

fn split(coefficient: &Coefficient) -> (Option<SparseSymmetric>, Vec<&OuterTerm>) {
    match coefficient {
        Coefficient::Sparse(matrix) => (Some(matrix.clone()), Vec::new()),
        Coefficient::Outer(sum) => {
            let (long, short): (Vec<&OuterTerm>, Vec<&OuterTerm>) =
                sum.terms.iter().partition(|term| is_long(term, sum.order));
            let sparse = (!short.is_empty()).then(|| {
                let terms = short.into_iter().cloned().collect();
                Coefficient::Outer(OuterSum { order: sum.order, terms }).to_sparse()
            });
            (sparse, long)
        }
    }
}

pub(super) fn compile_block(problem: &Problem, index: usize, storage: Storage) -> BlockOperator {
    let order = problem.blocks()[index].order;
    let mut entries = Entries::default();
    let mut outer: Vec<(usize, &OuterTerm)> = Vec::new();
    for (id, functional) in problem.constraints().iter().enumerate() {
        let Some(part) = functional.part(index) else { continue };
        let (sparse, long) = split(part);
        if let Some(matrix) = sparse {
            entries.push_group(id, &matrix);
        }
        outer.extend(long.into_iter().map(|term| (id, term)));
    }
    if entries.starts.is_empty() {
        entries.starts.push(0);
    }
    let cost = cost_entries(problem.cost(), index, order);
    let hold_dense = match storage {
        Storage::Automatic => !outer.is_empty(),
        Storage::Dense => true,
        Storage::Factored => false,
    };
    let pattern = if hold_dense { None } else { aggregate(order, &entries, &cost) };
    if let Some(pattern) = &pattern {
        entries.slots = slots_of(pattern, &entries);
    }
    let cost = match &pattern {
        Some(pattern) => {
            let slots = slots_of(pattern, &cost);
            CostPart::Sparse(Entries { slots, ..cost })
        }
        None if cost.values.len() as f64 > DENSE_SHARE * 0.5 * (order * order) as f64 => {
            let mut matrix = Mat::zeros(order, order);
            for k in 0..cost.values.len() {
                add_both(&mut matrix, cost.rows[k], cost.columns[k], cost.values[k]);
            }
            CostPart::Dense(matrix)
        }
        None => CostPart::Sparse(cost),
    };
    BlockOperator { order, entries, outer: batch(order, &outer), cost, pattern }
}

fn cost_entries(cost: &Functional, index: usize, order: usize) -> Entries {
    let mut entries = Entries::default();
    match cost.part(index) {
        Some(part) => entries.push_group(0, &part.to_sparse()),
        None => entries.push_group(0, &SparseSymmetric::gather(order, Vec::new())),
    }
    entries
}

fn aggregate(order: usize, entries: &Entries, cost: &Entries) -> Option<Arc<Pattern>> {
    if order <= SMALL_ORDER {
        return None;
    }
    let positions = |list: &Entries| -> Vec<(u32, u32)> {
        list.columns.iter().copied().zip(list.rows.iter().copied()).collect()
    };
    let mut all = positions(entries);
    all.extend(positions(cost));
    all.extend((0..order as u32).map(|i| (i, i)));
    all.sort_unstable();
    all.dedup();
    let full = (2 * all.len() - order) as f64;
    if full > DENSE_SHARE * (order * order) as f64 {
        return None;
    }
    Some(Arc::new(Pattern::new(order, &all)))
}

fn slots_of(pattern: &Pattern, entries: &Entries) -> Vec<u32> {
    entries
        .rows
        .iter()
        .zip(&entries.columns)
        .map(|(&i, &j)| {
            pattern.slot(i as usize, j as usize).expect("entry of the aggregate") as u32
        })
        .collect()
}

fn batch(order: usize, terms: &[(usize, &OuterTerm)]) -> Option<OuterBatch> {
    if terms.is_empty() {
        return None;
    }
    let mut vectors = Mat::zeros(order, terms.len());
    for (k, (_, term)) in terms.iter().enumerate() {
        for (i, value) in term.vector.iter() {
            vectors[(i, k)] = value;
        }
    }
    Some(OuterBatch {
        ids: terms.iter().map(|(id, _)| *id as u32).collect(),
        weights: terms.iter().map(|(_, term)| term.weight).collect(),
        vectors,
    })
}
