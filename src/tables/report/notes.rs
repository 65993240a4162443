//! What a reader must know to judge the figures: cautions, verdict words, and the rules behind the tables.

use maud::{Markup, html};

use super::Context;
use crate::record::Verdict;
use crate::tables::Input;

/// Says that figures on power networks are no operating advice.
pub(super) const POWER_NETWORK: &str = "Some of these instances are or seem to be power networks. The figures are no \
    operating advice; studies of a real network follow the local grid code and are the work of a licensed engineer.";

/// Parts of a family's id that suggest a power network.
const NETWORK_FAMILIES: [&str; 3] = ["radial-feeder", "feeder", "opf"];

/// Parts of an imported instance's name that suggest one.
const NETWORK_NAMES: [&str; 4] = ["opf", "bus", "feeder", "grid"];

/// Parts of a caution that speak of one.
const NETWORK_CAUTIONS: [&str; 3] = ["power network", "grid code", "operating advice"];

/// Returns whether the instances or the caller's cautions suggest a power network. A name that only
/// looks so counts too: a caution too many does no harm.
pub(super) fn suggests_power_network(input: &Input<'_>, context: &Context) -> bool {
    let has = |text: &str, parts: &[&str]| {
        let text = text.to_lowercase();
        parts.iter().any(|part| text.contains(part))
    };
    let suspect = |family: &str, instance: &str| {
        has(family, &NETWORK_FAMILIES) || (family == "imported" && has(instance, &NETWORK_NAMES))
    };
    input.records.iter().any(|record| suspect(&record.family, &record.instance))
        || input.instances.iter().any(|it| suspect(&it.family, &it.instance))
        || context.cautions.iter().any(|caution| has(caution, &NETWORK_CAUTIONS))
}

/// Writes the cautions: the caller's, then those that always hold.
pub(super) fn cautions(input: &Input<'_>, context: &Context) -> Markup {
    html! {
        ul.cautions {
            @if suggests_power_network(input, context) { li { (POWER_NETWORK) } }
            @for caution in &context.cautions { li { (caution) } }
            li {
                "Planted instances are made so that their optimum is known. A method that wins on them need not win on \
                 other problems; hold it against instances of your own before you adopt it."
            }
            li {
                "The share over all families is a mean over the plan's mix. Another mix gives other shares; the tables \
                 by family do not depend on it."
            }
            li {
                "Times are those of the machine named under the job, with as many trials side by side as it says. \
                 Compare times within this page only."
            }
            li {
                "Effort is counted by the methods' own engines. A method that counts too little looks cheaper than it \
                 is: hold effort against processor time."
            }
            li {
                "A plan that was changed after looking at its results, or one pair of methods picked out of many, makes \
                 intervals look narrower than they are."
            }
        }
    }
}

/// Writes what each verdict means.
pub(super) fn verdicts(input: &Input<'_>) -> Markup {
    let [feasibility, objective, _] = input.tolerance;
    html! {
        p {
            "The referee judges every answer, never the method: it truncates the answer to the target rank, measures \
             feasibility (at most " (format!("{feasibility:e}")) ", relative) and objective (within "
            (format!("{objective:e}")) ", relative, of the known optimum) with sums of its own."
        }
        dl.words {
            @for verdict in Verdict::ALL { dt { (verdict.word()) } dd { (meaning(verdict)) } }
        }
    }
}

fn meaning(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Solved => {
            "The truncation to the target rank is feasible and optimal to tolerance."
        }
        Verdict::Near => {
            "It is so after the referee's own restoration of feasibility, which is the same for every method."
        }
        Verdict::Suboptimal => "Feasible at the target rank, but the objective is off.",
        Verdict::Feasible => "Feasible at the target rank; no optimum is known to compare with.",
        Verdict::Infeasible => "Not feasible at the target rank.",
        Verdict::TimeLimit => {
            "The wall-time limit was reached before a solved or near point was found."
        }
        Verdict::MemoryLimit => {
            "The memory limit was reached before a solved or near point was found."
        }
        Verdict::Failed => "The method itself said that it failed.",
        Verdict::Crashed => "The method panicked or ended unexpectedly.",
        Verdict::Malformed => "The answer had a wrong shape or numbers that are not finite.",
        Verdict::Refused => "The method does not support this kind of constraint.",
    }
}

/// Writes how ties, censored trials, repeats and missing figures are treated.
pub(super) fn rules(input: &Input<'_>) -> Markup {
    html! {
        dl.words {
            dt { "shares" }
            dd { "Solved shares are over the trials whose optimum is known. Dashes stand where nothing was measured." }
            dt { "intervals" }
            dd {
                "95 % Wilson intervals take the instance as the unit, because repeats of one instance are no new evidence."
            }
            dt { "repeats" }
            dd {
                "Each repeat is a trial of its own in counts, medians and largest values. In intervals an instance counts \
                 once, as solved when more than half of its repeats are."
            }
            dt { "censoring" }
            dd {
                "Medians and largest values of time and effort are over all trials, whatever their verdict: a trial \
                 stopped at a limit counts with what it had used. In the geometric mean of time a trial that is not solved, \
                 near or feasible counts as the limit of " (input.wall_limit_s) " s, in PAR-10 as ten times that."
            }
            dt { "no answer" }
            dd { "A trial without digits counts as 0 digits, one without an objective as infinitely far off." }
            dt { "ties" }
            dd {
                "Trials are never ordered by a tie-break: where methods are ranked on an instance, equal values share the \
                 mean of their ranks. Rows that are equal in a sorted column keep their order of before."
            }
            dt { "rounding" }
            dd { "Cells are rounded for reading; sorting uses the exact numbers, and the CSV files hold them." }
            dt { "what repeats exactly" }
            dd {
                "Columns marked as measured, times and memory, differ from run to run. All others are the same for any \
                 number of workers; another processor may change late digits."
            }
        }
    }
}
