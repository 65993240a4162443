//! How many more instances would decide an open duel. All numbers here are forecasts: "about".

use serde::Serialize;

use super::Terms;
use super::rule::{Decision, Mode, Sample, level, rule};
use crate::stats::Interval;
use crate::stats::paired::{Discordance, sample_size};
use crate::stats::signed_rank::hodges_lehmann;

/// Largest number of pairs looked at.
const MOST: u64 = 1_000_000;

/// Pairs that a sample is repeated to before the width of its cost interval is scaled.
const ENOUGH: usize = 40;

/// What would happen if the present rates went on.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Outlook {
    /// At about this many pairs in all the rule would say this.
    At {
        /// Pairs in all.
        pairs: u64,
        /// What the rule would say.
        decision: Decision,
    },
    /// It would not decide within a million pairs.
    NotWithinMillion,
}

/// How many instances would decide.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Forecast {
    /// Share of discordant pairs that the sample size is computed with.
    pub discordant: f64,
    /// Pairs in all at which the difference to detect is detected with the power asked for.
    pub to_detect: Option<u64>,
    /// What would happen if the present rates went on.
    pub outlook: Outlook,
}

/// Returns about how many pairs detect a difference in solved rate of `detect_points` by clauses 1 and
/// 3 of a fixed sample with the power asked for, when this share of the pairs is discordant; none
/// beyond a million.
///
/// The share counts as at least the difference itself, and at most 1. The exact size is rounded up to
/// two significant digits, as an "about" it is.
pub fn recommended_pairs(terms: &Terms, discordant: f64) -> Option<u64> {
    let detect = terms.detect_points / 100.0;
    let discordant = discordant.clamp(detect, 1.0);
    let (gained, lost) = ((discordant + detect) / 2.0, (discordant - detect) / 2.0);
    let pairs = sample_size(gained, lost, terms.power, terms.alpha)?;
    Some(rounded_up(pairs)).filter(|pairs| *pairs <= MOST)
}

/// Rounds up to two significant digits.
fn rounded_up(count: u64) -> u64 {
    let mut unit = 1;
    while count / unit >= 100 {
        unit *= 10;
    }
    count.div_ceil(unit) * unit
}

/// Forecasts how many pairs would decide.
pub(super) fn forecast(sample: &Sample, terms: &Terms, mode: Mode) -> Forecast {
    let counts = sample.counts;
    // Half a pair more of each kind keeps a sample without discordant pairs from promising none.
    let smoothed = (counts.gained + counts.lost) as f64 + 0.5;
    let discordant =
        (smoothed / (counts.pairs as f64 + 1.0)).clamp(terms.detect_points / 100.0, 1.0);
    Forecast {
        discordant,
        to_detect: recommended_pairs(terms, discordant),
        outlook: outlook(sample, terms, mode),
    }
}

/// Finds the number of pairs at which the rule decides when counts and costs scale in proportion.
fn outlook(sample: &Sample, terms: &Terms, mode: Mode) -> Outlook {
    // The next look is the soonest at which a larger sample can be seen.
    let mode = match mode {
        Mode::Fixed => Mode::Fixed,
        Mode::Look(look) => Mode::Look(look + 1),
    };
    let now = sample.counts.pairs;
    let costs = Costs::of(sample, terms, mode);
    let at = |pairs: u64| {
        let factor = pairs as f64 / now as f64;
        let scaled = |count: u64| (count as f64 * factor).round() as u64;
        let gained = scaled(sample.counts.gained);
        let counts =
            Discordance { pairs, gained, lost: scaled(sample.counts.lost).min(pairs - gained) };
        rule(counts, costs.as_ref().map(|costs| costs.at(factor)), terms, mode).decision
    };
    if now == 0 {
        return Outlook::NotWithinMillion;
    }
    let (mut open, mut closed) = (now, now);
    while at(closed) == Decision::Undecided {
        if closed >= MOST {
            return Outlook::NotWithinMillion;
        }
        open = closed;
        closed = (2 * closed).min(MOST);
    }
    while closed - open > 1 {
        let middle = open + (closed - open) / 2;
        if at(middle) == Decision::Undecided {
            open = middle;
        } else {
            closed = middle;
        }
    }
    Outlook::At { pairs: closed, decision: at(closed) }
}

/// The log cost ratio and the reach of its interval to both sides at the present number of pairs.
struct Costs {
    shift: f64,
    below: f64,
    above: f64,
}

impl Costs {
    /// Measures the interval; a sample too small for a finite one is repeated first.
    fn of(sample: &Sample, terms: &Terms, mode: Mode) -> Option<Costs> {
        let logs = &sample.log_ratios;
        if logs.is_empty() {
            return None;
        }
        let times = ENOUGH.div_ceil(logs.len());
        let shift = hodges_lehmann(&logs.repeat(times), 1.0 - level(terms, mode))?;
        let widen = (times as f64).sqrt();
        Some(Costs {
            shift: shift.estimate,
            below: (shift.estimate - shift.interval.low) * widen,
            above: (shift.interval.high - shift.estimate) * widen,
        })
    }

    /// Returns the shift and its interval at `factor` times the present number of pairs: widths shrink
    /// with the root.
    fn at(&self, factor: f64) -> (f64, Interval) {
        let root = factor.sqrt();
        let ends =
            Interval { low: self.shift - self.below / root, high: self.shift + self.above / root };
        (self.shift, ends)
    }
}

#[cfg(test)]
mod tests {
    use super::rounded_up;

    #[test]
    fn sizes_are_rounded_up_to_two_digits() {
        assert_eq!([7, 44, 100, 171, 1501].map(rounded_up), [7, 44, 100, 180, 1600]);
    }
}
