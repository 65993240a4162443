//! The run folder: choosing it, opening it, writing whole files into it.

use std::path::{Path, PathBuf};

use serde::Serialize;

use super::Observer;
use super::journal::{self, Contents, Journal, JournalError};
use crate::record::{RunHeader, Trace, TraceRow};

/// Which folder a run writes to.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Target {
    /// A folder that does not exist yet or is empty.
    New(PathBuf),
    /// A fresh folder `STEM-1`, `STEM-2`, ... inside `parent`.
    Numbered {
        /// Folder that holds the run folders.
        parent: PathBuf,
        /// Stem of the name.
        stem: String,
    },
    /// A folder with a run that is to go on.
    Resume(PathBuf),
}

/// Says why a folder cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum FolderError {
    /// The folder has something in it.
    #[error("{0} is not empty; go on with it by `--resume --into {0}`, or give another folder")]
    NotEmpty(String),
    /// There is no run to go on with.
    #[error("{0} holds no run to resume; leave `--resume` out to start one")]
    NoRun(String),
    /// The system refuses.
    #[error("{path}: {reason}")]
    System {
        /// The file or folder.
        path: String,
        /// What the system says.
        reason: String,
    },
}

fn refused(path: &Path) -> impl Fn(std::io::Error) -> FolderError + '_ {
    |error| FolderError::System { path: path.display().to_string(), reason: error.to_string() }
}

/// Returns the numbered folder of `stem` in `parent` with the highest number, if there is one.
pub fn latest_folder(parent: &Path, stem: &str) -> Option<PathBuf> {
    let entries = std::fs::read_dir(parent).ok()?;
    let number = |name: &str| name.strip_prefix(stem)?.strip_prefix('-')?.parse::<u64>().ok();
    let best = entries.filter_map(|entry| number(entry.ok()?.file_name().to_str()?)).max()?;
    Some(parent.join(format!("{stem}-{best}")))
}

fn make_numbered(parent: &Path, stem: &str) -> Result<PathBuf, FolderError> {
    std::fs::create_dir_all(parent).map_err(refused(parent))?;
    let mut number = 1;
    loop {
        let folder = parent.join(format!("{stem}-{number}"));
        // Making the folder is the test: of two runs that start together one goes on to the next number.
        match std::fs::create_dir(&folder) {
            Ok(()) => return Ok(folder),
            Err(error) if error.kind() == std::io::ErrorKind::AlreadyExists => number += 1,
            Err(error) => return Err(refused(&folder)(error)),
        }
    }
}

fn make_new(folder: &Path) -> Result<(), FolderError> {
    match std::fs::read_dir(folder) {
        Ok(mut entries) => match entries.next() {
            Some(_) => Err(FolderError::NotEmpty(folder.display().to_string())),
            None => Ok(()),
        },
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => {
            std::fs::create_dir_all(folder).map_err(refused(folder))
        }
        Err(error) => Err(refused(folder)(error)),
    }
}

/// Opens the run folder and its journal, and returns what is recorded in it already.
pub(super) fn open(
    target: &Target,
    header: &RunHeader,
    observer: &dyn Observer,
) -> Result<(PathBuf, Journal, Contents), super::RunError> {
    let fresh = |folder: PathBuf| {
        let journal = Journal::create(&folder, header)?;
        Ok((folder, journal, Contents::empty(header)))
    };
    match target {
        // A run that was killed before its first line was out has nothing to lose.
        Target::Resume(folder) if journal::is_blank(folder) => {
            std::fs::remove_file(folder.join(journal::FILE)).map_err(refused(folder))?;
            fresh(folder.clone())
        }
        Target::Numbered { parent, stem } => fresh(make_numbered(parent, stem)?),
        Target::New(folder) => {
            make_new(folder)?;
            fresh(folder.clone())
        }
        Target::Resume(folder) => match Journal::reopen(folder) {
            Ok((journal, contents)) => {
                contents.check_same_run(folder, header)?;
                if let Some(notice) = contents.torn_notice(folder) {
                    observer.notice(&notice);
                }
                journal.cut_to(&contents)?;
                Ok((folder.clone(), journal, contents))
            }
            Err(JournalError::Missing { .. }) => {
                Err(FolderError::NoRun(folder.display().to_string()).into())
            }
            Err(error) => Err(error.into()),
        },
    }
}

/// Writes a file as a whole: beside it first, then under its name, so that it is never half-written.
pub(super) fn write_whole(path: &Path, text: &str) -> Result<(), FolderError> {
    let mut name = path.file_name().unwrap_or_default().to_owned();
    name.push(".part");
    let beside = path.with_file_name(name);
    std::fs::write(&beside, text).map_err(refused(&beside))?;
    std::fs::rename(&beside, path).map_err(refused(path))
}

/// Writes rows as a CSV file with a heading.
pub(super) fn write_rows<T: Serialize>(
    folder: &Path,
    file: &str,
    rows: &[T],
) -> Result<(), FolderError> {
    let path = folder.join(file);
    let mut writer = csv::Writer::from_writer(Vec::new());
    for row in rows {
        writer.serialize(row).expect("records are flat");
    }
    let bytes = writer.into_inner().expect("memory takes the rows");
    write_whole(&path, &String::from_utf8(bytes).expect("records are text"))
}

/// Folder of the traces in a run folder.
const TRACES: &str = "traces";

/// Writes the trace of one trial.
pub(super) fn write_trace(
    folder: &Path,
    trial: &str,
    rows: &[TraceRow],
) -> Result<(), FolderError> {
    let traces = folder.join(TRACES);
    std::fs::create_dir_all(&traces).map_err(refused(&traces))?;
    write_rows(&traces, &format!("{trial}.csv"), rows)
}

/// Reads the traces of a run folder, in the order of their trials' ids; none when there are none.
///
/// # Errors
/// A file is unreadable or not a trace.
pub fn read_traces(folder: &Path) -> Result<Vec<Trace>, FolderError> {
    let traces = folder.join(TRACES);
    let entries = match std::fs::read_dir(&traces) {
        Ok(entries) => entries,
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => return Ok(Vec::new()),
        Err(error) => return Err(refused(&traces)(error)),
    };
    let mut read = Vec::new();
    for entry in entries {
        let path = entry.map_err(refused(&traces))?.path();
        let name = path.file_name().unwrap_or_default().to_string_lossy().into_owned();
        let Some(trial) = name.strip_suffix(".csv") else { continue };
        let wrong = |error: csv::Error| FolderError::System {
            path: path.display().to_string(),
            reason: format!("not a trace: {error}"),
        };
        let mut reader = csv::Reader::from_path(&path).map_err(wrong)?;
        let rows = reader.deserialize().collect::<Result<Vec<TraceRow>, _>>().map_err(wrong)?;
        read.push(Trace { trial: trial.to_owned(), rows });
    }
    read.sort_by(|a, b| a.trial.cmp(&b.trial));
    Ok(read)
}

/// Writes files, name and text, into `folder`, which is made when it does not exist.
///
/// # Errors
/// The system refuses.
pub fn write_files(folder: &Path, files: &[(String, String)]) -> Result<(), FolderError> {
    std::fs::create_dir_all(folder).map_err(refused(folder))?;
    for (name, text) in files {
        write_whole(&folder.join(name), text)?;
    }
    Ok(())
}
