//! Replaying recorded trials: the instance is planted anew from its seed, its digest is checked, the
//! method runs again, and the new record is held against the old one.

use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::expand::Expansion;
use super::journal::{self, Contents, JournalError};
use super::manifest::{Manifest, Stretch};
use super::plan::{Plan, PlanError, Roster};
use super::trial::TrialEnd;
use super::{FolderError, Isolation, RunError, worker};
use crate::card::nearest_word;
use crate::record::Record;

/// Columns that differ between two runs of one trial on one machine.
const MEASURED: [&str; 3] = ["wall_s", "cpu_s", "peak_bytes"];

/// What a replay came to.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Agreement {
    /// Every column but times and memory is the same to the last bit.
    Identical,
    /// Another processor or version, the same instance and verdict, and figures that agree to the referee's
    /// tolerances; other columns differ.
    SameVerdict,
    /// Another verdict or instance, figures that do not agree, any difference although nothing around the
    /// trial differs, or files of the run that contradict each other.
    Different,
}

/// A column that differs.
#[derive(Clone, Debug, PartialEq)]
pub struct Difference {
    /// The column.
    pub column: String,
    /// What is recorded.
    pub recorded: String,
    /// What the replay found.
    pub replayed: String,
    /// `|replayed - recorded| / max(|recorded|, |replayed|)`, for numbers.
    pub relative: Option<f64>,
}

/// The outcome of one replay.
#[derive(Clone, Debug)]
pub struct Replay {
    /// The trial.
    pub trial: String,
    /// What it came to.
    pub agreement: Agreement,
    /// Columns that differ, in the order of the record; those of the instance start with `instance.`,
    /// those of the CSV file that disagrees with the journal with `trials.csv `.
    pub differences: Vec<Difference>,
    /// What is recorded.
    pub recorded: Record,
    /// What the replay found.
    pub replayed: Record,
}

/// Says why a trial cannot be replayed.
#[derive(Debug, thiserror::Error)]
pub enum ReplayError {
    /// The journal cannot be used.
    #[error("{0}")]
    Journal(#[from] JournalError),
    /// A file of the run folder cannot be used.
    #[error("{0}")]
    Folder(#[from] FolderError),
    /// The plan in the manifest is not one for this program.
    #[error("the run's plan is refused: {0}")]
    Plan(#[from] PlanError),
    /// The manifest and the journal are of different runs.
    #[error("{0}: the plan in its manifest is not the one that its journal is of")]
    Mixed(String),
    /// No such trial is recorded.
    #[error("{folder}: no trial {trial} is recorded{hint}")]
    Unknown {
        /// The run folder.
        folder: String,
        /// What was asked for.
        trial: String,
        /// The nearest id, if one is near.
        hint: String,
    },
    /// The instance or the trial cannot be run.
    #[error("{0}")]
    Run(#[from] RunError),
    /// It was interrupted.
    #[error("interrupted")]
    Interrupted,
}

/// A recorded run that is ready to be replayed.
pub struct Recorded<'a> {
    folder: PathBuf,
    plan: Plan<'a>,
    expansion: Expansion,
    contents: Contents,
    rows: Option<Vec<Vec<String>>>,
    surroundings: Vec<[String; 3]>,
}

impl<'a> Recorded<'a> {
    /// Opens a run folder. `plan_folder` is where imported paths start; without it, the folder of the
    /// plan file as it was given to the run.
    ///
    /// # Errors
    /// See [`ReplayError`].
    pub fn open(
        folder: &Path,
        plan_folder: Option<&Path>,
        roster: Roster<'a>,
    ) -> Result<Self, ReplayError> {
        let contents = journal::read(folder)?;
        let manifest = Manifest::read(folder)?;
        let beside = Path::new(&manifest.plan_file).parent().unwrap_or(Path::new(""));
        let plan = Plan::parse(
            &manifest.plan,
            &manifest.plan_file,
            plan_folder.unwrap_or(beside),
            roster,
        )?;
        let plan = plan.in_round(contents.header.round);
        if plan.digest != contents.header.plan_digest {
            return Err(ReplayError::Mixed(folder.display().to_string()));
        }
        let expansion = Expansion::new(&plan);
        let rows = rows_of(&folder.join("trials.csv"));
        let surroundings = surroundings(&manifest);
        let folder = folder.to_owned();
        Ok(Recorded { folder, plan, expansion, contents, rows, surroundings })
    }

    /// Lists the ids of the recorded trials, in the order of their numbers.
    pub fn trials(&self) -> Vec<&str> {
        let recorded: std::collections::BTreeSet<&str> =
            self.contents.records.iter().map(|record| record.trial.as_str()).collect();
        let planned = self.expansion.trials.iter().map(|trial| trial.id.as_str());
        planned.filter(|id| recorded.contains(id)).collect()
    }

    /// Lists what is not the same here as it was there (version, processor, features): what, there, here.
    pub fn surroundings(&self) -> &[[String; 3]] {
        &self.surroundings
    }

    /// Runs one recorded trial again.
    ///
    /// # Errors
    /// See [`ReplayError`].
    pub fn replay(
        &self,
        id: &str,
        isolation: &Isolation,
        interrupt: &Arc<AtomicBool>,
    ) -> Result<Replay, ReplayError> {
        let spec = self.expansion.trials.iter().find(|trial| trial.id == id);
        let recorded = self.contents.records.iter().find(|record| record.trial == id);
        let (Some(spec), Some(recorded)) = (spec, recorded) else {
            return Err(self.unknown(id));
        };
        let instance = self.expansion.load(&self.plan, spec.instance)?;
        let mut differences = Vec::new();
        let mut agreement = Agreement::Identical;
        match self.contents.instances.iter().find(|known| known.instance == recorded.instance) {
            Some(known) => {
                let columns = compare(known, &instance.record);
                if !columns.is_empty() {
                    agreement = Agreement::Different;
                }
                differences.extend(columns.into_iter().map(|difference| Difference {
                    column: format!("instance.{}", difference.column),
                    ..difference
                }));
            }
            None => return Err(self.unknown(&recorded.instance)),
        }
        let altered = self.row_differences(recorded);
        if !altered.is_empty() {
            agreement = Agreement::Different;
            differences.extend(altered);
        }
        let place = (spec, &self.expansion.instances[spec.instance]);
        let replayed = match worker::play(isolation, &self.plan, place, &instance, interrupt)? {
            TrialEnd::Recorded(record, _) => *record,
            TrialEnd::Interrupted => return Err(ReplayError::Interrupted),
        };
        let columns: Vec<Difference> = compare(recorded, &replayed)
            .into_iter()
            .filter(|difference| !MEASURED.contains(&difference.column.as_str()))
            .collect();
        if !columns.is_empty() {
            // Where nothing around the trial differs, nothing in its record may.
            let same = !self.surroundings.is_empty()
                && within(self.contents.header.tolerance, recorded, &replayed);
            agreement =
                agreement.max(if same { Agreement::SameVerdict } else { Agreement::Different });
        }
        differences.extend(columns);
        let trial = id.to_owned();
        Ok(Replay { trial, agreement, differences, recorded: recorded.clone(), replayed })
    }

    fn unknown(&self, id: &str) -> ReplayError {
        let recorded = self.contents.records.iter().map(|record| record.trial.as_str());
        let hint = nearest_word(id, recorded)
            .map_or(String::new(), |near| format!(" (did you mean {near}?)"));
        ReplayError::Unknown {
            folder: self.folder.display().to_string(),
            trial: id.to_owned(),
            hint,
        }
    }

    /// Compares the trial's row in `trials.csv`, if there is one, with its record in the journal.
    fn row_differences(&self, recorded: &Record) -> Vec<Difference> {
        let Some((names, rows)) = self.rows.as_ref().and_then(|rows| rows.split_first()) else {
            return Vec::new();
        };
        let at = names.iter().position(|name| name == "trial");
        let row = at.and_then(|at| rows.iter().find(|row| row[at] == recorded.trial));
        let Some(row) = row else {
            return Vec::new();
        };
        let expected: std::collections::BTreeMap<String, String> =
            columns_of(recorded).into_iter().collect();
        let mut differences = Vec::new();
        for (name, found) in names.iter().zip(row) {
            let known = expected.get(name).cloned().unwrap_or_default();
            if known != *found {
                differences.push(difference(&format!("trials.csv {name}"), &known, found));
            }
        }
        differences
    }
}

/// Lists what is not the same on this machine and in this program as in the last stretch of the run.
fn surroundings(manifest: &Manifest) -> Vec<[String; 3]> {
    let Some(there) = manifest.stretches.last() else {
        return Vec::new();
    };
    let here = Stretch::now(1, super::Placement::Free);
    let word = |text: &Option<String>| text.clone().unwrap_or_else(|| "unknown".to_owned());
    let machine = |stretch: &Stretch| {
        let machine = &stretch.machine;
        [
            machine.system.clone(),
            machine.architecture.clone(),
            word(&machine.processor),
            machine.features.join(" "),
        ]
    };
    let mut then = vec![there.version.clone(), word(&there.commit)];
    then.extend(machine(there));
    let mut now = vec![here.version.clone(), word(&here.commit)];
    now.extend(machine(&here));
    let names =
        ["tool version", "commit", "system", "architecture", "processor", "processor features"];
    let lines = names.into_iter().zip(then).zip(now);
    lines
        .filter(|((_, then), now)| then != now)
        .map(|((name, then), now)| [name.to_owned(), then, now])
        .collect()
}

/// Returns whether the judged figures agree to the referee's tolerances: the objective to
/// `tolerance.objective * (1 + |objective|)`, the feasibility to `tolerance.feasibility`, and the rank at
/// the referee's cut-off exactly. All else (counts of steps, digits beyond the tolerance, messages) may
/// move with the rounding errors of another processor.
fn within(tolerance: [f64; 3], recorded: &Record, replayed: &Record) -> bool {
    let [feasibility, objective, _] = tolerance;
    let near = |a: Option<f64>, b: Option<f64>, room: f64, scaled: bool| match (a, b) {
        (Some(a), Some(b)) => {
            let scale = if scaled { 1.0 + a.abs().max(b.abs()) } else { 1.0 };
            (a - b).abs() <= room * scale
        }
        (None, None) => true,
        _ => false,
    };
    recorded.verdict == replayed.verdict
        && recorded.stop_reason == replayed.stop_reason
        && near(recorded.objective, replayed.objective, objective, true)
        && near(recorded.feasibility, replayed.feasibility, feasibility, false)
        && recorded.rank_at_1e6 == replayed.rank_at_1e6
}

fn rows_of(path: &Path) -> Option<Vec<Vec<String>>> {
    let mut reader = csv::ReaderBuilder::new().has_headers(false).from_path(path).ok()?;
    let rows = reader.records().map(|row| row.map(|row| row.iter().map(str::to_owned).collect()));
    rows.collect::<Result<Vec<_>, _>>().ok()
}

/// Returns names and values of a flat record, as its CSV file spells them.
fn columns_of<T: serde::Serialize>(record: &T) -> Vec<(String, String)> {
    let mut writer = csv::Writer::from_writer(Vec::new());
    writer.serialize(record).expect("records are flat");
    let bytes = writer.into_inner().expect("memory takes the row");
    let mut reader = csv::ReaderBuilder::new().has_headers(false).from_reader(bytes.as_slice());
    let mut rows = reader.records().map(|row| row.expect("what was written is read"));
    let (names, values) = (rows.next().expect("a heading"), rows.next().expect("a row"));
    names.iter().map(str::to_owned).zip(values.iter().map(str::to_owned)).collect()
}

/// Lists the columns in which two flat records differ.
pub(super) fn compare<T: serde::Serialize>(recorded: &T, replayed: &T) -> Vec<Difference> {
    let pairs = columns_of(recorded).into_iter().zip(columns_of(replayed));
    pairs
        .filter(|(then, now)| then.1 != now.1)
        .map(|((column, then), (_, now))| difference(&column, &then, &now))
        .collect()
}

fn difference(column: &str, then: &str, now: &str) -> Difference {
    let relative = then.parse::<f64>().ok().zip(now.parse::<f64>().ok()).map(|(a, b)| {
        let scale = a.abs().max(b.abs());
        if scale == 0.0 { 0.0 } else { (a - b).abs() / scale }
    });
    Difference {
        column: column.to_owned(),
        recorded: then.to_owned(),
        replayed: now.to_owned(),
        relative,
    }
}
