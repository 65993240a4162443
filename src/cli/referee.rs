//! `rankassay referee`.

use std::path::PathBuf;

use clap::Args;
use serde_json::{Value, json};

use super::Ended;
use super::output::say_and_end;
use super::report::Failure;
use crate::formats::solution;
use crate::record::measured;
use crate::referee::{Finding, Judgement, Tolerance, judge};
use crate::runner::read_instance;

#[derive(Debug, Args)]
pub(super) struct Referee {
    /// Instance file: native, sparse SDPA (.dat-s) or tables of a power network (.toml)
    instance: PathBuf,
    /// Solution file
    solution: PathBuf,
    /// Puts this rank bound on every block
    #[arg(long, value_name = "R", value_parser = clap::value_parser!(u32).range(1..))]
    rank: Option<u32>,
    /// Writes JSON
    #[arg(long)]
    json: bool,
}

pub(super) fn execute(command: &Referee) -> Ended {
    let mut instance = read_instance(&command.instance)?;
    if let Some(rank) = command.rank {
        instance = instance.with_rank(rank as usize, &command.instance.display().to_string())?;
    }
    let read = solution::read(&command.solution, &instance.problem)
        .map_err(|error| Failure::from(&error))?;
    let known = instance.knowledge.known();
    let judgement = judge(&instance.problem, &read.answer, &known, &Tolerance::default())
        .map_err(|contradiction| Failure::defect(format!("internal error: {contradiction}")))?;
    let optimum = instance.knowledge.optimum_value();
    say_and_end(&if command.json {
        as_json(&judgement, optimum)
    } else {
        as_text(&judgement, optimum)
    })
}

fn word(finding: Finding) -> &'static str {
    match finding {
        Finding::Solved => "solved",
        Finding::Near => "near",
        Finding::Suboptimal => "suboptimal",
        Finding::Feasible => "feasible",
        Finding::Infeasible => "infeasible",
        Finding::Malformed => "malformed",
    }
}

/// Lists the measured figures by their names in `trials.csv`; what was not measured is null.
fn figures(judgement: &Judgement, optimum: Option<f64>) -> Vec<(&'static str, Value)> {
    let real = |value: Option<f64>| json!(value.and_then(measured));
    let rank = |at: usize| json!(judgement.ranks.map(|ranks| ranks[at]));
    vec![
        ("digits", real(judgement.digits)),
        ("feasibility", real(judgement.feasibility)),
        ("min_eigenvalue", real(judgement.min_eigenvalue)),
        ("objective", real(judgement.objective)),
        ("optimum", real(optimum)),
        ("objective_error", real(judgement.objective_error)),
        ("distance", real(judgement.distance)),
        ("rank_at_1e-4", rank(0)),
        ("rank_at_1e-6", rank(1)),
        ("rank_at_1e-8", rank(2)),
        ("tail_ratio", real(judgement.tail_ratio)),
        ("restored_feasibility", real(judgement.restored_feasibility)),
        ("restored_objective_error", real(judgement.restored_objective_error)),
        ("raw_feasibility", real(judgement.raw_feasibility)),
        ("raw_objective", real(judgement.raw_objective)),
        ("lower_bound", real(judgement.lower_bound)),
    ]
}

fn as_json(judgement: &Judgement, optimum: Option<f64>) -> String {
    let mut value = json!({ "verdict": word(judgement.finding), "reason": judgement.reason });
    for (name, figure) in figures(judgement, optimum) {
        value[name] = figure;
    }
    value["dimacs"] = json!(judgement.dimacs);
    format!("{}\n", serde_json::to_string_pretty(&value).expect("the figures are plain data"))
}

fn as_text(judgement: &Judgement, optimum: Option<f64>) -> String {
    let mut out = format!("{:<25} {}\n", "verdict", word(judgement.finding));
    if !judgement.reason.is_empty() {
        out += &format!("{:<25} {}\n", "reason", judgement.reason);
    }
    for (name, figure) in figures(judgement, optimum) {
        if !figure.is_null() {
            out += &format!("{name:<25} {figure}\n");
        }
    }
    if let Some(errors) = judgement.dimacs {
        let errors: Vec<String> = errors.iter().map(|error| format!("{error:.1e}")).collect();
        out += &format!("{:<25} {}\n", "DIMACS errors", errors.join(" "));
    }
    out
}
