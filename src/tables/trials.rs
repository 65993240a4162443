//! Instances: one row a trial, with what decided its verdict.

use super::group::sample;
use super::{Cell, Column, Input, Style, Table};
use crate::record::Record;

pub(super) fn table(input: &Input<'_>) -> Table {
    let [feasibility, objective, rank] = input.tolerance;
    let caption = format!(
        "Every trial, in plan order. Feasibility and objective error are those of the truncation to the target \
         rank, relative; solved needs at most {feasibility:e} and {objective:e}. Rank: eigenvalues of the answer \
         above {rank:e} times the largest, before truncation (the records hold three cut-offs). Dashes: nothing \
         was measured. All columns, untruncated, are in trials.csv. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instance."),
        Column::stable("method", "method", "Label of the method in the plan."),
        Column::stable("instance", "instance", "Id of the instance in the run."),
        Column::stable("trial", "trial", "Id of the trial, which replay takes.").in_files(),
        Column::stable(
            "order",
            "order",
            "Sum of the orders of all blocks and the nonnegative part.",
        ),
        Column::stable("constraints", "constr.", "Number of constraints."),
        Column::stable("target_rank", "target\nrank", "Rank bound of the instance."),
        Column::stable("verdict", "verdict", "The referee's outcome."),
        Column::stable("digits", "digits", "Correct digits of the objective."),
        Column::stable(
            "feasibility",
            "feasi-\nbility",
            "Relative residual ||A(X_r) - b|| / (1 + ||b||) of the truncation, with constraints scaled to norm 1 and X to ||b|| = 1.",
        ),
        Column::stable(
            "objective_error",
            "objective\nerror",
            "|objective - optimum| / (1 + |optimum|) of the truncation.",
        ),
        Column::stable("rank", "rank", "Rank of the untruncated answer at the cut-off 1e-6."),
        Column::stable("tail_ratio", "tail", "Eigenvalues beyond the target rank over the trace."),
        Column::stable("flops", "flops", "Floating-point operations."),
        Column::measured("cpu_s", "cpu s", "Processor time, in seconds."),
        Column::measured("wall_s", "wall s", "Wall time, in seconds."),
        Column::measured(
            "peak_mib",
            "peak\nMiB",
            "Memory held beyond the start of the trial, in MiB.",
        ),
    ];
    let rows = input.records.iter().map(row).collect();
    Table { name: "instances", title: "Every instance and method", caption, columns, rows }
}

fn row(record: &Record) -> Vec<Cell> {
    const MIB: f64 = 1024.0 * 1024.0;
    let count = |count: Option<u64>| count.map_or(Cell::Missing, Cell::Count);
    vec![
        Cell::word(&record.family),
        Cell::word(&record.method),
        Cell::word(&record.instance),
        Cell::word(&record.trial),
        Cell::Count(record.order),
        Cell::Count(record.constraints),
        Cell::Count(record.target_rank),
        Cell::word(record.verdict.word()),
        Cell::real(record.digits, Style::Fixed(1)),
        Cell::real(record.feasibility, Style::Power),
        Cell::real(record.objective_error, Style::Power),
        count(record.rank_at_1e6),
        Cell::real(record.tail_ratio, Style::Power),
        Cell::real(record.flops.map(|flops| flops as f64), Style::Power),
        Cell::real(record.cpu_s, Style::Significant),
        Cell::real(record.wall_s, Style::Significant),
        Cell::real(record.peak_bytes.map(|bytes| bytes as f64 / MIB), Style::Significant),
    ]
}
