//! Outside methods: other programs, in any language, spoken to over files.
//!
//! For each trial a folder of its own holds `problem.dat-s` (sparse SDPA: matrix number 0 is -C, the
//! right sides are b, so that its maximum is minus our minimum) and `problem.json` (see [`task`]). The
//! command runs with that folder as its last argument, in a process group of its own, and writes
//! `answer.json` into it: a solution file as `formats::solution` describes it. Anything else it does
//! becomes a verdict with the reason and never stops the run.
//!
//! What is limited: wall time (the group is killed at the limit), processor time and address space
//! (by the shell's `ulimit`), the size of each file it writes, and what it prints. What is not: the
//! number of processes, which systems count for the user and not for the group, and a child that leaves
//! its group. An answer that is there and whole when the wall limit ends the program still counts.

pub(crate) mod process;
pub mod task;

use std::path::{Path, PathBuf};

use super::{Method, Trial};
use crate::budget::{Charge, Counting, Halt};
use crate::card::{MethodCard, MethodClass};
use crate::formats::solution;
use crate::problem::{Answer, Problem, StopReason};
use process::{Ending, Limits, Outcome, Watch};

/// Version of the protocol: the layout of the folder, the task and the answer.
pub const PROTOCOL: u32 = 1;

/// Most bytes of an answer file, and of each Matrix Market file beside it.
pub const MOST_ANSWER_BYTES: u64 = 256 << 20;

/// Most bytes that a program may print.
pub const MOST_PRINTED_BYTES: u64 = 16 << 20;

/// How much of the end of its output is kept for messages, in bytes.
const KEPT_BYTES: usize = 2000;

/// Share of the memory limit from which on the death of a program is put down to it.
const NEAR_LIMIT: f64 = 0.75;

/// Id of every outside method in records; its label tells them apart.
pub const ID: &str = "outside";

/// What is said of every outside method.
pub static CARD: MethodCard = MethodCard {
    id: ID,
    title: "Another program, in any language, spoken to over files",
    class: MethodClass::Outside,
    reference: "whatever the program implements",
    needs: "A Unix system; whatever the program supports.",
    cost: "Whatever the program does; starting it and reading its files are in its times.",
    guarantees: "None that this tool knows of.",
    failures: "Effort is what the program reports of itself, and missing where it reports nothing.",
    options: &[],
};

/// A program that takes part in a run.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Outside {
    /// The program and its arguments.
    pub command: Vec<String>,
    /// Folder it is started in, from which relative paths in the command count.
    pub folder: PathBuf,
}

impl Method for Outside {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        trial.meter.set_counting(Counting::Missing);
        let failed = |what: &str| {
            let what = what.to_owned();
            move |error: std::io::Error| Halt::Failed(format!("{what}: {error}"))
        };
        let room = tempfile::Builder::new()
            .prefix("rankassay-")
            .tempdir()
            .map_err(failed("no folder for the trial can be made"))?;
        task::write(room.path(), problem, trial)
            .map_err(failed("the problem cannot be written"))?;
        let budget = trial.meter.budget();
        let limits = Limits {
            // The group is killed at the wall limit; this stops what left the group.
            processor_s: budget.wall.as_secs().saturating_mul(2).saturating_add(2),
            memory: budget.memory,
            file_bytes: MOST_ANSWER_BYTES,
        };
        let mut command = process::limited(&self.command, &self.folder, room.path(), &limits);
        let meter = &trial.meter;
        let watch = Watch {
            input: Vec::new(),
            printed_bytes: MOST_PRINTED_BYTES,
            kept_bytes: KEPT_BYTES,
            check: &|_| meter.check(),
        };
        let outcome = process::run(&mut command, watch);
        let outcome = outcome.map_err(|error| {
            Halt::Crashed(format!("{} cannot be started: {error}", self.command[0]))
        })?;
        trial.meter.charge(Charge {
            wall: outcome.wall,
            processor: outcome.processor,
            peak_bytes: outcome.peak_bytes,
        });
        self.conclude(problem, trial, room.path(), &outcome)
    }
}

impl Outside {
    /// Turns the way the program ended and what it left behind into an answer or a reason.
    fn conclude(
        &self,
        problem: &Problem,
        trial: &mut Trial,
        room: &Path,
        outcome: &Outcome,
    ) -> Result<Answer, Halt> {
        let answer = |trial: &mut Trial| read_answer(problem, trial, room);
        match &outcome.ending {
            Ending::Halted(Halt::TimeLimit) => match answer(trial) {
                Ok(found) => Ok(Answer { stop: StopReason::TimeLimit, ..found }),
                Err(_) => Err(Halt::TimeLimit),
            },
            Ending::Halted(halt) => Err(halt.clone()),
            Ending::Flood => Err(Halt::Malformed(format!(
                "the program printed more than {} MiB and was ended",
                MOST_PRINTED_BYTES >> 20
            ))),
            Ending::Exited(0) => answer(trial),
            Ending::Exited(_) | Ending::Signalled(_) => {
                if died_of_memory(trial.meter.budget().memory, outcome) {
                    return Err(Halt::MemoryLimit);
                }
                let how = match outcome.ending {
                    Ending::Signalled(signal) => format!("was ended by signal {signal}"),
                    Ending::Exited(code) => format!("ended with exit code {code}"),
                    _ => unreachable!("matched above"),
                };
                let said = outcome.last_words();
                Err(Halt::Crashed(format!("the program {how}{said}")))
            }
        }
    }
}

/// Returns whether a program that died under a memory limit died of it: it held most of it, or its last
/// words speak of memory.
fn died_of_memory(limit: Option<u64>, outcome: &Outcome) -> bool {
    let Some(limit) = limit else {
        return false;
    };
    let held = outcome.peak_bytes.is_some_and(|peak| peak as f64 >= NEAR_LIMIT * limit as f64);
    held || outcome.last_words().to_lowercase().contains("memory")
}

/// Reads `answer.json` and adds the reported effort to the meter.
fn read_answer(problem: &Problem, trial: &mut Trial, room: &Path) -> Result<Answer, Halt> {
    let path = room.join(task::ANSWER);
    match std::fs::metadata(&path) {
        Err(_) => {
            return Err(Halt::Malformed(format!("the program wrote no {}", task::ANSWER)));
        }
        Ok(file) if !file.is_file() || file.len() > MOST_ANSWER_BYTES => {
            return Err(Halt::Malformed(format!(
                "{} is no file of at most {} MiB",
                task::ANSWER,
                MOST_ANSWER_BYTES >> 20
            )));
        }
        Ok(_) => {}
    }
    let read = solution::read(&path, problem).map_err(|error| {
        // The folder is gone when somebody reads this: only the file's name helps.
        let text = error.to_string().replace(&format!("{}/", room.display()), "");
        Halt::Malformed(text)
    })?;
    let effort = &mut trial.meter.effort;
    effort.flops += read.effort.flops.unwrap_or(0);
    effort.eigendecompositions += read.effort.eigendecompositions.unwrap_or(0);
    effort.factorisations += read.effort.factorisations.unwrap_or(0);
    effort.operator_products += read.effort.operator_products.unwrap_or(0);
    effort.inner_steps += read.effort.inner_steps.unwrap_or(0);
    if read.effort != solution::ReportedEffort::default() {
        trial.meter.set_counting(Counting::Counted);
    }
    Ok(read.answer)
}
