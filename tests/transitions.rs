//! Where the relaxation stops recovering: half of the instances at the published places.

use std::collections::BTreeMap;
use std::path::Path;

type Row = BTreeMap<String, String>;

fn measured() -> Vec<Row> {
    let root = Path::new(env!("CARGO_MANIFEST_DIR"));
    let folder = tempfile::tempdir().unwrap();
    let output = assert_cmd::Command::cargo_bin("rankassay")
        .unwrap()
        .current_dir(root)
        .args(["run", "instances/plans/transitions.toml", "--quiet", "--into"])
        .arg(folder.path().join("run"))
        .output()
        .unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let drawn = std::fs::read_to_string(folder.path().join("run/figures/phase-sensing.svg"));
    assert!(
        drawn.unwrap().contains("statistical dimension"),
        "the phase diagram has its threshold"
    );
    let mut reader =
        csv::Reader::from_path(folder.path().join("run/tables/knobs-stable.csv")).unwrap();
    let names = reader.headers().unwrap().clone();
    let rows = reader.records().map(|row| {
        let row = row.unwrap();
        names.iter().map(str::to_owned).zip(row.iter().map(str::to_owned)).collect()
    });
    rows.collect()
}

fn parameter(row: &Row, name: &str) -> f64 {
    let pairs = row["parameters"].split(' ').filter_map(|pair| pair.split_once('='));
    pairs.filter(|(key, _)| *key == name).map(|(_, value)| value.parse().unwrap()).next().unwrap()
}

fn number(row: &Row, column: &str) -> f64 {
    row[column].parse().unwrap()
}

/// Finds where a rising curve of shares crosses one half, by the line between its neighbours, with the standard
/// error of that place: the error of a share of one half over the slope.
fn crossing(curve: &[(f64, f64, f64)]) -> (f64, f64) {
    let pair = curve.windows(2).find(|pair| pair[0].1 < 0.5 && pair[1].1 >= 0.5).unwrap();
    let ((a, low, trials), (b, high, _)) = (pair[0], pair[1]);
    let slope = (high - low) / (b - a);
    (a + (0.5 - low) / slope, (0.25 / trials).sqrt() / slope)
}

#[test]
fn the_relaxation_stops_recovering_where_it_is_known_to() {
    let rows = measured();

    // Sign synchronisation, n = 100: share of 200 draws in which xx' is optimal for noise sigma / sigma*, sigma* =
    // sqrt(n / (2 ln n)) (scale from memory: A. Bandeira, 2018; shares computed for this project). Both shares
    // are samples; three standard errors of their difference, and never less than one draw.
    for (noise, share) in [(0.7, 1.00), (0.9, 0.87), (1.0, 0.55), (1.1, 0.23), (1.2, 0.04)] {
        let signs = rows.iter().filter(|row| row["family"] == "noisy-signs");
        let row = signs.clone().find(|row| parameter(row, "noise") == noise).unwrap();
        let (solved, trials) = (number(row, "solved"), number(row, "trials"));
        assert_eq!(
            solved + number(row, "unproved"),
            trials,
            "what is proved is solved, nothing else"
        );
        let error = (share * (1.0 - share) * (1.0 / trials + 1.0 / 200.0)).sqrt();
        let found = solved / trials;
        assert!(
            (found - share).abs() <= (3.0 * error).max(0.01),
            "noise {noise}: {found}, not {share}"
        );
    }

    // Recovery of a PSD matrix by its trace from symmetric Gaussian measurements: half of the draws at about the
    // statistical dimension (D. Amelunxen, M. Lotz, M. McCoy, J. Tropp, Information and Inference 3:224-294, 2014,
    // applied to the PSD cone; the numbers are computed). Three standard errors.
    for (order, rank, dimension) in [(10.0, 1.0, 17.2), (20.0, 1.0, 38.6), (20.0, 2.0, 65.7)] {
        let curve: Vec<(f64, f64, f64)> = rows
            .iter()
            .filter(|row| {
                row["family"] == "sensing"
                    && parameter(row, "order") == order
                    && parameter(row, "rank") == rank
            })
            .map(|row| {
                let (feasible, trials) = (number(row, "feasible"), number(row, "trials"));
                (parameter(row, "measurements"), feasible / trials, trials)
            })
            .collect();
        assert!(curve.len() >= 7);
        let (place, error) = crossing(&curve);
        assert!(
            (place - dimension).abs() <= 3.0 * error,
            "order {order}, rank {rank}: half at {place:.1} +- {error:.1}, not {dimension}"
        );
    }
}
