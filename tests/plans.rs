//! Plans as a user writes them: every broken one is refused with its place, and leaves nothing behind.

use std::path::{Path, PathBuf};
use std::process::Output;

use assert_cmd::Command;

fn tests_folder() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests")
}

fn run_in(folder: &Path, arguments: &[&str]) -> Output {
    Command::cargo_bin("rankassay").unwrap().current_dir(folder).args(arguments).output().unwrap()
}

fn entries(folder: &Path) -> Vec<String> {
    let mut names: Vec<String> = std::fs::read_dir(folder)
        .unwrap()
        .map(|entry| entry.unwrap().file_name().into_string().unwrap())
        .collect();
    names.sort();
    names
}

/// Each file of `broken-plans` breaks one thing of a valid plan and says in its first line what the
/// message must hold right after the file's name.
#[test]
fn every_broken_plan_is_refused_with_its_place_and_leaves_nothing() {
    let mut checked = 0;
    let mut failures = Vec::new();
    for name in entries(&tests_folder().join("broken-plans")) {
        let text =
            std::fs::read_to_string(tests_folder().join("broken-plans").join(&name)).unwrap();
        let fragment = text.lines().next().unwrap().strip_prefix("# expect: ").unwrap();
        let folder = tempfile::tempdir().unwrap();
        std::fs::write(folder.path().join(&name), &text).unwrap();
        for into in [&["run", &name][..], &["run", &name, "--into", "out"][..]] {
            let output = run_in(folder.path(), into);
            let told = String::from_utf8_lossy(&output.stderr).into_owned();
            let expected = format!("error: {name}:{fragment}");
            if output.status.code() != Some(2) || !told.starts_with(&expected) {
                failures.push(format!("{name}: {:?}\n{told}expected {expected}", output.status));
            }
            assert!(output.stdout.is_empty(), "{name} printed results");
            assert_eq!(entries(folder.path()), [name.as_str()], "{name} left something behind");
        }
        checked += 1;
    }
    assert!(failures.is_empty(), "{}", failures.join("\n\n"));
    assert!(checked >= 20, "only {checked} broken plans");
}

/// The valid plan that the broken ones come from.
const VALID: &str = "seed = 7\n[[family]]\nname = \"tight-unique\"\norder = [6, 8]\nrank = 1\ncount = 2\n\
    [[method]]\nname = \"relax-ipm\"\n";

#[test]
fn the_plan_that_the_broken_ones_come_from_runs() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("valid.toml"), VALID).unwrap();
    for number in 1..=2 {
        let output = run_in(folder.path(), &["run", "valid.toml"]);
        assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
        let printed = String::from_utf8_lossy(&output.stdout).into_owned();
        for title in [
            "Accuracy by family and method",
            "Rank by family",
            "Runtime and memory",
            "Effort by family",
        ] {
            assert!(printed.contains(title), "{printed}");
        }
        assert!(
            printed.contains(&format!("Report:  runs/valid-{number}/report.html\n")),
            "{printed}"
        );
        assert!(printed.lines().all(|line| line.chars().count() <= 100), "{printed}");
    }
    assert_eq!(entries(&folder.path().join("runs")), ["valid-1", "valid-2"]);
}

#[test]
fn an_error_inside_an_imported_file_names_the_place_there() {
    let folder = tempfile::tempdir().unwrap();
    let plan = VALID.replace("[[method]]", "[[import]]\npath = \"broken.dat-s\"\n[[method]]");
    std::fs::write(folder.path().join("plan.toml"), plan).unwrap();
    std::fs::write(folder.path().join("broken.dat-s"), "1\n1\n2\n1\n0 1 1 x 1\n").unwrap();
    let output = run_in(folder.path(), &["run", "plan.toml"]);
    let told = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(2), "{told}");
    assert!(told.contains("broken.dat-s:5:7: "), "{told}");
    assert_eq!(entries(folder.path()), ["broken.dat-s", "plan.toml"]);
}

#[test]
fn paths_in_a_plan_start_from_the_plan() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::create_dir(folder.path().join("plans")).unwrap();
    let plan = "seed = 1\n[[import]]\npath = \"../two.dat-s\"\nrank = 1\n[[method]]\nname = \"relax-ipm\"\n";
    std::fs::write(folder.path().join("plans/plan.toml"), plan).unwrap();
    std::fs::write(
        folder.path().join("two.dat-s"),
        "1\n1\n2\n2\n0 1 1 1 -1\n1 1 1 1 1\n1 1 2 2 1\n",
    )
    .unwrap();
    let output = run_in(folder.path(), &["run", "plans/plan.toml", "--into", "out"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    let instances = std::fs::read_to_string(folder.path().join("out/instances.csv")).unwrap();
    assert!(instances.contains("\ntwo-rank=1,imported,path=../two.dat-s rank=1,"), "{instances}");
}

#[test]
fn a_used_folder_is_not_written_over() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("plan.toml"), VALID).unwrap();
    std::fs::create_dir(folder.path().join("out")).unwrap();
    std::fs::write(folder.path().join("out/mine.txt"), "precious").unwrap();
    let output = run_in(folder.path(), &["run", "plan.toml", "--into", "out"]);
    let told = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(2), "{told}");
    assert!(told.contains("out is not empty") && told.contains("--resume"), "{told}");
    assert_eq!(entries(&folder.path().join("out")), ["mine.txt"]);
    let output = run_in(folder.path(), &["run", "plan.toml", "--into", "nothing", "--resume"]);
    let told = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(2), "{told}");
    assert!(told.contains("nothing holds no run to resume"), "{told}");
    assert_eq!(entries(folder.path()), ["out", "plan.toml"]);
}
