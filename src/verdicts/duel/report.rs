//! A duel with all that is shown of it: ratios, families, named instances, forecast, notes.

use std::collections::BTreeMap;

use serde::Serialize;

use super::forecast::forecast;
use super::rule::{Decision, Mode, Sample, decide, log_ratios, rule_lines, sample};
use super::{Basis, Duel, DuelError, Estimate, Terms, Tests, check};
use crate::record::Verdict;
use crate::stats::multiple::holm;
use crate::stats::paired::{difference_interval, mcnemar};
use crate::stats::signed_rank::hodges_lehmann;
use crate::verdicts::means::{Making, mean, over_groups, within_groups};
use crate::verdicts::pairing::{Pair, Pairing, discordance};
use crate::verdicts::text::{confidence, counted};

/// Fewest families that are drawn anew as wholes.
const FAMILIES: usize = 6;

/// A cost ratio challenger / incumbent over the instances that both solve.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Ratio {
    /// What the costs are.
    pub basis: Basis,
    /// Instances it is over.
    pub instances: u64,
    /// Jointly solved instances without the figure of both methods.
    pub without_figures: u64,
    /// Confidence of the intervals.
    pub confidence: f64,
    /// Hodges-Lehmann ratio with its signed-rank interval.
    pub shift: Estimate,
    /// Geometric mean of the ratios.
    pub mean: f64,
    /// Its interval, instances drawn anew within each family; none when no family has two.
    pub within_families: Option<Estimate>,
    /// How that interval was made.
    pub making: Option<Making>,
    /// Its BCa interval, whole families drawn anew; only with at least 6 families.
    pub over_families: Option<Estimate>,
}

/// A family's part of the duel.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct FamilyRow {
    /// Family.
    pub family: String,
    /// Instances compared.
    pub pairs: u64,
    /// Instances the challenger solves.
    pub challenger_solved: u64,
    /// Instances the incumbent solves.
    pub incumbent_solved: u64,
    /// Instances only the challenger solves.
    pub gained: u64,
    /// Instances only the incumbent solves.
    pub lost: u64,
    /// Difference in solved rate with its score interval; shares.
    pub difference: Estimate,
    /// Exact two-sided p.
    pub p: f64,
    /// The same, adjusted over the families by Holm's procedure.
    pub adjusted_p: f64,
    /// Hodges-Lehmann cost ratio; none without a jointly solved pair that has both costs.
    pub cost: Option<Estimate>,
    /// `differs` when the adjusted p is at most alpha.
    pub flag: Flag,
}

/// Whether a family stands out.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Flag {
    /// The adjusted p is at most alpha.
    Differs,
    /// It is not.
    Open,
}

/// An instance that one method solves and the other does not.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Named {
    /// Id of the instance.
    pub instance: String,
    /// Its family.
    pub family: String,
    /// Trial of the challenger.
    pub challenger_trial: String,
    /// Verdict of that trial.
    pub challenger_verdict: Verdict,
    /// Trial of the incumbent.
    pub incumbent_trial: String,
    /// Verdict of that trial.
    pub incumbent_verdict: Verdict,
    /// Command that replays the challenger's trial, where its run folder is known.
    pub challenger_replay: Option<String>,
    /// Command that replays the incumbent's trial, where its run folder is known.
    pub incumbent_replay: Option<String>,
}

/// How commands that replay a trial are made.
#[derive(Clone, Copy)]
pub struct Replay<'a> {
    /// The program as it was called.
    pub program: &'a str,
    /// Finds the run folder of a trial.
    pub folder: &'a dyn Fn(&str) -> Option<String>,
}

impl Replay<'_> {
    fn command(&self, trial: &str) -> Option<String> {
        let folder = (self.folder)(trial)?;
        Some(format!("{} replay {} {}", self.program, quoted(&folder), quoted(trial)))
    }
}

/// Quotes a word for a POSIX shell where it must be.
fn quoted(word: &str) -> String {
    let safe = |c: char| c.is_ascii_alphanumeric() || "-_./=:,+@%".contains(c);
    if !word.is_empty() && word.chars().all(safe) {
        word.to_owned()
    } else {
        format!("'{}'", word.replace('\'', "'\\''"))
    }
}

/// Holds the challenger against the incumbent and gathers all that is shown.
///
/// # Errors
/// [`DuelError`] when a term is out of its range or no instance takes part.
pub fn duel(
    pairing: &Pairing,
    terms: &Terms,
    mode: Mode,
    replay: &Replay<'_>,
) -> Result<Duel, DuelError> {
    check(pairing, terms)?;
    let sample = sample(pairing, terms.basis);
    let ruling = decide(&sample, terms, mode);
    let counts = sample.counts;
    let tests = mcnemar(counts);
    let solved = |side: fn(&Pair) -> bool| pairing.pairs.iter().filter(|p| side(p)).count() as u64;
    let challenger = solved(|pair| pair.challenger.is_solved());
    let incumbent = solved(|pair| pair.incumbent.is_solved());
    let both = challenger - counts.gained;
    let effort = ratio(pairing, Basis::Effort, both, ruling.confidence);
    let time = ratio(pairing, Basis::CpuTime, both, ruling.confidence);
    let named = |gain: bool| {
        let only = move |pair: &&Pair| {
            pair.challenger.is_solved() == gain && pair.incumbent.is_solved() != gain
        };
        pairing.pairs.iter().filter(only).map(|pair| name(pair, replay)).collect()
    };
    Ok(Duel {
        challenger: pairing.challenger.clone(),
        incumbent: pairing.incumbent.clone(),
        terms: *terms,
        mode,
        ruling,
        rule: rule_lines(terms, mode, sample.basis),
        pairs: counts.pairs,
        both,
        gained: counts.gained,
        lost: counts.lost,
        neither: counts.pairs - both - counts.gained - counts.lost,
        challenger_rate: challenger as f64 / counts.pairs as f64,
        incumbent_rate: incumbent as f64 / counts.pairs as f64,
        tests: Tests {
            two_sided: tests.two_sided,
            mid_p: tests.mid_p,
            gain: tests.gain,
            loss: tests.loss,
        },
        families: families(pairing, terms, sample.basis),
        challenger_only: named(true),
        incumbent_only: named(false),
        forecast: (ruling.decision == Decision::Undecided).then(|| forecast(&sample, terms, mode)),
        left_out: pairing.left_out.clone(),
        notes: notes(terms, &sample, both, [&effort, &time]),
        effort,
        time,
    })
}

/// Measures a cost ratio; none when no jointly solved pair has both figures.
fn ratio(pairing: &Pairing, basis: Basis, both: u64, sure: f64) -> Option<Ratio> {
    let logs = log_ratios(pairing.pairs.iter(), basis);
    let shift = hodges_lehmann(&logs, sure)?;
    let groups: Vec<Vec<f64>> = by_family(pairing)
        .values()
        .map(|pairs| log_ratios(pairs.iter().copied(), basis))
        .filter(|logs| !logs.is_empty())
        .collect();
    let joined = |ends| Estimate::new(mean(&logs), ends).map(f64::exp);
    let within = within_groups(&groups, sure);
    let over_families =
        if groups.len() >= FAMILIES { over_groups(&groups, sure).map(joined) } else { None };
    Some(Ratio {
        basis,
        instances: logs.len() as u64,
        without_figures: both - logs.len() as u64,
        confidence: sure,
        shift: Estimate::new(shift.estimate, shift.interval).map(f64::exp),
        mean: mean(&logs).exp(),
        within_families: within.map(|(ends, _)| joined(ends)),
        making: within.map(|(_, making)| making),
        over_families,
    })
}

fn by_family(pairing: &Pairing) -> BTreeMap<&str, Vec<&Pair>> {
    let mut families: BTreeMap<&str, Vec<&Pair>> = BTreeMap::new();
    for pair in &pairing.pairs {
        families.entry(&pair.family).or_default().push(pair);
    }
    families
}

fn families(pairing: &Pairing, terms: &Terms, basis: Basis) -> Vec<FamilyRow> {
    let sure = 1.0 - terms.alpha;
    let mut rows: Vec<FamilyRow> = by_family(pairing)
        .iter()
        .map(|(family, pairs)| {
            let counts = discordance(pairs.iter().copied());
            let solved = pairs.iter().filter(|pair| pair.challenger.is_solved()).count() as u64;
            let shift = hodges_lehmann(&log_ratios(pairs.iter().copied(), basis), sure);
            FamilyRow {
                family: (*family).to_owned(),
                pairs: counts.pairs,
                challenger_solved: solved,
                incumbent_solved: solved - counts.gained + counts.lost,
                gained: counts.gained,
                lost: counts.lost,
                difference: Estimate::new(counts.difference(), difference_interval(counts, sure)),
                p: mcnemar(counts).two_sided,
                adjusted_p: 1.0,
                cost: shift
                    .map(|shift| Estimate::new(shift.estimate, shift.interval).map(f64::exp)),
                flag: Flag::Open,
            }
        })
        .collect();
    let adjusted = holm(&rows.iter().map(|row| row.p).collect::<Vec<_>>());
    for (row, adjusted) in rows.iter_mut().zip(adjusted) {
        row.adjusted_p = adjusted;
        if adjusted <= terms.alpha {
            row.flag = Flag::Differs;
        }
    }
    rows
}

fn name(pair: &Pair, replay: &Replay<'_>) -> Named {
    Named {
        instance: pair.instance.clone(),
        family: pair.family.clone(),
        challenger_trial: pair.challenger.trial.clone(),
        challenger_verdict: pair.challenger.verdict,
        incumbent_trial: pair.incumbent.trial.clone(),
        incumbent_verdict: pair.incumbent.verdict,
        challenger_replay: replay.command(&pair.challenger.trial),
        incumbent_replay: replay.command(&pair.incumbent.trial),
    }
}

fn notes(terms: &Terms, sample: &Sample, both: u64, ratios: [&Option<Ratio>; 2]) -> Vec<String> {
    let mut notes = vec![
        "Cost ratios are over the instances that both methods solve; what a method spends on instances it alone \
         solves, or in vain, is not in them (survivor bias)."
            .to_owned(),
    ];
    if sample.basis != terms.basis {
        notes.push(
            "No jointly solved instance has effort counts of both methods: the rule compares processor times \
             instead, which depend on the machine and its load."
                .to_owned(),
        );
    } else if sample.log_ratios.is_empty() {
        let why =
            if both == 0 { "no instance is solved by both" } else { "no figure of both methods" };
        notes.push(format!(
            "There is no {} ratio ({why}): clauses 2 and 4 cannot apply.",
            sample.basis.word()
        ));
    }
    for ratio in ratios.into_iter().flatten().filter(|ratio| ratio.without_figures > 0) {
        notes.push(format!(
            "{} without a figure of both methods: left out of the {} ratio.",
            counted(
                ratio.without_figures as usize,
                "jointly solved instance is",
                "jointly solved instances are"
            ),
            ratio.basis.word()
        ));
    }
    notes.push(format!(
        "Families: {} intervals, p values adjusted by Holm's procedure over the families.",
        confidence(1.0 - terms.alpha)
    ));
    notes
}

#[cfg(test)]
mod tests {
    use super::quoted;

    #[test]
    fn words_are_quoted_for_the_shell() {
        let words = ["0001-a-order=20-x", "", "a b", "it's"].map(quoted);
        assert_eq!(words, ["0001-a-order=20-x", "''", "'a b'", "'it'\\''s'"]);
    }
}
