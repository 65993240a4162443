//! Scatters a plan over a cluster that Slurm schedules: which parts of the plan become tasks, the texts of the
//! two job scripts, and the folder they live in.
//!
//! The folder holds `plan.toml` (a copy, to notice that the plan was changed), `array.sh` (one task for each
//! part), `merge.sh` (what comes after it), `logs/` and `attempts/`. Every attempt at a task writes to a folder
//! of its own inside `attempts/`: a task that is requeued, or whose node was cut off and lives on, runs
//! twice, perhaps at once, and neither copy may touch the other's records. What is missing and which copies
//! disagree is found out by merging the records, never from what the scheduler says of its jobs.
//!
//! Nothing here runs a trial, and nothing here prints.

mod submit;

pub use submit::{SubmitError, can_submit, submit};

use std::io::ErrorKind;
use std::path::{Path, PathBuf};

use super::expand::Expansion;
use super::folder::write_files;
use super::{FolderError, Plan, RunError, machine};

/// Most tasks of a job array: with Slurm's default `MaxArraySize` of 1001 the largest index is 1000
/// (slurm.conf(5)), and the first one here is 1.
pub const MOST_TASKS: u64 = 1000;

/// Tasks of a job array when nobody says how many.
const USUAL_TASKS: u64 = 16;

/// Name of the script of the job array.
pub const ARRAY: &str = "array.sh";

/// Name of the script that merges what the attempts left.
pub const MERGE: &str = "merge.sh";

/// Name of the folder with what the jobs print.
pub const LOGS: &str = "logs";

/// Name of the folder with the run folders of the attempts.
pub const ATTEMPTS: &str = "attempts";

/// Name of the copy of the plan.
const COPY: &str = "plan.toml";

/// Options of `sbatch` that the scripts rely on and that extra lines may not give.
const RESERVED: [&str; 11] = [
    "--array",
    "-a",
    "--chdir",
    "-D",
    "--output",
    "-o",
    "--error",
    "-e",
    "--dependency",
    "-d",
    "--wrap",
];

/// Says why a plan cannot be scattered.
#[derive(Debug, thiserror::Error)]
pub enum ScatterError {
    /// The folder has something in it.
    #[error("{0} is not empty; give a folder that does not exist yet")]
    NotEmpty(String),
    /// A path cannot stand in a job script.
    #[error(
        "{0:?} cannot be named in a job script: it is not UTF-8 or holds a line break or another control character"
    )]
    Path(PathBuf),
    /// A folder cannot hold logs.
    #[error("{0:?} holds a backslash, which Slurm does not take in the names of logs")]
    Backslash(PathBuf),
    /// A value of an option cannot stand in a job script.
    #[error("--{option}: {value:?} is {reason}")]
    Value {
        /// Name of the option.
        option: &'static str,
        /// Its value.
        value: String,
        /// What is wrong with it.
        reason: String,
    },
    /// The folder cannot be written.
    #[error("{0}")]
    Folder(#[from] FolderError),
}

/// How a plan falls into parts: part I of N holds the instances that `run --shard I/N` takes.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Division {
    /// Number of instances of the plan.
    pub instances: u64,
    /// Number of parts, N, each a task; 1 <= N <= instances, so that no part is empty.
    pub parts: u64,
}

impl Division {
    /// Divides a plan into `tasks` parts, or 16 without a wish; never more than it has instances, nor
    /// than [`MOST_TASKS`].
    pub fn new(plan: &Plan<'_>, tasks: Option<u64>) -> Self {
        let instances = Expansion::new(plan).instances.len() as u64;
        let parts = tasks.unwrap_or(USUAL_TASKS).min(instances).clamp(1, MOST_TASKS);
        Division { instances, parts }
    }
}

/// Finds out what is impossible in a plan, as a run does before it writes anything: the first
/// instance of every combination is planted and every imported file is read.
///
/// # Errors
/// See [`RunError`].
pub fn check_plan(plan: &Plan<'_>) -> Result<(), RunError> {
    let threads = machine::cores().max(1);
    let pool = rayon::ThreadPoolBuilder::new()
        .num_threads(threads)
        .stack_size(16 << 20)
        .build()
        .map_err(|error| RunError::Threads(threads, error.to_string()))?;
    Expansion::new(plan).check(plan, &pool).map(|_| ())
}

/// What the jobs ask Slurm for.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Demand {
    /// Trials at a time in a task, and cores of a task; at least 1.
    pub jobs: u16,
    /// Partition, if not the default one.
    pub partition: Option<String>,
    /// Time limit of a job as `sbatch --time` reads it, if not the partition's.
    pub time: Option<String>,
    /// Account, if not the user's default one.
    pub account: Option<String>,
    /// Further options of `sbatch`, a line each, for both jobs.
    pub extra: Vec<String>,
}

impl Demand {
    /// Checks that every value can stand in a job script and changes nothing that the scripts rely on.
    ///
    /// # Errors
    /// The first value that cannot, with the reason.
    pub fn check(&self) -> Result<(), ScatterError> {
        for (option, value) in self.named() {
            check_text(option, value)?;
        }
        for line in &self.extra {
            check_text("extra", line)?;
            let refused = |reason: String| ScatterError::Value {
                option: "extra",
                value: line.clone(),
                reason,
            };
            if !line.starts_with('-') {
                let reason = "no option of sbatch; expected one such as --mem=4G".to_owned();
                return Err(refused(reason));
            }
            for word in line.split_whitespace() {
                let name = word.split('=').next().unwrap_or(word);
                // A short option may have its value on its heels: -a1-3.
                let taken = RESERVED.iter().find(|taken| match taken.starts_with("--") {
                    true => name == **taken,
                    false => !word.starts_with("--") && word.starts_with(**taken),
                });
                if let Some(taken) = taken {
                    return Err(refused(format!(
                        "refused: the job scripts set {taken} themselves"
                    )));
                }
            }
        }
        Ok(())
    }

    fn named(&self) -> impl Iterator<Item = (&'static str, &String)> {
        let options =
            [("partition", &self.partition), ("time", &self.time), ("account", &self.account)];
        options.into_iter().filter_map(|(name, value)| Some((name, value.as_ref()?)))
    }

    /// Writes the lines that both scripts share.
    fn lines(&self) -> String {
        let named = self.named().map(|(name, value)| option(name, value));
        named.chain(self.extra.iter().map(|line| format!("#SBATCH {line}\n"))).collect()
    }
}

fn check_text(option: &'static str, value: &str) -> Result<(), ScatterError> {
    let reason = if value.trim().is_empty() {
        "empty"
    } else if value.chars().any(char::is_control) {
        "refused: it holds a line break or another control character"
    } else {
        return Ok(());
    };
    Err(ScatterError::Value { option, value: value.to_owned(), reason: reason.to_owned() })
}

/// A plan on its way to a cluster. All paths are absolute and mean the same on every node.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Scatter {
    /// This program's file.
    pub program: PathBuf,
    /// The plan file.
    pub plan: PathBuf,
    /// The folder that is written.
    pub folder: PathBuf,
    /// How the plan is divided.
    pub division: Division,
    /// What the jobs ask for.
    pub demand: Demand,
}

impl Scatter {
    /// Writes the script of the job array: each task runs its part of the plan.
    ///
    /// A task ends with the exit code of `run`, but with 0 where that is 3: trials that could not be
    /// judged are recorded and are no failure of the task. SIGTERM is passed on to `run`, which keeps what is
    /// recorded and ends with 130.
    ///
    /// # Errors
    /// A path cannot stand in a script.
    pub fn array_script(&self) -> Result<String, ScatterError> {
        let jobs = self.demand.jobs;
        let options = [
            option("job-name", &self.job_name("")),
            format!("#SBATCH --array=1-{}\n", self.division.parts),
            self.output("task-%a-%A.log")?,
            format!(
                "#SBATCH --open-mode=append\n#SBATCH --requeue\n#SBATCH --cpus-per-task={jobs}\n"
            ),
        ];
        Ok(format!(
            "#!/bin/sh\n\
             # Runs one part of the plan for each task. Any task may be submitted again, even while it runs:\n\
             # sbatch --array=I {ARRAY}\n\
             {options}{common}\n\
             {paths}\
             task=${{SLURM_ARRAY_TASK_ID:?is not set: submit this script by sbatch}}\n\
             # The same task can run twice at once, so that every attempt has a folder of its own.\n\
             attempt=$base/{ATTEMPTS}/task-$task-${{SLURM_ARRAY_JOB_ID:-0}}-${{SLURM_RESTART_COUNT:-0}}\n\
             attempt=$attempt-${{SLURMD_NODENAME:-$(uname -n)}}-$$\n\
             \n\
             cmp -s \"$plan\" \"$base/{COPY}\" || {{\n\
             \x20 echo \"$plan is not what was scattered, see $base/{COPY}; scatter it again into a new folder\" >&2\n\
             \x20 exit 2\n\
             }}\n\
             \"$program\" run \"$plan\" --shard \"$task/{parts}\" --into \"$attempt\" \
             --jobs \"${{SLURM_CPUS_PER_TASK:-{jobs}}}\" &\n\
             run=$!\n\
             trap 'kill -TERM \"$run\" 2>/dev/null' TERM INT\n\
             wait \"$run\"\n\
             code=$?\n\
             # A signal ends the waiting, not the run.\n\
             while [ \"$code\" -gt 128 ] && kill -0 \"$run\" 2>/dev/null; do\n\
             \x20 wait \"$run\"\n\
             \x20 code=$?\n\
             done\n\
             # 3: some trials could not be judged. They are recorded as such.\n\
             [ \"$code\" -eq 3 ] && code=0\n\
             exit \"$code\"\n",
            options = options.concat(),
            common = self.common()?,
            paths = self.paths([
                ("program", &self.program),
                ("plan", &self.plan),
                ("base", &self.folder)
            ])?,
            parts = self.division.parts,
        ))
    }

    /// Writes the script that merges what the attempts left: it ends with 1 when trials are missing or
    /// copies disagree.
    ///
    /// # Errors
    /// A path cannot stand in a script.
    pub fn merge_script(&self) -> Result<String, ScatterError> {
        let options = [
            option("job-name", &self.job_name("-merge")),
            self.output("merge-%j.log")?,
            "#SBATCH --cpus-per-task=1\n".to_owned(),
        ];
        Ok(format!(
            "#!/bin/sh\n\
             # Merges what the attempts recorded and writes tables, figures and report. May be run again at any\n\
             # time, by sbatch or by sh.\n\
             {options}{common}\n\
             {paths}\
             set -- \"$base\"/{ATTEMPTS}/*\n\
             [ -d \"$1\" ] || {{\n\
             \x20 echo \"no task has left anything in $base/{ATTEMPTS}; see $base/{LOGS}\" >&2\n\
             \x20 exit 1\n\
             }}\n\
             exec \"$program\" tabulate \"$@\" --into \"$base\" --require complete\n",
            options = options.concat(),
            common = self.common()?,
            paths = self.paths([("program", &self.program), ("base", &self.folder)])?,
        ))
    }

    /// Writes the folder: scripts, a copy of the plan, and empty folders for logs and attempts (a job
    /// whose log has no folder fails without a word).
    ///
    /// # Errors
    /// The folder is not empty, cannot be written, or a path cannot stand in a script; then nothing is
    /// written.
    pub fn write(&self, plan_text: &str) -> Result<(), ScatterError> {
        let files = [
            (ARRAY.to_owned(), self.array_script()?),
            (MERGE.to_owned(), self.merge_script()?),
            (COPY.to_owned(), plan_text.to_owned()),
        ];
        let refused = |error: std::io::Error| FolderError::System {
            path: self.folder.display().to_string(),
            reason: error.to_string(),
        };
        match std::fs::read_dir(&self.folder) {
            Ok(mut entries) => {
                if entries.next().is_some() {
                    return Err(ScatterError::NotEmpty(self.folder.display().to_string()));
                }
            }
            Err(error) if error.kind() == ErrorKind::NotFound => {}
            Err(error) => return Err(refused(error).into()),
        }
        for name in [LOGS, ATTEMPTS] {
            std::fs::create_dir_all(self.folder.join(name)).map_err(refused)?;
        }
        Ok(write_files(&self.folder, &files)?)
    }

    /// Names a job after the plan, in characters that need no quoting.
    fn job_name(&self, suffix: &str) -> String {
        let stem = self.plan.file_stem().unwrap_or_default().to_string_lossy();
        let plain = |c: char| if c.is_ascii_alphanumeric() || "-_.".contains(c) { c } else { '-' };
        format!("rankassay-{}{suffix}", stem.chars().map(plain).collect::<String>())
    }

    /// Writes the options that both jobs share.
    fn common(&self) -> Result<String, ScatterError> {
        let folder = option("chdir", plain_path(&self.folder)?);
        Ok(format!("{folder}#SBATCH --ntasks=1\n{}", self.demand.lines()))
    }

    /// Names the file that a job prints to. Slurm replaces what follows a `%` in it, unless that is doubled,
    /// and nothing at all where there is a backslash.
    fn output(&self, name: &str) -> Result<String, ScatterError> {
        let folder = plain_path(&self.folder)?;
        if folder.contains('\\') {
            return Err(ScatterError::Backslash(self.folder.clone()));
        }
        Ok(option("output", &format!("{}/{LOGS}/{name}", folder.replace('%', "%%"))))
    }

    fn paths<const N: usize>(&self, paths: [(&str, &PathBuf); N]) -> Result<String, ScatterError> {
        let line = |(name, path): (&str, &PathBuf)| {
            Ok(format!("{name}={}\n", shell_word(plain_path(path)?)))
        };
        paths.into_iter().map(line).collect()
    }
}

fn plain_path(path: &Path) -> Result<&str, ScatterError> {
    let text = path.to_str().filter(|text| !text.chars().any(char::is_control));
    text.ok_or_else(|| ScatterError::Path(path.to_owned()))
}

/// Quotes a word for a POSIX shell when it needs it.
pub fn shell_word(word: &str) -> String {
    let plain = |c: char| c.is_ascii_alphanumeric() || "-_./=+,:@%".contains(c);
    if !word.is_empty() && word.chars().all(plain) {
        word.to_owned()
    } else {
        format!("'{}'", word.replace('\'', "'\\''"))
    }
}

/// Writes an option line of a job script, in whose quotes `sbatch` takes a sign after a backslash as it is.
fn option(name: &str, value: &str) -> String {
    let plain = |c: char| c.is_ascii_alphanumeric() || "-_./=+,:@%".contains(c);
    if value.chars().all(plain) {
        return format!("#SBATCH --{name}={value}\n");
    }
    let value = value.replace('\\', "\\\\").replace('"', "\\\"");
    format!("#SBATCH --{name}=\"{value}\"\n")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn scatter() -> Scatter {
        Scatter {
            program: PathBuf::from("/opt/rankassay"),
            plan: PathBuf::from("/home/ann/it's a \"plan\".toml"),
            folder: PathBuf::from("/scratch/ann/50% $HOME `x`"),
            division: Division { instances: 9, parts: 8 },
            demand: Demand {
                jobs: 4,
                partition: Some("long".to_owned()),
                time: Some("1-00:00:00".to_owned()),
                account: Some("a b".to_owned()),
                extra: vec!["--mem=4G".to_owned()],
            },
        }
    }

    #[test]
    fn the_array_script_holds_what_was_asked_for() {
        let script = scatter().array_script().unwrap();
        assert!(script.starts_with("#!/bin/sh\n"));
        for line in [
            "#SBATCH --job-name=rankassay-it-s-a--plan-",
            "#SBATCH --array=1-8",
            "#SBATCH --output=\"/scratch/ann/50%% $HOME `x`/logs/task-%a-%A.log\"",
            "#SBATCH --requeue",
            "#SBATCH --cpus-per-task=4",
            "#SBATCH --chdir=\"/scratch/ann/50% $HOME `x`\"",
            "#SBATCH --ntasks=1",
            "#SBATCH --partition=long",
            "#SBATCH --time=1-00:00:00",
            "#SBATCH --account=\"a b\"",
            "#SBATCH --mem=4G",
            "program=/opt/rankassay",
            "plan='/home/ann/it'\\''s a \"plan\".toml'",
            "base='/scratch/ann/50% $HOME `x`'",
            "\"$program\" run \"$plan\" --shard \"$task/8\" --into \"$attempt\" --jobs \"${SLURM_CPUS_PER_TASK:-4}\" &",
        ] {
            assert!(script.lines().any(|found| found == line), "no line {line} in\n{script}");
        }
        let (options, code) = script.split_once("\nprogram=").unwrap();
        assert!(options.lines().all(|line| line.is_empty() || line.starts_with('#')));
        assert!(
            !code.contains("#SBATCH"),
            "sbatch stops reading options at the first command:\n{script}"
        );
    }

    #[test]
    fn the_merge_script_holds_what_was_asked_for() {
        let script = scatter().merge_script().unwrap();
        for line in [
            "#SBATCH --job-name=rankassay-it-s-a--plan--merge",
            "#SBATCH --output=\"/scratch/ann/50%% $HOME `x`/logs/merge-%j.log\"",
            "#SBATCH --cpus-per-task=1",
            "#SBATCH --partition=long",
            "#SBATCH --mem=4G",
            "set -- \"$base\"/attempts/*",
            "exec \"$program\" tabulate \"$@\" --into \"$base\" --require complete",
        ] {
            assert!(script.lines().any(|found| found == line), "no line {line} in\n{script}");
        }
        assert!(!script.contains("--array"), "{script}");
    }

    #[test]
    fn the_plainest_demand_leaves_the_rest_to_slurm() {
        let demand =
            Demand { jobs: 1, partition: None, time: None, account: None, extra: Vec::new() };
        let script = Scatter { demand, ..scatter() }.array_script().unwrap();
        for absent in ["--partition", "--time", "--account", "--mem"] {
            assert!(!script.contains(absent), "{absent} in\n{script}");
        }
    }

    #[test]
    fn what_cannot_stand_in_a_script_is_refused() {
        let refused = |change: fn(&mut Demand)| {
            let mut demand = scatter().demand;
            change(&mut demand);
            demand.check().expect_err("it is refused").to_string()
        };
        assert!(scatter().demand.check().is_ok());
        for (change, words) in [
            (
                (|demand| demand.partition = Some("a\nb".to_owned())) as fn(&mut Demand),
                "--partition",
            ),
            (|demand| demand.time = Some(String::new()), "--time: \"\" is empty"),
            (|demand| demand.account = Some(" ".to_owned()), "--account"),
            (|demand| demand.extra.push("mem=4G".to_owned()), "expected one such as --mem=4G"),
            (|demand| demand.extra.push("--mem=1G\nrm".to_owned()), "line break"),
            (|demand| demand.extra.push("--mem=1G --array=1-3".to_owned()), "set --array"),
            (|demand| demand.extra.push("-o /dev/null".to_owned()), "set -o"),
            (|demand| demand.extra.push("-a1-3".to_owned()), "set -a"),
        ] {
            let said = refused(change);
            assert!(said.contains(words), "{said} does not say {words}");
        }
        for fine in ["--array-like=1", "--exclusive", "--mail-user=a@b.org --mail-type=END"] {
            let mut demand = scatter().demand;
            demand.extra = vec![fine.to_owned()];
            assert!(demand.check().is_ok(), "{fine}");
        }
        for (folder, words) in [("/a\nb", "control character"), ("/a\\b", "backslash")] {
            let broken = Scatter { folder: PathBuf::from(folder), ..scatter() };
            for script in [broken.array_script(), broken.merge_script()] {
                let said = script.expect_err("it is refused").to_string();
                assert!(said.contains(words), "{said} does not say {words}");
            }
        }
    }

    #[test]
    fn values_are_quoted_for_sbatch_when_they_need_it() {
        let lines = ["a/b%1", "a b", "it's", "a\"b\\"].map(|value| option("x", value));
        let expected = ["a/b%1", "\"a b\"", "\"it's\"", r#""a\"b\\""#];
        assert_eq!(lines, expected.map(|value| format!("#SBATCH --x={value}\n")));
    }

    #[test]
    fn words_are_quoted_for_a_shell_when_they_need_it() {
        let words = ["runs/quick-1", "tight* alm", "it's", ""].map(shell_word);
        assert_eq!(words, ["runs/quick-1", "'tight* alm'", "'it'\\''s'", "''"]);
    }
}
