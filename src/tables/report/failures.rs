//! The trials that were not solved, each with the command that runs it again.

use std::collections::BTreeMap;

use maud::html;

use super::encode::{shell_path, shell_word};
use super::grid::{Entry, Filters, Grid, Head, Key, Kind, Row};
use super::{Context, MOST_FAILURES};
use crate::record::{Record, Verdict};
use crate::tables::Input;

/// Returns the trials whose verdict is not solved, in plan order.
pub(super) fn unsolved<'a>(input: &Input<'a>) -> Vec<&'a Record> {
    input.records.iter().filter(|record| record.verdict != Verdict::Solved).collect()
}

/// Makes the list of failures, at most [`MOST_FAILURES`] long.
pub(super) fn grid(input: &Input<'_>, context: &Context) -> Grid {
    let all = unsolved(input);
    let shown = chosen(&all);
    let omission = (shown.len() < all.len()).then(|| {
        format!(
            "{} of {} trials, taken in turn from every family, method and verdict; {} are left out, and sorting \
             and filtering see these alone. tables/failures.csv counts all of them, tables/instances.csv and \
             trials.csv in the run folder hold every one.",
            shown.len(),
            all.len(),
            all.len() - shown.len()
        )
    });
    let folders = Folders::new(context);
    let heads = vec![
        Head::new("family", "family", "Family of the instance.", Kind::Words),
        Head::new("method", "method", "Label of the method in the plan.", Kind::Words),
        Head::new(
            "verdict",
            "verdict",
            "The referee's outcome; the words are explained at the end of the page.",
            Kind::Words,
        ),
        Head::new(
            "stop_reason",
            "stop reason",
            "Why the method stopped, in one word of its own.",
            Kind::Words,
        ),
        Head::new(
            "message",
            "message",
            "What the referee and the method say about the trial.",
            Kind::Prose,
        ),
        Head::new(
            "replay",
            "run it again",
            "Command for a POSIX shell that plants the instance again, checks its digest, runs the method again \
             and compares. Its last word is the id of the trial in trials.csv.",
            Kind::Prose,
        ),
    ];
    Grid {
        id: "failures-list".to_owned(),
        title: "Trials that were not solved".to_owned(),
        caption: html! {
            "Every trial whose verdict is not solved, one row each; near, feasible and suboptimal answers are among \
             them. " (all.len()) " of " (input.records.len()) " trials."
        },
        heads,
        rows: shown
            .iter()
            .enumerate()
            .map(|(at, record)| row(at, record, context, &folders))
            .collect(),
        omission,
        on_paper: None,
        note: html! {},
        filters: Filters::Offered,
        class: "failures wide",
    }
}

/// Picks at most [`MOST_FAILURES`] trials, in turn from every family, method and verdict, in plan order.
fn chosen<'a>(all: &[&'a Record]) -> Vec<&'a Record> {
    let mut seen: BTreeMap<(&str, &str, Verdict), usize> = BTreeMap::new();
    let mut turns: Vec<(usize, usize)> = Vec::with_capacity(all.len());
    for (at, record) in all.iter().enumerate() {
        let turn = seen.entry((&record.family, &record.method, record.verdict)).or_default();
        turns.push((*turn, at));
        *turn += 1;
    }
    turns.sort_unstable();
    turns.truncate(MOST_FAILURES);
    turns.sort_unstable_by_key(|(_, at)| *at);
    turns.into_iter().map(|(_, at)| all[at]).collect()
}

/// Finds the run folder of a trial.
struct Folders<'a> {
    only: Option<&'a str>,
    of_trial: BTreeMap<&'a str, &'a str>,
}

impl<'a> Folders<'a> {
    fn new(context: &'a Context) -> Self {
        let only = match context.runs.as_slice() {
            [run] => Some(run.folder.as_str()),
            _ => None,
        };
        let of_trial = context
            .runs
            .iter()
            .flat_map(|run| run.trials.iter().map(|trial| (trial.as_str(), run.folder.as_str())))
            .collect();
        Folders { only, of_trial }
    }

    fn of(&self, trial: &str) -> Option<&'a str> {
        self.of_trial.get(trial).copied().or(self.only)
    }
}

fn row(at: usize, record: &Record, context: &Context, folders: &Folders<'_>) -> Row {
    let replay = match folders.of(&record.trial) {
        Some(folder) => {
            let id = format!("replay-{}", at + 1);
            let command = format!(
                "{} replay {} {}",
                shell_word(&context.program),
                shell_path(folder),
                shell_path(&record.trial)
            );
            html! {
                code.command id=(id) { (command) }
                " " button.copy type="button" hidden data-copy=(id) aria-label={ "copy the command of " (record.trial) } {
                    "copy"
                }
            }
        }
        None => html! { code { (record.trial) } " (its run folder is not known here)" },
    };
    Row {
        family: record.family.clone(),
        method: record.method.clone(),
        entries: vec![
            Entry::text(&record.family),
            Entry::text(&record.method),
            Entry::text(record.verdict.word()),
            Entry::text(&record.stop_reason),
            Entry::text(&record.message),
            Entry { shown: replay, key: Key::Text },
        ],
    }
}
