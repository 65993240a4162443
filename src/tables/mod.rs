//! Tables, figures and the report of a run: models made from records alone, then renderers that return
//! text.
//!
//! A table here never looks at a problem, a method or a clock; what it shows is in the records it is
//! given, and its caption says units, rules and sample size. Nothing here touches a file.

mod accuracy;
mod effort;
mod failures;
pub mod figures;
mod group;
mod knobs;
mod model;
mod overview;
mod rank;
mod relaxation;
mod render;
pub mod report;
mod runtime;
mod summary;
mod trials;

pub use model::{Cell, Column, Nature, Style, Table};
pub use render::MOST_ROWS;

use crate::record::{InstanceRecord, MethodRecord, Record, Trace};

/// What tables are made of.
#[derive(Clone, Copy, Debug)]
pub struct Input<'a> {
    /// Records in plan order.
    pub records: &'a [Record],
    /// Instances of those records.
    pub instances: &'a [InstanceRecord],
    /// Methods in plan order.
    pub methods: &'a [MethodRecord],
    /// Wall-time limit of a trial, in seconds.
    pub wall_limit_s: f64,
    /// Feasibility, objective and rank tolerance of the referee.
    pub tolerance: [f64; 3],
    /// Convergence traces of some of the trials.
    pub traces: &'a [Trace],
}

/// Makes every table: accuracy, rank, runtime, effort, overview, relaxation, knobs, failures, instances.
pub fn all(input: &Input<'_>) -> Vec<Table> {
    vec![
        accuracy::table(input),
        rank::table(input),
        runtime::table(input),
        effort::table(input),
        overview::table(input),
        relaxation::table(input),
        knobs::table(input),
        failures::table(input),
        trials::table(input),
    ]
}

/// Returns accuracy, rank, runtime and effort as aligned text, at most [`TEXT_WIDTH`] columns wide.
pub fn summary(input: &Input<'_>) -> String {
    let tables =
        [accuracy::table(input), rank::table(input), runtime::table(input), effort::table(input)];
    tables.iter().map(|table| table.to_text(TEXT_WIDTH)).collect::<Vec<_>>().join("\n")
}

/// Width of the text form, in characters.
pub const TEXT_WIDTH: usize = 100;

/// Confidence of the intervals in tables and figures.
pub const CONFIDENCE: f64 = 0.95;

/// Name of the rows that take all families together.
pub const OVERALL: &str = "all families";
