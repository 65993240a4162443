//! The readers and writers of `formats`: roundtrips, dialects, broken files, hostile text.

#![allow(clippy::print_stderr, reason = "a test says what it skipped or measured")]

use proptest::prelude::*;
use rankassay::formats::instance::{self, Instance};
use rankassay::formats::sdpa::{self, FileBlock};
use rankassay::formats::solution::{self, ReportedEffort, Solution};
use rankassay::formats::{FormatErrorKind as Kind, MAX_TOTAL_ORDER, matrix_market, with_ranks};
use rankassay::problem::certificate::{BlockPair, DualPair, IntegerColumn, IntegerFactor};
use rankassay::problem::{
    Answer, Block, BlockPoint, Certificate, Coefficient, Factor, Functional, OuterSum, OuterTerm,
    Planted, Point, Problem, SparseSymmetric, SparseVector, StopReason,
};
use std::path::{Path, PathBuf};

fn root() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR"))
}

/// The folder of third-party data, when it is there.
fn shared_data() -> Option<PathBuf> {
    let folder = PathBuf::from(concat!(env!("CARGO_MANIFEST_DIR"), "/../shared/data"));
    if folder.is_dir() {
        return Some(folder);
    }
    eprintln!("skipped: no folder {}", folder.display());
    None
}

// ---------------------------------------------------------------------------------------------------
// Random problems

fn number() -> impl Strategy<Value = f64> {
    prop_oneof![
        (-9i32..=9).prop_map(f64::from),
        any::<f64>().prop_filter("finite", |value| value.is_finite()),
        Just(f64::MIN_POSITIVE),
        Just(1.0 / 3.0),
    ]
}

fn sparse(order: usize) -> impl Strategy<Value = Coefficient> {
    prop::collection::btree_map((0..order, 0..order), number(), 0..6).prop_map(move |entries| {
        let upper: std::collections::BTreeMap<_, _> =
            entries.into_iter().map(|((i, j), value)| ((i.min(j), i.max(j)), value)).collect();
        let entries = upper.into_iter().map(|((i, j), value)| (i, j, value)).collect();
        Coefficient::Sparse(SparseSymmetric::gather(order, entries))
    })
}

fn vector(length: usize) -> impl Strategy<Value = SparseVector> {
    prop::collection::vec((0..length.max(1) as u32, number()), 0..4).prop_map(move |pairs| {
        let unique: std::collections::BTreeMap<_, _> = pairs.into_iter().collect();
        if length == 0 {
            SparseVector::default()
        } else {
            SparseVector::gather(unique.into_iter().collect())
        }
    })
}

fn outer(order: usize) -> impl Strategy<Value = Coefficient> {
    prop::collection::vec((number(), vector(order)), 0..3).prop_map(move |terms| {
        let terms =
            terms.into_iter().map(|(weight, vector)| OuterTerm { weight, vector }).collect();
        Coefficient::Outer(OuterSum { order, terms })
    })
}

#[derive(Clone, Copy, PartialEq)]
enum Storage {
    SparseOnly,
    Mixed,
}

fn functional(
    orders: Vec<usize>,
    orthant: usize,
    storage: Storage,
) -> impl Strategy<Value = Functional> {
    let parts: Vec<_> = orders
        .iter()
        .map(|&order| match storage {
            Storage::SparseOnly => prop::option::of(sparse(order).boxed()).boxed(),
            Storage::Mixed => {
                prop::option::of(prop_oneof![sparse(order), outer(order)].boxed()).boxed()
            }
        })
        .collect();
    (parts, vector(orthant)).prop_map(|(parts, orthant)| {
        let stored =
            |part: &Coefficient| !matches!(part, Coefficient::Sparse(m) if m.stored() == 0);
        let parts = parts.into_iter().enumerate();
        let parts =
            parts.filter_map(|(k, part)| part.filter(stored).map(|part| (k, part))).collect();
        Functional { parts, orthant }
    })
}

fn problem(storage: Storage) -> impl Strategy<Value = Problem> {
    (prop::collection::vec(2usize..6, 1..4), 0usize..4, 1usize..5)
        .prop_flat_map(move |(orders, orthant, m)| {
            let one = functional(orders.clone(), orthant, storage);
            let many = prop::collection::vec(functional(orders.clone(), orthant, storage), m);
            let ranks: Vec<_> = orders.iter().map(|&order| prop::option::of(1..=order)).collect();
            (Just(orders), Just(orthant), one, many, prop::collection::vec(number(), m), ranks)
        })
        .prop_map(move |(orders, orthant, cost, constraints, rhs, ranks)| {
            let free = storage == Storage::SparseOnly;
            let blocks = orders.into_iter().zip(ranks);
            let blocks =
                blocks.map(|(order, rank)| Block { order, rank: rank.filter(|_| !free) }).collect();
            Problem::new(blocks, orthant, cost, constraints, rhs).expect("a sound problem")
        })
}

/// Whether the text form of the problem has an entry at all: the format refuses files without any.
fn has_entries(problem: &Problem) -> bool {
    problem
        .constraints()
        .iter()
        .chain([problem.cost()])
        .any(|functional| !functional.parts.is_empty() || !functional.orthant.is_empty())
}

proptest! {
    #[test]
    fn sdpa_text_reads_back_to_the_same_problem(problem in problem(Storage::SparseOnly)) {
        prop_assume!(has_entries(&problem));
        let text = sdpa::write(&problem, "a comment\nof two lines");
        let back = sdpa::parse(&text, "written").expect("what is written is read");
        prop_assert_eq!(back.problem, problem);
    }

    #[test]
    fn instance_text_reads_back_to_the_same_problem(problem in problem(Storage::Mixed)) {
        let instance = Instance { problem, certificate: None, origin: "a \"quoted\"\nline".to_owned() };
        let back = instance::parse(&instance::write(&instance), "written").expect("what is written is read");
        prop_assert_eq!(back.problem, instance.problem);
        prop_assert_eq!(back.origin, instance.origin);
    }

    #[test]
    fn solution_text_reads_back_to_the_same_answer(
        problem in problem(Storage::SparseOnly),
        numbers in prop::collection::vec(number(), 64),
        width in 0usize..4,
    ) {
        let mut source = numbers.iter().copied().cycle();
        let mut next = || source.next().expect("a cycle does not end");
        let blocks = problem.blocks().iter().map(|block| {
            let data = (0..block.order * width).map(|_| next()).collect();
            BlockPoint::Factor(Factor { order: block.order, width, data })
        }).collect();
        let orthant: Vec<f64> = (0..problem.orthant()).map(|_| next()).collect();
        let multipliers: Vec<f64> = problem.rhs().iter().map(|_| next()).collect();
        let answer = Answer {
            point: Point { blocks, orthant: orthant.clone() },
            multipliers: Some(multipliers.clone()),
            stop: StopReason::Stalled,
            note: "rank 2".to_owned(),
        };
        let effort = ReportedEffort { inner_steps: Some(7), ..ReportedEffort::default() };
        let text = solution::write(&Solution { answer: answer.clone(), effort });
        let back = solution::parse(&text, "written", Path::new(""), &problem).expect("what is written is read");
        prop_assert_eq!(back.effort, effort);
        prop_assert_eq!(back.answer.multipliers, Some(multipliers));
        prop_assert_eq!(back.answer.point.orthant, orthant);
        prop_assert_eq!(back.answer.stop, StopReason::Stalled);
        for (found, expected) in back.answer.point.blocks.iter().zip(&answer.point.blocks) {
            match (found, expected) {
                (BlockPoint::Factor(found), BlockPoint::Factor(expected)) => prop_assert_eq!(found, expected),
                _ => prop_assert!(false, "a factor came back as something else"),
            }
        }
    }

    #[test]
    fn random_bytes_are_refused_or_read_without_a_panic(text in "[\\PC\n]{0,200}") {
        all_readers(&text);
    }

    #[test]
    fn text_of_numbers_is_refused_or_read_without_a_panic(text in "[-+0-9 .,e(){}\n]{0,200}") {
        all_readers(&text);
        all_readers(&format!("%%MatrixMarket matrix coordinate real general\n{text}"));
        all_readers(&format!("%%MatrixMarket matrix array real symmetric\n{text}"));
    }

    #[test]
    fn damaged_files_are_refused_or_read_without_a_panic(
        problem in problem(Storage::Mixed),
        at in any::<prop::sample::Index>(),
        with in "\\PC{0,3}",
        cut in 0usize..5,
    ) {
        let instance = Instance { problem, certificate: None, origin: String::new() };
        for text in [sdpa::write(&instance.problem, ""), instance::write(&instance)] {
            let position = at.index(text.len());
            let end = (position + cut).min(text.len());
            all_readers(&format!("{}{with}{}", &text[..position], &text[end..]));
            all_readers(&text[..position]);
        }
    }
}

/// Gives a text to every reader; each must return, with an error that prints and has a position.
fn all_readers(text: &str) {
    let order_two = Block { order: 2, rank: None };
    let problem = Problem::new(vec![order_two], 0, Functional::default(), vec![], vec![])
        .expect("a sound problem");
    let errors = [
        sdpa::parse(text, "text").err(),
        instance::parse(text, "text").err(),
        solution::parse(text, "text", Path::new(""), &problem).err(),
        matrix_market::parse(text, "text").err(),
    ];
    for error in errors.into_iter().flatten() {
        assert!(error.line >= 1 && error.column >= 1, "{error}");
        assert!(error.line <= text.matches('\n').count() + 1, "{error}");
        assert!(error.to_string().starts_with("text:"), "{error}");
        let excerpt = error.excerpt.expect("an error at a position shows its line");
        assert!(excerpt.start + excerpt.length <= excerpt.text.len() + 1, "{excerpt:?}");
    }
}

/// min <C,X>, diag(X) = 1, with C = (1,-1)(1,-1)': the optimum is (1,1)(1,1)', its value 0.
fn certified() -> Instance {
    let cost = SparseSymmetric::gather(2, vec![(0, 0, 1.0), (0, 1, -1.0), (1, 1, 1.0)]);
    let unit = |i| {
        Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(2, vec![(i, i, 1.0)])))
    };
    let cost = Functional::on_block(0, Coefficient::Sparse(cost));
    let blocks = vec![Block { order: 2, rank: Some(1) }];
    let problem = Problem::new(blocks, 0, cost, vec![unit(0), unit(1)], vec![1.0, 1.0])
        .expect("a sound problem");
    let pair = BlockPair {
        factor: IntegerFactor { order: 2, width: 1, rows: vec![1, 1] },
        slack: vec![IntegerColumn { indices: vec![0, 1], values: vec![1, -1] }],
        weights: vec![1],
    };
    let multipliers = vec![0, 0];
    let certificate =
        DualPair { blocks: vec![pair], multipliers, orthant: vec![], orthant_slack: vec![] };
    Instance {
        problem,
        certificate: Some(Certificate::DualPair(certificate)),
        origin: String::new(),
    }
}

#[test]
fn a_certificate_is_kept_and_still_proves_the_optimum() {
    let instance = certified();
    let text = instance::write(&instance);
    let back = instance::parse(&text, "written").unwrap();
    assert_eq!(back.certificate, instance.certificate);
    let planted = Planted::prove(back.problem, back.certificate.unwrap()).unwrap();
    assert_eq!(planted.optimum, 0.0);
    // A changed problem no longer has the digest of the file.
    let error =
        instance::parse(&text.replace("\"rhs\": [1.0,", "\"rhs\": [2.0,"), "changed").unwrap_err();
    assert_eq!(error.kind, Kind::Digest, "{error}");
}

// ---------------------------------------------------------------------------------------------------
// Dialects

const PLAIN: &str = "2\n2\n2 -2\n1 4\n0 1 1 2 1\n1 1 1 1 1\n1 2 1 1 1\n2 1 2 2 1\n2 2 2 2 1\n";

#[test]
fn every_dialect_reads_as_the_plain_spelling() {
    let plain = sdpa::parse(PLAIN, "plain").unwrap().problem;
    let check = |name: &str, text: &str| match sdpa::parse(text, name) {
        Ok(file) => assert_eq!(file.problem, plain, "{name}"),
        Err(error) => panic!("{error}"),
    };
    check("comments", &format!("\" quoted {{2}}\n* starred, 3\n{PLAIN}"));
    check(
        "text after numbers",
        &PLAIN.replacen("2\n2\n2 -2\n", "  2  =  mDIM\n2 = nBLOCK\n2 -2 = bLOCKsTRUCT\n", 1),
    );
    check("punctuation", &PLAIN.replacen("2 -2\n1 4\n", "(2, -2)\n{1.0,4.0}\n", 1));
    check(
        "plus signs",
        &PLAIN.replace("2 -2\n1 4", "+2 -2\n+1.0 +4").replace("1 1 1 1 1\n", "1 1 1 1 +1.0e+0\n"),
    );
    check("blank lines and leading blanks", &PLAIN.replace('\n', "\n\n  \t"));
    check("carriage returns", &PLAIN.replace('\n', "\r\n"));
    check("explicit zeros", &format!("{PLAIN}0 1 1 1 0.0\n2 2 1 1 0\n"));
    check("vector over lines", &PLAIN.replace("1 4\n", "1\n4\n"));
    check("sizes over lines", &PLAIN.replace("2 -2\n", "2\n-2\n"));
    check("no newline at the end", PLAIN.trim_end());
    check(
        "entries out of order",
        "2\n2\n2 -2\n1 4\n2 2 2 2 1\n0 1 1 2 1\n2 1 2 2 1\n1 2 1 1 1\n1 1 1 1 1\n",
    );
    // A diagonal block given as blocks of size 1, and the cost negated as the module says.
    check(
        "blocks of size one",
        "2 3 text\n3\n2 1 -1\n1 4\n0 1 1 2 1\n1 1 1 1 1\n1 2 1 1 1\n2 1 2 2 1\n2 3 1 1 1\n",
    );
    assert_eq!(plain.cost().part(0).unwrap().max_abs(), 1.0);
    let Some(Coefficient::Sparse(cost)) = plain.cost().part(0) else { panic!("a sparse cost") };
    assert_eq!(cost.iter().collect::<Vec<_>>(), [(0, 1, -1.0)]);
}

#[test]
fn blocks_of_a_file_are_mapped_in_order() {
    let file =
        sdpa::parse("1\n4\n2 -3 1 4\n1\n1 2 3 3 5\n1 3 1 1 6\n1 4 1 4 7\n", "blocks").unwrap();
    let expected = [
        FileBlock::Psd { block: 0, order: 2 },
        FileBlock::Nonnegative { first: 0, count: 3 },
        FileBlock::Nonnegative { first: 3, count: 1 },
        FileBlock::Psd { block: 1, order: 4 },
    ];
    assert_eq!(file.blocks, expected);
    let constraint = &file.problem.constraints()[0];
    assert_eq!(constraint.orthant, SparseVector { indices: vec![2, 3], values: vec![5.0, 6.0] });
    assert_eq!(constraint.parts[0].0, 1);
}

#[test]
fn ranks_are_bounded_on_blocks_of_at_least_that_order() {
    let free = sdpa::parse("1\n3\n2 5 3\n1\n1 1 1 1 1\n", "ranks").unwrap().problem;
    let bounded = with_ranks(&free, 3).unwrap();
    let ranks: Vec<_> = bounded.blocks().iter().map(|block| block.rank).collect();
    assert_eq!(ranks, [None, Some(3), Some(3)]);
    assert!(with_ranks(&free, 0).is_err());
}

// ---------------------------------------------------------------------------------------------------
// Files

/// The sizes of B. Borchers, SDPLIB 1.2 (Optimization Methods and Software 11(1):683-690, 1999): m, and
/// n as the sum of all block sizes.
const SDPLIB: &[(&str, usize, usize)] = &[
    ("mcp100", 100, 100),
    ("mcp124-1", 124, 124),
    ("mcp250-1", 250, 250),
    ("mcp500-1", 500, 500),
    ("theta1", 104, 50),
    ("theta2", 498, 100),
    ("maxG11", 800, 800),
    ("truss1", 6, 13),
    ("truss3", 27, 31),
    ("control1", 21, 15),
    ("qap5", 136, 26),
    ("arch0", 174, 335),
    ("gpp100", 101, 100),
    ("infp1", 10, 30),
    ("infd1", 10, 30),
];

#[test]
fn sdplib_files_have_the_published_sizes() {
    let Some(folder) = shared_data() else { return };
    for (name, m, n) in SDPLIB {
        let path = folder.join("sdplib").join(format!("{name}.dat-s"));
        let problem = sdpa::read(&path).unwrap_or_else(|error| panic!("{error}")).problem;
        assert_eq!(problem.constraints().len(), *m, "{name}");
        assert_eq!(problem.total_order(), *n, "{name}");
        let text = sdpa::write(&problem, name);
        assert_eq!(
            sdpa::parse(&text, name).unwrap().problem,
            problem,
            "{name} written and read again"
        );
    }
}

#[test]
fn example_and_power_flow_files_are_read() {
    let Some(folder) = shared_data() else { return };
    let example = sdpa::read(&folder.join("example1.dat-s")).unwrap().problem;
    assert_eq!((example.constraints().len(), example.total_order()), (3, 2));
    assert_eq!(example.rhs(), [48.0, -8.0, 20.0]);
    for name in ["three-bus-50", "three-bus-60"] {
        let problem =
            sdpa::read(&folder.join("opf").join(format!("{name}.dat-s"))).unwrap().problem;
        assert_eq!((problem.constraints().len(), problem.orthant()), (34, 18), "{name}");
    }
}

#[test]
fn small_instances_have_their_sizes() {
    let sizes = [
        ("theta-c5", 6, 5),
        ("theta-petersen", 16, 10),
        ("cut-c5", 5, 5),
        ("cut-petersen", 10, 10),
        ("two-blocks", 2, 4),
        ("infeasible", 3, 2),
    ];
    for (name, m, n) in sizes {
        let path = root().join("instances/small").join(format!("{name}.dat-s"));
        let problem = sdpa::read(&path).unwrap_or_else(|error| panic!("{error}")).problem;
        assert_eq!((problem.constraints().len(), problem.total_order()), (m, n), "{name}");
    }
}

/// One broken file: name, line, column, token, kind.
type Broken = (&'static str, usize, usize, &'static str, Kind);

const BROKEN_SDPA: &[Broken] = &[
    ("constraint-count-word", 2, 1, "three", Kind::Unexpected),
    ("constraint-count-zero", 2, 1, "0", Kind::OutOfRange),
    ("constraint-count-absurd", 2, 3, "4000000000", Kind::TooLarge),
    ("block-count-fraction", 3, 1, "2.5", Kind::Unexpected),
    ("block-count-absurd", 3, 1, "99999999999999999999", Kind::TooLarge),
    ("block-size-zero", 4, 5, "0", Kind::OutOfRange),
    ("block-size-word", 4, 3, "two", Kind::Unexpected),
    ("block-size-absurd", 4, 3, "-9000000", Kind::TooLarge),
    ("rhs-word", 5, 3, "zero", Kind::Unexpected),
    ("rhs-short", 6, 3, "1", Kind::Unexpected),
    ("rhs-long", 5, 11, "5", Kind::Unexpected),
    ("rhs-infinite", 5, 3, "inf", Kind::NotFinite),
    ("no-entries", 5, 6, "", Kind::EndOfFile),
    ("matrix-number", 9, 1, "4", Kind::OutOfRange),
    ("block-number", 9, 3, "3", Kind::OutOfRange),
    ("row-zero", 9, 5, "0", Kind::OutOfRange),
    ("column-beyond", 9, 7, "3", Kind::OutOfRange),
    ("lower-triangle", 9, 5, "2", Kind::LowerTriangle),
    ("off-diagonal", 11, 7, "2", Kind::OffDiagonal),
    ("duplicate", 11, 3, "2 1 1 2 7", Kind::Duplicate),
    ("value-nan", 7, 9, "nan", Kind::NotFinite),
    ("value-word", 7, 9, "1.0D+00", Kind::Unexpected),
    ("value-missing", 7, 8, "", Kind::EndOfLine),
    ("entry-too-long", 7, 11, "1", Kind::Unexpected),
    ("not-text", 9, 10, "byte 0xff", Kind::NotText),
];

const BROKEN_INSTANCES: &[Broken] = &[
    ("kind", 1, 12, "\"solution\"", Kind::Unexpected),
    ("version", 1, 35, "7", Kind::Unexpected),
    ("unknown-field", 4, 1, "unknown field `nonnegativ`", Kind::Unexpected),
    ("rank-beyond", 3, 30, "3", Kind::OutOfRange),
    ("order-absurd", 3, 21, "90000000", Kind::TooLarge),
    ("entry-beyond", 8, 43, "[2,3,1.0]", Kind::OutOfRange),
    ("entry-lower", 5, 41, "[2,1,-0.5]", Kind::LowerTriangle),
    ("entry-twice", 8, 43, "[1,1,1.0]", Kind::Duplicate),
    ("vector-order", 7, 63, "[1,-1.0]", Kind::OutOfRange),
    ("rhs-count", 9, 8, "[1.0]", Kind::OutOfRange),
    ("number-word", 7, 41, "invalid type: string \"one\"", Kind::Unexpected),
    ("digest", 9, 29, "\"000000000000000000000000000000000000000...", Kind::Digest),
    ("cut-short", 9, 13, "", Kind::EndOfFile),
];

fn broken(name: &str, ending: &str) -> PathBuf {
    root().join("tests/broken-instances").join(format!("{name}.{ending}"))
}

#[test]
fn each_broken_file_is_refused_at_its_place() {
    let check = |(name, line, column, token, kind): &Broken,
                 error: rankassay::formats::FormatError| {
        let found = (error.line, error.column, error.token.as_str(), error.kind);
        assert_eq!(found, (*line, *column, *token, *kind), "{name}: {error}");
        assert!(!error.expected.is_empty(), "{name}");
        let place = format!("{name}.");
        assert!(error.to_string().contains(&place), "{error}");
        assert!(error.to_string().contains(&format!(":{line}:{column}: expected ")), "{error}");
    };
    for row in BROKEN_SDPA {
        check(row, sdpa::read(&broken(row.0, "dat-s")).expect_err(row.0));
    }
    for row in BROKEN_INSTANCES {
        check(row, instance::read(&broken(row.0, "assay.json")).expect_err(row.0));
    }
    let files = std::fs::read_dir(root().join("tests/broken-instances")).unwrap().count();
    assert_eq!(files, BROKEN_SDPA.len() + BROKEN_INSTANCES.len(), "every broken file is tested");
}

#[test]
fn a_missing_file_and_a_folder_are_refused_by_name() {
    for path in [root().join("no-such-file.dat-s"), root().join("src")] {
        let error = sdpa::read(&path).unwrap_err();
        assert_eq!((error.kind, error.line), (Kind::Unreadable, 0));
        assert!(error.to_string().contains("expected a readable file"), "{error}");
    }
}

#[test]
fn absurd_sizes_are_refused_before_memory_is_taken() {
    let huge = MAX_TOTAL_ORDER + 1;
    assert_eq!(
        sdpa::parse(&format!("1\n1\n{huge}\n1\n1 1 1 1 1\n"), "x").unwrap_err().kind,
        Kind::TooLarge
    );
    assert_eq!(
        sdpa::parse("1\n1\n9223372036854775808\n1\n", "x").unwrap_err().kind,
        Kind::TooLarge
    );
    assert_eq!(
        sdpa::parse("1\n1\n-9223372036854775808\n1\n", "x").unwrap_err().kind,
        Kind::TooLarge
    );
    assert_eq!(sdpa::parse("18446744073709551616\n1\n1\n", "x").unwrap_err().kind, Kind::TooLarge);
    let array = "%%MatrixMarket matrix array real general\n4000000 4000000\n1\n";
    assert_eq!(matrix_market::parse(array, "x").unwrap_err().kind, Kind::TooLarge);
    let coordinates = "%%MatrixMarket matrix coordinate real general\n4000000 4000000 1\n1 1 1\n";
    assert_eq!(matrix_market::parse(coordinates, "x").unwrap_err().kind, Kind::TooLarge);
}

// ---------------------------------------------------------------------------------------------------
// Matrix Market and solutions

#[test]
fn matrix_market_kinds_are_read() {
    let parse = |text: &str| {
        matrix_market::parse(text, "x").map(|matrix| (matrix.rows, matrix.columns, matrix.data))
    };
    let general = "%%MatrixMarket matrix array real general\n% comment\n\n2 3\n1\n2\n3\n4\n5\n6\n";
    assert_eq!(parse(general), Ok((2, 3, vec![1.0, 3.0, 5.0, 2.0, 4.0, 6.0])));
    let symmetric = "%%MatrixMarket MATRIX Array Real Symmetric\n2 2\n1\n2\n3\n";
    assert_eq!(parse(symmetric), Ok((2, 2, vec![1.0, 2.0, 2.0, 3.0])));
    let sparse = "%%MatrixMarket matrix coordinate integer symmetric\n3 3 2\n2 1 7\n3 3 -1\n";
    assert_eq!(parse(sparse), Ok((3, 3, vec![0.0, 7.0, 0.0, 7.0, 0.0, 0.0, 0.0, 0.0, -1.0])));
    let refused = [
        ("%%MatrixMarket matrix array complex general\n1 1\n1 0\n", 1, 29, Kind::Unexpected),
        ("%%MatrixMarket matrix array real\n1 1\n1\n", 1, 33, Kind::EndOfLine),
        ("%%MatrixMarket matrix array real general\n2 2\n1\n2\n3\n", 5, 2, Kind::EndOfFile),
        ("%%MatrixMarket matrix array real general\n1 1\n1\n2\n", 4, 1, Kind::Unexpected),
        ("%%MatrixMarket matrix array real general\n1 1\nnan\n", 3, 1, Kind::NotFinite),
        ("%%MatrixMarket matrix array real symmetric\n2 3\n1\n", 2, 3, Kind::OutOfRange),
        ("%%MatrixMarket matrix coordinate real symmetric\n2 2 1\n1 2 1\n", 3, 1, Kind::OutOfRange),
        (
            "%%MatrixMarket matrix coordinate real general\n2 2 2\n1 2 1\n1 2 1\n",
            4,
            1,
            Kind::Duplicate,
        ),
        ("%%MatrixMarket matrix coordinate real general\n2 2 1\n3 2 1\n", 3, 1, Kind::OutOfRange),
    ];
    for (text, line, column, kind) in refused {
        let error = matrix_market::parse(text, "x").expect_err(text);
        assert_eq!((error.line, error.column, error.kind), (line, column, kind), "{error}");
    }
}

fn two_blocks() -> Problem {
    let blocks = vec![Block { order: 2, rank: Some(1) }, Block { order: 1, rank: None }];
    let constraint =
        Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(2, vec![(0, 0, 1.0)])));
    Problem::new(blocks, 1, Functional::default(), vec![constraint], vec![1.0]).unwrap()
}

#[test]
fn solutions_of_every_kind_are_read() {
    let problem = two_blocks();
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(
        folder.path().join("v.mtx"),
        "%%MatrixMarket matrix array real general\n2 2\n1\n2\n3\n4\n",
    )
    .unwrap();
    let read = |text: &str| {
        let path = folder.path().join("answer.json");
        std::fs::write(&path, text).unwrap();
        solution::read(&path, &problem)
    };
    let second = "{\"factor\": [[2]]}], \"nonnegative\": [0.5]";
    let blocks = [
        "{\"factor\": [[1, 3], [2, 4]]}",
        "{\"matrix\": [[1, 2], [2, 4]]}",
        "{\"entries\": [[2, 1, 2], [2, 2, 4], [1, 1, 1]]}",
        "{\"file\": \"v.mtx\", \"holds\": \"factor\"}",
        "{\"file\": \"v.mtx\", \"holds\": \"matrix\"}",
    ];
    for (index, block) in blocks.iter().enumerate() {
        let text = format!("{{\"version\": 1, \"blocks\": [{block}, {second}}}");
        let answer = read(&text).unwrap_or_else(|error| panic!("{error}")).answer;
        match &answer.point.blocks[0] {
            BlockPoint::Factor(factor) => {
                assert!(index == 0 || index == 3, "{block}");
                assert_eq!(factor.data, [1.0, 3.0, 2.0, 4.0], "{block}");
            }
            BlockPoint::Dense(matrix) => {
                assert_eq!((matrix[(0, 0)], matrix[(1, 1)]), (1.0, 4.0), "{block}")
            }
        }
        assert_eq!(answer.point.orthant, [0.5]);
        assert_eq!(answer.multipliers, None);
        assert_eq!(answer.stop, StopReason::Converged);
    }
}

#[test]
fn solutions_with_one_thing_wrong_are_refused_at_its_place() {
    let problem = two_blocks();
    let sound = "{\"version\": 1,\n\"blocks\": [{\"factor\": [[1], [2]]},\n{\"factor\": [[2]]}],\n\"nonnegative\": [0.5],\n\"multipliers\": [1]}";
    let parse = |text: &str| solution::parse(text, "answer.json", Path::new("/nowhere"), &problem);
    assert!(parse(sound).is_ok());
    let cases = [
        ("\"version\": 1", "\"version\": 2", 1, 13, Kind::Unexpected),
        ("[[1], [2]]", "[[1], [2], [3]]", 2, 23, Kind::OutOfRange),
        ("[[1], [2]]", "[[1], [2, 3]]", 2, 29, Kind::OutOfRange),
        ("[[1], [2]]", "[[1], [NaN]]", 2, 30, Kind::Unexpected),
        ("{\"factor\": [[1], [2]]}", "{}", 2, 12, Kind::Unexpected),
        ("{\"factor\": [[1], [2]]}", "{\"matrix\": [[1], [2]]}", 2, 24, Kind::OutOfRange),
        ("{\"factor\": [[1], [2]]}", "{\"entries\": [[1, 3, 1]]}", 2, 25, Kind::OutOfRange),
        (
            "{\"factor\": [[1], [2]]}",
            "{\"entries\": [[1, 2, 1], [2, 1, 1]]}",
            2,
            36,
            Kind::Duplicate,
        ),
        (
            "{\"factor\": [[1], [2]]}",
            "{\"file\": \"../v.mtx\", \"holds\": \"factor\"}",
            2,
            21,
            Kind::Unexpected,
        ),
        (",\n{\"factor\": [[2]]}", "", 2, 11, Kind::OutOfRange),
        ("[0.5]", "[]", 4, 16, Kind::OutOfRange),
        ("[1]}", "[1, 2]}", 5, 16, Kind::OutOfRange),
        ("[1]}", "[1e999]}", 5, 17, Kind::Unexpected),
        ("[1]}", "[1], \"stop\": \"done\"}", 5, 29, Kind::Unexpected),
    ];
    for (from, to, line, column, kind) in cases {
        let text = sound.replacen(from, to, 1);
        assert_ne!(text, sound, "{to}");
        let error = parse(&text).expect_err(to);
        assert_eq!((error.line, error.column, error.kind), (line, column, kind), "{to}: {error}");
    }
}
