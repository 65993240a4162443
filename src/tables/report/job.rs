//! The job: budget, tolerances, methods, and for each run its plan and machine.

use std::collections::BTreeSet;

use maud::{Markup, html};

use super::{Context, RunFacts};
use crate::tables::Input;

/// Writes the job.
pub(super) fn job(input: &Input<'_>, context: &Context) -> Markup {
    let [feasibility, objective, rank] = input.tolerance;
    let seeds: BTreeSet<u64> = input.records.iter().map(|record| record.seed).collect();
    let seeds = seeds.iter().map(u64::to_string).collect::<Vec<_>>().join(", ");
    let facts = [
        ("Trials", input.records.len().to_string()),
        ("Instances", input.instances.len().to_string()),
        ("Master seed", seeds),
        ("Wall-time limit of a trial", format!("{} s", input.wall_limit_s)),
        ("Feasibility tolerance", format!("{feasibility:e}, relative")),
        ("Objective tolerance", format!("{objective:e}, relative")),
        ("Rank cut-off", format!("{rank:e} times the largest eigenvalue")),
    ];
    html! {
        dl.facts {
            @for (name, value) in facts { div { dt { (name) } dd { (value) } } }
        }
        h3 { "Methods that took part" }
        @if input.methods.is_empty() { p { "None." } }
        ul.plain {
            @for method in input.methods {
                li {
                    strong { (method.label) }
                    ": " code { (method.id) } ", " (method.class)
                    @if !method.options.is_empty() { ", options " code { (method.options) } }
                }
            }
        }
        @for (at, run) in context.runs.iter().enumerate() { (one(run, at, context.runs.len())) }
    }
}

fn one(run: &RunFacts, at: usize, runs: usize) -> Markup {
    let several = runs > 1;
    let facts = [
        ("Run folder", &run.folder),
        ("Plan file", &run.plan_file),
        ("Started", &run.started),
        ("Ended", &run.ended),
    ];
    html! {
        section.job-run {
            h3 { "Run" @if several { " " (at + 1) " of " (runs) } }
            dl.facts {
                @for (name, value) in facts {
                    @if !value.is_empty() { div { dt { (name) } dd { (value) } } }
                }
                @for (name, value) in &run.facts { div { dt { (name) } dd { (value) } } }
            }
            @if !run.plan_text.is_empty() {
                details.plan open[!several] {
                    summary { "Plan" @if several { span.unseen { " of run " (at + 1) } } }
                    pre tabindex="0" role="region" aria-label={ "Plan text of run " (at + 1) } { code { (run.plan_text) } }
                }
            }
        }
    }
}
