//! Sparse SDPA files: reader and writer.
//!
//! The format states the pair `(P) min c'x, sum_i x_i F_i - F_0 PSD` and `(D) max tr(F_0 Y),
//! tr(F_i Y) = c_i, Y PSD`. Our form takes `X = Y`, `C = -F_0`, `A_i = F_i`, `b = c`, so that our value
//! is `-tr(F_0 Y)`, the negative of the value of the file's pair.
//!
//! Blocks: a positive size of at least 2 is a PSD block; a negative size (a diagonal block) and a
//! size of 1 (where PSD means nonnegative) join the nonnegative part, one after another in the order
//! of the file. The format has no ranks: a problem comes out with every rank free, see
//! [`super::with_ranks`].
//!
//! Accepted spellings: comment lines that start with `"` or `*`; blank lines; leading blanks; any of
//! `, ( ) { }` as blanks; text after the numbers of the first three lines; signs `+`; explicit zeros; a
//! vector c that runs over several lines. Refused, since programs disagree on what they mean: entries
//! below the diagonal, a position given twice, more than one entry on a line.

mod reader;

use super::{FormatError, FormatErrorKind, MAX_FILE_BYTES, Source, read_text};
use crate::problem::{Block, Coefficient, Functional, Problem, SparseSymmetric, SparseVector};
use reader::{Entry, Reader};
use std::fmt::Write as _;
use std::path::Path;

/// Where a block of the file went.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum FileBlock {
    /// PSD block of our problem.
    Psd {
        /// Its position, from 0.
        block: usize,
        /// Its order.
        order: usize,
    },
    /// Part of the nonnegative scalars.
    Nonnegative {
        /// Position of its first scalar, from 0.
        first: usize,
        /// Number of its scalars.
        count: usize,
    },
}

impl FileBlock {
    fn size(self) -> usize {
        match self {
            FileBlock::Psd { order, .. } => order,
            FileBlock::Nonnegative { count, .. } => count,
        }
    }
}

/// A problem read from a sparse SDPA file.
#[derive(Clone, Debug)]
pub struct SdpaFile {
    /// The problem, every rank free.
    pub problem: Problem,
    /// Where the blocks of the file went, in the order of the file.
    pub blocks: Vec<FileBlock>,
}

/// Reads a sparse SDPA file.
///
/// # Errors
/// The file is unreadable, or its text is refused; see [`parse`].
pub fn read(path: &Path) -> Result<SdpaFile, FormatError> {
    let text = read_text(path, MAX_FILE_BYTES)?;
    parse(&text, &path.display().to_string())
}

/// Reads the text of a sparse SDPA file; `file` is the name that errors carry.
///
/// # Errors
/// The first thing in the text that the format does not have in its place, with its position.
pub fn parse(text: &str, file: &str) -> Result<SdpaFile, FormatError> {
    let mut reader = Reader::new(Source { file, text });
    let constraints = reader.read_constraint_count()?;
    let blocks = reader.read_blocks()?;
    let rhs = reader.read_rhs(constraints)?;
    let entries = reader.read_entries(constraints, &blocks)?;
    let problem = assemble(&blocks, rhs, &entries).map_err(|error| {
        reader.source.error(0, 0, FormatErrorKind::Unexpected, error.to_string())
    })?;
    Ok(SdpaFile { problem, blocks })
}

/// Makes the problem from entries sorted by matrix, block, column and row.
fn assemble(
    blocks: &[FileBlock],
    rhs: Vec<f64>,
    entries: &[Entry],
) -> Result<Problem, crate::problem::ProblemError> {
    let mut functionals = vec![Functional::default(); rhs.len() + 1];
    for group in entries.chunk_by(|a, b| (a.matrix, a.block) == (b.matrix, b.block)) {
        let sign = if group[0].matrix == 0 { -1.0 } else { 1.0 };
        let functional = &mut functionals[group[0].matrix];
        match blocks[group[0].block] {
            FileBlock::Psd { block, order } => {
                let triples = group.iter().map(|e| (e.row, e.column, sign * e.value)).collect();
                let matrix = SparseSymmetric::gather(order, triples);
                if matrix.stored() > 0 {
                    functional.parts.push((block, Coefficient::Sparse(matrix)));
                }
            }
            FileBlock::Nonnegative { first, .. } => {
                for entry in group.iter().filter(|entry| entry.value != 0.0) {
                    functional.orthant.indices.push((first + entry.row) as u32);
                    functional.orthant.values.push(sign * entry.value);
                }
            }
        }
    }
    let constraints = functionals.split_off(1);
    let cost = functionals.pop().expect("the cost is functional 0");
    let mut psd = Vec::new();
    let mut orthant = 0;
    for block in blocks {
        match *block {
            FileBlock::Psd { order, .. } => psd.push(Block { order, rank: None }),
            FileBlock::Nonnegative { count, .. } => orthant += count,
        }
    }
    Problem::new(psd, orthant, cost, constraints, rhs)
}

/// Writes a problem as sparse SDPA text: the PSD blocks in order, then the nonnegative part as one
/// diagonal block; ranks are not written, the format has none.
///
/// Outer products are multiplied out. Numbers are written so that they read back to the same bits. A
/// PSD block of order 1 is written with size 1, which [`parse`] reads into the nonnegative part. Each
/// line of `comment` becomes a comment line.
pub fn write(problem: &Problem, comment: &str) -> String {
    let mut text = String::new();
    for line in comment.lines() {
        let _ = writeln!(text, "* {line}");
    }
    let blocks = problem.blocks().len() + usize::from(problem.orthant() > 0);
    let _ = writeln!(text, "{}\n{blocks}", problem.constraints().len());
    let mut sizes: Vec<String> =
        problem.blocks().iter().map(|block| block.order.to_string()).collect();
    if problem.orthant() > 0 {
        sizes.push(format!("-{}", problem.orthant()));
    }
    let _ = writeln!(text, "{}", sizes.join(" "));
    let rhs: Vec<String> = problem.rhs().iter().map(|value| format!("{value:?}")).collect();
    let _ = writeln!(text, "{}", rhs.join(" "));
    write_functional(&mut text, 0, problem.cost(), problem.blocks().len());
    for (index, constraint) in problem.constraints().iter().enumerate() {
        write_functional(&mut text, index + 1, constraint, problem.blocks().len());
    }
    text
}

fn write_functional(text: &mut String, matrix: usize, functional: &Functional, psd_blocks: usize) {
    let sign = if matrix == 0 { -1.0 } else { 1.0 };
    for (block, part) in &functional.parts {
        let product;
        let sparse = match part {
            Coefficient::Sparse(sparse) => sparse,
            Coefficient::Outer(_) => {
                product = part.to_sparse();
                &product
            }
        };
        for (i, j, value) in sparse.iter() {
            let _ = writeln!(text, "{matrix} {} {} {} {:?}", block + 1, i + 1, j + 1, sign * value);
        }
    }
    let orthant: &SparseVector = &functional.orthant;
    for (i, value) in orthant.iter() {
        let _ =
            writeln!(text, "{matrix} {} {} {} {:?}", psd_blocks + 1, i + 1, i + 1, sign * value);
    }
}

/// Writes a problem to a sparse SDPA file; see [`write()`].
///
/// # Errors
/// The file cannot be written.
pub fn save(path: &Path, problem: &Problem, comment: &str) -> std::io::Result<()> {
    std::fs::write(path, write(problem, comment))
}
