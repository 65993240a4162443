//! Records by family and method, in plan order, then by method over all families.

use std::collections::{BTreeMap, BTreeSet};

use super::{Cell, Input, OVERALL};
use crate::record::Record;

/// Records of one family (or all) and one method.
pub(super) struct Group<'a> {
    pub(super) family: &'a str,
    pub(super) method: &'a str,
    pub(super) records: Vec<&'a Record>,
}

impl Group<'_> {
    /// Returns the first two cells of the group's row.
    pub(super) fn head(&self) -> Vec<Cell> {
        vec![Cell::word(self.family), Cell::word(self.method)]
    }

    /// Counts the records that pass.
    pub(super) fn count(&self, pass: impl Fn(&Record) -> bool) -> usize {
        self.records.iter().filter(|record| pass(record)).count()
    }

    /// Returns one figure of every record.
    pub(super) fn each(&self, figure: impl Fn(&Record) -> Option<f64>) -> Vec<Option<f64>> {
        self.records.iter().map(|record| figure(record)).collect()
    }

    /// Counts, among the instances whose optimum is known, those that pass on more than half of
    /// their repeats, and all of them.
    pub(super) fn instances(&self, pass: impl Fn(&Record) -> bool) -> (u64, u64) {
        let mut instances: BTreeMap<&str, (u64, u64)> = BTreeMap::new();
        for record in self.records.iter().filter(|record| record.optimum.is_some()) {
            let (passed, repeats) = instances.entry(&record.instance).or_default();
            *passed += u64::from(pass(record));
            *repeats += 1;
        }
        let most = instances.values().filter(|(passed, repeats)| 2 * passed > *repeats).count();
        (most as u64, instances.len() as u64)
    }
}

/// Lists the different words of a column, in the order of their first appearance.
pub(super) fn in_order<'a>(words: impl IntoIterator<Item = &'a str>) -> Vec<&'a str> {
    let mut seen = BTreeSet::new();
    words.into_iter().filter(|word| seen.insert(*word)).collect()
}

/// Groups the records.
pub(super) fn groups<'a>(input: &Input<'a>) -> Vec<Group<'a>> {
    let families = in_order(input.records.iter().map(|record| record.family.as_str()));
    let planned = input.methods.iter().map(|method| method.label.as_str());
    let methods =
        in_order(planned.chain(input.records.iter().map(|record| record.method.as_str())));
    let mut places: BTreeMap<(&str, &str), Vec<&Record>> = BTreeMap::new();
    let several = families.len() > 1;
    for record in input.records {
        places.entry((&record.family, &record.method)).or_default().push(record);
        if several {
            places.entry((OVERALL, &record.method)).or_default().push(record);
        }
    }
    let mut groups = Vec::new();
    let overall = several.then_some(OVERALL);
    for family in families.into_iter().chain(overall) {
        for &method in &methods {
            if let Some(records) = places.remove(&(family, method)) {
                groups.push(Group { family, method, records });
            }
        }
    }
    groups
}

/// Says how large the sample is, a sentence.
pub(super) fn sample(input: &Input<'_>) -> String {
    let instances: BTreeSet<&str> =
        input.records.iter().map(|record| record.instance.as_str()).collect();
    let noun = |count: usize, noun: &str| match count {
        1 => format!("1 {noun}"),
        _ => format!("{count} {noun}s"),
    };
    format!(
        "Sample: {} on {}.",
        noun(input.records.len(), "trial"),
        noun(instances.len(), "instance")
    )
}
