//! The Markdown form of a gate, for a pull request.

use super::text::{
    change_words, changes, headline, origin_line, presence_line, rule_line, whole_lists,
};
use super::{Gate, Kind, MethodGate, Outcome, Presence, TimeBasis};
use crate::verdicts::text::{LISTED, escaped, row, rule};

/// Renders a gate.
pub(super) fn render(gate: &Gate) -> String {
    let mut out = format!("**{}.** {}\n\n", escaped(&headline(gate)), escaped(&origin_line(gate)));
    let mut kinds = vec![Kind::Solved, Kind::Digits, Kind::Rank, Kind::Effort];
    if gate.terms.time == TimeBasis::Calibrated {
        kinds.push(Kind::Time);
    }
    let mut head = vec!["method".to_owned(), "trials".to_owned()];
    head.extend(kinds.iter().map(|kind| kind.word().to_owned()));
    out += &row(&head);
    out += &rule(head.len(), head.len());
    for method in &gate.methods {
        out += &row(&cells(method, &kinds));
    }
    for note in &gate.notes {
        out += &format!("\n{}\n", escaped(note));
    }
    for method in &gate.methods {
        let title = |what: &str| format!("{what}: {}", method.method);
        if let Some(line) = presence_line(method) {
            out += &format!("\n{}: {}\n", escaped(&method.method), escaped(&line));
        }
        out += &folded(&title("Trials missing in the run"), &method.missing);
        out += &folded(&title("Verdicts that became worse"), &changes(&method.worse));
        out += &folded(&title("Verdicts that became better"), &changes(&method.better));
    }
    for (title, list) in whole_lists(gate) {
        out += &folded(title, &list);
    }
    out += &format!(
        "\n<details><summary>How it is judged</summary>\n\n{}\n\n</details>\n",
        escaped(&rule_line(gate))
    );
    out
}

fn cells(method: &MethodGate, kinds: &[Kind]) -> Vec<String> {
    let trials = match &method.presence {
        Presence::Complete => method.trials.to_string(),
        Presence::Missing => format!("**regressed**: {} missing", method.missing.len()),
        Presence::ChangedOptions { .. } => "**regressed**: changed options".to_owned(),
    };
    let mut cells = vec![escaped(&method.method), trials];
    cells.extend(kinds.iter().map(|kind| {
        let Some(metric) = method.metrics.iter().find(|metric| metric.kind == *kind) else {
            return String::new();
        };
        let word = metric.outcome.word();
        match metric.outcome {
            Outcome::NotCompared => word.to_owned(),
            Outcome::Regressed | Outcome::Improved => {
                format!("**{word}**: {}", escaped(&change_words(metric)))
            }
            Outcome::Holds | Outcome::Undecided => {
                format!("{word}: {}", escaped(&change_words(metric)))
            }
        }
    }));
    cells
}

fn folded(title: &str, list: &[String]) -> String {
    if list.is_empty() {
        return String::new();
    }
    let mut out = format!(
        "\n<details><summary>{} ({})</summary>\n\n",
        escaped(title).replace('\\', ""),
        list.len()
    );
    for name in list.iter().take(LISTED) {
        out += &format!("- {}\n", escaped(name));
    }
    if list.len() > LISTED {
        out += &format!("- and {} more\n", list.len() - LISTED);
    }
    out + "\n</details>\n"
}
