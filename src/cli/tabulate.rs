//! `rankassay tabulate`.

use std::path::{Path, PathBuf};

use clap::Args;

use super::output::{say_and_end, tell};
use super::report::Failure;
use super::{Ended, Loudness};
use crate::runner::{journal, merge, write_files};
use crate::tables::{self, Input};

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
    let mut runs = Vec::new();
    for folder in &command.runs {
        let contents = journal::read(folder).map_err(Failure::input)?;
        if let Some(notice) = contents.torn_notice(folder)
            && loudness != Loudness::Quiet
        {
            tell(&format!("note: {notice}"));
        }
        runs.push((folder.display().to_string(), contents));
    }
    let merged = merge(&runs).map_err(Failure::input)?;
    if merged.records.is_empty() {
        return Err(Failure::input("nothing is recorded in the given runs"));
    }
    let input = Input {
        records: &merged.records,
        instances: &merged.instances,
        methods: &merged.methods,
        wall_limit_s: merged.wall_limit_s,
        tolerance: merged.tolerance,
    };
    write_tables(&input, into)?;
    if loudness == Loudness::Quiet {
        return say_and_end("");
    }
    say_and_end(&format!(
        "{}\nTables: {}\n",
        tables::summary(&input),
        into.join("tables").display()
    ))
}

/// Writes every table into the folder `tables` of `folder`: Markdown, CSV, and CSV without times.
pub(super) fn write_tables(input: &Input<'_>, folder: &Path) -> Result<(), Failure> {
    let mut files = Vec::new();
    for table in tables::all(input) {
        files.push((format!("{}.csv", table.name), table.to_csv()));
        files.push((format!("{}-stable.csv", table.name), table.stable().to_csv()));
        files.push((format!("{}.md", table.name), table.to_markdown()));
    }
    write_files(&folder.join("tables"), &files).map_err(Failure::input)
}
