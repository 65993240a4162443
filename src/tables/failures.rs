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
        Column::stable("family", "family"),
        Column::stable("method", "method"),
        Column::stable("verdict", "verdict"),
        Column::stable("trials", "trials"),
        Column::stable("share", "share"),
        Column::stable("stop_reason", "stop reason"),
        Column::stable("example", "example"),
        Column::stable("message", "message"),
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
