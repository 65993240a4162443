//! The starters for outside methods as a newcomer uses them: written, built, rehearsed, run beside built-in
//! methods and duelled; and the JSON Schema of the protocol against the files that are really written.
#![cfg(unix)]

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::process::{Command, Output};

use rankassay::formats::{sdpa, solution, with_ranks};
use serde_json::Value;

/// What the starters' files are kept of: rank bounds, a free block, several blocks, nonnegative scalars.
const KEPT: &str = "seed = 5\n[budget]\nwall = \"20s\"\nmemory = \"4 GiB\"\n[[family]]\nname = \"tight-unique\"\n\
    order = 8\nrank = [1, 2]\ncount = 2\n[[family]]\nname = \"ky-fan-gap\"\norder = 4\n[[import]]\n\
    path = \"asked.dat-s\"\nrank = 2\n[[method]]\nname = \"relax-ipm\"\n[[method]]\nlabel = \"mine\"\n\
    command = [\"sh\", \"keep.sh\"]\n";

/// A project of its own: a starter, and the folder in which its files are kept.
struct Stage {
    folder: tempfile::TempDir,
    /// Put in front of the search path, if anything.
    first_in_path: Option<PathBuf>,
}

impl Stage {
    fn new() -> Self {
        Stage { folder: tempfile::tempdir().unwrap(), first_in_path: None }
    }

    fn mine(&self) -> PathBuf {
        self.folder.path().join("mine")
    }

    /// Runs a program in the starter's folder.
    fn tool(&self, program: impl AsRef<std::ffi::OsStr>, arguments: &[&str]) -> Output {
        let mut command = Command::new(program);
        command.args(arguments).current_dir(self.mine());
        if let Some(first) = &self.first_in_path {
            let rest = std::env::var_os("PATH").unwrap_or_default();
            let paths = std::iter::once(first.clone()).chain(std::env::split_paths(&rest));
            command.env("PATH", std::env::join_paths(paths).unwrap());
            command.env("VIRTUAL_ENV", first.parent().unwrap());
            command.env_remove("PYTHONPATH");
        }
        command.output().unwrap_or_else(|error| panic!("{arguments:?}: {error}"))
    }

    fn rankassay(&self, arguments: &[&str]) -> Output {
        self.tool(assert_cmd::cargo::cargo_bin("rankassay"), arguments)
    }

    /// Writes the starter of a language and checks that it is not written over.
    fn write(&self, language: &str) {
        std::fs::create_dir_all(self.mine()).unwrap();
        let said = done(&self.rankassay(&["adapter", language, "--to", "."]));
        assert!(said.contains("rankassay run plan.toml"), "{said}");
        let again = self.rankassay(&["adapter", language, "--to", "."]);
        assert_eq!(again.status.code(), Some(2), "{}", text(&again.stderr));
    }

    /// Runs the plan that stands beside the starter, with the built-in methods of that plan.
    fn run_plan(&self) -> Vec<BTreeMap<String, String>> {
        let said = done(&self.rankassay(&["run", "plan.toml", "--into", "run"]));
        for method in ["mine", "relax-ipm", "factored-alm"] {
            assert!(
                said.contains(&format!("  {method} ")),
                "{method} is not in the tables:\n{said}"
            );
        }
        rows(&self.mine().join("run"))
    }

    fn duel(&self) {
        let said = done(&self.rankassay(&[
            "duel",
            "run",
            "--incumbent",
            "relax-ipm",
            "--challenger",
            "mine",
        ]));
        assert!(said.contains("Decision:") && said.contains("challenger mine"), "{said}");
    }

    /// Runs the starter on further instances, keeps what it reads and writes, and holds both against the
    /// schema.
    fn check_files(&self, command: &str) {
        let keep = format!(
            "set -e\n{command} \"$1\"\nkept=kept/$(basename \"$1\")\nmkdir -p \"$kept\"\n\
             cp \"$1\"/problem.json \"$1\"/answer.json \"$kept\"\n"
        );
        std::fs::write(self.mine().join("keep.sh"), keep).unwrap();
        std::fs::write(self.mine().join("kept.toml"), KEPT).unwrap();
        let asked = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/corpus/answer-problem.dat-s");
        std::fs::copy(asked, self.mine().join("asked.dat-s")).unwrap();
        done(&self.rankassay(&[
            "run",
            "kept.toml",
            "--into",
            "kept-run",
            "--jobs",
            "1",
            "--quiet",
        ]));
        let schema = schema();
        let mut checked = 0;
        for entry in std::fs::read_dir(self.mine().join("kept")).unwrap() {
            let folder = entry.unwrap().path();
            for (file, part) in [("problem.json", "problem"), ("answer.json", "answer")] {
                let written = std::fs::read_to_string(folder.join(file)).unwrap();
                let value = serde_json::from_str(&written).unwrap();
                let faults = faults(&schema, part, &value);
                assert!(faults.is_empty(), "{file}: {faults:?}\n{written}");
                checked += 1;
            }
        }
        let trials = rows(&self.mine().join("kept-run")).len();
        assert_eq!(checked, trials, "two files for each of the starter's trials");
        assert!(checked >= 10);
    }
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8_lossy(bytes).into_owned()
}

/// Returns what a program printed; it must have ended well.
#[track_caller]
fn done(output: &Output) -> String {
    let (out, err) = (text(&output.stdout), text(&output.stderr));
    assert!(output.status.success(), "{:?}\n{out}\n{err}", output.status);
    out
}

fn rows(run: &Path) -> Vec<BTreeMap<String, String>> {
    let mut reader = csv::Reader::from_path(run.join("trials.csv")).unwrap();
    let names = reader.headers().unwrap().clone();
    let record = |record: csv::StringRecord| {
        names.iter().map(str::to_owned).zip(record.iter().map(str::to_owned)).collect()
    };
    reader.records().map(|row| record(row.unwrap())).collect()
}

/// Counts the solved trials of the starter, each of which must have been judged.
fn solved(rows: &[BTreeMap<String, String>]) -> (usize, usize) {
    let mine: Vec<_> = rows.iter().filter(|row| row["method"] == "mine").collect();
    for row in &mine {
        let verdict = row["verdict"].as_str();
        let judged = !["crashed", "malformed", "failed", "refused"].contains(&verdict);
        assert!(judged, "{}: {verdict}: {}", row["trial"], row["message"]);
    }
    (mine.iter().filter(|row| row["verdict"] == "solved").count(), mine.len())
}

/// Whether a word stands in `RANKASSAY_REQUIRE`: the test may not skip then.
fn required(word: &str) -> bool {
    let words = std::env::var("RANKASSAY_REQUIRE").unwrap_or_default();
    words.split_whitespace().any(|required| required == word)
}

#[allow(clippy::print_stderr, reason = "says that it skips")]
fn skip(word: &str, reason: &str) {
    assert!(!required(word), "{reason}");
    eprintln!("skipped: {reason}");
}

#[test]
fn the_rust_starter_builds_without_a_network_takes_part_and_duels() {
    let stage = Stage::new();
    stage.write("rust");
    let cargo = std::env::var_os("CARGO").unwrap_or_else(|| "cargo".into());
    let build = Command::new(cargo)
        .args(["build", "--release", "--offline"])
        .current_dir(stage.mine())
        .env("RUSTFLAGS", "-D warnings")
        .env_remove("CARGO_TARGET_DIR")
        .env_remove("CARGO_BUILD_TARGET_DIR")
        .output()
        .unwrap();
    done(&build);
    let starter = "target/release/my-method";
    let rehearsal = done(&stage.rankassay(&["adapter", "rehearse", "--", starter]));
    assert!(rehearsal.starts_with("solved"), "{rehearsal}");
    let rows = stage.run_plan();
    let (solved, all) = solved(&rows);
    assert!(all == 25 && solved >= 15, "the starter solves {solved} of {all}");
    // Everything random in it comes from the seed of the trial.
    let again = done(&stage.rankassay(&["adapter", "rehearse", "--", starter]));
    let figures = |said: &str| said.split_once('\n').unwrap().1.to_owned();
    assert_eq!(figures(&again), figures(&rehearsal));
    stage.duel();
    stage.check_files(starter);
}

/// Makes a virtual environment with NumPy as the README describes, or says why there can be none.
fn environment(stage: &mut Stage) -> Result<(), String> {
    let home = stage.folder.path().join("env");
    let run = |program: &Path, arguments: &[&str]| {
        let output = Command::new(program).args(arguments).env_remove("PYTHONPATH").output();
        match output {
            Ok(output) if output.status.success() => Ok(text(&output.stdout)),
            Ok(output) => Err(format!("{}{}", text(&output.stdout), text(&output.stderr))),
            Err(error) => Err(error.to_string()),
        }
    };
    let place = home.to_str().unwrap();
    run(Path::new("python3"), &["-m", "venv", place])
        .map_err(|error| format!("python3 -m venv does not work: {error}"))?;
    let listed = run(&home.join("bin/python3"), &["-m", "pip", "list", "--format=freeze"])?;
    assert!(!listed.contains("numpy"), "the environment is not clean:\n{listed}");
    // A registry that does not answer is a reason to skip, not to wait; nothing is compiled.
    let install = ["-m", "pip", "install", "--quiet", "--timeout=30", "--retries=1"];
    let install = [&install[..], &["--only-binary=:all:", "numpy"]].concat();
    run(&home.join("bin/python3"), &install)
        .map_err(|error| format!("NumPy cannot be installed: {error}"))?;
    stage.first_in_path = Some(home.join("bin"));
    Ok(())
}

#[test]
fn the_python_starter_works_in_a_clean_virtual_environment() {
    let mut stage = Stage::new();
    if let Err(reason) = environment(&mut stage) {
        skip("python-venv", &reason);
        return;
    }
    stage.write("python");
    let rehearsal = done(&stage.rankassay(&["adapter", "rehearse", "--", "python3", "method.py"]));
    assert!(rehearsal.starts_with("solved"), "{rehearsal}");
    let rows = stage.run_plan();
    let (solved, all) = solved(&rows);
    assert!(all == 25 && solved >= 15, "the starter solves {solved} of {all}");
    stage.duel();
    stage.check_files("python3 method.py");
}

#[test]
fn the_posix_example_writes_what_the_schema_says() {
    let stage = Stage::new();
    stage.write("posix");
    solved(&stage.run_plan());
    stage.check_files("sh method.sh");
}

// ---------------------------------------------------------------------------------------------------
// The schema

/// Prints the schema as a user does.
fn schema() -> Value {
    let output = Command::new(assert_cmd::cargo::cargo_bin("rankassay"))
        .args(["adapter", "schema"])
        .output()
        .unwrap();
    serde_json::from_str(&done(&output)).unwrap()
}

/// Lists where a value departs from a part of the schema.
fn faults(schema: &Value, part: &str, value: &Value) -> Vec<String> {
    let mut whole = schema.clone();
    whole["$ref"] = Value::from(format!("#/$defs/{part}"));
    let validator = jsonschema::draft202012::new(&whole).expect("the schema is a schema");
    validator
        .iter_errors(value)
        .map(|error| format!("{} at {}", error, error.instance_path()))
        .collect()
}

#[test]
fn the_schema_is_a_schema_and_bites() {
    let schema = schema();
    assert!(jsonschema::draft202012::meta::is_valid(&schema));
    let task = serde_json::json!({
        "protocol": 1, "problem": "problem.dat-s", "answer": "answer.json",
        "blocks": [{"name": "block-1", "order": 2, "rank": null}], "nonnegative": 0, "constraints": 1,
        "seed": 1, "wall_s": 20.0, "memory_bytes": null
    });
    assert_eq!(faults(&schema, "problem", &task), Vec::<String>::new());
    for (key, wrong) in [
        ("protocol", Value::from(2)),
        ("blocks", serde_json::json!([{"name": "block-1", "order": 0, "rank": 1}])),
        ("seed", Value::from(-1)),
        ("wall_s", Value::from("20s")),
        ("constraints", Value::Null),
    ] {
        let mut changed = task.clone();
        changed[key] = wrong;
        assert!(!faults(&schema, "problem", &changed).is_empty(), "{key}");
        changed.as_object_mut().unwrap().remove(key);
        assert!(!faults(&schema, "problem", &changed).is_empty(), "without {key}");
    }
}

/// Answers of the corpus that the schema accepts and the reader refuses, and why: a schema sees neither the
/// problem nor the folder nor how the text was spelled.
const BEYOND_THE_SCHEMA: [(&str, &str); 17] = [
    ("blocks-few.json", "how many blocks there are is the problem's"),
    ("entries-beyond.json", "the order of a block is the problem's"),
    ("entries-both-triangles.json", "that a position is given twice is no matter of one entry"),
    ("entries-huge-index.json", "the order of a block is the problem's"),
    ("entries-past-64-bits.json", "the order of a block is the problem's"),
    ("file-broken.json", "what the file beside it holds"),
    ("file-missing.json", "what files stand beside it"),
    ("file-nul.json", "what a file may be called is the system's"),
    ("file-other-shape.json", "what the file beside it holds"),
    ("key-twice.json", "a JSON value has no keys twice"),
    ("matrix-wide.json", "the order of a block is the problem's"),
    ("multipliers-short.json", "how many constraints there are is the problem's"),
    ("nonnegative-missing.json", "how many scalars there are is the problem's"),
    ("ragged.json", "that the rows are equally long is no matter of one row"),
    ("rows-short.json", "the order of a block is the problem's"),
    ("empty-rows.json", "the order of a block is the problem's"),
    ("effort-decimal.json", "1e9 is a whole number to a schema, and not a count to the reader"),
];

#[test]
fn every_malformed_answer_of_the_corpus_fails_the_schema_or_is_explained() {
    let schema = schema();
    let corpus = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/corpus");
    let free = sdpa::read(&corpus.join("answer-problem.dat-s")).unwrap().problem;
    let problem = with_ranks(&free, 2).unwrap();
    let mut wrong = Vec::new();
    let (mut accepted, mut refused, mut no_json) = (0, 0, 0);
    let mut beyond = Vec::new();
    for entry in std::fs::read_dir(corpus.join("answer")).unwrap() {
        let path = entry.unwrap().path();
        if path.extension().is_none_or(|extension| extension != "json") {
            continue;
        }
        let name = path.file_name().unwrap().to_str().unwrap().to_owned();
        let read = solution::read(&path, &problem);
        let bytes = std::fs::read(&path).unwrap();
        let Ok(value) = serde_json::from_slice::<Value>(&bytes) else {
            no_json += 1;
            if read.is_ok() {
                wrong.push(format!("{name} is read and no JSON"));
            }
            continue;
        };
        let faults = faults(&schema, "answer", &value);
        match (read, faults.is_empty()) {
            (Ok(_), true) => accepted += 1,
            (Err(_), false) => refused += 1,
            (Ok(_), false) => wrong.push(format!("{name} is read, but {faults:?}")),
            (Err(error), true) => beyond.push((name, error.to_string())),
        }
    }
    beyond.sort();
    let mut explained: Vec<&str> = BEYOND_THE_SCHEMA.iter().map(|(name, _)| *name).collect();
    explained.sort_unstable();
    let found: Vec<&str> = beyond.iter().map(|(name, _)| name.as_str()).collect();
    assert_eq!(found, explained, "{beyond:#?}");
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
    assert!(accepted >= 8 && refused >= 10 && no_json >= 10, "{accepted} {refused} {no_json}");
}
