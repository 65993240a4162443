//! Calls of Slurm's `sbatch`, and what can go wrong with them. What becomes of a job that was submitted is
//! not asked here.

use std::path::Path;
use std::process::Command;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;

use super::shell_word;
use crate::budget::{Halt, Stopwatch};
use crate::methods::outside::process::{self, Ending, Watch};

/// What `sbatch` may print, in bytes.
const MOST_PRINTED_BYTES: u64 = 1 << 20;

/// How much of it is kept, in bytes.
const KEPT_BYTES: usize = 4000;

/// Says why a job was not submitted, or may not have been.
#[derive(Debug, thiserror::Error)]
pub enum SubmitError {
    /// There is no such program.
    #[error("`sbatch` cannot be started: {0}")]
    Missing(String),
    /// No answer came in time, as when there is no controller.
    #[error(
        "`{command}` gave no answer within {seconds} s and was ended: is the controller (slurmctld) up? The job \
         may have been submitted all the same: look with `squeue --me` before you submit it again"
    )]
    Silent {
        /// The command.
        command: String,
        /// How long it was waited for.
        seconds: u64,
    },
    /// The user did not want to wait any longer.
    #[error(
        "`{0}` was interrupted; the job may have been submitted all the same: look with `squeue --me`"
    )]
    Interrupted(String),
    /// The job was refused.
    #[error("`{command}` was refused{reason}")]
    Refused {
        /// The command.
        command: String,
        /// The last words of `sbatch`.
        reason: String,
    },
    /// What was printed is no job id.
    #[error("`{command}` printed no job id but {printed:?}")]
    Unclear {
        /// The command.
        command: String,
        /// What it printed.
        printed: String,
    },
}

/// Returns whether `sbatch` is on the path.
pub fn can_submit() -> bool {
    let path = std::env::var_os("PATH").unwrap_or_default();
    std::env::split_paths(&path).any(|folder| folder.join("sbatch").is_file())
}

/// Submits a script, as a job that waits for the end of job `after` (however it ends) if one is given, and
/// returns the new job's id.
///
/// `sbatch` is ended after `patience`, since without a controller it would wait for one for minutes, and as
/// soon as `interrupt` is set.
///
/// # Errors
/// See [`SubmitError`].
pub fn submit(
    script: &Path,
    after: Option<&str>,
    patience: Duration,
    interrupt: &AtomicBool,
) -> Result<String, SubmitError> {
    let mut words = vec!["--parsable".to_owned()];
    words.extend(after.map(|job| format!("--dependency=afterany:{job}")));
    let shown = || {
        let script = shell_word(&script.display().to_string());
        format!("sbatch {} {script}", words.join(" "))
    };
    let clock = Stopwatch::start();
    let watch = Watch {
        input: Vec::new(),
        printed_bytes: MOST_PRINTED_BYTES,
        kept_bytes: KEPT_BYTES,
        check: &|_| match interrupt.load(Ordering::Relaxed) {
            true => Err(Halt::Interrupted),
            false if clock.elapsed() < patience => Ok(()),
            false => Err(Halt::TimeLimit),
        },
    };
    let outcome = process::run(Command::new("sbatch").args(&words).arg(script), watch)
        .map_err(|error| SubmitError::Missing(error.to_string()))?;
    match outcome.ending {
        Ending::Exited(0) => {
            let last = outcome.printed.lines().next_back().unwrap_or("");
            // Of a job on one of several clusters the name of the cluster follows.
            let id = last.split(';').next().unwrap_or("");
            if id.is_empty() || !id.chars().all(|sign| sign.is_ascii_digit()) {
                return Err(SubmitError::Unclear { command: shown(), printed: outcome.printed });
            }
            Ok(id.to_owned())
        }
        Ending::Halted(Halt::Interrupted) => Err(SubmitError::Interrupted(shown())),
        Ending::Halted(_) => {
            Err(SubmitError::Silent { command: shown(), seconds: patience.as_secs() })
        }
        _ => Err(SubmitError::Refused { command: shown(), reason: outcome.last_words() }),
    }
}
