//! Runtime: time and memory.

use super::group::{Group, groups, sample};
use super::summary::{largest, median_measured, shifted_geometric_mean};
use super::{Cell, Column, Input, Style, Table};
use crate::stats::summary::penalised_mean;

/// Shift of the geometric mean, in seconds: times well below it hardly move the mean.
const SHIFT_S: f64 = 1.0;

/// What a failure counts in the penalised mean, in wall-time limits.
const PENALTY: f64 = 10.0;

pub(super) fn table(input: &Input<'_>) -> Table {
    let caption = format!(
        "Seconds of processor (cpu) and wall time of the method alone, on one thread; planting and refereeing are \
         not in them. Medians and largest values are over all trials, whatever their verdict. Censoring: a trial \
         that is not solved, near or feasible counts as the wall-time limit of {limit} s in the mean (geometric, \
         shifted by {SHIFT_S} s) and as {PENALTY} times the limit in PAR-10 (arithmetic mean). Peak: memory held \
         beyond the start of the trial, in MiB. {}",
        sample(input),
        limit = input.wall_limit_s,
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instances."),
        Column::stable("method", "method", "Label of the method in the plan."),
        Column::stable("trials", "trials", "Number of trials."),
        Column::measured("median_cpu_s", "cpu s\nmedian", "Median processor time, in seconds."),
        Column::measured("largest_cpu_s", "cpu s\nlargest", "Longest processor time, in seconds."),
        Column::measured(
            "shifted_mean_cpu_s",
            "cpu s\nmean",
            "Shifted geometric mean of processor time, failures at the limit, in seconds.",
        ),
        Column::measured(
            "par10_cpu_s",
            "PAR-10\ncpu s",
            "Mean processor time with ten limits for a failure, in seconds.",
        ),
        Column::measured("median_wall_s", "wall s\nmedian", "Median wall time, in seconds."),
        Column::measured("largest_wall_s", "wall s\nlargest", "Longest wall time, in seconds.")
            .in_files(),
        Column::measured(
            "median_peak_mib",
            "peak MiB\nmedian",
            "Median of the memory peak, in MiB.",
        ),
        Column::measured("largest_peak_mib", "peak MiB\nlargest", "Largest memory peak, in MiB."),
    ];
    let rows = groups(input).iter().map(|group| row(group, input.wall_limit_s)).collect();
    Table {
        name: "runtime",
        title: "Runtime and memory by family and method",
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
    let reaching = group.each(|record| record.cpu_s.filter(|_| record.verdict.is_success()));
    let charged: Vec<f64> = reaching.iter().map(|cpu| cpu.unwrap_or(limit)).collect();
    let seconds = |value| Cell::real(value, Style::Significant);
    let mut row = group.head();
    row.extend([
        Cell::count(group.records.len()),
        seconds(median_measured(cpu.iter().copied())),
        seconds(largest(cpu)),
        seconds(shifted_geometric_mean(&charged, SHIFT_S)),
        seconds(penalised_mean(&reaching, limit, PENALTY)),
        seconds(median_measured(wall.iter().copied())),
        seconds(largest(wall)),
        seconds(median_measured(peak.iter().copied())),
        seconds(largest(peak)),
    ]);
    row
}
