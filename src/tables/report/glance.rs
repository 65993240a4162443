//! The box at the top: one row a method over all families, and what must be known before reading it.

use std::collections::BTreeSet;

use maud::{Markup, html};

use super::grid::{Entry, Filters, Grid, Head, Key, Kind, Row};
use crate::record::Verdict;
use crate::stats::Interval;
use crate::stats::proportion::wilson;
use crate::tables::group::{Group, groups};
use crate::tables::summary::{median, median_measured};
use crate::tables::{CONFIDENCE, Cell, Input, OVERALL, Style};

/// Makes the box's table.
pub(super) fn grid(input: &Input<'_>) -> Grid {
    let all = groups(input);
    let several = all.iter().any(|group| group.family == OVERALL);
    let overall: Vec<_> =
        all.into_iter().filter(|group| !several || group.family == OVERALL).collect();
    let open = input.records.iter().any(|record| record.verdict == Verdict::Feasible);
    Grid {
        id: "glance-table".to_owned(),
        title: "Every method over all families".to_owned(),
        caption: html! {
            "Read a row from the left: first how many instances are solved, and how far the bar reaches, the range of \
             solved shares that fits this sample (" (percent(CONFIDENCE)) " Wilson interval); then the digits; then \
             what it costs. Bars that overlap do not show that two methods are equal: they ran on the same \
             instances, and a duel compares them pair by pair."
        },
        heads: heads(input, open),
        rows: overall.iter().map(|group| row(group, open)).collect(),
        omission: None,
        on_paper: None,
        note: warnings(input),
        filters: Filters::LeftOut,
        class: "glance",
    }
}

fn heads(input: &Input<'_>, open: bool) -> Vec<Head> {
    let number =
        |name: &str, heading: &str, help: &str| Head::new(name, heading, help, Kind::Numbers);
    let mut heads = vec![
        Head::new("method", "method", "Label of the method in the plan.", Kind::Words),
        Head::new(
            "solved",
            "solved share",
            "Solved trials over the trials whose optimum is known, in brackets the ends of its 95 % Wilson interval; \
             the bar shows the same from 0 to 100 %. The interval takes the instance as the unit, solved in more than \
             half of its repeats, and the instances as drawn from the plan's mix of families.",
            Kind::Words,
        ),
        number("solved_count", "solved", "Solved trials, of the trials whose optimum is known."),
        number("near", "near", "Trials that are solved only after the referee's own restoration."),
    ];
    if open {
        heads.push(number(
            "feasible",
            "feasible",
            "Trials that are feasible at the target rank where no optimum is known.",
        ));
    }
    heads.extend([
        number("failed", "failed", "All other trials: off the optimum, infeasible, out of time, given up, crashed."),
        number(
            "median_digits",
            "digits",
            "Median number of correct digits of the objective, over the trials whose optimum is known; a trial \
             without an answer counts as 0.",
        ),
        number("median_flops", "flops", "Median of the floating-point operations, over all trials that count them."),
        number(
            "median_cpu_s",
            "cpu s",
            &format!(
                "Median processor time, in seconds, over all trials, whatever their verdict; the wall-time limit is \
                 {} s. Measured: it differs from run to run.",
                input.wall_limit_s
            ),
        ),
    ]);
    heads
}

fn row(group: &Group<'_>, open: bool) -> Row {
    let is = |verdict: Verdict| group.count(|record| record.verdict == verdict);
    let known = group.count(|record| record.optimum.is_some());
    let solved =
        group.count(|record| record.verdict == Verdict::Solved && record.optimum.is_some());
    let (passed, instances) = group.instances(|record| record.verdict == Verdict::Solved);
    let digits = group
        .records
        .iter()
        .filter(|record| record.optimum.is_some())
        .map(|record| Some(record.digits.unwrap_or(0.0)));
    let count = |count: usize| Entry::of(&Cell::count(count));
    let real = |value, style| Entry::of(&Cell::real(value, style));
    let mut entries = vec![
        Entry::text(group.method),
        share(solved, known, (instances > 0).then(|| wilson(passed, instances, CONFIDENCE))),
        if known == 0 {
            Entry::of(&Cell::Missing)
        } else {
            Entry { shown: html! { (solved) " of " (known) }, key: Key::Number(solved.to_string()) }
        },
        count(is(Verdict::Near)),
    ];
    if open {
        entries.push(count(is(Verdict::Feasible)));
    }
    entries.extend([
        count(group.count(|record| !record.verdict.is_success())),
        real(median(digits), Style::Fixed(1)),
        real(
            median_measured(group.each(|record| record.flops.map(|flops| flops as f64))),
            Style::Power,
        ),
        real(median_measured(group.each(|record| record.cpu_s)), Style::Significant),
    ]);
    Row { family: group.family.to_owned(), method: group.method.to_owned(), entries }
}

/// Shows a share with its interval, as a bar and in words.
fn share(part: usize, whole: usize, interval: Option<Interval>) -> Entry {
    let (Some(interval), true) = (interval, whole > 0) else { return Entry::of(&Cell::Missing) };
    let share = part as f64 / whole as f64;
    let place = |share: f64| format!("{:.2}", 100.0 * share);
    let width = format!("{:.2}", 100.0 * (interval.high - interval.low).max(0.0));
    let mark = format!("{:.2}", (100.0 * share - 0.75).clamp(0.0, 98.5));
    let shown = html! {
        svg.bar viewBox="0 0 100 10" preserveAspectRatio="none" aria-hidden="true" focusable="false" {
            rect.track x="0" y="3" width="100" height="4" {}
            rect.reach x=(place(interval.low)) y="1" width=(width) height="8" {}
            rect.mark x=(mark) y="0" width="1.5" height="10" {}
        }
        span.share {
            b { (percent(share)) } " (" (ends(interval)) ")"
        }
    };
    Entry { shown, key: Key::Number(format!("{share:?}")) }
}

fn percent(share: f64) -> String {
    Cell::Real(share, Style::Percent).shown()
}

fn ends(interval: Interval) -> String {
    format!("{} to {}", percent(interval.low).trim_end_matches(" %"), percent(interval.high))
}

/// Writes what must be known before the box is read: relaxation gaps and optima that are not proved.
fn warnings(input: &Input<'_>) -> Markup {
    let tried: BTreeSet<&str> =
        input.records.iter().map(|record| record.instance.as_str()).collect();
    let instances: Vec<_> = input
        .instances
        .iter()
        .filter(|instance| tried.contains(instance.instance.as_str()))
        .collect();
    let gaps: Vec<_> = instances.iter().filter(|it| it.relaxation.contains("gap")).collect();
    let families: BTreeSet<&str> = gaps.iter().map(|it| it.family.as_str()).collect();
    let families = families.into_iter().collect::<Vec<_>>().join(", ");
    let unknown = instances.iter().filter(|it| it.optimum_known == "unknown").count();
    let reported = instances.iter().filter(|it| it.optimum_known == "reported").count();
    let total = instances.len();
    html! {
        @if !gaps.is_empty() {
            p.warning {
                strong { "Relaxation gap. " }
                (gaps.len()) " of " (total) " instances come from families whose convex relaxation lies, or by \
                their settings can lie, strictly below the rank-constrained optimum (" (families) "). Where it does, a \
                method that solves the relaxation and truncates misses the optimum as a rule, whatever its budget, so the share over all \
                families depends on how many such instances the plan holds: judge by family."
            }
        }
        @if unknown > 0 {
            p.warning {
                strong { "No known optimum. " }
                "For " (unknown) " of " (total) " instances no optimum is known: they are in no solved share, and feasible \
                there says nothing about the objective."
            }
        }
        @if reported > 0 {
            p.warning {
                strong { "Optimum not proved. " }
                "For " (reported) " of " (total) " instances the optimum is a reported value, not a proved one: solved and \
                digits there are as good as that value."
            }
        }
    }
}
