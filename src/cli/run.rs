//! `rankassay run`.

use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::Args;

use super::output::{say, tell};
use super::progress::{Bar, Progress};
use super::report::Failure;
use super::{Ended, INTERRUPTED, Loudness, isolation, listen, results};
use crate::runner::scatter::shell_word;
use crate::runner::{
    self, Ending, Outcome, Pattern, Placement, Plan, Retiming, Roster, RunOptions, Selection,
    Shard, Target, latest_folder,
};
use crate::tables;

/// Exit code of a run some of whose trials could not be judged.
const UNJUDGED: u8 = 3;

/// Folder that holds the run folders when none is given.
const RUNS: &str = "runs";

#[derive(Debug, Args)]
pub(super) struct Run {
    /// Plan file (TOML)
    plan: PathBuf,
    /// Run folder; left out, a fresh folder runs/NAME-1, runs/NAME-2, ... is made
    #[arg(long, value_name = "DIR")]
    into: Option<PathBuf>,
    /// Number of trials at a time [default: one for each core]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u16).range(1..=1024))]
    jobs: Option<u16>,
    /// Runs only the trials whose `INSTANCE METHOD` contains the text, or matches it when it has * or ?
    #[arg(long, value_name = "PATTERN")]
    only: Option<String>,
    /// Goes on with a run that was interrupted; without --into, with the latest of this plan
    #[arg(long)]
    resume: bool,
    /// Runs the methods in this process, not each trial in one of its own
    #[arg(long)]
    in_process: bool,
    /// Ties each of the trials at a time to a core of its own (Linux)
    #[arg(long)]
    pin: bool,
    /// Times solved trials once more when all have ended, one at a time
    #[arg(long)]
    quiet_timing: bool,
    /// Runs part I of N parts of the plan; all trials of an instance are in one part
    #[arg(long, value_name = "I/N")]
    shard: Option<String>,
}

pub(super) fn execute(command: &Run, loudness: Loudness, bar: Bar) -> Ended {
    let file_name = command.plan.display().to_string();
    let text = read_plan(&command.plan)?;
    let folder = command.plan.parent().unwrap_or(Path::new(""));
    let plan = Plan::parse(&text, &file_name, folder, Roster::built_in())
        .map_err(|error| Failure::from(&error))?;
    let shard = command.shard.as_ref().map(|text| text.parse::<Shard>()).transpose();
    let shard = shard.map_err(|reason| Failure::input(format!("--shard: {reason}")))?;
    let interrupt = Arc::new(AtomicBool::new(false));
    listen(&interrupt)?;
    let options = RunOptions {
        target: target(command)?,
        jobs: command.jobs.map(usize::from),
        selection: Selection {
            only: command.only.as_deref().map(Pattern::new),
            shard,
            methods: None,
        },
        isolation: isolation(command.in_process),
        placement: if command.pin { Placement::Pinned } else { Placement::Free },
        retiming: if command.quiet_timing { Retiming::Solved } else { Retiming::None },
        interrupt,
    };
    let progress = Progress::new(loudness, bar);
    let outcome = runner::run(&plan, &options, &progress);
    progress.end();
    let outcome = outcome?;
    if outcome.ending == Ending::Interrupted {
        tell(&interrupted(command, &outcome));
        return Ok(ExitCode::from(INTERRUPTED));
    }
    finish(&outcome, loudness)
}

pub(super) fn read_plan(path: &Path) -> Result<String, Failure> {
    let bytes = std::fs::read(path)
        .map_err(|error| Failure::input(format!("{}: {error}", path.display())))?;
    String::from_utf8(bytes).map_err(|error| {
        let valid = error.utf8_error().valid_up_to();
        let line = error.as_bytes()[..valid].iter().filter(|byte| **byte == b'\n').count() + 1;
        Failure::input(format!("{}:{line}: the file is not text in UTF-8", path.display()))
    })
}

fn target(command: &Run) -> Result<Target, Failure> {
    let stem = command.plan.file_stem().unwrap_or_default().to_string_lossy().into_owned();
    match (&command.into, command.resume) {
        (Some(folder), false) => Ok(Target::New(folder.clone())),
        (Some(folder), true) => Ok(Target::Resume(folder.clone())),
        (None, false) => Ok(Target::Numbered { parent: PathBuf::from(RUNS), stem }),
        (None, true) => {
            latest_folder(Path::new(RUNS), &stem).map(Target::Resume).ok_or_else(|| {
                Failure::input(format!(
                    "there is no {RUNS}/{stem}-* to resume; name the run folder by --into"
                ))
            })
        }
    }
}

/// Says how far the run came and how to go on.
fn interrupted(command: &Run, outcome: &Outcome) -> String {
    let mut words =
        vec![std::env::args().next().unwrap_or_else(|| "rankassay".to_owned()), "run".to_owned()];
    words.push(command.plan.display().to_string());
    words.extend([
        "--into".to_owned(),
        outcome.folder.display().to_string(),
        "--resume".to_owned(),
    ]);
    let mut option = |name: &str, value: Option<String>| {
        if let Some(value) = value {
            words.extend([name.to_owned(), value]);
        }
    };
    option("--jobs", command.jobs.map(|jobs| jobs.to_string()));
    option("--only", command.only.clone());
    option("--shard", command.shard.clone());
    let flags = [
        ("--in-process", command.in_process),
        ("--pin", command.pin),
        ("--quiet-timing", command.quiet_timing),
    ];
    words.extend(flags.iter().filter(|(_, given)| *given).map(|(name, _)| (*name).to_owned()));
    let line: Vec<String> = words.iter().map(|word| shell_word(word)).collect();
    format!(
        "interrupted: {} of {} trials are recorded in {}; go on with\n  {}",
        outcome.records.len(),
        outcome.header.trials,
        outcome.folder.display(),
        line.join(" ")
    )
}

/// Writes tables, figures and report, prints the summary and chooses the exit code.
fn finish(outcome: &Outcome, loudness: Loudness) -> Ended {
    let loaded = results::load(std::slice::from_ref(&outcome.folder), Loudness::Quiet)?;
    results::write(&loaded, &outcome.folder)?;
    let unjudged = outcome.records.iter().filter(|record| record.verdict.is_unjudged()).count();
    if loudness != Loudness::Quiet {
        let written = results::written(&outcome.folder);
        say(&format!("{}\n{written}", tables::summary(&loaded.input())))?;
    }
    if unjudged > 0 {
        let table = outcome.folder.join("tables").join("failures.md");
        tell(&format!(
            "{unjudged} trials crashed or gave a malformed answer; see {}",
            table.display()
        ));
        return Ok(ExitCode::from(UNJUDGED));
    }
    Ok(ExitCode::SUCCESS)
}
