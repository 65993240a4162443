//! Runtime: time, memory and machine-independent effort.

use super::group::{Group, groups, sample};
use super::summary::{largest, median_measured, shifted_geometric_mean};
use super::{Cell, Column, Input, Style, Table};
use crate::record::Record;

/// Shift of the geometric mean, in seconds: times well below it hardly move the mean.
const SHIFT_S: f64 = 1.0;

pub(super) fn table(input: &Input<'_>) -> Table {
    let caption = format!(
        "Seconds of processor (cpu) and wall time of the method alone, on one thread. Medians and largest values \
         are over all trials, whatever their verdict. Mean: geometric, shifted by {SHIFT_S} s, of processor time, \
         where a trial that is not solved, near or feasible counts as the wall-time limit of {} s. Peak: memory \
         held beyond the start of the trial, in MiB. Effort: median flops, eigendecompositions, factorisations, \
         operator products and inner steps. {}",
        input.wall_limit_s,
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family"),
        Column::stable("method", "method"),
        Column::stable("trials", "trials"),
        Column::measured("median_cpu_s", "cpu s\nmedian"),
        Column::measured("largest_cpu_s", "cpu s\nlargest"),
        Column::measured("shifted_mean_cpu_s", "cpu s\nmean"),
        Column::measured("median_wall_s", "wall s\nmedian"),
        Column::measured("largest_wall_s", "wall s\nlargest").in_files(),
        Column::measured("median_peak_mib", "peak MiB\nmedian").in_files(),
        Column::measured("largest_peak_mib", "MiB\npeak"),
        Column::stable("median_flops", "flops\nmedian"),
        Column::stable("median_eigendecompositions", "eigen-\ndec."),
        Column::stable("median_factorisations", "facto-\nris."),
        Column::stable("median_operator_products", "operator\nproducts").in_files(),
        Column::stable("median_inner_steps", "inner\nsteps"),
    ];
    let rows = groups(input).iter().map(|group| row(group, input.wall_limit_s)).collect();
    Table {
        name: "runtime",
        title: "Runtime and effort by family and method",
        caption,
        columns,
        rows,
    }
}

fn row(group: &Group<'_>, limit: f64) -> Vec<Cell> {
    const MIB: f64 = 1024.0 * 1024.0;
    let cpu = group.each(|record| record.cpu_s);
    let wall = group.each(|record| record.wall_s);
    let peak = group.each(|record| record.peak_bytes.map(|bytes| bytes as f64 / MIB));
    let charged: Vec<f64> = group
        .records
        .iter()
        .map(
            |record| {
                if record.verdict.is_success() { record.cpu_s.unwrap_or(limit) } else { limit }
            },
        )
        .collect();
    let effort = |count: fn(&Record) -> Option<u64>, style| {
        Cell::real(
            median_measured(group.each(|record| count(record).map(|count| count as f64))),
            style,
        )
    };
    let mut row = group.head();
    row.extend([
        Cell::count(group.records.len()),
        Cell::real(median_measured(cpu.iter().copied()), Style::Significant),
        Cell::real(largest(cpu), Style::Significant),
        Cell::real(shifted_geometric_mean(&charged, SHIFT_S), Style::Significant),
        Cell::real(median_measured(wall.iter().copied()), Style::Significant),
        Cell::real(largest(wall), Style::Significant),
        Cell::real(median_measured(peak.iter().copied()), Style::Significant),
        Cell::real(largest(peak), Style::Significant),
        effort(|record| record.flops, Style::Power),
        effort(|record| record.eigendecompositions, Style::Significant),
        effort(|record| record.factorisations, Style::Significant),
        effort(|record| record.operator_products, Style::Significant),
        effort(|record| record.inner_steps, Style::Significant),
    ]);
    row
}
