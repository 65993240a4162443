//! Outside methods through the program: everything that another program can do wrong gets its verdict and
//! its reason, and every other trial is unaffected.
#![cfg(unix)]

use std::collections::BTreeMap;
use std::path::Path;
use std::time::{Duration, Instant};

/// Minimise 2 X_12 with X_11 = X_22 = 1: the optimum is -2 at (1, -1)(1, -1)'.
const PAIR: &str = "2\n1\n2\n1 1\n0 1 1 2 -1\n1 1 1 1 1\n2 1 2 2 1\n";

const HEAD: &str = "seed = 3\n[budget]\nwall = \"2s\"\nmemory = \"300 MiB\"\n[[import]]\npath = \"pair.dat-s\"\nrank = 1\n\
    optimum = { value = -2.0, digits = 9, source = \"by hand\" }\n";

const GOOD: &str = r#"{"version": 1, "blocks": [{"factor": [[1], [-1]]}]}"#;

struct Ended {
    code: Option<i32>,
    out: String,
    err: String,
}

fn program(folder: &Path, arguments: &[&str]) -> Ended {
    let output = assert_cmd::Command::cargo_bin("rankassay")
        .unwrap()
        .current_dir(folder)
        .env("RANKASSAY_TEST_SECRET", "secret")
        .args(arguments)
        .output()
        .unwrap();
    Ended {
        code: output.status.code(),
        out: String::from_utf8(output.stdout).unwrap(),
        err: String::from_utf8(output.stderr).unwrap(),
    }
}

type Row = BTreeMap<String, String>;

/// Runs scripts, label and text, as methods on the pair, and returns their rows by label.
fn play(folder: &Path, scripts: &[(&str, &str)]) -> BTreeMap<String, Row> {
    let mut plan = HEAD.to_owned();
    for (label, text) in scripts {
        std::fs::write(folder.join(format!("{label}.sh")), text).unwrap();
        plan += &format!("[[method]]\nlabel = \"{label}\"\ncommand = [\"sh\", \"{label}.sh\"]\n");
    }
    plan += "[[method]]\nname = \"relax-ipm\"\n";
    std::fs::write(folder.join("pair.dat-s"), PAIR).unwrap();
    std::fs::write(folder.join("plan.toml"), plan).unwrap();
    let ended = program(folder, &["run", "plan.toml", "--into", "run", "--quiet"]);
    assert!(matches!(ended.code, Some(0 | 3)), "{:?}: {}", ended.code, ended.err);
    let mut reader = csv::Reader::from_path(folder.join("run/trials.csv")).unwrap();
    let names = reader.headers().unwrap().clone();
    let rows = reader.records().map(|record| -> Row {
        let record = record.unwrap();
        names.iter().map(str::to_owned).zip(record.iter().map(str::to_owned)).collect()
    });
    let rows: BTreeMap<String, Row> = rows.map(|row| (row["method"].clone(), row)).collect();
    assert_eq!(rows.len(), scripts.len() + 1);
    assert_eq!(rows["relax-ipm"]["verdict"], "solved", "the built-in method is unaffected");
    rows
}

fn write(answer: &str) -> String {
    format!("cat > \"$1/answer.json\" <<'END'\n{answer}\nEND\n")
}

#[test]
fn whatever_a_program_does_has_its_verdict_and_its_reason() {
    let folder = tempfile::tempdir().unwrap();
    let factor = |text: &str| write(&GOOD.replace("[[1], [-1]]", text));
    let cases: Vec<(&str, String, &str, &str)> = vec![
        ("good", write(GOOD), "solved", ""),
        ("positive", factor("[[1], [1]]"), "suboptimal", ""),
        ("off", factor("[[0], [0]]"), "infeasible", ""),
        (
            "high-rank",
            write(&GOOD.replace("\"factor\": [[1], [-1]]", "\"matrix\": [[1, 0], [0, 1]]")),
            "infeasible",
            "",
        ),
        (
            "code",
            "echo cannot go on >&2; exit 3".to_owned(),
            "crashed",
            "exit code 3; its last words: cannot go on",
        ),
        ("signal", "kill -SEGV $$".to_owned(), "crashed", "ended by signal 11"),
        ("lost", "exec ./no-such-program".to_owned(), "crashed", "exit code 127"),
        ("silent", "exit 0".to_owned(), "malformed", "wrote no answer.json"),
        ("empty", ": > \"$1/answer.json\"".to_owned(), "malformed", "answer.json:1"),
        ("torn", write(&GOOD[..30]), "malformed", "answer.json:"),
        ("nan", factor("[[NaN], [1]]"), "malformed", "answer.json:"),
        ("huge", factor("[[1e999], [1]]"), "malformed", "answer.json:"),
        ("short", factor("[[1]]"), "malformed", "expected 2 rows"),
        ("ragged", factor("[[1], [1, 2]]"), "malformed", "answer.json:"),
        ("folder", "mkdir \"$1/answer.json\"".to_owned(), "malformed", "is no file"),
        (
            "escape",
            write(&GOOD.replace(
                "\"factor\": [[1], [-1]]",
                "\"file\": \"../x.mtx\", \"holds\": \"factor\"",
            )),
            "malformed",
            "answer.json:",
        ),
        (
            "sleeper",
            "trap '' TERM INT HUP\nwhile :; do sleep 1; done".to_owned(),
            "time-limit",
            "wall-time limit",
        ),
        ("late", format!("{}\nsleep 60", write(GOOD)), "solved", ""),
        ("half", format!("{}\nsleep 60", write(&GOOD[..30])), "time-limit", "wall-time limit"),
        ("noisy", "exec yes rankassay".to_owned(), "malformed", "printed more than 16 MiB"),
        ("greedy", "cat /dev/zero | tail -c 2000000000".to_owned(), "memory-limit", "memory limit"),
    ];
    let scripts: Vec<(&str, &str)> =
        cases.iter().map(|(label, text, _, _)| (*label, text.as_str())).collect();
    let started = Instant::now();
    let rows = play(folder.path(), &scripts);
    // Three programs end by the limit of two seconds; nothing waits for what they would still do.
    assert!(started.elapsed() < Duration::from_secs(60));
    let mut wrong = Vec::new();
    for (label, _, verdict, reason) in &cases {
        let row = &rows[*label];
        let (found, message) = (&row["verdict"], &row["message"]);
        if found != verdict || !message.contains(reason) || message.contains("/tmp") {
            wrong.push(format!("{label}: {found}, not {verdict}: {message}"));
        }
        assert!(!row["wall_s"].is_empty() && row["flops"].is_empty(), "{label}");
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
    assert_eq!(rows["late"]["stop_reason"], "time-limit");
}

#[test]
fn a_program_gets_its_task_and_a_small_environment_and_its_effort_is_recorded() {
    let folder = tempfile::tempdir().unwrap();
    let effort = r#""effort": {"flops": 1234, "inner_steps": 5}, "note": "#;
    let script = format!(
        "test -f \"$1/problem.dat-s\" || exit 9\n\
         grep -q '\"rank\": 1' \"$1/problem.json\" || exit 8\n\
         grep -q '\"wall_s\": 2.0' \"$1/problem.json\" || exit 7\n\
         cat > \"$1/answer.json\" <<END\n{}\nEND\n",
        GOOD.replace(
            "\"blocks\"",
            &format!("{effort}\"[${{RANKASSAY_TEST_SECRET-hidden}}]\", \"blocks\"")
        )
    );
    let rows = play(folder.path(), &[("polite", &script)]);
    let row = &rows["polite"];
    assert_eq!(row["verdict"], "solved", "{}", row["message"]);
    assert!(row["message"].contains("[hidden]"), "{}", row["message"]);
    assert_eq!((row["flops"].as_str(), row["inner_steps"].as_str()), ("1234", "5"));
    assert_eq!(row["options"], "command=sh polite.sh");
    assert!(row["peak_bytes"].parse::<u64>().unwrap() > 100_000);
}

#[test]
fn children_that_outlive_the_program_are_ended_with_it() {
    let folder = tempfile::tempdir().unwrap();
    let script = format!("sleep 300 &\necho $! > child.pid\n{}", write(GOOD));
    let rows = play(folder.path(), &[("parent", &script)]);
    assert_eq!(rows["parent"]["verdict"], "solved");
    wait_for_the_end_of(&folder.path().join("child.pid"));
}

/// Waits until the process whose number a file holds has ended.
fn wait_for_the_end_of(file: &Path) {
    let child = std::fs::read_to_string(file).unwrap();
    let alive = || {
        let kill = std::process::Command::new("kill").args(["-0", child.trim()]).output().unwrap();
        let state = std::fs::read_to_string(format!("/proc/{}/stat", child.trim()));
        // A zombie that nobody has waited for yet is ended too.
        kill.status.success() && !state.is_ok_and(|state| state.contains(") Z "))
    };
    let started = Instant::now();
    while alive() {
        assert!(started.elapsed() < Duration::from_secs(10), "the child is still there");
        std::thread::sleep(Duration::from_millis(20));
    }
}

#[test]
#[cfg(target_os = "linux")]
fn children_that_leave_the_group_are_ended_too() {
    let folder = tempfile::tempdir().unwrap();
    // A session of its own is outside of every process group of the trial; the wait makes its number known.
    let script = format!(
        "setsid sh -c 'echo $$ > child.pid; exec sleep 300' >/dev/null 2>&1 &\n\
         while [ ! -s child.pid ]; do sleep 0.02; done\n{}",
        write(GOOD)
    );
    let rows = play(folder.path(), &[("parent", &script)]);
    assert_eq!(rows["parent"]["verdict"], "solved", "{}", rows["parent"]["message"]);
    wait_for_the_end_of(&folder.path().join("child.pid"));
}

#[test]
#[cfg(target_os = "linux")]
fn a_program_that_multiplies_is_ended() {
    let folder = tempfile::tempdir().unwrap();
    let script = "i=0\nwhile [ $i -lt 2000 ]; do sleep 300 & i=$((i + 1)); done\nwait";
    let rows = play(folder.path(), &[("rabbit", script)]);
    let row = &rows["rabbit"];
    assert_eq!(row["verdict"], "crashed", "{}", row["message"]);
    assert!(row["message"].contains("processes at once, more than 256"), "{}", row["message"]);
}

#[test]
fn the_posix_example_runs_as_it_is_written() {
    let folder = tempfile::tempdir().unwrap();
    let written = program(folder.path(), &["adapter", "posix", "--to", "mine"]);
    assert_eq!(written.code, Some(0), "{}", written.err);
    let again = program(folder.path(), &["adapter", "posix", "--to", "mine"]);
    assert_eq!(again.code, Some(2));
    let mine = folder.path().join("mine");
    let rehearsal = program(&mine, &["adapter", "rehearse", "--", "sh", "method.sh"]);
    assert!(rehearsal.out.contains("feasibility"), "{}{}", rehearsal.out, rehearsal.err);
    let wrong =
        program(&mine, &["adapter", "rehearse", "--", "sh", "-c", "echo '{' > $0/answer.json"]);
    assert_eq!(wrong.code, Some(1));
    assert!(wrong.out.contains("malformed") && wrong.out.contains("answer.json:"), "{}", wrong.out);
    let run = program(&mine, &["run", "plan.toml", "--into", "run"]);
    assert_eq!(run.code, Some(0), "{}", run.err);
    assert!(run.out.contains("  mine "), "{}", run.out);
}

/// Finds a Python that can import NumPy.
fn python() -> Option<&'static str> {
    let able = |name: &&str| {
        let check = std::process::Command::new(name).args(["-c", "import numpy"]).output();
        check.is_ok_and(|output| output.status.success())
    };
    let found = ["python3", "/usr/bin/python3"].into_iter().find(able);
    let required = std::env::var("RANKASSAY_REQUIRE").unwrap_or_default();
    assert!(found.is_some() || !required.contains("python"), "no Python with NumPy");
    found
}

#[test]
#[allow(clippy::print_stderr, reason = "says that it skips")]
fn the_python_starter_takes_part_and_duels() {
    let Some(python) = python() else {
        eprintln!("skipped: no python3 that can import numpy");
        return;
    };
    let folder = tempfile::tempdir().unwrap();
    let written = program(folder.path(), &["adapter", "python", "--to", "mine"]);
    assert_eq!(written.code, Some(0), "{}", written.err);
    let mine = folder.path().join("mine");
    let plan = std::fs::read_to_string(mine.join("plan.toml")).unwrap();
    std::fs::write(mine.join("plan.toml"), plan.replace("\"python3\"", &format!("\"{python}\"")))
        .unwrap();
    let rehearsal = program(&mine, &["adapter", "rehearse", "--", python, "method.py"]);
    assert_eq!(rehearsal.code, Some(0), "{}{}", rehearsal.out, rehearsal.err);
    assert!(rehearsal.out.starts_with("solved"), "{}", rehearsal.out);
    let run = program(&mine, &["run", "plan.toml", "--into", "run"]);
    assert_eq!(run.code, Some(0), "{}", run.err);
    let rows = std::fs::read_to_string(mine.join("run/trials.csv")).unwrap();
    let solved =
        rows.lines().filter(|row| row.contains("-mine,") && row.contains(",solved,")).count();
    assert!(solved >= 15, "the starter solves {solved} of 25:\n{rows}");
    let duel = program(&mine, &["duel", "run", "--incumbent", "mine", "--challenger", "relax-ipm"]);
    assert_eq!(duel.code, Some(0), "{}", duel.err);
    assert!(duel.out.contains("Decision:"), "{}", duel.out);
    // Nobody wins by what it counts of itself.
    assert!(duel.err.contains("processor time is compared instead"), "{}", duel.err);
    assert!(duel.out.contains("processor time ratio"), "{}", duel.out);
    let report = std::fs::read_to_string(mine.join("run/report.html")).unwrap();
    assert!(report.contains("Another program, in any language"), "no card of the outside method");
}

#[test]
fn the_schema_is_json_and_names_what_the_starter_reads() {
    let folder = tempfile::tempdir().unwrap();
    let printed = program(folder.path(), &["adapter", "schema"]);
    let schema: serde_json::Value = serde_json::from_str(&printed.out).unwrap();
    let properties = &schema["$defs"]["problem"]["properties"];
    for name in ["blocks", "nonnegative", "constraints", "seed", "wall_s", "problem", "answer"] {
        assert!(properties[name].is_object() || properties[name].is_string(), "{name}");
    }
    assert_eq!(schema["$defs"]["answer"]["required"], serde_json::json!(["version", "blocks"]));
}
