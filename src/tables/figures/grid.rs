//! Which quantities of a family were varied on purpose, and so may be the axes of a figure.
//!
//! A quantity is the number of constraints, the target rank or a numeric parameter. A number of
//! constraints that differs between instances of the same parameters was drawn, not set, and is none.
//! Nothing is drawn here.

use std::collections::{BTreeMap, BTreeSet};

use super::digest::{Digest, distinct};
use super::style::clean;

/// Most values of an axis.
pub(super) const MOST: usize = 16;

/// A quantity with its value on each of some instances.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Quantity {
    pub(super) name: String,
    /// Values, in the order of the instances asked for.
    pub(super) of: Vec<Option<f64>>,
    /// Different values, rising.
    pub(super) values: Vec<f64>,
}

impl Quantity {
    fn new(name: &str, of: Vec<Option<f64>>) -> Self {
        let values = distinct(of.iter().flatten().copied());
        Quantity { name: clean(name), of, values }
    }

    fn varies(&self) -> bool {
        (2..=MOST).contains(&self.values.len())
    }

    /// Returns the place of an instance's value among the values.
    pub(super) fn place(&self, at: usize) -> Option<usize> {
        let value = self.of[at]?;
        self.values.binary_search_by(|other| other.total_cmp(&value)).ok()
    }

    /// Counts the different pairs with another quantity, over instances that have both.
    fn pairs(&self, other: &Quantity) -> usize {
        let pairs: BTreeSet<(usize, usize)> =
            (0..self.of.len()).filter_map(|at| Some((self.place(at)?, other.place(at)?))).collect();
        pairs.len()
    }

    /// Returns whether one quantity says what the other is, both ways.
    fn same_as(&self, other: &Quantity) -> bool {
        self.values.len() == other.values.len() && self.pairs(other) == self.values.len()
    }

    /// Returns whether the two span more than a line.
    pub(super) fn spans_with(&self, other: &Quantity) -> bool {
        self.pairs(other) > self.values.len().max(other.values.len())
    }
}

/// Returns the order as a quantity.
pub(super) fn order(digest: &Digest<'_>, subjects: &[usize]) -> Quantity {
    let of = |&subject: &usize| Some(digest.subjects[subject].order as f64);
    Quantity::new("order n", subjects.iter().map(of).collect())
}

/// Lists the quantities that vary over some instances of one family: constraints, target rank, then
/// parameters by name. What only repeats the order or an earlier one is left out.
pub(super) fn varied(digest: &Digest<'_>, subjects: &[usize]) -> Vec<Quantity> {
    let order = order(digest, subjects);
    let subject = |at: &usize| &digest.subjects[*at];
    let mut found: Vec<Quantity> = Vec::new();
    let mut add = |quantity: Quantity| {
        let repeats = order.same_as(&quantity)
            || found.iter().any(|earlier: &Quantity| earlier.same_as(&quantity));
        if quantity.varies() && !repeats {
            found.push(quantity);
        }
    };
    if constraints_are_set(digest, subjects) {
        let of = subjects.iter().map(|at| Some(subject(at).constraints as f64)).collect();
        add(Quantity::new("constraints", of));
    }
    let ranks = subjects.iter().map(|at| Some(subject(at).target_rank as f64)).collect();
    add(Quantity::new("target rank", ranks));
    let parameters: Vec<BTreeMap<&str, f64>> =
        subjects.iter().map(|at| numbers(subject(at).parameters)).collect();
    let names: BTreeSet<&str> = parameters.iter().flat_map(|own| own.keys().copied()).collect();
    for name in names {
        if !matches!(name, "constraints" | "rank" | "order" | "seed" | "index") {
            let of = parameters.iter().map(|own| own.get(name).copied()).collect();
            add(Quantity::new(name, of));
        }
    }
    found
}

/// Returns whether the number of constraints follows from the parameters, and not from order and
/// target rank alone.
fn constraints_are_set(digest: &Digest<'_>, subjects: &[usize]) -> bool {
    let mut by_parameters: BTreeMap<&str, u64> = BTreeMap::new();
    let mut by_size: BTreeMap<(u64, u64), u64> = BTreeMap::new();
    let mut free = false;
    for &at in subjects {
        let subject = &digest.subjects[at];
        if *by_parameters.entry(subject.parameters).or_insert(subject.constraints)
            != subject.constraints
        {
            return false;
        }
        let size = (subject.order, subject.target_rank);
        free |= *by_size.entry(size).or_insert(subject.constraints) != subject.constraints;
    }
    free
}

/// Reads `name=value` pairs whose values are numbers.
fn numbers(parameters: &str) -> BTreeMap<&str, f64> {
    parameters
        .split_whitespace()
        .filter_map(|pair| {
            let (name, value) = pair.split_once('=')?;
            let value: f64 = value.parse().ok()?;
            value.is_finite().then_some((name, value + 0.0))
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn words_and_infinities_are_no_numbers() {
        let found = numbers("constraints=auto order=20 noise=1e-3 cap=inf loose weight=");
        assert_eq!(found, BTreeMap::from([("order", 20.0), ("noise", 1e-3)]));
    }

    #[test]
    fn quantities_that_go_together_span_a_line_only() {
        let of = |values: &[f64]| values.iter().map(|value| Some(*value)).collect::<Vec<_>>();
        let one = Quantity::new("one", of(&[1.0, 1.0, 2.0, 2.0]));
        let same = Quantity::new("same", of(&[5.0, 5.0, 7.0, 7.0]));
        let other = Quantity::new("other", of(&[1.0, 2.0, 1.0, 2.0]));
        assert!(one.same_as(&same) && !one.spans_with(&same));
        assert!(!one.same_as(&other) && one.spans_with(&other));
    }
}
