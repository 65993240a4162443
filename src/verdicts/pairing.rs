//! Puts the records of two methods on the same instances side by side.
//!
//! The unit is the instance: repeats of a trial are put together first, because they share their
//! instance and would otherwise count as independent evidence. Nothing is judged here.

use std::collections::BTreeMap;

use serde::Serialize;

use crate::record::{InstanceRecord, Record, Verdict};
use crate::stats::paired::Discordance;
use crate::stats::summary::median;

/// How one method did on one instance, its repeats taken together.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Side {
    /// The first trial whose outcome is the outcome of the majority.
    pub trial: String,
    /// Verdict of that trial.
    pub verdict: Verdict,
    /// Repeats that were solved.
    pub solved_repeats: u64,
    /// Repeats that have a record.
    pub repeats: u64,
    /// Median flops over the repeats that have a count.
    pub flops: Option<f64>,
    /// Median processor time over the repeats that have one, in seconds.
    pub cpu_s: Option<f64>,
}

impl Side {
    /// Returns whether the instance counts as solved: more than half of its repeats are.
    pub fn is_solved(&self) -> bool {
        2 * self.solved_repeats > self.repeats
    }

    /// Puts repeats together.
    fn gather(repeats: &[&Record]) -> Self {
        let is_solved = |record: &Record| record.verdict == Verdict::Solved;
        let solved = repeats.iter().filter(|record| is_solved(record)).count();
        let majority = 2 * solved > repeats.len();
        // A majority has at least one member.
        let shown = repeats.iter().find(|record| is_solved(record) == majority);
        let shown = shown.expect("one repeat has the outcome of the majority");
        let middle = |figure: fn(&Record) -> Option<f64>| {
            median(&repeats.iter().filter_map(|record| figure(record)).collect::<Vec<_>>())
        };
        Side {
            trial: shown.trial.clone(),
            verdict: shown.verdict,
            solved_repeats: solved as u64,
            repeats: repeats.len() as u64,
            flops: middle(|record| record.flops.map(|flops| flops as f64)),
            cpu_s: middle(|record| record.cpu_s),
        }
    }
}

/// One instance that both methods ran and whose optimum is known.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Pair {
    /// Id of the instance.
    pub instance: String,
    /// Its family.
    pub family: String,
    /// How the challenger did.
    pub challenger: Side,
    /// How the incumbent did.
    pub incumbent: Side,
}

/// Instances that do not take part, by the reason; ids.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct LeftOut {
    /// No optimum is known, so that nobody can be said to have solved it.
    pub no_optimum: Vec<String>,
    /// Only the challenger has a record.
    pub challenger_only: Vec<String>,
    /// Only the incumbent has a record.
    pub incumbent_only: Vec<String>,
    /// Neither has a record.
    pub neither: Vec<String>,
}

impl LeftOut {
    /// Counts the instances left out.
    pub fn count(&self) -> usize {
        self.no_optimum.len()
            + self.challenger_only.len()
            + self.incumbent_only.len()
            + self.neither.len()
    }

    /// Says in one clause how many were left out and why; empty when none was.
    pub fn sentence(&self) -> String {
        let reasons = [
            (self.no_optimum.len(), "without a known optimum"),
            (self.challenger_only.len(), "run by the challenger only"),
            (self.incumbent_only.len(), "run by the incumbent only"),
            (self.neither.len(), "run by neither"),
        ];
        let parts: Vec<String> = reasons
            .iter()
            .filter(|(count, _)| *count > 0)
            .map(|(count, reason)| format!("{count} {reason}"))
            .collect();
        parts.join(", ")
    }
}

/// Two methods side by side.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Pairing {
    /// Label of the challenger.
    pub challenger: String,
    /// Label of the incumbent.
    pub incumbent: String,
    /// Pairs, in the order of the instances.
    pub pairs: Vec<Pair>,
    /// Instances that do not take part.
    pub left_out: LeftOut,
}

impl Pairing {
    /// Counts pairs by who solved them.
    pub fn discordance(&self) -> Discordance {
        discordance(self.pairs.iter())
    }
}

/// Counts pairs by who solved them.
pub(super) fn discordance<'a>(pairs: impl Iterator<Item = &'a Pair>) -> Discordance {
    let mut counts = Discordance { pairs: 0, gained: 0, lost: 0 };
    for pair in pairs {
        counts.pairs += 1;
        match (pair.challenger.is_solved(), pair.incumbent.is_solved()) {
            (true, false) => counts.gained += 1,
            (false, true) => counts.lost += 1,
            _ => {}
        }
    }
    counts
}

/// Says why two methods cannot be paired.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum PairingError {
    /// The same label stands on both sides.
    #[error("`{0}` is both challenger and incumbent; a duel needs two methods")]
    SameMethod(String),
    /// A label has no record.
    #[error("no record of a method labelled `{label}`; the records are of {known}")]
    UnknownMethod {
        /// The label asked for.
        label: String,
        /// Labels that have records, with commas between.
        known: String,
    },
}

/// Puts the records of two methods side by side, instance by instance.
///
/// An instance takes part when its optimum is known (by its row in `instances`, or, where it has none,
/// by any of its records) and both methods have at least one record on it. A verdict other than
/// `solved` is a failure, `refused` included.
///
/// # Errors
/// [`PairingError`] when a label has no record at all, or is used twice.
pub fn pair(
    records: &[Record],
    instances: &[InstanceRecord],
    challenger: &str,
    incumbent: &str,
) -> Result<Pairing, PairingError> {
    if challenger == incumbent {
        return Err(PairingError::SameMethod(challenger.to_owned()));
    }
    for label in [challenger, incumbent] {
        if !records.iter().any(|record| record.method == label) {
            let known: std::collections::BTreeSet<&str> =
                records.iter().map(|record| record.method.as_str()).collect();
            let known = known.into_iter().collect::<Vec<_>>().join(", ");
            return Err(PairingError::UnknownMethod { label: label.to_owned(), known });
        }
    }
    let mut slots = Slots::default();
    for row in instances {
        let slot = slots.at(&row.instance, &row.family);
        slot.optimum_known = Some(row.optimum.is_some());
    }
    for record in records {
        let slot = slots.at(&record.instance, &record.family);
        slot.recorded_optimum |= record.optimum.is_some();
        if record.method == challenger {
            slot.challenger.push(record);
        } else if record.method == incumbent {
            slot.incumbent.push(record);
        }
    }
    let mut pairing = Pairing {
        challenger: challenger.to_owned(),
        incumbent: incumbent.to_owned(),
        pairs: Vec::new(),
        left_out: LeftOut::default(),
    };
    for slot in slots.list {
        slot.settle(&mut pairing);
    }
    Ok(pairing)
}

/// What is known of one instance.
struct Slot<'a> {
    instance: &'a str,
    family: &'a str,
    optimum_known: Option<bool>,
    recorded_optimum: bool,
    challenger: Vec<&'a Record>,
    incumbent: Vec<&'a Record>,
}

impl Slot<'_> {
    fn settle(self, pairing: &mut Pairing) {
        let id = self.instance.to_owned();
        let left_out = &mut pairing.left_out;
        match (self.challenger.is_empty(), self.incumbent.is_empty()) {
            (true, true) => left_out.neither.push(id),
            _ if !self.optimum_known.unwrap_or(self.recorded_optimum) => {
                left_out.no_optimum.push(id);
            }
            (false, true) => left_out.challenger_only.push(id),
            (true, false) => left_out.incumbent_only.push(id),
            (false, false) => pairing.pairs.push(Pair {
                instance: id,
                family: self.family.to_owned(),
                challenger: Side::gather(&self.challenger),
                incumbent: Side::gather(&self.incumbent),
            }),
        }
    }
}

/// Instances in the order in which they were first met.
#[derive(Default)]
struct Slots<'a> {
    places: BTreeMap<&'a str, usize>,
    list: Vec<Slot<'a>>,
}

impl<'a> Slots<'a> {
    fn at(&mut self, instance: &'a str, family: &'a str) -> &mut Slot<'a> {
        let place = *self.places.entry(instance).or_insert_with(|| {
            self.list.push(Slot {
                instance,
                family,
                optimum_known: None,
                recorded_optimum: false,
                challenger: Vec::new(),
                incumbent: Vec::new(),
            });
            self.list.len() - 1
        });
        &mut self.list[place]
    }
}
