//! Overview: for each family how many methods solve it, and which solve most of it.

use super::group::{Group, groups, in_order, sample};
use super::{Cell, Column, Input, OVERALL, Table};
use crate::record::Verdict;

/// Most methods that a cell names.
const NAMED: usize = 4;

pub(super) fn table(input: &Input<'_>) -> Table {
    let caption = format!(
        "Solved: verdict solved or near; in a family none of whose optima is known, feasible. All, most, none: methods \
         that solved all, more than half, none of their trials. Best: the methods with the largest share, at most {NAMED} \
         of them. {}",
        sample(input)
    );
    let columns = vec![
        Column::stable("family", "family", "Family of the instances."),
        Column::stable("kind", "kind", "How the relaxation behaves by the family's card."),
        Column::stable("methods", "methods", "Methods that ran on it."),
        Column::stable("all", "all", "Methods that solved all of their trials."),
        Column::stable("most", "most", "Methods that solved more than half of their trials."),
        Column::stable("none", "none", "Methods that solved none of their trials."),
        Column::stable("best_share", "best\nshare", "Largest share of solved trials of a method."),
        Column::stable("best", "best", "Methods with that share."),
    ];
    let all = groups(input);
    let kind = |family: &str| {
        input
            .instances
            .iter()
            .find(|instance| instance.family == family && !instance.relaxation.is_empty())
            .map_or(Cell::Missing, |instance| Cell::word(&instance.relaxation))
    };
    let families = in_order(all.iter().map(|group| group.family));
    let rows = families
        .into_iter()
        .filter(|family| *family != OVERALL)
        .map(|family| {
            let own: Vec<&Group<'_>> = all.iter().filter(|group| group.family == family).collect();
            let mut row = vec![Cell::word(family), kind(family)];
            row.extend(figures(&own));
            row
        })
        .collect();
    Table { name: "overview", title: "Which methods solve which family", caption, columns, rows }
}

fn figures(own: &[&Group<'_>]) -> Vec<Cell> {
    let known = own.iter().any(|group| group.records.iter().any(|record| record.optimum.is_some()));
    let solved = |group: &Group<'_>| {
        group.count(|record| match record.verdict {
            Verdict::Solved | Verdict::Near => true,
            Verdict::Feasible => !known,
            _ => false,
        })
    };
    let counts: Vec<(usize, usize)> =
        own.iter().map(|group| (solved(group), group.records.len())).collect();
    let with = |pass: &dyn Fn(usize, usize) -> bool| {
        Cell::count(counts.iter().filter(|(solved, trials)| pass(*solved, *trials)).count())
    };
    // Shares are compared as fractions, so that no rounding makes two of them differ.
    let best = counts.iter().copied().max_by(|a, b| (a.0 * b.1).cmp(&(b.0 * a.1)));
    let (top, trials) = best.unwrap_or((0, 1));
    let leaders: Vec<&str> = own
        .iter()
        .zip(&counts)
        .filter(|(_, count)| top > 0 && count.0 * trials == top * count.1)
        .map(|(group, _)| group.method)
        .collect();
    let mut names = leaders.iter().take(NAMED).copied().collect::<Vec<_>>().join(", ");
    if leaders.len() > NAMED {
        names += &format!(" and {} more", leaders.len() - NAMED);
    }
    vec![
        Cell::count(own.len()),
        with(&|solved, trials| solved == trials),
        with(&|solved, trials| 2 * solved > trials),
        with(&|solved, _| solved == 0),
        Cell::share(top, trials),
        if names.is_empty() { Cell::Missing } else { Cell::Word(names) },
    ]
}
