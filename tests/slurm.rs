//! Plans on a cluster: the folder that `rankassay scatter` writes, its scripts run by hand and through a
//! stand-in for `sbatch`, and both on a real Slurm of several nodes on this machine, whose tasks are killed,
//! requeued, lost with their node, and run twice at once.
//!
//! The real one needs root and the programs munged, slurmctld, slurmd and sbatch (Debian packages slurm-wlm and
//! munge). Where they are missing these tests say that they skip, unless the environment variable
//! `RANKASSAY_REQUIRE` contains the word `slurm`: then they fail. The scripts beside this file start and
//! stop the cluster.
#![cfg(unix)]

use std::ffi::OsStr;
use std::net::TcpListener;
use std::os::unix::fs::{MetadataExt, PermissionsExt};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Output, Stdio};
use std::time::{Duration, Instant};

use nix::sys::signal::{Signal, kill};
use nix::unistd::Pid;

/// Longest time that anything is waited for: far beyond what an idle machine needs.
const PATIENCE: Duration = Duration::from_secs(150);

/// Instances of the plan.
const INSTANCES: usize = 10;

/// Trials of each instance.
const METHODS: usize = 3;

/// The first method is quick, the second holds its trial open until there is a file `gate` beside the
/// plan or a token for it alone, the third dies, so that the run has a trial that cannot be judged.
const PLAN: &str = r#"
title = "Ten instances, three methods"
seed = 11
[budget]
wall = "600s"
[[family]]
name = "tight-unique"
order = 8
count = 10
[[method]]
name = "factored-alm"
[[method]]
label = "patient"
command = ["sh", "patient.sh"]
[[method]]
label = "dying"
command = ["sh", "-c", "echo gone >&2; exit 9"]
"#;

/// Started in the plan's folder with the trial's own folder as its argument.
const PATIENT: &str = r#"
while [ ! -e gate ] && [ -d "$1" ]; do
  rmdir token 2>/dev/null && break
  sleep 0.1
done
sleep 0.2
echo '{"version": 1, "blocks": [{"factor": [[1], [1], [1], [1], [1], [1], [1], [1]]}]}' > "$1/answer.json"
"#;

fn rankassay() -> Command {
    Command::new(env!("CARGO_BIN_EXE_rankassay"))
}

/// Runs a command and returns its exit code, standard output and standard error.
fn ended(command: &mut Command) -> (Option<i32>, String, String) {
    let Output { status, stdout, stderr } = command.output().unwrap();
    let text = |bytes: Vec<u8>| String::from_utf8(bytes).unwrap();
    (status.code(), text(stdout), text(stderr))
}

/// Waits until something is there.
#[track_caller]
fn until<T>(what: &str, mut look: impl FnMut() -> Option<T>) -> T {
    let start = Instant::now();
    loop {
        if let Some(found) = look() {
            return found;
        }
        assert!(start.elapsed() < PATIENCE, "waited {PATIENCE:?} in vain until {what}");
        std::thread::sleep(Duration::from_millis(100));
    }
}

/// A plan in a folder of its own, and where it is scattered to.
struct Site {
    home: tempfile::TempDir,
}

impl Site {
    /// Writes the plan into a folder whose path needs quoting.
    fn new() -> Self {
        let site = Site { home: tempfile::tempdir().unwrap() };
        std::fs::create_dir_all(site.plans()).unwrap();
        std::fs::write(site.plan(), PLAN).unwrap();
        std::fs::write(site.plans().join("patient.sh"), PATIENT).unwrap();
        site
    }

    fn plans(&self) -> PathBuf {
        self.home.path().join("ann's \"50% $HOME\" plans")
    }

    fn plan(&self) -> PathBuf {
        self.plans().join("three methods.toml")
    }

    /// Folder number `at` to scatter to.
    fn base(&self, at: usize) -> PathBuf {
        self.plans().join(format!("runs `id` %j {at}"))
    }

    fn open_gate(&self) {
        std::fs::write(self.plans().join("gate"), "").unwrap();
    }

    fn shut_gate(&self) {
        std::fs::remove_file(self.plans().join("gate")).unwrap();
    }

    /// Runs the plan on this machine alone and returns its folder.
    fn alone(&self) -> PathBuf {
        let folder = self.home.path().join("alone");
        let (code, _, said) =
            ended(rankassay().arg("run").arg(self.plan()).arg("--into").arg(&folder));
        assert_eq!(code, Some(3), "the third method dies: {said}");
        folder
    }

    /// Makes a command that scatters the plan to folder number `at`.
    fn scatter(&self, at: usize, options: &[&str]) -> Command {
        let mut command = rankassay();
        command.arg("scatter").arg(self.plan()).arg("--into").arg(self.base(at)).args(options);
        command
    }
}

impl Drop for Site {
    /// Lets methods go that still wait.
    fn drop(&mut self) {
        let _ = std::fs::write(self.plans().join("gate"), "");
    }
}

/// Reads the tables without times and memory: name and text.
fn stable_tables(folder: &Path) -> Vec<(String, String)> {
    let entries = std::fs::read_dir(folder.join("tables")).unwrap();
    let mut tables: Vec<(String, String)> = entries
        .map(|entry| entry.unwrap().path())
        .filter(|path| path.to_str().unwrap().ends_with("-stable.csv"))
        .map(|path| {
            let name = path.file_name().unwrap().to_str().unwrap().to_owned();
            (name, std::fs::read_to_string(path).unwrap())
        })
        .collect();
    tables.sort();
    tables
}

#[track_caller]
fn assert_same_tables(base: &Path, alone: &Path) {
    let (found, expected) = (stable_tables(base), stable_tables(alone));
    assert!(expected.len() >= 5, "a run writes its tables");
    let names = |tables: &[(String, String)]| -> Vec<String> {
        tables.iter().map(|(name, _)| name.clone()).collect()
    };
    assert_eq!(names(&found), names(&expected));
    for ((name, found), (_, expected)) in found.iter().zip(&expected) {
        assert_eq!(found, expected, "{name} of {}", base.display());
    }
}

/// Lists the folders of the attempts at a task, by the number of the job and of its restarts.
fn attempts(base: &Path, task: usize) -> Vec<PathBuf> {
    let Ok(entries) = std::fs::read_dir(base.join("attempts")) else { return Vec::new() };
    let head = format!("task-{task}-");
    let mut found: Vec<(Vec<u64>, PathBuf)> = entries
        .filter_map(|entry| {
            let path = entry.unwrap().path();
            let rest = path.file_name()?.to_str()?.strip_prefix(&head)?;
            let numbers = rest.split('-').take(2).map(|number| number.parse().unwrap());
            Some((numbers.collect(), path))
        })
        .collect();
    found.sort();
    found.into_iter().map(|(_, path)| path).collect()
}

/// Counts the trials that an attempt has recorded.
fn recorded(attempt: &Path) -> usize {
    let text = std::fs::read_to_string(attempt.join("journal.jsonl")).unwrap_or_default();
    text.lines().filter(|line| line.contains("\"verdict\"")).count()
}

/// Reads everything that the jobs whose log starts with `name` printed.
fn log(base: &Path, name: &str) -> String {
    let entries = std::fs::read_dir(base.join("logs")).unwrap();
    let mut paths: Vec<PathBuf> = entries.map(|entry| entry.unwrap().path()).collect();
    paths.retain(|path| path.file_name().unwrap().to_str().unwrap().starts_with(name));
    paths.sort();
    paths.iter().map(|path| std::fs::read_to_string(path).unwrap()).collect()
}

/// Finds the process of `rankassay run` that writes to `attempt`.
fn process_of(attempt: &Path) -> Option<Pid> {
    let wanted = attempt.as_os_str().as_encoded_bytes();
    for entry in std::fs::read_dir("/proc").unwrap() {
        let path = entry.unwrap().path();
        let Some(pid) = path.file_name().and_then(OsStr::to_str).and_then(|name| name.parse().ok())
        else {
            continue;
        };
        let words = std::fs::read(path.join("cmdline")).unwrap_or_default();
        if words.split(|byte| *byte == 0).any(|word| word == wanted) {
            return Some(Pid::from_raw(pid));
        }
    }
    None
}

// ---- Without a cluster ----------------------------------------------------------------------------

/// Puts programs of ours, name and shell text, into a folder.
fn tools(folder: &Path, programs: &[(&str, &str)]) -> PathBuf {
    std::fs::create_dir_all(folder).unwrap();
    for (name, text) in programs {
        let path = folder.join(name);
        std::fs::write(&path, format!("#!/bin/sh\n{text}\n")).unwrap();
        std::fs::set_permissions(&path, std::fs::Permissions::from_mode(0o755)).unwrap();
    }
    folder.to_owned()
}

#[test]
fn the_folder_is_written_and_the_way_is_said_where_there_is_no_sbatch() {
    let site = Site::new();
    let nowhere = tools(&site.home.path().join("bin"), &[]);
    let (code, out, said) =
        ended(site.scatter(0, &["--engine", "slurm", "--tasks", "4"]).env("PATH", &nowhere));
    assert_eq!((code, said.as_str()), (Some(0), ""), "{out}");
    assert!(out.starts_with("4 tasks for 10 instances are written; nothing is submitted"), "{out}");
    assert!(out.contains("`sbatch` is not on the path"), "{out}");
    let base = site.base(0);
    for name in ["array.sh", "merge.sh"] {
        let word = format!("'{}'", base.join(name).display().to_string().replace('\'', "'\\''"));
        assert!(out.contains(&word), "{word} is not in {out}");
    }
    assert!(out.contains(&format!("Report:  {}", base.join("report.html").display())), "{out}");
    assert_eq!(std::fs::read_to_string(base.join("plan.toml")).unwrap(), PLAN);
    assert!(base.join("logs").is_dir() && base.join("attempts").is_dir());
    let script = std::fs::read_to_string(base.join("array.sh")).unwrap();
    assert!(script.contains("\n#SBATCH --array=1-4\n"), "{script}");

    // What is there is not written over.
    let (code, _, said) = ended(&mut site.scatter(0, &["--submit", "never"]));
    assert_eq!(code, Some(2));
    assert!(said.contains("is not empty"), "{said}");

    let (code, _, said) = ended(site.scatter(1, &["--submit", "always"]).env("PATH", &nowhere));
    assert_eq!(code, Some(2));
    assert!(said.contains("`sbatch` is not on the path; nothing is written"), "{said}");
    assert!(!site.base(1).exists());
}

#[test]
fn without_a_folder_a_fresh_one_is_taken() {
    let site = Site::new();
    for at in 1..=2 {
        let mut command = rankassay();
        command.args(["scatter", "three methods.toml", "--submit", "never", "--quiet"]);
        let (code, out, said) = ended(command.current_dir(site.plans()));
        assert_eq!((code, out.as_str(), said.as_str()), (Some(0), "", ""));
        let folder = site.plans().join(format!("runs/three methods-scattered-{at}"));
        let script = std::fs::read_to_string(folder.join("array.sh")).unwrap();
        assert!(script.contains("\n#SBATCH --array=1-10\n"), "one task an instance:\n{script}");
        assert!(script.contains("plan='/"), "paths are absolute:\n{script}");
    }
}

#[test]
fn what_is_wrong_is_said_before_anything_is_written() {
    let site = Site::new();
    let broken = |from: &str, to: &str| {
        assert!(PLAN.contains(from));
        std::fs::write(site.plan(), PLAN.replace(from, to)).unwrap();
        let (code, _, scattered) = ended(&mut site.scatter(0, &["--submit", "never"]));
        let mut run = rankassay();
        let (run_code, _, ran) =
            ended(run.arg("run").arg(site.plan()).arg("--into").arg(site.base(0)));
        assert_eq!((code, run_code), (Some(2), Some(2)), "{scattered}{ran}");
        assert_eq!(scattered, ran, "errors are those of a run");
        scattered
    };
    assert!(broken("factored-alm", "factored-aml").contains("factored-alm"));
    // Found only by planting.
    assert!(broken("order = 8", "order = 1").contains("order"));
    std::fs::write(site.plan(), PLAN).unwrap();
    for (options, words) in [
        (&["--tasks", "0"][..], "--tasks"),
        (&["--tasks", "1001"], "--tasks"),
        (&["--engine", "other"], "possible values: slurm"),
        (&["--jobs", "0"], "--jobs"),
        (&["--partition", ""], "--partition"),
        (&["--time", "1\n2"], "--time"),
        (&["--extra", "mem"], "expected one such as --mem=4G"),
        (&["--extra", "#SBATCH --array=1-2"], "set --array themselves"),
    ] {
        let (code, _, said) = ended(&mut site.scatter(0, options));
        assert_eq!(code, Some(2), "{options:?}: {said}");
        assert!(said.contains(words), "{options:?}: {said}");
    }
    let mut lost = rankassay();
    let (code, _, said) =
        ended(lost.args(["scatter", "no-such-plan.toml", "--into"]).arg(site.base(0)));
    assert_eq!(code, Some(2));
    assert!(said.contains("no-such-plan.toml"), "{said}");
    assert!(!site.base(0).exists(), "nothing is written");
}

/// Notes its arguments, one a line and an empty line after them, and prints the next job id.
const NOTING: &str = r#"
printf '%s\n' "$@" '' >> "$0.notes"
count=$(grep -c '^$' "$0.notes")
echo "a warning that is no id"
echo "$((40 + count));east"
"#;

#[test]
fn both_jobs_are_submitted_and_what_to_watch_is_said() {
    let site = Site::new();
    let bin = tools(&site.home.path().join("bin"), &[("sbatch", NOTING)]);
    let path = format!("{}:/usr/bin:/bin", bin.display());
    let options = ["--tasks", "64", "--jobs", "3", "--partition", "long", "--time", "2:00:00"];
    let (code, out, said) = ended(
        site.scatter(0, &options)
            .args(["--account", "sea", "--extra", "--mem=4G"])
            .env("PATH", path),
    );
    assert_eq!(code, Some(0), "{said}");
    assert!(said.contains("note: 10 tasks instead of 64"), "{said}");
    let base = site.base(0);
    let notes = std::fs::read_to_string(bin.join("sbatch.notes")).unwrap();
    let (array, merge) = (base.join("array.sh"), base.join("merge.sh"));
    let expected = format!(
        "--parsable\n{}\n\n--parsable\n--dependency=afterany:41\n{}\n\n",
        array.display(),
        merge.display()
    );
    assert_eq!(notes, expected);
    for words in [
        "Array:   job 41, 10 tasks for 10 instances",
        "Merge:   job 42",
        "squeue --jobs=41,42",
        &format!("Logs:    {}", base.join("logs").display()),
        &format!("Report:  {}", base.join("report.html").display()),
    ] {
        assert!(out.contains(words), "{words} is not in {out}");
    }
    for script in [array, merge] {
        let text = std::fs::read_to_string(script).unwrap();
        for line in ["--partition=long", "--time=2:00:00", "--account=sea", "--mem=4G"] {
            assert!(text.contains(&format!("\n#SBATCH {line}\n")), "{line} is not in {text}");
        }
    }
}

#[test]
fn an_sbatch_that_hangs_refuses_or_babbles_is_told_of() {
    let site = Site::new();
    let second = r#"case "$*" in *--dependency*) echo 'sbatch: error: no more jobs' >&2; exit 1;; esac; echo 7"#;
    for (at, (text, expected)) in [
        (
            "exec sleep 60",
            &["gave no answer within 1 s", "slurmctld", "squeue --me", "by hand:"][..],
        ),
        ("echo 'sbatch: error: invalid partition' >&2; exit 1", &["invalid partition", "by hand:"]),
        ("echo Submitted batch job", &["printed no job id", "by hand:"]),
        (second, &["no more jobs", "submitted as 7", "--dependency=afterany:7"]),
    ]
    .into_iter()
    .enumerate()
    {
        let bin = tools(&site.home.path().join(format!("bin-{at}")), &[("sbatch", text)]);
        let path = format!("{}:/usr/bin:/bin", bin.display());
        let start = Instant::now();
        let (code, out, said) = ended(site.scatter(at, &["--patience", "1"]).env("PATH", path));
        assert_eq!((code, out.as_str()), (Some(2), ""), "{said}");
        assert!(start.elapsed() < Duration::from_secs(30), "{text}");
        for words in expected {
            assert!(said.contains(words), "{words} is not in {said}");
        }
        assert!(site.base(at).join("array.sh").is_file(), "the scripts are there");
    }
}

/// Starts a task as Slurm would.
fn by_hand(base: &Path, task: usize) -> Command {
    let mut command = Command::new("sh");
    command.arg(base.join("array.sh"));
    command.env("SLURM_ARRAY_TASK_ID", task.to_string()).env("SLURM_ARRAY_JOB_ID", "5");
    command
}

#[test]
fn the_scripts_run_by_hand_give_the_tables_of_one_machine() {
    let site = Site::new();
    site.open_gate();
    let alone = site.alone();
    let (code, _, said) = ended(&mut site.scatter(0, &["--tasks", "3", "--submit", "never"]));
    assert_eq!(code, Some(0), "{said}");
    let base = site.base(0);
    let merge = || ended(Command::new("sh").arg(base.join("merge.sh")));

    let (code, _, said) = merge();
    assert_eq!(code, Some(1));
    assert!(said.contains("no task has left anything"), "{said}");
    let (code, _, said) = ended(Command::new("sh").arg(base.join("array.sh")));
    assert!(code != Some(0) && said.contains("submit this script by sbatch"), "{said}");

    for task in [3, 1] {
        let (code, _, said) = ended(&mut by_hand(&base, task));
        assert_eq!(code, Some(0), "a trial that cannot be judged fails no task: {said}");
        assert!(said.contains("crashed"), "{said}");
    }
    let (code, _, said) = merge();
    assert_eq!(code, Some(1), "{said}");
    assert!(said.contains("missing") && said.contains("-patient"), "{said}");

    // A request to end reaches the run, which keeps what it has.
    site.shut_gate();
    let token = site.plans().join("token");
    std::fs::create_dir(&token).unwrap();
    let mut task = by_hand(&base, 2).stderr(Stdio::null()).stdout(Stdio::null()).spawn().unwrap();
    let attempt = until("task 2 records", || {
        attempts(&base, 2).into_iter().find(|attempt| recorded(attempt) > 0 && !token.exists())
    });
    kill(Pid::from_raw(task.id() as i32), Signal::SIGTERM).unwrap();
    let code = until("the task ends", || task.try_wait().unwrap()).code();
    assert_eq!(code, Some(130));
    let kept = recorded(&attempt);
    assert!((1..3 * METHODS).contains(&kept), "{kept} trials are kept");
    site.open_gate();
    assert_eq!(merge().0, Some(1), "it is not whole");

    // Two copies of one task, and one more of another.
    let mut copies: Vec<Child> = (0..2)
        .map(|_| by_hand(&base, 2).stdout(Stdio::null()).stderr(Stdio::null()).spawn().unwrap())
        .collect();
    for copy in &mut copies {
        assert_eq!(copy.wait().unwrap().code(), Some(0));
    }
    assert_eq!(ended(&mut by_hand(&base, 1)).0, Some(0));
    assert_eq!(attempts(&base, 2).len(), 3);
    let (code, _, said) = merge();
    assert_eq!(code, Some(0), "{said}");
    assert!(said.contains("recorded more than once with the same outcome"), "{said}");
    assert_same_tables(&base, &alone);
    assert!(base.join("report.html").is_file());

    // A plan that was changed is not mixed with what it was.
    std::fs::write(site.plan(), PLAN.replace("seed = 11", "seed = 12")).unwrap();
    let (code, _, said) = ended(&mut by_hand(&base, 1));
    assert_eq!(code, Some(2));
    assert!(said.contains("is not what was scattered"), "{said}");
}

// ---- On a real Slurm ------------------------------------------------------------------------------

/// A Slurm of several nodes on this machine, stopped when it is dropped.
struct Cluster {
    state: tempfile::TempDir,
}

/// Runs one of the scripts beside this file.
fn script(name: &str) -> Command {
    let mut command = Command::new("sh");
    command.arg(Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/slurm").join(name));
    // Debian keeps daemons where only root looks.
    let path = std::env::var("PATH").unwrap_or_default();
    command.env("PATH", format!("{path}:/usr/sbin:/sbin")).env_remove("SLURM_CONF");
    command
}

/// Says what the machine lacks for a Slurm of its own, if anything.
fn lacking() -> Option<String> {
    // The owner of its folder is the user of this process.
    if !std::fs::metadata("/proc/self").is_ok_and(|folder| folder.uid() == 0) {
        return Some("root".to_owned());
    }
    let path = format!("{}:/usr/sbin:/sbin", std::env::var("PATH").unwrap_or_default());
    let absent =
        |name: &&str| !path.split(':').any(|folder| Path::new(folder).join(name).is_file());
    let programs = ["munged", "slurmctld", "slurmd", "sbatch", "squeue", "scontrol", "scancel"];
    let absent: Vec<&str> = programs.into_iter().filter(absent).collect();
    (!absent.is_empty()).then(|| absent.join(", "))
}

impl Cluster {
    /// Starts a cluster of two nodes that claim four cores each; nothing, with a message, where that cannot
    /// be.
    #[allow(clippy::print_stderr, reason = "says that it skips")]
    fn start() -> Option<Cluster> {
        if let Some(lacking) = lacking() {
            let required = std::env::var("RANKASSAY_REQUIRE").unwrap_or_default();
            assert!(
                !required.split([',', ' ']).any(|word| word == "slurm"),
                "RANKASSAY_REQUIRE asks for slurm, but this lacks: {lacking}"
            );
            eprintln!("skipped: no Slurm on this machine, for lack of {lacking}");
            return None;
        }
        // The paths of sockets are short, so that the folder is not where TMPDIR may say.
        let state = tempfile::Builder::new().prefix("slurm-").tempdir_in("/tmp").unwrap();
        let cluster = Cluster { state };
        let held: Vec<TcpListener> =
            (0..3).map(|_| TcpListener::bind(("127.0.0.1", 0)).unwrap()).collect();
        let ports: Vec<String> =
            held.iter().map(|held| held.local_addr().unwrap().port().to_string()).collect();
        drop(held);
        let mut start = script("start.sh");
        let (code, out, said) =
            ended(start.arg(cluster.state.path()).args(&ports).env("CORES", "4"));
        assert_eq!(code, Some(0), "{out}{said}");
        Some(cluster)
    }

    /// Makes a command that is a client of this cluster.
    fn client(&self, program: &str) -> Command {
        let mut command = Command::new("timeout");
        command.args(["60", program]).env("SLURM_CONF", self.state.path().join("slurm.conf"));
        command
    }

    /// Runs a client of this cluster and returns what it prints.
    #[track_caller]
    fn ask(&self, program: &str, words: &[&OsStr]) -> String {
        let (code, out, said) = ended(self.client(program).args(words));
        assert_eq!(code, Some(0), "{program} {words:?}: {out}{said}");
        out.trim().to_owned()
    }

    /// Scatters the plan and returns the ids of the array and of the merge.
    #[track_caller]
    fn scatter(&self, site: &Site, at: usize, tasks: usize) -> (String, String) {
        let tasks = tasks.to_string();
        let mut command = site.scatter(at, &["--tasks", &tasks, "--submit", "always"]);
        command.env("SLURM_CONF", self.state.path().join("slurm.conf"));
        let (code, out, said) = ended(&mut command);
        assert_eq!(code, Some(0), "{said}");
        let id = |head: &str| -> String {
            let rest = out.split(head).nth(1).unwrap_or_else(|| panic!("no {head} in {out}"));
            rest.trim_start().chars().take_while(char::is_ascii_digit).collect()
        };
        (id("Array:   job"), id("Merge:   job"))
    }

    /// Submits a script of a scattered plan with further options.
    #[track_caller]
    fn submit(&self, base: &Path, name: &str, option: &str) -> String {
        let script = base.join(name);
        self.ask("sbatch", &["--parsable".as_ref(), option.as_ref(), script.as_os_str()])
    }

    /// Looks a field of a job, or of a task of an array, up.
    #[track_caller]
    fn field(&self, job: &str, name: &str) -> String {
        let text = self.ask("scontrol", &["-o", "show", "job", job].map(OsStr::new));
        let head = format!("{name}=");
        let found = text.split_whitespace().find_map(|word| word.strip_prefix(&head));
        found.unwrap_or_else(|| panic!("no {name} in {text}")).to_owned()
    }

    /// Waits for the end of a job and returns its state and exit code, such as `FAILED 1:0`.
    #[track_caller]
    fn end_of(&self, job: &str) -> String {
        until(&format!("job {job} ends"), || {
            let state = self.field(job, "JobState");
            let open = ["PENDING", "CONFIGURING", "RUNNING", "COMPLETING", "REQUEUED"];
            (!open.contains(&state.as_str()))
                .then(|| format!("{state} {}", self.field(job, "ExitCode")))
        })
    }

    /// Waits until each of the tasks has one more attempt under way than in `before`, and returns all attempts
    /// at them.
    #[track_caller]
    fn under_way(&self, base: &Path, tasks: &[usize], before: usize) -> Vec<PathBuf> {
        let begun = |task: &usize| {
            until(&format!("task {task} runs for the {}. time", before + 1), || {
                let mut running: Vec<PathBuf> = attempts(base, *task);
                running.retain(|attempt| attempt.join("journal.jsonl").is_file());
                (running.len() > before).then_some(running)
            })
        };
        tasks.iter().flat_map(begun).collect()
    }

    /// Makes a node fail.
    #[track_caller]
    fn fail(&self, node: &str, how: &str) {
        let (code, out, said) = ended(script("node.sh").arg(self.state.path()).args([node, how]));
        assert_eq!(code, Some(0), "{out}{said}");
    }
}

impl Drop for Cluster {
    fn drop(&mut self) {
        // Whatever goes wrong here must not hide why a test failed.
        let _ = script("stop.sh").arg(self.state.path()).output();
    }
}

#[test]
fn an_array_on_slurm_and_killed_and_requeued_tasks_give_the_tables_of_one_machine() {
    let Some(cluster) = Cluster::start() else { return };
    let site = Site::new();
    site.open_gate();
    let alone = site.alone();

    // The plain way.
    let (array, merge) = cluster.scatter(&site, 0, 4);
    assert_eq!(cluster.end_of(&merge), "COMPLETED 0:0", "{}", log(&site.base(0), "merge"));
    for task in 1..=4 {
        assert_eq!(cluster.end_of(&format!("{array}_{task}")), "COMPLETED 0:0");
        assert_eq!(attempts(&site.base(0), task).len(), 1);
        assert!(log(&site.base(0), &format!("task-{task}-")).contains("crashed"));
    }
    assert_same_tables(&site.base(0), &alone);

    // The process of one task is killed, another task is put back into the queue, a third is asked to end.
    site.shut_gate();
    let base = site.base(1);
    let (array, merge) = cluster.scatter(&site, 1, 4);
    let running = cluster.under_way(&base, &[1, 2, 3, 4], 0);
    kill(process_of(&running[1]).expect("task 2 runs"), Signal::SIGKILL).unwrap();
    cluster.ask("scontrol", &["requeue", &format!("{array}_3")].map(OsStr::new));
    let fourth = format!("{array}_4");
    cluster.ask("scancel", &["--signal=TERM", "--batch", &fourth].map(OsStr::new));
    assert_eq!(cluster.end_of(&format!("{array}_2")), "FAILED 137:0");
    assert_eq!(cluster.end_of(&fourth), "FAILED 130:0");
    cluster.under_way(&base, &[3], 1);
    assert!(attempts(&base, 3)[1].to_str().unwrap().contains(&format!("task-3-{array}-1-")));
    site.open_gate();
    assert_eq!(cluster.end_of(&merge), "FAILED 1:0", "{}", log(&base, "merge"));
    assert_eq!(cluster.end_of(&format!("{array}_3")), "COMPLETED 0:0");
    let said = log(&base, "merge");
    let missing: Vec<usize> = said
        .lines()
        .filter(|line| line.contains("are missing"))
        .filter_map(|line| line.strip_prefix("warning: ")?.split(' ').next()?.parse().ok())
        .collect();
    assert!(said.contains("-patient"), "trials are named: {said}");

    // What is missing is run again, as the message of `scatter` says.
    let again = cluster.submit(&base, "array.sh", "--array=2,4");
    let merge = cluster.submit(&base, "merge.sh", &format!("--dependency=afterany:{again}"));
    assert_eq!(cluster.end_of(&merge), "COMPLETED 0:0", "{}", log(&base, "merge"));
    assert_same_tables(&base, &alone);
    // What the first attempts had not recorded is what was missing.
    let lost = |task: usize| match attempts(&base, task).as_slice() {
        [first, second] => recorded(second) - recorded(first),
        other => panic!("two attempts at task {task}: {other:?}"),
    };
    assert_eq!(missing, [lost(2) + lost(4)], "{said}");
}

/// Scatters the plan with its gate shut, waits until all tasks run, and returns the array, the merge, and the
/// tasks of node n2.
#[track_caller]
fn spread(cluster: &Cluster, site: &Site) -> (String, String, Vec<usize>) {
    let (array, merge) = cluster.scatter(site, 0, 4);
    cluster.under_way(&site.base(0), &[1, 2, 3, 4], 0);
    let there = |task: &usize| cluster.field(&format!("{array}_{task}"), "NodeList") == "n2";
    let tasks: Vec<usize> = (1..=4).filter(there).collect();
    assert!((1..=3).contains(&tasks.len()), "the tasks are on both nodes: {tasks:?} on n2");
    (array, merge, tasks)
}

#[test]
fn the_tasks_of_a_lost_node_run_again_elsewhere() {
    let Some(cluster) = Cluster::start() else { return };
    let site = Site::new();
    let (array, merge, tasks) = spread(&cluster, &site);
    cluster.fail("n2", "lose");
    let running = cluster.under_way(&site.base(0), &tasks, 1);
    for attempt in running {
        let lives = process_of(&attempt).is_some();
        assert_eq!(lives, attempt.to_str().unwrap().contains("-n1-"), "{}", attempt.display());
    }
    site.open_gate();
    assert_eq!(cluster.end_of(&merge), "COMPLETED 0:0", "{}", log(&site.base(0), "merge"));
    for task in tasks {
        let task = format!("{array}_{task}");
        assert_eq!(cluster.end_of(&task), "COMPLETED 0:0");
        assert_eq!(cluster.field(&task, "NodeList"), "n1");
    }
    assert_same_tables(&site.base(0), &site.alone());
}

#[test]
fn a_node_that_is_cut_off_makes_tasks_run_twice_and_their_copies_collapse() {
    let Some(cluster) = Cluster::start() else { return };
    let site = Site::new();
    let base = site.base(0);
    let (_, merge, tasks) = spread(&cluster, &site);
    cluster.fail("n2", "cut");
    let running = cluster.under_way(&base, &tasks, 1);
    assert_eq!(running.len(), 2 * tasks.len());
    for attempt in &running {
        assert!(process_of(attempt).is_some(), "both copies run: {}", attempt.display());
    }
    site.open_gate();
    until("both copies end", || {
        running.iter().all(|attempt| process_of(attempt).is_none()).then_some(())
    });
    assert_eq!(cluster.end_of(&merge), "COMPLETED 0:0", "{}", log(&base, "merge"));
    let alone = site.alone();
    assert_same_tables(&base, &alone);
    // The stale copies may have ended after the merge: with all that they left it is the same.
    let (code, _, said) = ended(Command::new("sh").arg(base.join("merge.sh")));
    assert_eq!(code, Some(0), "{said}");
    let trials: usize = tasks.iter().map(|task| recorded(&attempts(&base, *task)[0])).sum();
    assert!(trials >= tasks.len() * 2 * METHODS && trials <= INSTANCES * METHODS);
    let note = format!("{trials} trials were recorded more than once with the same outcome");
    assert!(said.contains(&note), "{note} is not in {said}");
    assert_same_tables(&base, &alone);
}
