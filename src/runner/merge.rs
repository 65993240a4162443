//! Merging the journals of several runs: shards of one plan, several plans, several machines.

use std::collections::BTreeMap;

use super::journal::Contents;
use crate::record::{InstanceRecord, MethodRecord, Record};

/// Runs put together.
#[derive(Clone, Debug, PartialEq)]
pub struct Merged {
    /// Records, by plan and within it in plan order.
    pub records: Vec<Record>,
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
pub fn merge(runs: &[(String, Contents)]) -> Result<Merged, MergeError> {
    let (first_name, first) = runs.first().ok_or(MergeError::Nothing)?;
    let mut methods: Vec<(&str, &MethodRecord)> = Vec::new();
    let mut instances: BTreeMap<&str, (&str, &InstanceRecord)> = BTreeMap::new();
    let mut trials: BTreeMap<(&str, &str, u64), &str> = BTreeMap::new();
    let mut plans: Vec<&str> = Vec::new();
    let mut records: Vec<(usize, &Record)> = Vec::new();
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
                    return conflict(
                        other,
                        format!("label {} means different methods", method.label),
                    );
                }
                None => methods.push((name, method)),
            }
        }
        for instance in &run.instances {
            match instances.get(instance.instance.as_str()) {
                Some((_, known)) if known.digest == instance.digest => {}
                Some((other, _)) => {
                    return conflict(
                        other,
                        format!("instance {} is not the same", instance.instance),
                    );
                }
                None => {
                    instances.insert(&instance.instance, (name, instance));
                }
            }
        }
        let plan = plans
            .iter()
            .position(|digest| *digest == run.header.plan_digest)
            .unwrap_or_else(|| {
                plans.push(&run.header.plan_digest);
                plans.len() - 1
            });
        for record in &run.records {
            let key = (record.instance.as_str(), record.method.as_str(), record.repeat);
            if let Some(other) = trials.insert(key, name) {
                let what =
                    format!("{} {} repeat {}", record.instance, record.method, record.repeat);
                return Err(MergeError::Twice {
                    first: other.to_owned(),
                    second: name.clone(),
                    what,
                });
            }
            records.push((plan, record));
        }
    }
    records.sort_by_key(|(plan, record)| (*plan, number(&record.trial), record.trial.as_str()));
    let mut ordered: Vec<InstanceRecord> = Vec::new();
    for (_, record) in &records {
        if let Some((_, instance)) = instances.remove(record.instance.as_str()) {
            ordered.push(instance.clone());
        }
    }
    Ok(Merged {
        records: records.into_iter().map(|(_, record)| record.clone()).collect(),
        instances: ordered,
        methods: methods.into_iter().map(|(_, method)| method.clone()).collect(),
        wall_limit_s: first.header.wall_limit_s,
        tolerance: first.header.tolerance,
    })
}

/// Returns the number that a trial's id starts with: its place in the plan.
fn number(trial: &str) -> u64 {
    trial.split('-').next().and_then(|head| head.parse().ok()).unwrap_or(u64::MAX)
}
