//! The command line: one file a subcommand. Only here is anything printed, and only here does the
//! process end.
//!
//! Exit codes: 0 done; 1 a defect of this program was found (a contradiction with a certificate); 2 bad
//! usage or bad input; 3 the run ended but some trials crashed or gave malformed answers; 130
//! interrupted.

mod inspect;
mod output;
mod plant;
mod progress;
mod referee;
mod report;
mod roster;
mod run;
mod tabulate;

use std::process::ExitCode;

use clap::{Parser, Subcommand};

use report::Failure;

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
    /// Runs every trial of a plan, then writes and prints its tables
    Run(run::Run),
    /// Merges run folders and writes their tables
    Tabulate(tabulate::Tabulate),
    /// Writes one instance of a family, with its certificate
    Plant(plant::Plant),
    /// Shows sizes, sparsity, rank bound, certificate and digest of an instance file
    Inspect(inspect::Inspect),
    /// Judges a point from a file
    Referee(referee::Referee),
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
        Command::Plant(command) => plant::execute(&command, loudness),
        Command::Inspect(command) => inspect::execute(&command),
        Command::Referee(command) => referee::execute(&command),
        Command::Roster(command) => roster::execute(&command),
    };
    match ended {
        Ok(code) => code,
        Err(failure) => failure.tell(),
    }
}

type Ended = Result<ExitCode, Failure>;
