//! The stored baseline: a folder with `baseline.json`, `trials.csv` and `instances.csv`.
//!
//! Nothing is compared here. The folder is meant for version control: it holds text only, and the
//! digests are taken over the text with line feeds as line ends, so that a checkout that turns them
//! into other line ends is not an alteration.

use std::io::ErrorKind;
use std::path::Path;

use serde::de::DeserializeOwned;
use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

use crate::record::{InstanceRecord, MethodRecord, Record, SCHEMA};

/// Name of the file that describes the others.
pub const HEAD: &str = "baseline.json";

/// Name of the file of trials.
pub const TRIALS: &str = "trials.csv";

/// Name of the file of instances.
pub const INSTANCES: &str = "instances.csv";

/// How a baseline is made, for messages.
const MAKE: &str = "rankassay gate RUN --baseline";

/// A run as the gate sees it.
#[derive(Clone, Copy, Debug)]
pub struct RunView<'a> {
    /// Title of the plan.
    pub title: &'a str,
    /// SHA-256 of the plan's text, in hexadecimal digits.
    pub plan_digest: &'a str,
    /// Version of the tool.
    pub version: &'a str,
    /// Feasibility, objective and rank tolerance of the referee.
    pub tolerance: [f64; 3],
    /// Wall-time limit of a trial, in seconds.
    pub wall_limit_s: f64,
    /// Methods in plan order.
    pub methods: &'a [MethodRecord],
    /// Records in plan order.
    pub records: &'a [Record],
    /// Instances of those records.
    pub instances: &'a [InstanceRecord],
    /// Time that a fixed computation took on this machine, in seconds; none when it was not measured.
    pub calibration_s: Option<f64>,
}

/// What a file of rows must hold.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct FileFacts {
    /// Rows without the head.
    pub rows: u64,
    /// SHA-256 of the text with line feeds as line ends, in hexadecimal digits.
    pub sha256: String,
}

/// What `baseline.json` holds.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Head {
    /// Record layout, `record::SCHEMA` at the time of writing.
    pub schema: u32,
    /// Title of the plan.
    pub title: String,
    /// SHA-256 of the plan's text, in hexadecimal digits.
    pub plan_digest: String,
    /// Version of the tool.
    pub version: String,
    /// Feasibility, objective and rank tolerance of the referee.
    pub tolerance: [f64; 3],
    /// Wall-time limit of a trial, in seconds.
    pub wall_limit_s: f64,
    /// Time that a fixed computation took on the machine of the baseline, in seconds.
    pub calibration_s: Option<f64>,
    /// Methods in plan order.
    pub methods: Vec<MethodRecord>,
    /// What `trials.csv` holds.
    pub trials: FileFacts,
    /// What `instances.csv` holds.
    pub instances: FileFacts,
}

/// The part of `baseline.json` that every schema has.
#[derive(Deserialize)]
struct SchemaOnly {
    schema: u32,
}

/// A baseline read from its folder.
#[derive(Clone, Debug, PartialEq)]
pub struct Baseline {
    /// What `baseline.json` holds.
    pub head: Head,
    /// Records in plan order.
    pub records: Vec<Record>,
    /// Instances of those records.
    pub instances: Vec<InstanceRecord>,
}

/// Says why a baseline cannot be read or written.
#[derive(Debug, thiserror::Error)]
pub enum BaselineError {
    /// The folder or one of its files is not there.
    #[error("there is no baseline: {path} is missing; make one with `{MAKE} {folder} --accept`")]
    Missing {
        /// What is missing.
        path: String,
        /// The folder.
        folder: String,
    },
    /// The system refused to read or write.
    #[error("cannot {action} {path}: {source}")]
    Access {
        /// `read` or `write`.
        action: &'static str,
        /// Which file or folder.
        path: String,
        /// What the system said.
        source: std::io::Error,
    },
    /// `baseline.json` cannot be read as what it should be.
    #[error(
        "{path}, line {line}, column {column}: {reason}; renew it with `{MAKE} {folder} --accept`"
    )]
    Json {
        /// The file.
        path: String,
        /// Line, from 1.
        line: usize,
        /// Column, from 1.
        column: usize,
        /// What is wrong.
        reason: String,
        /// The folder.
        folder: String,
    },
    /// The baseline was written with another record layout.
    #[error(
        "{path} has record layout {found}, which is {age} than layout {SCHEMA} of this program; renew it with \
         `{MAKE} {folder} --accept`"
    )]
    Schema {
        /// The file.
        path: String,
        /// Its layout.
        found: u32,
        /// `older` or `newer`.
        age: &'static str,
        /// The folder.
        folder: String,
    },
    /// A file has another number of rows than was written.
    #[error(
        "{path} has {found} rows where {expected} were written: it is truncated or mixed with another baseline; \
         restore it, or renew it with `{MAKE} {folder} --accept`"
    )]
    Rows {
        /// The file.
        path: String,
        /// Rows written.
        expected: u64,
        /// Rows found.
        found: u64,
        /// The folder.
        folder: String,
    },
    /// A file has the right number of rows, but not the text that was written.
    #[error(
        "{path} was altered: its SHA-256 is {found}, not {expected}; restore it, or renew it with \
         `{MAKE} {folder} --accept`"
    )]
    Altered {
        /// The file.
        path: String,
        /// Digest written.
        expected: String,
        /// Digest found.
        found: String,
        /// The folder.
        folder: String,
    },
    /// A row cannot be read as what it should be.
    #[error(
        "{path}, line {line}, column {column}: {reason}; renew it with `{MAKE} {folder} --accept`"
    )]
    Row {
        /// The file.
        path: String,
        /// Line, from 1.
        line: u64,
        /// Name of the column, or its number from 1.
        column: String,
        /// What is wrong.
        reason: String,
        /// The folder.
        folder: String,
    },
}

impl Baseline {
    /// Writes a run as the baseline of a folder, which is made when it is not there.
    ///
    /// Each file is written beside its place and then moved there, `baseline.json` last: after an
    /// interruption the folder holds the old baseline, the new one, or files whose digests do not
    /// agree with `baseline.json`, which [`Baseline::read`] refuses.
    ///
    /// # Errors
    /// [`BaselineError::Access`] when the system refuses.
    pub fn write(folder: &Path, run: &RunView<'_>) -> Result<(), BaselineError> {
        std::fs::create_dir_all(folder).map_err(|source| refused("write", folder, source))?;
        let trials = rows_of(run.records);
        let instances = rows_of(run.instances);
        let facts = |text: &str, rows: usize| FileFacts { rows: rows as u64, sha256: digest(text) };
        let head = Head {
            schema: SCHEMA,
            title: run.title.to_owned(),
            plan_digest: run.plan_digest.to_owned(),
            version: run.version.to_owned(),
            tolerance: run.tolerance,
            wall_limit_s: run.wall_limit_s,
            calibration_s: run.calibration_s,
            methods: run.methods.to_vec(),
            trials: facts(&trials, run.records.len()),
            instances: facts(&instances, run.instances.len()),
        };
        // Plain data with text keys: serialisation to memory cannot fail.
        let head = serde_json::to_string_pretty(&head).expect("plain data") + "\n";
        let files = [(TRIALS, &trials), (INSTANCES, &instances), (HEAD, &head)];
        for (name, text) in files {
            let beside = folder.join(format!("{name}.part"));
            std::fs::write(&beside, text).map_err(|source| refused("write", &beside, source))?;
        }
        for (name, _) in files {
            let place = folder.join(name);
            std::fs::rename(folder.join(format!("{name}.part")), &place)
                .map_err(|source| refused("write", &place, source))?;
        }
        Ok(())
    }

    /// Reads the baseline of a folder and checks it against its digests.
    ///
    /// # Errors
    /// [`BaselineError`]: folder or file missing; `baseline.json` unreadable or of another record
    /// layout; a file of rows truncated, altered, or with a row that does not parse.
    pub fn read(folder: &Path) -> Result<Self, BaselineError> {
        let text = read_text(folder, HEAD)?;
        let path = shown(&folder.join(HEAD));
        let broken = |error: serde_json::Error| BaselineError::Json {
            path: path.clone(),
            line: error.line(),
            column: error.column(),
            reason: plain_reason(&error),
            folder: shown(folder),
        };
        let SchemaOnly { schema } = serde_json::from_str(&text).map_err(broken)?;
        if schema != SCHEMA {
            let age = if schema < SCHEMA { "older" } else { "newer" };
            return Err(BaselineError::Schema { path, found: schema, age, folder: shown(folder) });
        }
        let head: Head = serde_json::from_str(&text).map_err(broken)?;
        let records = read_rows(folder, TRIALS, &head.trials)?;
        let instances = read_rows(folder, INSTANCES, &head.instances)?;
        Ok(Baseline { head, records, instances })
    }

    /// Returns the baseline as a run.
    pub fn view(&self) -> RunView<'_> {
        RunView {
            title: &self.head.title,
            plan_digest: &self.head.plan_digest,
            version: &self.head.version,
            tolerance: self.head.tolerance,
            wall_limit_s: self.head.wall_limit_s,
            methods: &self.head.methods,
            records: &self.records,
            instances: &self.instances,
            calibration_s: self.head.calibration_s,
        }
    }
}

fn shown(path: &Path) -> String {
    path.display().to_string()
}

fn refused(action: &'static str, path: &Path, source: std::io::Error) -> BaselineError {
    BaselineError::Access { action, path: shown(path), source }
}

fn read_text(folder: &Path, name: &str) -> Result<String, BaselineError> {
    let path = folder.join(name);
    std::fs::read_to_string(&path).map_err(|source| match source.kind() {
        ErrorKind::NotFound => {
            let missing = if folder.is_dir() { path.as_path() } else { folder };
            BaselineError::Missing { path: shown(missing), folder: shown(folder) }
        }
        _ => refused("read", &path, source),
    })
}

/// Cuts the place off a message: it stands before it already.
fn plain_reason(error: &serde_json::Error) -> String {
    let text = error.to_string();
    text.split(" at line ").next().unwrap_or(&text).to_owned()
}

fn rows_of<T: Serialize>(rows: &[T]) -> String {
    let mut writer = csv::Writer::from_writer(Vec::new());
    for row in rows {
        // Rows are flat, of one type, and written to memory.
        writer.serialize(row).expect("memory takes the row");
    }
    let bytes = writer.into_inner().expect("memory takes the rows");
    String::from_utf8(bytes).expect("cells are text")
}

fn digest(text: &str) -> String {
    let mut hasher = Sha256::new();
    for line in text.split_inclusive('\n') {
        match line.strip_suffix("\r\n") {
            Some(line) => {
                hasher.update(line);
                hasher.update("\n");
            }
            None => hasher.update(line),
        }
    }
    hasher.finalize().iter().map(|byte| format!("{byte:02x}")).collect()
}

fn read_rows<T: DeserializeOwned>(
    folder: &Path,
    name: &str,
    facts: &FileFacts,
) -> Result<Vec<T>, BaselineError> {
    let text = read_text(folder, name)?;
    let path = shown(&folder.join(name));
    let found = digest(&text);
    let rows = csv::ReaderBuilder::new()
        .flexible(true)
        .from_reader(text.as_bytes())
        .into_byte_records()
        .count() as u64;
    if rows != facts.rows {
        return Err(BaselineError::Rows {
            path,
            expected: facts.rows,
            found: rows,
            folder: shown(folder),
        });
    }
    if found != facts.sha256 {
        let expected = facts.sha256.clone();
        return Err(BaselineError::Altered { path, expected, found, folder: shown(folder) });
    }
    let mut reader = csv::Reader::from_reader(text.as_bytes());
    let heads = reader.headers().cloned().unwrap_or_default();
    reader
        .deserialize()
        .map(|row| row.map_err(|error| row_error(&error, &heads, &path, folder)))
        .collect()
}

fn row_error(
    error: &csv::Error,
    heads: &csv::StringRecord,
    path: &str,
    folder: &Path,
) -> BaselineError {
    let (column, reason) = match error.kind() {
        csv::ErrorKind::Deserialize { err, .. } => {
            let column = err.field().map(|at| {
                let name = heads.get(at as usize).map(str::to_owned);
                name.unwrap_or_else(|| (at + 1).to_string())
            });
            (column, err.kind().to_string())
        }
        csv::ErrorKind::UnequalLengths { expected_len, len, .. } => {
            (Some(len.to_string()), format!("{len} columns where {expected_len} are expected"))
        }
        _ => (None, error.to_string()),
    };
    BaselineError::Row {
        path: path.to_owned(),
        line: error.position().map_or(1, csv::Position::line),
        column: column.unwrap_or_else(|| "1".to_owned()),
        reason,
        folder: shown(folder),
    }
}
