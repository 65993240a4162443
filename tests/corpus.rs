//! Everything that is read from outside, on the inputs that fuzzing and thought have brought up: each file of
//! `corpus/` goes to its reader, what became of it is held against a snapshot, and the memory it took
//! against the length of the text. `fuzz/` holds the targets that the same files are seeds of.

use std::fmt::Write as _;
use std::path::{Path, PathBuf};

use rankassay::budget::memory::{self, CountingAllocator};
use rankassay::formats::matrix_market::{self, Shape};
use rankassay::formats::{instance, sdpa, solution, with_ranks};
use rankassay::problem::{BlockPoint, Planted, Problem};
use rankassay::runner::{Plan, Roster, journal};

#[path = "fuzz/src/seal.rs"]
mod seal;

#[global_allocator]
static ALLOCATOR: CountingAllocator = CountingAllocator;

/// Memory that reading a file whose name starts with `absurd-` may take, in bytes: nothing is taken for what
/// it declares.
const NEXT_TO_NOTHING: u64 = 64 << 10;

fn corpus() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/corpus")
}

/// Reads every file of a folder and returns a line for each: its name and what became of it.
fn outcomes(folder: &str, read: impl Fn(&Path) -> Result<String, String>) -> String {
    let folder = corpus().join(folder);
    let mut files: Vec<PathBuf> =
        std::fs::read_dir(&folder).unwrap().map(|entry| entry.unwrap().path()).collect();
    files.sort();
    assert!(files.len() >= 15, "only {} files in {}", files.len(), folder.display());
    let mut lines = String::new();
    for file in files {
        let name = file.file_name().unwrap().to_str().unwrap();
        let length = std::fs::metadata(&file).unwrap().len();
        let start = memory::begin();
        let outcome = read(&file);
        let peak = memory::peak_since(start).expect("the counting allocator is installed");
        let most = if name.starts_with("absurd-") {
            assert!(outcome.is_err(), "{name} is read");
            NEXT_TO_NOTHING + 10 * length
        } else {
            // What the fuzz targets grant.
            (4 << 20) + 400 * length
        };
        assert!(peak <= most, "{name}: {peak} bytes of memory for {length} bytes of text");
        let text = match outcome {
            Ok(sizes) => format!("read: {sizes}"),
            Err(reason) => format!("refused: {reason}"),
        };
        let text = text.replace(&format!("{}/", folder.display()), "");
        writeln!(lines, "{name}\n    {}", text.escape_debug().to_string().replace("\\\"", "\""))
            .unwrap();
    }
    lines
}

fn told(error: &dyn std::fmt::Display) -> String {
    error.to_string()
}

fn sizes(problem: &Problem) -> String {
    let blocks: Vec<String> = problem
        .blocks()
        .iter()
        .map(|block| match block.rank {
            Some(rank) => format!("{} of rank {rank}", block.order),
            None => block.order.to_string(),
        })
        .collect();
    format!(
        "blocks [{}], {} nonnegative, {} constraints",
        blocks.join(", "),
        problem.orthant(),
        problem.constraints().len()
    )
}

#[test]
fn plans() {
    let read = |path: &Path| {
        let name = path.file_name().unwrap().to_str().unwrap();
        let text = String::from_utf8(std::fs::read(path).unwrap()).expect("plans here are text");
        let plan = Plan::parse(&text, name, Path::new("folder"), Roster::built_in());
        let plan = plan.map_err(|error| told(&error))?;
        let labels: Vec<&str> = plan.entrants.iter().map(|entrant| &*entrant.label).collect();
        Ok(format!(
            "{:?}, seed {}, {} combinations, {} imports, methods {labels:?}, {} trials",
            plan.title,
            plan.seed,
            plan.sown.len(),
            plan.imported.len(),
            plan.trial_count()
        ))
    };
    insta::assert_snapshot!("plan", outcomes("plan", read));
}

#[test]
fn sparse_sdpa_files() {
    let read = |path: &Path| {
        let file = sdpa::read(path).map_err(|error| told(&error))?;
        Ok(sizes(&file.problem))
    };
    insta::assert_snapshot!("sdpa", outcomes("sdpa", read));
}

/// The problem that the answers are read for.
fn asked() -> Problem {
    let free = sdpa::read(&corpus().join("answer-problem.dat-s")).unwrap().problem;
    with_ranks(&free, 2).unwrap()
}

#[test]
fn answers_and_the_files_beside_them() {
    let problem = asked();
    let read = |path: &Path| {
        if path.extension().is_some_and(|extension| extension == "mtx") {
            let shape = Shape { rows: 3, columns: 0..=4096 };
            let matrix = matrix_market::read_shaped(path, &shape, 1 << 20);
            let matrix = matrix.map_err(|error| told(&error))?;
            assert_eq!(matrix.data.len(), matrix.rows * matrix.columns);
            let given = matrix.data.iter().filter(|value| **value != 0.0).count();
            return Ok(format!("{} x {}, {given} not zero", matrix.rows, matrix.columns));
        }
        let most = rankassay::methods::outside::answer_bytes(&problem);
        let read = solution::read_within(path, &problem, most).map_err(|error| told(&error))?;
        let answer = read.answer;
        let shape = |block: &BlockPoint| match block {
            BlockPoint::Factor(factor) => format!("V {} x {}", factor.order, factor.width),
            BlockPoint::Dense(matrix) => format!("X {} x {}", matrix.nrows(), matrix.ncols()),
        };
        let blocks: Vec<String> = answer.point.blocks.iter().map(shape).collect();
        Ok(format!(
            "{}; {} nonnegative; multipliers {:?}; {}; note of {} characters; steps {:?}",
            blocks.join(", "),
            answer.point.orthant.len(),
            answer.multipliers.map(|multipliers| multipliers.len()),
            answer.stop.word(),
            answer.note.chars().count(),
            read.effort.inner_steps,
        ))
    };
    insta::assert_snapshot!("answer", outcomes("answer", read));
}

#[test]
fn an_answer_longer_than_its_problem_allows_is_not_read() {
    let problem = asked();
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("answer.json");
    let most = rankassay::methods::outside::answer_bytes(&problem);
    std::fs::write(&path, "[".repeat(usize::try_from(most).unwrap() + 1)).unwrap();
    let start = memory::begin();
    let error = solution::read_within(&path, &problem, most).unwrap_err();
    assert!(memory::peak_since(start).unwrap() <= NEXT_TO_NOTHING);
    assert!(error.to_string().contains("bytes, more than"), "{error}");
}

#[test]
fn journals() {
    let read = |path: &Path| {
        let bytes = seal::journal(&std::fs::read(path).unwrap());
        let contents = journal::parse(Path::new("journal.jsonl"), &bytes);
        let present = format!(", not {}", rankassay::record::SCHEMA);
        let contents =
            contents.map_err(|error| told(&error).replace(&present, ", not the present one"))?;
        Ok(format!(
            "{:?}, {} instances, {} records; {}",
            contents.header.title,
            contents.instances.len(),
            contents.records.len(),
            contents.torn_notice(Path::new("")).unwrap_or_else(|| "whole".to_owned())
        ))
    };
    insta::assert_snapshot!("journal", outcomes("journal", read));
}

#[test]
fn native_instance_files_and_their_certificates() {
    let read = |path: &Path| {
        let read = instance::read(path).map_err(|error| told(&error))?;
        let sizes = sizes(&read.problem);
        let Some(certificate) = read.certificate else {
            return Ok(sizes);
        };
        match Planted::prove(read.problem, certificate) {
            Ok(planted) => Ok(format!("{sizes}; the optimum is {}", planted.optimum)),
            Err(error) => Ok(format!("{sizes}; the certificate does not hold: {error}")),
        }
    };
    insta::assert_snapshot!("instance", outcomes("instance", read));
}
