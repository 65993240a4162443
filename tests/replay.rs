//! Replays through the program: identical here, explained elsewhere, and what was tampered with is
//! found.

use std::path::Path;

use serde_json::Value;
use sha2::{Digest, Sha256};

/// Two families, two methods and an imported file, a second of work.
const PLAN: &str = "seed = 4\ntraces = \"first\"\n[[family]]\nname = \"tight-unique\"\norder = 12\ncount = 3\n\
    [[family]]\nname = \"localisation\"\norder = 8\ncount = 2\n[[import]]\npath = \"pair.dat-s\"\nrank = 1\n\
    [[method]]\nname = \"relax-ipm\"\n[[method]]\nname = \"factored-alm\"\n";

/// Minimise 2 X_12 with X_11 = X_22 = 1; the format's matrix number 0 is -C.
const PAIR: &str = "2\n1\n2\n1 1\n0 1 1 2 -1\n1 1 1 1 1\n2 1 2 2 1\n";

struct Ended {
    code: Option<i32>,
    out: String,
    err: String,
}

fn program(folder: &Path, arguments: &[&str]) -> Ended {
    let output = assert_cmd::Command::cargo_bin("rankassay")
        .unwrap()
        .current_dir(folder)
        .args(arguments)
        .output()
        .unwrap();
    Ended {
        code: output.status.code(),
        out: String::from_utf8(output.stdout).unwrap(),
        err: String::from_utf8(output.stderr).unwrap(),
    }
}

/// Runs the plan in a fresh folder, as `run`.
fn recorded() -> tempfile::TempDir {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("plan.toml"), PLAN).unwrap();
    std::fs::write(folder.path().join("pair.dat-s"), PAIR).unwrap();
    let ended = program(folder.path(), &["run", "plan.toml", "--into", "run", "--quiet"]);
    assert_eq!(ended.code, Some(0), "{}", ended.err);
    folder
}

/// Changes the values of the journal's trials and gives every line the checksum of its new text.
fn forge(folder: &Path, change: impl Fn(&mut Value)) {
    let path = folder.join("run/journal.jsonl");
    let text = std::fs::read_to_string(&path).unwrap();
    let mut forged = String::new();
    for line in text.lines() {
        let mut entry: Value = serde_json::from_str(line).unwrap();
        let object = entry.as_object_mut().unwrap();
        object.remove("check");
        if object["kind"] == "trial" {
            change(object.get_mut("value").unwrap());
        }
        // The writer puts kind before value, whose own columns keep their order.
        let value = &object["value"];
        let payload = format!("\"kind\":{},\"value\":{value}}}", object["kind"]);
        let digest: String =
            Sha256::digest(payload.as_bytes()).iter().map(|byte| format!("{byte:02x}")).collect();
        forged += &format!("{{\"check\":\"{}\",{payload}\n", &digest[..16]);
    }
    std::fs::write(path, forged).unwrap();
    // Written by the run from the records before they were forged.
    std::fs::remove_file(folder.join("run/trials.csv")).unwrap();
}

fn scale(value: &mut Value, column: &str, factor: f64) {
    value[column] = match value[column].as_u64() {
        Some(count) => Value::from((count as f64 * factor) as u64),
        None => Value::from(value[column].as_f64().unwrap() * factor),
    };
}

/// The manifest of a run on a machine with another processor.
fn elsewhere(folder: &Path) {
    let path = folder.join("run/manifest.json");
    let mut manifest: Value =
        serde_json::from_str(&std::fs::read_to_string(&path).unwrap()).unwrap();
    manifest["stretches"][0]["machine"]["processor"] = Value::from("Imagined 9000");
    manifest["stretches"][0]["machine"]["features"] = serde_json::json!(["slow"]);
    std::fs::write(path, manifest.to_string()).unwrap();
}

#[test]
fn every_trial_of_a_run_replays_identically_on_the_same_machine() {
    let folder = recorded();
    let ended = program(folder.path(), &["replay", "run", "--every", "1"]);
    assert_eq!(ended.code, Some(0), "{}{}", ended.out, ended.err);
    assert!(
        ended.out.contains("12 replayed: 12 identical, 0 same verdict, 0 different"),
        "{}",
        ended.out
    );
    assert!(ended.out.starts_with("Same tool version, processor and processor features"));
    let json = program(folder.path(), &["replay", "run", "--every", "5", "--json"]);
    let value: Value = serde_json::from_str(&json.out).unwrap();
    assert_eq!(value["replays"].as_array().unwrap().len(), 3);
    assert_eq!(value["replays"][0]["agreement"], "identical");
}

#[test]
fn imported_files_are_found_from_another_folder() {
    let folder = recorded();
    let away = tempfile::tempdir().unwrap();
    let run = folder.path().join("run");
    let trial = "0011-pair-rank=1-relax-ipm";
    let lost = program(away.path(), &["replay", run.to_str().unwrap(), trial]);
    assert_eq!(lost.code, Some(2), "{}", lost.out);
    assert!(lost.err.contains("pair.dat-s"), "{}", lost.err);
    let place = folder.path().to_str().unwrap();
    let found =
        program(away.path(), &["replay", run.to_str().unwrap(), trial, "--plan-folder", place]);
    assert_eq!(found.code, Some(0), "{}", found.err);
    // Another file under the same name is another instance.
    std::fs::write(folder.path().join("pair.dat-s"), PAIR.replace("2 -1", "2 -3")).unwrap();
    let other = program(folder.path(), &["replay", "run", trial]);
    assert_eq!(other.code, Some(1), "{}", other.out);
    assert!(other.out.contains("instance.digest"), "{}", other.out);
}

#[test]
fn a_tampered_record_is_found() {
    let folder = recorded();
    let journal = folder.path().join("run/journal.jsonl");
    let text = std::fs::read_to_string(&journal).unwrap();
    // Without the checksum the line itself is refused.
    std::fs::write(&journal, text.replacen("\"verdict\":\"solved\"", "\"verdict\":\"near\"", 1))
        .unwrap();
    let refused = program(folder.path(), &["replay", "run", "--every", "1"]);
    assert_eq!(refused.code, Some(2));
    assert!(refused.err.contains("does not agree with its checksum"), "{}", refused.err);
    std::fs::write(&journal, &text).unwrap();
    // In the CSV file only.
    let csv = folder.path().join("run/trials.csv");
    let rows = std::fs::read_to_string(&csv).unwrap();
    std::fs::write(&csv, rows.replacen(",solved,", ",suboptimal,", 1)).unwrap();
    let row = program(folder.path(), &["replay", "run", "--every", "1"]);
    assert_eq!(row.code, Some(1), "{}", row.out);
    assert!(row.out.contains("trials.csv verdict: solved recorded, suboptimal now"), "{}", row.out);
    // With the checksum made again.
    forge(folder.path(), |value| {
        if value["method"] == "factored-alm" && value["family"] == "tight-unique" {
            scale(value, "flops", 0.5);
        }
    });
    let forged = program(folder.path(), &["replay", "run", "--every", "1"]);
    assert_eq!(forged.code, Some(1), "{}", forged.out);
    assert!(forged.out.contains("9 identical, 0 same verdict, 3 different"), "{}", forged.out);
    assert!(forged.out.contains("  flops: "), "{}", forged.out);
    assert!(forged.out.contains("(relative difference 5.0e-1)"), "{}", forged.out);
}

#[test]
fn records_of_another_machine_may_differ_in_late_digits_only() {
    let folder = recorded();
    elsewhere(folder.path());
    forge(folder.path(), |value| {
        if value["objective"].as_f64().is_some_and(|objective| objective != 0.0) {
            scale(value, "objective", 1.0 + 1e-11);
        }
    });
    let near = program(folder.path(), &["replay", "run", "--every", "1"]);
    assert_eq!(near.code, Some(0), "{}", near.out);
    assert!(near.out.contains("processor: Imagined 9000 there"), "{}", near.out);
    assert!(near.out.contains("processor features: slow there"), "{}", near.out);
    assert!(near.out.contains(" same verdict, 0 different"), "{}", near.out);
    assert!(near.out.contains("  objective: "), "{}", near.out);
    std::fs::write(folder.path().join("run/trials.csv"), "").unwrap();
    forge(folder.path(), |value| {
        if value["family"] == "tight-unique" {
            scale(value, "objective", 1.01);
        }
    });
    let far = program(folder.path(), &["replay", "run", "--every", "1"]);
    assert_eq!(far.code, Some(1), "{}", far.out);
    assert!(far.out.contains(" 6 different"), "{}", far.out);
}

#[test]
fn what_cannot_be_replayed_is_said() {
    let folder = recorded();
    let unknown =
        program(folder.path(), &["replay", "run", "0001-tight-unique-order=12-rank=2-0-relax-imp"]);
    assert_eq!(unknown.code, Some(2));
    assert!(unknown.err.contains("did you mean 0001-"), "{}", unknown.err);
    let nowhere = program(folder.path(), &["replay", "elsewhere", "x"]);
    assert_eq!(nowhere.code, Some(2));
    assert!(nowhere.err.contains("no run was started there"), "{}", nowhere.err);
    let path = folder.path().join("run/manifest.json");
    let text = std::fs::read_to_string(&path).unwrap();
    std::fs::write(&path, text.replace("seed = 4", "seed = 5")).unwrap();
    let mixed = program(folder.path(), &["replay", "run", "--every", "1"]);
    assert_eq!(mixed.code, Some(2));
    assert!(mixed.err.contains("is not the one that its journal is of"), "{}", mixed.err);
    let nothing = program(folder.path(), &["replay", "run"]);
    assert_eq!(nothing.code, Some(2));
}

#[test]
fn traces_are_written_where_the_plan_asks_for_them() {
    let folder = recorded();
    let traces = rankassay::runner::read_traces(&folder.path().join("run")).unwrap();
    // The first instance of both combinations and the imported one, under both methods.
    assert_eq!(traces.len(), 6);
    for trace in traces {
        assert!(!trace.rows.is_empty(), "{}", trace.trial);
        let flops: Vec<u64> = trace.rows.iter().map(|row| row.flops).collect();
        assert!(flops.is_sorted(), "{}", trace.trial);
        assert!(trace.rows.iter().any(|row| row.residual.is_some()), "{}", trace.trial);
    }
}
