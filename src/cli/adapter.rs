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

pub(super) fn execute(command: &Adapter) -> Ended {
    match &command.what {
        What::Python(place) => starter(
            &place.to,
            ("method.py", include_str!("starters/method.py")),
            r#"["python3", "method.py"]"#,
        ),
        What::Posix(place) => starter(
            &place.to,
            ("method.sh", include_str!("starters/method.sh")),
            r#"["sh", "method.sh"]"#,
        ),
        What::Schema => say_and_end(&format!("{:#}\n", task::schema())),
        What::Rehearse(rehearse) => self::rehearse(rehearse),
    }
}

fn starter(folder: &Path, (name, text): (&str, &str), command: &str) -> Ended {
    for file in [name, "plan.toml"] {
        if folder.join(file).exists() {
            return Err(Failure::input(format!(
                "{} exists; nothing is written over",
                folder.join(file).display()
            )));
        }
    }
    let plan = include_str!("starters/plan.toml").replace("@COMMAND@", command);
    let files = [(name.to_owned(), text.to_owned()), ("plan.toml".to_owned(), plan)];
    write_files(folder, &files).map_err(Failure::input)?;
    let words = command.trim_matches(['[', ']']).replace(['"', ','], "");
    let place = folder.display();
    say_and_end(&format!(
        "{place}/{name} and {place}/plan.toml are written. Next:\n  \
         cd {place}\n  rankassay adapter rehearse -- {words}\n  rankassay run plan.toml\n"
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
