//! Records by family and method, in plan order, then by method over all families.

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
}

/// Lists the different words of a column, in the order of their first appearance.
pub(super) fn in_order<'a>(words: impl IntoIterator<Item = &'a str>) -> Vec<&'a str> {
    let mut seen: Vec<&str> = Vec::new();
    for word in words {
        if !seen.contains(&word) {
            seen.push(word);
        }
    }
    seen
}

/// Groups the records.
pub(super) fn groups<'a>(input: &Input<'a>) -> Vec<Group<'a>> {
    let families = in_order(input.records.iter().map(|record| record.family.as_str()));
    let planned = input.methods.iter().map(|method| method.label.as_str());
    let methods =
        in_order(planned.chain(input.records.iter().map(|record| record.method.as_str())));
    let mut groups = Vec::new();
    let mut add = |family: &'a str, of_family: &dyn Fn(&Record) -> bool| {
        for &method in &methods {
            let pass = |record: &&Record| record.method == method && of_family(record);
            let records: Vec<_> = input.records.iter().filter(pass).collect();
            if !records.is_empty() {
                groups.push(Group { family, method, records });
            }
        }
    };
    for &family in &families {
        add(family, &|record| record.family == family);
    }
    if families.len() > 1 {
        add(OVERALL, &|_| true);
    }
    groups
}

/// Says how large the sample is, a sentence.
pub(super) fn sample(input: &Input<'_>) -> String {
    let instances = in_order(input.records.iter().map(|record| record.instance.as_str())).len();
    format!("{} trials on {} instances.", input.records.len(), instances)
}
