//! Accuracy: how many trials are solved, and to how many digits.

use super::group::{Group, groups, sample};
use super::summary::{least, median};
use super::{Cell, Column, Input, Style, Table};
use crate::record::{Record, Verdict};

pub(super) fn table(input: &Input<'_>) -> Table {
    let [feasibility, objective, _] = input.tolerance;
    let caption = format!(
        "Judged after truncation to the target rank. Solved: feasible to {feasibility:e} and within {objective:e} \
         of the optimum, relative; near: so after the referee's restoration; feasible: all verdicts that are \
         feasible at the target rank, whatever their objective. The share is of the trials whose optimum is known. Digits: a trial without \
         a figure counts as 0; objective error: it counts as infinite. Dashes: no optimum known, or no median. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family"),
        Column::stable("method", "method"),
        Column::stable("trials", "trials"),
        Column::stable("solved", "solved"),
        Column::stable("near", "near"),
        Column::stable("feasible", "feasible"),
        Column::stable("solved_share", "solved\nshare"),
        Column::stable("median_digits", "digits\nmedian"),
        Column::stable("worst_digits", "digits\nworst"),
        Column::stable("median_objective_error", "objective\nerror, med"),
    ];
    let rows = groups(input).iter().map(row).collect();
    Table { name: "accuracy", title: "Accuracy by family and method", caption, columns, rows }
}

fn row(group: &Group<'_>) -> Vec<Cell> {
    let judged = |record: &Record| record.optimum.is_some();
    let known = group.count(judged);
    let solved = group.count(|record| record.verdict == Verdict::Solved);
    let digits: Vec<_> = group
        .records
        .iter()
        .filter(|record| judged(record))
        .map(|record| Some(record.digits.unwrap_or(0.0)))
        .collect();
    let errors =
        group.records.iter().filter(|record| judged(record)).map(|record| record.objective_error);
    let mut row = group.head();
    row.extend([
        Cell::count(group.records.len()),
        Cell::count(solved),
        Cell::count(group.count(|record| record.verdict == Verdict::Near)),
        Cell::count(group.count(|record| record.verdict.is_feasible())),
        if known == 0 { Cell::Missing } else { Cell::share(solved, known) },
        Cell::real(median(digits.iter().copied()), Style::Fixed(1)),
        Cell::real(least(digits.iter().copied()), Style::Fixed(1)),
        Cell::real(median(errors), Style::Power),
    ]);
    row
}
