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
use super::{Isolation, Observer, RunError, folder, worker};
use crate::record::{InstanceRecord, Record};

/// What is to be run, and with what.
pub(super) struct Work<'w> {
    pub(super) plan: &'w Plan<'w>,
    pub(super) expansion: &'w Expansion,
    pub(super) selected: &'w [usize],
    pub(super) isolation: &'w Isolation,
    pub(super) before: &'w Contents,
    pub(super) folder: &'w Path,
    pub(super) journal: &'w Journal,
    pub(super) pool: &'w rayon::ThreadPool,
    pub(super) interrupt: &'w Arc<AtomicBool>,
    pub(super) observer: &'w dyn Observer,
}

/// What was recorded now, in the order of its end.
#[derive(Debug, Default)]
pub(super) struct Log {
    pub(super) instances: Vec<InstanceRecord>,
    pub(super) records: Vec<Record>,
    /// Whether every selected trial is recorded.
    pub(super) complete: bool,
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
    recorded_instances: BTreeMap<&'w str, &'w InstanceRecord>,
    next: AtomicUsize,
    stop: AtomicBool,
    log: Mutex<Log>,
    error: Mutex<Option<RunError>>,
}

/// Runs the selected trials that are not recorded yet.
///
/// # Errors
/// The first defect or refusal of the system that stopped the run; what was recorded is kept.
pub(super) fn run(work: &Work<'_>) -> Result<Log, RunError> {
    let recorded: BTreeSet<&str> =
        work.before.records.iter().map(|record| record.trial.as_str()).collect();
    let selected = work.selected.iter().map(|at| &work.expansion.trials[*at]);
    let pending: Vec<&TrialSpec> =
        selected.filter(|trial| !recorded.contains(trial.id.as_str())).collect();
    let mut slots: BTreeMap<usize, Slot> = BTreeMap::new();
    for trial in &pending {
        let slot = slots
            .entry(trial.instance)
            .or_insert_with(|| Slot { instance: Mutex::new(None), remaining: AtomicUsize::new(0) });
        *slot.remaining.get_mut() += 1;
    }
    let instances = work.before.instances.iter();
    let desk = Desk {
        work,
        slots,
        recorded_instances: instances.map(|record| (record.instance.as_str(), record)).collect(),
        next: AtomicUsize::new(0),
        stop: AtomicBool::new(false),
        log: Mutex::new(Log::default()),
        error: Mutex::new(None),
        pending,
    };
    work.observer.begin(desk.pending.len(), work.selected.len() - desk.pending.len());
    work.pool.broadcast(|_| desk.serve());
    if let Some(error) = desk.error.into_inner().unwrap_or_else(PoisonError::into_inner) {
        return Err(error);
    }
    let mut log = desk.log.into_inner().unwrap_or_else(PoisonError::into_inner);
    log.complete = log.records.len() == desk.pending.len();
    Ok(log)
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
                self.log.lock().unwrap_or_else(PoisonError::into_inner).records.push(*record);
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
        match self.recorded_instances.get(instance.record.instance.as_str()) {
            Some(recorded) if **recorded == instance.record => {}
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
            None => {
                self.work.journal.instance(&instance.record)?;
                let mut log = self.log.lock().unwrap_or_else(PoisonError::into_inner);
                log.instances.push(instance.record.clone());
            }
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
