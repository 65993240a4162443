//! `rankassay replay`.

use std::path::PathBuf;
use std::process::ExitCode;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};

use clap::Args;
use serde_json::{Value, json};

use super::output::{say, tell};
use super::report::Failure;
use super::{Ended, INTERRUPTED, Loudness, isolation, listen};
use crate::runner::{Agreement, Recorded, Replay as Replayed, ReplayError, Roster};

/// Exit code of a replay that found a difference.
const DIFFERENT: u8 = 1;

#[derive(Debug, Args)]
pub(super) struct Replay {
    /// Run folder
    run: PathBuf,
    /// Ids of recorded trials, such as those in trials.csv
    #[arg(value_name = "TRIAL", required_unless_present = "every")]
    trials: Vec<String>,
    /// Replays every N-th trial of the run, the first one included
    #[arg(long, value_name = "N", conflicts_with = "trials",
          value_parser = clap::value_parser!(u32).range(1..))]
    every: Option<u32>,
    /// Folder that paths of imported files start from [default: that of the plan, as the run was given it]
    #[arg(long, value_name = "DIR")]
    plan_folder: Option<PathBuf>,
    /// Writes JSON
    #[arg(long)]
    json: bool,
}

pub(super) fn execute(command: &Replay, loudness: Loudness) -> Ended {
    let run = Recorded::open(&command.run, command.plan_folder.as_deref(), Roster::built_in())?;
    let trials: Vec<&str> = match command.every {
        Some(step) => run.trials().into_iter().step_by(step as usize).collect(),
        None => command.trials.iter().map(String::as_str).collect(),
    };
    let interrupt = Arc::new(AtomicBool::new(false));
    listen(&interrupt)?;
    let chatty = loudness != Loudness::Quiet && !command.json;
    if chatty {
        say(&surroundings(&run))?;
    }
    let isolation = isolation(false);
    let mut replays = Vec::new();
    for trial in trials {
        let replay = match run.replay(trial, &isolation, &interrupt) {
            Err(ReplayError::Interrupted) => {
                tell("interrupted");
                return Ok(ExitCode::from(INTERRUPTED));
            }
            _ if interrupt.load(Ordering::Relaxed) => return Ok(ExitCode::from(INTERRUPTED)),
            other => other?,
        };
        if chatty {
            say(&text(&replay))?;
        }
        replays.push(replay);
    }
    let count = |kind| replays.iter().filter(|replay| replay.agreement == kind).count();
    let different = count(Agreement::Different);
    if command.json {
        let value = json!({
            "surroundings": run.surroundings(),
            "replays": replays.iter().map(object).collect::<Vec<_>>(),
        });
        let text = serde_json::to_string_pretty(&value).expect("replays are plain data");
        say(&format!("{text}\n"))?;
    } else if chatty && replays.len() > 1 {
        say(&format!(
            "{} replayed: {} identical, {} same verdict, {different} different\n",
            replays.len(),
            count(Agreement::Identical),
            count(Agreement::SameVerdict),
        ))?;
    }
    Ok(if different > 0 { ExitCode::from(DIFFERENT) } else { ExitCode::SUCCESS })
}

fn word(agreement: Agreement) -> &'static str {
    match agreement {
        Agreement::Identical => "identical",
        Agreement::SameVerdict => "same verdict",
        Agreement::Different => "different",
    }
}

fn surroundings(run: &Recorded<'_>) -> String {
    if run.surroundings().is_empty() {
        return "Same tool version, processor and processor features as the run: records must be identical.\n"
            .to_owned();
    }
    let mut out = "Not the same as in the run, so that late digits may differ:\n".to_owned();
    for [what, there, here] in run.surroundings() {
        out += &format!("  {what}: {there} there, {here} here\n");
    }
    out
}

fn text(replay: &Replayed) -> String {
    let seconds =
        |value: Option<f64>| value.map_or("-".to_owned(), |value| format!("{value:.3} s"));
    let mut out = format!(
        "{}: {} ({}; processor time {} recorded, {} now)\n",
        replay.trial,
        word(replay.agreement),
        replay.replayed.verdict.word(),
        seconds(replay.recorded.cpu_s),
        seconds(replay.replayed.cpu_s),
    );
    for difference in &replay.differences {
        let shown =
            |text: &str| if text.is_empty() { "nothing".to_owned() } else { text.to_owned() };
        let by = difference
            .relative
            .map_or(String::new(), |relative| format!(" (relative difference {relative:.1e})"));
        out += &format!(
            "  {}: {} recorded, {} now{by}\n",
            difference.column,
            shown(&difference.recorded),
            shown(&difference.replayed),
        );
    }
    out
}

fn object(replay: &Replayed) -> Value {
    let differences: Vec<Value> = replay
        .differences
        .iter()
        .map(|difference| {
            json!({
                "column": difference.column,
                "recorded": difference.recorded,
                "replayed": difference.replayed,
                "relative": difference.relative,
            })
        })
        .collect();
    json!({
        "trial": replay.trial,
        "agreement": word(replay.agreement),
        "verdict": replay.replayed.verdict.word(),
        "differences": differences,
    })
}

impl From<ReplayError> for Failure {
    fn from(error: ReplayError) -> Self {
        match error {
            ReplayError::Plan(error) => Failure::from(&error),
            ReplayError::Run(error) => Failure::from(error),
            other => Failure::input(other),
        }
    }
}
