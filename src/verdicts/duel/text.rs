//! The text form of a duel.

use super::forecast::Outlook;
use super::report::{FamilyRow, Flag, Named, Ratio};
use super::{Duel, Estimate, Mode, Ruling};
use crate::verdicts::text::{
    LISTED, aligned, confidence, counted, ends, heading, percent, plain, points, probability,
    significant, wrapped,
};

/// Renders a duel.
pub(super) fn render(duel: &Duel) -> String {
    let title =
        format!("Duel: challenger {} against incumbent {}", duel.challenger, duel.incumbent);
    let mut out = heading(&title, '=');
    out += &wrapped(&verdict(duel), "", "");
    out += &format!("\n{}", heading("Rule", '-'));
    out += "The first clause that applies decides.\n";
    for (at, line) in duel.rule.iter().enumerate() {
        out += &wrapped(line, &format!("{}. ", at + 1), "   ");
    }
    out += &format!("\n{}", heading("Solved", '-'));
    for line in solved(duel) {
        out += &wrapped(&line, "", "  ");
    }
    out += &format!("\n{}", heading("Cost, challenger / incumbent", '-'));
    for ratio in [&duel.effort, &duel.time].into_iter().flatten() {
        for (at, line) in ratio_lines(ratio, &duel.ruling).iter().enumerate() {
            out += &wrapped(line, if at == 0 { "" } else { "  " }, "    ");
        }
    }
    for note in &duel.notes {
        out += &wrapped(note, "Note: ", "  ");
    }
    out += &format!("\n{}", heading("By family", '-'));
    out += &aligned(&family_table(duel));
    out += &wrapped(LEGEND, "", "");
    if let Some(lines) = forecast_lines(duel) {
        out += &format!("\n{}", heading("How many more instances would decide", '-'));
        for line in lines {
            out += &wrapped(&line, "- ", "  ");
        }
    }
    out += &names(
        &format!("Only {} solves", duel.challenger),
        &duel.challenger_only,
        Winner::Challenger,
    );
    out +=
        &names(&format!("Only {} solves", duel.incumbent), &duel.incumbent_only, Winner::Incumbent);
    out
}

/// What the columns of the family table mean.
pub(super) const LEGEND: &str = "n: instances; chall., incumb.: solved by each; won, lost: solved by the challenger \
    only, by the incumbent only; points: difference in solved rate; cost: Hodges-Lehmann ratio challenger / \
    incumbent; a dash: too few instances for an interval.";

/// Which method solved the instances of a list.
#[derive(Clone, Copy, PartialEq, Eq)]
pub(super) enum Winner {
    Challenger,
    Incumbent,
}

impl Winner {
    /// Returns the other method's verdict and the command that replays its trial.
    pub(super) fn loser(self, named: &Named) -> (&'static str, Option<&str>) {
        match self {
            Winner::Challenger => {
                (named.incumbent_verdict.word(), named.incumbent_replay.as_deref())
            }
            Winner::Incumbent => {
                (named.challenger_verdict.word(), named.challenger_replay.as_deref())
            }
        }
    }
}

/// Says what was decided and by which clause.
pub(super) fn verdict(duel: &Duel) -> String {
    let ruling = &duel.ruling;
    let look = match duel.mode {
        Mode::Fixed => String::new(),
        Mode::Look(look) => format!(" at look {look}"),
    };
    format!(
        "Decision{look}: {} (clause {}, {}), from {}.",
        ruling.decision.word().to_uppercase(),
        ruling.reason.clause(),
        ruling.reason.words(),
        counted(duel.pairs as usize, "instance", "instances")
    )
}

/// Lists what is known of the solved rates.
pub(super) fn solved(duel: &Duel) -> Vec<String> {
    let ruling = &duel.ruling;
    let mut lines = vec![format!(
        "{}: both solve {}, only the challenger {}, only the incumbent {}, neither {}.",
        counted(duel.pairs as usize, "instance", "instances"),
        duel.both,
        duel.gained,
        duel.lost,
        duel.neither
    )];
    if duel.left_out.count() > 0 {
        lines.push(format!(
            "Left out: {} ({}).",
            counted(duel.left_out.count(), "instance", "instances"),
            duel.left_out.sentence()
        ));
    }
    lines.push(format!(
        "Solved rate: challenger {}, incumbent {}; difference {} points, {} score interval {} (Tango).",
        percent(duel.challenger_rate),
        percent(duel.incumbent_rate),
        points(ruling.difference.value),
        confidence(ruling.confidence),
        ends(&ruling.difference, points)
    ));
    let tests = &duel.tests;
    lines.push(format!(
        "Exact McNemar test: one-sided p of a gain {}, of a loss {}; two-sided {}, mid-p {} (mid-p is shown only).",
        probability(tests.gain),
        probability(tests.loss),
        probability(tests.two_sided),
        probability(tests.mid_p)
    ));
    if let (Mode::Look(look), Some(e)) = (duel.mode, ruling.e_value) {
        lines.push(format!(
            "Sequence of looks: e-value {} at look {look}, decides from {}; intervals of this look at {} (levels of \
             all looks sum to {}). The p values above hold for a fixed sample only and do not decide here.",
            significant(e),
            plain(1.0 / duel.terms.alpha),
            confidence(ruling.confidence),
            plain(duel.terms.alpha)
        ));
    }
    lines
}

/// Lists what is known of a cost ratio: a head, then its estimates.
pub(super) fn ratio_lines(ratio: &Ratio, ruling: &Ruling) -> Vec<String> {
    let decides = if ratio.basis == ruling.basis { "in the rule" } else { "shown only" };
    let sure = confidence(ratio.confidence);
    let mut lines = vec![
        format!(
            "Ratio of {}, over {} both solve:",
            ratio.basis.word(),
            counted(ratio.instances as usize, "instance", "instances")
        ),
        format!(
            "Hodges-Lehmann {} {}, {sure} by signed ranks ({decides})",
            significant(ratio.shift.value),
            ends(&ratio.shift, significant)
        ),
    ];
    let mut mean = format!("geometric mean {}", significant(ratio.mean));
    if let (Some(interval), Some(making)) = (&ratio.within_families, ratio.making) {
        mean += &format!(
            " {}, {sure} {}, instances within families",
            ends(interval, significant),
            making.word()
        );
    }
    if let Some(interval) = &ratio.over_families {
        mean += &format!("; {}, {sure} BCa, over families", ends(interval, significant));
    }
    lines.push(mean);
    lines
}

fn family_table(duel: &Duel) -> Vec<Vec<String>> {
    let head = FAMILY_HEAD.map(str::to_owned).to_vec();
    let mut rows = vec![head];
    rows.extend(duel.families.iter().map(family_cells));
    for row in &mut rows {
        // The terminal has room for the adjusted p only, which is the one to go by.
        row.remove(RAW_P);
    }
    rows
}

/// Headings of the family table.
pub(super) const FAMILY_HEAD: [&str; 13] = [
    "family", "n", "chall.", "incumb.", "won", "lost", "points", "interval", "p", "Holm p", "cost",
    "interval", "",
];

/// Where the unadjusted p stands in it.
const RAW_P: usize = 8;

/// Returns the cells of a family: sizes, difference, p values, cost ratio, flag.
pub(super) fn family_cells(row: &FamilyRow) -> Vec<String> {
    let end = |end: Option<f64>| end.map_or("none".to_owned(), short);
    let (cost, interval) = match &row.cost {
        None => ("-".to_owned(), "-".to_owned()),
        Some(Estimate { value, low: None, high: None }) => (short(*value), "-".to_owned()),
        Some(cost) => (short(cost.value), format!("[{}, {}]", end(cost.low), end(cost.high))),
    };
    let whole = |share: f64| format!("{:+.0}", 100.0 * share + 0.0);
    vec![
        row.family.clone(),
        row.pairs.to_string(),
        row.challenger_solved.to_string(),
        row.incumbent_solved.to_string(),
        row.gained.to_string(),
        row.lost.to_string(),
        whole(row.difference.value),
        ends(&row.difference, whole),
        format!("{:.3}", row.p),
        format!("{:.3}", row.adjusted_p),
        cost,
        interval,
        match row.flag {
            Flag::Differs => "differs".to_owned(),
            Flag::Open => String::new(),
        },
    ]
}

/// Shows a ratio in few characters.
fn short(ratio: f64) -> String {
    if (0.01..100.0).contains(&ratio) { format!("{ratio:.2}") } else { format!("{ratio:.0e}") }
}

/// Lists the forecasts of an open duel.
pub(super) fn forecast_lines(duel: &Duel) -> Option<Vec<String>> {
    let forecast = duel.forecast?;
    let more = |total: u64| match total.checked_sub(duel.pairs) {
        Some(more) if more > 0 => format!("about {more} more, {total} in all"),
        _ => format!("none more ({total} in all): the true difference is probably smaller"),
    };
    let terms = &duel.terms;
    let detect = forecast.to_detect.map_or("more than a million".to_owned(), more);
    let first = format!(
        "To detect a difference of {} points with {} power in a fixed sample, at {} discordant instances: {detect}.",
        plain(terms.detect_points),
        confidence(terms.power),
        percent(forecast.discordant)
    );
    let second = match forecast.outlook {
        Outlook::At { pairs, decision } => format!(
            "If the present rates went on, the rule would say {} after about {} more, {pairs} in all.",
            decision.word(),
            pairs - duel.pairs
        ),
        Outlook::NotWithinMillion => {
            "If the present rates went on, the rule would not decide within a million instances."
                .to_owned()
        }
    };
    Some(vec![first, second])
}

fn names(title: &str, list: &[Named], winner: Winner) -> String {
    let mut out = format!("\n{}", heading(&format!("{title} ({})", list.len()), '-'));
    if list.is_empty() {
        return out + "None.\n";
    }
    for named in list.iter().take(LISTED) {
        let (verdict, replay) = winner.loser(named);
        out += &format!("{}: the other is {verdict}\n", named.instance);
        out +=
            &format!("  trials {}\n         {}\n", named.challenger_trial, named.incumbent_trial);
        if let Some(command) = replay {
            out += &format!("  {command}\n");
        }
    }
    if list.len() > LISTED {
        out += &format!("and {} more, in the JSON form.\n", list.len() - LISTED);
    }
    out
}
