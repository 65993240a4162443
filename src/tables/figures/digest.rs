//! Records by instance and method, repeats put together: what every figure starts from.
//!
//! An instance counts once a method. Its cost is the median over its repeats, where a repeat that is
//! not solved costs infinitely much; so it is solved when more than half of the repeats are. Nothing
//! is drawn here.

use std::collections::{BTreeMap, BTreeSet};

use super::super::Input;
use crate::record::{Record, Verdict};

/// An instance that at least one record is of.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Subject<'a> {
    pub(super) id: &'a str,
    /// Index in [`Digest::families`].
    pub(super) family: usize,
    pub(super) parameters: &'a str,
    pub(super) order: u64,
    pub(super) constraints: u64,
    pub(super) target_rank: u64,
    pub(super) optimum: Option<f64>,
    /// Whether it was planted without a proof of its optimum.
    pub(super) unproved: bool,
}

/// What one method did on one instance.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Outcome {
    /// Whether more than half of the repeats were solved.
    pub(super) solved: bool,
    /// Whether more than half of the repeats were feasible with no optimum known to compare with.
    pub(super) feasible: bool,
    /// Median flops; `None` when not solved or not counted.
    pub(super) flops: Option<f64>,
    /// Median processor time, in seconds; `None` when not solved or not measured.
    pub(super) cpu_s: Option<f64>,
}

/// Which cost.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Cost {
    /// Flops.
    Effort,
    /// Processor time.
    Time,
}

impl Outcome {
    /// Returns a cost of solving; `None` when it was not solved or the cost is not known.
    pub(super) fn cost(&self, which: Cost) -> Option<f64> {
        match which {
            Cost::Effort => self.flops,
            Cost::Time => self.cpu_s,
        }
    }
}

/// Records by instance and method.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Digest<'a> {
    /// Labels of the methods that have records, in plan order.
    pub(super) methods: Vec<&'a str>,
    /// Families, in the order of their first record.
    pub(super) families: Vec<&'a str>,
    /// Instances, in the order of their first record.
    pub(super) subjects: Vec<Subject<'a>>,
    /// Method of every record.
    pub(super) method_of: Vec<usize>,
    /// Instance of every record.
    pub(super) subject_of: Vec<usize>,
    outcomes: Vec<Option<Outcome>>,
    /// For each family whether no optimum of it is known.
    without_optima: Vec<bool>,
}

/// Word of a certificate that is none: see the instance record.
const NO_PROOF: &str = "no-proof";

impl<'a> Digest<'a> {
    /// Puts the records in order.
    pub(super) fn new(input: &Input<'a>) -> Self {
        let (methods, method_of) = numbered_methods(input);
        let optima: BTreeMap<&str, f64> = input
            .instances
            .iter()
            .filter_map(|instance| Some((instance.instance.as_str(), instance.optimum?)))
            .collect();
        let unproved: BTreeSet<&str> = input
            .instances
            .iter()
            .filter(|instance| instance.certificate == NO_PROOF)
            .map(|instance| instance.instance.as_str())
            .collect();
        let mut families: Vec<&str> = Vec::new();
        let mut subjects: Vec<Subject<'_>> = Vec::new();
        let mut numbers: BTreeMap<&str, usize> = BTreeMap::new();
        let mut subject_of = Vec::with_capacity(input.records.len());
        for record in input.records {
            let number = *numbers.entry(&record.instance).or_insert_with(|| {
                let family = families
                    .iter()
                    .position(|family| *family == record.family)
                    .unwrap_or_else(|| {
                        families.push(&record.family);
                        families.len() - 1
                    });
                subjects.push(Subject {
                    id: &record.instance,
                    family,
                    parameters: &record.parameters,
                    order: record.order,
                    constraints: record.constraints,
                    target_rank: record.target_rank,
                    optimum: optima.get(record.instance.as_str()).copied(),
                    unproved: unproved.contains(record.instance.as_str()),
                });
                subjects.len() - 1
            });
            let optimum = &mut subjects[number].optimum;
            *optimum = optimum.or(record.optimum);
            subject_of.push(number);
        }
        let outcomes =
            outcomes(input.records, &subject_of, &method_of, subjects.len(), methods.len());
        let mut without_optima = vec![true; families.len()];
        for subject in &subjects {
            without_optima[subject.family] &= subject.optimum.is_none();
        }
        Digest { methods, families, subjects, method_of, subject_of, outcomes, without_optima }
    }

    /// Returns what a method did on an instance; `None` when it was not run.
    pub(super) fn outcome(&self, subject: usize, method: usize) -> Option<&Outcome> {
        self.outcomes[subject * self.methods.len() + method].as_ref()
    }

    /// Lists the methods that a cost is known of, or that solved nothing.
    pub(super) fn methods_with(&self, cost: Cost) -> Vec<usize> {
        let of = |method: usize| {
            (0..self.subjects.len()).filter_map(move |subject| self.outcome(subject, method))
        };
        (0..self.methods.len())
            .filter(|&method| {
                of(method).any(|outcome| outcome.cost(cost).is_some())
                    || of(method).all(|outcome| !outcome.solved)
            })
            .collect()
    }

    /// Lists the instances that all of these methods ran, those with a known optimum only.
    pub(super) fn shared(&self, methods: &[usize]) -> Vec<usize> {
        (0..self.subjects.len())
            .filter(|&subject| self.subjects[subject].optimum.is_some())
            .filter(|&subject| {
                methods.iter().all(|&method| self.outcome(subject, method).is_some())
            })
            .collect()
    }

    /// Lists the instances of a family that a share of successes is taken of: those with a known optimum and
    /// those planted without proof, so that a knob which takes the proof away does not hide its effect.
    pub(super) fn scored(&self, family: usize) -> Vec<usize> {
        let counts = |subject: &Subject<'_>| {
            subject.family == family && (subject.optimum.is_some() || subject.unproved)
        };
        (0..self.subjects.len()).filter(|&at| counts(&self.subjects[at])).collect()
    }

    /// Returns whether a method succeeded on an instance: solved it, or, in a family none of whose optima is
    /// known, found a feasible point of the target rank. None when it was not run.
    pub(super) fn success(&self, subject: usize, method: usize) -> Option<bool> {
        let outcome = self.outcome(subject, method)?;
        let family = self.subjects[subject].family;
        Some(outcome.solved || (outcome.feasible && self.without_optima[family]))
    }

    /// Returns the costs of solving, one row an instance, one column a method.
    pub(super) fn costs(
        &self,
        subjects: &[usize],
        methods: &[usize],
        cost: Cost,
    ) -> Vec<Vec<Option<f64>>> {
        let of = |subject: usize, method: usize| {
            self.outcome(subject, method).and_then(|outcome| outcome.cost(cost))
        };
        subjects
            .iter()
            .map(|&subject| methods.iter().map(|&method| of(subject, method)).collect())
            .collect()
    }
}

fn numbered_methods<'a>(input: &Input<'a>) -> (Vec<&'a str>, Vec<usize>) {
    let planned = input.methods.iter().map(|method| method.label.as_str());
    let mut numbers: BTreeMap<&str, usize> = BTreeMap::new();
    let mut labels: Vec<&str> = Vec::new();
    for label in planned.chain(input.records.iter().map(|record| record.method.as_str())) {
        numbers.entry(label).or_insert_with(|| {
            labels.push(label);
            labels.len() - 1
        });
    }
    let first: Vec<usize> =
        input.records.iter().map(|record| numbers[record.method.as_str()]).collect();
    let mut used = vec![false; labels.len()];
    for &number in &first {
        used[number] = true;
    }
    let mut renumbered = vec![0; labels.len()];
    let mut kept = Vec::new();
    for (number, label) in labels.into_iter().enumerate() {
        if used[number] {
            renumbered[number] = kept.len();
            kept.push(label);
        }
    }
    (kept, first.into_iter().map(|number| renumbered[number]).collect())
}

fn outcomes(
    records: &[Record],
    subject_of: &[usize],
    method_of: &[usize],
    subjects: usize,
    methods: usize,
) -> Vec<Option<Outcome>> {
    let mut order: Vec<(usize, usize)> =
        (0..records.len()).map(|at| (subject_of[at] * methods + method_of[at], at)).collect();
    order.sort_unstable();
    let mut outcomes = vec![None; subjects * methods];
    for repeats in order.chunk_by(|one, other| one.0 == other.0) {
        let of = |figure: fn(&Record) -> Option<f64>| {
            median_or_never(repeats.iter().map(|&(_, at)| {
                let solved = records[at].verdict == Verdict::Solved;
                let cost = figure(&records[at]).filter(|cost| solved && *cost >= 0.0);
                cost.unwrap_or(f64::INFINITY)
            }))
        };
        let most = |verdict: Verdict| {
            let count = repeats.iter().filter(|(_, at)| records[*at].verdict == verdict).count();
            2 * count > repeats.len()
        };
        outcomes[repeats[0].0] = Some(Outcome {
            solved: most(Verdict::Solved),
            feasible: most(Verdict::Feasible),
            flops: of(|record| record.flops.map(|flops| flops as f64)),
            cpu_s: of(|record| record.cpu_s),
        });
    }
    outcomes
}

/// Returns the median, or nothing when it is infinite: it is finite exactly when more than half of
/// the values are.
fn median_or_never(values: impl Iterator<Item = f64>) -> Option<f64> {
    let mut values: Vec<f64> = values.collect();
    values.sort_by(f64::total_cmp);
    let half = values.len() / 2;
    let median =
        if values.len() % 2 == 1 { values[half] } else { 0.5 * (values[half - 1] + values[half]) };
    median.is_finite().then_some(median)
}

/// Lists the different values, rising.
pub(super) fn distinct(values: impl Iterator<Item = f64>) -> Vec<f64> {
    let mut values: Vec<f64> = values.collect();
    values.sort_by(f64::total_cmp);
    values.dedup();
    values
}

/// Writes a count with its noun.
pub(super) fn count(number: usize, one: &str, many: &str) -> String {
    if number == 1 { format!("1 {one}") } else { format!("{number} {many}") }
}

/// Writes a share in percent; what is neither none nor all never reads so.
pub(super) fn percent(share: f64) -> String {
    let rounded = (100.0 * share).round();
    if rounded == 0.0 && share > 0.0 {
        "<1 %".to_owned()
    } else if rounded == 100.0 && share < 1.0 {
        ">99 %".to_owned()
    } else {
        format!("{rounded:.0} %")
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn half_of_the_repeats_is_not_enough() {
        let never = f64::INFINITY;
        assert_eq!(median_or_never([3.0].into_iter()), Some(3.0));
        assert_eq!(median_or_never([3.0, never].into_iter()), None);
        assert_eq!(median_or_never([never, 5.0, 3.0].into_iter()), Some(5.0));
        assert_eq!(median_or_never([never, 5.0, 3.0, never].into_iter()), None);
    }

    #[test]
    fn shares_never_read_as_none_or_all_when_they_are_not() {
        assert_eq!(
            [0.0, 0.001, 0.5, 0.999, 1.0].map(percent),
            ["0 %", "<1 %", "50 %", ">99 %", "100 %"]
        );
    }
}
