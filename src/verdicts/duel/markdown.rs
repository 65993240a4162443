//! The Markdown form of a duel.

use super::Duel;
use super::report::Named;
use super::text::{
    FAMILY_HEAD, LEGEND, Winner, family_cells, forecast_lines, ratio_lines, solved, verdict,
};
use crate::verdicts::text::{LISTED, escaped, row, rule};

/// Renders a duel.
pub(super) fn render(duel: &Duel) -> String {
    let mut out = format!(
        "## Duel: challenger {} against incumbent {}\n\n**{}**\n\n### Rule\n\nThe first clause that applies decides.\n\n",
        escaped(&duel.challenger),
        escaped(&duel.incumbent),
        escaped(&verdict(duel))
    );
    for (at, line) in duel.rule.iter().enumerate() {
        out += &format!("{}. {}\n", at + 1, escaped(line));
    }
    out += "\n### Solved\n\n";
    for line in solved(duel) {
        out += &format!("- {}\n", escaped(&line));
    }
    out += "\n### Cost, challenger / incumbent\n\n";
    for ratio in [&duel.effort, &duel.time].into_iter().flatten() {
        for (at, line) in ratio_lines(ratio, &duel.ruling).iter().enumerate() {
            out += &format!("{}- {}\n", if at == 0 { "" } else { "  " }, escaped(line));
        }
    }
    out.push('\n');
    for note in &duel.notes {
        out += &format!("Note: {}\n\n", escaped(note));
    }
    out += "### By family\n\n";
    out += &row(&FAMILY_HEAD.map(str::to_owned));
    out += &rule(1, FAMILY_HEAD.len());
    for family in &duel.families {
        out += &row(&family_cells(family).iter().map(|cell| escaped(cell)).collect::<Vec<_>>());
    }
    out += &format!("\n{}\n", escaped(LEGEND));
    if let Some(lines) = forecast_lines(duel) {
        out += "\n### How many more instances would decide\n\n";
        for line in lines {
            out += &format!("- {}\n", escaped(&line));
        }
    }
    out += &names(&duel.challenger, &duel.challenger_only, Winner::Challenger);
    out += &names(&duel.incumbent, &duel.incumbent_only, Winner::Incumbent);
    out
}

fn names(method: &str, list: &[Named], winner: Winner) -> String {
    let mut out = format!("\n### Only {} solves ({})\n\n", escaped(method), list.len());
    if list.is_empty() {
        return out + "None.\n";
    }
    let head =
        ["instance", "the other is", "challenger's trial", "incumbent's trial", "replay the other"];
    out += &row(&head.map(str::to_owned));
    out += &rule(head.len(), head.len());
    for named in list.iter().take(LISTED) {
        let (verdict, replay) = winner.loser(named);
        out += &row(&[
            escaped(&named.instance),
            verdict.to_owned(),
            escaped(&named.challenger_trial),
            escaped(&named.incumbent_trial),
            replay.map_or(String::new(), |command| format!("`{}`", command.replace('|', "\\|"))),
        ]);
    }
    if list.len() > LISTED {
        out += &format!("\nand {} more, in the JSON form.\n", list.len() - LISTED);
    }
    out
}
