//! From a plan to instances and trials with stable ids, in plan order.

use std::collections::{BTreeMap, BTreeSet};
use std::path::Path;

use rayon::prelude::*;
use serde::{Deserialize, Serialize};

use super::instance::{Instance, plant, read_instance};
use super::isolation::guarded;
use super::journal::Contents;
use super::plan::{Imported, Plan, Sown};
use super::selection::Selection;
use super::{InputError, RunError};
use crate::families::PlantError;
use crate::record::{InstanceRecord, Record, RunHeader, SCHEMA};

/// Where an instance comes from.
#[derive(Clone, Copy, Debug, Serialize, Deserialize)]
enum Origin {
    /// Combination and index within it.
    Sown(usize, u64),
    /// Imported file.
    Imported(usize),
}

/// An instance of the plan, not planted yet.
#[derive(Clone, Debug, Serialize, Deserialize)]
pub(super) struct InstanceSpec {
    pub(super) id: String,
    origin: Origin,
}

/// A trial of the plan.
#[derive(Clone, Debug, Serialize, Deserialize)]
pub(super) struct TrialSpec {
    pub(super) id: String,
    pub(super) instance: usize,
    pub(super) entrant: usize,
    pub(super) repeat: u64,
}

/// All instances and trials of a plan.
#[derive(Debug)]
pub(super) struct Expansion {
    pub(super) instances: Vec<InstanceSpec>,
    pub(super) trials: Vec<TrialSpec>,
}

/// Names a planted instance: family, order and rank, what else differs from its default, index.
fn sown_id(sown: &Sown<'_>, index: u64) -> String {
    let card = sown.family.card();
    let mut id = card.id.to_owned();
    let mut add = |name: &str| {
        if let Some(value) = sown.parameters.get(name) {
            id.push_str(&format!("-{name}={value}"));
        }
    };
    add("order");
    add("rank");
    for spec in card.parameters.iter().filter(|spec| spec.name != "order" && spec.name != "rank") {
        if sown.parameters.get(spec.name) != Some(&spec.default.setting()) {
            add(spec.name);
        }
    }
    format!("{id}-{index}")
}

/// Names an imported instance: the stem of its file, and its rank bound.
fn imported_id(imported: &Imported) -> String {
    let stem = Path::new(&imported.path).file_name().unwrap_or_default().to_string_lossy();
    let stem = stem.split('.').next().unwrap_or_default();
    let plain: String =
        stem.chars().map(|c| if c.is_alphanumeric() || c == '_' { c } else { '-' }).collect();
    imported.rank.map_or_else(|| plain.clone(), |rank| format!("{plain}-rank={rank}"))
}

impl Expansion {
    /// Expands a plan: instances in plan order; for each instance the methods; for each the repeats.
    pub(super) fn new(plan: &Plan<'_>) -> Self {
        let mut instances = Vec::new();
        for (at, sown) in plan.sown.iter().enumerate() {
            for index in plan.round * sown.count..(plan.round + 1) * sown.count {
                instances.push(InstanceSpec {
                    id: sown_id(sown, index),
                    origin: Origin::Sown(at, index),
                });
            }
        }
        let mut taken: BTreeSet<String> =
            instances.iter().map(|instance| instance.id.clone()).collect();
        for (at, imported) in plan.imported.iter().enumerate() {
            let plain = imported_id(imported);
            // Files of one name in different folders.
            let mut id = plain.clone();
            let mut number = 2;
            while !taken.insert(id.clone()) {
                id = format!("{plain}-{number}");
                number += 1;
            }
            instances.push(InstanceSpec { id, origin: Origin::Imported(at) });
        }
        let mut trials = Vec::new();
        let earlier = plan.round * plan.trial_count();
        for (at, instance) in instances.iter().enumerate() {
            for (entrant, method) in plan.entrants.iter().enumerate() {
                for repeat in 1..=plan.repeats {
                    let number = earlier + trials.len() as u64 + 1;
                    let mut id = format!("{number:04}-{}-{}", instance.id, method.label);
                    if plan.repeats > 1 {
                        id.push_str(&format!("-{repeat}"));
                    }
                    trials.push(TrialSpec { id, instance: at, entrant, repeat });
                }
            }
        }
        Expansion { instances, trials }
    }

    /// Holds one instance and no trials.
    pub(super) fn single(instance: InstanceSpec) -> Self {
        Expansion { instances: vec![instance], trials: Vec::new() }
    }

    /// Returns what a selection pattern is matched with.
    pub(super) fn describe(&self, plan: &Plan<'_>, trial: &TrialSpec) -> String {
        format!("{} {}", self.instances[trial.instance].id, plan.entrants[trial.entrant].label)
    }

    /// Lists the positions of the selected trials.
    pub(super) fn select(&self, plan: &Plan<'_>, selection: &Selection) -> Vec<usize> {
        let ids: Vec<&str> = self.instances.iter().map(|instance| instance.id.as_str()).collect();
        let here = selection.shard.map(|shard| shard.share(&ids));
        let takes = |trial: &TrialSpec| {
            here.as_ref().is_none_or(|here| here[trial.instance])
                && selection.takes(ids[trial.instance], &plan.entrants[trial.entrant].label)
        };
        (0..self.trials.len()).filter(|at| takes(&self.trials[*at])).collect()
    }

    /// Plants the first instance of every combination and reads every imported file, so that what is
    /// impossible is found before anything is written. Returns the imports by path and digest.
    pub(super) fn check(
        &self,
        plan: &Plan<'_>,
        pool: &rayon::ThreadPool,
    ) -> Result<Vec<(String, String)>, RunError> {
        let imports = plan.imported.iter().map(|imported| match read_imported(imported) {
            Ok(instance) => Ok((imported.path.clone(), instance.record.digest)),
            // What is wrong inside the file is told with its place there, all else with the plan's.
            Err(InputError::Format(error)) if error.line > 0 => {
                Err(InputError::Format(error).into())
            }
            Err(error) => {
                let message = format!("cannot import this file: {error}");
                Err(RunError::from(plan.error_at(imported.span.clone(), &message)))
            }
        });
        let imports = imports.collect::<Result<Vec<_>, RunError>>()?;
        let verdicts: Vec<Result<(), RunError>> =
            pool.install(|| plan.sown.par_iter().map(|sown| try_planting(plan, sown)).collect());
        verdicts.into_iter().collect::<Result<Vec<()>, RunError>>()?;
        Ok(imports)
    }

    /// Plants or reads an instance and fills in its record.
    pub(super) fn load(&self, plan: &Plan<'_>, at: usize) -> Result<Instance, RunError> {
        let spec = &self.instances[at];
        let mut instance = match spec.origin {
            Origin::Sown(sown, index) => {
                let sown = &plan.sown[sown];
                let planted = guarded(|| plant(sown.family, &sown.parameters, plan.seed, index));
                let internal =
                    |detail: String| RunError::Internal { trial: spec.id.clone(), detail };
                let planted = planted
                    .map_err(|panic| internal(format!("planting panicked: {panic}")))?
                    .map_err(|error| internal(format!("planting failed: {error}")))?;
                let mut instance = Instance::from_planted(planted);
                let card = sown.family.card();
                instance.record.family = card.id.to_owned();
                instance.record.parameters = sown.parameters.to_string();
                instance.record.index = index;
                instance.record.relaxation = card.relaxation.word().to_owned();
                instance
            }
            Origin::Imported(imported) => {
                let imported = &plan.imported[imported];
                let mut instance = read_imported(imported)?;
                instance.record.family = "imported".to_owned();
                instance.record.parameters = format!("path={}", imported.path);
                if let Some(rank) = imported.rank {
                    instance.record.parameters.push_str(&format!(" rank={rank}"));
                }
                instance
            }
        };
        instance.record.instance.clone_from(&spec.id);
        instance.record.seed = plan.seed;
        Ok(instance)
    }

    /// Describes the run for its journal.
    pub(super) fn header(&self, plan: &Plan<'_>, imports: Vec<(String, String)>) -> RunHeader {
        let tolerance = plan.tolerance;
        RunHeader {
            schema: SCHEMA,
            title: plan.title.clone(),
            plan_digest: plan.digest.clone(),
            imports,
            seed: plan.seed,
            round: plan.round,
            wall_limit_s: plan.budget.wall.as_secs_f64(),
            memory_limit: plan.budget.memory,
            tolerance: [tolerance.feasibility, tolerance.objective, tolerance.rank],
            methods: plan.entrants.iter().map(super::plan::Entrant::record).collect(),
            trials: self.trials.len() as u64,
        }
    }

    /// Puts what is recorded in plan order.
    pub(super) fn in_plan_order(&self, recorded: Contents) -> (Vec<InstanceRecord>, Vec<Record>) {
        let place = |ids: &mut dyn Iterator<Item = &str>| -> BTreeMap<String, usize> {
            ids.enumerate().map(|(at, id)| (id.to_owned(), at)).collect()
        };
        let instance_place = place(&mut self.instances.iter().map(|instance| instance.id.as_str()));
        let trial_place = place(&mut self.trials.iter().map(|trial| trial.id.as_str()));
        let (mut instances, mut records) = (recorded.instances, recorded.records);
        instances.sort_by_key(|record| instance_place.get(&record.instance).copied());
        records.sort_by_key(|record| trial_place.get(&record.trial).copied());
        (instances, records)
    }
}

fn read_imported(imported: &Imported) -> Result<Instance, InputError> {
    let mut instance = read_instance(&imported.resolved)?;
    if let Some(rank) = imported.rank {
        instance = instance.with_rank(rank, &imported.path)?;
    }
    if let Some(reported) = &imported.optimum {
        instance = instance.with_reported(reported, &imported.path)?;
    }
    Ok(instance)
}

fn try_planting(plan: &Plan<'_>, sown: &Sown<'_>) -> Result<(), RunError> {
    let internal = |detail: String| RunError::Internal { trial: sown_id(sown, 0), detail };
    match guarded(|| plant(sown.family, &sown.parameters, plan.seed, 0).map(|_| ())) {
        Ok(Ok(())) => Ok(()),
        Ok(Err(PlantError::Parameters(reason) | PlantError::Range(reason))) => {
            let message = format!(
                "{} cannot be planted with {}: {reason}",
                sown.family.card().id,
                sown.parameters
            );
            Err(plan.error_at(sown.place_of(&reason), &message).into())
        }
        Ok(Err(error)) => Err(internal(format!("planting failed: {error}"))),
        Err(panic) => Err(internal(format!("planting panicked: {panic}"))),
    }
}
