//! The rule of a duel, apart from everything that is only shown.

use serde::Serialize;

use super::{Basis, Estimate, Terms};
use crate::stats::Interval;
use crate::stats::paired::{Discordance, difference_interval, mcnemar};
use crate::stats::sequential::{e_value, look_level};
use crate::stats::signed_rank::hodges_lehmann;
use crate::verdicts::pairing::{Pair, Pairing};
use crate::verdicts::text::{confidence, plain};

/// Whether the sample was fixed beforehand or is looked at while it grows.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Mode {
    /// One look at a sample whose size does not depend on its outcome.
    Fixed,
    /// This look, from 1, at a sample that grows until a decision.
    Look(u64),
}

/// What to do.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Decision {
    /// Take the challenger.
    Adopt,
    /// Keep the incumbent.
    Keep,
    /// The pairs do not tell.
    Undecided,
}

impl Decision {
    /// Returns the word.
    pub fn word(self) -> &'static str {
        match self {
            Decision::Adopt => "adopt",
            Decision::Keep => "keep",
            Decision::Undecided => "undecided",
        }
    }
}

/// Which clause of the rule decided, in the order in which they are tried.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Reason {
    /// Clause 1, adopt.
    SolvesMore,
    /// Clause 2, adopt.
    NoWorseAndCheaper,
    /// Clause 3, keep.
    SolvesFewer,
    /// Clause 4, keep.
    NothingGained,
    /// Clause 5, undecided.
    Open,
}

impl Reason {
    /// Returns what to do.
    pub fn decision(self) -> Decision {
        match self {
            Reason::SolvesMore | Reason::NoWorseAndCheaper => Decision::Adopt,
            Reason::SolvesFewer | Reason::NothingGained => Decision::Keep,
            Reason::Open => Decision::Undecided,
        }
    }

    /// Returns the words of the clause.
    pub fn words(self) -> &'static str {
        match self {
            Reason::SolvesMore => "solves more",
            Reason::NoWorseAndCheaper => "no worse and cheaper",
            Reason::SolvesFewer => "solves fewer",
            Reason::NothingGained => "nothing gained",
            Reason::Open => "no clause applies",
        }
    }

    /// Returns the number of the clause.
    pub fn clause(self) -> usize {
        match self {
            Reason::SolvesMore => 1,
            Reason::NoWorseAndCheaper => 2,
            Reason::SolvesFewer => 3,
            Reason::NothingGained => 4,
            Reason::Open => 5,
        }
    }
}

/// What the rule looks at.
#[derive(Clone, Debug, PartialEq)]
pub struct Sample {
    /// Pairs by who solved them.
    pub counts: Discordance,
    /// Natural logarithms of the cost ratios challenger / incumbent over the pairs both solve.
    pub log_ratios: Vec<f64>,
    /// What the costs are.
    pub basis: Basis,
}

/// What the rule says, and what it saw.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Ruling {
    /// What to do.
    pub decision: Decision,
    /// Which clause decided.
    pub reason: Reason,
    /// What costs were compared by in the end.
    pub basis: Basis,
    /// Confidence of both intervals.
    pub confidence: f64,
    /// Difference in solved rate, challenger less incumbent, with its score interval; shares.
    pub difference: Estimate,
    /// Hodges-Lehmann cost ratio with its signed-rank interval; none without a jointly solved pair.
    pub cost: Option<Estimate>,
    /// Mixture e-value of the discordant pairs; only in a sequence of looks.
    pub e_value: Option<f64>,
}

/// Returns the logarithms of the cost ratios over jointly solved pairs that have both costs.
pub(super) fn log_ratios<'a>(pairs: impl Iterator<Item = &'a Pair>, basis: Basis) -> Vec<f64> {
    let cost = |flops: Option<f64>, cpu_s: Option<f64>| {
        let cost = match basis {
            Basis::Effort => flops,
            Basis::CpuTime => cpu_s,
        };
        cost.map(|cost| cost.max(basis.floor()).ln())
    };
    pairs
        .filter(|pair| pair.challenger.is_solved() && pair.incumbent.is_solved())
        .filter_map(|pair| {
            let challenger = cost(pair.challenger.flops, pair.challenger.cpu_s)?;
            let incumbent = cost(pair.incumbent.flops, pair.incumbent.cpu_s)?;
            Some(challenger - incumbent)
        })
        .collect()
}

/// Returns what the rule looks at. Costs are processor times in place of effort when no jointly solved
/// pair has effort counts of both methods but one has both times.
pub fn sample(pairing: &Pairing, basis: Basis) -> Sample {
    let counts = pairing.discordance();
    let wanted = log_ratios(pairing.pairs.iter(), basis);
    if wanted.is_empty() && basis == Basis::Effort {
        let times = log_ratios(pairing.pairs.iter(), Basis::CpuTime);
        if !times.is_empty() {
            return Sample { counts, log_ratios: times, basis: Basis::CpuTime };
        }
    }
    Sample { counts, log_ratios: wanted, basis }
}

/// Applies the rule (see [`rule_lines`]). The caller has checked the terms.
pub fn decide(sample: &Sample, terms: &Terms, mode: Mode) -> Ruling {
    let level = level(terms, mode);
    let shift = hodges_lehmann(&sample.log_ratios, 1.0 - level);
    let shift = shift.map(|shift| (shift.estimate, shift.interval));
    Ruling { basis: sample.basis, ..rule(sample.counts, shift, terms, mode) }
}

/// Returns the two-sided level of the intervals.
pub(super) fn level(terms: &Terms, mode: Mode) -> f64 {
    match mode {
        Mode::Fixed => terms.alpha,
        Mode::Look(look) => look_level(look, terms.alpha),
    }
}

/// Applies the rule to counts and to the shift of the log cost ratio with its interval.
pub(super) fn rule(
    counts: Discordance,
    shift: Option<(f64, Interval)>,
    terms: &Terms,
    mode: Mode,
) -> Ruling {
    let confidence = 1.0 - level(terms, mode);
    let difference = difference_interval(counts, confidence);
    let margin = terms.margin_points / 100.0;
    let target = terms.margin_ratio.ln();
    let (e, more, fewer) = match mode {
        Mode::Fixed => {
            let tests = mcnemar(counts);
            (None, tests.gain <= terms.alpha / 2.0, tests.loss <= terms.alpha / 2.0)
        }
        Mode::Look(_) => {
            let e = e_value(counts.gained, counts.lost);
            let crossed = e >= 1.0 / terms.alpha;
            (
                Some(e),
                crossed && counts.gained > counts.lost,
                crossed && counts.lost > counts.gained,
            )
        }
    };
    let reason = if more {
        Reason::SolvesMore
    } else if difference.low >= -margin && shift.is_some_and(|(_, ends)| ends.high <= target) {
        Reason::NoWorseAndCheaper
    } else if fewer {
        Reason::SolvesFewer
    } else if difference.high <= margin && shift.is_some_and(|(_, ends)| ends.low >= target) {
        Reason::NothingGained
    } else {
        Reason::Open
    };
    Ruling {
        decision: reason.decision(),
        reason,
        basis: terms.basis,
        confidence,
        difference: Estimate::new(counts.difference(), difference),
        cost: shift.map(|(value, ends)| Estimate::new(value, ends).map(f64::exp)),
        e_value: e,
    }
}

/// Words the rule with the user's numbers in it, a line a clause; the first that applies decides.
pub fn rule_lines(terms: &Terms, mode: Mode, basis: Basis) -> Vec<String> {
    let sure = confidence(1.0 - level(terms, mode));
    let half = plain(terms.alpha / 2.0);
    let (points, ratio) = (plain(terms.margin_points), plain(terms.margin_ratio));
    let cost = basis.word();
    let (more, fewer) = match mode {
        Mode::Fixed => (
            format!(
                "the one-sided exact p (McNemar) of a gain in solved instances is at most {half}"
            ),
            format!(
                "the one-sided exact p (McNemar) of a loss in solved instances is at most {half}"
            ),
        ),
        Mode::Look(_) => {
            let bound = plain(1.0 / terms.alpha);
            (
                format!(
                    "the e-value of the discordant pairs is at least {bound}, more of them gained than lost"
                ),
                format!(
                    "the e-value of the discordant pairs is at least {bound}, more of them lost than gained"
                ),
            )
        }
    };
    vec![
        format!("adopt, \"solves more\": {more}."),
        format!(
            "adopt, \"no worse and cheaper\": the {sure} interval of the difference in solved rate lies at or \
             above -{points} points, and the {sure} interval of the {cost} ratio challenger / incumbent lies at \
             or below {ratio}."
        ),
        format!("keep, \"solves fewer\": {fewer}."),
        format!(
            "keep, \"nothing gained\": the {sure} interval of the difference lies at or below +{points} points, \
             and the {sure} interval of the {cost} ratio lies at or above {ratio}."
        ),
        "undecided otherwise.".to_owned(),
    ]
}
