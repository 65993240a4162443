//! `rankassay gate`.

use std::path::PathBuf;
use std::process::ExitCode;

use clap::Args;

use super::output::{say, tell};
use super::report::Failure;
use super::results::{self, Loaded};
use super::{Ended, Loudness};
use crate::runner::{journal, write_files};
use crate::verdicts::gate::{
    Bands, Baseline, Passage, RunView, Strictness, Terms, TimeBasis, gate,
};

/// Exit code of a gate that is closed.
const CLOSED: u8 = 1;

#[derive(Debug, Args)]
pub(super) struct Gate {
    /// Run folder
    run: PathBuf,
    /// Folder of the baseline
    #[arg(long, value_name = "DIR")]
    baseline: PathBuf,
    /// Stores the run as the new baseline instead of judging it
    #[arg(long, conflicts_with_all = ["with_time", "strict", "json", "markdown", "junit"])]
    accept: bool,
    /// Judges processor time too, divided by the ratio of the two machines' calibrations
    #[arg(long)]
    with_time: bool,
    /// Fails on undecided figures as well
    #[arg(long)]
    strict: bool,
    /// Band of the solved share, in percentage points
    #[arg(long, value_name = "POINTS", default_value_t = Bands::default().solved_points)]
    band_solved: f64,
    /// Band of the correct digits
    #[arg(long, value_name = "DIGITS", default_value_t = Bands::default().digits)]
    band_digits: f64,
    /// Band of the share of answers at or below the target rank, in percentage points
    #[arg(long, value_name = "POINTS", default_value_t = Bands::default().rank_points)]
    band_rank: f64,
    /// Band of effort, in percent
    #[arg(long, value_name = "PERCENT", default_value_t = Bands::default().effort_percent)]
    band_effort: f64,
    /// Band of processor time, in percent
    #[arg(long, value_name = "PERCENT", default_value_t = Bands::default().time_percent)]
    band_time: f64,
    /// Writes a summary for a pull request to this file (Markdown)
    #[arg(long, value_name = "FILE")]
    markdown: Option<PathBuf>,
    /// Writes a test report for a CI system to this file (JUnit XML)
    #[arg(long, value_name = "FILE")]
    junit: Option<PathBuf>,
    /// Writes JSON
    #[arg(long)]
    json: bool,
}

pub(super) fn execute(command: &Gate, loudness: Loudness) -> Ended {
    let loaded = results::load(std::slice::from_ref(&command.run), loudness)?;
    let header = journal::read(&command.run).map_err(Failure::input)?.header;
    let view = view(&loaded, &header.title, &header.plan_digest);
    if command.accept {
        return accept(command, &view, header.trials, loudness);
    }
    let baseline = Baseline::read(&command.baseline).map_err(Failure::input)?;
    let terms = Terms {
        bands: Bands {
            solved_points: command.band_solved,
            digits: command.band_digits,
            rank_points: command.band_rank,
            effort_percent: command.band_effort,
            time_percent: command.band_time,
        },
        time: if command.with_time { TimeBasis::Calibrated } else { TimeBasis::Ignore },
        strictness: if command.strict { Strictness::Undecided } else { Strictness::Regressed },
    };
    let judged = gate(&view, &baseline, &terms).map_err(Failure::input)?;
    for (path, text) in
        [(&command.markdown, judged.to_markdown()), (&command.junit, judged.to_junit())]
    {
        if let Some(path) = path {
            let folder = path.parent().filter(|folder| !folder.as_os_str().is_empty());
            let name = path.file_name().unwrap_or_default().to_string_lossy().into_owned();
            write_files(folder.unwrap_or(".".as_ref()), &[(name, text)]).map_err(Failure::input)?;
        }
    }
    if command.json {
        say(&judged.to_json())?;
    } else if loudness != Loudness::Quiet {
        say(&judged.to_text())?;
    }
    match judged.passage {
        Passage::Passes => Ok(ExitCode::SUCCESS),
        Passage::Fails => Ok(ExitCode::from(CLOSED)),
    }
}

/// Lends a run to the gate.
fn view<'a>(loaded: &'a Loaded, title: &'a str, plan_digest: &'a str) -> RunView<'a> {
    let stretches =
        loaded.manifests[0].as_ref().map_or(&[][..], |manifest| manifest.stretches.as_slice());
    RunView {
        title,
        plan_digest,
        version: stretches.last().map_or("unknown", |stretch| stretch.version.as_str()),
        tolerance: loaded.merged.tolerance,
        wall_limit_s: loaded.merged.wall_limit_s,
        methods: &loaded.merged.methods,
        records: &loaded.merged.records,
        instances: &loaded.merged.instances,
        calibration_s: stretches.iter().rev().find_map(|stretch| stretch.calibration_s),
    }
}

fn accept(command: &Gate, view: &RunView<'_>, planned: u64, loudness: Loudness) -> Ended {
    if (view.records.len() as u64) < planned {
        return Err(Failure::input(format!(
            "{}: {} of {planned} trials are recorded; finish the run before it becomes a baseline",
            command.run.display(),
            view.records.len()
        )));
    }
    Baseline::write(&command.baseline, view).map_err(Failure::input)?;
    if loudness != Loudness::Quiet {
        tell(&format!(
            "{} trials are the baseline now: {}",
            view.records.len(),
            command.baseline.display()
        ));
    }
    Ok(ExitCode::SUCCESS)
}
