//! `rankassay scatter`: a plan as a job array of a cluster, and a job that merges what its tasks leave.

use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;

use clap::{Args, ValueEnum};

use super::output::{say, tell};
use super::report::Failure;
use super::run::read_plan;
use super::{Ended, INTERRUPTED, Loudness};
use crate::runner::scatter::{
    self, ARRAY, ATTEMPTS, Demand, Division, LOGS, MERGE, MOST_TASKS, Scatter, SubmitError,
    shell_word,
};
use crate::runner::{Plan, Roster, latest_folder};

/// Folder that holds the folders of runs when none is given.
const RUNS: &str = "runs";

#[derive(Debug, Args)]
pub(super) struct ScatterCommand {
    /// Plan file (TOML)
    plan: PathBuf,
    /// What schedules the cluster
    #[arg(long, value_enum, default_value = "slurm")]
    engine: Engine,
    /// Folder for scripts, logs, records and tables, which every node must see under the same path; left
    /// out, a fresh folder runs/NAME-scattered-1, ...
    #[arg(long, value_name = "DIR")]
    into: Option<PathBuf>,
    /// Number of tasks, each a part of the plan [default: 16, or one for each instance if these are fewer]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u64).range(1..=MOST_TASKS))]
    tasks: Option<u64>,
    /// Number of trials at a time in each task, with a core each
    #[arg(long, value_name = "N", default_value_t = 1,
          value_parser = clap::value_parser!(u16).range(1..=1024))]
    jobs: u16,
    /// Partition of the cluster
    #[arg(long, value_name = "NAME")]
    partition: Option<String>,
    /// Time limit of each task, such as 4:00:00
    #[arg(long, value_name = "TIME")]
    time: Option<String>,
    /// Account that is charged
    #[arg(long, value_name = "NAME")]
    account: Option<String>,
    /// Further option of sbatch for both jobs, such as --extra=--mem=4G; may be repeated
    #[arg(long, value_name = "OPTION", allow_hyphen_values = true)]
    extra: Vec<String>,
    /// Whether the jobs are submitted
    #[arg(long, value_enum, value_name = "WHEN", default_value = "if-possible")]
    submit: When,
    /// How long sbatch may take to answer, in seconds
    #[arg(long, value_name = "SECONDS", default_value_t = 30,
          value_parser = clap::value_parser!(u64).range(1..=3600))]
    patience: u64,
}

/// What schedules a cluster.
#[derive(Clone, Copy, Debug, ValueEnum)]
enum Engine {
    /// Slurm, through its command sbatch.
    Slurm,
}

/// Whether jobs are submitted.
#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
enum When {
    /// Where sbatch is on the path; elsewhere it is said how to submit by hand
    IfPossible,
    /// Always; without sbatch nothing is written
    Always,
    /// Never: the folder is written, and it is said how to submit by hand
    Never,
}

pub(super) fn execute(command: &ScatterCommand, loudness: Loudness) -> Ended {
    let Engine::Slurm = command.engine;
    let file_name = command.plan.display().to_string();
    let text = read_plan(&command.plan)?;
    let folder = command.plan.parent().unwrap_or(Path::new(""));
    let plan = Plan::parse(&text, &file_name, folder, Roster::built_in())
        .map_err(|error| Failure::from(&error))?;
    let demand = Demand {
        jobs: command.jobs,
        partition: command.partition.clone(),
        time: command.time.clone(),
        account: command.account.clone(),
        extra: command.extra.iter().map(|line| stripped(line)).collect(),
    };
    demand.check().map_err(Failure::input)?;
    scatter::check_plan(&plan)?;
    let submits = match command.submit {
        When::Never => false,
        When::IfPossible => scatter::can_submit(),
        When::Always if scatter::can_submit() => true,
        When::Always => {
            return Err(Failure::input(
                "--submit always: `sbatch` is not on the path; nothing is written",
            ));
        }
    };
    let scatter = Scatter {
        program: std::env::current_exe().map_err(|error| {
            Failure::input(format!("the file of this program is not known: {error}"))
        })?,
        plan: absolute(&command.plan)?,
        folder: absolute(&command.into.clone().unwrap_or_else(|| fresh(&command.plan)))?,
        division: Division::new(&plan, command.tasks),
        demand,
    };
    scatter.write(&text).map_err(Failure::input)?;
    if let Some(asked) = command.tasks
        && asked > scatter.division.parts
        && loudness != Loudness::Quiet
    {
        tell(&format!(
            "note: {} tasks instead of {asked}, one for each instance of the plan",
            scatter.division.parts
        ));
    }
    if submits { submit(command, &scatter, loudness) } else { by_hand(command, &scatter, loudness) }
}

/// Drops the mark of an option line of a job script, which people copy from one.
fn stripped(line: &str) -> String {
    line.strip_prefix("#SBATCH ").unwrap_or(line).trim().to_owned()
}

/// Makes a path absolute without following links, which may lead elsewhere on another node.
fn absolute(path: &Path) -> Result<PathBuf, Failure> {
    std::path::absolute(path)
        .map_err(|error| Failure::input(format!("{}: {error}", path.display())))
}

/// Chooses a folder among the runs whose number is not taken.
fn fresh(plan: &Path) -> PathBuf {
    let stem = format!("{}-scattered", plan.file_stem().unwrap_or_default().to_string_lossy());
    let number = |folder: PathBuf| -> Option<u64> {
        folder.file_name()?.to_str()?.rsplit('-').next()?.parse().ok()
    };
    let taken = latest_folder(Path::new(RUNS), &stem).and_then(number).unwrap_or(0);
    Path::new(RUNS).join(format!("{stem}-{}", taken + 1))
}

/// Names a file of the folder for a shell.
fn named(scatter: &Scatter, name: &str) -> String {
    shell_word(&scatter.folder.join(name).display().to_string())
}

/// Submits both jobs and says what to watch.
fn submit(command: &ScatterCommand, scatter: &Scatter, loudness: Loudness) -> Ended {
    let interrupt = Arc::new(AtomicBool::new(false));
    let flag = Arc::clone(&interrupt);
    ctrlc::set_handler(move || flag.store(true, Ordering::Relaxed))
        .map_err(|error| Failure::input(format!("signals cannot be handled: {error}")))?;
    let patience = Duration::from_secs(command.patience);
    let send = |script: &str, after: Option<&str>| {
        scatter::submit(&scatter.folder.join(script), after, patience, &interrupt)
    };
    let array = match send(ARRAY, None) {
        Ok(job) => job,
        Err(error) => {
            let way = way(scatter);
            return unsubmitted(&error, &format!("the scripts are written; by hand:\n{way}"));
        }
    };
    let merge = match send(MERGE, Some(&array)) {
        Ok(job) => job,
        Err(error) => {
            let script = named(scatter, MERGE);
            return unsubmitted(
                &error,
                &format!(
                    "the job array is submitted as {array} (`scancel {array}` takes it back); the merge by hand:\n  \
                     sbatch --dependency=afterany:{array} {script}"
                ),
            );
        }
    };
    if loudness != Loudness::Quiet {
        say(&format!(
            "Array:   job {array}, {} tasks for {} instances\n\
             Merge:   job {merge}, when every task has ended\n\
             Watch:   squeue --jobs={array},{merge}\n{}",
            scatter.division.parts,
            scatter.division.instances,
            places(scatter)
        ))?;
    }
    Ok(ExitCode::SUCCESS)
}

/// Says why a job was not submitted and what can be done.
fn unsubmitted(error: &SubmitError, advice: &str) -> Ended {
    if let SubmitError::Interrupted(_) = error {
        tell(&format!("{error}\n{advice}"));
        return Ok(ExitCode::from(INTERRUPTED));
    }
    Err(Failure::input(format!("{error}\n{advice}")))
}

/// Says how to submit by hand.
fn by_hand(command: &ScatterCommand, scatter: &Scatter, loudness: Loudness) -> Ended {
    if loudness != Loudness::Quiet {
        let why = match command.submit {
            When::Never => "nothing is submitted",
            _ => "nothing is submitted, since `sbatch` is not on the path",
        };
        let Division { parts, instances } = scatter.division;
        let (way, places) = (way(scatter), places(scatter));
        say(&format!(
            "{parts} tasks for {instances} instances are written; {why}. By hand:\n{way}{places}"
        ))?;
    }
    Ok(ExitCode::SUCCESS)
}

/// Lists the commands that submit both jobs.
fn way(scatter: &Scatter) -> String {
    format!(
        "  array=$(sbatch --parsable {})\n  sbatch --dependency=afterany:\"${{array%%;*}}\" {}\n",
        named(scatter, ARRAY),
        named(scatter, MERGE)
    )
}

/// Says where everything will be, and how to repeat what went wrong.
fn places(scatter: &Scatter) -> String {
    let place = |name: &str| scatter.folder.join(name).display().to_string();
    format!(
        "Logs:    {}\n\
         Records: {}\n\
         Report:  {}\n\
         Repeat:  sbatch --array=I {} for task I alone, then sbatch {}\n",
        place(LOGS),
        place(ATTEMPTS),
        place("report.html"),
        named(scatter, ARRAY),
        named(scatter, MERGE)
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_mark_of_an_option_line_is_dropped() {
        let lines = ["#SBATCH --mem=4G", "--mem=4G", " --exclusive "].map(stripped);
        assert_eq!(lines, ["--mem=4G", "--mem=4G", "--exclusive"]);
    }
}
