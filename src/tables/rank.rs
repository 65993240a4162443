//! Rank: how low the rank of the untruncated answers is.

use std::collections::BTreeMap;

use super::group::{Group, groups, in_order, sample};
use super::summary::{largest, median_measured};
use super::{Cell, Column, Input, Style, Table};

pub(super) fn table(input: &Input<'_>) -> Table {
    let caption = format!(
        "Rank of the answers before truncation: eigenvalues above 1e-6 times the largest, the largest count over \
         the blocks with a rank bound. Shares are of all trials; a trial without an answer is in neither. Bound: \
         the largest r with r(r+1)/2 <= constraints (Barvinok 1995, Pataki 1998). Tail: eigenvalues beyond the \
         target rank over the trace. Median, largest rank and tail are over the trials with an answer. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instances."),
        Column::stable("method", "method", "Label of the method in the plan."),
        Column::stable("trials", "trials", "Number of trials."),
        Column::stable("answers", "answers", "Trials with an answer whose rank was measured."),
        Column::stable("target", "target\nrank", "Rank bound of the instances, or its range."),
        Column::stable("median_rank", "rank\nmedian", "Median rank of the untruncated answers."),
        Column::stable("largest_rank", "rank\nlargest", "Largest rank of an untruncated answer."),
        Column::stable(
            "at_target_share",
            "at or below\ntarget",
            "Share of all trials whose answer has at most the target rank, untruncated.",
        ),
        Column::stable(
            "at_bound_share",
            "at or below\nbound",
            "Share of all trials whose answer has at most the rank of the Barvinok-Pataki bound.",
        ),
        Column::stable(
            "median_tail_ratio",
            "tail,\nmedian",
            "Median of the eigenvalues beyond the target rank over the trace.",
        ),
    ];
    let bounds: BTreeMap<&str, u64> = input
        .instances
        .iter()
        .map(|instance| (instance.instance.as_str(), instance.rank_bound))
        .collect();
    let rows = groups(input).iter().map(|group| row(group, &bounds)).collect();
    Table { name: "rank", title: "Rank by family and method", caption, columns, rows }
}

/// Shows one target or the range of targets.
fn targets(group: &Group<'_>) -> Cell {
    let least = group.records.iter().map(|record| record.target_rank).min().unwrap_or(0);
    let most = group.records.iter().map(|record| record.target_rank).max().unwrap_or(0);
    if least == most { Cell::Count(least) } else { Cell::Word(format!("{least}-{most}")) }
}

fn row(group: &Group<'_>, bounds: &BTreeMap<&str, u64>) -> Vec<Cell> {
    let trials = group.records.len();
    let rank = group.each(|record| record.rank_at_1e6.map(|rank| rank as f64));
    let at_target =
        group.count(|record| record.rank_at_1e6.is_some_and(|rank| rank <= record.target_rank));
    let bounded = in_order(group.records.iter().map(|record| record.instance.as_str()))
        .iter()
        .all(|instance| bounds.contains_key(instance));
    let at_bound = group.count(|record| {
        let bound = bounds.get(record.instance.as_str());
        record.rank_at_1e6.zip(bound.copied()).is_some_and(|(rank, bound)| rank <= bound)
    });
    let mut row = group.head();
    row.extend([
        Cell::count(trials),
        Cell::count(rank.iter().flatten().count()),
        targets(group),
        Cell::real(median_measured(rank.iter().copied()), Style::Significant),
        largest(rank).map_or(Cell::Missing, |rank| Cell::Count(rank as u64)),
        Cell::share(at_target, trials),
        if bounded { Cell::share(at_bound, trials) } else { Cell::Missing },
        Cell::real(median_measured(group.each(|record| record.tail_ratio)), Style::Power),
    ]);
    row
}
