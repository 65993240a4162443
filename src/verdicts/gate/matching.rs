//! Which trial of the run belongs to which trial of the baseline.

use std::collections::{BTreeMap, BTreeSet};

use super::baseline::RunView;
use super::{ChangedInstance, Presence};
use crate::record::{InstanceRecord, Record};

/// A trial in both.
#[derive(Clone, Copy, Debug)]
pub(super) struct TrialPair<'a> {
    pub(super) baseline: &'a Record,
    pub(super) run: &'a Record,
}

/// The trials of one method of the baseline.
pub(super) struct MethodMatch<'a> {
    pub(super) label: &'a str,
    pub(super) presence: Presence,
    pub(super) pairs: Vec<TrialPair<'a>>,
    pub(super) missing: Vec<&'a Record>,
}

/// Everything that was matched, and what was left.
pub(super) struct Matching<'a> {
    pub(super) methods: Vec<MethodMatch<'a>>,
    pub(super) changed_instances: Vec<ChangedInstance>,
    pub(super) new_methods: Vec<String>,
    pub(super) new_instances: Vec<String>,
}

/// What an instance is known by: its digest, or its id where it has none.
type Keys<'a> = BTreeMap<&'a str, &'a str>;

/// Matches two runs.
pub(super) fn match_runs<'a>(baseline: &RunView<'a>, run: &RunView<'a>) -> Matching<'a> {
    let (old_keys, new_keys) = (keys(baseline.instances), keys(run.instances));
    let changed = changed_instances(baseline, &old_keys, &new_keys);
    let changed_ids: BTreeSet<&str> =
        changed.iter().map(|changed| changed.instance.as_str()).collect();
    let mut list = Vec::new();
    let mut places: BTreeMap<&str, usize> = BTreeMap::new();
    let (old_methods, new_methods) = (methods(baseline), methods(run));
    for label in labels(baseline) {
        places.insert(label, list.len());
        let presence = match (old_methods.get(label), new_methods.get(label)) {
            (Some(old), Some(new)) if old != new => {
                Presence::ChangedOptions { baseline: old.clone(), run: new.clone() }
            }
            _ => Presence::Complete,
        };
        list.push(MethodMatch { label, presence, pairs: Vec::new(), missing: Vec::new() });
    }
    let judged = baseline.records.iter().filter(|record| {
        !matches!(list[places[record.method.as_str()]].presence, Presence::ChangedOptions { .. })
            && !changed_ids.contains(record.instance.as_str())
    });
    let (pairs, missing) = pair_up(&judged.collect::<Vec<_>>(), &old_keys, run, &new_keys);
    for pair in pairs {
        list[places[pair.baseline.method.as_str()]].pairs.push(pair);
    }
    for record in missing {
        let method = &mut list[places[record.method.as_str()]];
        method.missing.push(record);
        method.presence = Presence::Missing;
    }
    let known: BTreeSet<&str> =
        baseline.instances.iter().map(|row| key(&old_keys, &row.instance)).collect();
    let is_new = |row: &&InstanceRecord| {
        !known.contains(key(&new_keys, &row.instance))
            && !changed_ids.contains(row.instance.as_str())
    };
    Matching {
        methods: list,
        new_instances: run
            .instances
            .iter()
            .filter(is_new)
            .map(|row| row.instance.clone())
            .collect(),
        new_methods: labels(run)
            .into_iter()
            .filter(|label| !places.contains_key(label))
            .map(str::to_owned)
            .collect(),
        changed_instances: changed,
    }
}

/// Finds the partner of each trial, in the order given; then those that have none.
fn pair_up<'a>(
    judged: &[&'a Record],
    old_keys: &Keys<'a>,
    run: &RunView<'a>,
    new_keys: &Keys<'a>,
) -> (Vec<TrialPair<'a>>, Vec<&'a Record>) {
    let mut waiting = Waiting::of(run, new_keys);
    // A trial goes to its own instance first; only what is left goes to an equal instance with another id.
    let mut found: Vec<Option<&Record>> =
        judged.iter().map(|record| waiting.take(record, old_keys, Namesake::Only)).collect();
    for (record, found) in judged.iter().zip(&mut found) {
        if found.is_none() {
            *found = waiting.take(record, old_keys, Namesake::Any);
        }
    }
    let mut pairs = Vec::new();
    let mut missing = Vec::new();
    for (baseline, found) in judged.iter().zip(found) {
        match found {
            Some(run) => pairs.push(TrialPair { baseline, run }),
            None => missing.push(*baseline),
        }
    }
    (pairs, missing)
}

fn keys(instances: &[InstanceRecord]) -> Keys<'_> {
    let rows = instances.iter().filter(|row| !row.digest.is_empty());
    rows.map(|row| (row.instance.as_str(), row.digest.as_str())).collect()
}

fn key<'a>(keys: &Keys<'a>, instance: &'a str) -> &'a str {
    keys.get(instance).copied().unwrap_or(instance)
}

/// Lists instances whose id has another digest now, while the old digest is nowhere in the run.
fn changed_instances(
    baseline: &RunView<'_>,
    old_keys: &Keys<'_>,
    new_keys: &Keys<'_>,
) -> Vec<ChangedInstance> {
    let present: BTreeSet<&str> = new_keys.values().copied().collect();
    let changed = |row: &InstanceRecord| {
        let old = *old_keys.get(row.instance.as_str())?;
        let new = *new_keys.get(row.instance.as_str())?;
        (!present.contains(old)).then(|| ChangedInstance {
            instance: row.instance.clone(),
            baseline: old.to_owned(),
            run: new.to_owned(),
        })
    };
    baseline.instances.iter().filter_map(changed).collect()
}

/// Returns id and options of each method by its label.
fn methods<'a>(view: &RunView<'a>) -> BTreeMap<&'a str, String> {
    let described = |id: &str, options: &str| format!("{id} {options}").trim_end().to_owned();
    let mut methods = BTreeMap::new();
    for method in view.methods {
        methods.insert(method.label.as_str(), described(&method.id, &method.options));
    }
    methods
}

/// Lists the labels of the methods, then those that only records have.
fn labels<'a>(view: &RunView<'a>) -> Vec<&'a str> {
    let mut seen = BTreeSet::new();
    let all = view.methods.iter().map(|method| method.label.as_str());
    all.chain(view.records.iter().map(|record| record.method.as_str()))
        .filter(|label| seen.insert(*label))
        .collect()
}

/// Which of several equal instances may be taken.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Namesake {
    /// The one with the same id.
    Only,
    /// Any.
    Any,
}

/// Trials of the run that have no partner yet, by method, instance and repeat.
struct Waiting<'a>(BTreeMap<(&'a str, &'a str, u64), Vec<&'a Record>>);

impl<'a> Waiting<'a> {
    fn of(run: &RunView<'a>, keys: &Keys<'a>) -> Self {
        let mut waiting: BTreeMap<_, Vec<&Record>> = BTreeMap::new();
        for record in run.records {
            let place = (record.method.as_str(), key(keys, &record.instance), record.repeat);
            waiting.entry(place).or_default().push(record);
        }
        Waiting(waiting)
    }

    fn take(
        &mut self,
        record: &'a Record,
        keys: &Keys<'a>,
        namesake: Namesake,
    ) -> Option<&'a Record> {
        let place = (record.method.as_str(), key(keys, &record.instance), record.repeat);
        let candidates = self.0.get_mut(&place)?;
        let fits = |other: &&Record| {
            other.options == record.options
                && (namesake == Namesake::Any || other.instance == record.instance)
        };
        let at = candidates.iter().position(fits)?;
        Some(candidates.remove(at))
    }
}
