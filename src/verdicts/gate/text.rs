//! The text form of a gate, and the phrases its other forms share.

use super::metric::CONFIDENCE;
use super::{
    Change, Gate, Kind, Making, MethodGate, Metric, Outcome, Passage, Presence, Strictness,
};
use crate::verdicts::text::{
    LISTED, confidence, counted, ends, heading, percent, plain, points, significant, wrapped,
};

/// Renders a gate.
pub(super) fn render(gate: &Gate) -> String {
    let mut out = heading(&headline(gate), '=');
    out += &wrapped(&origin_line(gate), "", "");
    for note in &gate.notes {
        out += &wrapped(note, "Note: ", "  ");
    }
    for method in &gate.methods {
        let trials = counted(method.trials as usize, "trial", "trials");
        out += &format!("\n{}", heading(&format!("{}: {trials} in both", method.method), '-'));
        if let Some(problem) = presence_line(method) {
            out += &wrapped(&problem, "  ", "    ");
        }
        for metric in &method.metrics {
            let first = format!("  {:<7} {:<13}", metric.kind.word(), shouted(metric.outcome));
            out += &wrapped(&metric_line(metric), &first, &" ".repeat(12));
        }
        out += &names("Missing", &method.missing);
        out += &names("Worse", &changes(&method.worse));
        out += &names("Better", &changes(&method.better));
    }
    for (title, list) in whole_lists(gate) {
        if !list.is_empty() {
            let title = format!("{title} ({})", list.len());
            out += &format!("\n{}{}", heading(&title, '-'), listed(&list));
        }
    }
    out += &format!("\n{}", heading("How it is judged", '-'));
    out + &wrapped(&rule_line(gate), "", "")
}

/// Says in one line how it went.
pub(super) fn headline(gate: &Gate) -> String {
    let tally = gate.tally();
    let mut parts = vec![
        format!("{} regressed", tally.regressed),
        format!("{} improved", tally.improved),
        format!("{} undecided", tally.undecided),
    ];
    parts.push(if tally.holds == 1 {
        "1 holds".to_owned()
    } else {
        format!("{} hold", tally.holds)
    });
    if tally.not_compared > 0 {
        parts.push(format!("{} not compared", tally.not_compared));
    }
    let word = match gate.passage {
        Passage::Passes => "PASSES",
        Passage::Fails => "FAILS",
    };
    format!("Gate {word}: {}", parts.join(", "))
}

/// Says what was held against what.
pub(super) fn origin_line(gate: &Gate) -> String {
    format!(
        "Run \"{}\" ({}, version {}) against baseline \"{}\" ({}, version {}).",
        gate.run.title,
        counted(gate.run.trials as usize, "trial", "trials"),
        gate.run.version,
        gate.baseline.title,
        counted(gate.baseline.trials as usize, "trial", "trials"),
        gate.baseline.version
    )
}

/// Says what is wrong with the trials of a method, if anything is.
pub(super) fn presence_line(method: &MethodGate) -> Option<String> {
    match &method.presence {
        Presence::Complete => None,
        Presence::Missing => Some(format!(
            "REGRESSED: {} of the baseline missing in the run.",
            counted(method.missing.len(), "trial", "trials")
        )),
        Presence::ChangedOptions { baseline, run } => Some(format!(
            "REGRESSED: changed options, so that it is another method: baseline `{baseline}`, run `{run}`. When \
             this is meant, renew the baseline with --accept."
        )),
    }
}

fn shouted(outcome: Outcome) -> String {
    match outcome {
        Outcome::Regressed => outcome.word().to_uppercase(),
        _ => outcome.word().to_owned(),
    }
}

/// Words a figure: change, interval, values, band.
pub(super) fn metric_line(metric: &Metric) -> String {
    let (Some(old), Some(new)) = (metric.baseline, metric.run) else {
        let why = match metric.kind {
            Kind::Solved => "no trial is in both",
            Kind::Rank => "no trial has an answer in both",
            Kind::Digits => "no trial with digits is solved in both",
            Kind::Effort => "no trial with counts is solved in both",
            Kind::Time => "no trial with a time is solved in both",
        };
        return format!("{why}.");
    };
    let values = match metric.kind {
        Kind::Solved | Kind::Rank => format!("{} -> {}", percent(old), percent(new)),
        Kind::Digits => format!("mean {old:.2} -> {new:.2}"),
        Kind::Effort => {
            format!("geometric mean {} -> {} flops", significant(old), significant(new))
        }
        Kind::Time => {
            format!("geometric mean {} -> {} s as measured", significant(old), significant(new))
        }
    };
    format!(
        "{}; {values}; {}; {}.",
        change_words(metric),
        band_words(metric),
        counted(metric.instances as usize, "instance", "instances")
    )
}

/// Words the change with its direction and its interval.
pub(super) fn change_words(metric: &Metric) -> String {
    let Some(change) = &metric.change else {
        return "nothing to compare".to_owned();
    };
    let centre = if metric.kind.is_ratio() { 1.0 } else { 0.0 };
    let direction = if change.value > centre {
        "up"
    } else if change.value < centre {
        "down"
    } else {
        "no change"
    };
    let (amount, interval) = match metric.kind {
        Kind::Solved | Kind::Rank => {
            (format!("{} points", points(change.value)), ends(change, points))
        }
        Kind::Digits => {
            let digits = |value: f64| format!("{:+.2}", value + 0.0);
            (format!("{} digits", digits(change.value)), ends(change, digits))
        }
        Kind::Effort | Kind::Time => {
            (format!("ratio {}", ratio(change.value)), ends(change, ratio))
        }
    };
    match metric.making {
        Some(Making::Same) if change.value == centre => direction.to_owned(),
        Some(Making::Same) => format!("{direction}, {amount}, {}", Making::Same.word()),
        Some(making @ (Making::Range | Making::TooFew)) => {
            format!("{direction}, {amount} {interval} ({})", making.word())
        }
        _ => format!("{direction}, {amount} {interval}"),
    }
}

/// Shows a ratio near one so that a percent can be seen.
fn ratio(value: f64) -> String {
    if (0.1..10.0).contains(&value) { format!("{value:.3}") } else { significant(value) }
}

fn band_words(metric: &Metric) -> String {
    let [low, high] = metric.band;
    let unit = |value: f64, unit: &str| {
        let number = plain(value);
        let plural = if number == "1" { "" } else { "s" };
        format!("band {number} {unit}{plural}")
    };
    match metric.kind {
        Kind::Solved | Kind::Rank => unit(100.0 * high, "point"),
        Kind::Digits => unit(high, "digit"),
        Kind::Effort | Kind::Time => format!("band [{}, {}]", ratio(low), ratio(high)),
    }
}

/// Words changed verdicts.
pub(super) fn changes(list: &[Change]) -> Vec<String> {
    list.iter()
        .map(|change| {
            format!("{}: {} -> {}", change.trial, change.baseline.word(), change.run.word())
        })
        .collect()
}

/// Lists what concerns the whole run: a title and names.
pub(super) fn whole_lists(gate: &Gate) -> [(&'static str, Vec<String>); 3] {
    let short = |digest: &str| digest.chars().take(12).collect::<String>();
    let changed = gate.changed_instances.iter().map(|changed| {
        let (old, new) = (short(&changed.baseline), short(&changed.run));
        format!("{}: digest {old} -> {new}", changed.instance)
    });
    [
        ("REGRESSED: instances changed under their id", changed.collect()),
        ("New methods, not judged", gate.new_methods.clone()),
        ("New instances, not judged", gate.new_instances.clone()),
    ]
}

/// Words the rule.
pub(super) fn rule_line(gate: &Gate) -> String {
    let undecided = match gate.terms.strictness {
        Strictness::Regressed => "Only what regressed fails the gate.",
        Strictness::Undecided => "What regressed or is undecided fails the gate.",
    };
    format!(
        "Intervals are at {} (95 % to each side), instances are the unit. Regressed or improved: the interval lies \
         beyond the band; for shares also when the one-sided exact McNemar p is at most 0.05 and the change itself \
         lies beyond the band. Holds: the interval, or the change of every instance, lies inside the band, or no \
         instance changed: both runs share instances and random streams. {undecided}",
        confidence(CONFIDENCE)
    )
}

fn names(title: &str, list: &[String]) -> String {
    if list.is_empty() {
        return String::new();
    }
    format!("  {title} ({}):\n{}", list.len(), listed(list))
}

fn listed(list: &[String]) -> String {
    let mut out = String::new();
    for name in list.iter().take(LISTED) {
        out += &format!("    {name}\n");
    }
    if list.len() > LISTED {
        out += &format!("    and {} more, in the JSON form\n", list.len() - LISTED);
    }
    out
}
