//! The figures a gate compares, and how each outcome is reached.

use std::collections::BTreeMap;

use serde::Serialize;

use super::Bands;
use super::matching::TrialPair;
use crate::record::{Record, Verdict};
use crate::stats::Interval;
use crate::stats::paired::{Discordance, difference_interval, mcnemar};
use crate::verdicts::Estimate;
use crate::verdicts::means::{self, mean, within_groups};

/// Confidence of every interval: 95 % to each side.
pub(super) const CONFIDENCE: f64 = 0.9;

/// Level of the one-sided exact test of a share.
const LEVEL: f64 = 0.05;

/// Fewest instances that have an interval of the mean: with n below 5, 2^-n is above 0.05.
const FEWEST: usize = 5;

/// Digits beyond this are not told apart: they are noise of the last bits.
const MOST_DIGITS: f64 = 12.0;

/// Processor time below which differences are not told apart, in seconds.
const LEAST_CPU_S: f64 = 1e-4;

/// A figure that is compared.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// Share of solved instances.
    Solved,
    /// Correct digits of the objective, at most 12, on trials solved in both.
    Digits,
    /// Share of instances whose answer is at or below the target rank at the cut-off 1e-6, where both
    /// have an answer.
    Rank,
    /// Ratio of flops run / baseline, on trials solved in both that have counts.
    Effort,
    /// Ratio of processor times run / baseline, on trials solved in both, divided by the ratio of the
    /// calibration times.
    Time,
}

impl Kind {
    /// Returns the word.
    pub fn word(self) -> &'static str {
        match self {
            Kind::Solved => "solved",
            Kind::Digits => "digits",
            Kind::Rank => "rank",
            Kind::Effort => "effort",
            Kind::Time => "time",
        }
    }

    /// Returns whether the figure is a ratio, compared by its logarithm, and better when small.
    pub(super) fn is_ratio(self) -> bool {
        matches!(self, Kind::Effort | Kind::Time)
    }
}

/// What is said of a figure.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Outcome {
    /// Better beyond the band.
    Improved,
    /// Worse beyond the band.
    Regressed,
    /// Unchanged within the band.
    Holds,
    /// The interval does not tell.
    Undecided,
    /// There is nothing to compare.
    NotCompared,
}

impl Outcome {
    /// Returns the word.
    pub fn word(self) -> &'static str {
        match self {
            Outcome::Improved => "improved",
            Outcome::Regressed => "regressed",
            Outcome::Holds => "holds",
            Outcome::Undecided => "undecided",
            Outcome::NotCompared => "not compared",
        }
    }
}

/// How the interval of a change was made.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Making {
    /// Score interval of a paired difference of shares (Tango).
    Score,
    /// Bootstrap of the mean change.
    Bca,
    /// Normal interval of the mean change, for more than 2000 instances.
    Normal,
    /// All changes are equal.
    Same,
    /// The range of fewer than 5 changes.
    Range,
    /// None: fewer than 5 times.
    TooFew,
}

impl Making {
    /// Returns the word.
    pub fn word(self) -> &'static str {
        match self {
            Making::Score => "score interval",
            Making::Bca => "BCa interval",
            Making::Normal => "normal interval",
            Making::Same => "the same on every instance",
            Making::Range => "range of fewer than 5 instances",
            Making::TooFew => "fewer than 5 instances",
        }
    }
}

/// One figure of one method in both.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Metric {
    /// Which figure.
    pub kind: Kind,
    /// Instances it is over.
    pub instances: u64,
    /// Its value in the baseline: share, mean digits, geometric mean of flops or seconds.
    pub baseline: Option<f64>,
    /// Its value in the run, time as measured.
    pub run: Option<f64>,
    /// Change of a share or of digits, or ratio run / baseline, with its interval.
    pub change: Option<Estimate>,
    /// How the interval was made.
    pub making: Option<Making>,
    /// Ends of the band, on the scale of the change.
    pub band: [f64; 2],
    /// What is said of it.
    pub outcome: Outcome,
}

/// Compares all figures of one method; `slowdown` is none when time is not judged.
pub(super) fn measure(
    pairs: &[TrialPair<'_>],
    bands: &Bands,
    slowdown: Option<f64>,
) -> Vec<Metric> {
    let solved = |record: &Record| Some(record.verdict == Verdict::Solved);
    let low_rank = |record: &Record| record.rank_at_1e6.map(|rank| rank <= record.target_rank);
    let digits = |record: &Record| record.digits.map(|digits| digits.min(MOST_DIGITS));
    let flops = |record: &Record| record.flops.map(|flops| (flops.max(1) as f64).ln());
    let seconds = |record: &Record| record.cpu_s.map(|seconds| seconds.max(LEAST_CPU_S).ln());
    let mut metrics = vec![
        share(Kind::Solved, pairs, solved, bands.solved_points / 100.0),
        number(Kind::Digits, pairs, digits, bands.digits, 0.0),
        share(Kind::Rank, pairs, low_rank, bands.rank_points / 100.0),
        number(Kind::Effort, pairs, flops, (bands.effort_percent / 100.0).ln_1p(), 0.0),
    ];
    if let Some(slowdown) = slowdown {
        let band = (bands.time_percent / 100.0).ln_1p();
        metrics.push(number(Kind::Time, pairs, seconds, band, slowdown.ln()));
    }
    metrics
}

/// Compares a share: instances where more than half of the repeats have the property.
fn share(
    kind: Kind,
    pairs: &[TrialPair<'_>],
    property: impl Fn(&Record) -> Option<bool>,
    band: f64,
) -> Metric {
    let mut instances: BTreeMap<&str, [u64; 3]> = BTreeMap::new();
    for pair in pairs {
        if let (Some(old), Some(new)) = (property(pair.baseline), property(pair.run)) {
            let [repeats, olds, news] = instances.entry(&pair.baseline.instance).or_default();
            *repeats += 1;
            *olds += u64::from(old);
            *news += u64::from(new);
        }
    }
    let mut counts = Discordance { pairs: instances.len() as u64, gained: 0, lost: 0 };
    let mut both = 0;
    for [repeats, olds, news] in instances.values() {
        match (2 * olds > *repeats, 2 * news > *repeats) {
            (false, true) => counts.gained += 1,
            (true, false) => counts.lost += 1,
            (true, true) => both += 1,
            (false, false) => {}
        }
    }
    if counts.pairs == 0 {
        return not_compared(kind, band);
    }
    let part = |count: u64| Some(count as f64 / counts.pairs as f64);
    let (interval, making) = if counts.gained + counts.lost == 0 {
        (Interval { low: 0.0, high: 0.0 }, Making::Same)
    } else {
        (difference_interval(counts, CONFIDENCE), Making::Score)
    };
    Metric {
        kind,
        instances: counts.pairs,
        baseline: part(both + counts.lost),
        run: part(both + counts.gained),
        change: Some(Estimate::new(counts.difference(), interval)),
        making: Some(making),
        band: [-band, band],
        outcome: judge_share(counts, interval, band),
    }
}

/// Judges a share by its interval, then by the exact test together with the change itself.
fn judge_share(counts: Discordance, interval: Interval, band: f64) -> Outcome {
    let by_interval = judge(interval, band);
    if by_interval != Outcome::Undecided {
        return by_interval;
    }
    let tests = mcnemar(counts);
    if tests.loss <= LEVEL && counts.difference() < -band {
        Outcome::Regressed
    } else if tests.gain <= LEVEL && counts.difference() > band {
        Outcome::Improved
    } else {
        Outcome::Undecided
    }
}

/// Judges an interval of a change that is good when positive.
fn judge(interval: Interval, band: f64) -> Outcome {
    if interval.high < -band {
        Outcome::Regressed
    } else if interval.low > band {
        Outcome::Improved
    } else if interval.low >= -band && interval.high <= band {
        Outcome::Holds
    } else {
        Outcome::Undecided
    }
}

/// Compares a number on trials solved in both: the mean over instances of the change less `offset`.
fn number(
    kind: Kind,
    pairs: &[TrialPair<'_>],
    figure: impl Fn(&Record) -> Option<f64>,
    band: f64,
    offset: f64,
) -> Metric {
    let mut instances: BTreeMap<&str, [f64; 3]> = BTreeMap::new();
    let solved = |pair: &&TrialPair<'_>| {
        pair.baseline.verdict == Verdict::Solved && pair.run.verdict == Verdict::Solved
    };
    for pair in pairs.iter().filter(solved) {
        if let (Some(old), Some(new)) = (figure(pair.baseline), figure(pair.run)) {
            let [repeats, olds, news] = instances.entry(&pair.baseline.instance).or_default();
            *repeats += 1.0;
            *olds += old;
            *news += new;
        }
    }
    if instances.is_empty() {
        return not_compared(kind, band);
    }
    let mut changes = Vec::with_capacity(instances.len());
    let (mut old_sum, mut new_sum) = (0.0, 0.0);
    for [repeats, olds, news] in instances.values() {
        changes.push((news - olds) / repeats - offset);
        old_sum += olds / repeats;
        new_sum += news / repeats;
    }
    let (interval, making) = interval(kind, &changes);
    let good = if kind.is_ratio() { -1.0 } else { 1.0 };
    let outcome = if changes.iter().all(|change| change.abs() <= band) {
        Outcome::Holds
    } else {
        let ends = [good * interval.low, good * interval.high];
        judge(Interval { low: ends[0].min(ends[1]), high: ends[0].max(ends[1]) }, band)
    };
    let scale = |value: f64| if kind.is_ratio() { value.exp() } else { value };
    let count = instances.len() as f64;
    Metric {
        kind,
        instances: instances.len() as u64,
        baseline: Some(scale(old_sum / count)),
        run: Some(scale(new_sum / count)),
        change: Some(Estimate::new(mean(&changes), interval).map(scale)),
        making: Some(making),
        band: [scale(-band), scale(band)],
        outcome,
    }
}

/// Returns the interval of the mean change.
fn interval(kind: Kind, changes: &[f64]) -> (Interval, Making) {
    let range = Interval {
        low: changes.iter().copied().fold(f64::INFINITY, f64::min),
        high: changes.iter().copied().fold(f64::NEG_INFINITY, f64::max),
    };
    if changes.len() < FEWEST {
        return match kind {
            // Times do not repeat themselves even on one machine.
            Kind::Time => {
                (Interval { low: f64::NEG_INFINITY, high: f64::INFINITY }, Making::TooFew)
            }
            _ if range.low == range.high => (range, Making::Same),
            _ => (range, Making::Range),
        };
    }
    if range.low == range.high {
        return (range, Making::Same);
    }
    // One group: families of three or four instances would understate the spread within them.
    let spread = within_groups(&[changes.to_vec()], CONFIDENCE);
    match spread {
        Some((ends, means::Making::Bca)) => (ends, Making::Bca),
        Some((ends, means::Making::Normal)) => (ends, Making::Normal),
        None => (range, Making::Range),
    }
}

fn not_compared(kind: Kind, band: f64) -> Metric {
    let scale = |value: f64| if kind.is_ratio() { value.exp() } else { value };
    Metric {
        kind,
        instances: 0,
        baseline: None,
        run: None,
        change: None,
        making: None,
        band: [scale(-band), scale(band)],
        outcome: Outcome::NotCompared,
    }
}
