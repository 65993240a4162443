//! Outside methods: other programs, in any language, spoken to over files.
//!
//! For each trial a folder of its own holds `problem.dat-s` (sparse SDPA: matrix number 0 is -C, the
//! right sides are b, so that its maximum is minus our minimum) and `problem.json` (see [`task`]). The
//! command runs with that folder as its last argument, in a process group of its own, and writes
//! `answer.json` into it: a solution file as `formats::solution` describes it. Anything else it does
//! becomes a verdict with the reason and never stops the run.
//!
//! What is limited: wall time (the group is killed at the limit), processor time and address space
//! (by the shell's `ulimit`), the size of each file it writes, what it prints, and how long an answer is
//! read at all ([`answer_bytes`]), and, where there is a `/proc`, the number of processes at once
//! ([`MOST_PROCESSES`]). Children go with the program, those that left its group too where they can be found
//! (`census`). An answer that is there and whole when the wall limit ends the program still counts.

mod census;
pub(crate) mod process;
pub mod task;

use std::cell::Cell;
use std::path::{Path, PathBuf};
use std::time::Duration;

use super::{Method, Trial};
use crate::budget::{Charge, Counting, Halt, Stopwatch};
use crate::card::{MethodCard, MethodClass};
use crate::formats::solution;
use crate::problem::{Answer, Problem, StopReason};
use process::{Ending, Limits, Outcome, Watch};

/// Version of the protocol: the layout of the folder, the task and the answer.
pub const PROTOCOL: u32 = 1;

/// Most bytes of an answer file, and of each Matrix Market file beside it, whatever the problem.
pub const MOST_ANSWER_BYTES: u64 = 256 << 20;

/// Bytes of an answer that every problem is granted.
const LEAST_ANSWER_BYTES: u64 = 1 << 20;

/// Bytes of an answer that are granted for each number of a dense one, blanks and brackets included.
const BYTES_A_NUMBER: u64 = 64;

/// Most bytes that a program may print.
pub const MOST_PRINTED_BYTES: u64 = 16 << 20;

/// Most processes that a program may have at once.
pub const MOST_PROCESSES: usize = 256;

/// How long after a count of its processes the next one follows.
const BETWEEN_COUNTS: Duration = Duration::from_millis(100);

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
        let counted = Cell::new(Stopwatch::start());
        let check = |_| {
            if counted.get().elapsed() > BETWEEN_COUNTS {
                counted.set(Stopwatch::start());
                let processes = census::members(room.path()).len();
                if processes > MOST_PROCESSES {
                    return Err(Halt::Crashed(format!(
                        "the program had {processes} processes at once, more than {MOST_PROCESSES}, and was ended"
                    )));
                }
            }
            meter.check()
        };
        let watch = Watch {
            input: Vec::new(),
            printed_bytes: MOST_PRINTED_BYTES,
            kept_bytes: KEPT_BYTES,
            check: &check,
        };
        let outcome = process::run(&mut command, watch);
        // What left the process group goes with the trial too.
        census::end_all(room.path());
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

/// Returns how many bytes an answer to `problem`, or a file beside it, may have: what a reader holds of it
/// is then in proportion to the problem.
pub fn answer_bytes(problem: &Problem) -> u64 {
    let square = |order: usize| (order as u64).saturating_mul(order as u64);
    let dense = problem.blocks().iter().map(|block| square(block.order));
    let others = [problem.orthant() as u64, problem.constraints().len() as u64];
    let numbers = dense.chain(others).fold(0u64, u64::saturating_add);
    LEAST_ANSWER_BYTES.saturating_add(numbers.saturating_mul(BYTES_A_NUMBER)).min(MOST_ANSWER_BYTES)
}

/// Reads `answer.json` and adds the reported effort to the meter.
fn read_answer(problem: &Problem, trial: &mut Trial, room: &Path) -> Result<Answer, Halt> {
    let path = room.join(task::ANSWER);
    let most = answer_bytes(problem);
    match std::fs::metadata(&path) {
        Err(_) => {
            return Err(Halt::Malformed(format!("the program wrote no {}", task::ANSWER)));
        }
        Ok(file) if !file.is_file() => {
            return Err(Halt::Malformed(format!("{} is no file", task::ANSWER)));
        }
        Ok(file) if file.len() > most => {
            return Err(Halt::Malformed(format!(
                "{} has {} bytes, more than the {most} that an answer to this problem may have",
                task::ANSWER,
                file.len()
            )));
        }
        Ok(_) => {}
    }
    let read = solution::read_within(&path, problem, most).map_err(|error| {
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
