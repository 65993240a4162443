//! The command line: one file a subcommand. Only here is anything printed, and only here does the
//! process end.
//!
//! Exit codes: 0 done and holds; 1 gate or replay found a difference, a duel is not won, or a defect of this
//! program was found (a contradiction with a certificate); 2 bad
//! usage or bad input; 3 the run ended but some trials crashed or gave malformed answers; 130
//! interrupted.

mod adapter;
mod duel;
mod gate;
mod inspect;
mod manual;
mod measured;
mod output;
mod plant;
mod progress;
mod referee;
mod replay;
mod report;
mod results;
mod roster;
mod run;
mod scatter;
mod tabulate;

use std::io::Read;
use std::process::ExitCode;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};

use clap::{Parser, Subcommand};

use output::tell;
use report::Failure;

use crate::runner::{self, Isolation, Roster};

/// Plants semidefinite programs whose low-rank optimum is proved, runs heuristics on them under equal
/// budgets, referees every answer, and tabulates how accurate, how low in rank and how fast they are.
#[derive(Debug, Parser)]
#[command(name = "rankassay", version, disable_help_subcommand = true)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
    /// Prints errors only.
    #[arg(long, short, global = true, conflicts_with = "verbose")]
    quiet: bool,
    /// Prints a line for each trial.
    #[arg(long, short, global = true)]
    verbose: bool,
    /// Shows no progress bar.
    #[arg(long, global = true)]
    no_progress: bool,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Runs every trial of a plan, then writes its tables, figures and report
    Run(run::Run),
    /// Merges run folders and writes their tables, figures and report
    Tabulate(tabulate::Tabulate),
    /// Compares a challenger with an incumbent on the same instances: adopt, keep or undecided
    Duel(duel::Duel),
    /// Holds a run against a stored baseline
    Gate(gate::Gate),
    /// Runs recorded trials again from their seeds and compares
    Replay(replay::Replay),
    /// Writes one instance of a family, with its certificate
    Plant(plant::Plant),
    /// Shows sizes, sparsity, rank bound, certificate and digest of an instance file
    Inspect(inspect::Inspect),
    /// Judges a point from a file
    Referee(referee::Referee),
    /// Writes outside methods to start from, and rehearses one
    Adapter(adapter::Adapter),
    /// Writes and submits a job array for a cluster, whose tasks are parts of a plan, and a merge job
    Scatter(scatter::ScatterCommand),
    /// Runs one trial for another process of this program
    #[command(name = runner::worker::COMMAND, hide = true)]
    TrialWorker,
    /// Writes the completion script of a shell to standard output
    Completions(manual::Completions),
    /// Writes the manual page (roff) to standard output
    Manual,
    /// Lists families and methods; with a name, shows the whole card
    Roster(roster::RosterCommand),
}

/// How much is printed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Loudness {
    /// Errors only.
    Quiet,
    /// Results and notices.
    Normal,
    /// A line a trial as well.
    Verbose,
}

/// Runs the command line of this process and returns its exit code.
pub fn main() -> ExitCode {
    let arguments = Arguments::parse();
    let loudness = match (arguments.quiet, arguments.verbose) {
        (true, _) => Loudness::Quiet,
        (_, true) => Loudness::Verbose,
        _ => Loudness::Normal,
    };
    let bar = if arguments.no_progress { progress::Bar::Never } else { progress::Bar::OnTerminals };
    let ended = match arguments.command {
        Command::Run(command) => run::execute(&command, loudness, bar),
        Command::Tabulate(command) => tabulate::execute(&command, loudness),
        Command::Duel(command) => duel::execute(&command, loudness, bar),
        Command::Gate(command) => gate::execute(&command, loudness),
        Command::Replay(command) => replay::execute(&command, loudness),
        Command::Plant(command) => plant::execute(&command, loudness),
        Command::Inspect(command) => inspect::execute(&command),
        Command::Referee(command) => referee::execute(&command),
        Command::Adapter(command) => adapter::execute(&command),
        Command::Scatter(command) => scatter::execute(&command, loudness),
        Command::TrialWorker => work(),
        Command::Completions(command) => manual::completions(&command),
        Command::Manual => manual::manual(),
        Command::Roster(command) => roster::execute(&command),
    };
    match ended {
        Ok(code) => code,
        Err(failure) => failure.tell(),
    }
}

/// Exit code of an interrupted command.
const INTERRUPTED: u8 = 130;

type Ended = Result<ExitCode, Failure>;

/// Chooses where methods run: each trial in a process of its own, started from the file of this program,
/// unless the user or the system says otherwise.
fn isolation(in_process: bool) -> Isolation {
    if in_process || cfg!(not(unix)) {
        return Isolation::None;
    }
    match std::env::current_exe() {
        Ok(program) => Isolation::Processes(program),
        Err(error) => {
            tell(&format!("note: trials run in this process, whose file is not known: {error}"));
            Isolation::None
        }
    }
}

/// Sets the flag on Ctrl-C or a request to end; a second one ends the process at once, which the
/// journal survives.
fn listen(interrupt: &Arc<AtomicBool>) -> Result<(), Failure> {
    let flag = Arc::clone(interrupt);
    let handler = move || {
        if flag.swap(true, Ordering::Relaxed) {
            std::process::exit(i32::from(INTERRUPTED));
        }
        tell("interrupted: waiting for the running trials to notice (again to end at once)");
    };
    ctrlc::set_handler(handler)
        .map_err(|error| Failure::input(format!("signals cannot be handled: {error}")))
}

/// Runs the trial that standard input names.
fn work() -> Ended {
    let mut task = String::new();
    std::io::stdin().read_to_string(&mut task).map_err(Failure::input)?;
    runner::worker::serve(&task, &mut std::io::stdout(), Roster::built_in())
        .map_err(Failure::defect)?;
    Ok(ExitCode::SUCCESS)
}
