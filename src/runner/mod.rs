//! Runs a plan: expands it to trials, plants or reads their instances, runs the methods side by side
//! with a thread each, has every answer refereed, and keeps one record a trial.
//!
//! Nothing here solves, judges or makes a table, and nothing here prints: whoever runs a plan hears of
//! its course through an [`Observer`].

mod calibration;
mod expand;
mod folder;
mod instance;
mod isolation;
pub mod journal;
mod machine;
mod manifest;
mod merge;
mod plan;
mod replay;
pub mod scatter;
mod schedule;
mod selection;
mod trial;
pub mod worker;

pub use folder::{FolderError, Target, latest_folder, read_traces, write_files};
pub use instance::{InputError, Instance, Knowledge, plant, read_instance};
pub use journal::{Contents, JournalError};
pub use machine::Machine;
pub use manifest::{Manifest, Stretch};
pub use merge::{Disagreement, MergeError, Merged, Missing, merge};
pub use plan::{
    Entrant, Imported, Located, Plan, PlanError, Player, ReportedOptimum, Roster, Sown, Span,
    Traced,
};
pub use replay::{Agreement, Difference, Recorded, Replay, ReplayError};
pub use selection::{Pattern, Selection, Shard};

use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

use crate::record::{InstanceRecord, Record, RunHeader};
use expand::Expansion;
use schedule::{Before, Reached};

/// Returns the SHA-256 of `bytes` in hexadecimal digits.
pub(crate) fn hexadecimal_digest(bytes: &[u8]) -> String {
    Sha256::digest(bytes).iter().map(|byte| format!("{byte:02x}")).collect()
}

/// How a plan is run.
#[derive(Debug)]
pub struct RunOptions {
    /// Where the run folder is.
    pub target: Target,
    /// Number of trials at a time; none for one a core.
    pub jobs: Option<usize>,
    /// Which trials of the plan.
    pub selection: Selection,
    /// Where the methods run.
    pub isolation: Isolation,
    /// On which cores.
    pub placement: Placement,
    /// Whether solved trials are timed once more when all have ended.
    pub retiming: Retiming,
    /// Set to end the run at the next check of every running method.
    pub interrupt: Arc<AtomicBool>,
}

/// Where the methods of a run run.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Isolation {
    /// In threads of this process: a method that aborts or never ends takes the run with it.
    None,
    /// Each trial in a process of its own, started from this program file. Outside methods are processes
    /// of their own anyway.
    Processes(PathBuf),
}

/// On which cores trials run.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Placement {
    /// Where the system puts them.
    #[default]
    Free,
    /// Each of the trials at a time is tied to a core of its own (Linux).
    Pinned,
}

/// Whether solved trials are timed once more, one at a time.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Retiming {
    /// No: times are those of trials side by side.
    #[default]
    None,
    /// Yes: their time and memory are those without neighbours.
    Solved,
}

/// Hears how a run goes. Calls come from several threads.
pub trait Observer: Sync {
    /// Learns how many of the selected trials are to be run, and how many are recorded already.
    fn begin(&self, pending: usize, recorded: usize);
    /// Learns that so many solved trials are timed once more.
    fn begin_retiming(&self, pending: usize) {
        let _ = pending;
    }
    /// Learns something worth telling.
    fn notice(&self, text: &str);
    /// Learns of a trial that has ended.
    fn finished(&self, record: &Record);
}

/// How a run ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Ending {
    /// Every selected trial is recorded.
    Complete,
    /// The run was interrupted; what was recorded is kept.
    Interrupted,
}

/// What a run leaves behind.
#[derive(Clone, Debug)]
pub struct Outcome {
    /// The run folder.
    pub folder: PathBuf,
    /// What its trials have in common.
    pub header: RunHeader,
    /// Instances, in plan order.
    pub instances: Vec<InstanceRecord>,
    /// Records, in plan order.
    pub records: Vec<Record>,
    /// How it ended.
    pub ending: Ending,
}

/// Says why a run did not start or had to stop.
#[derive(Debug, thiserror::Error)]
pub enum RunError {
    /// The plan is wrong.
    #[error("{0}")]
    Plan(PlanError),
    /// An imported file is wrong.
    #[error("{0}")]
    Input(Box<InputError>),
    /// The run folder cannot be used.
    #[error("{0}")]
    Folder(#[from] FolderError),
    /// The journal cannot be used.
    #[error("{0}")]
    Journal(#[from] JournalError),
    /// No trial is selected.
    #[error("{0}")]
    Nothing(String),
    /// The system does not give the threads that were asked for.
    #[error("{0} threads cannot be started: {1}")]
    Threads(usize, String),
    /// The process of a trial cannot be started.
    #[error("a trial's process cannot be started: {0}")]
    Worker(String),
    /// The system refused to take a record.
    #[error(
        "{reason}; the records so far are kept in {folder}, go on by `--resume --into {folder}` when there is room"
    )]
    Stopped {
        /// What the system says, and of which file.
        reason: String,
        /// The run folder.
        folder: String,
    },
    /// A defect of this program: a certificate, a family or the referee is wrong.
    #[error("internal error: a certificate, a family or the referee is wrong; {trial}: {detail}")]
    Internal {
        /// Id of the trial or of the instance.
        trial: String,
        /// What contradicts what.
        detail: String,
    },
}

impl RunError {
    /// Says of what stopped a run where the records up to it are kept.
    fn kept_in(self, folder: &std::path::Path) -> Self {
        match self {
            RunError::Internal { trial, detail } => {
                let kept = folder.display();
                RunError::Internal {
                    trial,
                    detail: format!("{detail}; the records so far are kept in {kept}"),
                }
            }
            RunError::Journal(error @ JournalError::System { .. }) => RunError::Stopped {
                reason: error.to_string(),
                folder: folder.display().to_string(),
            },
            RunError::Folder(error @ FolderError::System { .. }) => RunError::Stopped {
                reason: error.to_string(),
                folder: folder.display().to_string(),
            },
            other => other,
        }
    }
}

impl From<PlanError> for RunError {
    fn from(error: PlanError) -> Self {
        RunError::Plan(error)
    }
}

impl From<InputError> for RunError {
    fn from(error: InputError) -> Self {
        RunError::Input(Box::new(error))
    }
}

/// Lists the ids of all trials of a plan, in plan order.
pub fn trial_ids(plan: &Plan<'_>) -> Vec<String> {
    Expansion::new(plan).trials.into_iter().map(|trial| trial.id).collect()
}

/// Runs a plan.
///
/// Every impossible parameter and every imported file is found out before the run folder is made. The
/// rows of the records are in plan order whatever the number of jobs, and everything in them but times
/// and memory is the same for any number of jobs as long as no limit is reached.
///
/// # Errors
/// See [`RunError`]. After [`RunError::Internal`] the run folder keeps what was recorded.
pub fn run(
    plan: &Plan<'_>,
    options: &RunOptions,
    observer: &dyn Observer,
) -> Result<Outcome, RunError> {
    let jobs = options.jobs.unwrap_or_else(machine::cores).max(1);
    let pool = rayon::ThreadPoolBuilder::new()
        .num_threads(jobs)
        .stack_size(16 << 20)
        .build()
        .map_err(|error| RunError::Threads(jobs, error.to_string()))?;
    let expansion = Expansion::new(plan);
    let selected = expansion.select(plan, &options.selection);
    if selected.is_empty() {
        let example =
            expansion.trials.first().map_or(String::new(), |trial| expansion.describe(plan, trial));
        let text = format!("no trial of the plan is selected; the first is `{example}`");
        return Err(RunError::Nothing(text));
    }
    let imports = expansion.check(plan, &pool)?;
    let header = expansion.header(plan, imports);
    let (folder, journal, before) = folder::open(&options.target, &header, observer)?;
    let before = Before::of(before);
    if options.placement == Placement::Pinned && machine::pinnable_cores().is_empty() {
        observer
            .notice("this system does not tie processes to cores: trials run where it puts them");
    }
    let started = Manifest::begin(&folder, plan, &header, jobs, options.placement)?;
    let work = schedule::Work {
        plan,
        expansion: &expansion,
        selected: &selected,
        isolation: &options.isolation,
        placement: options.placement,
        before: &before,
        folder: &folder,
        journal: &journal,
        pool: &pool,
        interrupt: &options.interrupt,
        observer,
    };
    let mut reached = schedule::run(&work).map_err(|error| error.kept_in(&folder))?;
    let mut recorded = journal::read(&folder)?;
    if reached == Reached::All && options.retiming == Retiming::Solved {
        reached =
            schedule::retime(&work, &recorded.records).map_err(|error| error.kept_in(&folder))?;
        recorded = journal::read(&folder)?;
    }
    let (instances, records) = expansion.in_plan_order(recorded);
    folder::write_rows(&folder, "instances.csv", &instances)?;
    folder::write_rows(&folder, "trials.csv", &records)?;
    started.end(&folder)?;
    let ending = match reached {
        Reached::All => Ending::Complete,
        Reached::Part => Ending::Interrupted,
    };
    Ok(Outcome { folder, header, instances, records, ending })
}
