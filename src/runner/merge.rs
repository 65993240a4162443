//! Merging the journals of several runs: shards of one plan, several plans, several machines.

use std::collections::BTreeMap;

use super::journal::Contents;
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
    /// Two runs recorded the same trial.
    #[error("{first} and {second} both recorded {what}")]
    Twice {
        /// One run.
        first: String,
        /// The other run.
        second: String,
        /// Instance, method and repeat.
        what: String,
    },
}

/// Puts runs together; each has a name for messages.
///
/// # Errors
/// See [`MergeError`].
pub fn merge(runs: Vec<(String, Contents)>) -> Result<Merged, MergeError> {
    let Some((_, first)) = runs.first() else {
        return Err(MergeError::Nothing);
    };
    let (wall_limit_s, tolerance) = (first.header.wall_limit_s, first.header.tolerance);
    check_conditions(&runs)?;
    check_trials(&runs)?;
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
    Ok(Merged { records, origins, instances: ordered, methods, wall_limit_s, tolerance })
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

/// Refuses runs that recorded the same trial.
fn check_trials(runs: &[(String, Contents)]) -> Result<(), MergeError> {
    let mut trials: BTreeMap<(&str, &str, u64), &str> = BTreeMap::new();
    for (name, run) in runs {
        for record in &run.records {
            let key = (record.instance.as_str(), record.method.as_str(), record.repeat);
            if let Some(other) = trials.insert(key, name) {
                let what =
                    format!("{} {} repeat {}", record.instance, record.method, record.repeat);
                let (first, second) = (other.to_owned(), name.clone());
                return Err(MergeError::Twice { first, second, what });
            }
        }
    }
    Ok(())
}

/// Returns the number that a trial's id starts with: its place in the plan.
fn number(trial: &str) -> u64 {
    trial.split('-').next().and_then(|head| head.parse().ok()).unwrap_or(u64::MAX)
}
