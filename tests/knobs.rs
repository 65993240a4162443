//! The table of knobs on the families' cards is what this program measures.

use std::collections::BTreeMap;
use std::path::Path;

type Row = BTreeMap<String, String>;

fn table(path: &Path) -> Vec<Row> {
    let mut reader = csv::Reader::from_path(path).unwrap();
    let names = reader.headers().unwrap().clone();
    reader
        .records()
        .map(|row| {
            let row = row.unwrap();
            names.iter().map(str::to_owned).zip(row.iter().map(str::to_owned)).collect()
        })
        .collect()
}

#[test]
fn the_table_on_the_cards_is_measured_again() {
    let root = Path::new(env!("CARGO_MANIFEST_DIR"));
    let stored = table(&root.join("results/knobs/knobs-stable.csv"));
    let folder = tempfile::tempdir().unwrap();
    let output = assert_cmd::Command::cargo_bin("rankassay")
        .unwrap()
        .current_dir(root)
        .args(["run", "instances/plans/knobs.toml", "--quiet", "--into"])
        .arg(folder.path().join("run"))
        .output()
        .unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let measured = table(&folder.path().join("run/tables/knobs-stable.csv"));
    assert_eq!(stored.len(), measured.len(), "the plan has changed: see results/README.md");
    for (stored, measured) in stored.iter().zip(&measured) {
        let name = format!("{} {}", stored["family"], stored["parameters"]);
        for column in ["family", "parameters", "trials", "unproved", "target"] {
            assert_eq!(stored[column], measured[column], "{name}: {column}");
        }
        // Late digits are another processor's own: a gap moves with the solver's tolerance, a solved trial or a rank
        // at a cut-off may tip.
        let number = |row: &Row, column: &str| row[column].parse::<f64>().ok();
        match (number(stored, "median_gap"), number(measured, "median_gap")) {
            (Some(a), Some(b)) => assert!((a - b).abs() <= 1e-5, "{name}: gap {a} and {b}"),
            (a, b) => assert_eq!(a, b, "{name}: gap"),
        }
        for column in ["solved", "median_rank"] {
            let (a, b) = (number(stored, column).unwrap(), number(measured, column).unwrap());
            assert!((a - b).abs() <= 1.0, "{name}: {column} {a} and {b}");
        }
    }
    // Every family has its rows, and its card shows them.
    for family in rankassay::families::registry() {
        let id = family.card().id;
        let rows = stored.iter().filter(|row| row["family"] == id).count();
        assert!(rows >= 2, "{id} has {rows} rows");
        let output = assert_cmd::Command::cargo_bin("rankassay")
            .unwrap()
            .args(["roster", id, "--json"])
            .output()
            .unwrap();
        let card: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
        assert_eq!(card["measured"].as_array().unwrap().len(), rows, "{id}");
    }
}
