//! Failures: every verdict other than solved, how often, and one message as an example.

use super::group::{groups, sample};
use super::{Cell, Column, Input, OVERALL, Table};
use crate::record::Verdict;

pub(super) fn table(input: &Input<'_>) -> Table {
    let caption = format!(
        "Verdicts other than solved; the share is of the trials of that family and method, the example the first \
         message of that verdict in plan order. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instances."),
        Column::stable("method", "method", "Label of the method in the plan."),
        Column::stable("verdict", "verdict", "The referee's outcome."),
        Column::stable("trials", "trials", "Number of trials with this verdict."),
        Column::stable("share", "share", "Share of the trials of that family and method."),
        Column::stable(
            "stop_reason",
            "stop reason",
            "Why the method of the example stopped, in its own words.",
        ),
        Column::stable("example", "example", "Id of an example trial, which replay takes."),
        Column::stable("message", "message", "What referee and method say of the example."),
    ];
    let mut rows = Vec::new();
    for group in groups(input).iter().filter(|group| group.family != OVERALL) {
        for verdict in Verdict::ALL.into_iter().filter(|verdict| *verdict != Verdict::Solved) {
            let found: Vec<_> =
                group.records.iter().filter(|record| record.verdict == verdict).collect();
            let Some(first) = found.first() else { continue };
            let example = found.iter().find(|record| !record.message.is_empty()).unwrap_or(first);
            let mut row = group.head();
            row.extend([
                Cell::word(verdict.word()),
                Cell::count(found.len()),
                Cell::share(found.len(), group.records.len()),
                Cell::word(&example.stop_reason),
                Cell::word(&example.trial),
                Cell::word(&example.message),
            ]);
            rows.push(row);
        }
    }
    Table {
        name: "failures",
        title: "Trials that were not solved, by verdict",
        caption,
        columns,
        rows,
    }
}
