//! Effort: machine-independent work counts.

use super::group::{Group, groups, sample};
use super::summary::{largest, median_measured, shifted_geometric_mean};
use super::{Cell, Column, Input, Style, Table};
use crate::record::{Record, Verdict};

pub(super) fn table(input: &Input<'_>) -> Table {
    let caption = format!(
        "Work as the engines count it, the same on every machine but for late digits: floating-point operations by \
         the operation counts of the kernels, and how often the costly steps were done. Medians and largest values \
         are over all trials that count, whatever their verdict, so that a trial stopped at a limit counts with \
         what it did up to there. To solve: geometric mean over the solved trials alone; it favours a method that \
         solves only the easy ones, so read it beside the solved share. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instances."),
        Column::stable("method", "method", "Label of the method in the plan."),
        Column::stable("trials", "trials", "Number of trials."),
        Column::stable("solved", "solved", "Trials whose verdict is solved."),
        Column::stable("median_flops", "flops\nmedian", "Median of the floating-point operations."),
        Column::stable(
            "largest_flops",
            "flops\nlargest",
            "Most floating-point operations of a trial.",
        ),
        Column::stable(
            "flops_to_solve",
            "flops to\nsolve",
            "Geometric mean of the floating-point operations of the solved trials.",
        ),
        Column::stable(
            "median_eigendecompositions",
            "eigen-\ndec.",
            "Median number of symmetric eigendecompositions.",
        ),
        Column::stable("median_factorisations", "facto-\nris.", "Median number of factorisations."),
        Column::stable(
            "median_operator_products",
            "operator\nproducts",
            "Median number of applications of the constraint operator, its adjoint or the slack.",
        ),
        Column::stable(
            "median_inner_steps",
            "inner\nsteps",
            "Median number of inner steps; what a step is stands on the method's card.",
        ),
    ];
    let rows = groups(input).iter().map(row).collect();
    Table { name: "effort", title: "Effort by family and method", caption, columns, rows }
}

fn row(group: &Group<'_>) -> Vec<Cell> {
    let counted = |count: fn(&Record) -> Option<u64>| {
        group.each(|record| count(record).map(|count| count as f64))
    };
    let typical = |count: fn(&Record) -> Option<u64>, style| {
        Cell::real(median_measured(counted(count)), style)
    };
    let solving: Vec<f64> = group
        .records
        .iter()
        .filter(|record| record.verdict == Verdict::Solved)
        .filter_map(|record| record.flops.map(|flops| flops as f64))
        .collect();
    let mut row = group.head();
    row.extend([
        Cell::count(group.records.len()),
        Cell::count(group.count(|record| record.verdict == Verdict::Solved)),
        typical(|record| record.flops, Style::Power),
        Cell::real(largest(counted(|record| record.flops)), Style::Power),
        Cell::real(shifted_geometric_mean(&solving, 1.0), Style::Power),
        typical(|record| record.eigendecompositions, Style::Significant),
        typical(|record| record.factorisations, Style::Significant),
        typical(|record| record.operator_products, Style::Significant),
        typical(|record| record.inner_steps, Style::Significant),
    ]);
    row
}
