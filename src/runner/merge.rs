//! Merging the journals of several runs: shards of one plan, several plans, several machines.

use std::collections::BTreeMap;

use super::journal::Contents;
use super::replay::compare;
use crate::record::{InstanceRecord, MethodRecord, Record};

/// Runs put together.
#[derive(Clone, Debug, PartialEq)]
pub struct Merged {
    /// Records, by plan and within it in plan order.
    pub records: Vec<Record>,
    /// For each record the run it is from, as a position in the list that was merged.
    pub origins: Vec<usize>,
    /// Instances, in the same order.
    pub instances: Vec<InstanceRecord>,
    /// Methods, in the order of the plans.
    pub methods: Vec<MethodRecord>,
    /// Wall-time limit of a trial, in seconds.
    pub wall_limit_s: f64,
    /// Feasibility, objective and rank tolerance of the referee.
    pub tolerance: [f64; 3],
    /// Copies of a trial that were left out because a kept one says the same.
    pub copies: u64,
    /// Trials whose copies do not agree; the copy of the first run is kept.
    pub disagreements: Vec<Disagreement>,
    /// Trials that the plans have and no run recorded.
    pub missing: Vec<Missing>,
}

/// Two records of one trial that differ in more than time and memory.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Disagreement {
    /// Instance, method and repeat.
    pub trial: String,
    /// The run whose copy is kept.
    pub kept: String,
    /// The other run.
    pub other: String,
    /// What differs: column, kept value, other value.
    pub columns: Vec<[String; 3]>,
}

/// The trials of one plan that no run recorded.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Missing {
    /// A run of the plan, as a position in the list that was merged.
    pub run: usize,
    /// How many trials the plan has.
    pub of: u64,
    /// Positions in the plan, from 0, in ascending order.
    pub places: Vec<u64>,
}

/// Says why runs cannot be put together.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum MergeError {
    /// There is nothing to merge.
    #[error("there is no run to merge")]
    Nothing,
    /// Two runs were made under different conditions, so that their figures are not comparable.
    #[error("{first} and {second} cannot share a table: {reason}")]
    Conditions {
        /// One run.
        first: String,
        /// The other run.
        second: String,
        /// What differs.
        reason: String,
    },
}

/// Puts runs together; each has a name for messages.
///
/// A trial is its instance, method and repeat. Where several runs recorded one (a task of a cluster that ran
/// twice), the copy of the first run is kept; the others are counted when they say the same but for time and
/// memory, and listed when not.
///
/// # Errors
/// See [`MergeError`].
pub fn merge(runs: Vec<(String, Contents)>) -> Result<Merged, MergeError> {
    let Some((_, first)) = runs.first() else {
        return Err(MergeError::Nothing);
    };
    let (wall_limit_s, tolerance) = (first.header.wall_limit_s, first.header.tolerance);
    check_conditions(&runs)?;
    let missing = missing(&runs);
    let (runs, copies, disagreements) = without_copies(runs);
    let mut methods: Vec<MethodRecord> = Vec::new();
    for method in runs.iter().flat_map(|(_, run)| &run.header.methods) {
        if !methods.contains(method) {
            methods.push(method.clone());
        }
    }
    let mut plans: Vec<String> = Vec::new();
    let mut instances: BTreeMap<String, InstanceRecord> = BTreeMap::new();
    let mut records: Vec<(usize, usize, Record)> = Vec::new();
    for (at, (_, run)) in runs.into_iter().enumerate() {
        let known = plans.iter().position(|digest| *digest == run.header.plan_digest);
        let plan = known.unwrap_or_else(|| {
            plans.push(run.header.plan_digest);
            plans.len() - 1
        });
        for instance in run.instances {
            instances.entry(instance.instance.clone()).or_insert(instance);
        }
        records.extend(run.records.into_iter().map(|record| (plan, at, record)));
    }
    records.sort_by(|(plan, _, a), (other, _, b)| {
        (plan, number(&a.trial), &a.trial).cmp(&(other, number(&b.trial), &b.trial))
    });
    let mut ordered: Vec<InstanceRecord> = Vec::new();
    for (_, _, record) in &records {
        if let Some(instance) = instances.remove(&record.instance) {
            ordered.push(instance);
        }
    }
    let origins = records.iter().map(|(_, at, _)| *at).collect();
    let records = records.into_iter().map(|(_, _, record)| record).collect();
    Ok(Merged {
        records,
        origins,
        instances: ordered,
        methods,
        wall_limit_s,
        tolerance,
        copies,
        disagreements,
        missing,
    })
}

/// Refuses runs whose figures are not comparable.
fn check_conditions(runs: &[(String, Contents)]) -> Result<(), MergeError> {
    let (first_name, first) = &runs[0];
    let mut methods: Vec<(&str, &MethodRecord)> = Vec::new();
    let mut instances: BTreeMap<&str, (&str, &str)> = BTreeMap::new();
    for (name, run) in runs {
        let conflict = |first: &str, reason: String| {
            Err(MergeError::Conditions { first: first.to_owned(), second: name.clone(), reason })
        };
        if run.header.wall_limit_s != first.header.wall_limit_s
            || run.header.memory_limit != first.header.memory_limit
        {
            return conflict(first_name, "their budgets differ".to_owned());
        }
        if run.header.tolerance != first.header.tolerance {
            return conflict(first_name, "their tolerances differ".to_owned());
        }
        for method in &run.header.methods {
            match methods.iter().find(|(_, known)| known.label == method.label) {
                Some((_, known)) if *known == method => {}
                Some((other, _)) => {
                    let reason = format!("label {} means different methods", method.label);
                    return conflict(other, reason);
                }
                None => methods.push((name, method)),
            }
        }
        for instance in &run.instances {
            match instances.get(instance.instance.as_str()) {
                Some((_, digest)) if *digest == instance.digest => {}
                Some((other, _)) => {
                    let reason = format!("instance {} is not the same", instance.instance);
                    return conflict(other, reason);
                }
                None => {
                    instances.insert(&instance.instance, (name, &instance.digest));
                }
            }
        }
    }
    Ok(())
}

/// Drops every copy of a trial after the first; returns how many agreed, and those that did not.
fn without_copies(
    mut runs: Vec<(String, Contents)>,
) -> (Vec<(String, Contents)>, u64, Vec<Disagreement>) {
    let mut first: BTreeMap<(&str, &str, u64), (&str, &Record)> = BTreeMap::new();
    let (mut copies, mut disagreements) = (0, Vec::new());
    let mut kept: Vec<Vec<bool>> = Vec::new();
    for (name, run) in &runs {
        let mut keep = Vec::with_capacity(run.records.len());
        for record in &run.records {
            let key = (record.instance.as_str(), record.method.as_str(), record.repeat);
            let before = first.get(&key);
            keep.push(before.is_none());
            match before {
                None => {
                    first.insert(key, (name, record));
                }
                Some((kept_in, kept)) => match disagreement((kept_in, kept), (name, record)) {
                    Some(found) => disagreements.push(found),
                    None => copies += 1,
                },
            }
        }
        kept.push(keep);
    }
    for ((_, run), keep) in runs.iter_mut().zip(kept) {
        let mut keep = keep.into_iter();
        run.records.retain(|_| keep.next() == Some(true));
    }
    (runs, copies, disagreements)
}

/// Compares two copies of a trial in everything but time and memory.
fn disagreement(
    (kept_in, kept): (&str, &Record),
    (other, copy): (&str, &Record),
) -> Option<Disagreement> {
    // The number in front of a trial's id is its place in its own plan.
    let copy = Record { trial: kept.trial.clone(), ..copy.without_measurements() };
    let columns = compare(&kept.without_measurements(), &copy);
    (!columns.is_empty()).then(|| Disagreement {
        trial: format!("{} {} repeat {}", kept.instance, kept.method, kept.repeat),
        kept: kept_in.to_owned(),
        other: other.to_owned(),
        columns: columns
            .into_iter()
            .map(|difference| [difference.column, difference.recorded, difference.replayed])
            .collect(),
    })
}

/// Finds the places of every plan, and of every round of it, that no run recorded.
fn missing(runs: &[(String, Contents)]) -> Vec<Missing> {
    let mut plans: BTreeMap<(&str, u64), (usize, Vec<bool>)> = BTreeMap::new();
    for (at, (_, run)) in runs.iter().enumerate() {
        let (trials, round) = (run.header.trials, run.header.round);
        let (_, seen) = plans
            .entry((&run.header.plan_digest, round))
            .or_insert_with(|| (at, vec![false; trials as usize]));
        for record in &run.records {
            let place = number(&record.trial).checked_sub(round * trials + 1);
            if let Some(mark) = place.and_then(|place| seen.get_mut(place as usize)) {
                *mark = true;
            }
        }
    }
    let mut all: Vec<Missing> = plans
        .into_values()
        .map(|(run, seen)| Missing {
            run,
            of: seen.len() as u64,
            places: (0..seen.len()).filter(|at| !seen[*at]).map(|at| at as u64).collect(),
        })
        .filter(|missing| !missing.places.is_empty())
        .collect();
    all.sort_by_key(|missing| missing.run);
    all
}

/// Returns the number that a trial's id starts with: its place in the plan.
fn number(trial: &str) -> u64 {
    trial.split('-').next().and_then(|head| head.parse().ok()).unwrap_or(u64::MAX)
}
