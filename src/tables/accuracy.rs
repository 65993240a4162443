//! Accuracy: how many trials are solved, and to how many digits.

use super::group::{Group, groups, sample};
use super::summary::{least, median};
use super::{CONFIDENCE, Cell, Column, Input, Style, Table};
use crate::record::{Record, Verdict};
use crate::stats::proportion::wilson;

pub(super) fn table(input: &Input<'_>) -> Table {
    let [feasibility, objective, _] = input.tolerance;
    let caption = format!(
        "Judged after truncation to the target rank. Solved: feasible to {feasibility:e} and within {objective:e} \
         of the optimum, relative; near: so after the referee's restoration; feasible: all verdicts that are \
         feasible at the target rank, whatever their objective. The share is of the trials whose optimum is known. \
         From, to: 95 % Wilson interval of the share, with the instance as the unit (solved in more than half of \
         its repeats); over all families it takes the instances as drawn from the plan's mix. Digits: a trial \
         without a figure counts as 0; objective error: it counts as infinite. Dashes: no optimum known, or no \
         median. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instances."),
        Column::stable("method", "method", "Label of the method in the plan."),
        Column::stable("trials", "trials", "Number of trials."),
        Column::stable("solved", "solved", "Trials whose verdict is solved."),
        Column::stable(
            "near",
            "near",
            "Trials that are solved only after the referee's restoration.",
        ),
        Column::stable(
            "feasible",
            "feas-\nible",
            "Trials whose answer is feasible at the target rank, whatever its objective.",
        ),
        Column::stable(
            "solved_share",
            "solved\nshare",
            "Solved trials over the trials whose optimum is known.",
        ),
        Column::stable(
            "solved_low",
            "95 %\nfrom",
            "Lower end of the interval of the solved share.",
        ),
        Column::stable("solved_high", "95 %\nto", "Upper end of the interval of the solved share."),
        Column::stable(
            "solved_or_near_low",
            "solved or\nnear from",
            "Lower end of the 95 % interval of the share that is solved or near.",
        )
        .in_files(),
        Column::stable(
            "solved_or_near_high",
            "solved or\nnear to",
            "Upper end of the 95 % interval of the share that is solved or near.",
        )
        .in_files(),
        Column::stable(
            "median_digits",
            "digits\nmedian",
            "Median number of correct digits of the objective.",
        ),
        Column::stable("worst_digits", "digits\nworst", "Least number of correct digits."),
        Column::stable(
            "median_objective_error",
            "objective\nerror, med",
            "Median of |objective - optimum| / (1 + |optimum|).",
        ),
    ];
    let rows = groups(input).iter().map(row).collect();
    Table { name: "accuracy", title: "Accuracy by family and method", caption, columns, rows }
}

fn row(group: &Group<'_>) -> Vec<Cell> {
    let judged = |record: &Record| record.optimum.is_some();
    let known = group.count(judged);
    let is_solved = |record: &Record| record.verdict == Verdict::Solved;
    let solved = group.count(is_solved);
    let interval = |(passed, instances): (u64, u64)| {
        (instances > 0).then(|| wilson(passed, instances, CONFIDENCE))
    };
    let share = interval(group.instances(is_solved));
    let reached = interval(
        group.instances(|record| matches!(record.verdict, Verdict::Solved | Verdict::Near)),
    );
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
        Cell::share(solved, known),
        Cell::real(share.map(|interval| interval.low), Style::Percent),
        Cell::real(share.map(|interval| interval.high), Style::Percent),
        Cell::real(reached.map(|interval| interval.low), Style::Percent),
        Cell::real(reached.map(|interval| interval.high), Style::Percent),
        Cell::real(median(digits.iter().copied()), Style::Fixed(1)),
        Cell::real(least(digits.iter().copied()), Style::Fixed(1)),
        Cell::real(median(errors), Style::Power),
    ]);
    row
}
