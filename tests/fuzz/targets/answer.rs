//! Answers of outside methods: a text that starts with `%` is a Matrix Market file, any other the
//! `answer.json` for one problem, beside which some Matrix Market files stand. What is accepted is judged.
#![no_main]

use std::path::Path;
use std::sync::OnceLock;

use libfuzzer_sys::fuzz_target;
use rankassay::formats::{matrix_market, sdpa, solution, with_ranks};
use rankassay::problem::Problem;
use rankassay::referee::{self, Known, KnownOptimum, Tolerance};
use rankassay_fuzz::bounded;
use tempfile::TempDir;

/// Blocks of orders 2 and 3, two nonnegative scalars, three constraints.
const PROBLEM: &str = include_str!("../../corpus/answer-problem.dat-s");

struct Stage {
    problem: Problem,
    folder: TempDir,
}

fn stage() -> &'static Stage {
    static STAGE: OnceLock<Stage> = OnceLock::new();
    STAGE.get_or_init(|| {
        let free = sdpa::parse(PROBLEM, "problem").expect("a sound problem").problem;
        let problem = with_ranks(&free, 2).expect("the rank fits");
        let folder = tempfile::tempdir().expect("a folder for the files");
        for (name, text) in [
            ("v.mtx", "%%MatrixMarket matrix array real general\n3 1\n1\n0\n0.5\n"),
            ("x.mtx", "%%MatrixMarket matrix coordinate real symmetric\n3 3 2\n1 1 1\n3 1 -0.5\n"),
            ("w.mtx", "%%MatrixMarket matrix array real general\n2 2\n1\n0\n0\n1\n"),
        ] {
            std::fs::write(folder.path().join(name), text).expect("the folder takes files");
        }
        std::fs::create_dir(folder.path().join("d")).expect("the folder takes folders");
        Stage { problem, folder }
    })
}

fuzz_target!(|text: &str| {
    let stage = stage();
    if text.starts_with('%') {
        let shape = matrix_market::Shape { rows: 3, columns: 0..=4096 };
        let read = bounded(text.len(), || matrix_market::parse_shaped(text, "text", &shape));
        if let Ok(matrix) = read {
            assert_eq!(matrix.data.len(), matrix.rows * matrix.columns);
            assert!(matrix.data.iter().all(|value| value.is_finite()));
        }
        return;
    }
    let path: &Path = stage.folder.path();
    match bounded(text.len(), || solution::parse(text, "text", path, &stage.problem)) {
        Ok(read) => {
            let known = Known { optimum: KnownOptimum::Unknown, dual: None, unique_point: None };
            let judged =
                referee::judge(&stage.problem, &read.answer, &known, &Tolerance::default());
            judged.expect("without a known optimum nothing is contradicted");
        }
        Err(error) if error.file == "text" => {
            assert!(error.line >= 1 && error.column >= 1, "{error}");
            assert!(error.line <= text.matches('\n').count() + 1, "{error}");
        }
        Err(error) => assert!(error.file.starts_with(&*path.to_string_lossy()), "{error}"),
    }
});
