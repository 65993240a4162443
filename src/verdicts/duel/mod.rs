//! Adopt the challenger or keep the incumbent: a paired comparison on the same instances, by a rule
//! that is stated with its numbers and whose chance of a wrong adoption is bounded.
//!
//! [`rule::decide`] is the rule alone, cheap enough to be simulated; [`duel`] adds what a reader wants
//! to see: ratios with bootstrap intervals, families, named instances, how many more instances would
//! decide. It does not run anything: in sequential mode the caller runs more seeds and asks again with
//! [`Mode::Look`].
//!
//! When nothing differs (no difference in solved rate, log cost ratios symmetric about 0), an adoption
//! has probability at most alpha: rule 1 is an exact one-sided test at alpha/2, and rule 2 needs the
//! end of a two-sided interval at 1 - alpha to lie below a ratio that is less than one, which happens
//! with probability at most alpha/2. In sequential mode the first is a mixture martingale crossing
//! 1/alpha on the right side (Ville), the second a union bound over the looks.
//!
//! Weak points: the cost intervals take the instances as independent and the log ratios as symmetric
//! about their median; beyond 50 pairs the signed-rank distribution is approximated by a normal one;
//! the interval of the difference in solved rate is a score interval, which holds its level only
//! approximately for few pairs (it enters rules 2 and 4 together with the cost interval, never alone).

mod forecast;
mod markdown;
mod report;
mod rule;
mod text;

pub use forecast::{Forecast, Outlook, recommended_pairs};
pub use report::{FamilyRow, Named, Ratio, Replay, duel};
pub use rule::{Decision, Mode, Reason, Ruling, Sample, decide, rule_lines, sample};

use serde::Serialize;

use super::Estimate;
use super::pairing::{LeftOut, Pairing};

/// What costs are compared by.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Basis {
    /// Floating-point operations: the same on every machine.
    Effort,
    /// Processor time.
    CpuTime,
}

impl Basis {
    /// Returns the word for the cost in sentences.
    pub fn word(self) -> &'static str {
        match self {
            Basis::Effort => "effort",
            Basis::CpuTime => "processor time",
        }
    }

    /// Returns the cost below which differences are not told apart: 1 flop, 1e-4 s.
    pub fn floor(self) -> f64 {
        match self {
            Basis::Effort => 1.0,
            Basis::CpuTime => 1e-4,
        }
    }
}

/// The terms of a duel, all settable.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Terms {
    /// Loss of solved rate that is tolerated, in percentage points; 0 <= it < 100.
    pub margin_points: f64,
    /// Cost ratio challenger / incumbent that a gain must reach; 0 < it < 1.
    pub margin_ratio: f64,
    /// Largest chance of adopting when nothing differs; 0 < it <= 0.5.
    pub alpha: f64,
    /// Difference in solved rate worth detecting, in percentage points; 0 < it <= 100.
    pub detect_points: f64,
    /// Chance with which it should be detected; 0 < it < 1.
    pub power: f64,
    /// What costs are compared by.
    pub basis: Basis,
}

impl Default for Terms {
    fn default() -> Self {
        Terms {
            margin_points: 2.0,
            margin_ratio: 0.95,
            alpha: 0.05,
            detect_points: 10.0,
            power: 0.8,
            basis: Basis::Effort,
        }
    }
}

impl Terms {
    /// Checks that every term lies in its range.
    ///
    /// # Errors
    /// [`DuelError::Term`] for the first term that does not; NaN lies in no range.
    pub fn check(&self) -> Result<(), DuelError> {
        let wrong = |name, value, range| Err(DuelError::Term { name, value, range });
        if !(0.0..100.0).contains(&self.margin_points) {
            return wrong("margin in points", self.margin_points, "0 <= margin < 100");
        }
        if !(self.margin_ratio > 0.0 && self.margin_ratio < 1.0) {
            // At 1 two equal methods would be "cheaper", and nothing would bound a wrong adoption.
            return wrong("margin ratio", self.margin_ratio, "0 < ratio < 1");
        }
        if !(self.alpha > 0.0 && self.alpha <= 0.5) {
            return wrong("alpha", self.alpha, "0 < alpha <= 0.5");
        }
        if !(self.detect_points > 0.0 && self.detect_points <= 100.0) {
            return wrong("difference to detect", self.detect_points, "0 < points <= 100");
        }
        if !(self.power > 0.0 && self.power < 1.0) {
            return wrong("power", self.power, "0 < power < 1");
        }
        Ok(())
    }
}

/// Says why there is no duel.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum DuelError {
    /// A term is out of its range.
    #[error("{name} is {value}, which is not in {range}")]
    Term {
        /// Which term.
        name: &'static str,
        /// Its value.
        value: f64,
        /// Where it must lie.
        range: &'static str,
    },
    /// No instance takes part.
    #[error("`{challenger}` and `{incumbent}` share no instance whose optimum is known: {why}")]
    NoPairs {
        /// Label of the challenger.
        challenger: String,
        /// Label of the incumbent.
        incumbent: String,
        /// How many instances were left out, and why.
        why: String,
    },
}

/// P values of the exact McNemar test.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Tests {
    /// Two-sided.
    pub two_sided: f64,
    /// Two-sided mid-p, shown only.
    pub mid_p: f64,
    /// One-sided, that the challenger solves more.
    pub gain: f64,
    /// One-sided, that the challenger solves fewer.
    pub loss: f64,
}

/// A duel with everything that is shown of it. Rates and differences are shares of one.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Duel {
    /// Label of the challenger.
    pub challenger: String,
    /// Label of the incumbent.
    pub incumbent: String,
    /// Terms as given.
    pub terms: Terms,
    /// Fixed sample, or which look of a sequence.
    pub mode: Mode,
    /// The ruling.
    pub ruling: Ruling,
    /// The rule with the numbers in it, a line a clause.
    pub rule: Vec<String>,
    /// Instances compared.
    pub pairs: u64,
    /// Instances both solve.
    pub both: u64,
    /// Instances only the challenger solves.
    pub gained: u64,
    /// Instances only the incumbent solves.
    pub lost: u64,
    /// Instances neither solves.
    pub neither: u64,
    /// Share the challenger solves.
    pub challenger_rate: f64,
    /// Share the incumbent solves.
    pub incumbent_rate: f64,
    /// Exact McNemar test.
    pub tests: Tests,
    /// Effort ratio, where both methods have counts.
    pub effort: Option<Ratio>,
    /// Ratio of processor times, where both have times.
    pub time: Option<Ratio>,
    /// The same by family, in order of name.
    pub families: Vec<FamilyRow>,
    /// Instances only the challenger solves.
    pub challenger_only: Vec<Named>,
    /// Instances only the incumbent solves.
    pub incumbent_only: Vec<Named>,
    /// How many more instances would decide; only when undecided.
    pub forecast: Option<Forecast>,
    /// Instances that do not take part.
    pub left_out: LeftOut,
    /// What the reader must know: fallbacks, missing counts, survivor bias.
    pub notes: Vec<String>,
}

impl Duel {
    /// Renders the duel as text, at most 100 columns wide but for commands and names.
    pub fn to_text(&self) -> String {
        text::render(self)
    }

    /// Renders the duel as Markdown.
    pub fn to_markdown(&self) -> String {
        markdown::render(self)
    }

    /// Renders the duel as JSON; unbounded ends are `null`.
    pub fn to_json(&self) -> String {
        // Plain data with text keys: serialisation to memory cannot fail.
        serde_json::to_string_pretty(self).expect("plain data") + "\n"
    }
}

/// Looks at the pairs so far in a sequence of looks, `look` from 1, without the full report.
///
/// # Errors
/// [`DuelError`] when a term is out of its range or no instance takes part.
pub fn look(look: u64, pairing: &Pairing, terms: &Terms) -> Result<Ruling, DuelError> {
    check(pairing, terms)?;
    Ok(decide(&sample(pairing, terms.basis), terms, Mode::Look(look)))
}

/// Checks that there is something to compare, on possible terms.
fn check(pairing: &Pairing, terms: &Terms) -> Result<(), DuelError> {
    terms.check()?;
    if pairing.pairs.is_empty() {
        return Err(DuelError::NoPairs {
            challenger: pairing.challenger.clone(),
            incumbent: pairing.incumbent.clone(),
            why: pairing.left_out.sentence(),
        });
    }
    Ok(())
}
