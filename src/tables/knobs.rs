//! Knobs: what each combination of a family's parameters does to every method.

use std::collections::{BTreeMap, BTreeSet};

use super::group::{in_order, sample};
use super::summary::{largest, median_measured};
use super::{Cell, Column, Input, Style, Table};
use crate::record::{Record, Verdict};

pub(super) fn table(input: &Input<'_>) -> Table {
    let caption = format!(
        "One row for each combination of parameters and each method. Solved: verdicts solved and near. Feasible: the \
         verdict feasible, where no optimum is known to compare with; unproved: instances planted without a proof. Gap, for methods of the class relaxation that converged on instances whose \
         optimum is known: (optimum - value of the untruncated answer) / (1 + |optimum|). Rank: eigenvalues of the \
         untruncated answer above 1e-6 times the largest. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instances."),
        Column::stable("parameters", "parameters", "Parameters of the instances."),
        Column::stable("method", "method", "Label of the method in the plan."),
        Column::stable("trials", "trials", "Number of trials."),
        Column::stable("unproved", "unproved", "Trials on instances planted without a proof."),
        Column::stable("solved", "solved", "Trials with the verdict solved or near."),
        Column::stable("feasible", "feasible", "Trials with the verdict feasible."),
        Column::stable(
            "share",
            "share",
            "Share of the trials with the verdict solved or near; in a row without known optima, with the verdict feasible.",
        ),
        Column::stable(
            "median_gap",
            "gap\nmedian",
            "Median of (optimum - value) / (1 + |optimum|) of a relaxation.",
        ),
        Column::stable("target", "target\nrank", "Rank bound of the instances."),
        Column::stable("median_rank", "rank\nmedian", "Median rank of the untruncated answers."),
        Column::stable("largest_rank", "rank\nlargest", "Largest rank of an untruncated answer."),
    ];
    let mut places: BTreeMap<(&str, &str, &str), Vec<&Record>> = BTreeMap::new();
    for record in input.records {
        let key = (record.family.as_str(), record.parameters.as_str(), record.method.as_str());
        places.entry(key).or_default().push(record);
    }
    let relaxes = |label: &str| {
        input.methods.iter().any(|method| method.label == label && method.class == "relaxation")
    };
    let unproved: BTreeSet<&str> = input
        .instances
        .iter()
        .filter(|instance| instance.certificate == "no-proof")
        .map(|instance| instance.instance.as_str())
        .collect();
    let mut rows = Vec::new();
    for family in in_order(input.records.iter().map(|record| record.family.as_str())) {
        let own = input.records.iter().filter(|record| record.family == family);
        for parameters in in_order(own.map(|record| record.parameters.as_str())) {
            for method in in_order(input.records.iter().map(|record| record.method.as_str())) {
                if let Some(records) = places.remove(&(family, parameters, method)) {
                    let mut cells: Vec<Cell> =
                        [family, parameters, method].map(Cell::word).to_vec();
                    cells.extend(figures(&records, &unproved, relaxes(method)));
                    rows.push(cells);
                }
            }
        }
    }
    Table { name: "knobs", title: "Success, gap and rank by parameters", caption, columns, rows }
}

fn figures(records: &[&Record], unproved: &BTreeSet<&str>, relaxes: bool) -> Vec<Cell> {
    let count =
        |pass: &dyn Fn(&Record) -> bool| records.iter().filter(|record| pass(record)).count();
    let solved = count(&|record| matches!(record.verdict, Verdict::Solved | Verdict::Near));
    let feasible = count(&|record| record.verdict == Verdict::Feasible);
    let known = records.iter().any(|record| record.optimum.is_some());
    let gap = |record: &&Record| {
        let (optimum, value) = record.optimum.zip(record.raw_objective)?;
        (relaxes && record.stop_reason == "converged")
            .then(|| (optimum - value) / (1.0 + optimum.abs()))
    };
    let ranks = || records.iter().map(|record| record.rank_at_1e6.map(|rank| rank as f64));
    let targets: Vec<u64> = records.iter().map(|record| record.target_rank).collect();
    let (least, most) = (targets.iter().min().copied(), targets.iter().max().copied());
    let target = match (least, most) {
        (Some(least), Some(most)) if least == most => Cell::Count(least),
        (Some(least), Some(most)) => Cell::Word(format!("{least}-{most}")),
        _ => Cell::Missing,
    };
    vec![
        Cell::count(records.len()),
        Cell::count(count(&|record| unproved.contains(record.instance.as_str()))),
        Cell::count(solved),
        Cell::count(feasible),
        Cell::share(if known { solved } else { feasible }, records.len()),
        Cell::real(median_measured(records.iter().map(gap)), Style::Power),
        target,
        Cell::real(median_measured(ranks()), Style::Significant),
        largest(ranks()).map_or(Cell::Missing, |rank| Cell::Count(rank as u64)),
    ]
}
