//! The journal of a run: one line a record, appended and handed to the system at once.
//!
//! Every line carries the first 16 hexadecimal digits of the SHA-256 of the rest of it, so that a line
//! that was altered is found out. A tail without a line break is what a killed process leaves; it is
//! cut on resuming. The first line says what run the journal is of.

use std::collections::BTreeMap;
use std::fs::{File, OpenOptions, TryLockError};
use std::io::{Read, Seek, SeekFrom, Write};
use std::path::{Path, PathBuf};
use std::sync::{Mutex, PoisonError};

use serde::{Deserialize, Serialize};

use super::hexadecimal_digest;
use crate::record::{Cost, InstanceRecord, Record, RunHeader, SCHEMA};

/// Name of the journal in a run folder.
pub const FILE: &str = "journal.jsonl";

const HEAD: &str = "{\"check\":\"";
const CHECK_DIGITS: usize = 16;

/// Says why a journal cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum JournalError {
    /// There is no journal.
    #[error("{path} does not exist: no run was started there")]
    Missing {
        /// The journal.
        path: String,
    },
    /// The system refuses.
    #[error("{path}: {reason}")]
    System {
        /// The journal.
        path: String,
        /// What the system says.
        reason: String,
    },
    /// Another process writes to it.
    #[error("{path} is in use by another run")]
    InUse {
        /// The journal.
        path: String,
    },
    /// A line is not what was written.
    #[error("{path}:{line}: {reason}; the records of this run cannot be trusted")]
    Altered {
        /// The journal.
        path: String,
        /// Line, from 1.
        line: usize,
        /// What is wrong with it.
        reason: String,
    },
    /// It is the journal of another plan or of another layout.
    #[error("{path} belongs to another run: {reason}")]
    OtherRun {
        /// The journal.
        path: String,
        /// What differs.
        reason: String,
    },
}

/// One line, without its check.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(tag = "kind", content = "value", rename_all = "kebab-case")]
enum Entry {
    Run(RunHeader),
    Instance(InstanceRecord),
    Trial(Box<Record>),
    /// Time and memory of a recorded trial that was run again alone.
    Retimed {
        trial: String,
        cost: Cost,
    },
}

impl Entry {
    fn line(&self) -> String {
        let whole = serde_json::to_string(self).expect("records are plain data");
        let payload = &whole[1..];
        format!("{HEAD}{}\",{payload}\n", check(payload))
    }

    fn read(line: &str) -> Result<Self, String> {
        let payload = line.strip_prefix(HEAD).and_then(|rest| {
            let (found, rest) = rest.split_at_checked(CHECK_DIGITS)?;
            let payload = rest.strip_prefix("\",")?;
            (found == check(payload)).then_some(payload)
        });
        let payload = payload.ok_or("the line does not agree with its checksum")?;
        serde_json::from_str(&format!("{{{payload}"))
            .map_err(|error| format!("unreadable record: {error}"))
    }
}

fn check(payload: &str) -> String {
    let mut digest = hexadecimal_digest(payload.as_bytes());
    digest.truncate(CHECK_DIGITS);
    digest
}

/// What a journal holds.
#[derive(Clone, Debug)]
pub struct Contents {
    /// What run it is of.
    pub header: RunHeader,
    /// Instances, in the order they were written.
    pub instances: Vec<InstanceRecord>,
    /// Records, in the order they were written.
    pub records: Vec<Record>,
    /// Bytes up to the last whole line.
    whole: u64,
    /// Bytes after it.
    torn: u64,
}

impl Contents {
    pub(super) fn empty(header: &RunHeader) -> Self {
        Contents {
            header: header.clone(),
            instances: Vec::new(),
            records: Vec::new(),
            whole: 0,
            torn: 0,
        }
    }

    /// Says that the tail was torn, if it was.
    pub fn torn_notice(&self, folder: &Path) -> Option<String> {
        (self.torn > 0).then(|| {
            format!(
                "{}: the last line was cut off in the middle ({} bytes); it is dropped and its trial counts as not run",
                folder.join(FILE).display(),
                self.torn
            )
        })
    }

    /// Refuses to go on when the journal is not of the run that `header` describes.
    pub(super) fn check_same_run(
        &self,
        folder: &Path,
        header: &RunHeader,
    ) -> Result<(), JournalError> {
        let reason = if self.header.schema != header.schema {
            format!(
                "its record layout is {}, this program writes {}",
                self.header.schema, header.schema
            )
        } else if self.header.plan_digest != header.plan_digest {
            let short = |digest: &str| digest.chars().take(12).collect::<String>();
            format!(
                "the plan has changed since it was started (digest {}, now {})",
                short(&self.header.plan_digest),
                short(&header.plan_digest)
            )
        } else if self.header.imports != header.imports {
            "an imported file has changed since it was started".to_owned()
        } else if self.header != *header {
            "its methods, limits or tolerances are not those of the plan".to_owned()
        } else {
            return Ok(());
        };
        Err(JournalError::OtherRun { path: folder.join(FILE).display().to_string(), reason })
    }

    fn parse(path: &Path, text: &[u8]) -> Result<Self, JournalError> {
        let whole = text.iter().rposition(|byte| *byte == b'\n').map_or(0, |at| at + 1);
        if whole == 0 {
            return Err(JournalError::Missing { path: path.display().to_string() });
        }
        let altered = |line: usize, reason: String| JournalError::Altered {
            path: path.display().to_string(),
            line,
            reason,
        };
        let mut contents: Option<Contents> = None;
        let mut seen: BTreeMap<String, usize> = BTreeMap::new();
        for (at, line) in text[..whole].split_inclusive(|byte| *byte == b'\n').enumerate() {
            let line = std::str::from_utf8(&line[..line.len() - 1])
                .map_err(|_| altered(at + 1, "the line is not text".to_owned()))?;
            let entry = Entry::read(line).map_err(|reason| altered(at + 1, reason))?;
            match (entry, &mut contents) {
                (Entry::Run(header), None) => {
                    if header.schema != SCHEMA {
                        let reason =
                            format!("its record layout is {}, not {SCHEMA}", header.schema);
                        return Err(JournalError::OtherRun {
                            path: path.display().to_string(),
                            reason,
                        });
                    }
                    contents = Some(Contents {
                        whole: whole as u64,
                        torn: (text.len() - whole) as u64,
                        ..Contents::empty(&header)
                    });
                }
                (Entry::Instance(record), Some(contents)) => contents.instances.push(record),
                (Entry::Trial(record), Some(contents)) => {
                    if seen.insert(record.trial.clone(), contents.records.len()).is_some() {
                        return Err(altered(
                            at + 1,
                            format!("trial {} is recorded twice", record.trial),
                        ));
                    }
                    contents.records.push(*record);
                }
                (Entry::Retimed { trial, cost }, Some(contents)) => match seen.get(&trial) {
                    Some(place) => contents.records[*place].set_cost(cost),
                    None => {
                        let reason = format!("trial {trial} has a time but no record");
                        return Err(altered(at + 1, reason));
                    }
                },
                _ => {
                    return Err(altered(
                        at + 1,
                        "the first line, and no other, says what run it is".to_owned(),
                    ));
                }
            }
        }
        contents.ok_or_else(|| JournalError::Missing { path: path.display().to_string() })
    }
}

/// Reads the bytes of a journal; `path` is the name that errors carry. A torn tail is left out.
///
/// # Errors
/// [`JournalError::Missing`] for bytes without a whole line; a line that is not what was written; another
/// record layout.
pub fn parse(path: &Path, bytes: &[u8]) -> Result<Contents, JournalError> {
    Contents::parse(path, bytes)
}

/// Reads the journal in `folder` without changing it; a torn tail is left out.
///
/// # Errors
/// See [`JournalError`].
pub fn read(folder: &Path) -> Result<Contents, JournalError> {
    let path = folder.join(FILE);
    let text = std::fs::read(&path).map_err(|error| failed(&path, &error))?;
    Contents::parse(&path, &text)
}

/// Returns whether the folder has a journal without a single whole line.
pub(super) fn is_blank(folder: &Path) -> bool {
    std::fs::read(folder.join(FILE)).is_ok_and(|text| !text.contains(&b'\n'))
}

fn failed(path: &Path, error: &std::io::Error) -> JournalError {
    let path = path.display().to_string();
    match error.kind() {
        std::io::ErrorKind::NotFound => JournalError::Missing { path },
        _ => JournalError::System { path, reason: error.to_string() },
    }
}

/// A journal that is being written. It is locked against other processes until it is dropped.
#[derive(Debug)]
pub(super) struct Journal {
    path: PathBuf,
    tail: Mutex<Tail>,
}

/// The end of a journal that is being written.
#[derive(Debug)]
struct Tail {
    file: File,
    /// Bytes up to the last whole line.
    whole: u64,
    /// Whether a line could not be written: nothing may follow it.
    broken: bool,
}

impl Journal {
    /// Starts a journal in a folder that has none.
    pub(super) fn create(folder: &Path, header: &RunHeader) -> Result<Self, JournalError> {
        let path = folder.join(FILE);
        let file = OpenOptions::new().append(true).create_new(true).open(&path);
        let journal = Journal::locked(path.clone(), file.map_err(|error| failed(&path, &error))?)?;
        journal.append(&Entry::Run(header.clone()))?;
        Ok(journal)
    }

    /// Opens the journal of a folder and reads what it holds, without changing it.
    pub(super) fn reopen(folder: &Path) -> Result<(Self, Contents), JournalError> {
        let path = folder.join(FILE);
        let file = OpenOptions::new().read(true).append(true).open(&path);
        let journal = Journal::locked(path.clone(), file.map_err(|error| failed(&path, &error))?)?;
        let mut text = Vec::new();
        let mut tail = journal.tail.lock().unwrap_or_else(PoisonError::into_inner);
        tail.file.read_to_end(&mut text).map_err(|error| failed(&path, &error))?;
        let contents = Contents::parse(&path, &text)?;
        tail.whole = contents.whole;
        drop(tail);
        Ok((journal, contents))
    }

    fn locked(path: PathBuf, file: File) -> Result<Self, JournalError> {
        match file.try_lock() {
            Err(TryLockError::WouldBlock) => {
                Err(JournalError::InUse { path: path.display().to_string() })
            }
            // Some network file systems know no locks; a run there is not refused for that.
            Ok(()) | Err(TryLockError::Error(_)) => {
                Ok(Journal { path, tail: Mutex::new(Tail { file, whole: 0, broken: false }) })
            }
        }
    }

    /// Cuts a torn tail off.
    pub(super) fn cut_to(&self, contents: &Contents) -> Result<(), JournalError> {
        if contents.torn == 0 {
            return Ok(());
        }
        let mut tail = self.tail.lock().unwrap_or_else(PoisonError::into_inner);
        tail.file
            .set_len(contents.whole)
            .and_then(|()| tail.file.seek(SeekFrom::End(0)))
            .map(|_| ())
            .map_err(|error| failed(&self.path, &error))
    }

    /// Appends an instance.
    pub(super) fn instance(&self, record: &InstanceRecord) -> Result<(), JournalError> {
        self.append(&Entry::Instance(record.clone()))
    }

    /// Appends a trial.
    pub(super) fn trial(&self, record: &Record) -> Result<(), JournalError> {
        self.append(&Entry::Trial(Box::new(record.clone())))
    }

    /// Appends the time and memory of a recorded trial that was run again alone.
    pub(super) fn retimed(&self, trial: &str, cost: Cost) -> Result<(), JournalError> {
        self.append(&Entry::Retimed { trial: trial.to_owned(), cost })
    }

    fn append(&self, entry: &Entry) -> Result<(), JournalError> {
        let line = entry.line();
        let mut tail = self.tail.lock().unwrap_or_else(PoisonError::into_inner);
        if tail.broken {
            let path = self.path.display().to_string();
            let reason = "an earlier line could not be written".to_owned();
            return Err(JournalError::System { path, reason });
        }
        // One write for one line; what a kill in its middle leaves is found by the missing line break.
        match tail.file.write_all(line.as_bytes()).and_then(|()| tail.file.flush()) {
            Ok(()) => {
                tail.whole += line.len() as u64;
                Ok(())
            }
            Err(error) => {
                // Part of the line may be out (a full disk): no other worker may write behind it.
                tail.broken = true;
                let whole = tail.whole;
                // Where this fails too, resuming finds the missing line break.
                let _ = tail.file.set_len(whole);
                Err(failed(&self.path, &error))
            }
        }
    }
}
