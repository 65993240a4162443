//! `rankassay adapter`: outside methods that are ready to be edited, and a rehearsal that says what is wrong
//! with an answer.

use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;

use clap::{Args, Subcommand};

use super::output::{say, say_and_end};
use super::report::Failure;
use super::{Ended, INTERRUPTED, listen, plant};
use crate::budget::{Budget, Halt, Meter, Tracing};
use crate::card::Settings;
use crate::methods::outside::{Outside, task};
use crate::methods::{Method, Trial};
use crate::referee::{self, Finding, Tolerance};
use crate::runner::{Instance, write_files};
use crate::seed::Stream;

/// Exit code of a rehearsal whose answer could not be read or is not feasible.
const REFUSED: u8 = 1;

#[derive(Debug, Args)]
pub(super) struct Adapter {
    #[command(subcommand)]
    what: What,
}

#[derive(Debug, Subcommand)]
enum What {
    /// Writes a starter in Python (needs NumPy) and a plan for it
    Python(Place),
    /// Writes a starter in Rust (needs the standard library alone) and a plan for it
    Rust(Place),
    /// Writes an example in plain POSIX shell and a plan for it
    Posix(Place),
    /// Prints the JSON Schema of the protocol's files
    Schema,
    /// Runs a command on one small planted instance and says what is wrong with its answer
    Rehearse(Rehearse),
}

#[derive(Debug, Args)]
struct Place {
    /// Folder to write to
    #[arg(long, value_name = "DIR", default_value = "my-method")]
    to: PathBuf,
}

#[derive(Debug, Args)]
struct Rehearse {
    /// Family to plant
    #[arg(long, default_value = "tight-unique")]
    family: String,
    /// Parameters of the family
    #[arg(long = "with", value_name = "NAME=VALUE")]
    parameters: Vec<String>,
    /// Seed of the instance
    #[arg(long, default_value_t = 1)]
    seed: u64,
    /// Wall-time limit, in seconds
    #[arg(long, value_name = "SECONDS", default_value_t = 20,
          value_parser = clap::value_parser!(u64).range(1..=86_400))]
    wall: u64,
    /// The command, after `--`
    #[arg(required = true, last = true, value_name = "COMMAND")]
    command: Vec<String>,
}

/// An outside method that is ready to be edited.
struct Starter {
    /// Its files, paths and texts; the first is the one to edit.
    files: &'static [(&'static str, &'static str)],
    /// What is to be done before it can be started, if anything.
    before: Option<&'static str>,
    /// The command that starts it.
    command: &'static [&'static str],
}

const PYTHON: Starter = Starter {
    files: &[("method.py", include_str!("starters/method.py"))],
    before: None,
    command: &["python3", "method.py"],
};

const RUST: Starter = Starter {
    // Not named as Rust files here, for they are no part of this program.
    files: &[
        ("src/main.rs", include_str!("starters/main.rs.txt")),
        ("Cargo.toml", include_str!("starters/cargo.toml.txt")),
    ],
    before: Some("cargo build --release"),
    command: &["target/release/my-method"],
};

const POSIX: Starter = Starter {
    files: &[("method.sh", include_str!("starters/method.sh"))],
    before: None,
    command: &["sh", "method.sh"],
};

pub(super) fn execute(command: &Adapter) -> Ended {
    match &command.what {
        What::Python(place) => write(&place.to, &PYTHON),
        What::Rust(place) => write(&place.to, &RUST),
        What::Posix(place) => write(&place.to, &POSIX),
        What::Schema => say_and_end(&format!("{:#}\n", task::schema())),
        What::Rehearse(rehearse) => self::rehearse(rehearse),
    }
}

/// Writes a starter and its plan, and says what comes next.
fn write(folder: &Path, starter: &Starter) -> Ended {
    let command = format!("{:?}", starter.command);
    let plan = include_str!("starters/plan.toml").replace("@COMMAND@", &command);
    let files: Vec<(&str, &str)> =
        starter.files.iter().copied().chain([("plan.toml", plan.as_str())]).collect();
    if let Some((path, _)) = files.iter().find(|(path, _)| folder.join(path).exists()) {
        let place = folder.join(path);
        return Err(Failure::input(format!("{} exists; nothing is written over", place.display())));
    }
    for (path, text) in &files {
        let (inner, name) = path.rsplit_once('/').unwrap_or(("", path));
        let file = [((*name).to_owned(), (*text).to_owned())];
        write_files(&folder.join(inner), &file).map_err(Failure::input)?;
    }
    let place = folder.display();
    let written: Vec<String> = files.iter().map(|(path, _)| format!("{place}/{path}")).collect();
    let before = starter.before.map_or(String::new(), |line| format!("  {line}\n"));
    say_and_end(&format!(
        "Written: {}. Next:\n  cd {place}\n{before}  rankassay adapter rehearse -- {}\n  rankassay run plan.toml\n",
        written.join(", "),
        starter.command.join(" "),
    ))
}

/// Runs the command once and tells what became of it.
fn rehearse(command: &Rehearse) -> Ended {
    let planted = plant::planted(&command.family, &command.parameters, command.seed, 0)?;
    let instance = Instance::from_planted(planted);
    let outside = Outside { command: command.command.clone(), folder: PathBuf::new() };
    let interrupt = Arc::new(AtomicBool::new(false));
    listen(&interrupt)?;
    let budget = Budget { wall: Duration::from_secs(command.wall), memory: None };
    let mut trial = Trial {
        options: Settings::default(),
        meter: Meter::start(budget, Arc::clone(&interrupt), Tracing::Off),
        stream: Stream::named(command.seed, &["rehearsal"]),
    };
    let result = outside.solve(&instance.problem, &mut trial);
    if interrupt.load(Ordering::Relaxed) {
        return Ok(ExitCode::from(INTERRUPTED));
    }
    let seconds = trial.meter.charged().map_or(0.0, |charge| charge.wall.as_secs_f64());
    let answer = match result {
        Ok(answer) => answer,
        Err(halt) => {
            let kind = match halt {
                Halt::Malformed(_) => "malformed",
                Halt::Crashed(_) => "crashed",
                Halt::TimeLimit => "time-limit",
                Halt::MemoryLimit => "memory-limit",
                _ => "failed",
            };
            say(&format!("{kind} after {seconds:.2} s: {halt}\n"))?;
            return Ok(ExitCode::from(REFUSED));
        }
    };
    let tolerance = Tolerance::default();
    let judged =
        referee::judge(&instance.problem, &answer, &instance.knowledge.known(), &tolerance)
            .map_err(Failure::defect)?;
    let number = |value: Option<f64>| value.map_or("-".to_owned(), |value| format!("{value:.3e}"));
    let word = match judged.finding {
        Finding::Solved => "solved",
        Finding::Near => "near",
        Finding::Suboptimal => "suboptimal",
        Finding::Feasible => "feasible",
        Finding::Infeasible => "infeasible",
        Finding::Malformed => "malformed",
    };
    let because =
        if judged.reason.is_empty() { String::new() } else { format!(" ({})", judged.reason) };
    say(&format!(
        "{word}{because} after {seconds:.2} s\n  feasibility {} (at most {:e} is wanted)\n  objective error {} (at \
         most {:e} is wanted)\n  objective {} (the optimum is {})\n",
        number(judged.feasibility),
        tolerance.feasibility,
        number(judged.objective_error),
        tolerance.objective,
        number(judged.objective),
        number(instance.record.optimum),
    ))?;
    let refused = matches!(judged.finding, Finding::Malformed | Finding::Infeasible);
    Ok(if refused { ExitCode::from(REFUSED) } else { ExitCode::SUCCESS })
}
