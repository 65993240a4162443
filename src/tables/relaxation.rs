//! Relaxation: how far the convex relaxation's value lies below the known optimum.

use std::collections::BTreeMap;

use super::group::{groups, sample};
use super::summary::{largest, least, median_measured};
use super::{Cell, Column, Input, OVERALL, Style, Table};

pub(super) fn table(input: &Input<'_>) -> Table {
    let caption = format!(
        "From methods of the class relaxation: (optimum - value of the untruncated answer) / (1 + |optimum|), over \
         the trials that converged and whose optimum is known. Kind: what the family's card says. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instances."),
        Column::stable("method", "method", "Label of the method in the plan."),
        Column::stable("kind", "kind", "How the relaxation behaves by the family's card."),
        Column::stable("trials", "trials", "Number of trials."),
        Column::stable("converged", "converged", "Trials that stopped because they converged."),
        Column::stable(
            "median_gap",
            "gap\nmedian",
            "Median of (optimum - value) / (1 + |optimum|).",
        ),
        Column::stable("least_gap", "gap\nleast", "Least such gap."),
        Column::stable("largest_gap", "gap\nlargest", "Largest such gap."),
    ];
    let kinds: BTreeMap<&str, &str> = input
        .instances
        .iter()
        .map(|instance| (instance.instance.as_str(), instance.relaxation.as_str()))
        .collect();
    let relaxes = |label: &str| {
        input.methods.iter().any(|method| method.label == label && method.class == "relaxation")
    };
    let mut rows = Vec::new();
    for group in
        groups(input).iter().filter(|group| group.family != OVERALL && relaxes(group.method))
    {
        let gaps = group.each(|record| {
            let (optimum, value) = record.optimum.zip(record.raw_objective)?;
            (record.stop_reason == "converged").then(|| (optimum - value) / (1.0 + optimum.abs()))
        });
        let kind = group.records.first().and_then(|record| kinds.get(record.instance.as_str()));
        let mut row = group.head();
        row.extend([
            kind.filter(|kind| !kind.is_empty()).map_or(Cell::Missing, |kind| Cell::word(kind)),
            Cell::count(group.records.len()),
            Cell::count(group.count(|record| record.stop_reason == "converged")),
            Cell::real(median_measured(gaps.iter().copied()), Style::Power),
            Cell::real(least(gaps.iter().copied()), Style::Power),
            Cell::real(largest(gaps), Style::Power),
        ]);
        rows.push(row);
    }
    Table {
        name: "relaxation",
        title: "Value of the convex relaxation by family",
        caption,
        columns,
        rows,
    }
}
