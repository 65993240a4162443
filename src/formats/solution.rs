//! Native solution files: the point that a method, or another program, returns.
//!
//! ```text
//! { "version": 1,
//!   "blocks": [ {"factor": [[1, 0], [0.5, 2]]},               rows of V, X = V V'
//!               {"matrix": [[2, 1], [1, 2]]},                   X itself
//!               {"entries": [[1, 1, 2], [1, 2, 1]]},            X, each pair of indices once, from 1
//!               {"file": "block4.mtx", "holds": "factor"} ],    a Matrix Market file beside this one
//!   "nonnegative": [0, 1.5],
//!   "multipliers": [0.5, -1],                                   may be left out
//!   "stop": "converged", "note": "", "effort": {"inner_steps": 12} }
//! ```
//!
//! The reader holds shapes against the problem, so that a wrong one is reported at its place. It does
//! not judge.

use super::json::{self, Step};
use super::matrix_market::{self, Shape};
use super::rows::Rows;
use super::{
    FormatError, FormatErrorKind as Kind, MAX_DENSE_ORDER, MAX_FILE_BYTES, MAX_TOTAL_ORDER, Source,
    read_text, shorten_to,
};
use crate::problem::{Answer, BlockPoint, Factor, Point, Problem, StopReason};
use faer::Mat;
use serde::de::{Error as _, SeqAccess, Visitor};
use serde::{Deserialize, Deserializer, Serialize};
use std::fmt;
use std::path::Path;

/// Version of the layout that this program writes and reads.
pub const VERSION: u32 = 1;

/// Most characters of a note that are kept.
pub const MOST_NOTE: usize = 1000;

/// Effort counts that the writer of a solution reports of itself, each left out when not counted.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct ReportedEffort {
    /// Eigendecompositions.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub eigendecompositions: Option<u64>,
    /// Factorisations.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub factorisations: Option<u64>,
    /// Applications of the constraint operator or its adjoint.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub operator_products: Option<u64>,
    /// Inner steps.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub inner_steps: Option<u64>,
    /// Floating-point operations.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub flops: Option<u64>,
}

/// What a solution file holds.
#[derive(Clone, Debug)]
pub struct Solution {
    /// The answer.
    pub answer: Answer,
    /// Effort counts, when the writer gave them.
    pub effort: ReportedEffort,
}

#[derive(Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct SolutionText {
    version: u32,
    #[serde(deserialize_with = "block_list")]
    blocks: Vec<BlockText>,
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    nonnegative: Vec<f64>,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    multipliers: Option<Vec<f64>>,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    stop: Option<String>,
    #[serde(default, skip_serializing_if = "String::is_empty")]
    note: String,
    #[serde(default, deserialize_with = "json::object")]
    effort: ReportedEffort,
}

#[derive(Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields, default)]
struct BlockText {
    #[serde(skip_serializing_if = "Option::is_none", deserialize_with = "json::given")]
    factor: Option<Rows>,
    #[serde(skip_serializing_if = "Option::is_none", deserialize_with = "json::given")]
    matrix: Option<Rows>,
    #[serde(skip_serializing_if = "Option::is_none", deserialize_with = "json::given")]
    entries: Option<Vec<(usize, usize, f64)>>,
    #[serde(skip_serializing_if = "Option::is_none", deserialize_with = "json::given")]
    file: Option<String>,
    #[serde(skip_serializing_if = "Option::is_none", deserialize_with = "json::given")]
    holds: Option<Holds>,
}

#[derive(Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
enum Holds {
    Factor,
    Matrix,
}

/// Reads the list of blocks, and refuses one that is longer than any problem's before it is held.
fn block_list<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Vec<BlockText>, D::Error> {
    struct List;

    impl<'de> Visitor<'de> for List {
        type Value = Vec<BlockText>;

        fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
            f.write_str("a list of blocks")
        }

        fn visit_seq<A: SeqAccess<'de>>(self, mut items: A) -> Result<Self::Value, A::Error> {
            let mut blocks = Vec::new();
            while let Some(block) = items.next_element_seed(json::Object::default())? {
                if blocks.len() == MAX_TOTAL_ORDER {
                    return Err(A::Error::custom(format!("more than {MAX_TOTAL_ORDER} blocks")));
                }
                blocks.push(block);
            }
            Ok(blocks)
        }
    }

    deserializer.deserialize_seq(List)
}

/// Reads a solution file for `problem`; Matrix Market files it names are read from its own folder.
///
/// # Errors
/// A file is unreadable, or its text is refused; see [`parse`].
pub fn read(path: &Path, problem: &Problem) -> Result<Solution, FormatError> {
    read_within(path, problem, MAX_FILE_BYTES)
}

/// Reads a solution file of at most `most_bytes` bytes, and Matrix Market files of at most as many each.
///
/// # Errors
/// A file is unreadable or longer, or its text is refused; see [`parse`].
pub fn read_within(
    path: &Path,
    problem: &Problem,
    most_bytes: u64,
) -> Result<Solution, FormatError> {
    let text = read_text(path, most_bytes)?;
    let folder = path.parent().unwrap_or(Path::new(""));
    let file = path.display().to_string();
    parse_text(Source { file: &file, text: &text }, Beside { folder, most_bytes }, problem)
}

/// Reads the text of a solution file; `file` is the name that errors carry, `folder` holds the Matrix
/// Market files.
///
/// # Errors
/// Text that is not JSON, a field that is missing, unknown or of the wrong type, a version other
/// than [`VERSION`], a shape that is not the problem's, a file name that leads out of the folder.
pub fn parse(
    text: &str,
    file: &str,
    folder: &Path,
    problem: &Problem,
) -> Result<Solution, FormatError> {
    parse_text(Source { file, text }, Beside { folder, most_bytes: MAX_FILE_BYTES }, problem)
}

/// Where the Matrix Market files stand, and how long each may be.
#[derive(Clone, Copy)]
struct Beside<'a> {
    folder: &'a Path,
    most_bytes: u64,
}

fn parse_text(
    source: Source<'_>,
    beside: Beside<'_>,
    problem: &Problem,
) -> Result<Solution, FormatError> {
    let raw: SolutionText = json::from_text(source)?;
    let refuse = |path: &[Step<'_>], kind, expected: String| {
        Err(json::error_at(source, path, kind, expected))
    };
    if raw.version != VERSION {
        return refuse(
            &[Step::Key("version")],
            Kind::Unexpected,
            format!("layout version {VERSION}"),
        );
    }
    if raw.blocks.len() != problem.blocks().len() {
        let expected = format!("{} blocks", problem.blocks().len());
        return refuse(&[Step::Key("blocks")], Kind::OutOfRange, expected);
    }
    if raw.nonnegative.len() != problem.orthant() {
        let expected = format!("{} nonnegative scalars", problem.orthant());
        return refuse(&[Step::Key("nonnegative")], Kind::OutOfRange, expected);
    }
    let m = problem.constraints().len();
    if raw.multipliers.as_ref().is_some_and(|multipliers| multipliers.len() != m) {
        return refuse(&[Step::Key("multipliers")], Kind::OutOfRange, format!("{m} multipliers"));
    }
    let Some(stop) = raw.stop.as_deref().map_or(Some(StopReason::Converged), stop_reason) else {
        let words: Vec<&str> = STOP_REASONS.iter().map(|reason| reason.word()).collect();
        return refuse(
            &[Step::Key("stop")],
            Kind::Unexpected,
            format!("one of {}", words.join(", ")),
        );
    };
    let mut blocks = Vec::with_capacity(raw.blocks.len());
    for (index, block) in raw.blocks.iter().enumerate() {
        let order = problem.blocks()[index].order;
        blocks.push(read_block(source, beside, block, index, order)?);
    }
    let point = Point { blocks, orthant: raw.nonnegative };
    let note = shorten_to(&raw.note, MOST_NOTE).replace(['\n', '\r'], " ");
    Ok(Solution {
        answer: Answer { point, multipliers: raw.multipliers, stop, note },
        effort: raw.effort,
    })
}

const STOP_REASONS: [StopReason; 7] = [
    StopReason::Converged,
    StopReason::IterationLimit,
    StopReason::Stalled,
    StopReason::TimeLimit,
    StopReason::MemoryLimit,
    StopReason::PrimalInfeasible,
    StopReason::DualInfeasible,
];

fn stop_reason(word: &str) -> Option<StopReason> {
    STOP_REASONS.into_iter().find(|reason| reason.word() == word)
}

fn read_block(
    source: Source<'_>,
    beside: Beside<'_>,
    block: &BlockText,
    index: usize,
    order: usize,
) -> Result<BlockPoint, FormatError> {
    let here = [Step::Key("blocks"), Step::Item(index)];
    let refuse = |steps: &[Step<'_>], kind, expected: String| {
        Err(json::error_at(source, &[&here[..], steps].concat(), kind, expected))
    };
    match (&block.factor, &block.matrix, &block.entries, &block.file, block.holds) {
        (Some(rows), None, None, None, None) => {
            let path = [&here[..], &[Step::Key("factor")]].concat();
            let width = rows.width();
            let data = rectangle(source, &path, rows, order, width)?.to_vec();
            Ok(BlockPoint::Factor(Factor { order, width, data }))
        }
        (None, Some(rows), None, None, None) => {
            let path = [&here[..], &[Step::Key("matrix")]].concat();
            let data = rectangle(source, &path, rows, order, order)?;
            Ok(BlockPoint::Dense(Mat::from_fn(order, order, |i, j| data[i * order + j])))
        }
        (None, None, Some(entries), None, None) => {
            if order > MAX_DENSE_ORDER {
                let expected = format!(
                    "a factor: block {} is of order {order}, above {MAX_DENSE_ORDER}",
                    index + 1
                );
                return refuse(&[Step::Key("entries")], Kind::TooLarge, expected);
            }
            let mut matrix = Mat::zeros(order, order);
            let mut given = vec![false; order * order];
            for (position, &(i, j, value)) in entries.iter().enumerate() {
                let step = [Step::Key("entries"), Step::Item(position)];
                if i == 0 || j == 0 || i > order || j > order {
                    return refuse(&step, Kind::OutOfRange, format!("indices from 1 to {order}"));
                }
                if given[(i - 1) * order + j - 1] {
                    let expected = "a pair of indices that no earlier entry gives".to_owned();
                    return refuse(&step, Kind::Duplicate, expected);
                }
                for (a, b) in [(i - 1, j - 1), (j - 1, i - 1)] {
                    given[a * order + b] = true;
                    matrix[(a, b)] = value;
                }
            }
            Ok(BlockPoint::Dense(matrix))
        }
        (None, None, None, Some(name), Some(holds)) => {
            let plain = !name.is_empty()
                && name != "."
                && name != ".."
                && !name.contains(['/', '\\', '\0']);
            if !plain {
                let expected = "the plain name of a file in the folder of the solution".to_owned();
                return refuse(&[Step::Key("file")], Kind::Unexpected, expected);
            }
            block_from_file(&beside.folder.join(name), beside.most_bytes, holds, order)
        }
        _ => {
            let expected =
                "one of `factor`, `matrix`, `entries`, or `file` with `holds`".to_owned();
            refuse(&[], Kind::Unexpected, expected)
        }
    }
}

/// Returns the rows one after another, once there are `order` of them and each has `width` numbers.
fn rectangle<'a>(
    source: Source<'_>,
    path: &[Step<'_>],
    rows: &'a Rows,
    order: usize,
    width: usize,
) -> Result<&'a [f64], FormatError> {
    if rows.count() != order {
        let expected = format!("{order} rows, not {}", rows.count());
        return Err(json::error_at(source, path, Kind::OutOfRange, expected));
    }
    let other = if rows.width() == width { rows.ragged() } else { Some(0) };
    if let Some(row) = other {
        let path = [path, &[Step::Item(row)]].concat();
        let expected = format!("a row of {width} numbers");
        return Err(json::error_at(source, &path, Kind::OutOfRange, expected));
    }
    Ok(rows.data())
}

fn block_from_file(
    path: &Path,
    most_bytes: u64,
    holds: Holds,
    order: usize,
) -> Result<BlockPoint, FormatError> {
    let columns = match holds {
        // A wider factor is worth no more than one of the block's order.
        Holds::Factor => 0..=order.max(MAX_DENSE_ORDER),
        Holds::Matrix => order..=order,
    };
    let matrix = matrix_market::read_shaped(path, &Shape { rows: order, columns }, most_bytes)?;
    Ok(match holds {
        Holds::Factor => {
            BlockPoint::Factor(Factor { order, width: matrix.columns, data: matrix.data })
        }
        Holds::Matrix => {
            BlockPoint::Dense(Mat::from_fn(order, order, |i, j| matrix.data[i * order + j]))
        }
    })
}

/// Writes an answer as text: factors by rows, dense blocks by their upper triangle.
///
/// Numbers read back to the same bits. A dense block comes back symmetrised, as the referee reads it.
///
/// # Panics
/// A number of the answer is not finite: JSON has no spelling for it.
pub fn write(solution: &Solution) -> String {
    let answer = &solution.answer;
    let blocks = answer.point.blocks.iter().map(block_text).collect();
    let text = SolutionText {
        version: VERSION,
        blocks,
        nonnegative: answer.point.orthant.clone(),
        multipliers: answer.multipliers.clone(),
        stop: Some(answer.stop.word().to_owned()),
        note: answer.note.clone(),
        effort: solution.effort,
    };
    let finite =
        |values: &[f64]| assert!(values.iter().all(|v| v.is_finite()), "a number is not finite");
    finite(&answer.point.orthant);
    finite(answer.multipliers.as_deref().unwrap_or_default());
    serde_json::to_string(&text).expect("plain data serialise") + "\n"
}

#[track_caller]
fn block_text(block: &BlockPoint) -> BlockText {
    match block {
        BlockPoint::Factor(factor) => {
            assert!(factor.data.iter().all(|value| value.is_finite()), "a number is not finite");
            let rows = Rows::new(factor.order, factor.width, factor.data.clone());
            BlockText { factor: Some(rows), ..BlockText::default() }
        }
        BlockPoint::Dense(matrix) => {
            let mut entries = Vec::new();
            for j in 0..matrix.ncols() {
                for i in 0..=j {
                    let value = 0.5 * matrix[(i, j)] + 0.5 * matrix[(j, i)];
                    assert!(value.is_finite(), "a number is not finite");
                    if value != 0.0 {
                        entries.push((i + 1, j + 1, value));
                    }
                }
            }
            BlockText { entries: Some(entries), ..BlockText::default() }
        }
    }
}

/// Writes an answer to a file; see [`write()`].
///
/// # Errors
/// The file cannot be written.
pub fn save(path: &Path, solution: &Solution) -> std::io::Result<()> {
    std::fs::write(path, write(solution))
}
