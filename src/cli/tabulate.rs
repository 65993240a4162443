//! `rankassay tabulate`.

use std::path::PathBuf;
use std::process::ExitCode;

use clap::Args;

use super::output::{say, tell};
use super::report::Failure;
use super::results::Completeness;
use super::{Ended, Loudness, results};
use crate::tables;

#[derive(Debug, Args)]
pub(super) struct Tabulate {
    /// Run folders
    #[arg(required = true, value_name = "RUN")]
    runs: Vec<PathBuf>,
    /// Folder to write to; left out with one run, that run's folder
    #[arg(long, value_name = "DIR")]
    into: Option<PathBuf>,
    /// Ends with exit code 1 unless every trial of the plans is recorded and copies of one agree
    #[arg(long, value_enum, value_name = "WHAT")]
    require: Option<Required>,
}

/// What may be required of the runs.
#[derive(Clone, Copy, Debug, clap::ValueEnum)]
enum Required {
    Complete,
}

/// Exit code when the runs are not what is required.
const INCOMPLETE: u8 = 1;

pub(super) fn execute(command: &Tabulate, loudness: Loudness) -> Ended {
    let into = match (&command.into, command.runs.as_slice()) {
        (Some(folder), _) => folder,
        (None, [only]) => only,
        (None, _) => {
            return Err(Failure::input("several runs need a folder for their tables: --into DIR"));
        }
    };
    let loaded = results::load(&command.runs, loudness)?;
    results::write(&loaded, into)?;
    let completeness = results::tell_missing(&loaded);
    if loudness != Loudness::Quiet {
        let written = results::written(into);
        say(&format!("{}\n{written}", tables::summary(&loaded.input())))?;
    }
    if command.require.is_some() && completeness == Completeness::Wanting {
        tell("trials are missing or disagree, which is not what is required");
        return Ok(ExitCode::from(INCOMPLETE));
    }
    Ok(ExitCode::SUCCESS)
}
