//! One trial in a process of its own: this program again, told on standard input which trial to run.
//!
//! The worker plants the instance anew from its seed, says so by its first byte, runs the method and the
//! referee, and prints the record. What the process dies of (an abort, a stack that overflows, memory
//! that is refused, a method that never looks at the clock) becomes the verdict of its trial and of no
//! other. The clock runs from that first byte to a second one, which says that the method has ended, so that
//! start-up, planting and refereeing are not in the limit; the times in the record are those that the worker
//! took of the method alone.

use std::cell::RefCell;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::Command;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;

use serde::{Deserialize, Serialize};

use super::expand::{Expansion, InstanceSpec, TrialSpec};
use super::instance::Instance;
use super::plan::{Plan, Player, Roster};
use super::trial::{self, TrialEnd};
use super::{Isolation, RunError};
use crate::budget::{Budget, Halt, Stopwatch};
use crate::methods::outside::process::{self, Ending, Outcome, Watch};
use crate::record::{Cost, Record, Timing, TraceRow, Verdict};

/// What the worker prints when the instance is planted, and again when the method has ended.
const MARK: &[u8] = b"\n";

/// Most bytes of a worker's output: a record, a trace of a thousand points, and what a method prints.
const MOST_PRINTED_BYTES: u64 = 64 << 20;

/// How much of its output is kept: more than any record with its trace has.
const KEPT_BYTES: usize = 1 << 20;

/// Address space beyond the memory limit: the program itself, its threads' stacks, the instance.
const HEADROOM: u64 = 1 << 30;

/// Stack of the thread that runs the method.
const STACK_BYTES: usize = 16 << 20;

/// Which trial a worker is to run.
#[derive(Debug, Serialize, Deserialize)]
struct Task {
    plan_file: String,
    plan_folder: PathBuf,
    plan: String,
    round: u64,
    instance: InstanceSpec,
    trial: TrialSpec,
}

/// What a worker prints in the end, on the last line.
#[derive(Debug, Serialize, Deserialize)]
enum Report {
    Recorded(Box<Record>, Vec<TraceRow>),
    /// A defect of this program.
    Internal {
        trial: String,
        detail: String,
    },
}

/// Runs a trial where `isolation` says. An outside method is a process of its own anyway.
///
/// # Errors
/// See [`execute`] and [`trial::execute`].
pub(super) fn play(
    isolation: &Isolation,
    plan: &Plan<'_>,
    (spec, place): (&TrialSpec, &InstanceSpec),
    instance: &Instance,
    interrupt: &Arc<AtomicBool>,
) -> Result<TrialEnd, RunError> {
    match (isolation, &plan.entrants[spec.entrant].player) {
        (Isolation::Processes(program), Player::Listed(_)) => {
            execute(program, plan, (spec, place), instance, interrupt)
        }
        _ => trial::execute(plan, spec, instance, interrupt, &|| {}),
    }
}

/// Runs a trial in a process of its own, started from `program`.
///
/// # Errors
/// The process cannot be started, or it found a defect of this program.
fn execute(
    program: &Path,
    plan: &Plan<'_>,
    (spec, place): (&TrialSpec, &InstanceSpec),
    instance: &Instance,
    interrupt: &Arc<AtomicBool>,
) -> Result<TrialEnd, RunError> {
    let task = Task {
        plan_file: plan.file_name.clone(),
        plan_folder: plan.folder.clone(),
        plan: plan.text.clone(),
        round: plan.round,
        instance: place.clone(),
        trial: TrialSpec { instance: 0, ..spec.clone() },
    };
    let started: RefCell<Option<Stopwatch>> = RefCell::new(None);
    let limit = patience(&plan.budget);
    let check = |printed: u64| {
        if interrupt.load(Ordering::Relaxed) {
            return Err(Halt::Interrupted);
        }
        // Neither planting nor the referee is the method's business.
        if printed != MARK.len() as u64 {
            return Ok(());
        }
        let mut started = started.borrow_mut();
        let clock = started.get_or_insert_with(Stopwatch::start);
        if clock.elapsed() > limit { Err(Halt::TimeLimit) } else { Ok(()) }
    };
    let watch = Watch {
        input: serde_json::to_vec(&task).expect("a task is plain data"),
        printed_bytes: MOST_PRINTED_BYTES,
        kept_bytes: KEPT_BYTES,
        check: &check,
    };
    let outcome = process::run(Command::new(program).arg(COMMAND), watch)
        .map_err(|error| RunError::Worker(format!("{}: {error}", program.display())))?;
    conclude(plan, spec, instance, &outcome)
}

/// Name of the hidden command that a worker is started with.
pub const COMMAND: &str = "trial-worker";

/// Returns how long a method may run before its process is ended: it has the limit to notice by itself, and
/// a quarter of it and half a second to end.
fn patience(budget: &Budget) -> Duration {
    budget.wall.saturating_add(budget.wall / 4).saturating_add(Duration::from_millis(500))
}

/// Turns the way a worker ended into the end of its trial.
fn conclude(
    plan: &Plan<'_>,
    spec: &TrialSpec,
    instance: &Instance,
    outcome: &Outcome,
) -> Result<TrialEnd, RunError> {
    let report = outcome.printed.lines().next_back().map(serde_json::from_str::<Report>);
    match (&outcome.ending, report) {
        (Ending::Exited(0), Some(Ok(Report::Recorded(record, trace)))) => {
            return Ok(TrialEnd::Recorded(record, trace));
        }
        (Ending::Exited(0), Some(Ok(Report::Internal { trial, detail }))) => {
            return Err(RunError::Internal { trial, detail });
        }
        (Ending::Halted(Halt::Interrupted), _) => return Ok(TrialEnd::Interrupted),
        // What dies before the method or after it is this program.
        (ending, _) if *ending != Ending::Flood && outcome.printed.as_bytes() != MARK => {
            let when = if outcome.printed.is_empty() { "before" } else { "after" };
            let detail = format!("the worker ended {when} the method{}", outcome.last_words());
            return Err(RunError::Internal { trial: spec.id.clone(), detail });
        }
        _ => {}
    }
    let limit = plan.budget.memory;
    let held = |limit: u64| outcome.peak_bytes.is_some_and(|peak| peak >= limit);
    let words = outcome.last_words();
    let starved = limit.is_some_and(held) || words.contains("memory allocation of");
    let (verdict, message) = match &outcome.ending {
        Ending::Halted(_) => (
            Verdict::TimeLimit,
            "the method did not end at the wall-time limit and was ended".to_owned(),
        ),
        Ending::Flood => {
            (Verdict::Malformed, "the method printed too much and was ended".to_owned())
        }
        _ if starved => {
            (Verdict::MemoryLimit, format!("the process was refused more memory{words}"))
        }
        Ending::Signalled(signal) => {
            (Verdict::Crashed, format!("the process was ended by signal {signal}{words}"))
        }
        Ending::Exited(code) => {
            (Verdict::Crashed, format!("the process ended with exit code {code}{words}"))
        }
    };
    let cost = Cost {
        wall_s: Some(outcome.wall.as_secs_f64()),
        cpu_s: outcome.processor.map(|processor| processor.as_secs_f64()),
        peak_bytes: outcome.peak_bytes,
        timing: Timing::Shared,
    };
    let record = trial::unanswered(plan, spec, instance, verdict, &message, cost);
    Ok(TrialEnd::Recorded(Box::new(record), Vec::new()))
}

/// Does the work of a worker: reads its task from `input`, runs the trial, prints to `output`.
///
/// # Errors
/// The task is not one that this program writes, or the output is closed.
pub fn serve(
    input: &str,
    output: &mut (impl Write + Send),
    roster: Roster<'_>,
) -> Result<(), String> {
    let task: Task = serde_json::from_str(input).map_err(|error| format!("no task: {error}"))?;
    let plan = Plan::parse(&task.plan, &task.plan_file, &task.plan_folder, roster)
        .map_err(|error| error.to_string())?
        .in_round(task.round);
    follow_parent();
    let expansion = Expansion::single(task.instance);
    let interrupt = Arc::new(AtomicBool::new(false));
    let output = Mutex::new(output);
    let print = |bytes: &[u8]| {
        let mut output = output.lock().unwrap_or_else(PoisonError::into_inner);
        output.write_all(bytes).and_then(|()| output.flush())
    };
    let body = || -> Result<Report, String> {
        let instance = match expansion.load(&plan, 0) {
            Ok(instance) => instance,
            Err(error) => return Ok(internal(&task.trial, error)),
        };
        print(MARK).map_err(|error| error.to_string())?;
        limit_memory(&plan.budget);
        let ended = || {
            lift_memory_limit();
            // A reader that is gone is found out when the report is printed.
            let _ = print(MARK);
        };
        Ok(match trial::execute(&plan, &task.trial, &instance, &interrupt, &ended) {
            Ok(TrialEnd::Recorded(record, trace)) => Report::Recorded(record, trace),
            Ok(TrialEnd::Interrupted) => return Err("interrupted".to_owned()),
            Err(error) => internal(&task.trial, error),
        })
    };
    let report = std::thread::scope(|scope| {
        let thread = std::thread::Builder::new().stack_size(STACK_BYTES).spawn_scoped(scope, body);
        let thread = thread.map_err(|error| error.to_string())?;
        thread.join().unwrap_or_else(|_| Err("the worker panicked".to_owned()))
    })?;
    let line = serde_json::to_string(&report).expect("a report is plain data");
    print(format!("\n{line}\n").as_bytes()).map_err(|error| error.to_string())
}

fn internal(spec: &TrialSpec, error: RunError) -> Report {
    match error {
        RunError::Internal { trial, detail } => Report::Internal { trial, detail },
        other => Report::Internal { trial: spec.id.clone(), detail: other.to_string() },
    }
}

/// Asks the system to end this process when the run that started it is gone, killed perhaps.
fn follow_parent() {
    #[cfg(target_os = "linux")]
    {
        // Where the system refuses, a worker without a run ends when it prints.
        let _ = nix::sys::prctl::set_pdeathsig(nix::sys::signal::Signal::SIGKILL);
    }
}

/// Lets the system refuse memory well beyond the limit, for methods that do not ask about theirs.
fn limit_memory(budget: &Budget) {
    #[cfg(unix)]
    if let Some(limit) = budget.memory {
        use nix::sys::resource::{Resource, getrlimit, setrlimit};
        let most = limit.saturating_add(HEADROOM);
        // Where the system refuses the limit itself, the cooperative one remains.
        if let Ok((_, hard)) = getrlimit(Resource::RLIMIT_AS) {
            let _ = setrlimit(Resource::RLIMIT_AS, most.min(hard), hard);
        }
        let _ = setrlimit(Resource::RLIMIT_CORE, 0, 0);
    }
    #[cfg(not(unix))]
    let _ = budget;
}

/// Takes the limit back: the referee's memory is not the method's.
fn lift_memory_limit() {
    #[cfg(unix)]
    {
        use nix::sys::resource::{Resource, getrlimit, setrlimit};
        if let Ok((_, hard)) = getrlimit(Resource::RLIMIT_AS) {
            let _ = setrlimit(Resource::RLIMIT_AS, hard, hard);
        }
    }
}
