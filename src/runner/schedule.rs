//! Runs trials side by side: every worker takes the next trial of the plan. An instance is planted
//! when its first trial starts and dropped when its last one ends.

use std::collections::{BTreeMap, BTreeSet};
use std::path::Path;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};
use std::sync::{Arc, Mutex, PoisonError};

use super::expand::{Expansion, TrialSpec};
use super::instance::Instance;
use super::journal::{Contents, Journal, JournalError};
use super::plan::Plan;
use super::trial::TrialEnd;
use super::{Isolation, Observer, Placement, RunError, folder, machine, worker};
use crate::record::{Cost, InstanceRecord, Record, Timing};
use crate::seed::Stream;

/// What is to be run, and with what.
pub(super) struct Work<'w> {
    pub(super) plan: &'w Plan<'w>,
    pub(super) expansion: &'w Expansion,
    pub(super) selected: &'w [usize],
    pub(super) isolation: &'w Isolation,
    pub(super) placement: Placement,
    pub(super) before: &'w Before,
    pub(super) folder: &'w Path,
    pub(super) journal: &'w Journal,
    pub(super) pool: &'w rayon::ThreadPool,
    pub(super) interrupt: &'w Arc<AtomicBool>,
    pub(super) observer: &'w dyn Observer,
}

/// What is recorded already. Records themselves stay in the journal, so that the memory of a run does not
/// grow with what it has done.
#[derive(Debug)]
pub(super) struct Before {
    trials: BTreeSet<String>,
    instances: BTreeMap<String, InstanceRecord>,
}

impl Before {
    /// Keeps of a journal's contents what a run needs.
    pub(super) fn of(contents: Contents) -> Self {
        let named = |record: InstanceRecord| (record.instance.clone(), record);
        Before {
            trials: contents.records.into_iter().map(|record| record.trial).collect(),
            instances: contents.instances.into_iter().map(named).collect(),
        }
    }
}

/// The place of one instance while it has trials to come.
struct Slot {
    instance: Mutex<Option<Arc<Instance>>>,
    remaining: AtomicUsize,
}

/// What the workers share.
struct Desk<'w> {
    work: &'w Work<'w>,
    pending: Vec<&'w TrialSpec>,
    slots: BTreeMap<usize, Slot>,
    next: AtomicUsize,
    done: AtomicUsize,
    stop: AtomicBool,
    error: Mutex<Option<RunError>>,
}

/// Whether every selected trial is recorded.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Reached {
    /// Yes.
    All,
    /// No: the run was interrupted.
    Part,
}

/// Runs the selected trials that are not recorded yet.
///
/// Instances come in plan order. The trials of one instance come in an order drawn from the master seed, so
/// that no method always runs first, on a cool machine, or always beside the same other one.
///
/// # Errors
/// The first defect or refusal of the system that stopped the run; what was recorded is kept.
pub(super) fn run(work: &Work<'_>) -> Result<Reached, RunError> {
    let selected = work.selected.iter().map(|at| &work.expansion.trials[*at]);
    let mut pending: Vec<&TrialSpec> =
        selected.filter(|trial| !work.before.trials.contains(&trial.id)).collect();
    pending.sort_by_cached_key(|trial| {
        (trial.instance, Stream::named(work.plan.seed, &["order", &trial.id]).bits())
    });
    let mut slots: BTreeMap<usize, Slot> = BTreeMap::new();
    for trial in &pending {
        let slot = slots
            .entry(trial.instance)
            .or_insert_with(|| Slot { instance: Mutex::new(None), remaining: AtomicUsize::new(0) });
        *slot.remaining.get_mut() += 1;
    }
    let desk = Desk {
        work,
        slots,
        next: AtomicUsize::new(0),
        done: AtomicUsize::new(0),
        stop: AtomicBool::new(false),
        error: Mutex::new(None),
        pending,
    };
    work.observer.begin(desk.pending.len(), work.selected.len() - desk.pending.len());
    let cores = match work.placement {
        Placement::Free => Vec::new(),
        Placement::Pinned => machine::pinnable_cores(),
    };
    work.pool.broadcast(|worker| {
        // The processes that a thread starts stay on its core.
        machine::pin(worker.index(), &cores);
        desk.serve();
    });
    if let Some(error) = desk.error.into_inner().unwrap_or_else(PoisonError::into_inner) {
        return Err(error);
    }
    let done = desk.done.into_inner();
    Ok(if done == desk.pending.len() { Reached::All } else { Reached::Part })
}

/// Runs solved trials again, one at a time, and records their time and memory without neighbours.
///
/// # Errors
/// As for [`run`].
pub(super) fn retime(work: &Work<'_>, recorded: &[Record]) -> Result<Reached, RunError> {
    let wanted: BTreeMap<&str, &Record> = recorded
        .iter()
        .filter(|record| record.verdict.is_success() && record.timing == Timing::Shared)
        .map(|record| (record.trial.as_str(), record))
        .collect();
    let selected = work.selected.iter().map(|at| &work.expansion.trials[*at]);
    let pending: Vec<(&TrialSpec, &Record)> =
        selected.filter_map(|trial| Some((trial, *wanted.get(trial.id.as_str())?))).collect();
    work.observer.begin_retiming(pending.len());
    let mut planted: Option<(usize, Instance)> = None;
    for (spec, recorded) in pending {
        if work.interrupt.load(Ordering::Relaxed) {
            return Ok(Reached::Part);
        }
        let instance = match planted.take() {
            Some((at, instance)) if at == spec.instance => instance,
            _ => work.expansion.load(work.plan, spec.instance)?,
        };
        let place = &work.expansion.instances[spec.instance];
        let end = work.pool.install(|| {
            worker::play(work.isolation, work.plan, (spec, place), &instance, work.interrupt)
        })?;
        let TrialEnd::Recorded(again, _) = end else { return Ok(Reached::Part) };
        if again.without_measurements() == recorded.without_measurements() {
            let cost = Cost { timing: Timing::Alone, ..again.cost() };
            work.journal.retimed(&again.trial, cost)?;
        } else {
            work.observer.notice(&format!(
                "{} did not end alone as it did beside others; its time stays the first one",
                again.trial
            ));
        }
        work.observer.finished(&again);
        planted = Some((spec.instance, instance));
    }
    Ok(Reached::All)
}

impl Desk<'_> {
    /// Takes trial after trial until none is left or the run is stopped.
    fn serve(&self) {
        while !self.stop.load(Ordering::Relaxed) && !self.work.interrupt.load(Ordering::Relaxed) {
            let Some(trial) = self.pending.get(self.next.fetch_add(1, Ordering::Relaxed)) else {
                return;
            };
            if let Err(error) = self.execute(trial) {
                self.stop.store(true, Ordering::Relaxed);
                self.error.lock().unwrap_or_else(PoisonError::into_inner).get_or_insert(error);
            }
            self.leave(trial.instance);
        }
    }

    fn execute(&self, spec: &TrialSpec) -> Result<(), RunError> {
        let instance = self.take(spec.instance)?;
        match self.play(spec, &instance)? {
            TrialEnd::Interrupted => Ok(()),
            TrialEnd::Recorded(record, trace) => {
                if !trace.is_empty() {
                    folder::write_trace(self.work.folder, &record.trial, &trace)?;
                }
                self.work.journal.trial(&record)?;
                self.work.observer.finished(&record);
                self.done.fetch_add(1, Ordering::Relaxed);
                Ok(())
            }
        }
    }

    /// Runs a trial where the run's isolation says.
    fn play(&self, spec: &TrialSpec, instance: &Instance) -> Result<TrialEnd, RunError> {
        let place = &self.work.expansion.instances[spec.instance];
        let work = self.work;
        worker::play(work.isolation, work.plan, (spec, place), instance, work.interrupt)
    }

    /// Returns the instance, planting and recording it when this is its first trial.
    fn take(&self, at: usize) -> Result<Arc<Instance>, RunError> {
        let mut place = self.slots[&at].instance.lock().unwrap_or_else(PoisonError::into_inner);
        if let Some(instance) = place.as_ref() {
            return Ok(Arc::clone(instance));
        }
        let instance = Arc::new(self.work.expansion.load(self.work.plan, at)?);
        match self.work.before.instances.get(instance.record.instance.as_str()) {
            Some(recorded) if *recorded == instance.record => {}
            Some(_) => {
                let reason = format!(
                    "instance {} is not what was recorded; was the run started by another version?",
                    instance.record.instance
                );
                return Err(JournalError::OtherRun {
                    path: super::journal::FILE.to_owned(),
                    reason,
                }
                .into());
            }
            None => self.work.journal.instance(&instance.record)?,
        }
        *place = Some(Arc::clone(&instance));
        Ok(instance)
    }

    /// Counts a trial of the instance as ended and drops the instance after the last one.
    fn leave(&self, at: usize) {
        let slot = &self.slots[&at];
        if slot.remaining.fetch_sub(1, Ordering::AcqRel) == 1 {
            *slot.instance.lock().unwrap_or_else(PoisonError::into_inner) = None;
        }
    }
}
