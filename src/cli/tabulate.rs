//! `rankassay tabulate`.

use std::path::PathBuf;

use clap::Args;

use super::output::say_and_end;
use super::report::Failure;
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
}

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
    if loudness == Loudness::Quiet {
        return say_and_end("");
    }
    let written = results::written(into);
    say_and_end(&format!("{}\n{written}", tables::summary(&loaded.input())))
}
