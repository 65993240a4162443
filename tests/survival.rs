//! What a run survives: being killed at any moment, a disk that is full, a second run on its folder.
#![cfg(unix)]

use std::collections::{BTreeMap, BTreeSet};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant};

use rankassay::runner::journal;
use rankassay::seed::Stream;

/// Built-in methods and an outside one, which writes down that it ran before it answers.
const PLAN: &str = "seed = 9\ntraces = \"first\"\n[budget]\nwall = \"10s\"\n[[family]]\nname = \"tight-unique\"\n\
    order = [8, 12]\ncount = 10\n[[family]]\nname = \"balanced-graph\"\norder = 20\ncount = 10\n\
    [[method]]\nname = \"factored-alm\"\n[[method]]\nname = \"relax-ipm\"\n\
    [[method]]\nlabel = \"mark\"\ncommand = [\"sh\", \"mark.sh\"]\n";

/// Answers with ones; the note carries the trial's own seed, which the log beside the script also gets.
const MARK: &str = r#"folder=$1
seed=$(sed -n 's/.*"seed": *\([0-9]*\).*/\1/p' "$folder/problem.json")
order=$(sed -n 's/.*"order": *\([0-9]*\).*/\1/p' "$folder/problem.json")
echo "$seed" >> "$(dirname "$0")/log"
rows='[1]'
i=1
while [ "$i" -lt "$order" ]; do rows="$rows, [1]"; i=$((i + 1)); done
echo "{\"version\": 1, \"blocks\": [{\"factor\": [$rows]}], \"note\": \"seed $seed\"}" > "$folder/answer.json"
"#;

fn binary() -> PathBuf {
    assert_cmd::cargo::cargo_bin("rankassay")
}

fn prepare(folder: &Path) {
    std::fs::write(folder.join("plan.toml"), PLAN).unwrap();
    std::fs::write(folder.join("mark.sh"), MARK).unwrap();
}

fn start(folder: &Path, into: &str, resume: bool) -> Child {
    let mut command = Command::new(binary());
    command.current_dir(folder).args(["run", "plan.toml", "--into", into, "--jobs", "2"]);
    if resume {
        command.arg("--resume");
    }
    command.stdout(Stdio::null()).stderr(Stdio::piped()).spawn().unwrap()
}

fn finish(child: Child) -> (Option<i32>, String) {
    let output = child.wait_with_output().unwrap();
    (output.status.code(), String::from_utf8(output.stderr).unwrap())
}

/// Reads every table without times of a run folder, and its instances.
fn stable(folder: &Path, into: &str) -> BTreeMap<String, String> {
    let run = folder.join(into);
    let tables = std::fs::read_dir(run.join("tables")).unwrap();
    let paths = tables.map(|entry| entry.unwrap().path());
    let mut texts: BTreeMap<String, String> = paths
        .filter(|path| path.to_string_lossy().ends_with("-stable.csv"))
        .map(|path| {
            let name = path.file_name().unwrap().to_string_lossy().into_owned();
            (name, std::fs::read_to_string(&path).unwrap())
        })
        .collect();
    let instances = std::fs::read_to_string(run.join("instances.csv")).unwrap();
    texts.insert("instances.csv".to_owned(), instances);
    assert!(texts.len() >= 6, "{:?}", texts.keys());
    texts
}

/// Lists the seeds that the recorded trials of the outside method put into their notes.
fn recorded_marks(folder: &Path, into: &str) -> BTreeSet<String> {
    let Ok(contents) = journal::read(&folder.join(into)) else {
        return BTreeSet::new();
    };
    let records = contents.records.iter().filter(|record| record.method == "mark");
    let seed = |message: &str| message.rsplit("seed ").next().unwrap().to_owned();
    records.map(|record| seed(&record.message)).collect()
}

fn log(folder: &Path) -> Vec<String> {
    let text = std::fs::read_to_string(folder.join("log")).unwrap_or_default();
    text.lines().map(str::to_owned).collect()
}

#[test]
fn a_run_killed_at_fifty_random_moments_ends_as_one_that_was_not() {
    let whole = tempfile::tempdir().unwrap();
    prepare(whole.path());
    let begun = Instant::now();
    let (code, message) = finish(start(whole.path(), "run", false));
    let span = begun.elapsed();
    assert_eq!(code, Some(0), "{message}");
    let expected = stable(whole.path(), "run");

    let killed = tempfile::tempdir().unwrap();
    prepare(killed.path());
    let mut moments = Stream::named(50, &["kills"]);
    let (mut kills, mut finished) = (0, 0);
    while kills < 50 {
        let into = format!("run-{finished}");
        let resume = killed.path().join(&into).join(journal::FILE).exists();
        let before = recorded_marks(killed.path(), &into);
        let ran = log(killed.path()).len();
        let mut child = start(killed.path(), &into, resume);
        // A quarter of the whole run at most, so that most runs take several kills to end.
        let patience = span.mul_f64(0.25 * moments.uniform());
        let deadline = Instant::now() + patience;
        let ended = loop {
            if child.try_wait().unwrap().is_some() {
                break true;
            }
            if Instant::now() >= deadline {
                break false;
            }
            std::thread::sleep(Duration::from_millis(1));
        };
        if !ended {
            child.kill().unwrap();
            kills += 1;
        }
        let (code, message) = finish(child);
        for seed in &log(killed.path())[ran..] {
            assert!(!before.contains(seed), "a trial ran again after it was recorded");
        }
        if ended {
            assert_eq!(code, Some(0), "{message}");
            assert_eq!(stable(killed.path(), &into), expected, "after {kills} kills");
            finished += 1;
            std::fs::remove_file(killed.path().join("log")).unwrap();
        }
    }
    let into = format!("run-{finished}");
    let resume = killed.path().join(&into).join(journal::FILE).exists();
    let (code, message) = finish(start(killed.path(), &into, resume));
    assert_eq!(code, Some(0), "{message}");
    assert_eq!(stable(killed.path(), &into), expected);
    let contents = journal::read(&killed.path().join(&into)).unwrap();
    let trials: BTreeSet<_> = contents.records.iter().map(|record| &record.trial).collect();
    assert_eq!((trials.len(), contents.records.len()), (90, 90));
}

#[test]
fn a_full_disk_stops_the_run_and_loses_nothing() {
    let folder = tempfile::tempdir().unwrap();
    prepare(folder.path());
    // The limit on file sizes stands for the disk: a write fails in the middle of a line. It counts 512 bytes.
    let script = "trap '' XFSZ; ulimit -f 60; exec \"$0\" run plan.toml --into run --jobs 2";
    let output = Command::new("sh")
        .current_dir(folder.path())
        .args(["-c", script])
        .arg(binary())
        .output()
        .unwrap();
    let message = String::from_utf8(output.stderr).unwrap();
    assert_eq!(output.status.code(), Some(2), "{message}");
    assert!(
        message.contains("journal.jsonl") && message.contains("--resume --into run"),
        "{message}"
    );
    let kept = journal::read(&folder.path().join("run")).unwrap();
    let count = kept.records.len();
    assert!(count > 5 && count < 90, "{count} records");
    let (code, message) = finish(start(folder.path(), "run", true));
    assert_eq!(code, Some(0), "{message}");
    assert!(message.contains(&format!("{count} are recorded already")), "{message}");
    let (code, message) = finish(start(folder.path(), "whole", false));
    assert_eq!(code, Some(0), "{message}");
    assert_eq!(stable(folder.path(), "run"), stable(folder.path(), "whole"));
}

#[test]
fn two_runs_do_not_write_to_one_folder() {
    let folder = tempfile::tempdir().unwrap();
    prepare(folder.path());
    // The first run waits for a file, so that the second one meets it for certain.
    let waiting = format!("while [ ! -e \"$(dirname \"$0\")/go\" ]; do sleep 0.05; done\n{MARK}");
    std::fs::write(folder.path().join("mark.sh"), waiting).unwrap();
    let first = start(folder.path(), "run", false);
    let deadline = Instant::now() + Duration::from_secs(60);
    while !folder.path().join("run").join(journal::FILE).exists() {
        assert!(Instant::now() < deadline);
        std::thread::sleep(Duration::from_millis(5));
    }
    let (code, message) = finish(start(folder.path(), "run", true));
    assert_eq!(code, Some(2), "{message}");
    assert!(message.contains("in use by another run"), "{message}");
    std::fs::write(folder.path().join("go"), "").unwrap();
    let (code, message) = finish(first);
    assert_eq!(code, Some(0), "{message}");
    let (code, message) = finish(start(folder.path(), "run", true));
    assert_eq!(code, Some(0), "{message}");
    assert!(message.contains("0 trials to run, 90 are recorded already"), "{message}");
}
