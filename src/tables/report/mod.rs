//! The report: one self-contained HTML page from which a person decides which heuristic to adopt.
//!
//! The page is made from records, tables, figures and cards alone; it holds its own style and script and
//! a policy that forbids every network access. Without scripts all of it reads; the script adds sorting,
//! filtering and copying. The same input gives the same bytes. Nothing here touches a file, reads a clock
//! or ranks methods: what a row means is said beside it, and deciding pairs of methods is the duel's task.

mod cards;
mod encode;
mod failures;
mod glance;
mod grid;
mod job;
mod layout;
mod notes;
mod pictures;

use std::collections::BTreeSet;

use super::figures::Figure;
use super::{Input, Table};

/// Most rows of a table on the page; the rest is in the CSV form of that table.
pub const MOST_TABLE_ROWS: usize = 1000;

/// Most trials in the list of failures on the page.
pub const MOST_FAILURES: usize = 500;

/// What the page says beyond the records.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Context {
    /// Title of the plan.
    pub title: String,
    /// Runs whose records the page shows.
    pub runs: Vec<RunFacts>,
    /// Cards of the methods.
    pub methods: Vec<CardText>,
    /// Cards of the families.
    pub families: Vec<CardText>,
    /// Cautions that only the caller knows of, whole sentences.
    pub cautions: Vec<String>,
    /// How the reader starts this program, one word of a command line.
    pub program: String,
}

/// What is known about one run.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct RunFacts {
    /// Run folder, as `replay` takes it.
    pub folder: String,
    /// Plan file as it was given.
    pub plan_file: String,
    /// Text of the plan.
    pub plan_text: String,
    /// When the run started, UTC.
    pub started: String,
    /// When the run ended, UTC.
    pub ended: String,
    /// Further facts in the order to show them, name and value: version, processor, features, cores,
    /// memory, workers and the like.
    pub facts: Vec<(String, String)>,
    /// Ids of the trials recorded in this run. It may stay empty when there is one run only; with
    /// several runs it decides which folder a trial's replay command names.
    pub trials: BTreeSet<String>,
}

/// A card as text.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct CardText {
    /// Id in plans.
    pub id: String,
    /// Title, one line.
    pub title: String,
    /// What the card says, name and text.
    pub fields: Vec<(String, String)>,
    /// Settings: name, allowed values with the default, meaning.
    pub settings: Vec<[String; 3]>,
}

/// Writes the page: question, summary, tables, figures, job, cards, failures, cautions, rules.
///
/// Tables longer than [`MOST_TABLE_ROWS`] and lists of failures longer than [`MOST_FAILURES`] are cut
/// with a statement that names the file that holds the rest.
pub fn page(input: &Input<'_>, tables: &[Table], figures: &[Figure], context: &Context) -> String {
    layout::document(input, tables, figures, context).into_string()
}
