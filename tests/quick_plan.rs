//! Runs the plan of the README as a user does, and holds its records against what is promised of
//! families and methods; and a large sparse instance from planting to certificate.

mod browser;

use std::collections::BTreeMap;
use std::path::Path;
use std::process::Command;

type Row = BTreeMap<String, String>;

fn rows(file: &Path) -> Vec<Row> {
    let mut reader = csv::Reader::from_path(file).unwrap();
    let names = reader.headers().unwrap().clone();
    reader
        .records()
        .map(|record| {
            let record = record.unwrap();
            names.iter().map(str::to_owned).zip(record.iter().map(str::to_owned)).collect()
        })
        .collect()
}

fn run(plan: &Path, into: &Path, extra: &[&str]) {
    let output = Command::new(env!("CARGO_BIN_EXE_rankassay"))
        .args(["run", plan.to_str().unwrap(), "--into", into.to_str().unwrap(), "--quiet"])
        .args(extra)
        .output()
        .unwrap();
    let messages = String::from_utf8_lossy(&output.stderr);
    assert!(output.status.success(), "exit {:?}: {messages}", output.status.code());
}

fn number(row: &Row, column: &str) -> f64 {
    row[column].parse().unwrap_or_else(|_| panic!("{column} of {} is empty", row["trial"]))
}

fn select<'a>(rows: &'a [Row], family: &str, method: &str) -> Vec<&'a Row> {
    let chosen: Vec<&Row> =
        rows.iter().filter(|row| row["family"] == family && row["method"] == method).collect();
    assert!(!chosen.is_empty(), "no trial of {method} on {family}");
    chosen
}

fn solved(rows: &[&Row]) -> usize {
    rows.iter().filter(|row| row["verdict"] == "solved").count()
}

#[test]
fn the_quick_plan_keeps_its_promises() {
    let folder = tempfile::tempdir().unwrap();
    let plan = Path::new(env!("CARGO_MANIFEST_DIR")).join("instances/plans/quick.toml");
    let (one, two) = (folder.path().join("one"), folder.path().join("two"));
    run(&plan, &one, &["--jobs", "1"]);
    run(&plan, &two, &["--jobs", "2"]);
    let trials = rows(&one.join("trials.csv"));

    // Times and memory aside, the number of workers changes nothing.
    for (a, b) in trials.iter().zip(&rows(&two.join("trials.csv"))) {
        for (column, value) in a {
            if !["wall_s", "cpu_s", "peak_bytes"].contains(&column.as_str()) {
                assert_eq!(value, &b[column], "{column} of {}", a["trial"]);
            }
        }
    }
    assert_eq!(
        std::fs::read_to_string(one.join("instances.csv")).unwrap(),
        std::fs::read_to_string(two.join("instances.csv")).unwrap(),
        "instances and their digests"
    );
    for name in ["accuracy-stable.csv", "rank-stable.csv"] {
        let text = |run: &Path| std::fs::read_to_string(run.join("tables").join(name)).unwrap();
        assert_eq!(text(&one), text(&two), "{name}");
    }

    // The relaxation is strictly below on the gap families and equal elsewhere.
    for row in trials.iter().filter(|row| row["method"] == "relax-ipm") {
        let (value, optimum) = (number(row, "raw_objective"), number(row, "optimum"));
        let difference = (optimum - value) / (1.0 + optimum.abs());
        match row["family"].as_str() {
            "lattice-tiles" | "ky-fan-gap" => assert!(difference > 1e-4, "{}", row["trial"]),
            "frustrated-loops" if row["parameters"].contains("density=500") => {
                assert!(difference > 1e-4, "{}", row["trial"]);
            }
            "frustrated-loops" => assert!(difference > -1e-7, "{}", row["trial"]),
            _ => assert!(difference.abs() <= 1e-7, "{}: {difference:e}", row["trial"]),
        }
    }

    // The published rule stops at rank k - 1 (k = 4 by default); looking at both ends reaches 1.
    for row in select(&trials, "sign-trap", "reduce-largest") {
        assert_eq!(row["rank_at_1e-6"], "3", "{}", row["trial"]);
    }
    for row in select(&trials, "sign-trap", "reduce-both-ends") {
        assert_eq!(row["rank_at_1e-6"], "1", "{}", row["trial"]);
        assert_eq!(row["verdict"], "solved", "{}", row["trial"]);
    }

    let tight = select(&trials, "tight-unique", "factored-alm");
    assert!(100 * solved(&tight) >= 95 * tight.len(), "{} of {}", solved(&tight), tight.len());
    for family in ["lattice-tiles", "sign-trap"] {
        let steered = select(&trials, family, "ipm-tail-weight");
        assert!(2 * solved(&steered) >= steered.len(), "{family}: {}", solved(&steered));
    }
    everything_is_made_of(folder.path());
}

/// Runs the program in `folder` and returns its exit code and its standard output.
fn program(folder: &Path, arguments: &[&str]) -> (Option<i32>, String) {
    let output = Command::new(env!("CARGO_BIN_EXE_rankassay"))
        .current_dir(folder)
        .args(arguments)
        .output()
        .unwrap();
    (output.status.code(), String::from_utf8(output.stdout).unwrap())
}

/// What is made of the records of the quick plan: tables in four formats, figures, a report that works in a
/// browser, replays, gate and duel.
fn everything_is_made_of(folder: &Path) {
    for name in ["accuracy", "rank", "runtime", "effort", "relaxation", "failures", "instances"] {
        for form in [".csv", "-stable.csv", ".md", ".tex", ".html"] {
            let file = folder.join(format!("one/tables/{name}{form}"));
            let text = std::fs::read_to_string(&file).unwrap();
            assert!(text.len() > 200, "{}", file.display());
        }
    }
    let figures: Vec<_> = std::fs::read_dir(folder.join("one/figures")).unwrap().collect();
    assert!(figures.len() >= 8, "{} figures", figures.len());

    let (code, out) = program(folder, &["replay", "two", "--every", "10"]);
    assert_eq!(code, Some(0), "{out}");
    assert!(out.contains("27 replayed: 27 identical"), "{out}");

    let (code, _) = program(folder, &["gate", "one", "--baseline", "base", "--accept"]);
    assert_eq!(code, Some(0));
    let (code, out) = program(folder, &["gate", "two", "--baseline", "base"]);
    assert_eq!(code, Some(0), "{out}");
    assert!(out.starts_with("Gate PASSES: 0 regressed, 0 improved, 0 undecided"), "{out}");

    let duel = ["duel", "one", "--incumbent", "relax-ipm", "--challenger", "factored-alm"];
    let (code, out) = program(folder, &[&duel[..], &["--require", "adopt"]].concat());
    assert_eq!(code, Some(0), "{out}");
    assert!(out.contains("Decision: ADOPT"), "{out}");
    assert!(folder.join("one/duels/factored-alm-against-relax-ipm.md").exists());
    // Every command it prints works as it stands.
    let command = out.lines().find(|line| line.contains(" replay ")).unwrap().trim();
    let shell = Command::new("sh").arg("-c").arg(command).current_dir(folder).output().unwrap();
    assert!(shell.status.success(), "{command}");
    let swapped = ["duel", "one", "--incumbent", "factored-alm", "--challenger", "relax-ipm"];
    let (code, out) = program(folder, &[&swapped[..], &["--require", "adopt"]].concat());
    assert_eq!(code, Some(1), "{out}");
    assert!(out.contains("Decision: KEEP"), "{out}");

    // Last, because it says that it skips where there is no browser.
    if let Some(browser) = browser::open(&folder.join("one/report.html")) {
        browser::check_all(&browser);
    }
}

#[test]
fn a_graph_of_twenty_thousand_vertices_is_planted_solved_and_certified() {
    let folder = tempfile::tempdir().unwrap();
    let plan = Path::new(env!("CARGO_MANIFEST_DIR")).join("instances/plans/large-graph.toml");
    let into = folder.path().join("run");
    run(&plan, &into, &[]);
    for row in rows(&into.join("trials.csv")) {
        assert_eq!(row["order"], "20000");
        assert_eq!(row["verdict"], "solved", "{}", row["message"]);
        assert!(row["message"].contains("certified"), "{}", row["message"]);
        assert!(number(&row, "peak_bytes") < 2_147_483_648.0);
        // The multipliers prove the value from below as well.
        let gap = number(&row, "optimum") - number(&row, "lower_bound");
        assert!(gap <= 1e-5 * (1.0 + number(&row, "optimum").abs()), "gap {gap:e}");
    }
}
